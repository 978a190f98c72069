"""Quadrature with epsilon-dependent powers, infrared ends and threshold, against outside formulas.

Most comparisons are made at a number eps: the Laurent series is summed there, and the integral is
evaluated by mpmath in d = d0 - 2 eps with the powers n + a eps.
"""

from __future__ import annotations

from fractions import Fraction

import mpmath
import pytest
from flint import acb, arb, fmpq
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from loopint.core.conventions import Conventions, Measure, PropagatorSign
from loopint.core.epsilon_linear import EpsilonLinear
from loopint.core.errors import InputError, UnregulatedError, UnsupportedIntegralError
from loopint.core.kinematics import OnePoint, Region, TwoPoint
from loopint.core.numbers import exact_complex, exact_real
from loopint.core.precision import working_precision
from loopint.integrals.registry import Integral, evaluate
from loopint.quadrature import integrate_feynman

PLAIN = Conventions(Measure.PLAIN, PropagatorSign.EUCLIDEAN)
ORDERS = (-3, 7)
EPS = mpmath.mpf("1e-4")  # what is cut off is about (rate * eps)^8

GENERAL = {
    "below threshold": (1, 1, 2),
    "above threshold": (10, 1, 2),
    "just above threshold": ("9.01", 1, 4),
    "below pseudothreshold": ("1/2", 1, 4),
    "spacelike": (-3, 1, 2),
    "p^2 = 0": (0, 1, 3),
    "one complex mass": (10, (1, "-0.1"), 2),
    "two complex masses": (3, (1, "-0.5"), (2, -1)),
}
EPSILON_POWERS = [
    ((1, 1), 1),
    ((1, Fraction(1, 2)), (1, Fraction(-1, 3))),
    ((2, 1), (1, 2)),
    ((1, -2), (3, 1)),
    ((2, 2), 2),
]


def two_point(p, m1, m2, snapped_onto=None) -> TwoPoint:
    return TwoPoint(exact_real(p), exact_complex(m1), exact_complex(m2), snapped_onto)


def pair(power) -> tuple[int, Fraction | int]:
    return power if isinstance(power, tuple) else (power, 0)


def at(power, eps):
    n, a = pair(power)
    return n + mpmath.mpf(a.numerator) / a.denominator * eps


def number(x):
    return mpmath.mpf(int(x.p)) / int(x.q)


def complex_number(x):
    return mpmath.mpc(number(x.re), number(x.im))


def summed(result, eps):
    """The Laurent series at a number eps."""
    return sum(value * eps**k for k, value in result.values.items())


def assert_series(result, expected, eps=EPS, tolerance="1e-18"):
    assert result.proven
    assert abs(summed(result, eps) - expected) <= mpmath.mpf(tolerance) * abs(expected)


def outer(powers, dimension, eps):
    """Gamma(nu - d/2) / (Gamma(nu1) Gamma(nu2)) and the exponent d/2 - nu of Q."""
    nu1, nu2 = (at(power, eps) for power in powers)
    exponent = mpmath.mpf(dimension) / 2 - eps - nu1 - nu2
    return mpmath.gamma(-exponent) * mpmath.rgamma(nu1) * mpmath.rgamma(nu2), exponent


def direct(point, powers, dimension, eps):
    """mpmath's integral of the Feynman representation at a number eps (SPEC: textbooks)."""
    nu1, nu2 = (at(power, eps) for power in powers)
    factor, s = outer(powers, dimension, eps)
    p, m1, m2 = (
        number(point.p_squared),
        complex_number(point.m1_squared),
        complex_number(point.m2_squared),
    )

    def integrand(x):
        q = x * m1 + (1 - x) * m2 - x * (1 - x) * p
        log = mpmath.log(mpmath.j * q) - mpmath.j * mpmath.pi / 2  # continuous for Im q <= 0
        return x ** (nu1 - 1) * (1 - x) ** (nu2 - 1) * mpmath.exp(s * log)

    path = [0, mpmath.mpf(1) / 2, 1]
    if p:
        x0 = (p - m1.real + m2.real) / (2 * p)
        if p > 0 and 0 < x0 < 1:  # Im Q = 2 p^2 b (a - x0) + ... at x = a + ib
            h = mpmath.mpf(1) / 5
            path = [0, x0 / 2 + mpmath.j * h, x0, (1 + x0) / 2 - mpmath.j * h, 1]
    return factor * mpmath.quad(integrand, path)


@pytest.mark.parametrize("case", GENERAL)
@pytest.mark.parametrize("powers", EPSILON_POWERS, ids=str)
def test_general_masses_at_a_number_eps(case, powers):
    point = two_point(*GENERAL[case])
    with mpmath.workdps(30):
        for dimension in (3, 4):
            result = integrate_feynman(point, powers, dimension, ORDERS, PLAIN, digits=30)
            assert result.reached_digits >= 30
            assert_series(result, direct(point, powers, dimension, EPS))


@pytest.mark.parametrize("digits", [16, 50, 100])
def test_as_many_digits_as_asked(digits):
    point, powers = two_point(10, 1, 2), ((1, 1), (2, Fraction(-1, 2)))
    result = integrate_feynman(point, powers, 4, (-1, 3), PLAIN, digits=digits)
    better = integrate_feynman(point, powers, 4, (-1, 3), PLAIN, digits=digits + 30)
    assert result.reached_digits >= digits
    for k in range(-1, 4):
        assert acb(result.balls[k]).overlaps(acb(better.balls[k]))
        error = abs(result.values[k] - better.values[k])
        with mpmath.workdps(digits + 20):
            assert error <= mpmath.mpf(10) ** -digits * abs(better.values[k])


def massive_line(p, m, n_massless, n_massive, dimension, eps):
    """E. E. Boos, A. I. Davydychev, Theor. Math. Phys. 89 (1991) 1052 (from memory).

    Gamma(d/2-a) Gamma(a+b-d/2) / (Gamma(d/2) Gamma(b)) (m^2)^(d/2-a-b)
    * 2F1(a+b-d/2, a; d/2; p^2/m^2), a the power of the massless line.
    """
    a, b = at(n_massless, eps), at(n_massive, eps)
    half = mpmath.mpf(dimension) / 2 - eps
    z = mpmath.mpf(p) / m
    if z == 1:  # Gauss, DLMF 15.4.20
        value = mpmath.gammaprod([half, 2 * half - 2 * a - b], [2 * half - a - b, half - a])
    else:
        value = mpmath.hyp2f1(a + b - half, a, half, z)
        if z > 1:  # mpmath gives z - i0, as for 2F1(1,1;2;z) = -log(1-z)/z (DLMF 15.4.1)
            assert mpmath.hyp2f1(1, 1, 2, z).imag < 0
            value = mpmath.conj(value)
    return (
        mpmath.gammaprod([half - a, a + b - half], [half, b])
        * mpmath.mpf(m) ** (half - a - b)
        * value
    )


ONE_MASSLESS_POWERS = [
    (1, 1),
    (2, 1),
    (1, 3),
    (4, 4),
    ((1, 1), 1),
    (1, (1, 1)),
    ((2, 1), (1, Fraction(1, 2))),
    ((3, Fraction(1, 3)), (2, 2)),
    ((0, 1), (2, 1)),
    ((-2, 1), 1),
    ((1, 1), (-1, 2)),
]


@pytest.mark.parametrize("p", [-1, 1, 2, 5])
@pytest.mark.parametrize("powers", ONE_MASSLESS_POWERS, ids=str)
def test_one_massless_line(p, powers):
    massless, massive = powers
    with mpmath.workdps(40):
        for dimension in (1, 4, 5, 8):
            expected = massive_line(p, 2, massless, massive, dimension, EPS)
            for point, ordered in (
                (two_point(p, 0, 2), powers),
                (two_point(p, 2, 0), powers[::-1]),
            ):
                result = integrate_feynman(point, ordered, dimension, ORDERS, PLAIN, digits=30)
                assert_series(result, expected)


@pytest.mark.parametrize("p", [-3, 3])
@pytest.mark.parametrize("powers", [*ONE_MASSLESS_POWERS, (2, 6), ((-1, 1), (0, 2))], ids=str)
def test_both_massless_lines(p, powers):
    """The G-function with any powers.

    K. G. Chetyrkin, A. L. Kataev, F. V. Tkachov, Nucl. Phys. B 174 (1980) 345 (from memory).
    """
    with mpmath.workdps(40):
        nu1, nu2 = (at(power, EPS) for power in powers)
        for dimension in (2, 3, 4, 6):
            half = mpmath.mpf(dimension) / 2 - EPS
            log = mpmath.log(3) - (mpmath.j * mpmath.pi if p > 0 else 0)
            expected = mpmath.exp((half - nu1 - nu2) * log) * mpmath.gammaprod(
                [half - nu1, half - nu2, nu1 + nu2 - half], [nu1, nu2, 2 * half - nu1 - nu2]
            )
            result = integrate_feynman(
                two_point(p, 0, 0), powers, dimension, ORDERS, PLAIN, digits=30
            )
            assert_series(result, expected)


@pytest.mark.parametrize(
    "powers", [(1, 1), (2, 1), (6, 6), ((1, 1), 2), ((2, -2), (1, 3))], ids=str
)
@pytest.mark.parametrize("dimension", [1, 2, 3, 4, 7])
def test_threshold_with_equal_masses(powers, dimension):
    """With x = (1-+y)/2 and Q = m^2 y^2 each half is Euler's integral, DLMF 15.6.1."""
    m = mpmath.mpf(2)
    with mpmath.workdps(40):
        factor, s = outer(powers, dimension, EPS)
        nu1, nu2 = (at(power, EPS) for power in powers)

        def half(a, b):
            # Int_0^1 y^(2s) (1-y)^(a-1) (1+y)^(b-1) dy
            c = 2 * s + 1
            beta = mpmath.gammaprod([c, a], [c + a])
            return beta * mpmath.hyp2f1(1 - b, c, c + a, -1)

        expected = factor * m**s * 2 ** (1 - nu1 - nu2) * (half(nu1, nu2) + half(nu2, nu1))
        exact = integrate_feynman(two_point(8, 2, 2), powers, dimension, ORDERS, PLAIN, digits=30)
        moved = integrate_feynman(
            two_point("8.1", 2, 2, Region.THRESHOLD), powers, dimension, ORDERS, PLAIN, digits=30
        )
        assert_series(exact, expected)
        assert_series(moved, expected)


@pytest.mark.parametrize(
    "powers", [((0, 1), (2, 1)), ((-3, 1), 1), ((-1, 2), (-2, 1)), ((0, 1), (0, -3)), (3, (1, 1))],
    ids=str,
)  # fmt: skip
def test_equal_masses_at_rest_are_one_propagator(powers):
    # At p = 0 only the sum of the powers counts: a tadpole, Gamma(nu-d/2)/Gamma(nu) (m^2)^(d/2-nu).
    total = sum(n for n, _ in map(pair, powers)), sum(a for _, a in map(pair, powers))
    with mpmath.workdps(40):
        for dimension in (3, 4):
            half, nu = mpmath.mpf(dimension) / 2 - EPS, at(total, EPS)
            expected = mpmath.gamma(nu - half) * mpmath.rgamma(nu) * mpmath.mpf(2) ** (half - nu)
            bubble = integrate_feynman(two_point(0, 2, 2), powers, dimension, ORDERS, PLAIN)
            tadpole = integrate_feynman(
                OnePoint(exact_complex(2)), (total,), dimension, ORDERS, PLAIN, digits=30
            )
            assert_series(tadpole, expected)
            for k in range(ORDERS[0], ORDERS[1] + 1):
                assert acb(bubble.balls[k]).overlaps(acb(tadpole.balls[k]))


@pytest.mark.parametrize("measure", list(Measure))
@pytest.mark.parametrize("sign", list(PropagatorSign))
def test_conventions(measure, sign):
    """Phase exp(-i pi nu), (mu^2)^eps and the measure, by their definitions."""
    point, powers, mu = two_point(10, 1, 2), ((1, 1), (2, Fraction(1, 2))), fmpq(3, 2)
    with mpmath.workdps(30):
        expected = direct(point, powers, 4, EPS) * mpmath.mpf(1.5) ** EPS
        if sign is PropagatorSign.MINKOWSKI:
            expected *= mpmath.exp(-mpmath.j * mpmath.pi * sum(at(power, EPS) for power in powers))
        gamma = mpmath.gamma
        expected *= {
            Measure.PLAIN: mpmath.mpf(1),
            Measure.MSBAR: mpmath.exp(mpmath.euler * EPS),
            Measure.GAMMA: 1 / gamma(1 + EPS),
            Measure.R_GAMMA: gamma(1 - 2 * EPS) / gamma(1 + EPS) / gamma(1 - EPS) ** 2,
            Measure.TWO_PI: (4 * mpmath.pi) ** (EPS - 2),
        }[measure]
        conventions = Conventions(measure, sign, mu)
        assert_series(integrate_feynman(point, powers, 4, ORDERS, conventions, digits=30), expected)
        other = integrate_feynman(
            point, powers, 4, (-3, 5), conventions, digits=25, arithmetic="mpmath"
        )
        assert abs(summed(other, EPS) - expected) <= mpmath.mpf("1e-16") * abs(expected)


# Every kinematic case with an infrared end, a threshold, or none: (p^2, m1^2, m2^2).
EVERY_CASE = {
    **GENERAL,
    "equal masses": (2, 1, 1),
    "threshold": (4, 1, 1),
    "threshold, different masses": (9, 1, 4),
    "pseudothreshold": (1, 1, 4),
    "massless": (3, 0, 0),
    "massless, spacelike": (-3, 0, 0),
    "one massless, above": (5, 2, 0),
    "one massless, below": (1, 2, 0),
    "on shell": (2, 2, 0),
    "on shell, exchanged": (2, 0, 2),
    "p^2 = 0, one massless": (0, 1, 0),
    "complex and massless": (1, (1, "-0.2"), 0),
}


@pytest.mark.parametrize("case", EVERY_CASE)
@pytest.mark.parametrize(
    ("powers", "dimension"), [((2, 1), 4), ((1, 1), 1), ((3, 4), 3), ((2, 3), 6), ((6, 2), 4)]
)
def test_dots_and_infrared_poles_against_the_closed_forms(case, powers, dimension):
    point, orders = two_point(*EVERY_CASE[case]), (-3, 2)
    closed = evaluate(Integral.parse("bubble", powers, dimension, orders), point, PLAIN, digits=30)
    result = integrate_feynman(point, powers, dimension, orders, PLAIN)
    assert result.reached_digits >= 12
    for k in range(orders[0], orders[1] + 1):
        assert acb(result.balls[k]).overlaps(acb(closed.series[k])), k


REPRESENTATIVE = [
    "above threshold",
    "threshold",
    "massless",
    "one massless, above",
    "on shell",
    "one complex mass",
    "complex and massless",
]


@pytest.mark.parametrize("case", REPRESENTATIVE)
@pytest.mark.parametrize(
    "powers", [((1, 1), 1), ((2, 1), (1, Fraction(1, 2))), ((0, 1), 3)], ids=str
)
def test_two_arithmetics(case, powers):
    point = two_point(*EVERY_CASE[case])
    balls = integrate_feynman(point, powers, 4, (-2, 1), PLAIN, digits=14)
    other = integrate_feynman(point, powers, 4, (-2, 1), PLAIN, digits=10, arithmetic="mpmath")
    assert other.reached_digits >= 10
    with mpmath.workdps(60):
        for k in range(-2, 2):
            assert abs(balls.values[k] - other.values[k]) <= balls.errors[k] + other.errors[k]


rates = st.builds(Fraction, st.sampled_from([-5, -3, -1, 1, 2, 4]), st.sampled_from([1, 2, 3]))


@given(st.sampled_from(list(EVERY_CASE)), st.integers(1, 3), st.integers(1, 3), rates, rates,
       st.integers(1, 8))  # fmt: skip
@settings(max_examples=120, deadline=None)
def test_integration_by_parts(case, n1, n2, a1, a2, dimension):
    """Int d^dq (d/dq)(q f) = 0 with propagators 1/(q^2-m1^2), 1/((q+p)^2-m2^2).

    (d - 2 nu1 - nu2) P - 2 m1^2 nu1 1+ P - nu2 2+ (1- + m1^2 + m2^2 - p^2) P = 0,
    K. G. Chetyrkin, F. V. Tkachov, Nucl. Phys. B 192 (1981) 159 (derived by hand).
    """
    point, orders = two_point(*EVERY_CASE[case]), (-3, 2)

    def shifted(first, second):
        powers = ((n1 + first, a1), (n2 + second, a2))
        conventions = Conventions(Measure.MSBAR, PropagatorSign.MINKOWSKI, fmpq(2, 3))
        return integrate_feynman(point, powers, dimension, orders, conventions, digits=20).balls

    try:
        itself, dotted = shifted(0, 0), shifted(1, 0)
        other, lowered = shifted(0, 1), shifted(-1, 1)
    except UnregulatedError:
        assume(False)
    nu1 = EpsilonLinear.of(n1, fmpq(a1.numerator, a1.denominator))
    nu2 = EpsilonLinear.of(n2, fmpq(a2.numerator, a2.denominator))
    total = EpsilonLinear.of(dimension, -2) - nu1 - nu1 - nu2
    with working_precision(200):
        m1, m2 = acb(point.m1_squared.ball()), acb(point.m2_squared.ball())
        p = acb(arb(point.p_squared))

        def times(linear, series, k):
            below = series[k - 1] if k > orders[0] else arb(0)  # starts at eps^-2 or above
            return acb(arb(linear.constant)) * series[k] + acb(arb(linear.rate)) * below

        for k in range(orders[0], orders[1] + 1):
            parts = (
                times(total, itself, k),
                -2 * m1 * times(nu1, dotted, k),
                -times(nu2, lowered, k),
                -(m1 + m2 - p) * times(nu2, other, k),
            )
            residual = sum(parts, acb(0))
            assert residual.contains(0), k
            size = max(float(abs(part).upper()) for part in parts)
            assert abs(residual) <= max(size, 1e-9) * 1e-9, k  # the balls are not just wide


def test_orders_below_the_pole_are_exact_zeros():
    result = integrate_feynman(two_point(10, 1, 2), ((1, 1), 1), 4, (-4, 0), PLAIN)
    assert [result.balls[k] for k in (-4, -3, -2)] == [0, 0, 0]
    # Gamma(eps-pole)/Gamma(nu1) ... : the first order is Gamma's, 1/2 of Int dx = 1 (by hand:
    # nu - d/2 = 2 eps for nu1 = 1 + eps, so 1/(2 eps)).
    assert result.balls[-1].contains(fmpq(1, 2))
    # On shell with polynomial R the would-be pole is an exact zero: Int x^(-4-2eps) (1-x) dx has
    # poles from 1 and x only, that is at x^-1 and x^-2.
    on_shell = integrate_feynman(two_point(2, 2, 0), (1, 2), 3, (-2, 0), PLAIN)
    assert on_shell.balls[-1] == 0


def test_unregulated_powers_are_refused():
    cases = [
        (two_point(10, 1, 2), ((1, 1), (1, -2)), 4, "Gamma"),  # nu - d/2 = 0 at every eps
        (two_point(3, 0, 0), ((2, -1), 1), 4, "x = 1"),  # Gamma(d/2 - nu1) = Gamma(0)
        (two_point(2, 2, 0), ((1, -2), 2), 2, "x = 0"),  # x^(a1 - 2 - 2 a1) = x^0
        (two_point(4, 1, 1), ((1, -1), 1), 3, "threshold"),  # 2 (1 + a1 + a2) = 0
    ]
    for point, powers, dimension, named in cases:
        with pytest.raises(UnregulatedError, match=named):
            integrate_feynman(point, powers, dimension, (-1, 0), PLAIN)


def test_threshold_is_regular_in_even_dimensions_at_any_rate():
    # |y|^(-2) has no resonance with even functions: continued, Int_(-1)^1 |y|^(-2) dy = -2.
    # Q = y^2, dx = dy/2, Gamma(2)/(Gamma(1) Gamma(2)) = 1, and the odd part of x drops out:
    # Int_0^1 (1-x) Q^(-1) dx = -1/2 in d = 4 - 2 eps with a1 = -1, where nothing depends on eps
    # but Gamma(nu1) and x^(a1 eps).
    result = integrate_feynman(two_point(4, 1, 1), ((1, -1), 2), 4, (-1, 0), PLAIN)
    assert result.balls[-1] == 0
    assert result.balls[0].contains(fmpq(-1, 2))


@pytest.mark.parametrize("powers", [((0, 0), 1), (1, -2), ((-1, 0), (1, 1))])
def test_numerators_are_refused(powers):
    for point in (two_point(10, 1, 2), two_point(3, 0, 0)):
        with pytest.raises(UnsupportedIntegralError, match="at least 1"):
            integrate_feynman(point, powers, 4, (-1, 0), PLAIN)


def test_scaleless_integrals_are_zero():
    for powers in (((1, 1), 1), (0, 2), ((0, 1), (1, -2))):
        result = integrate_feynman(two_point(0, 0, 0), powers, 4, (-2, 1), PLAIN)
        assert all(ball == 0 for ball in result.balls.values())


@pytest.mark.parametrize(
    "power", [1.0, True, "1", (1, 0.5), (1.0, 1), (1, "1/2"), (1, True), (1, 1, 1), None]
)
def test_malformed_powers(power):
    with pytest.raises(InputError, match="accepted"):
        integrate_feynman(two_point(10, 1, 2), (power, 1), 4, (-1, 0), PLAIN)
