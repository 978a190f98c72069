"""One propagator: the tadpole A(n), a single Gamma function.

With N(eps) = 1, mu = 1 and euclidean sign (README, section "Definitions"):

    A(n) = Gamma(n - d/2) / Gamma(n) * (m^2 - i0)^(d/2 - n),      d = d0 - 2 eps
"""

from __future__ import annotations

from functools import lru_cache
from typing import TYPE_CHECKING

from flint import fmpq

from loopint.core.errors import UnsupportedIntegralError
from loopint.core.gamma_factors import EpsilonFactor
from loopint.core.laurent import BallSeries
from loopint.core.precision import current_bits, working_precision
from loopint.integrals.powers import times_mass_power

if TYPE_CHECKING:
    from loopint.core.conventions import Measure
    from loopint.core.kinematics import OnePoint

MAX_POWER = 100


def check(powers: tuple[int, ...], dimension: int) -> None:  # noqa: ARG001 - any dimension
    """Refuse powers beyond +-100."""
    if abs(powers[0]) > MAX_POWER:
        raise UnsupportedIntegralError(
            f"tadpole power {powers[0]}; accepted: an integer from -{MAX_POWER} to {MAX_POWER}"
        )


def region(point: OnePoint, powers: tuple[int, ...], dimension: int) -> str:  # noqa: ARG001
    """Return 'massive', 'complex_mass' or 'scaleless'."""
    return str(point.region)


def method(point: OnePoint, powers: tuple[int, ...], dimension: int) -> str:  # noqa: ARG001
    """Return 'exact' where the integral is exactly zero, else 'gamma'."""
    return "exact" if point.m_squared.is_zero or powers[0] <= 0 else "gamma"


@lru_cache(maxsize=256)
def _prefactor(
    power: int, dimension: int, measure: Measure, highest: int, bits: int
) -> tuple[BallSeries, int]:
    """Expand measure * Gamma(n - d/2)/Gamma(n) / 2^(k eps), shared by all points; return k too."""
    gamma = EpsilonFactor.gamma
    factor = measure.factor(dimension) * gamma(power - fmpq(dimension, 2), 1) / gamma(power, 0)
    factor, two = factor.split_two()
    with working_precision(bits + 32):
        return factor.series_through(highest), two


def series(
    point: OnePoint, powers: tuple[int, ...], dimension: int, highest: int, measure: Measure
) -> BallSeries:
    """Expand measure * A(n) through order `highest` at the working precision.

    A massless tadpole is scaleless and a power <= 0 leaves a polynomial: both are exactly zero in
    dimensional regularisation.
    """
    n = powers[0]
    if point.m_squared.is_zero or n <= 0:
        return BallSeries.zero(highest)
    factor, two = _prefactor(n, dimension, measure, highest, current_bits())
    return times_mass_power(point.m_squared, factor, fmpq(dimension, 2) - n, two)
