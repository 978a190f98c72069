"""Epsilon-expansions of 2F1(a, b; c; z) and of Lerch's Phi against DLMF, mpmath and SciPy."""

from __future__ import annotations

import random

import mpmath
import pytest
import scipy.special
from flint import arb, fmpq

from loopint.core.epsilon_linear import EpsilonLinear
from loopint.core.gamma_factors import EpsilonFactor
from loopint.core.laurent import BallSeries
from loopint.core.numbers import (
    Ball,
    ExactComplex,
    exact_complex,
    imaginary_part,
    mpf_with_bound,
    real_part,
)
from loopint.core.precision import working_precision
from loopint.hypergeometric.gauss import GaussFunction, GaussParameters, NoTransformationError
from loopint.hypergeometric.lerch import lerch_phi_series

ONE = EpsilonFactor()
ARGUMENTS = ["1/3", "-3", "0.9", "1.1", "1.9", "7", "-0.5", "0.5", "2", "-100", "0.9999"]
COMPLEX = [("0.3", "0.9"), ("2", "0.01"), ("-1", "3"), ("0.9", "-0.001")]


def linear(constant: object, rate: object = 0) -> EpsilonLinear:
    return EpsilonLinear.of(constant, rate)  # type: ignore[arg-type]


def to_mpc(ball: Ball, digits: int = 60) -> mpmath.mpc:
    re, _ = mpf_with_bound(real_part(ball), digits)
    im, _ = mpf_with_bound(imaginary_part(ball), digits)
    return mpmath.mpc(re, im)


def number(x: fmpq) -> mpmath.mpf:
    return mpmath.mpf(int(x.p)) / int(x.q)


def summed(series: BallSeries, e: mpmath.mpf) -> mpmath.mpc:
    orders = range(series.lowest, series.highest + 1)
    return mpmath.fsum(to_mpc(series[k]) * e**k for k in orders)


def mpmath_gauss(p: GaussParameters, z: ExactComplex, e: mpmath.mpf) -> mpmath.mpc:
    """Evaluate mpmath.hyp2f1 at z, or just above the cut."""
    a, b, c = (number(x.constant) + number(x.rate) * e for x in (p.a, p.b, p.c))
    point = mpmath.mpc(number(z.re), number(z.im))
    if z.is_real and z.re > 1:
        point += mpmath.mpc(0, mpmath.mpf(10) ** -(mpmath.mp.dps - 2))
    return mpmath.hyp2f1(a, b, c, point)


@pytest.mark.parametrize("z", [*ARGUMENTS, *COMPLEX])
@pytest.mark.parametrize("seed", range(5))
def test_against_mpmath_at_a_number_epsilon(z: object, seed: int) -> None:
    """Integer and half-integer parameters as one massless line gives them; mpmath.hyp2f1."""
    rng = random.Random(f"{z}{seed}")
    odd = rng.randint(0, 1)
    p = GaussParameters(
        linear(fmpq(2 * rng.randint(-3, 5) + odd, 2), rng.choice([1, 2, 3])),
        linear(rng.randint(-2, 5), rng.choice([0, 1])),
        linear(fmpq(2 * rng.randint(1, 5) + odd, 2), -1),
    )
    if p.b.rate == p.a.rate:
        p = GaussParameters(p.a, EpsilonLinear(p.b.constant, fmpq(0)), p.c)
    with mpmath.workdps(60):
        e = mpmath.mpf(10) ** -4
        with working_precision(220):
            found = GaussFunction(p, ONE, 10, 220).evaluate(exact_complex(z))
        expected = mpmath_gauss(p, exact_complex(z), e)
        assert abs(summed(found, e) - expected) < mpmath.mpf(10) ** -27 * (1 + abs(expected))


def test_value_at_one_is_gausss_sum() -> None:
    """DLMF 15.4.20 with mpmath.gamma, continued to Re(c-a-b) < 0 where it has poles in eps."""
    p = GaussParameters(linear(1, 1), linear(2, 0), linear(2, -1))  # c-a-b = -1 - 2 eps
    with mpmath.workdps(60), working_precision(220):
        e = mpmath.mpf(10) ** -4
        found = GaussFunction(p, ONE, 10, 220).evaluate(exact_complex(1))
        g = mpmath.gamma
        expected = g(2 - e) * g(-1 - 2 * e) / (g(1 - 2 * e) * g(-e))
        assert abs(summed(found, e) / expected - 1) < mpmath.mpf(10) ** -35


def test_elementary_values() -> None:
    """F(1,1;2;z) = -log(1-z)/z (DLMF 15.4.1); F(1/2,1;3/2;z^2) = artanh(z)/z (DLMF 15.4.2)."""
    with working_precision(200):
        p = GaussParameters(linear(1, 1), linear(1, 0), linear(2, 2))
        found = GaussFunction(p, ONE, 0, 200).evaluate(exact_complex("-3/5"))[0]
        assert found.overlaps(arb("1.6").log() / arb("0.6"))
        p = GaussParameters(linear("1/2", 1), linear(1, 0), linear("3/2", 3))
        found = GaussFunction(p, ONE, 0, 200).evaluate(exact_complex("9/25"))[0]
        assert found.overlaps(arb("0.6").atanh() / arb("0.6"))


@pytest.mark.parametrize("z", ["-7", "-0.25", "0.4", "0.75"])
def test_doubles_against_scipy(z: str) -> None:
    """scipy.special.hyp2f1 at eps = 0."""
    p = GaussParameters(linear("3/2", 1), linear(2, 0), linear("7/2", 3))
    with working_precision(100):
        found = GaussFunction(p, ONE, 0, 100).evaluate(exact_complex(z))[0]
    assert float(found.mid()) == pytest.approx(
        scipy.special.hyp2f1(1.5, 2, 3.5, float(z)), rel=1e-12
    )


def test_bound_holds_against_more_precision() -> None:
    p = GaussParameters(linear(2, 3), linear(-1, 1), linear(1, -1))
    for z in (*ARGUMENTS, *COMPLEX):
        with working_precision(80):
            low = GaussFunction(p, ONE, 4, 80).evaluate(exact_complex(z))
        with working_precision(300):
            high = GaussFunction(p, ONE, 4, 300).evaluate(exact_complex(z))
        for k in range(5):
            assert low[k].overlaps(high[k])
            assert low[k].contains(to_mpc(high[k]).real) or not low[k].is_exact()


def test_argument_without_a_transformation_is_refused() -> None:
    """exp(i pi/3) is a fixed point of all six transformations."""
    p = GaussParameters(linear(1, 1), linear(2, 0), linear(2, -1))
    near = exact_complex(("0.5", "0.8660254"))
    with working_precision(100), pytest.raises(NoTransformationError):
        GaussFunction(p, ONE, 1, 100).evaluate(near)


@pytest.mark.parametrize("z", ["-3", "0.25", "0.9", "1.5", "20"])
@pytest.mark.parametrize("s", [1, 2, 3])
def test_lerch_against_mpmath(z: str, s: int) -> None:
    """mpmath.lerchphi at eps = 1e-4; above the cut for z > 1."""
    with mpmath.workdps(50):
        e = mpmath.mpf(10) ** -4
        with working_precision(220):
            found = lerch_phi_series(exact_complex(z), s, fmpq(1, 2), fmpq(-1), 12)
        point = mpmath.mpf(z)
        if point > 1:
            point = mpmath.mpc(point, mpmath.mpf(10) ** -45)
        expected = mpmath.lerchphi(point, s, mpmath.mpf(1) / 2 - e)
        assert abs(summed(found, e) - expected) < mpmath.mpf(10) ** -36 * (1 + abs(expected))


def test_lerch_special_values() -> None:
    """Phi(-1, 2, 1/2) = 4 G, Catalan's constant; Phi(1/2, 1, 1) = 2 log 2 (DLMF 25.14.1-3)."""
    with working_precision(200):
        found = lerch_phi_series(exact_complex(-1), 2, fmpq(1, 2), fmpq(0), 1)[0]
        assert found.overlaps(4 * arb.const_catalan())
        found = lerch_phi_series(exact_complex("1/2"), 1, fmpq(1), fmpq(0), 1)[0]
        assert found.overlaps(2 * arb.const_log2())


def test_gauss_functions_that_are_lerchs() -> None:
    """F(1, b; b+1; z) = b Phi(z, 1, b) with b = 1 - eps (DLMF 25.14.1, 15.2.1)."""
    p = GaussParameters(linear(1, -1), linear(1, 0), linear(2, -1))
    with working_precision(200), mpmath.workdps(50):
        e = mpmath.mpf(10) ** -4
        function = GaussFunction(p, ONE, 10, 200)
        assert function.lerch_parameter == linear(1, -1)
        for z in ("-2", "0.3", "3"):
            expected = mpmath_gauss(p, exact_complex(z), e)
            assert abs(summed(function.evaluate(exact_complex(z)), e) - expected) < 1e-34
