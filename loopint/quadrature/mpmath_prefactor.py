"""Gamma functions and measure in front of the Feynman integral, from mpmath's polygammas."""

from __future__ import annotations

from typing import TYPE_CHECKING

from flint import fmpq

from loopint.core.conventions import Measure
from loopint.quadrature.mpmath_numbers import Context, real

if TYPE_CHECKING:
    from collections.abc import Sequence

    from loopint.core.epsilon_linear import EpsilonLinear
    from loopint.quadrature.paths import Number

ONE = fmpq(1)
_MEASURE_GAMMAS: dict[Measure, tuple[tuple[int, int], ...]] = {
    Measure.MSBAR: (),
    Measure.PLAIN: (),
    Measure.TWO_PI: (),
    Measure.GAMMA: ((1, -1),),
    Measure.R_GAMMA: ((-2, 1), (1, -1), (-1, -2)),
}


def scalar_prefactor(
    ctx: Context,
    measure: Measure,
    dimension: int,
    gamma: EpsilonLinear,
    powers: Sequence[EpsilonLinear],
    *,
    terms: int,
) -> list[Number]:
    """Expand N(eps) Gamma(gamma) / prod Gamma(power) from its lowest order.

    The logarithm of each Gamma function is expanded in polygamma functions, and
    Gamma(z) = Gamma(z+1)/z leads to arguments of at least 1.
    """
    exponent = [ctx.zero] * terms
    for slope, count in _MEASURE_GAMMAS[measure]:
        _add_log_gamma(ctx, exponent, ctx.one, ctx.mpf(slope), count)
    if measure is Measure.MSBAR and terms > 1:
        exponent[1] += ctx.euler
    if measure is Measure.TWO_PI:
        exponent[0] -= ctx.log(4 * ctx.pi) * dimension / 2
        if terms > 1:
            exponent[1] += ctx.log(4 * ctx.pi)
    linear = []  # constant, rate, count in (constant + rate eps)^count
    for argument, count in [(gamma, 1), *((power, -1) for power in powers)]:
        positive = argument.constant
        while positive <= 0:
            linear.append((positive, argument.rate, -count))
            positive = positive + ONE
        _add_log_gamma(ctx, exponent, real(ctx, positive), real(ctx, argument.rate), count)
    series = exponential(ctx, exponent)
    for constant, rate, count in linear:
        _multiply(ctx, series, real(ctx, constant), real(ctx, rate), count)
    return series


def _add_log_gamma(
    ctx: Context, exponent: list[Number], at: Number, rate: Number, count: int
) -> None:
    """Add count * log Gamma(at + rate eps), at > 0, expanded in polygamma functions (DLMF 5.15)."""
    for k in range(len(exponent)):
        value = ctx.loggamma(at) if k == 0 else ctx.psi(k - 1, at) * rate**k / ctx.factorial(k)
        exponent[k] += count * value


def _multiply(
    ctx: Context, series: list[Number], constant: Number, rate: Number, count: int
) -> None:
    """Multiply by (constant + rate eps)^count, count = 1 or -1; without constant, by rate^count."""
    terms = len(series)
    if constant == 0:
        series[:] = [c * rate**count for c in series]
    elif count > 0:
        for n in reversed(range(terms)):
            series[n] = constant * series[n] + (rate * series[n - 1] if n else ctx.zero)
    else:
        for n in range(terms):
            series[n] = (series[n] - (rate * series[n - 1] if n else ctx.zero)) / constant


def exponential(ctx: Context, exponent: Sequence[Number]) -> list[Number]:
    """Return the coefficients of exp(sum_k s_k eps^k)."""
    result = [ctx.exp(exponent[0])]
    for n in range(1, len(exponent)):
        total = sum(k * exponent[k] * result[n - k] for k in range(1, n + 1))
        result.append(total / n)
    return result
