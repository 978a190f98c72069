"""Small pieces shared by the closed forms: powers of masses, linear factors in epsilon."""

from __future__ import annotations

from flint import arb, fmpq

from loopint.core.epsilon_linear import EpsilonLinear
from loopint.core.laurent import UNIT, BallSeries, convolve, exponential
from loopint.core.numbers import Ball, ExactComplex


def mass_power(m_squared: ExactComplex, exponent: fmpq) -> tuple[Ball, Ball]:
    """Return ((m^2)^exponent, log m^2) for a nonzero m^2 and an exponent that is a multiple of 1/2.

    m^2 is real and positive or in the lower half-plane, where the principal values are the ones
    of m^2 - i0.
    """
    ball = m_squared.ball()
    if exponent == 0:
        return UNIT, ball.log()
    power = ball ** int(exponent.p) if exponent.q == 1 else ball.sqrt() ** int(exponent.p)
    return power, ball.log()


def times_exponential(value: BallSeries, rate: Ball, constant: Ball = UNIT) -> BallSeries:
    """Return value * constant * exp(rate eps)."""
    terms = len(value.coefficients)
    factor = exponential(rate, terms, constant)
    return BallSeries(value.lowest, convolve(value.coefficients, factor, terms))


def times_mass_power(
    m_squared: ExactComplex,
    value: BallSeries,
    s0: fmpq,
    two: int = 0,
    constant: Ball = UNIT,
) -> BallSeries:
    """Return value * constant * 2^(two eps) (m^2)^(s0 - eps).

    The logarithm is that of m^2/2^two, so that it is exactly zero where it vanishes.
    """
    power, logarithm = mass_power(m_squared, s0)
    if two:
        logarithm = m_squared.scaled(fmpq(2) ** -two).ball().log()
    return times_exponential(value, -logarithm, constant if s0 == 0 else power * constant)


def times_mass_exponent(
    m_squared: ExactComplex, value: BallSeries, exponent: EpsilonLinear
) -> BallSeries:
    """Return value * (m^2)^(constant + rate eps)."""
    power, logarithm = mass_power(m_squared, exponent.constant)
    result = times_exponential(value, exponent.rate * logarithm) if exponent.rate != 0 else value
    return result if exponent.constant == 0 else result.scaled(power)


def times_linear(value: BallSeries, constant: fmpq, rate: fmpq | int) -> BallSeries:
    """Return value * (constant + rate eps), an exact polynomial: no order is lost."""
    c = value.coefficients
    first = [c[0] * constant]
    return BallSeries(
        value.lowest, first + [c[n] * constant + c[n - 1] * rate for n in range(1, len(c))]
    )


def over_linear(value: BallSeries, constant: fmpq, rate: int) -> BallSeries:
    """Return value / (constant + rate eps); one order is lost if the constant is zero."""
    if constant == 0:
        return value.scaled(fmpq(1, rate)).shifted(-1)
    result: list[Ball] = []
    for c in value.coefficients:
        previous = result[-1] if result else arb(0)
        result.append((c - previous * rate) / constant)
    return BallSeries(value.lowest, result)
