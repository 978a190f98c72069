"""Gamma functions, measure and scales in front of the Feynman integral, from FLINT's power series.

FLINT expands Gamma(a + eps) and its reciprocal itself, poles included; nothing here is shared with
the prefactors of the closed forms.
"""

from __future__ import annotations

from functools import lru_cache
from math import factorial

from flint import arb, arb_series, fmpq

from loopint.core.conventions import Measure
from loopint.core.precision import current_bits, series_length


def pole_order(a: fmpq) -> int:
    """Return 1 if Gamma(a + eps) has a pole at eps = 0, else 0."""
    return 1 if a.q == 1 and a <= 0 else 0


def scalar_prefactor(
    measure: Measure, dimension: int, a: fmpq, powers: tuple[int, ...], terms: int
) -> list[arb]:
    """Expand N(eps) Gamma(a + eps) / prod Gamma(n) from order -`pole_order(a)`.

    Returns `terms` coefficients at the working precision.  For `Measure.TWO_PI` the factor
    (4 pi)^(-d/2) is included.
    """
    return list(_scalar_prefactor(measure, dimension, a, powers, terms, bits=current_bits()))


@lru_cache(maxsize=256)
def _scalar_prefactor(
    measure: Measure,
    dimension: int,
    a: fmpq,
    powers: tuple[int, ...],
    terms: int,
    *,
    bits: int,  # noqa: ARG001 - the working precision is part of the cache key
) -> tuple[arb, ...]:
    with series_length(terms + 1):
        divisor = 1
        for n in powers:
            divisor *= factorial(n - 1)
        total = _gamma(a, terms) * _measure(measure, dimension) / divisor
        return tuple(total[k] for k in range(terms))


def _gamma(a: fmpq, terms: int) -> arb_series:
    """Expand eps^pole_order Gamma(a + eps)."""
    argument = arb_series([arb(a), 1])
    if not pole_order(a):
        return argument.gamma()
    reciprocal = argument.rgamma()  # starts with an exact zero
    return 1 / arb_series([reciprocal[k + 1] for k in range(terms)])


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
