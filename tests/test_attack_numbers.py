"""Coefficients that vanish exactly, and other points that once went wrong."""

from __future__ import annotations

from fractions import Fraction

import mpmath
import numpy as np
import pytest

import loopint
from loopint.core.conventions import Conventions
from loopint.core.kinematics import TwoPoint
from loopint.core.numbers import exact_complex, exact_real
from loopint.quadrature import integrate_feynman
from tests.reference import at_epsilon, to_mp
from tests.test_propagator import published

MIXED = (Fraction(-2, 3), 1, Fraction(4, 3))

# p^2, m1^2, m2^2, powers, dimension, the order that vanishes
ZEROS = [
    ((2, 0, 1), (1, 4), 4, 0),  # N >= d0, one massless line: zero of a polynomial in p^2/m^2
    ((3, 0, 1), (2, 5), 6, 0),
    ((3, 0, 1), (1, 3), 3, 0),
    ((-1, 0, 1), (5, 1), 3, 0),
    ((8, 1, 1), (1, 3), 3, 0),  # N >= d0 odd: p^2 = (m1+m2)(m1+3 m2)
    ((10, 4, 1), (3, 1), 3, -1),
    ((8, 1, 1), (5, 2), 7, 0),
    ((25, 4, 9), (2, 3), 4, 0),  # threshold, different masses
    ((9, 1, 4), (1, 2), 2, 0),
    ((4, 1, 1), (3, 2), 8, 1),  # threshold, equal masses, all logarithms zero
    ((1, 0, 1), (4, 2), 8, 0),  # on shell
    ((0, 0, 1), (4, 1), 2, 0),  # p^2 = 0 with a massless line
    ((-1, 0, 1), (1, 1), 3, 1),  # p^2 = -m^2: Kummer's sum
    ((-1, 0, 1), (4, 1), 6, 0),
    ((0, 1, 4), (1, -3), 2, 0),  # a numerator
    (MIXED, (1, -2), 4, 0),
    ((1, 1, 1), (4, -1), 2, 1),
]


@pytest.mark.parametrize(("kinematics", "powers", "dimension", "order"), ZEROS)
def test_a_coefficient_that_vanishes_is_exactly_zero(
    kinematics: tuple[object, ...], powers: tuple[int, int], dimension: int, order: int
) -> None:
    """At once, and both ways round; nearby points tell that the zero is one of the function."""
    p, m1, m2 = kinematics
    for m, n in (((m1, m2), powers), ((m2, m1), powers[::-1])):
        series = loopint.bubble(p, *m, n, dimension=dimension, orders=(order, order + 1), digits=10)
        assert series.status == "ok"
        assert series[order] == 0
        assert series.bounds[order] == 0
        assert series[order + 1] != 0
        assert series.precision_bits < 200
    if p and order == 0 and min(powers) > 0 and series.region in {"above_threshold", "spacelike"}:
        near = [
            loopint.bubble(p + s * Fraction(1, 10**9), m1, m2, powers, dimension=dimension,
                           orders=(0, 0), digits=10)[0]
            for s in (1, -1)
        ]  # fmt: skip
        assert 0 < abs(near[0]) < 1e-7
        assert abs(near[0] + near[1]) < 1e-6 * abs(near[0])  # a simple zero


@pytest.mark.parametrize("powers", [(1, 1), (2, 1), (5, 1), (1, 4)])
@pytest.mark.parametrize("dimension", [3, 4, 6])
def test_opposite_momentum_on_one_massless_line(powers: tuple[int, int], dimension: int) -> None:
    """Kummer's sum at p^2 = -m^2 against mpmath's 2F1 (Boos, Davydychev 1991)."""
    m = Fraction(7, 3)
    series = loopint.bubble(-m, 0, m, powers, dimension=dimension, orders=(-2, 9), digits=40)
    assert series.method == ("gamma" if powers[1] == 1 else "hypergeometric")
    with mpmath.workdps(60):
        e = to_mp(Fraction(1, 10**4))
        value = published("", -m, Fraction(0), m, *powers, mpmath.mpf(dimension) / 2 - e)
        value *= (-1) ** sum(powers) * mpmath.exp(mpmath.euler * e)
        assert abs(at_epsilon(series, e) - value) < mpmath.mpf(10) ** -33 * abs(value)


@pytest.mark.parametrize("widths", [(0, 0), (1, 2)])
@pytest.mark.parametrize("dimension", range(1, 12))
@pytest.mark.parametrize("powers", [(1, 2), (4, 3), (2, 5)])
def test_equal_masses_at_threshold(
    powers: tuple[int, int], dimension: int, widths: tuple[int, int]
) -> None:
    """The rational part of the equal-mass threshold against points with different masses."""
    m = Fraction(3, 2)
    one = loopint.bubble(4 * m, m, m, powers, dimension=dimension, orders=(-1, 2), digits=25)
    shift = Fraction(1, 10**12) * (1 + widths[0])
    other = m * (1 + shift) ** 2
    p = m * (2 + shift) ** 2
    two = loopint.bubble(p, m, other, powers, dimension=dimension, orders=(-1, 2), digits=25)
    for k in one:
        assert abs(one[k] - two[k]) <= mpmath.mpf(1e-9) * abs(one[k])


def test_a_coefficient_that_looks_like_zero_ends_soon() -> None:
    """log 2 of Gamma(1/2 + eps) against log 4 of a mass: zero, but not decided; the bound is."""
    series = loopint.bubble(0, 1, 4, (1, 1), dimension=1, orders=(0, 1))
    assert series.status == "below_digits"
    assert abs(series[1]) < series.bounds[1] < 1e-200
    assert series.bounds[0] < abs(series[0]) * 1e-30


def test_long_numbers_are_not_given_up() -> None:
    """A cancellation that deep is no zero."""
    series = loopint.bubble("1e-60", 1, "1e9", (3, 2), dimension=7, orders=(0, 0), digits=10)
    assert series.status == "ok"
    assert series[0] != 0


@pytest.mark.parametrize("powers", [((2, "1/2"), (1, "1/2")), ((1, 1), (2, "-1/3"))])
def test_orders_below_the_finite_part_by_quadrature(powers: object) -> None:
    """Only the pole of a singular end is asked for: no regular pieces are left to integrate."""
    exact = tuple((n, Fraction(a)) for n, a in powers)
    point = TwoPoint(exact_real(5), exact_complex(7), exact_complex(0))
    few = integrate_feynman(point, exact, 2, (-2, -1), Conventions(), digits=10)
    series = loopint.propagator(5, 7, 0, powers, dimension=2, orders=(-2, -1), digits=10)
    for k in series:
        assert abs(series[k] - few.values[k]) <= series.bounds[k] + few.errors[k]


def test_momentum_derivatives_in_the_highest_dimension() -> None:
    """d/dp^2 raises the dimension beyond 12; the slope against a difference."""
    arguments = {"powers": ((1, 1), 1), "dimension": 12, "orders": (0, 0)}
    slope = loopint.propagator(3, 1, 2, digits=8, derivatives="p_squared", **arguments)
    ends = [loopint.propagator(3 + s, 1, 2, digits=30, **arguments)[0]
            for s in (Fraction(1, 10**6), -Fraction(1, 10**6))]  # fmt: skip
    assert abs((ends[0] - ends[1]) * 500_000 - slope[0]) < 1e-6 * abs(slope[0])


def test_a_pole_of_a_singular_end_that_vanishes() -> None:
    """With nu2 = -2 + eps/2 the pole is a polynomial in p^2/m^2 with a zero at -4; any mu^2."""
    powers, arguments = ((2, 1), (-2, "1/2")), {"mu_squared": "0.3", "orders": (-1, 0)}
    series = loopint.propagator(-4, 1, 1, powers, digits=10, **arguments)
    assert (series.status, series.method) == ("ok", "quadrature")
    assert series[-1] == 0
    assert series.bounds[-1] == 0
    near = [loopint.propagator(p, 1, 1, powers, digits=10, **arguments)[-1]
            for p in ("-4.001", "-3.999")]  # fmt: skip
    assert near[0].real * near[1].real < 0
    assert abs(near[0] + near[1]) < abs(near[0]) / 100


@pytest.mark.parametrize(
    "kinematics", [(3, 1, 2), (-2, 5, 1), (3, (1, -1), 2), (4, 0, 3), (2, 0, 2)]
)
@pytest.mark.parametrize(
    "powers", [((-1, 1), (2, 0)), ((-2, "1/2"), (-1, 2)), ((0, 1), (-3, "1/3"))]
)
def test_rational_poles_are_in_the_balls(kinematics: tuple[object, ...], powers: object) -> None:
    """The exact pole against mpmath's expansion at the singular ends."""
    point = TwoPoint(exact_real(kinematics[0]), *(exact_complex(m) for m in kinematics[1:]))
    exact = tuple((n, Fraction(a)) for n, a in powers)
    for dimension in (4, 6):
        balls, other = (
            integrate_feynman(point, exact, dimension, (-3, 1), Conventions(), digits=12,
                              arithmetic=arithmetic)
            for arithmetic in ("balls", "mpmath")
        )  # fmt: skip
        for k in balls.values:
            gap = abs(balls.values[k] - other.values[k])
            assert gap <= balls.errors[k] + 10 * other.errors[k] + abs(balls.values[k]) * 1e-11


@pytest.mark.parametrize("powers", [(2, 2), (5, 1), (10, 7), (7, 10)])
def test_near_on_shell_whichever_line_is_massless(powers: tuple[int, int]) -> None:
    """The recurrence starts where it is stable: 64 bits instead of thousands, one value."""
    p = 3 + Fraction(1, 10**90)
    one = loopint.bubble(p, 3, 0, powers, dimension=6, orders=(-1, 1), digits=10)
    two = loopint.bubble(p, 0, 3, powers[::-1], dimension=6, orders=(-1, 1), digits=10)
    with mpmath.workdps(150):
        e = to_mp(Fraction(1, 10**8))
        many = loopint.bubble(p, 0, 3, powers[::-1], dimension=6, orders=(-1, 9), digits=80)
        expected = published("", p, Fraction(0), Fraction(3), *powers[::-1], 3 - e)
        expected *= (-1) ** sum(powers) * mpmath.exp(mpmath.euler * e)
        assert abs(at_epsilon(many, e) - expected) < mpmath.mpf(10) ** -45 * abs(expected)
    for k in one:
        assert one.precision_bits == two.precision_bits < 200
        assert abs(one[k] - many[k]) <= one.bounds[k] + many.bounds[k]


@pytest.mark.parametrize("orders", [(-1, -1), (-3, -1), (-4, -2)])
def test_doubles_of_the_pole_alone(orders: tuple[int, int]) -> None:
    """Complex masses and no order above the pole, beside real masses."""
    masses = np.array([1.0, 2.0 - 1j, -15.4 - 1e-15j])
    result = loopint.bubble_array([5.0, -5.0, 12.0], masses, 2.0, orders=orders)
    for k in range(orders[0], orders[1] + 1):
        assert (result[k] == (1 if k == -1 else 0)).all()
        assert (result.bounds[k] == 0).all()


def test_a_propagator_that_vanishes_identically_ends_soon() -> None:
    """Equal masses and powers at threshold hold 1/Gamma((d+1)/2 - nu) (Euler's beta integral)."""
    powers = ((2, -1), (2, -1))
    series = loopint.propagator(
        4, 1, 1, powers, dimension=1, orders=(0, 0), digits=5, max_precision_bits=300
    )
    assert abs(series[0]) <= series.bounds[0] < 1e-60
