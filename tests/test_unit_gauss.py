"""Epsilon-expansions of 2F1(1, b; c; w) against DLMF, mpmath and FLINT."""

from __future__ import annotations

import mpmath
import pytest
from flint import acb, arb, fmpq
from hypothesis import given, settings
from hypothesis import strategies as st

from loopint.core.gamma_factors import EpsilonFactor
from loopint.core.laurent import BallSeries
from loopint.core.numbers import Ball, imaginary_part, mpf_with_bound, real_part
from loopint.core.precision import working_precision
from loopint.hypergeometric.unit_gauss import GaussParameters, gauss_table

ONE = EpsilonFactor()


def parameters(b0: object, b1: object, c0: object, c1: object) -> GaussParameters:
    return GaussParameters(
        *(fmpq(*x) if isinstance(x, tuple) else fmpq(x) for x in (b0, b1, c0, c1))
    )


BUBBLE = parameters(0, 1, 2, -1)  # 2F1(1, eps; 2-eps; w)
PARTNER = parameters(0, 1, 0, 2)  # 2F1(1, eps; 2 eps; v)
ODD = parameters((1, 2), 1, (3, 2), -1)
ODD_PARTNER = parameters((1, 2), 1, 1, 2)
ALL = [BUBBLE, PARTNER, ODD, ODD_PARTNER]


def table_value(p: GaussParameters, w: Ball, terms: int, bits: int) -> BallSeries:
    return gauss_table(p, ONE, terms - 1, bits).evaluate(-(-w).log1p())


def to_mpc(ball: Ball, digits: int) -> mpmath.mpc:
    re, _ = mpf_with_bound(real_part(ball), digits)
    im, _ = mpf_with_bound(imaginary_part(ball), digits)
    return mpmath.mpc(re, im)


def test_expansion_in_polylogarithms() -> None:
    """2F1(1, eps; 1+eps; w) = 1 - sum_k (-eps)^k Li_k(w).

    DLMF 25.14.1 and 15.2.1 (term by term eps/(n+eps) = -sum (-eps)^k / n^k), with mpmath.polylog.
    """
    p = parameters(0, 1, 1, 1)
    with working_precision(200), mpmath.workdps(50):
        for text in ("0.3", "-0.9", "0.5", "-0.01"):
            series = table_value(p, arb(text), 6, 200)
            assert series[0].contains(1)
            for k in range(1, 6):
                expected = -((-1) ** k) * mpmath.polylog(k, mpmath.mpf(text))
                assert abs(to_mpc(series[k], 45) - expected) < mpmath.mpf(10) ** -44


def test_dilogarithm_at_one_half() -> None:
    """Li_2(1/2) = pi^2/12 - log(2)^2/2 (DLMF 25.12.6 at z = 1/2)."""
    with working_precision(256):
        found = -table_value(parameters(0, 1, 1, 1), arb(1) / 2, 3, 256)[2]
        expected = arb.pi() ** 2 / 12 - arb.const_log2() ** 2 / 2
        assert found.overlaps(expected)
        assert found.rel_accuracy_bits() > 240


@pytest.mark.parametrize("a", [(1, 2), (3, 2), (1, 3), (5, 4)])
def test_lerch(a: tuple[int, int]) -> None:
    """2F1(1, a; a+1; z) = a Phi(z, 1, a) (DLMF 25.14.1), with mpmath.lerchphi."""
    p = parameters(a, 1, (a[0] + a[1], a[1]), 1)
    with working_precision(160), mpmath.workdps(40):
        for text in ("0.25", "-0.75"):
            value = to_mpc(table_value(p, arb(text), 1, 160)[0], 38)
            s = mpmath.mpf(a[0]) / a[1]
            assert abs(value - s * mpmath.lerchphi(mpmath.mpf(text), 1, s)) < mpmath.mpf(10) ** -36


def test_inverse_hyperbolic_tangent() -> None:
    """2F1(1/2, 1; 3/2; z^2) = artanh(z)/z (DLMF 15.4.2)."""
    with working_precision(160):
        z = arb("0.6")
        found = table_value(ODD, z * z, 1, 160)[0]
        assert found.overlaps(z.atanh() / z)
        assert found.rel_accuracy_bits() > 140


@pytest.mark.parametrize("p", ALL)
@settings(max_examples=25, deadline=None)
@given(
    radius=st.floats(0.001, 1.0),
    angle=st.floats(-3.14159, 3.14159),
    epsilon=st.sampled_from([1e-4, -2e-4]),
)
def test_against_flint_at_a_number_epsilon(
    p: GaussParameters, radius: float, angle: float, epsilon: float
) -> None:
    """FLINT's acb_hypgeom_2f1 at a fixed epsilon lies at the summed series, up to O(eps^12)."""
    with working_precision(180):
        w = acb(radius) * acb(0, angle).exp()
        if not w.real <= arb("0.5"):
            w = 1 - w / 2  # keep Re w <= 1/2 or so, inside the table's disc
        if abs(-(-w).log1p()).upper() > 1.06:
            return
        e = arb(epsilon)
        series = table_value(p, w, 12, 180)
        total = acb(0)
        for k in range(11, -1, -1):
            total = total * e + series[k]
        b = arb(p.b0) + arb(p.b1) * e
        c = arb(p.c0) + arb(p.c1) * e
        exact = w.hypgeom_2f1(1, b, c)
        assert abs(total - exact).upper() < 1e-36


def test_euler_integral() -> None:
    """DLMF 15.6.1 for 2F1(1, eps; 2-eps; w), integrated by mpmath.quad at eps = 1/50."""
    with mpmath.workdps(30):
        e, w = mpmath.mpf(1) / 50, mpmath.mpf("-0.7")
        # b = 1, c - b = 1 - eps: Gamma(2-eps)/Gamma(1-eps) Int (1-t)^(-eps) (1-wt)^(-eps) dt
        integral = (1 - e) * mpmath.quad(lambda t: ((1 - t) * (1 - w * t)) ** (-e), [0, 1])
        with working_precision(160):
            series = table_value(BUBBLE, arb("-0.7"), 16, 160)
            total = mpmath.fsum(to_mpc(series[k], 40) * e**k for k in range(16))
        assert abs(total - integral) < mpmath.mpf(10) ** -24


def test_connection_near_one() -> None:
    """DLMF 15.8.4, order by order, where both sides converge (w = 1/2)."""
    gamma = EpsilonFactor.gamma
    with working_precision(200):
        w = arb(1) / 2
        terms = 8
        left = table_value(BUBBLE, w, terms, 200)
        linear = EpsilonFactor.linear_factor
        regular = gauss_table(PARTNER, linear(1, -1) / linear(1, -2), terms - 1, 200)
        rest = (gamma(2, -1) * gamma(-1, 2) / gamma(0, 1)).series(terms)
        logs = [arb(1)]
        for k in range(1, terms):  # (1-w)^(1-2 eps) w^(eps-1) at w = 1/2 is 2^eps
            logs.append(logs[-1] * arb.const_log2() / k)
        right = regular.evaluate(-(-(1 - w)).log1p()) + rest * BallSeries(0, logs)
        for k in range(terms):
            assert left[k].overlaps(right[k])
            assert left[k].rel_accuracy_bits() > 120 or left[k] == 1


def test_gauss_sum() -> None:
    """2F1(1, eps; 2-eps; w) tends to (1-eps)/(1-2 eps) as w -> 1 (DLMF 15.4.20)."""
    with working_precision(300):
        regular = gauss_table(
            PARTNER,
            EpsilonFactor.linear_factor(1, -1) / EpsilonFactor.linear_factor(1, -2),
            4,
            300,
        ).evaluate(arb(0))
        expected = [arb(1)] + [arb(2) ** (k - 1) for k in range(1, 5)]
        for k in range(5):
            assert regular[k].overlaps(expected[k])


@pytest.mark.parametrize("p", ALL)
def test_truncation_bound_is_valid_at_the_rim(p: GaussParameters) -> None:
    """A low-precision table must enclose the value of a table with four times the bits."""
    for bits in (64, 128):
        for text in ("1.06", "-1.06", "0.53", "0.1", "-0.001"):
            with working_precision(bits):
                low = gauss_table(p, ONE, 6, bits).evaluate(arb(text))
            with working_precision(4 * bits):
                high = gauss_table(p, ONE, 6, 4 * bits).evaluate(arb(text))
            for k in range(7):
                assert low[k].contains(high[k].mid()) or low[k].overlaps(high[k])
                assert (low[k] - high[k]).abs_upper() < arb(2) ** (8 - bits) * (1 + abs(high[k]))
