"""Rounding of proven balls for tables, the two layouts, and their files."""

from __future__ import annotations

import json
import math
from fractions import Fraction

import mpmath
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from flint import acb, arb
from hypothesis import given
from hypothesis import strategies as st

from loopint.core.conventions import Conventions
from loopint.core.kinematics import OnePoint, TwoPoint
from loopint.core.laurent import BallSeries
from loopint.core.numbers import exact_complex, exact_real
from loopint.core.precision import working_precision
from loopint.integrals.proof import Evaluation
from loopint.integrals.registry import Integral, evaluate
from loopint.pipeline.errors import ConfigError
from loopint.pipeline.evaluate import Computed
from loopint.pipeline.plan import RowRequest
from loopint.pipeline.tables import (
    IntegralColumns,
    TableLayout,
    check_csv_key,
    cross_check_schema,
    order_tag,
    proven_digits,
    rejected_schema,
    write_csv,
    write_integral,
    write_parquet,
    written,
)

ORDERS = (-1, 1)


def bubble(name="loop", *, digits=16, p="5", m1="1", m2="0.25", max_bits=20_000) -> Computed:
    integral = Integral.parse("bubble", (1, 1), 4, ORDERS)
    point = TwoPoint(exact_real(p), exact_complex(m1), exact_complex(m2))
    request = RowRequest(0, name, integral, point, Conventions())
    found = evaluate(integral, point, digits=digits, max_precision_bits=max_bits)
    return Computed(request, found)


def from_balls(balls: list, digits: int, lowest: int = 0) -> Computed:
    """An evaluation that holds the given balls."""
    orders = (lowest, lowest + len(balls) - 1)
    integral = Integral.parse("tadpole", (1,), 4, orders)
    point = OnePoint(exact_complex(1))
    request = RowRequest(0, "loop", integral, point, Conventions())
    series = BallSeries(lowest, balls)
    return Computed(request, Evaluation(series, orders, digits, "massive", "gamma", 64, True))


def fraction(x: arb) -> Fraction:
    mantissa, exponent = (int(part) for part in x.man_exp())
    return Fraction(mantissa) * Fraction(2) ** exponent


@given(
    st.integers(-(10**30), 10**30).filter(bool),
    st.integers(-(10**30), 10**30),
    st.integers(-40, 40),
    st.integers(1, 30),
)
def test_bounds_and_decimals_hold_for_every_number_in_the_ball(re, im, exponent, radius):
    with working_precision(160):
        unit = arb(10) ** exponent
        halo = arb(0, 1) * unit * re * arb(10) ** -radius
        ball = acb(re * unit + halo, im * unit + halo)
    number = written(ball, 20)
    corners = [
        (
            fraction(ball.real.mid()) + j * fraction(ball.real.rad()),
            fraction(ball.imag.mid()) + k * fraction(ball.imag.rad()),
        )
        for j in (-1, 1)
        for k in (-1, 1)
    ]
    digits = number.digits
    for x, y in corners:
        assert abs(x - Fraction(number.re)) <= Fraction(number.re_bound)
        assert abs(y - Fraction(number.im)) <= Fraction(number.im_bound)
        if digits:
            n = min(20, digits)
            re_gap, im_gap = x - Fraction(number.re_decimal), y - Fraction(number.im_decimal)
            assert re_gap**2 + im_gap**2 <= (x * x + y * y) / Fraction(10) ** (2 * n)


@pytest.mark.parametrize(
    ("ball", "digits"),
    [
        (arb(3), None),
        (acb(0, 1), None),
        (arb(0, 1), 0),
        (arb(1, 2), 0),
        (arb(1) / 0, 0),
        (acb(arb(1, 1e-20), arb(0, 1e-20)), 19),  # 1.41e-20 and 10 % room
    ],
)
def test_proven_digits(ball, digits):
    assert proven_digits(ball) == digits


def test_floats_are_the_nearest_ones_and_bounds_cover_the_rounding():
    """Finite part of B0 against mpmath's own integration of the logarithm at 40 digits."""
    with mpmath.workdps(40):
        q = lambda x: x + (1 - x) * mpmath.mpf(0.25) - 5 * x * (1 - x)  # noqa: E731
        roots = mpmath.polyroots([5, 1 - mpmath.mpf(0.25) - 5, mpmath.mpf(0.25)])
        real = -mpmath.quad(lambda x: mpmath.log(abs(q(x))), [0, *sorted(roots), 1])
        imaginary = mpmath.pi * (max(roots) - min(roots))
    number = write_integral(bubble(), 16).numbers[1]
    # the pole is exactly 1/eps, so the finite part is -Int log(Q - i0)
    assert abs(real - number.re) < 1e-16 * abs(real) * 1.2
    assert number.im == float(imaginary)
    assert 0 < number.re_bound < 2.3e-16
    pole = write_integral(bubble(), 16).numbers[0]
    assert (pole.re, pole.im, pole.re_bound, pole.im_bound, pole.digits) == (1, 0, 0, 0, None)


def test_numbers_beyond_float64_are_not_called_ok_without_decimals():
    with working_precision(128):
        huge = arb(10) ** 400 + arb(0, 1)
    without = write_integral(from_balls([huge], 16), 16)
    assert without.status == "below_digits"
    assert without.numbers[0].re == math.inf
    assert without.numbers[0].re_bound == math.inf
    with_decimals = write_integral(from_balls([huge], 20), 20)
    assert with_decimals.status == "ok"
    assert with_decimals.numbers[0].re_decimal == "1.0e+400"


def test_numbers_below_float64_keep_a_true_bound():
    with working_precision(128):
        tiny = arb(3) / arb(10) ** 400
    number = write_integral(from_balls([tiny], 16), 16).numbers[0]
    assert number.re == 0.0
    assert 0 < number.re_bound <= 5e-324
    assert number.digits > 30


def columns(layout: TableLayout, rows: list) -> list[IntegralColumns]:
    """The columns of rows of written integrals."""
    found = layout.columns()
    for row in rows:
        for one, column in zip(row, found, strict=True):
            column.append(one)
    return found


@pytest.mark.parametrize("digits", [16, 30])
def test_long_layout(digits):
    layout = TableLayout("long", pa.field("point", pa.int32()), [("loop", ORDERS)], digits, {})
    rows = [[write_integral(bubble(digits=digits, p=p), digits)] for p in ("5", "2", "-1")]
    table = layout.build(pa.array([7, 8, 9], type=pa.int32()), columns(layout, rows))
    decimals = ["re_decimal", "im_decimal"] if digits > 17 else []
    assert table.column_names == [
        "point", "integral", "order", "re", "im", "re_bound", "im_bound", *decimals,
        "digits", "region", "method", "status",
    ]  # fmt: skip
    assert table.schema.field("point").type == pa.int32()
    assert table.column("point").to_pylist() == [7, 7, 7, 8, 8, 8, 9, 9, 9]
    assert table.column("order").to_pylist() == [-1, 0, 1] * 3
    assert table.column("region").to_pylist()[::3] == [
        "above_threshold", "below_threshold", "spacelike",
    ]  # fmt: skip
    assert [d for d in table.column("digits").to_pylist() if d is not None and d < digits] == []
    if decimals:
        shown = table.column("re_decimal").to_pylist()[1]
        assert float(shown) == table.column("re").to_pylist()[1]
        assert len(shown.lstrip("-0.").replace(".", "")) >= digits


def test_wide_layout_has_one_line_per_row():
    layout = TableLayout("wide", None, [("a", ORDERS), ("b", ORDERS)], 16, {})
    row = [write_integral(bubble("a"), 16), write_integral(bubble("b", p="-1"), 16)]
    table = layout.build(pa.array([0], type=pa.int64()), columns(layout, [row]))
    names = ["row"]
    for name in ("a", "b"):
        names += [f"{name}_region", f"{name}_status"]
        for tag in ("m1", "0", "1"):
            names += [f"{name}_{tag}_{part}" for part in ("re", "im", "re_bound", "im_bound")]
    assert table.column_names == names
    line = table.to_pylist()[0]
    assert line["a_region"] == "above_threshold"
    assert line["a_0_im"] == row[0].numbers[1].im
    assert line["b_m1_re"] == 1.0
    assert order_tag(-2) == "m2"


def test_metadata_describe_every_column():
    layout = TableLayout("long", None, [("a", ORDERS)], 20, {"conventions": {"measure": "msbar"}})
    metadata = json.loads(layout.schema.metadata[b"loopint"])
    assert set(metadata["columns"]) == set(layout.schema.names)
    assert metadata["conventions"] == {"measure": "msbar"}


@pytest.mark.parametrize("name", ["integral", "re", "status"])
def test_a_key_named_like_a_column_is_refused(name):
    with pytest.raises(ConfigError, match=f"key = '{name}' is also the name"):
        TableLayout("long", pa.field(name, pa.int64()), [("a", ORDERS)], 16, {})


@pytest.mark.parametrize("schema", [rejected_schema, cross_check_schema])
def test_a_key_named_row_is_refused(schema):
    with pytest.raises(ConfigError, match="accepted: a key column with another name"):
        schema(pa.field("row", pa.int64()))


def test_csv_refuses_a_key_it_cannot_hold(tmp_path):
    with pytest.raises(ConfigError, match="type list"):
        check_csv_key(pa.field("point", pa.list_(pa.int64())))
    check_csv_key(pa.field("point", pa.timestamp("us")))
    schema = pa.schema([pa.field("point", pa.timestamp("us")), pa.field("re", pa.float64())])
    arrays = [pa.array([1], pa.timestamp("us")), pa.array([0.1])]
    table = pa.Table.from_arrays(arrays, schema=schema)
    write_parquet(tmp_path / "part.parquet", table)
    write_csv(tmp_path / "table.csv", schema, [tmp_path / "part.parquet"])
    assert (tmp_path / "table.csv").read_text().splitlines()[0] == '"point","re"'


def test_files_depend_on_the_table_alone_and_appear_complete(tmp_path):
    table = pa.table({"x": [1, 2]})
    first = write_parquet(tmp_path / "a.parquet", table)
    second = write_parquet(tmp_path / "b.parquet", table)
    assert first == second
    assert pq.read_table(tmp_path / "a.parquet").equals(table)
    with pytest.raises(AttributeError):
        write_parquet(tmp_path / "c.parquet", None)
    assert sorted(path.name for path in tmp_path.iterdir()) == ["a.parquet", "b.parquet"]


def test_below_digits_status_reaches_the_table():
    found = bubble(p="5", digits=60, max_bits=64)
    one = write_integral(found, 60)
    assert one.status == "below_digits"
    assert one.numbers[1].digits < 60
    assert one.numbers[1].digits >= 10
