"""The piece of the path next to a singularity of the integrand, term by term and continued in eps.

At a distance t from an end of the range, or from the double zero of Q at threshold, the integrand
is t^(c-1+b eps) R(t), R regular.  With the Taylor coefficients R_j (power series in eps)

    Int_0^h t^(c-1+b eps) R(t) dt = h^(c+b eps) sum_j R_j h^j / (c+j+b eps),

the analytic continuation in eps where the integral diverges.  A term with c+j = 0 is a pole.  If
|R| <= M on a disc of radius r, then |R_j| <= M r^-j (Cauchy) bounds what is left out.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

from flint import acb, acb_series, arb, arb_series, fmpq

from loopint.core.errors import MorePrecisionNeeded
from loopint.core.numbers import Ball
from loopint.core.precision import current_bits, series_length
from loopint.quadrature.ball_bounds import bound_on_disc, logarithm
from loopint.quadrature.exponents import is_divergent
from loopint.quadrature.factors import Factor, regular_factors

if TYPE_CHECKING:
    from loopint.core.epsilon_linear import EpsilonLinear
    from loopint.quadrature.exponents import Integrand
    from loopint.quadrature.paths import Leg

REACH = 4  # the nearest other singularity is at least that many times as far as the piece is long
FARTHEST = 64
SHARE = fmpq(7, 8)  # radius of the disc in units of the distance to the nearest other singularity


def first_piece(leg: Leg, integrand: Integrand, end: Ball) -> list[Ball] | None:
    """Integrate from the anchor to t = `end`, or return None if that is too far.

    Returns the coefficients from eps^`integrand.lowest`, `integrand.terms` of them, real for a
    real `end`.

    Raises
    ------
    MorePrecisionNeeded
        If another singularity cannot be told from the anchor.
    """
    factors = regular_factors(leg, integrand)
    size = abs(end)
    nearest = _nearest(factors, FARTHEST * size)
    if not nearest >= REACH * size:
        return None
    exponent = integrand.near(leg.place, leg.zero_order)
    radius = arb(SHARE) * nearest
    length, errors = _truncation(factors, exponent, integrand.terms, size, radius)
    rows = _taylor(factors, end, integrand.terms, length)
    sums, resonant = _sum_terms(rows, exponent, length)
    sums = [
        total + (error if isinstance(end, arb) else acb(error, error))
        for total, error in zip(sums, errors, strict=True)
    ]
    return _continued(
        sums,
        resonant,
        exponent,
        end,
        lowest=integrand.lowest,
        has_pole=is_divergent(exponent, leg.place),
    )


def _nearest(factors: tuple[Factor, ...], farthest: arb) -> arb:
    """Return a lower bound on the distance of the singularities from the anchor."""
    nearest = farthest.lower()
    for factor in factors:
        if not factor.is_polynomial:
            for zero in factor.zeros:
                distance = abs(zero)
                if not distance > 0:
                    raise MorePrecisionNeeded
                nearest = nearest.min(distance.lower())
    return nearest


def _truncation(
    factors: tuple[Factor, ...], exponent: EpsilonLinear, terms: int, size: arb, radius: arb
) -> tuple[int, list[arb]]:
    """Return how many Taylor coefficients to keep, and bounds [-e, e] on the rest of each sum."""
    c, rate = arb(exponent.constant + 1), abs(arb(exponent.rate))
    largest, largest_log = bound_on_disc(factors, arb(0), radius)
    bounds = [largest.upper()]
    for k in range(1, terms):
        bounds.append((bounds[-1] * largest_log / k).upper())
    worst = bounds[0]
    for bound in bounds:
        worst = worst.max(bound)
    ratio = (radius / size).lower()
    # Rounding of the first term, of size h^c, is not worth beating.
    scale = (c * size.log()).exp().min(arb(1))
    log_excess = (worst * scale).log().upper()
    if not log_excess.is_finite():
        raise MorePrecisionNeeded
    excess = float(log_excess) / math.log(2) + current_bits()
    least = max(2, math.ceil(float(-c)) + 2)
    length = max(least, math.ceil(excess / math.log2(float(ratio))))
    rest = ratio**-length / (1 - 1 / ratio)
    # |coefficient of eps^l in 1/(c+j+b eps)| <= |b|^l / (c+length)^(l+1) for j >= length
    shares = [rate**k / (c + length) ** (k + 1) * rest for k in range(terms)]
    return length, [arb(0, (_convolved(bounds, shares, k)).upper()) for k in range(terms)]


def _convolved(a: list[arb], b: list[arb], k: int) -> arb:
    return sum((a[i] * b[k - i] for i in range(k + 1)), arb(0))


def _taylor(
    factors: tuple[Factor, ...], end: Ball, terms: int, length: int
) -> list[arb_series | acb_series]:
    """Expand R(end * s) in s; one row for each power of eps."""
    series: Any = arb_series if isinstance(end, arb) else acb_series
    number: Any = arb if isinstance(end, arb) else acb
    with series_length(length):
        base, exponent, large_logarithm = series([1]), None, series([0])
        for factor in factors:
            coefficients = [number(c * end**i) for i, c in enumerate(factor.coefficients)]
            constant, rate = factor.exponent.constant, factor.exponent.rate
            if constant.q == 1:
                base = base * series(coefficients) ** int(constant.p)
            if not factor.needs_logarithm:
                continue
            lead = coefficients[0]
            log = series([1, *(c / lead for c in coefficients[1:])]).log()
            log = log + series([logarithm(lead)])
            if constant.q != 1:
                exponent = log * number(arb(constant))
            if rate != 0:
                large_logarithm = large_logarithm + log * number(arb(rate))
        if exponent is not None:
            base = base * exponent.exp()
        rows = [base]
        for k in range(1, terms):
            rows.append(rows[-1] * large_logarithm * number(arb(fmpq(1, k))))
    return rows


def _sum_terms(
    rows: list[arb_series | acb_series], exponent: EpsilonLinear, length: int
) -> tuple[list[Ball], list[Ball] | None]:
    """Return sum_j R_j h^j / (c+j+b eps) without the term c+j = 0, and the R_j h^j of that term."""
    c, rate = exponent.constant + 1, exponent.rate
    number = arb if isinstance(rows[0], arb_series) else acb
    b = number(arb(rate))
    sums: list[Ball] = [number(0)] * len(rows)
    resonant: list[Ball] | None = None
    for j in range(length):
        if c + j == 0:
            resonant = [row[j] for row in rows]
            continue
        reciprocal = number(arb(1 / (c + j)))
        previous: Ball | None = None
        for k, row in enumerate(rows):
            term = row[j]
            if previous is not None and rate != 0:
                term = term - b * previous
            previous = term * reciprocal
            sums[k] = sums[k] + previous
    return sums, resonant


def _continued(
    sums: list[Ball],
    resonant: list[Ball] | None,
    exponent: EpsilonLinear,
    end: Ball,
    *,
    lowest: int,
    has_pole: bool,
) -> list[Ball]:
    """Multiply by h^(c+b eps) and add the resonant term.

    With L = log h the latter is h^c R_j [ (exp(b L eps) - 1)/(b eps) + 1/(b eps) ]; the last part
    is the pole.  At threshold, for odd j, it cancels between the two sides and is left out.
    """
    c, terms = exponent.constant + 1, len(sums)
    convert = arb if isinstance(end, arb) else acb
    rate, log = convert(arb(exponent.rate)), end.log()
    size = end ** int(c.p) if c.q == 1 else (convert(arb(c)) * log).exp()
    powers: list[Ball] = [convert(1)]  # of exp(b L eps)
    for k in range(1, terms + 1):
        powers.append(powers[-1] * rate * log / k)
    orders = range(lowest, lowest + terms)
    found: list[Ball] = []
    for k in orders:
        total: Ball = convert(0)
        for i in range(k + 1):
            total = total + powers[k - i] * sums[i]
            if resonant is not None:
                total = total + powers[k - i] * log / (k - i + 1) * resonant[i]
        if resonant is not None and has_pole:
            total = total + resonant[k + 1] / rate
        found.append(size * total)
    return found
