"""Exact input numbers and rounding of balls."""

from __future__ import annotations

import math
from decimal import Decimal
from fractions import Fraction

import flint
import mpmath
import numpy as np
import pytest
from flint import arb, fmpq
from hypothesis import given, settings
from hypothesis import strategies as st

from loopint.core.errors import InputError
from loopint.core.numbers import (
    decimal_string,
    exact_complex,
    exact_real,
    float_with_bound,
    mpf_with_bound,
    rounds_uniquely,
)
from loopint.core.precision import working_precision


@pytest.mark.parametrize(
    ("value", "expected"),
    [
        (3, Fraction(3)),
        ("0.1", Fraction(1, 10)),
        ("-1e-3", Fraction(-1, 1000)),
        ("1/3", Fraction(1, 3)),
        (" 2.50 ", Fraction(5, 2)),
        (Decimal("0.1"), Fraction(1, 10)),
        (Fraction(2, 7), Fraction(2, 7)),
        (0.1, Fraction(0.1)),
        (np.float32(0.1), Fraction(float(np.float32(0.1)))),
        (np.int64(-4), Fraction(-4)),
        (mpmath.mpf("0.25"), Fraction(1, 4)),
        (5e-324, Fraction(1, 2**1074)),
    ],
)
def test_input_is_taken_exactly(value: object, expected: Fraction) -> None:
    found = exact_real(value)
    assert Fraction(int(found.p), int(found.q)) == expected


@pytest.mark.parametrize(
    "value",
    [
        math.nan,
        math.inf,
        "nan",
        "inf",
        "",
        "1/0",
        "abc",
        "1e20001",
        None,
        True,
        [1],
        "0x10",
        1j,
        "9" * 30_000,
        Decimal("NaN"),
        mpmath.mpf("inf"),
        np.float64("nan"),
    ],
)
def test_other_input_is_refused_with_one_sentence(value: object) -> None:
    with pytest.raises(InputError) as caught:
        exact_real(value)
    assert "\n" not in str(caught.value)
    assert len(str(caught.value)) < 250


def test_complex_input() -> None:
    assert exact_complex(("1/3", "-0.1")).im == fmpq(-1, 10)
    assert exact_complex(1 - 0.5j).im == fmpq(-1, 2)
    assert exact_complex(np.complex128(2 - 1j)).re == 2
    assert exact_complex(mpmath.mpc(1, -2)).im == -2
    with pytest.raises(InputError):
        exact_complex((1, 2, 3))


@given(st.fractions(), st.integers(min_value=2, max_value=400))
def test_float_is_nearest_and_bound_holds(value: Fraction, bits: int) -> None:
    """Python's int/int division is correctly rounded (language reference, true division)."""
    with working_precision(bits):
        ball = arb(fmpq(value.numerator, value.denominator))
    rounded, bound = float_with_bound(ball)
    assert abs(Fraction(rounded) - value) <= Fraction(bound)
    if rounds_uniquely(ball):
        assert rounded == value.numerator / value.denominator


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_floats_survive_the_way_through_a_ball(value: float) -> None:
    with working_precision(64):
        assert float_with_bound(arb(exact_real(value))) == (value, 0.0)


@pytest.mark.parametrize("exponent", [-330, -323, -310, 300, 308])
def test_floats_at_the_ends_of_the_range(exponent: int) -> None:
    with working_precision(200):
        ball = arb(exact_real(f"1.2345678901234567e{exponent}"))
    value, bound = float_with_bound(ball)
    assert value == float(f"1.2345678901234567e{exponent}")
    assert bound < max(abs(value) * 1e-15, 1e-322)


def test_overflow_is_infinite_with_infinite_bound() -> None:
    with working_precision(64):
        assert float_with_bound(arb(exact_real("-1e400"))) == (-math.inf, math.inf)


@given(st.fractions(), st.integers(min_value=5, max_value=80))
def test_mpf_bound_covers_rounding_and_radius(value: Fraction, digits: int) -> None:
    with working_precision(300):
        ball = arb(fmpq(value.numerator, value.denominator))
    rounded, bound = mpf_with_bound(ball, digits)
    man, exp = rounded.man_exp
    exact = Fraction(int(man)) * Fraction(2) ** int(exp)
    if rounded < 0:
        exact = -abs(exact)
    limit = Fraction(int(bound.man)) * Fraction(2) ** int(bound.exp) if bound else Fraction(0)
    assert abs(exact - value) <= limit
    assert limit <= abs(value) * Fraction(10) ** (-digits)


def test_decimal_string() -> None:
    with working_precision(200):
        assert decimal_string(arb(1) / 3, 20) == "0.33333333333333333333"


def test_precision_is_restored_after_an_error() -> None:
    before = flint.ctx.prec
    with pytest.raises(RuntimeError), working_precision(777):
        raise RuntimeError
    assert flint.ctx.prec == before


@settings(max_examples=300, deadline=None)
@given(
    mantissa=st.integers(-(2**130), 2**130) | st.integers(2**52, 2**53).map(lambda n: 2 * n + 1),
    exponent=st.integers(-1200, 900),
    radius=st.integers(0, 1000),
)
def test_floats_are_nearest_and_bounds_hold(mantissa: int, exponent: int, radius: int) -> None:
    """Against integers and Fractions, at ties and among subnormal numbers too."""
    exact = Fraction(mantissa) * Fraction(2) ** exponent
    with working_precision(200):
        ball = arb((mantissa, exponent)) + arb(0, arb((radius, exponent)))
    value, bound = float_with_bound(ball)
    try:
        assert value == exact.numerator / exact.denominator  # Python rounds once, ties to even
    except OverflowError:
        assert bound == math.inf
        return
    if math.isfinite(bound):
        gap = abs(exact - Fraction(value)) + Fraction(radius) * Fraction(2) ** exponent
        assert gap <= Fraction(bound)
        assert Fraction(bound) <= gap * Fraction(1001, 1000) + 2 * Fraction(5e-324)
    if rounds_uniquely(ball):
        spread = Fraction(radius) * Fraction(2) ** exponent
        ends = [exact - spread, exact + spread]
        assert len({float(end.numerator / end.denominator) for end in ends}) == 1
