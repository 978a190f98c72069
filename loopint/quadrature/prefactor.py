"""Gamma functions, measure and scales in front of the Feynman integral, from FLINT's power series.

FLINT expands Gamma(a + b eps) and its reciprocal itself, poles included; nothing here is shared
with the prefactors of the closed forms.
"""

from __future__ import annotations

from functools import lru_cache
from typing import TYPE_CHECKING

from flint import arb, arb_series

from loopint.core.conventions import Measure
from loopint.core.precision import current_bits, series_length
from loopint.quadrature.exponents import gamma_pole

if TYPE_CHECKING:
    from loopint.core.epsilon_linear import EpsilonLinear


def lowest_order(gamma: EpsilonLinear, powers: tuple[EpsilonLinear, ...]) -> int:
    """Return the lowest order in eps of Gamma(gamma) / prod Gamma(power)."""
    return sum(gamma_pole(power) for power in powers) - gamma_pole(gamma)


def scalar_prefactor(
    measure: Measure,
    dimension: int,
    gamma: EpsilonLinear,
    powers: tuple[EpsilonLinear, ...],
    terms: int,
) -> list[arb]:
    """Expand N(eps) Gamma(gamma) / prod Gamma(power) from its lowest order.

    Returns `terms` coefficients at the working precision.  For `Measure.TWO_PI` the factor
    (4 pi)^(-d/2) is included.
    """
    return list(_scalar_prefactor(measure, dimension, gamma, powers, terms, bits=current_bits()))


@lru_cache(maxsize=256)
def _scalar_prefactor(
    measure: Measure,
    dimension: int,
    gamma: EpsilonLinear,
    powers: tuple[EpsilonLinear, ...],
    terms: int,
    *,
    bits: int,  # noqa: ARG001 - the working precision is part of the cache key
) -> tuple[arb, ...]:
    with series_length(terms + 1):
        total = _measure(measure, dimension)
        if gamma_pole(gamma):
            total = total / _reciprocal_gamma(gamma, terms)
        else:
            total = total * _argument(gamma).gamma()
        for power in powers:
            total = total * _reciprocal_gamma(power, terms)
        return tuple(total[k] for k in range(terms))


def _argument(exponent: EpsilonLinear) -> arb_series:
    return arb_series([arb(exponent.constant), arb(exponent.rate)])


def _reciprocal_gamma(exponent: EpsilonLinear, terms: int) -> arb_series:
    """Expand 1/Gamma(exponent), divided by eps if it vanishes at eps = 0."""
    reciprocal = _argument(exponent).rgamma()
    if not gamma_pole(exponent):
        return reciprocal
    return arb_series([reciprocal[k + 1] for k in range(terms)])  # starts with an exact zero


def _measure(measure: Measure, dimension: int) -> arb_series:
    def gamma(rate: int) -> arb_series:
        return arb_series([1, rate]).gamma()

    def inverse_gamma(rate: int) -> arb_series:
        return arb_series([1, rate]).rgamma()

    match measure:
        case Measure.MSBAR:
            return arb_series([arb(0), arb.const_euler()]).exp()
        case Measure.PLAIN:
            return arb_series([1])
        case Measure.GAMMA:
            return inverse_gamma(1)
        case Measure.R_GAMMA:
            return gamma(-2) * inverse_gamma(1) * inverse_gamma(-1) * inverse_gamma(-1)
        case Measure.TWO_PI:
            four_pi = 4 * arb.pi()
            power = four_pi.sqrt() ** (-dimension)
            return power * arb_series([arb(0), four_pi.log()]).exp()
