"""Gauss-Legendre quadrature in ball arithmetic with a proven error bound.

A leg of the path is bisected until every piece keeps its distance from the zeros of Q: with centre
c, half-length h (|h| its size) and nearest zero at distance q |h|, q >= 2.  On the disc of radius
A = 3q|h|/4 about c

    log Q(u) = log Q(c) + sum over zeros u_i of log(1 - (u-c)/(u_i-c))

is analytic, and |log Q| <= |log Q(c)| - sum log(1 - A/|u_i - c|).  The disc holds the Bernstein
ellipse whose semi-axes add up to rho |h|, (rho + 1/rho)/2 = 3q/4, and n >= 2 nodes err by at most

    (64/15) |h| M rho^(-2n) / (1 - rho^(-2)),        M = max |integrand| on the ellipse

(the Chebyshev coefficients are below 2 M rho^-j, the rule is exact below degree 2n, and is off by
at most 2 + 2/15 on the others; L. N. Trefethen, SIAM Review 50 (2008) 67, theorem 4.5).

Where Q vanishes at the anchor itself the last piece is not integrated but bounded, see `_tail`.
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
from loopint.quadrature.paths import Arithmetic, Leg, Number, Path

if TYPE_CHECKING:
    from collections.abc import Iterator

MAX_PIECES = 200_000
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


@dataclass(frozen=True, slots=True)
class Integrand:
    """x^(n1-1) (1-x)^(n2-1) Q^exponent log(Q)^k / k! for k = 0 .. terms-1."""

    powers: tuple[int, int]
    exponent: fmpq
    terms: int


def integrate(path: Path, integrand: Integrand) -> list[Ball]:
    """Enclose the integrals over the path, one ball for each k, at the working precision.

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
        for k, value in enumerate(pieces):
            totals[k] = totals[k] + value if leg.orientation > 0 else totals[k] - value
    return [total / math.factorial(k) for k, total in enumerate(totals)]


def _real(value: Number) -> arb:
    return arb(value)


def _leg_integrals(leg: Leg, integrand: Integrand, *, is_real: bool) -> list[Ball]:
    """Integrate log(Q)^k without the 1/k! over one leg, from its anchor outwards."""
    convert = _real if is_real else acb
    end = convert(leg.end)
    length = abs(end)
    totals: list[Ball] = [convert(0)] * integrand.terms
    stack = [(fmpq(0), fmpq(1))]
    pieces = 0
    while stack:
        start, stop = stack.pop()
        pieces += 1
        if pieces > MAX_PIECES:
            raise MorePrecisionNeeded
        if leg.zero_order and start == 0:
            bounds = _tail(leg, integrand, length * arb(stop))
            if bounds is not None:
                totals = [total + error for total, error in zip(totals, bounds, strict=True)]
                continue
        else:
            centre = end * convert(arb((start + stop) / 2))
            half = end * convert(arb((stop - start) / 2))
            distances = list(_distances(leg, centre, half))
            if all(q > NEAREST for q in distances):
                _add_piece(totals, leg, integrand, _Piece(centre, half, distances))
                continue
        middle = (start + stop) / 2
        stack += [(start, middle), (middle, stop)]
    return totals


def _distances(leg: Leg, centre: Ball, half: Ball) -> Iterator[arb]:
    """Yield a lower bound on the distance of each zero from the centre, in half-lengths."""
    size = abs(half)
    for zero in leg.zeros:
        distance = abs(zero - centre)
        ratio = (distance / size).lower()
        if not (ratio > NEAREST or distance.rad() < size / 8):
            raise MorePrecisionNeeded
        yield ratio


@dataclass(frozen=True, slots=True)
class _Piece:
    """Centre and half-length in u, and the distances of the zeros in half-lengths."""

    centre: Ball
    half: Ball
    distances: list[arb]


def _add_piece(totals: list[Ball], leg: Leg, integrand: Integrand, piece: _Piece) -> None:
    """Add the Gauss-Legendre sums with their error bounds."""
    centre, half = piece.centre, piece.half
    is_real = isinstance(half, arb)
    c0, c1, c2 = leg.quadratic
    q0 = c0 + centre * (c1 + centre * c2)
    q1 = half * (c1 + 2 * centre * c2)
    q2 = half * half * c2
    nodes, errors = _error_bounds(leg, integrand, piece, _logarithm(q0))
    n1, n2 = integrand.powers
    exponent = integrand.exponent
    whole = int(exponent.p) if exponent.q == 1 else None
    fraction = arb(exponent) if is_real else acb(exponent)
    if not is_real:
        q0, q1, q2, centre = acb(q0), acb(q1), acb(q2), acb(centre)
    sums: list[Ball] = [q0 * 0] * integrand.terms
    for node, weight in gauss_legendre(nodes, is_real=is_real):
        q = q0 + node * (q1 + node * q2)
        logarithm = _logarithm(q)
        term = weight
        if n1 > 1:
            term = term * (leg.anchor + centre + half * node) ** (n1 - 1)
        if n2 > 1:
            term = term * (leg.co_anchor - centre - half * node) ** (n2 - 1)
        if whole is None:
            term = term * (fraction * logarithm).exp()
        elif whole:
            term = term * q**whole
        sums[0] = sums[0] + term
        for k in range(1, integrand.terms):
            term = term * logarithm
            sums[k] = sums[k] + term
    for k, error in enumerate(errors):
        totals[k] = totals[k] + half * sums[k] + (error if is_real else acb(error, error))


def _logarithm(q: Ball) -> Ball:
    """Return log Q with the cut on the positive imaginary axis: continuous for Im Q <= 0."""
    if isinstance(q, arb):
        return q.log()
    return (q * _I).log() - acb(0, arb.pi() / 2)


_I = acb(0, 1)


def _error_bounds(
    leg: Leg, integrand: Integrand, piece: _Piece, logarithm: Ball
) -> tuple[int, list[arb]]:
    """Return the number of nodes and, for each k, a ball [-error, error]."""
    size = abs(piece.half).upper()
    # Without zeros Q is constant and any ellipse will do.
    axis = arb(SHARE) * min(piece.distances) if piece.distances else arb(64)
    rho = (axis + (axis * axis - 1).sqrt()).lower()
    growth = arb(0)
    for distance in piece.distances:
        growth -= (1 - axis / distance).log()
    largest_log = abs(logarithm) + growth
    radius = axis * size
    n1, n2 = integrand.powers
    largest = (arb(64) / 15 * size / (1 - 1 / (rho * rho))).upper()
    largest *= (abs(leg.anchor + piece.centre) + radius) ** (n1 - 1)
    largest *= (abs(leg.co_anchor - piece.centre) + radius) ** (n2 - 1)
    power = arb(integrand.exponent)
    if integrand.exponent:
        largest *= (power * _real_part(logarithm) + abs(power) * growth).exp()
    worst, bounds = largest, [largest]
    for k in range(1, integrand.terms):
        bounds.append(bounds[-1] * largest_log)
        worst = worst.max(bounds[-1] / math.factorial(k))
    excess = float(worst.log().upper()) / math.log(2) + current_bits()
    nodes = max(2, math.ceil(excess / (2 * math.log2(float(rho)))))
    decay = rho ** (-2 * nodes)
    return nodes, [arb(0, (bound * decay).upper()) for bound in bounds]


def _real_part(value: Ball) -> arb:
    return value.real if isinstance(value, acb) else value


def _tail(leg: Leg, integrand: Integrand, delta: arb) -> list[Ball] | None:
    """Bound the integrals from an anchor where Q = 0 to distance delta, or None if too large.

    With r the order of the zero and t = |u| <= delta <= (distance of the other zero)/2, delta < 1:
    |Q| is between |c_r| t^r / 2 and 3/2 |c_r| t^r, the phase of log Q is in [-pi, 0], and

        |log Q| <= r log(1/t) + c,     c = |log |c_r|| + log 2 + pi.

    With sigma = r * exponent + n > 0 (n the power of the line that vanishes there) and
    Lambda = r log(1/delta) + c,

        Int_0^delta t^(sigma-1) (r log(1/t) + c)^k dt
            = delta^sigma sum_j k!/(k-j)! r^j Lambda^(k-j) / sigma^(j+1).
    """
    order = leg.zero_order
    half = arb(1) / 2
    if not delta < half:
        return None
    if order == 1 and any(not abs(zero) > 2 * delta for zero in leg.zeros if zero != 0):
        return None
    at_0, at_1 = bool(leg.anchor == 0), bool(leg.co_anchor == 0)
    n1, n2 = integrand.powers
    sigma = order * integrand.exponent + (n1 if at_0 else n2 if at_1 else 1)
    lead = abs(leg.quadratic[order])
    constant = abs(lead.log()) + arb.const_log2() + arb.pi()
    capital = (order * (-delta.log()) + constant).upper()
    size = (arb(sigma) * delta.log()).exp() * (arb(integrand.exponent) * lead.log()).exp()
    size *= arb(2) ** (abs(arb(integrand.exponent)) + n1 + n2)  # |1 - u/u_other|, other line
    size = size.upper()
    limit = arb(2) ** (-current_bits())
    errors: list[Ball] = []
    for k in range(integrand.terms):
        total = arb(0)
        for j in range(k + 1):
            count = math.factorial(k) // math.factorial(k - j)
            total += count * order**j * capital ** (k - j) / arb(sigma) ** (j + 1)
        bound = (total * size).upper()
        if not bound < limit * math.factorial(k):
            return None
        error = arb(0, bound)
        errors.append(error if isinstance(leg.end, arb) else acb(error, error))
    return errors


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
