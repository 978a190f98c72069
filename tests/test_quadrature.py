"""The Feynman-parameter cross-check: against textbooks, itself in two arithmetics, closed forms."""

from __future__ import annotations

import itertools

import flint
import mpmath
import pytest
from flint import acb, arb, fmpq
from hypothesis import given, settings
from hypothesis import strategies as st

from loopint.core.conventions import Conventions, Measure
from loopint.core.epsilon_linear import EpsilonLinear
from loopint.core.errors import InputError, UnsupportedIntegralError
from loopint.core.kinematics import OnePoint, Region, TwoPoint
from loopint.core.numbers import exact_complex, exact_real
from loopint.core.precision import working_precision
from loopint.integrals.registry import Integral, evaluate
from loopint.quadrature import integrate_feynman
from loopint.quadrature.balls import BALLS, gauss_legendre, integrate
from loopint.quadrature.exponents import Integrand
from loopint.quadrature.paths import build_path, zero_orders

MSBAR = Conventions()


def two_point(p, m1, m2, snapped_onto=None) -> TwoPoint:
    return TwoPoint(exact_real(p), exact_complex(m1), exact_complex(m2), snapped_onto)


# Every kinematic case of a bubble: (p^2, m1^2, m2^2).
CASES = {
    "below threshold": (1, 1, 2),
    "equal masses": (2, 1, 1),
    "above threshold": (10, 1, 2),
    "threshold": (4, 1, 1),
    "threshold, different masses": (9, 1, 4),
    "pseudothreshold": (1, 1, 4),
    "below pseudothreshold": ("1/2", 1, 4),
    "spacelike": (-3, 1, 2),
    "massless": (3, 0, 0),
    "massless, spacelike": (-3, 0, 0),
    "one massless, above": (5, 2, 0),
    "one massless, below": (1, 2, 0),
    "one massless, spacelike": (-1, 0, 2),
    "on shell": (2, 2, 0),
    "on shell, exchanged": (2, 0, 2),
    "p^2 = 0, equal masses": (0, 1, 1),
    "p^2 = 0, different masses": (0, 1, 3),
    "p^2 = 0, one massless": (0, 1, 0),
    "scaleless": (0, 0, 0),
    "tiny mass ratio": (1, "1e-40", 1),
    "tiny mass ratio, spacelike": (-1, "1e-40", 1),
    "tiny mass ratio, above": (3, "1e-40", 1),
    "tiny p^2": ("1e-30", 1, 2),
    "tiny negative p^2": ("-1e-30", 1, 1),
    "huge p^2": ("1e30", 1, 2),
    "huge negative p^2": ("-1e30", 1, 2),
    "one ulp above threshold": (4.000000000000001, 1, 1),
    "one ulp below threshold": (3.9999999999999996, 1, 1),
    "one ulp below pseudothreshold": (0.9999999999999999, 1, 4),
    "1e-40 above threshold": ("4.0000000000000000000000000000000000000001", 1, 1),
    "one complex mass": (10, (1, "-0.1"), 2),
    "two complex masses": (10, (1, "-0.1"), (2, -1)),
    "tiny widths": (10, (1, "-1e-30"), (2, "-1e-30")),
    "tiny widths at threshold": (4, (1, "-1e-10"), (1, "-1e-12")),
    "large widths": (10, (1, -100), (2, -50)),
    "complex and massless": (1, (1, "-1e-20"), 0),
    "complex, p^2 = 0": (0, (1, "-0.5"), (1, "-0.5")),
    "complex, spacelike": (-2, (1, "-0.5"), 1),
    "negative real part": (3, (-1, "-1e-10"), 1),
}


def assert_same(first, second, orders):
    """Two results agree within their errors."""
    with mpmath.workdps(80):
        for k in range(orders[0], orders[1] + 1):
            distance = abs(first.values[k] - second.values[k])
            assert distance <= first.errors[k] + second.errors[k], k


@pytest.mark.parametrize("case", CASES)
def test_balls_overlap_the_closed_form_and_reach_their_digits(case):
    point = two_point(*CASES[case])
    orders = (-2, 3)
    closed = evaluate(Integral.parse("bubble", (1, 1), 4, orders), point, MSBAR, digits=40)
    result = integrate_feynman(point, (1, 1), 4, orders, MSBAR)
    assert result.proven
    assert result.reached_digits >= 12
    for k in range(orders[0], orders[1] + 1):
        assert acb(result.balls[k]).overlaps(acb(closed.series[k])), k


@pytest.mark.parametrize("case", CASES)
def test_mpmath_arithmetic_agrees_with_the_balls(case):
    point, orders = two_point(*CASES[case]), (-1, 2)
    balls = integrate_feynman(point, (1, 1), 4, orders, MSBAR, digits=14)
    other = integrate_feynman(point, (1, 1), 4, orders, MSBAR, digits=10, arithmetic="mpmath")
    assert not other.proven
    # One coefficient is -1/6 1e-30 and comes out of a cancellation: see its own test.
    assert case == "tiny negative p^2" or other.reached_digits >= 10
    assert_same(balls, other, orders)


def test_real_cases_give_real_balls():
    # Below threshold the integral is real: unitarity, any textbook.
    for case in ("below threshold", "threshold", "spacelike", "on shell", "p^2 = 0, equal masses"):
        result = integrate_feynman(two_point(*CASES[case]), (1, 1), 4, (-1, 3), MSBAR)
        assert all(isinstance(ball, arb) for ball in result.balls.values())
        assert all(value.imag == 0 for value in result.values.values())


@pytest.mark.parametrize("case", ["above threshold", "massless", "one ulp above threshold"])
def test_high_orders_and_many_digits(case):
    point = two_point(*CASES[case])
    closed = evaluate(Integral.parse("bubble", (1, 1), 4, (-1, 8)), point, MSBAR, digits=50)
    result = integrate_feynman(point, (1, 1), 4, (-1, 8), MSBAR, digits=40)
    assert result.reached_digits >= 40
    for k in range(-1, 9):
        assert acb(result.balls[k]).overlaps(acb(closed.series[k])), k


def _beta():
    return mpmath.sqrt(1 - 4 / mpmath.mpf(-5))


class TestTextbooks:
    """B0 and A0 as in A. Denner, arXiv:0709.1075 (special cases quoted from memory)."""

    @pytest.mark.parametrize("arithmetic", ["balls", "mpmath"])
    @pytest.mark.parametrize(
        ("point", "finite"),
        [
            # B0(0; m, m) = 1/eps - log m^2/mu^2
            ((0, 2, 2), lambda: -mpmath.log(2)),
            # B0(0; 0, m) = 1/eps + 1 - log m^2/mu^2
            ((0, 2, 0), lambda: 1 - mpmath.log(2)),
            # B0(m^2; 0, m) = 1/eps + 2 - log m^2/mu^2
            ((2, 0, 2), lambda: 2 - mpmath.log(2)),
            # B0(4 m^2; m, m) = 1/eps + 2 - log m^2/mu^2
            ((12, 3, 3), lambda: 2 - mpmath.log(3)),
            # B0(p^2; 0, 0) = 1/eps + 2 - log(-p^2/mu^2 - i0)
            ((5, 0, 0), lambda: 2 - mpmath.log(5) + mpmath.j * mpmath.pi),
            ((-5, 0, 0), lambda: 2 - mpmath.log(5)),
            # B0(p^2; 0, m) = 1/eps + 2 - log m^2/mu^2 + (m^2-p^2)/p^2 log((m^2-p^2-i0)/m^2)
            ((1, 0, 3), lambda: 2 - mpmath.log(3) + 2 * mpmath.log(mpmath.mpf(2) / 3)),
            (
                (6, 3, 0),
                lambda: 2 - mpmath.log(3) - mpmath.mpf(1) / 2 * (-mpmath.j * mpmath.pi),
            ),
            # B0(p^2; m, m) = 1/eps + 2 - log m^2/mu^2 + beta log((beta-1)/(beta+1)), p^2 < 0
            (
                (-5, 1, 1),
                lambda: 2 + _beta() * mpmath.log((_beta() - 1) / (_beta() + 1)),
            ),
        ],
    )
    def test_pole_and_finite_part(self, point, finite, arithmetic):
        result = integrate_feynman(
            two_point(*point), (1, 1), 4, (-1, 0), MSBAR, digits=15, arithmetic=arithmetic
        )
        with mpmath.workdps(40):
            assert abs(result.values[-1] - 1) <= result.errors[-1]
            assert abs(result.values[0] - finite()) <= result.errors[0] < mpmath.mpf("1e-14")

    @pytest.mark.parametrize(
        "point", [(10, 1, 2), (4.000000000000001, 1, 1), ("1e30", 1, 2), (5, 2, 0), (3, 0, 0)]
    )
    def test_unitarity(self, point):
        # Cutkosky: Im B0 = pi sqrt(lambda)/p^2 above threshold (any textbook).
        kinematics = two_point(*point)
        result = integrate_feynman(kinematics, (1, 1), 4, (0, 0), MSBAR, digits=15)
        with working_precision(200):
            p = arb(kinematics.p_squared)
            expected = arb.pi() * arb(kinematics.kallen.re).sqrt() / p
            assert result.balls[0].imag.overlaps(expected)
            assert result.balls[0].imag.rad() < arb("1e-12") * abs(result.balls[0]).upper()

    def test_expansion_at_small_momentum(self):
        # B0(p^2; m, m) = 1/eps - log m^2 + p^2/(6 m^2) + ... (vacuum polarisation, any textbook)
        result = integrate_feynman(two_point("-1e-30", 1, 1), (1, 1), 4, (0, 0), MSBAR)
        assert mpmath.almosteq(result.values[0].real, mpmath.mpf("-1e-30") / 6, rel_eps=1e-12)

    @pytest.mark.parametrize("dimension", [3, 4, 5, 6, 7])
    @pytest.mark.parametrize("p", [-2, 2])
    def test_massless_g_function(self, dimension, p):
        """Gamma(2-d/2) Gamma(d/2-1)^2 / Gamma(d-2) (-p^2-i0)^(d/2-2).

        K. G. Chetyrkin, F. V. Tkachov, Nucl. Phys. B 192 (1981) 159 (from memory).
        """
        orders = (-1, 2)
        result = integrate_feynman(
            two_point(p, 0, 0), (1, 1), dimension, orders, Conventions(measure=Measure.PLAIN)
        )
        with mpmath.workdps(60):

            def times_eps(eps):
                d = dimension - 2 * eps
                log = mpmath.log(2) - (mpmath.j * mpmath.pi if p > 0 else 0)
                # eps Gamma(2-d/2), written so that it is regular at eps = 0
                pole = {4: mpmath.gamma(1 + eps), 6: mpmath.gamma(1 + eps) / (eps - 1)}.get(
                    dimension
                ) or eps * mpmath.gamma(2 - d / 2)
                return (
                    pole
                    * mpmath.gamma(d / 2 - 1) ** 2
                    / mpmath.gamma(d - 2)
                    * mpmath.exp((d / 2 - 2) * log)
                )

            expected = mpmath.taylor(times_eps, 0, 3)
            for k in range(-1, 3):
                error = abs(result.values[k] - expected[k + 1])
                assert error <= result.errors[k] + mpmath.mpf("1e-30"), k

    def test_tadpole(self):
        # A(1) = m^2 (1/eps + 1 - log m^2/mu^2), same source
        conventions = Conventions(mu_squared=fmpq(3))
        for arithmetic in ("balls", "mpmath"):
            result = integrate_feynman(
                OnePoint(exact_complex(2)), (1,), 4, (-1, 0), conventions, arithmetic=arithmetic
            )
            with mpmath.workdps(40):
                assert abs(result.values[-1] - 2) <= result.errors[-1]
                finite = 2 * (1 - mpmath.log(mpmath.mpf(2) / 3))
                assert abs(result.values[0] - finite) <= result.errors[0]


@pytest.mark.parametrize("dimension", range(1, 13))
@pytest.mark.parametrize("m_squared", ["1/3", (2, "-1e-5"), (-1, "-0.3")])
def test_tadpoles_agree_with_the_closed_form(dimension, m_squared):
    point = OnePoint(exact_complex(m_squared))
    orders = (-2, 3)
    for power, measure in itertools.product((-1, 0, 1, 2, 5, 7), Measure):
        conventions = Conventions(measure=measure, mu_squared=fmpq(7, 5))
        integral = Integral.parse("tadpole", (power,), dimension, orders)
        closed = evaluate(integral, point, conventions, digits=30)
        rounded = closed.rounded()
        balls = integrate_feynman(point, (power,), dimension, orders, conventions)
        other = integrate_feynman(
            point, (power,), dimension, orders, conventions, arithmetic="mpmath"
        )
        assert min(balls.reached_digits, other.reached_digits) >= 12
        with mpmath.workdps(60):
            for k in range(orders[0], orders[1] + 1):
                assert acb(balls.balls[k]).overlaps(acb(closed.series[k]))
                assert abs(other.values[k] - rounded[k]) <= other.errors[k] + rounded.bounds[k]


@pytest.mark.parametrize("dimension", [1, 2, 3, 4, 5, 8, 11])
@pytest.mark.parametrize("powers", [(1, 1), (2, 1), (1, 3), (4, 2)])
def test_two_equal_propagators_are_one(dimension, powers):
    # At p = 0 with equal masses the bubble is a tadpole with the sum of the powers.
    for m in (2, (2, "-0.7")):
        bubble = integrate_feynman(two_point(0, m, m), powers, dimension, (-1, 2), MSBAR)
        tadpole = integrate_feynman(
            OnePoint(exact_complex(m)), (sum(powers),), dimension, (-1, 2), MSBAR
        )
        for k in range(-1, 3):
            assert acb(bubble.balls[k]).overlaps(acb(tadpole.balls[k]))
        assert bubble.reached_digits >= 12


@pytest.mark.parametrize("case", ["below threshold", "above threshold", "one complex mass"])
@pytest.mark.parametrize("dimension", [2, 4, 5])
def test_a_dot_is_a_mass_derivative(case, dimension):
    # dB/dm1^2 = B(2,1): differentiate 1/(q^2 - m1^2).  Central difference, error O(step^2).
    p, m1, m2 = CASES[case]
    step = exact_complex("1e-12")
    first = exact_complex(m1)

    def value(mass, powers):
        point = TwoPoint(exact_real(p), mass, exact_complex(m2))
        return integrate_feynman(point, powers, dimension, (-1, 1), MSBAR, digits=40).values

    up, down, dotted = (
        value(first + step, (1, 1)),
        value(first - step, (1, 1)),
        value(first, (2, 1)),
    )
    with mpmath.workdps(50):
        for k in range(-1, 2):
            slope = (up[k] - down[k]) / mpmath.mpf("2e-12")
            assert abs(slope - dotted[k]) < mpmath.mpf("1e-20")


@pytest.mark.parametrize("dimension", [1, 3, 4, 5, 6, 9, 12])
@pytest.mark.parametrize("powers", [(1, 1), (2, 1), (1, 2), (3, 2)])
def test_other_powers_and_dimensions_in_two_arithmetics(dimension, powers):
    for case in ("below threshold", "above threshold", "threshold", "massless", "one complex mass"):
        point = two_point(*CASES[case])
        balls = integrate_feynman(point, powers, dimension, (-1, 1), MSBAR)
        other = integrate_feynman(
            point, powers, dimension, (-1, 1), MSBAR, digits=10, arithmetic="mpmath"
        )
        assert balls.reached_digits >= 12
        assert_same(balls, other, (-1, 1))


def test_a_pole_that_vanishes_is_exactly_zero():
    # Int (1-x) Q dx = (10/12) - (11/6) + 1 = 0 for p^2 = 10, m1^2 = 1, m2^2 = 2 (by hand)
    point = two_point(10, 1, 2)
    result = integrate_feynman(point, (1, 2), 8, (-1, 1), MSBAR)
    assert result.balls[-1] == 0
    assert result.reached_digits >= 12
    other = integrate_feynman(point, (1, 2), 8, (-1, 1), MSBAR, arithmetic="mpmath")
    assert_same(result, other, (-1, 1))


@pytest.mark.parametrize(
    ("region", "point"),
    [
        (Region.THRESHOLD, ("5.8", 1, 2)),
        (Region.THRESHOLD, (4, 1, 1)),
        (Region.PSEUDOTHRESHOLD, ("0.17", 1, 2)),
        (Region.PSEUDOTHRESHOLD, ("0.17", 2, 1)),
        (Region.ON_SHELL, ("2.0001", 2, 0)),
    ],
)
def test_snapped_points(region, point):
    moved = two_point(*point, snapped_onto=region)
    closed = evaluate(Integral.parse("bubble", (1, 1), 4, (-1, 2)), moved, MSBAR, digits=30)
    balls = integrate_feynman(moved, (1, 1), 4, (-1, 2), MSBAR)
    other = integrate_feynman(moved, (1, 1), 4, (-1, 2), MSBAR, arithmetic="mpmath")
    assert min(balls.reached_digits, other.reached_digits) >= 12
    assert_same(balls, other, (-1, 2))
    for k in range(-1, 3):
        assert acb(balls.balls[k]).overlaps(acb(closed.series[k]))


@pytest.mark.parametrize("measure", list(Measure))
@pytest.mark.parametrize("sign", ["minkowski", "euclidean"])
def test_conventions(measure, sign):
    conventions = Conventions.parse(measure, sign, "2/3")
    for powers, dimension, case in (
        ((1, 1), 4, "above threshold"),
        ((2, 1), 4, "below threshold"),
        ((1, 1), 3, "one complex mass"),
    ):
        point = two_point(*CASES[case])
        balls = integrate_feynman(point, powers, dimension, (-1, 3), conventions)
        other = integrate_feynman(
            point, powers, dimension, (-1, 3), conventions, arithmetic="mpmath"
        )
        assert_same(balls, other, (-1, 3))
        if powers == (1, 1) and dimension == 4:
            integral = Integral.parse("bubble", powers, dimension, (-1, 3))
            closed = evaluate(integral, point, conventions, digits=30)
            for k in range(-1, 4):
                assert acb(balls.balls[k]).overlaps(acb(closed.series[k]))


numbers = st.one_of(
    st.integers(0, 3),
    st.floats(0, 10, allow_nan=False),
    st.builds(lambda m, e: f"{m}e{e}", st.integers(1, 999), st.integers(-30, 10)),
)
masses = st.one_of(numbers, st.tuples(numbers, numbers.map(lambda x: -exact_real(x))))
momenta = st.builds(lambda x, s: s * exact_real(x), numbers, st.sampled_from([1, -1]))


@given(momenta, masses, masses)
@settings(max_examples=80, deadline=None)
def test_low_precision_balls_hold_the_high_precision_value(p, m1, m2):
    point = two_point(p, m1, m2)
    low = integrate_feynman(point, (1, 1), 4, (-1, 2), MSBAR, digits=6)
    high = integrate_feynman(point, (1, 1), 4, (-1, 2), MSBAR, digits=25)
    for k in range(-1, 3):
        assert acb(low.balls[k]).overlaps(acb(high.balls[k]))


@given(momenta, masses, masses)
@settings(max_examples=50, deadline=None)
def test_symmetry_and_scaling(p, m1, m2):
    point = two_point(p, m1, m2)
    direct = integrate_feynman(point, (1, 1), 4, (-1, 2), MSBAR)
    exchanged = integrate_feynman(point.exchanged(), (1, 1), 4, (-1, 2), MSBAR)
    scaled = integrate_feynman(
        point.scaled(fmpq(7, 3)), (1, 1), 4, (-1, 2), Conventions(mu_squared=fmpq(7, 3))
    )
    for k in range(-1, 3):
        assert acb(direct.balls[k]).overlaps(acb(exchanged.balls[k]))
        assert acb(direct.balls[k]).overlaps(acb(scaled.balls[k]))


@given(momenta, masses, masses)
@settings(max_examples=60, deadline=None)
def test_q_has_no_positive_imaginary_part_on_the_path(p, m1, m2):
    point = two_point(p, m1, m2)
    if point.region is Region.SCALELESS:
        return
    with working_precision(300):
        path = build_path(point, BALLS)
        total = arb(0)
        for leg in path.legs:
            total = total + leg.orientation * leg.end
            for t in (fmpq(1, 1000), fmpq(1, 4), fmpq(1, 2), fmpq(3, 4), fmpq(1)):
                u = leg.end * arb(t)
                c0, c1, c2 = leg.quadratic
                q = acb(c0 + u * (c1 + u * c2))
                x = leg.anchor + u
                again = x * acb(*_parts(point.m1_squared)) + (1 - x) * acb(
                    *_parts(point.m2_squared)
                )
                again -= x * (1 - x) * arb(point.p_squared)
                assert q.overlaps(acb(again))  # Q of the definition
                assert not q.imag > 0
                if path.is_real:
                    assert not q.real < 0
        assert acb(total).overlaps(acb(1))


def _parts(value):
    return arb(value.re), arb(value.im)


def test_moments_of_a_logarithm():
    # Q = x for p^2 = 0, m1^2 = 1, m2 = 0, and Int_0^1 x^(-eps) dx = 1/(1-eps) (elementary).
    zero = EpsilonLinear.of(0, 0)
    with working_precision(100):
        path = build_path(two_point(0, 1, 0), BALLS)
        quadratic = EpsilonLinear.of(0, -1)
        for moment in integrate(path, Integrand(zero, zero, quadratic, 12)):
            assert moment.contains(1)
            assert moment.rad() < arb("1e-22")
        # Int_0^1 x^(1 - 1/2 - eps) dx = 1/(3/2 - eps)
        first, quadratic = EpsilonLinear.of(1, 0), EpsilonLinear.of("-1/2", -1)
        for k, moment in enumerate(integrate(path, Integrand(first, zero, quadratic, 6))):
            assert moment.overlaps(arb(fmpq(2, 3) ** (k + 1)))
            assert moment.rad() < arb("1e-22")


def test_gauss_legendre_rule_is_exact_for_polynomials():
    with working_precision(80):
        for n in (2, 5, 12):
            rule = gauss_legendre(n, is_real=True)
            assert len(rule) == n
            for degree in range(2 * n):
                exact = fmpq(2, degree + 1) if degree % 2 == 0 else fmpq(0)
                assert sum((w * x**degree for x, w in rule), arb(0)).overlaps(arb(exact))


def test_zero_orders():
    assert zero_orders(two_point(1, 1, 0)) == (2, 0, 0)  # on shell: Q = p^2 x^2
    assert zero_orders(two_point(1, 0, 1)) == (0, 2, 0)
    assert zero_orders(two_point(3, 0, 0)) == (1, 1, 0)
    assert zero_orders(two_point(4, 1, 1)) == (0, 0, 2)
    assert zero_orders(two_point(1, 1, 4)) == (0, 0, 0)


def test_scaleless_and_trivial_integrals_are_exactly_zero():
    for arithmetic in ("balls", "mpmath"):
        for point, powers in (
            (two_point(0, 0, 0), (1, 1)),
            (OnePoint(exact_complex(0)), (1,)),
            (OnePoint(exact_complex(2)), (0,)),
            (OnePoint(exact_complex(2)), (-3,)),
        ):
            result = integrate_feynman(point, powers, 4, (-2, 2), MSBAR, arithmetic=arithmetic)
            assert all(value == 0 for value in result.values.values())
            assert all(error == 0 for error in result.errors.values())


def test_orders_below_the_pole_are_exactly_zero():
    point = two_point(10, 1, 2)
    result = integrate_feynman(point, (1, 1), 4, (-3, -2), MSBAR)
    assert all(ball == 0 for ball in result.balls.values())
    assert list(result.balls) == [-3, -2]
    assert integrate_feynman(point, (1, 1), 3, (-1, 0), MSBAR).balls[-1] == 0


@pytest.mark.parametrize("powers", [(0, 1), (1, -1)])
def test_numerators_are_refused(powers):
    with pytest.raises(UnsupportedIntegralError, match="at least 1"):
        integrate_feynman(two_point(*CASES["below threshold"]), powers, 4, (-1, 0), MSBAR)


def test_convergent_dots_on_a_massive_line_are_accepted():
    # m2 = 0 with weight x^(n1-1): the dot on line 1 does not touch the zero at x = 0.
    result = integrate_feynman(two_point(1, 2, 0), (2, 1), 4, (0, 0), MSBAR)
    other = integrate_feynman(two_point(1, 2, 0), (2, 1), 4, (0, 0), MSBAR, arithmetic="mpmath")
    assert_same(result, other, (0, 0))


@pytest.mark.parametrize(
    "change",
    [
        {"arithmetic": "doubles"},
        {"digits": 0},
        {"digits": 2.5},
        {"dimension": 0},
        {"dimension": 21},
        {"dimension": 4.0},
        {"powers": (1,)},
        {"powers": (1, 1.0)},
        {"orders": (2, -1)},
    ],
)
def test_bad_arguments(change):
    arguments = {
        "point": two_point(1, 1, 2),
        "powers": (1, 1),
        "dimension": 4,
        "orders": (-1, 0),
        "conventions": MSBAR,
    }
    with pytest.raises(InputError, match=r"accepted|upside down"):
        integrate_feynman(**(arguments | change))


def test_global_precisions_are_left_alone():
    before = (mpmath.mp.prec, flint.ctx.prec, flint.ctx.cap)
    for arithmetic in ("balls", "mpmath"):
        integrate_feynman(
            two_point(10, 1, 2), (1, 1), 4, (-1, 1), MSBAR, digits=30, arithmetic=arithmetic
        )
    assert (mpmath.mp.prec, flint.ctx.prec, flint.ctx.cap) == before
