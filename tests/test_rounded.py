"""Columns that are not doubles by themselves: proven errors, and runs that use them."""

from __future__ import annotations

import signal
import subprocess
import sys
import time
from decimal import Decimal
from fractions import Fraction
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from flint import fmpq
from hypothesis import given, settings
from hypothesis import strategies as st

from loopint.core.errors import InputError
from loopint.pipeline.cells import rounded_column
from loopint.pipeline.config import load_config
from loopint.pipeline.doubles import METHOD
from loopint.pipeline.estimate import survey_config
from loopint.pipeline.expressions import parse_expression
from loopint.pipeline.points import exact_cell
from loopint.pipeline.rounded import Rounded
from loopint.pipeline.run import run_config

numbers = (
    st.floats(allow_nan=False, allow_infinity=False)
    | st.floats(-10, 10)
    | st.integers(-9, 9).map(float)
)
TEXTS = [
    "x + y",
    "x - y",
    "x*y",
    "x/y",
    "(x + y)**2",
    "x**3 - 2*y",
    "-x/4",
    "0.1*x",
    "1/y",
    "x**-1",
    "x**0",
    "(0.1*x + y/3)**2 - x*y/7",
    "x + y - x",
]


def rational(number: float) -> fmpq:
    return fmpq(*float(number).as_integer_ratio())


def check(found: Rounded, exact: fmpq) -> None:
    """Assert that the first number is within its error, and exact where it says so."""
    value, error = float(found.value[0]), float(found.error[0])
    if np.isfinite(error):
        allowed = rational(error) * abs(rational(value)) / 2**53
        assert abs(rational(value) - exact) <= allowed


@settings(max_examples=400, deadline=None)
@given(x=numbers, y=numbers, text=st.sampled_from(TEXTS))
def test_errors_of_expressions(x: float, y: float, text: str) -> None:
    expression = parse_expression(text)
    columns = {n: Rounded.of(np.array([v])) for n, v in (("x", x), ("y", y))}
    found = expression.compute(columns)
    try:
        exact = expression.evaluate({"x": rational(x), "y": rational(y)})
    except InputError:
        assert np.isinf(found.error[0])  # divided by zero
    else:
        check(found, exact)


@settings(max_examples=300, deadline=None)
@given(
    x=st.fractions(-100, 100, max_denominator=10**6),
    y=st.fractions(-100, 100, max_denominator=10**6),
    text=st.sampled_from(TEXTS),
)
def test_errors_of_operands_are_carried(x: Fraction, y: Fraction, text: str) -> None:
    expression = parse_expression(text)
    cells = {n: fmpq(v.numerator, v.denominator) for n, v in (("x", x), ("y", y))}
    found = expression.compute({n: Rounded.constant(v, 1) for n, v in cells.items()})
    try:
        exact = expression.evaluate(cells)
    except InputError:
        assert np.isinf(found.error[0])
    else:
        check(found, exact)


def test_small_integers_stay_exact() -> None:
    columns = {n: Rounded.of(np.array([1.5, 3.0])) for n in ("x", "y")}
    for text in ("x + y", "x*y", "x/y", "(x + y)**2", "x**3 - 2*y", "-x/4"):
        assert parse_expression(text).compute(columns).exact.all(), text
    assert not parse_expression("0.1*x").compute(columns).exact.any()


def test_errors_are_not_much_too_large() -> None:
    columns = {n: Rounded.of(np.array([0.1, 0.7])) for n in ("x", "y")}
    assert (parse_expression("(x + y)**2").compute(columns).error <= 3.01).all()
    assert (parse_expression("x/y").compute({**columns}).error <= 1.01).all()


COLUMNS = {
    "float64": pa.array([0.1, -2.5, None, float("nan"), float("inf"), 0.0, 5e-324]),
    "float32": pa.array([0.1, 2.5, None], pa.float32()),
    "int64": pa.array([3, -(2**53) - 1, 2**63 - 1, None, 0]),
    "uint64": pa.array([3, 2**64 - 1, None], pa.uint64()),
    "decimal": pa.array([Decimal("0.10"), Decimal("-7.25"), None, Decimal("0.00")]),
    "long decimal": pa.array([Decimal(f"{10**25}.5"), Decimal("1.5"), Decimal(f"{2**63}.0")]),
    "wide decimal": pa.array([Decimal("1.5")], pa.decimal256(60, 5)),
    "text": pa.array(
        ["0.1", "12", "-3", "1e-3", "-2.5E+2", "1/3", " 1", "x", "", None, "1e-999", "1e400", "0",
         "0.0", "nan", "1_0", "2e-308", "123456789012345678"]
    ),
    "dictionary": pa.array(["0.5", "0.1", "0.5", None]).dictionary_encode(),
}  # fmt: skip


@pytest.mark.parametrize("name", COLUMNS)
def test_columns_of_every_type(name: str) -> None:
    whole = COLUMNS[name]
    for column in (pa.chunked_array([whole]), pa.chunked_array([whole.slice(1), whole])):
        found = rounded_column(column)
        for i, cell in enumerate(column.to_pylist()):
            one = Rounded(found.value[i : i + 1], found.error[i : i + 1])
            try:
                exact = exact_cell(cell)
            except InputError:
                assert np.isinf(one.error[0]), cell
            else:
                check(one, exact)
        if name != "wide decimal":
            assert np.isfinite(found.error).any()


CONFIG = """
[points]
file = "{folder}/points.parquet"

[[integral]]
name = "masses"
family = "bubble"
orders = [-1, 1]
p_squared = "s"
m1 = "m"
m2 = "n"
derivatives = ["p_squared", "m1_squared"]

[[integral]]
name = "sums"
family = "bubble"
p_squared = "(m + n)**2*(1 + 0.1*t)"
m1 = "m"
m2 = "n"

[[integral]]
name = "unstable"
family = "bubble"
p_squared = "s"
m1 = "m"
width1 = "0.03*m"
m2 = "d"

[[integral]]
name = "one"
family = "tadpole"
powers = [2]
m = "m"

[conventions]
mu_squared = "{mu}"

[accuracy]
digits = {digits}

[output]
directory = "{folder}/{name}"
formats = ["parquet", "csv"]
layout = "{layout}"

[cross_check]
fraction = {fraction}

[execution]
workers = {workers}
chunk_rows = 150
"""


def points(count: int) -> pa.Table:
    source = np.random.default_rng(2)
    m, n = source.uniform(0.1, 3, (2, count))
    t = source.uniform(-20, 20, count)
    s = np.where(t > 10, t, (m + np.sign(t) * n) ** 2 * (1 + t / 1000))
    texts = [f"{x:.3f}" for x in source.uniform(0, 2, count)]
    decimals = [Decimal(text) + 1 for text in texts]
    m[:4], n[:4], s[:4], t[:4] = (0.1, 0.5, 1.5, -1.0), (0.1, 0.25, 0.5, 1), (0.04, 0, 4, 2), 0.0
    texts[5], texts[6], texts[7] = "x", "1/3", "0"
    return pa.table({"m": m, "n": n, "s": s, "t": t, "d": texts, "e": decimals})


def run(folder: Path, digits: int, mu: str, layout: str = "long", workers: int = 1) -> Path:
    name = f"{layout}-{digits}-{workers}-{len(mu)}"
    fraction = "0.01" if digits > 10 else '"none"'
    config = folder / f"{name}.toml"
    config.write_text(
        CONFIG.format(
            folder=folder,
            name=name,
            digits=digits,
            mu=mu,
            layout=layout,
            workers=workers,
            fraction=fraction,
        )
    )
    run_config(load_config(config))
    return folder / name


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("rounded")
    pq.write_table(points(300), path / "points.parquet")
    return path


@pytest.mark.parametrize("mu", ["1", "e**2/3"])
def test_runs_with_rounded_arguments(folder: Path, mu: str) -> None:
    found = [run(folder, digits, mu) for digits in (11, 16)]
    rejected = [pd.read_parquet(path / "rejected.parquet") for path in found]
    assert rejected[0].equals(rejected[1])
    assert len(rejected[0]) == 2
    double, ball = (pd.read_parquet(path / "table") for path in found)
    for name in ("row", "integral", "order", "region", "status"):
        assert (double[name] == ball[name]).all(), name
    for part in ("re", "im"):
        gap = (double[part] - ball[part]).abs()
        assert (gap <= double[f"{part}_bound"] + ball[f"{part}_bound"]).all()
    share = (double["method"] == METHOD).groupby(double["integral"]).mean()
    print(share)
    assert (share > 0.8).all()
    checks = pd.read_parquet(found[0] / "cross_check.parquet")
    assert checks["agrees"].all()


def test_a_survey_finds_the_regions_of_the_run(folder: Path) -> None:
    table = pd.read_parquet(run(folder, 12, "1") / "table")
    table["region"] = table["region"].str.removesuffix("_isolated")  # only found by evaluating
    first = table.drop_duplicates(["row", "integral"])
    survey = survey_config(load_config(folder / "long-12-1-1.toml"))
    assert survey.rows_rejected == 2
    assert [one.row for one in survey.rejections] == [3, 5]
    for name, counts in survey.regions.items():
        assert counts == first[first["integral"] == name]["region"].value_counts().to_dict()


def test_bytes_do_not_depend_on_workers(folder: Path) -> None:
    first, second = (run(folder, 10, "e", "wide", workers) for workers in (1, 2))
    for name in ("table/part-00000.parquet", "table/part-00001.parquet", "table.csv"):
        assert (first / name).read_bytes() == (second / name).read_bytes()


def test_a_run_killed_halfway_continues_to_the_same_bytes(tmp_path: Path) -> None:
    pq.write_table(points(1500), tmp_path / "points.parquet")
    whole = run(tmp_path, 9, "1")
    second, out = tmp_path / "second.toml", tmp_path / "second"
    text = (tmp_path / "long-9-1-1.toml").read_text()
    second.write_text(text.replace(f"{whole}", f"{out}").replace("workers = 1", "workers = 2"))
    command = [sys.executable, "-m", "loopint.cli", "run", str(second)]
    process = subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
    deadline = time.monotonic() + 60
    while not list(out.glob(".work/chunk-*.json")):
        assert process.poll() is None
        assert time.monotonic() < deadline
        time.sleep(0.002)
    process.send_signal(signal.SIGKILL)
    process.wait()
    assert not (out / "summary.json").exists()
    time.sleep(1)  # the workers notice that their parent is gone
    outcome = run_config(load_config(second), workers=1)
    assert 0 < outcome.summary["rows_resumed"] < 1500
    names = sorted(path.name for path in (whole / "table").iterdir())
    assert len(names) == 10
    for name in (*(f"table/{name}" for name in names), "table.csv", "rejected.parquet"):
        assert (out / name).read_bytes() == (whole / name).read_bytes()
