"""Divergent ends in mpmath's arithmetic: the expansion of `loopint.quadrature.endpoints` in floats.

Taylor coefficients come from the zeros of the factors,

    log f(t) = log f(0) - sum_j t^j/j sum over zeros z of z^-j,

and errors are estimates: the rounding of the terms added up.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from loopint.quadrature.exponents import is_divergent
from loopint.quadrature.factors import Factor, regular_factors
from loopint.quadrature.mpmath_numbers import ROUNDING, Context, Estimate, logarithm, real
from loopint.quadrature.mpmath_prefactor import exponential

if TYPE_CHECKING:
    from loopint.quadrature.exponents import Integrand
    from loopint.quadrature.paths import Leg, Number

REACH = 4  # the nearest other singularity is at least that many times as far as the piece is long


def first_piece(ctx: Context, leg: Leg, integrand: Integrand) -> tuple[Number, list[Estimate]]:
    """Return how far the expansion was used, in units of the leg, and the coefficients in eps."""
    factors = regular_factors(leg, integrand)
    along = leg.orientation * leg.end
    distances = [abs(zero / along) for factor in factors for zero in factor.zeros]
    reach = min([ctx.one, *(distance / REACH for distance in distances)])
    end = along * reach
    length = _length(ctx, factors)
    rows = _taylor(ctx, factors, end, integrand.terms, length)
    exponent = integrand.near(leg.place, leg.zero_order)
    c, rate = exponent.constant + 1, real(ctx, exponent.rate)
    sums = [ctx.zero] * integrand.terms
    sizes = [max(abs(c) for c in row) for row in rows]
    resonant: list[Number] | None = None
    for j in range(length):
        if c + j == 0:
            resonant = [row[j] for row in rows]
            continue
        previous = ctx.zero
        for k, row in enumerate(rows):
            previous = (row[j] - rate * previous) / real(ctx, c + j)
            sums[k] += previous
            sizes[k] += abs(previous)
    log = ctx.log(end)
    powers = [ctx.exp(real(ctx, c) * log)]
    for k in range(1, integrand.terms + 1):
        powers.append(powers[-1] * rate * log / k)
    found = []
    for k in range(integrand.lowest, integrand.lowest + integrand.terms):
        parts = [powers[k - i] * sums[i] for i in range(k + 1)]
        size = sum((abs(powers[k - i] * sizes[i]) for i in range(k + 1)), ctx.zero)
        if resonant is not None:
            parts += [powers[k - i] * log / (k - i + 1) * resonant[i] for i in range(k + 1)]
            if is_divergent(exponent, leg.place):
                parts.append(powers[0] * resonant[k + 1] / rate)
                size += abs(powers[0] * sizes[k + 1] / rate)
        size += sum((abs(part) for part in parts), ctx.zero)
        found.append(Estimate(sum(parts, ctx.zero), size * ctx.eps * ROUNDING, size))
    return reach, found


def _length(ctx: Context, factors: tuple[Factor, ...]) -> int:
    """Return how many Taylor coefficients to keep.

    (1 - t/z)^-a has the coefficients binomial(j+a-1, j) z^-j, and |t/z| <= 1/REACH.
    """
    steepest = 2 + sum(len(factor.zeros) * abs(factor.exponent.constant) for factor in factors)
    a, length = int(steepest), 8
    while math.comb(length + a, a) << int(ctx.prec) > REACH**length:
        length += 4
    return length


def _taylor(
    ctx: Context, factors: tuple[Factor, ...], end: Number, terms: int, length: int
) -> list[list[Number]]:
    """Expand the regular factors at end * s in s; one row for each power of eps."""
    base, large_logarithm = ([ctx.zero] * length for _ in range(2))
    for factor in factors:
        log = [logarithm(ctx, ctx.convert(factor.coefficients[0]))]
        roots = [end / zero for zero in factor.zeros]
        log += [-sum((root**j for root in roots), ctx.zero) / j for j in range(1, length)]
        constant, rate = (
            real(ctx, part) for part in (factor.exponent.constant, factor.exponent.rate)
        )
        base = [b + constant * c for b, c in zip(base, log, strict=True)]
        large_logarithm = [b + rate * c for b, c in zip(large_logarithm, log, strict=True)]
    rows = [exponential(ctx, base)]
    for k in range(1, terms):
        last = rows[-1]
        rows.append(
            [
                sum((last[i] * large_logarithm[j - i] for i in range(j + 1)), ctx.zero) / k
                for j in range(length)
            ]
        )
    return rows
