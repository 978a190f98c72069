"""Prefactors against mpmath's Gamma function."""

from __future__ import annotations

import mpmath
import pytest
from flint import fmpq
from hypothesis import given, settings
from hypothesis import strategies as st

from loopint.core.conventions import Measure
from loopint.core.errors import UnregulatedError
from loopint.core.gamma_factors import EpsilonFactor
from loopint.core.numbers import mpf_with_bound
from loopint.core.precision import working_precision

EPSILON = mpmath.mpf(1) / 10**6
TERMS = 9


def summed(factor: EpsilonFactor) -> mpmath.mpf:
    with working_precision(300):
        series = factor.series(TERMS)
        numbers = {
            k: mpf_with_bound(series[k], 70)[0] for k in range(series.lowest, series.highest + 1)
        }
    return mpmath.fsum(value * EPSILON**k for k, value in numbers.items())


@settings(max_examples=60, deadline=None)
@given(
    st.lists(
        st.tuples(st.integers(-7, 7), st.integers(-3, 3).filter(bool), st.sampled_from([1, -1])),
        min_size=1,
        max_size=4,
    )
)
def test_products_of_gammas_of_integers_and_half_integers(
    arguments: list[tuple[int, int, int]],
) -> None:
    """mpmath.gamma, at a small number epsilon, against the summed expansion."""
    factor = EpsilonFactor()
    with mpmath.workdps(90):
        expected = mpmath.mpf(1)
        for twice_a, b, power in arguments:
            gamma = EpsilonFactor.gamma(fmpq(twice_a, 2), b)
            factor = factor * gamma if power > 0 else factor / gamma
            expected *= mpmath.gamma(mpmath.mpf(twice_a) / 2 + b * EPSILON) ** power
        assert abs(summed(factor) / expected - 1) < mpmath.mpf(10) ** -40


def test_measures() -> None:
    """The definitions of the measures (README, Conventions), with mpmath.gamma."""
    with mpmath.workdps(80):
        e = EPSILON
        gamma = mpmath.gamma
        expected = {
            Measure.MSBAR: mpmath.exp(mpmath.euler * e),
            Measure.PLAIN: mpmath.mpf(1),
            Measure.GAMMA: 1 / gamma(1 + e),
            Measure.R_GAMMA: gamma(1 - 2 * e) / gamma(1 + e) / gamma(1 - e) ** 2,
            Measure.TWO_PI: (4 * mpmath.pi) ** (-(mpmath.mpf(3) - 2 * e) / 2),
        }
        for measure, value in expected.items():
            assert abs(summed(measure.factor(3)) / value - 1) < mpmath.mpf(10) ** -45


def test_cancellations_are_exact() -> None:
    """1/Gamma(1+eps) times Gamma(eps) is 1/eps and nothing else."""
    factor = Measure.GAMMA.factor(4) * EpsilonFactor.gamma(0, 1)
    series = factor.series(5)
    assert series[-1] == 1
    assert all(series[k] == 0 for k in range(4))
    msbar = (Measure.MSBAR.factor(4) * EpsilonFactor.gamma(0, 1)).series(5)
    assert msbar[0] == 0
    assert msbar[1] != 0


def test_poles_that_no_epsilon_moves_are_refused() -> None:
    with pytest.raises(UnregulatedError, match="not regulated"):
        EpsilonFactor.gamma(-2, 0)
    assert EpsilonFactor.gamma(3, 0).rational == 2
