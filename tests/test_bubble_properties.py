"""Properties that hold for every bubble: symmetry, scaling, mu-dependence, continuity, bounds."""

from __future__ import annotations

from fractions import Fraction

import mpmath
import pytest
from flint import arb, fmpq
from hypothesis import given, settings
from hypothesis import strategies as st

import loopint
from loopint.core.conventions import Conventions
from loopint.core.kinematics import Region, TwoPoint, kallen
from loopint.core.laurent import LaurentSeries
from loopint.core.numbers import ExactComplex, exact_complex, exact_real
from loopint.integrals.registry import Integral, evaluate

rationals = st.fractions(min_value=-20, max_value=20, max_denominator=1000)
positive = st.fractions(min_value=0, max_value=20, max_denominator=1000)
masses = st.one_of(
    positive,
    st.tuples(
        st.fractions(min_value=-5, max_value=20, max_denominator=100),
        st.fractions(min_value=-5, max_value=Fraction(-1, 1000), max_denominator=1000),
    ),
)


def agree(a: LaurentSeries, b: LaurentSeries, shift: object = 0) -> None:
    """Both series enclose the same numbers."""
    with mpmath.workdps(60):
        for k in a:
            assert abs(a[k] - b[k]) <= a.bounds[k] + b.bounds[k], k


@settings(max_examples=60, deadline=None)
@given(rationals, masses, masses)
def test_exchange_of_the_lines(p: Fraction, m1: object, m2: object) -> None:
    agree(loopint.bubble(p, m1, m2), loopint.bubble(p, m2, m1))


@settings(max_examples=40, deadline=None)
@given(rationals, masses, masses, st.fractions(Fraction(1, 50), 50, max_denominator=50))
def test_common_rescaling_of_all_scales(p: Fraction, m1: object, m2: object, c: Fraction) -> None:
    """B(1,1) in d0 = 4 is dimensionless: only ratios to mu^2 enter."""

    def times(mass: object) -> object:
        return (mass[0] * c, mass[1] * c) if isinstance(mass, tuple) else mass * c

    agree(
        loopint.bubble(p, m1, m2, mu_squared=1),
        loopint.bubble(p * c, times(m1), times(m2), mu_squared=c),
    )


@settings(max_examples=40, deadline=None)
@given(rationals, masses, masses, st.fractions(Fraction(1, 50), 50, max_denominator=50))
def test_mu_dependence(p: Fraction, m1: object, m2: object, mu: Fraction) -> None:
    """Multiplying by (mu^2)^eps = sum log^k(mu^2) eps^k/k! is all that mu^2 does."""
    base = loopint.bubble(p, m1, m2, orders=(-1, 2), digits=40)
    moved = loopint.bubble(p, m1, m2, orders=(-1, 2), digits=40, mu_squared=mu)
    with mpmath.workdps(60):
        log = mpmath.log(mpmath.mpf(mu.numerator) / mu.denominator)
        for k in base:
            expected = mpmath.fsum(
                base[j] * log ** (k - j) / mpmath.factorial(k - j) for j in range(-1, k + 1)
            )
            assert abs(moved[k] - expected) < mpmath.mpf(10) ** -36 * (
                1 + mpmath.fsum(abs(base[j]) * (1 + abs(log)) ** 3 for j in base)
            )


@settings(max_examples=30, deadline=None)
@given(rationals, positive, positive)
def test_propagator_sign(p: Fraction, m1: Fraction, m2: Fraction) -> None:
    """Two propagators: the two sign conventions agree; one propagator: they differ by a sign."""
    agree(loopint.bubble(p, m1, m2), loopint.bubble(p, m1, m2, propagator_sign="euclidean"))
    a = loopint.tadpole(m1)
    b = loopint.tadpole(m1, propagator_sign="euclidean")
    with mpmath.workdps(60):
        assert all(a[k] + b[k] == 0 for k in a)


@settings(max_examples=60, deadline=None)
@given(rationals, masses, masses)
def test_bounds_hold_against_more_digits(p: Fraction, m1: object, m2: object) -> None:
    """A value of 8 digits lies within its bound of the value of 60 digits."""
    low = loopint.bubble(p, m1, m2, digits=8)
    high = loopint.bubble(p, m1, m2, digits=60)
    with mpmath.workdps(80):
        for k in low:
            assert abs(low[k] - high[k]) <= low.bounds[k] + high.bounds[k]
            assert low.bounds[k] <= mpmath.mpf(10) ** -8 * abs(high[k])


@settings(max_examples=60, deadline=None)
@given(rationals, masses, masses)
def test_sign_of_the_imaginary_part(p: Fraction, m1: object, m2: object) -> None:
    """Im B >= 0: -Int Im log Q with Im Q <= 0; exactly 0 for real masses below threshold."""
    series = loopint.bubble(p, m1, m2, orders=(0, 0))
    if series.region in ("spacelike", "below_threshold", "below_pseudothreshold", "on_shell"):
        assert series[0].imag == 0
    assert series[0].imag >= 0


@pytest.mark.parametrize("digits", [5, 16, 100, 500])
def test_digits_are_delivered(digits: int) -> None:
    series = loopint.bubble("7.3", "1.1", ("0.2", "-0.05"), orders=(-2, 8), digits=digits)
    assert series.status == "ok"
    assert series[-2] == 0
    for k in range(-1, 9):
        assert series.bounds[k] <= abs(series[k]) * mpmath.mpf(10) ** -digits


DEGENERATE = [  # centre p^2, m1^2, m2^2
    ("9", "1", "4"),  # threshold
    ("1", "1", "4"),  # pseudothreshold
    ("4", "1", "1"),
    ("2", "2", "0"),  # on shell
    ("0", "1", "1"),
    ("0", "1", "4"),
    ("0", "3", "0"),
]


@pytest.mark.parametrize(("centre", "m1", "m2"), DEGENERATE)
@pytest.mark.parametrize("side", [1, -1])
def test_continuity_towards_degenerate_points(centre: str, m1: str, m2: str, side: int) -> None:
    """|B(t + d) - B(t)| shrinks like sqrt(d) log^k d (d0 = 4 is continuous everywhere)."""
    at = loopint.bubble(centre, m1, m2, orders=(-1, 3), digits=40)
    for power in range(1, 41, 3):
        near = loopint.bubble(
            Fraction(centre) + side * Fraction(1, 10**power), m1, m2, orders=(-1, 3), digits=40
        )
        assert near.status == "ok"
        with mpmath.workdps(60):
            for k in near:
                limit = 40 * mpmath.mpf(10) ** (-power / mpmath.mpf(2)) * (3 * power) ** (k + 1)
                assert abs(near[k] - at[k]) < limit, (power, k)


def test_continuity_in_a_vanishing_width_and_mass() -> None:
    for power in (5, 20, 40, 80):
        small = Fraction(1, 10**power)
        for p in (-3, Fraction(1, 3), 12):
            real = loopint.bubble(p, 1, 2, orders=(-1, 3))
            unstable = loopint.bubble(p, (1, -small), (2, -small), orders=(-1, 3))
            light = loopint.bubble(p, small, 2, orders=(-1, 3))
            massless = loopint.bubble(p, 0, 2, orders=(-1, 3))
            with mpmath.workdps(40):
                tolerance = (
                    mpmath.mpf(10) ** -power * 200 * (3 * power) ** 4 + mpmath.mpf(10) ** -26
                )
                for k in real:
                    assert abs(real[k] - unstable[k]) < tolerance
                    assert abs(light[k] - massless[k]) < tolerance


@pytest.mark.parametrize(
    ("p", "m1", "m2", "expected"),
    [
        (0, 0, 0, Region.SCALELESS),
        (0, 1, 1, Region.ZERO_MOMENTUM),
        (0, 1, (1, -1), Region.ZERO_MOMENTUM),
        (-1, 1, 1, Region.SPACELIKE),
        ("0.5", 1, 4, Region.BELOW_PSEUDOTHRESHOLD),
        (1, 1, 4, Region.PSEUDOTHRESHOLD),
        (5, 1, 4, Region.BELOW_THRESHOLD),
        (9, 1, 4, Region.THRESHOLD),
        ("9.0000000000000000000000001", 1, 4, Region.ABOVE_THRESHOLD),
        ("1/9", "1/36", "1/36", Region.THRESHOLD),
        (2, 2, 0, Region.ON_SHELL),
        (2, 0, 2, Region.ON_SHELL),
        (1, 2, 0, Region.BELOW_THRESHOLD),
        (3, 2, 0, Region.ABOVE_THRESHOLD),
        (1, (1, "-1e-50"), 0, Region.COMPLEX_MASS),
    ],
)
def test_regions_are_decided_exactly(p: object, m1: object, m2: object, expected: Region) -> None:
    point = TwoPoint(exact_real(p), exact_complex(m1), exact_complex(m2))
    assert point.region is expected
    assert point.exchanged().region is expected


@given(masses, masses, masses)
def test_kallen_factorises(x: object, y: object, z: object) -> None:
    """lambda(x,y,z) = x^2+y^2+z^2-2xy-2yz-2zx (Källén 1964), in exact arithmetic."""
    a, b, c = map(exact_complex, (x, y, z))

    def twice(u: ExactComplex, v: ExactComplex) -> ExactComplex:
        return (u * v).scaled(fmpq(2))

    expected = a * a + b * b + c * c - twice(a, b) - twice(b, c) - twice(c, a)
    assert kallen(a, b, c) == expected


def test_pseudothreshold_with_complex_masses() -> None:
    """m1 = 2-i, m2 = 1-i, p^2 = (m1-m2)^2 = 1: lambda = 0 although both masses are complex."""
    at = loopint.bubble(1, (3, -4), (0, -2), orders=(-1, 3))
    near = loopint.bubble(1 + Fraction(1, 10**30), (3, -4), (0, -2), orders=(-1, 3))
    assert at.method == "elementary"
    with mpmath.workdps(40):
        for k in at:
            assert abs(at[k] - near[k]) < mpmath.mpf(10) ** -26


def test_snapping_moves_a_point_onto_the_threshold_and_says_so() -> None:
    exact = loopint.bubble(9, 1, 4)
    snapped = loopint.bubble("9.00000001", 1, 4, snap_tolerance="1e-6")
    untouched = loopint.bubble("9.00000001", 1, 4, snap_tolerance="1e-12")
    assert snapped.region == "threshold_snapped"
    assert untouched.region == "above_threshold"
    agree(exact, snapped)
    # masses whose threshold is irrational: (1 + sqrt 2)^2
    close = loopint.bubble("5.82842712474619", 1, 2, snap_tolerance="1e-12")
    assert close.region == "threshold_snapped"
    with mpmath.workdps(40):
        root = mpmath.sqrt(2)  # 2 - (m1 log m1^2 + m2 log m2^2)/(m1 + m2)
        expected = 2 - root * mpmath.log(2) / (1 + root)
        assert abs(close[0] - expected) < mpmath.mpf(10) ** -28
    pseudo = loopint.bubble("0.1715728752538", 1, 2, snap_tolerance="1e-10")
    assert pseudo.region == "pseudothreshold_snapped"


def test_precision_cap_gives_status_and_honest_bounds() -> None:
    capped = loopint.bubble("1e-40", 1, 1, orders=(0, 0), digits=40, max_precision_bits=150)
    true = loopint.bubble("1e-40", 1, 1, orders=(0, 0), digits=60)
    assert capped.status == "below_digits"
    with mpmath.workdps(80):
        assert abs(capped[0] - true[0]) <= capped.bounds[0] + true.bounds[0]


@pytest.mark.parametrize(
    ("p", "m1", "m2"),
    [
        ("1", "1e-40", "1"),
        ("1", "1", "1e-40"),
        ("1e30", "1", "2"),
        ("-1e30", "1", "2"),
        ("1e-30", "1", "2"),
        ("-1e-30", "1", "1"),
        ("1e-30", "1", "1"),
        ("1e300", "1e-300", "1"),
        ("-5e-324", "5e-324", "1.7e308"),
        ("3", ("1", "-1e-40"), "1"),
        ("3", ("1", "-1e40"), "1"),
        ("1e-30", ("1", "-1e-20"), "1"),
    ],
)
def test_extreme_ratios_are_proven(p: str, m1: object, m2: object) -> None:
    series = loopint.bubble(p, m1, m2, orders=(-1, 4), digits=50)
    assert series.status == "ok"
    again = loopint.bubble(p, m1, m2, orders=(-1, 4), digits=120)
    agree(series, again)


@pytest.mark.parametrize("step", [-2, -1, 1, 2])
def test_neighbouring_floats_of_a_threshold(step: int) -> None:
    """One ulp from p^2 = 4 m^2: Im = pi sqrt(1 - 4m^2/p^2) from the exact float, or exactly 0."""
    import math  # noqa: PLC0415

    p = 4.0
    for _ in range(abs(step)):
        p = math.nextafter(p, math.copysign(math.inf, step))
    series = loopint.bubble(p, 1.0, 1.0, orders=(0, 0), digits=30)
    with mpmath.workdps(50):
        if step < 0:
            assert series[0].imag == 0
        else:
            expected = mpmath.pi * mpmath.sqrt(1 - 4 / mpmath.mpf(p))
            assert abs(series[0].imag / expected - 1) < mpmath.mpf(10) ** -20


def test_evaluation_leaves_the_global_precision_alone() -> None:
    import flint  # noqa: PLC0415

    before, mp_before = flint.ctx.prec, mpmath.mp.prec
    loopint.bubble(3, 1, 1, digits=200)
    assert (flint.ctx.prec, mpmath.mp.prec) == (before, mp_before)


@pytest.mark.parametrize(
    ("keywords", "word"),
    [
        ({"p_squared": float("nan")}, "p_squared"),
        ({"p_squared": 1j}, "p_squared"),
        ({"m1_squared": -1}, "m1_squared"),
        ({"m2_squared": (1, 1)}, "m2_squared"),
        ({"orders": (2, 1)}, "orders"),
        ({"digits": 4}, "digits"),
        ({"digits": 2001}, "digits"),
        ({"mu_squared": 0}, "mu_squared"),
        ({"measure": "ms"}, "measure"),
        ({"propagator_sign": "up"}, "propagator_sign"),
        ({"dimension": 0}, "dimension"),
        ({"dimension": 4.0}, "dimension"),
        ({"powers": (1,)}, "powers"),
        ({"powers": (1, 1.5)}, "powers"),
        ({"snap_tolerance": -1}, "snap_tolerance"),
    ],
)
def test_bad_arguments_are_named(keywords: dict[str, object], word: str) -> None:
    arguments: dict[str, object] = {"p_squared": 1, "m1_squared": 1, "m2_squared": 1} | keywords
    with pytest.raises(loopint.LoopintError, match=word) as caught:
        loopint.bubble(**arguments)  # type: ignore[arg-type]
    assert "accepted" in str(caught.value)


def test_scaleless_is_exactly_zero() -> None:
    series = loopint.bubble(0, 0, 0, orders=(-2, 3))
    assert series.region == "scaleless"
    assert all(series[k] == 0 and series.bounds[k] == 0 for k in series)


def test_exact_zero_coefficients_at_zero_momentum() -> None:
    """B(0; m, m) = Gamma(eps) N (mu/m)^2eps: with N = 1/Gamma(1+eps) and mu = m it is 1/eps."""
    series = loopint.bubble(0, 2, 2, orders=(-1, 3), mu_squared=2, measure="gamma")
    assert series[-1] == 1
    assert all(series[k] == 0 for k in range(4))


def test_results_do_not_depend_on_what_was_computed_before() -> None:
    integral = Integral.parse("bubble", (1, 1), 4, (-1, 2))
    point = TwoPoint(exact_real("3.7"), exact_complex("0.3"), exact_complex("0.4"))
    first = evaluate(integral, point, Conventions(), digits=20)
    loopint.bubble("3.7", "0.3", "0.4", digits=300)
    second = evaluate(integral, point, Conventions(), digits=20)
    for k in range(-1, 3):
        assert str(first.series[k]) == str(second.series[k])
    assert isinstance(first.series[-1], arb)


@pytest.mark.parametrize(
    ("series", "order"),
    [
        # psi(1/2) = -gamma_E - 2 log 2 (DLMF 5.4.13): the eps^1 term of Gamma(1/2+eps) 4^eps
        (loopint.tadpole("1/4", 4, dimension=7, orders=(-1, 3)), 1),
        (loopint.bubble(0, "1/4", "1/4", (3, 1), dimension=7, orders=(-1, 3)), 1),
        (loopint.tadpole(1, 4, dimension=7, mu_squared=4, orders=(-1, 3)), 1),
    ],
    ids=["tadpole", "equal masses at p^2 = 0", "scale"],
)
def test_a_coefficient_that_vanishes_by_accident_is_exactly_zero(
    series: LaurentSeries, order: int
) -> None:
    assert series.status == "ok"
    assert series[order] == 0
    assert series.bounds[order] == 0
    assert series[order - 1] != 0
    assert series[order + 1] != 0
