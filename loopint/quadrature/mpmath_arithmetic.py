"""The same representation with mpmath's arithmetic, Gamma functions and tanh-sinh integrator.

Nothing here touches ball arithmetic after the exact input, so that no library is trusted alone.
Errors are estimates of the integrator, not bounds.  All work is done in private mpmath contexts:
the user's `mpmath.mp` is never changed.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from itertools import pairwise
from typing import TYPE_CHECKING, Any, TypeAlias

import mpmath

from loopint.core.conventions import Measure
from loopint.quadrature.paths import Arithmetic, Leg, Number, Path

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from flint import fmpq

    from loopint.core.numbers import ExactComplex

Context: TypeAlias = Any  # mpmath has no type hints
GUARD_DIGITS = 10
ROUNDING = 2**8  # units in the last place, a cautious guess
OPTIMISM = 2**12  # mpmath extrapolates its convergence; errors 200 times its estimate were seen
SPREAD = 5  # ratio of neighbouring pieces that approach a zero of Q


@lru_cache(maxsize=8)
def context(digits: int) -> Context:
    """Return a private mpmath context with guard digits; kept, because it stores nodes."""
    private = mpmath.mp.clone()
    private.dps = digits + GUARD_DIGITS
    return private


def real(ctx: Context, value: fmpq) -> Number:
    """Return an exact rational as an mpf."""
    return ctx.mpf(int(value.p)) / int(value.q)


def exact(ctx: Context, value: ExactComplex) -> Number:
    """Return an exact number as an mpf, or as an mpc if it is not real."""
    if value.is_real:
        return real(ctx, value.re)
    return ctx.mpc(real(ctx, value.re), real(ctx, value.im))


def numbers(ctx: Context) -> Arithmetic:
    """Return what the geometry of the path needs."""
    return Arithmetic(
        exact=lambda value: exact(ctx, value),
        sqrt=ctx.sqrt,
        larger=lambda a, b: abs(a) >= abs(b),
    )


@dataclass(frozen=True, slots=True)
class Estimate:
    """A value, an error estimate, and the size of the terms that were added up to the value."""

    value: Number
    error: Number
    size: Number


def integrate(
    ctx: Context, path: Path, powers: tuple[int, int], exponent: fmpq, terms: int
) -> list[Estimate]:
    """Integrate x^(n1-1) (1-x)^(n2-1) Q^exponent log(Q)^k / k! over the path for each k < terms."""
    values, errors, sizes = ([ctx.mpf(0)] * terms for _ in range(3))
    for leg in path.legs:
        points = _break_points(leg)
        # u = end * s^2 on a piece that starts on a zero of Q makes its endpoint harmless.
        squared = leg.zero_order > 0
        if squared:
            points = [ctx.sqrt(t) for t in points]
        factors = _Factors(ctx, leg, powers, exponent, squared=squared)
        for start, stop in pairwise(points):
            for k in range(terms):
                value, error = ctx.quad(factors.with_log_power(k), [start, stop], error=True)
                scale = leg.orientation / ctx.factorial(k)
                values[k] += scale * value
                errors[k] += abs(scale) * error
                sizes[k] += abs(scale * value)
            factors.forget()
    # The integrator's estimate leaves out rounding.
    rounding = ctx.eps * ROUNDING
    return [
        Estimate(value, error * OPTIMISM + size * rounding, size)
        for value, error, size in zip(values, errors, sizes, strict=True)
    ]


class _Factors:
    """The integrand on one leg; weight and log Q are kept for the next power of the logarithm."""

    def __init__(
        self, ctx: Context, leg: Leg, powers: tuple[int, int], exponent: fmpq, *, squared: bool
    ) -> None:
        self.ctx, self.leg, self.powers, self.squared = ctx, leg, powers, squared
        self.exponent = real(ctx, exponent)
        self.seen: dict[Number, tuple[Number, Number]] = {}

    def forget(self) -> None:
        self.seen.clear()

    def with_log_power(self, k: int) -> Callable[[Number], Number]:
        def integrand(s: Number) -> Number:
            found = self.seen.get(s)
            if found is None:
                found = self.seen[s] = self._evaluate(s)
            weight, logarithm = found
            return weight * logarithm**k

        return integrand

    def _evaluate(self, s: Number) -> tuple[Number, Number]:
        ctx, leg = self.ctx, self.leg
        u, weight = (leg.end * s * s, 2 * s * leg.end) if self.squared else (leg.end * s, leg.end)
        c0, c1, c2 = leg.quadratic
        q = c0 + u * (c1 + u * c2)
        if q == 0:  # the zero at the anchor itself, which carries no weight
            return ctx.zero, ctx.zero
        if ctx.im(q) == 0 and ctx.re(q) > 0:
            logarithm = ctx.log(ctx.re(q))
        else:
            logarithm = ctx.log(ctx.j * q) - ctx.j * ctx.pi / 2
        n1, n2 = self.powers
        weight = weight * (leg.anchor + u) ** (n1 - 1) * (leg.co_anchor - u) ** (n2 - 1)
        if self.exponent:
            weight *= ctx.exp(self.exponent * logarithm)
        return weight, logarithm


def _break_points(leg: Leg) -> list[Number]:
    """Return increasing t from 0 to 1 (u = t * end), geometric around the nearby zeros of Q."""
    zeros = [zero / leg.end for zero in leg.zeros]
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


def scalar_prefactor(
    ctx: Context, measure: Measure, dimension: int, a: fmpq, powers: Sequence[int], *, terms: int
) -> list[Number]:
    """Expand N(eps) Gamma(a + eps) / prod Gamma(n) from order -1 if Gamma has a pole, else from 0.

    The logarithm of each Gamma function is expanded in polygamma functions.
    """
    positive = a
    while positive <= 0:
        positive += 1
    exponent = _log_gamma(ctx, real(ctx, positive), 1, terms)
    for rate, power in _MEASURE_GAMMAS[measure]:
        part = _log_gamma(ctx, ctx.one, rate, terms)
        exponent = [total + power * c for total, c in zip(exponent, part, strict=True)]
    if measure is Measure.MSBAR and terms > 1:
        exponent[1] += ctx.euler
    if measure is Measure.TWO_PI:
        exponent[0] -= ctx.log(4 * ctx.pi) * dimension / 2
        if terms > 1:
            exponent[1] += ctx.log(4 * ctx.pi)
    series = exponential(ctx, exponent)
    step = positive - 1
    while step >= a:  # Gamma(step + eps) = Gamma(step + 1 + eps) / (step + eps)
        if step != 0:
            shift = real(ctx, step)
            for n in range(terms):
                series[n] = (series[n] - (series[n - 1] if n else 0)) / shift
        step -= 1
    divisor = math.prod(math.factorial(n - 1) for n in powers)
    return [c / divisor for c in series]


_MEASURE_GAMMAS: dict[Measure, tuple[tuple[int, int], ...]] = {
    Measure.MSBAR: (),
    Measure.PLAIN: (),
    Measure.TWO_PI: (),
    Measure.GAMMA: ((1, -1),),
    Measure.R_GAMMA: ((-2, 1), (1, -1), (-1, -2)),
}


def _log_gamma(ctx: Context, at: Number, rate: int, terms: int) -> list[Number]:
    """Expand log Gamma(at + rate eps), at > 0, in polygamma functions (DLMF 5.15)."""
    higher = [ctx.psi(k - 1, at) * rate**k / ctx.factorial(k) for k in range(1, terms)]
    return [ctx.loggamma(at), *higher]


def exponential(ctx: Context, exponent: Sequence[Number]) -> list[Number]:
    """Return the coefficients of exp(sum_k s_k eps^k)."""
    result = [ctx.exp(exponent[0])]
    for n in range(1, len(exponent)):
        total = sum(k * exponent[k] * result[n - k] for k in range(1, n + 1))
        result.append(total / n)
    return result
