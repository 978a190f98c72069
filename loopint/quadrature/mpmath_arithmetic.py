"""The same representation with mpmath's arithmetic and tanh-sinh integrator.

Nothing here touches ball arithmetic after the exact input, so that no library is trusted alone.
Errors are estimates of the integrator, not bounds.
"""

from __future__ import annotations

from itertools import pairwise
from typing import TYPE_CHECKING

from loopint.core.time_limit import check_time
from loopint.quadrature.factors import has_singular_anchor, leg_factors
from loopint.quadrature.mpmath_endpoints import first_piece
from loopint.quadrature.mpmath_numbers import ROUNDING, Context, Estimate, logarithm, real

if TYPE_CHECKING:
    from collections.abc import Callable

    from loopint.quadrature.exponents import Integrand
    from loopint.quadrature.paths import Leg, Number, Path

OPTIMISM = 2**12  # mpmath extrapolates its convergence; errors 200 times its estimate were seen
SPREAD = 5  # ratio of neighbouring pieces that approach a singularity


def integrate(ctx: Context, path: Path, integrand: Integrand) -> list[Estimate]:
    """Estimate the `integrand.terms` coefficients of the integral from eps^`integrand.lowest`."""
    values, errors, sizes = ([ctx.mpf(0)] * integrand.terms for _ in range(3))
    for leg in path.legs:
        points = _break_points(leg, integrand)
        if integrand.near(leg.place, leg.zero_order).constant <= -1:  # not integrable
            reach, pieces = first_piece(ctx, leg, integrand)
            for i, piece in enumerate(pieces):
                values[i] += piece.value
                errors[i] += piece.error
                sizes[i] += piece.size
            points = _break_points_after(reach, points)
        # u = end * s^2 on a piece that starts on a singularity makes its endpoint harmless.
        squared = has_singular_anchor(leg, integrand)
        if squared:
            points = [ctx.sqrt(t) for t in points]
        evaluate = _Evaluation(ctx, leg, integrand, squared=squared)
        for start, stop in pairwise(points):
            for k in range(integrand.terms + integrand.lowest):
                i = k - integrand.lowest
                value, error = ctx.quad(evaluate.with_log_power(k), [start, stop], error=True)
                scale = leg.orientation / ctx.factorial(k)
                values[i] += scale * value
                errors[i] += abs(scale) * error * OPTIMISM
                sizes[i] += abs(scale * value)
            evaluate.forget()
    # The integrator's estimate leaves out rounding.
    rounding = ctx.eps * ROUNDING
    return [
        Estimate(value, error + size * rounding, size)
        for value, error, size in zip(values, errors, sizes, strict=True)
    ]


class _Evaluation:
    """The integrand on one leg; weight and Lambda are kept for the next power of Lambda."""

    def __init__(self, ctx: Context, leg: Leg, integrand: Integrand, *, squared: bool) -> None:
        self.ctx, self.leg, self.squared = ctx, leg, squared
        self.factors = leg_factors(leg, integrand)
        self.seen: dict[Number, tuple[Number, Number]] = {}

    def forget(self) -> None:
        """Drop what was kept: the next piece has other nodes."""
        self.seen.clear()

    def with_log_power(self, k: int) -> Callable[[Number], Number]:
        """Return the integrand at eps = 0 times Lambda^k as a function of s."""

        def function(s: Number) -> Number:
            found = self.seen.get(s)
            if found is None:
                found = self.seen[s] = self._evaluate(s)
            weight, large_logarithm = found
            return weight * large_logarithm**k

        return function

    def _evaluate(self, s: Number) -> tuple[Number, Number]:
        check_time()
        ctx, leg = self.ctx, self.leg
        u, weight = (leg.end * s * s, 2 * s * leg.end) if self.squared else (leg.end * s, leg.end)
        large_logarithm = ctx.zero
        for factor in self.factors:
            value = ctx.polyval(factor.coefficients[::-1], u)
            if value == 0:  # the singularity at the anchor itself, which carries no weight
                return ctx.zero, ctx.zero
            constant, rate = factor.exponent.constant, factor.exponent.rate
            if constant.q == 1:
                weight *= value ** int(constant.p)
            if not factor.needs_logarithm:
                continue
            log = logarithm(ctx, value)
            if constant.q != 1:
                weight *= ctx.exp(real(ctx, constant) * log)
            large_logarithm += real(ctx, rate) * log
        return weight, large_logarithm


def _break_points(leg: Leg, integrand: Integrand) -> list[Number]:
    """Return increasing t from 0 to 1 (u = t * end), geometric around nearby singularities."""
    zeros = [
        zero / leg.end
        for factor in leg_factors(leg, integrand)
        if not factor.is_polynomial
        for zero in factor.zeros
    ]
    found: list[Number] = []
    for zero in zeros:
        along = min(max(zero.real, 0), 1)
        distance = abs(zero - along)
        while 0 < distance < 1:
            found += [t for t in (along - distance, along + distance) if 0 < t < 1]
            distance *= SPREAD
    points: list[Number] = [leg.end.real * 0]
    for t in sorted(found):
        # The points of two zeros may coincide; pieces much shorter than needed are dropped.
        if t - points[-1] > min(abs(zero - t) for zero in zeros) / 4:
            points.append(t)
    return [*points, points[0] + 1]


def _break_points_after(reach: Number, points: list[Number]) -> list[Number]:
    """Return break points from `reach` on, geometric at first."""
    found = [reach]
    while found[-1] < 1:
        found.append(min(SPREAD * found[-1], *(t for t in points if t > found[-1])))
    return found
