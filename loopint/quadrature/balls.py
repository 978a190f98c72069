"""Gauss-Legendre quadrature in ball arithmetic with a proven error bound.

A leg of the path is bisected until every piece keeps its distance from the singularities of the
integrand, which are zeros of the factors f of `loopint.quadrature.factors`: with centre c,
half-length h (|h| its size) and nearest zero at distance q |h|, q >= 2.  On the disc of radius
A = 3q|h|/4 about c

    log f(u) = log f(c) + sum over zeros u_i of log(1 - (u-c)/(u_i-c))

is analytic, and |log f| <= |log f(c)| - sum log(1 - A/|u_i - c|).  The disc holds the Bernstein
ellipse whose semi-axes add up to rho |h|, (rho + 1/rho)/2 = 3q/4, and n >= 2 nodes err by at most

    (64/15) |h| M rho^(-2n) / (1 - rho^(-2)),        M = max |integrand| on the ellipse

(the Chebyshev coefficients are below 2 M rho^-j, the rule is exact below degree 2n, and is off by
at most 2 + 2/15 on the others; L. N. Trefethen, SIAM Review 50 (2008) 67, theorem 4.5).

Where the integrand is singular at the anchor itself the first piece is integrated term by term,
see `loopint.quadrature.endpoints`.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING

from flint import acb, arb, fmpq

from loopint.core.errors import MorePrecisionNeeded
from loopint.core.numbers import Ball, ExactComplex
from loopint.core.precision import current_bits
from loopint.core.time_limit import check_time
from loopint.quadrature.ball_bounds import bound_on_disc, logarithm
from loopint.quadrature.endpoints import first_piece
from loopint.quadrature.factors import Factor, has_singular_anchor, leg_factors
from loopint.quadrature.paths import Arithmetic, Leg, Number, Path

if TYPE_CHECKING:
    from collections.abc import Iterator

    from loopint.quadrature.exponents import Integrand

MAX_PIECES = 20_000
NEAREST = 2  # smallest accepted q
SHARE = fmpq(3, 4)  # part of the distance to the nearest zero that the ellipse may use


def _larger(a: Ball, b: Ball) -> bool:
    return bool(abs(a).mid() >= abs(b).mid())


def _exact(value: ExactComplex) -> Ball:
    return value.ball()


def _sqrt(value: Ball) -> Ball:
    if isinstance(value, arb) and value < 0:
        return acb(0, (-value).sqrt())
    return value.sqrt()


BALLS = Arithmetic(exact=_exact, sqrt=_sqrt, larger=_larger)


def integrate(path: Path, integrand: Integrand) -> list[Ball]:
    """Enclose the `integrand.terms` coefficients of the integral from eps^`integrand.lowest`.

    Each piece of the path adds at most about 2^-bits to the error.  On a real path the balls are
    real.

    Raises
    ------
    MorePrecisionNeeded
        If a zero of Q cannot be told from the path.
    """
    convert = _real if path.is_real else acb
    totals: list[Ball] = [convert(0)] * integrand.terms
    for leg in path.legs:
        pieces = _leg_integrals(leg, integrand, is_real=path.is_real)
        totals = [total + piece for total, piece in zip(totals, pieces, strict=True)]
    return totals


def _real(value: Number) -> arb:
    return arb(value)


def _leg_integrals(leg: Leg, integrand: Integrand, *, is_real: bool) -> list[Ball]:
    """Integrate over one leg, in the direction of the path."""
    convert = _real if is_real else acb
    end = convert(leg.end)
    factors = leg_factors(leg, integrand)
    is_singular = has_singular_anchor(leg, integrand)
    # Regular pieces: Int f0 Lambda^k, without the 1/k! of the coefficient of eps^k.
    sums: list[Ball] = [convert(0)] * (integrand.terms + integrand.lowest)
    first: list[Ball] = [convert(0)] * integrand.terms
    stack = [(fmpq(0), fmpq(1))]
    pieces = 0
    while stack:
        check_time()
        start, stop = stack.pop()
        pieces += 1
        if pieces > MAX_PIECES:
            raise MorePrecisionNeeded
        if is_singular and start == 0:
            found = first_piece(leg, integrand, leg.orientation * end * convert(arb(stop)))
            if found is not None:
                first = found
                continue
        else:
            centre = end * convert(arb((start + stop) / 2))
            half = end * convert(arb((stop - start) / 2))
            distances = list(_distances(factors, centre, half))
            if all(q > NEAREST for q in distances):
                _add_piece(sums, factors, _Piece(centre, half, distances))
                continue
        middle = (start + stop) / 2
        stack += [(start, middle), (middle, stop)]
    shift = -integrand.lowest
    for k, total in enumerate(sums):
        first[k + shift] = first[k + shift] + leg.orientation * total / math.factorial(k)
    return first


def _distances(factors: tuple[Factor, ...], centre: Ball, half: Ball) -> Iterator[arb]:
    """Yield a lower bound on the distance of each singularity from the centre, in half-lengths."""
    size = abs(half)
    for factor in factors:
        if factor.is_polynomial:
            continue
        for zero in factor.zeros:
            distance = abs(zero - centre)
            ratio = (distance / size).lower()
            if not (ratio > NEAREST or distance.rad() < size / 8):
                raise MorePrecisionNeeded
            yield ratio


@dataclass(frozen=True, slots=True)
class _Piece:
    """Centre and half-length in u, and the distances of the singularities in half-lengths."""

    centre: Ball
    half: Ball
    distances: list[arb]


@dataclass(frozen=True, slots=True)
class _LocalFactor:
    """A factor about the centre of a piece; unused kinds of exponent are None."""

    coefficients: tuple[Ball, ...]
    whole: int | None
    fraction: Ball | None
    rate: Ball | None


def _local(factor: Factor, piece: _Piece) -> _LocalFactor:
    """Expand a factor in s, u = centre + half * s."""
    centre, half = piece.centre, piece.half
    convert = _real if isinstance(half, arb) else acb
    c0, c1, *rest = factor.coefficients
    if rest:
        (c2,) = rest
        own: tuple[Ball, ...] = (
            convert(c0 + centre * (c1 + centre * c2)),
            convert(half * (c1 + 2 * centre * c2)),
            convert(half * half * c2),
        )
    else:
        own = (convert(c0 + c1 * centre), convert(c1 * half))
    constant, rate = factor.exponent.constant, factor.exponent.rate
    return _LocalFactor(
        own,
        int(constant.p) if constant.q == 1 and constant != 0 else None,
        convert(arb(constant)) if constant.q != 1 else None,
        convert(arb(rate)) if rate != 0 else None,
    )


def _add_piece(sums: list[Ball], factors: tuple[Factor, ...], piece: _Piece) -> None:
    """Add the Gauss-Legendre sums with their error bounds."""
    if not sums:  # nothing above the pole of a singular end was asked for
        return
    half = piece.half
    is_real = isinstance(half, arb)
    nodes, errors = _error_bounds(factors, piece, len(sums))
    local = [_local(factor, piece) for factor in factors]
    own: list[Ball] = [half * 0] * len(sums)
    for node, weight in gauss_legendre(nodes, is_real=is_real):
        term, exponent, large_logarithm = weight, None, None
        for factor in local:
            coefficients = factor.coefficients
            value = coefficients[-1]
            for c in coefficients[-2::-1]:
                value = c + node * value
            if factor.whole is not None:
                term = term * (value if factor.whole == 1 else value**factor.whole)
            if factor.rate is None and factor.fraction is None:
                continue
            log = logarithm(value)
            if factor.fraction is not None:
                part = factor.fraction * log
                exponent = part if exponent is None else exponent + part
            if factor.rate is not None:
                part = factor.rate * log
                large_logarithm = part if large_logarithm is None else large_logarithm + part
        if exponent is not None:
            term = term * exponent.exp()
        own[0] = own[0] + term
        if large_logarithm is not None:
            for k in range(1, len(own)):
                term = term * large_logarithm
                own[k] = own[k] + term
    for k, error in enumerate(errors):
        sums[k] = sums[k] + half * own[k] + (error if is_real else acb(error, error))


def _error_bounds(factors: tuple[Factor, ...], piece: _Piece, terms: int) -> tuple[int, list[arb]]:
    """Return the number of nodes and, for each k, a ball [-error, error]."""
    size = abs(piece.half).upper()
    # Without singularities any ellipse will do.
    axis = arb(SHARE) * min(piece.distances) if piece.distances else arb(64)
    rho = (axis + (axis * axis - 1).sqrt()).lower()
    largest, largest_log = bound_on_disc(factors, piece.centre, axis * size)
    largest = (largest * arb(64) / 15 * size / (1 - 1 / (rho * rho))).upper()
    worst, bounds = largest, [largest]
    for k in range(1, terms):
        bounds.append(bounds[-1] * largest_log)
        worst = worst.max(bounds[-1] / math.factorial(k))
    log_excess = worst.log().upper()
    if not log_excess.is_finite():
        raise MorePrecisionNeeded
    excess = float(log_excess) / math.log(2) + current_bits()
    nodes = max(2, math.ceil(excess / (2 * math.log2(float(rho)))))
    decay = rho ** (-2 * nodes)
    return nodes, [arb(0, (bound * decay).upper()) for bound in bounds]


@lru_cache(maxsize=4096)
def _rule(n: int, bits: int) -> tuple[tuple[arb, arb], ...]:  # noqa: ARG001 - cache key
    half = [arb.legendre_p_root(n, k, weight=True) for k in range((n + 1) // 2)]
    mirrored = [(-node, weight) for node, weight in half if node != 0]
    return tuple(half + mirrored)


@lru_cache(maxsize=4096)
def _complex_rule(n: int, bits: int) -> tuple[tuple[acb, acb], ...]:
    # Products of two acb are faster than mixed ones.
    return tuple((acb(node), acb(weight)) for node, weight in _rule(n, bits))


def gauss_legendre(n: int, *, is_real: bool) -> tuple[tuple[Ball, Ball], ...]:
    """Return nodes and weights of the n-point rule on [-1, 1] at the working precision."""
    bits = current_bits()
    return _rule(n, bits) if is_real else _complex_rule(n, bits)
