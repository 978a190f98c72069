"""Runs in doubles: the same rows, regions and rejections as in balls, and bounds that hold."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from loopint.pipeline.config import load_config
from loopint.pipeline.doubles import METHOD
from loopint.pipeline.estimate import survey_config
from loopint.pipeline.run import run_config

CONFIG = """
[points]
file = "{folder}/points.parquet"
key = "id"

[[integral]]
name = "real"
family = "bubble"
orders = [-1, 1]
p_squared = "s"
m1_squared = "a"
m2_squared = "b"
derivatives = ["p_squared", "m1_squared"]

[[integral]]
name = "unstable"
family = "bubble"
p_squared = "s"
m1 = "n"
width1 = "0.25"
m2 = "3/2"

[[integral]]
name = "one"
family = "tadpole"
m_squared = "b"

[[integral]]
name = "six"
family = "bubble"
dimension = 6
p_squared = "s"
m1_squared = "a"
m2_squared = "b"

[accuracy]
digits = {digits}

[output]
directory = "{folder}/{name}"
layout = "{layout}"

[cross_check]
fraction = 0.02

[execution]
workers = {workers}
chunk_rows = 200
"""


def adversarial(count: int) -> pa.Table:
    """Random points, and points on, beside and far from everything special."""
    source = np.random.default_rng(11)
    wide = 10 ** source.uniform(-8, 3, count) * source.choice([-1, 1], count)
    s = np.where(source.random(count) < 0.5, source.uniform(-30, 60, count), wide)
    a, b = (10 ** source.uniform(-2, 1, count) for _ in range(2))
    special = [
        (0.0, 1.0, 4.0), (9.0, 1.0, 4.0), (1.0, 1.0, 4.0), (4.0, 1.0, 1.0), (2.0, 2.0, 0.0),
        (0.0, 0.0, 0.0), (0.0, 0.0, 1.0), (3.0, 0.0, 0.0), (-3.0, 0.0, 2.0), (7.0, 2.0, 0.0),
        (np.nextafter(9, 10), 1.0, 4.0), (np.nextafter(9, 8), 1.0, 4.0),
        (np.nextafter(1, 2), 1.0, 4.0), (9 + 1e-9, 1.0, 4.0), (np.nextafter(2, 3), 2.0, 0.0),
        (np.nan, 1.0, 1.0), (np.inf, 1.0, 1.0), (1.0, -1.0, 1.0), (1e-50, 1.0, 2.0),
        (1e60, 1.0, 2.0), (-1e-30, 1e-30, 2e-30), (1.0, 1e-40, 1.0), (3.0, 1e-40, 1.0),
        (1e-12, 1.0, 1.0), (-0.0, 1.0, 2.0),
    ]  # fmt: skip
    for i, (x, y, z) in enumerate(special):
        s[i], a[i], b[i] = x, y, z
    n = source.integers(0, 9, count) / 4
    keys = [f"k{i}" for i in range(count)]
    null = np.zeros(count, dtype=bool)
    null[30] = True
    return pa.table({"id": keys, "s": pa.array(s, mask=null), "a": a, "b": b, "n": n})


def run(folder: Path, digits: int, layout: str = "long", workers: int = 1) -> Path:
    name = f"{layout}-{digits}-{workers}"
    config = folder / f"{name}.toml"
    config.write_text(
        CONFIG.format(folder=folder, name=name, digits=digits, layout=layout, workers=workers)
    )
    run_config(load_config(config))
    return folder / name


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("doubles")
    pq.write_table(adversarial(600), path / "points.parquet", row_group_size=130)
    return path


@pytest.fixture(scope="module")
def both(folder: Path) -> tuple[Path, Path]:
    """The same run in doubles and in balls."""
    return run(folder, 12), run(folder, 16)


def test_everything_but_the_last_digits_is_the_same(both: tuple[Path, Path]) -> None:
    double, ball = (pd.read_parquet(path / "table") for path in both)
    for name in ("id", "integral", "order", "region", "status"):
        assert (double[name] == ball[name]).all(), name
    assert (double["im"] == 0).eq(ball["im"] == 0).all()
    share = (double["method"] == METHOD).groupby(double["integral"]).mean()
    assert (share[["real", "unstable", "one"]] > 0.95).all()
    assert share["real_d_p_squared"] > 0.8
    assert share["six"] == 0  # not covered by doubles


def test_bounds_hold(both: tuple[Path, Path]) -> None:
    double, ball = (pd.read_parquet(path / "table") for path in both)
    for part in ("re", "im"):
        gap = (double[part] - ball[part]).abs()[
            np.isfinite(ball[part])
        ]  # an overflow is below the digits
        allowed = double[f"{part}_bound"] + ball[f"{part}_bound"]
        assert (gap <= allowed[gap.index]).all()
    inexact = double[(double["method"] == METHOD) & double["digits"].notna()]
    assert (inexact["digits"] >= 12).all()
    size = np.hypot(inexact["re"], inexact["im"])
    assert (np.maximum(inexact["re_bound"], inexact["im_bound"]) <= 1e-12 * size).all()


def test_rejections_are_the_same(both: tuple[Path, Path]) -> None:
    double, ball = (pd.read_parquet(path / "rejected.parquet") for path in both)
    assert double.equals(ball)
    assert len(double) == 4  # nan, inf, null and a negative squared mass


def test_sampled_rows_are_cross_checked(both: tuple[Path, Path]) -> None:
    double, ball = (pd.read_parquet(path / "cross_check.parquet") for path in both)
    assert double["agrees"].all()
    assert (double["id"] == ball["id"]).all()
    assert len(double) > 20


@pytest.mark.parametrize("layout", ["long", "wide"])
def test_tables_do_not_depend_on_workers(folder: Path, layout: str) -> None:
    first, second = (run(folder, 11, layout, workers) for workers in (1, 2))
    names = sorted(path.name for path in (first / "table").iterdir())
    assert len(names) == 3
    for name in names:
        assert (first / "table" / name).read_bytes() == (second / "table" / name).read_bytes()


def test_survey_knows_that_columns_are_fast(folder: Path) -> None:
    run(folder, 10)
    fast = survey_config(load_config(folder / "long-10-1.toml"))
    assert fast.rows == 600
    assert fast.rows_rejected == 4
    assert fast.row_seconds > 0
