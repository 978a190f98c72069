"""`loopint.evaluate` gives what a run gives."""

from __future__ import annotations

from decimal import Decimal
from fractions import Fraction

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

import loopint
from loopint.core.errors import InputError
from loopint.pipeline.config import load_config
from loopint.pipeline.errors import ConfigError
from loopint.pipeline.run import run_config

LOOP = {
    "name": "B", "family": "bubble", "orders": (-1, 1), "p_squared": "s", "m1": 1, "m2": "m",
    "derivatives": ["p_squared"],
}  # fmt: skip
POINTS = {"s": [-1.0, 0.5, 4.0, 9.0, 30.0], "m": [0.5, 1.0, 1.0, 2.0, 3.0], "id": list("abcde")}


@pytest.mark.parametrize("layout", ["long", "wide"])
@pytest.mark.parametrize("digits", [12, 16, 30])
def test_the_same_as_a_run(tmp_path, layout, digits):
    pq.write_table(pa.table(POINTS), tmp_path / "points.parquet")
    (tmp_path / "run.toml").write_text(
        f"""
[points]
file = "{tmp_path}/points.parquet"
key = "id"
[[integral]]
name = "B"
family = "bubble"
orders = [-1, 1]
p_squared = "s"
m1 = 1
m2 = "m"
derivatives = ["p_squared"]
[accuracy]
digits = {digits}
[output]
directory = "{tmp_path}/run"
layout = "{layout}"
[cross_check]
fraction = "none"
"""
    )
    run_config(load_config(tmp_path / "run.toml"), workers=1)
    written = pd.read_parquet(tmp_path / "run" / "table")
    for points in (pd.DataFrame(POINTS), pa.table(POINTS), POINTS):
        found = loopint.evaluate(points, [LOOP], key="id", layout=layout, digits=digits)
        frame = found if isinstance(found, pd.DataFrame) else found.to_pandas()
        pd.testing.assert_frame_equal(frame, written)
    assert isinstance(loopint.evaluate(pd.DataFrame(POINTS), [LOOP]), pd.DataFrame)
    assert isinstance(loopint.evaluate(POINTS, [LOOP]), pa.Table)


def test_numbers_are_exact():
    exact = [Decimal("0.1"), Fraction(1, 3), "1/7", 2, 0.5, np.float64(0.25)]
    table = loopint.evaluate(
        {"s": exact}, [{**LOOP, "m1": 0.5, "m2": "s", "derivatives": []}], layout="long"
    )
    assert table.num_rows == 3 * len(exact)
    one = loopint.evaluate(
        {"s": ["1.21"]}, [{"name": "T", "family": "bubble", "p_squared": "s", "m1": "0.4",
        "m2": Fraction(7, 10)}],
    )  # fmt: skip
    assert one.column("T_region").to_pylist() == ["threshold"]


def test_rejected_rows_are_told():
    frame = pd.DataFrame({"s": [1.0, np.nan, 2.0], "m": [1.0, 1.0, -1.0]})
    found = loopint.evaluate(frame, [LOOP])
    assert found["row"].tolist() == [0]
    assert [row for row, _, _ in found.attrs["rejected"]] == [1, 2]
    with pytest.raises(InputError, match="row 1: integral B: column s is nan"):
        loopint.evaluate(frame, [LOOP], on_error="raise")
    table = loopint.evaluate(pa.table(frame), [LOOP])
    assert b"null" in table.schema.metadata[b"rejected"]


@pytest.mark.parametrize(
    ("points", "integral", "keywords", "sentence"),
    [
        (3, LOOP, {}, "points of type int"),
        ({"s": 3}, LOOP, {}, "column s is 3"),
        ({"s": [1.0], "m": [1.0, 2.0]}, LOOP, {}, "different lengths"),
        ({"s": [1.0]}, LOOP, {}, "column m"),
        ({"s": [1.0], "m": [1.0]}, {**LOOP, "famly": 1}, {}, "did you mean family"),
        ({"s": [1.0], "m": [1.0]}, LOOP, {"digits": 3}, "accepted: an integer from 5 to 2000"),
        ({"s": [1.0], "m": [1.0]}, LOOP, {"measure": "ms"}, "accepted"),
        ({"s": [1.0], "m": [1.0]}, LOOP, {"on_error": "stop"}, "accepted"),
        ({"s": [1.0], "m": [1.0]}, LOOP, {"layout": "tall"}, "accepted"),
        ({"s": [1.0], "m": [1.0]}, LOOP, {"snap_tolerance": "x"}, "accepted"),
    ],
)
def test_mistakes_are_one_sentence(points, integral, keywords, sentence):
    with pytest.raises((InputError, ConfigError), match=sentence):
        loopint.evaluate(points, [integral], **keywords)
