"""From a row to exact kinematics: every way to give a mass, and every reason to reject a row."""

from __future__ import annotations

import pickle
from decimal import Decimal
from fractions import Fraction
from pathlib import Path

import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from flint import fmpq
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from loopint.core.errors import InputError
from loopint.core.kinematics import OnePoint, Region, TwoPoint
from loopint.core.numbers import ExactComplex
from loopint.pipeline.config import load_config
from loopint.pipeline.errors import ConfigError
from loopint.pipeline.plan import IntegralPlan, RowRequest, plan_integrals
from loopint.pipeline.points import exact_rows, open_points

BUBBLE = 'p_squared = "p2"\nm1_squared = "a"\nm2_squared = "b"'
COLUMNS = {"p2": [4.0], "a": [1.0], "b": [1.0], "mu": ["2"], "gamma": [0.5], "label": [b"x"]}


def plans(
    tmp_path: Path,
    kinematics: str,
    columns: dict[str, object] | None = None,
    *,
    family: str = "bubble",
    extra: str = "",
) -> tuple[IntegralPlan, ...]:
    table = tmp_path / "points.parquet"
    pq.write_table(pa.table(columns or COLUMNS), table)
    path = tmp_path / "run.toml"
    path.write_text(
        f'[points]\nfile = "{table.as_posix()}"\n[[integral]]\nname = "one"\nfamily = "{family}"\n'
        f'{kinematics}\n[output]\ndirectory = "x"\n{extra}\n',
        encoding="utf-8",
    )
    config = load_config(path)
    return plan_integrals(config, open_points(config.points.file, config.points.key))


def requests(
    tmp_path: Path, kinematics: str, columns: dict[str, object], **options: str
) -> list[RowRequest | str]:
    """Apply the plan to every row; a rejected row gives its reason."""
    (plan,) = plans(tmp_path, kinematics, columns, **options)
    table = open_points(tmp_path / "points.parquet").read_rows(0, 100, plan.columns)
    found: list[RowRequest | str] = []
    for cells in exact_rows(table, plan.columns):
        try:
            found.append(plan.request(cells))
        except InputError as error:
            found.append(str(error))
    return found


def complex_of(re: object, im: object = 0) -> ExactComplex:
    return ExactComplex(
        fmpq(*Fraction(re).as_integer_ratio()), fmpq(*Fraction(im).as_integer_ratio())
    )


# ---------------------------------------------------------------- ways to give the kinematics


@pytest.mark.parametrize(
    ("mass", "expected"),
    [
        ('m1_squared = "a"', complex_of("1/2")),
        ("m1_squared = 0.1", complex_of("1/10")),
        ('m1_squared = "1/3"', complex_of("1/3")),
        ('m1_squared = ["a", "-g"]', complex_of("1/2", "-1/8")),
        ('m1_squared = ["a", -0.1]', complex_of("1/2", "-1/10")),
        ("m1_squared = [0, -1]", complex_of(0, -1)),
        ("m1_squared = [-2, -1]", complex_of(-2, -1)),
        ('m1 = "a"', complex_of("1/4")),
        ("m1 = 3", complex_of(9)),
        ('m1 = "a"\nwidth1 = "g"', complex_of("1/4", "-1/16")),
        ('m1 = "a"\nwidth1 = "1/10"', complex_of("1/4", "-1/20")),
        ('m1 = "a"\nwidth1 = 0', complex_of("1/4")),
    ],
)
def test_masses(tmp_path: Path, mass: str, expected: ExactComplex) -> None:
    columns = {"p2": [-3], "a": [0.5], "g": [0.125]}
    (request,) = requests(tmp_path, f'p_squared = "p2"\n{mass}\nm2_squared = "(a + 1)**2"', columns)
    assert isinstance(request, RowRequest)
    assert request.point == TwoPoint(fmpq(-3), expected, complex_of("9/4"))
    assert request.name == "one"
    assert request.integral_index == 0
    assert request.integral.family == "bubble"


@pytest.mark.parametrize(
    ("mass", "expected"),
    [
        ('m_squared = "a"', complex_of("1/2")),
        ('m = "a"\nwidth = "g"', complex_of("1/4", "-1/16")),
    ],
)
def test_tadpole(tmp_path: Path, mass: str, expected: ExactComplex) -> None:
    columns = {"a": [0.5], "g": [0.125]}
    (request,) = requests(tmp_path, mass, columns, family="tadpole")
    assert isinstance(request, RowRequest)
    assert request.point == OnePoint(expected)


@given(
    st.lists(
        st.tuples(
            st.decimals(-50, 50, places=4, allow_nan=False),
            st.decimals(0, 50, places=4, allow_nan=False),
            st.decimals(0, 50, places=4, allow_nan=False),
        ),
        min_size=1,
        max_size=10,
    )
)
@settings(
    suppress_health_check=[HealthCheck.function_scoped_fixture], max_examples=25, deadline=None
)
def test_rows_are_exact(tmp_path: Path, rows: list[tuple[Decimal, Decimal, Decimal]]) -> None:
    names = ("q", "a", "b")
    kind = pa.decimal128(20, 4)
    columns = {
        name: pa.array(cells, kind)
        for name, cells in zip(names, zip(*rows, strict=True), strict=True)
    }
    kinematics = 'p_squared = "(a + b)**2 + q/3"\nm1_squared = "a**2"\nm2 = "b"'
    found = requests(tmp_path, kinematics, columns)
    for request, (q, a, b) in zip(found, rows, strict=True):
        assert isinstance(request, RowRequest)
        p_squared = (Fraction(a) + Fraction(b)) ** 2 + Fraction(q) / 3
        masses = complex_of(Fraction(a) ** 2), complex_of(Fraction(b) ** 2)
        assert request.point == TwoPoint(complex_of(p_squared).re, *masses)
        if q == 0 and a * b > 0:
            assert request.point.region is Region.THRESHOLD


def test_threshold_is_exact_for_decimal_strings_but_not_for_doubles(tmp_path: Path) -> None:
    kinematics = 'p_squared = "p2"\nm1 = "a"\nm2 = "b"'
    strings = {"p2": ["0.09"], "a": ["0.1"], "b": ["0.2"]}
    (request,) = requests(tmp_path, kinematics, strings)
    assert request.point.region is Region.THRESHOLD
    doubles = {name: [float(cells[0])] for name, cells in strings.items()}
    (request,) = requests(tmp_path, kinematics, doubles)
    assert request.point.region is not Region.THRESHOLD
    snap = "[accuracy]\nsnap_tolerance = 1e-12"
    (request,) = requests(tmp_path, kinematics, doubles, extra=snap)
    assert request.point.snapped_onto is Region.THRESHOLD


def test_snapping_is_off_unless_asked(tmp_path: Path) -> None:
    columns = {"p2": ["4.0000001", "4", "4.1"], "a": [1, 1, 1], "b": [1, 1, 1]}
    found = requests(tmp_path, BUBBLE, columns)
    assert [request.point.snapped for request in found] == [False, False, False]
    found = requests(tmp_path, BUBBLE, columns, extra="[accuracy]\nsnap_tolerance = 1e-6")
    assert [request.point.snapped for request in found] == [True, False, False]


def test_conventions(tmp_path: Path) -> None:
    columns = {"p2": [4, 4], "a": [1, 1], "b": [1, 1], "mu": ["1/3", "0.5"]}
    extra = '[conventions]\nmu_squared = "mu**2"\nmeasure = "gamma"\npropagator_sign = "euclidean"'
    found = requests(tmp_path, BUBBLE, columns, extra=extra)
    assert [request.conventions.mu_squared for request in found] == [fmpq(1, 9), fmpq(1, 4)]
    assert found[0].conventions.measure == "gamma"
    assert found[0].conventions.propagator_sign == "euclidean"
    (plan,) = plans(tmp_path, BUBBLE, columns, extra="[conventions]\nmu_squared = 0.5")
    assert plan.conventions({}).mu_squared == fmpq(1, 2)


def test_columns_are_those_needed(tmp_path: Path) -> None:
    (plan,) = plans(tmp_path, BUBBLE)
    assert plan.columns == ("a", "b", "p2")
    (plan,) = plans(tmp_path, BUBBLE, extra='[conventions]\nmu_squared = "mu"')
    assert plan.columns == ("a", "b", "mu", "p2")
    (plan,) = plans(tmp_path, "p_squared = 1\nm1 = 2\nm2 = 3")
    assert plan.columns == ()
    assert plan.point({}) == TwoPoint(fmpq(1), complex_of(4), complex_of(9))
    (plan,) = plans(tmp_path, "m_squared = 0", family="tadpole")
    assert plan.point({}) == OnePoint(complex_of(0))


def test_several_integrals_and_pickle(tmp_path: Path) -> None:
    second = f'{BUBBLE}\norders = [0, 1]\n[[integral]]\nname = "two"\nfamily = "tadpole"\nm = "a"'
    found = plans(tmp_path, second)
    assert [(plan.index, plan.name) for plan in found] == [(0, "one"), (1, "two")]
    assert [plan.integral.orders for plan in found] == [(0, 1), (-1, 0)]
    cells = {"p2": fmpq(5), "a": fmpq(1, 3), "b": fmpq(2)}
    for plan, copy in zip(found, pickle.loads(pickle.dumps(found)), strict=True):
        assert copy.request(cells) == plan.request(cells)


# ---------------------------------------------------------------- rows that are rejected


@pytest.mark.parametrize(
    ("kinematics", "cells", "reason"),
    [
        (BUBBLE, {"a": None}, "column a is null; accepted: a finite number"),
        (BUBBLE, {"p2": float("nan")}, "column p2 is nan; accepted: a finite number"),
        (BUBBLE, {"b": float("-inf")}, "column b is -inf; accepted: a finite number"),
        (BUBBLE, {"b": "abc"}, "column b is 'abc'; accepted: a finite number such as 0.1"),
        (BUBBLE, {"a": -0.25}, "m1_squared = -1/4 is negative; accepted: real m^2 >= 0"),
        (BUBBLE, {"b": -0.1}, "m2_squared = -0.1000000000 is negative; accepted: real m^2 >= 0"),
        (
            'p_squared = "p2"\nm1_squared = ["a", "g"]\nm2_squared = 1',
            {"g": 0.5},
            "m1_squared has Im = 1/2 > 0; accepted: Im m^2 <= 0",
        ),
        ('p_squared = "p2"\nm1 = "a"\nm2 = 1', {"a": -2}, "m1 = -2 is negative; accepted: >= 0"),
        (
            'p_squared = "p2"\nm1 = 1\nwidth1 = "g"\nm2 = 1',
            {"g": -0.5},
            "width1 = -1/2 is negative; accepted: >= 0",
        ),
        (
            'p_squared = "p2/(a - b)"\nm1 = 1\nm2 = 1',
            {"a": 3, "b": 3},
            "p_squared: division by zero in p2/(a - b)",
        ),
        (
            'p_squared = "((p2**64)**64)**64"\nm1 = 1\nm2 = 1',
            {"p2": 0.1},
            "p_squared: '((p2**64)**64)**64' can give a number of",
        ),
    ],
)
def test_a_bad_row_is_rejected_with_its_reason_and_the_others_are_not(
    tmp_path: Path, kinematics: str, cells: dict[str, object], reason: str
) -> None:
    good: dict[str, object] = {"p2": 1, "a": 2, "b": 1, "g": -1}
    if "g" in cells and "width1" in kinematics:
        good["g"] = 1
    columns = {}
    for name, cell in good.items():
        bad = cells.get(name, cell)
        kind = pa.string() if isinstance(bad, str) else pa.float64()
        column = [cell, bad, cell]
        columns[name] = pa.array([str(c) for c in column] if isinstance(bad, str) else column, kind)
    first, second, third = requests(tmp_path, kinematics, columns)
    assert isinstance(first, RowRequest)
    assert isinstance(third, RowRequest)
    assert isinstance(second, str)
    assert second.startswith(reason)
    assert len(second) < 300


@pytest.mark.parametrize("value", [0.0, -1.0, None, float("nan")])
def test_bad_mu_squared_in_a_row(tmp_path: Path, value: float | None) -> None:
    columns = {"p2": [1, 1], "a": [1, 1], "b": [1, 1], "mu": pa.array([1.0, value], pa.float64())}
    first, second = requests(tmp_path, BUBBLE, columns, extra='[conventions]\nmu_squared = "mu"')
    assert isinstance(first, RowRequest)
    assert isinstance(second, str)
    if value is None or value != value:
        assert second.startswith("column mu is ")
    else:
        assert second == f"mu_squared = {int(value)} is not positive; accepted: > 0"


# ---------------------------------------------------------------- plans that cannot be made


@pytest.mark.parametrize(
    ("kinematics", "message"),
    [
        (
            'p_squared = "p2_"\nm1 = "a"\nm2 = "b"',
            r'"one" p_squared: column p2_ of .*did you mean p2\?',
        ),
        (
            'p_squared = "label"\nm1 = "a"\nm2 = "b"',
            "column label of .* has type binary; accepted: i",
        ),
        ('p_squared = "p2"\nm1 = -1\nm2 = "b"', '"one" m1 = -1 is negative; accepted: >= 0'),
        ('p_squared = "p2"\nm1 = "a"\nwidth1 = -1\nm2 = 1', '"one" width1 = -1 is negative'),
        (
            'p_squared = "p2"\nm1_squared = -0.5\nm2 = 1',
            "m1_squared = -1/2 is negative; accepted: ",
        ),
        (
            'p_squared = "p2"\nm1 = 1\nm2_squared = [1, 0.5]',
            "m2_squared has Im = 1/2 > 0; accepted",
        ),
        ('p_squared = "p2"\nm1 = 1\nm2_squared = ["a", 1]', "m2_squared has Im = 1 > 0; accepted"),
    ],
)
def test_what_no_row_can_make_valid_is_an_error_of_the_config(
    tmp_path: Path, kinematics: str, message: str
) -> None:
    with pytest.raises(ConfigError, match=rf"run\.toml: \[\[integral\]\] .*{message}") as caught:
        plans(tmp_path, kinematics)
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize(
    ("mu_squared", "message"),
    [
        ("0", r"\[conventions\] mu_squared = 0 is not positive; accepted: > 0"),
        ("-0.5", r"\[conventions\] mu_squared = -1/2 is not positive; accepted: > 0"),
        ('"m"', r"\[conventions\] mu_squared: column m of .*points\.parquet is unknown; did you"),
        ('"label"', r"\[conventions\] mu_squared: column label of .* has type binary"),
    ],
)
def test_fixed_mu_squared(tmp_path: Path, mu_squared: str, message: str) -> None:
    with pytest.raises(ConfigError, match=rf"run\.toml: {message}"):
        plans(tmp_path, BUBBLE, extra=f"[conventions]\nmu_squared = {mu_squared}")
