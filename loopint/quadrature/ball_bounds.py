"""Logarithms of the factors of the integrand, and bounds on the integrand on a disc, in balls."""

from __future__ import annotations

from typing import TYPE_CHECKING

from flint import acb, arb

from loopint.core.numbers import Ball, real_part

if TYPE_CHECKING:
    from loopint.quadrature.factors import Factor

_I = acb(0, 1)


def logarithm(value: Ball) -> Ball:
    """Return the logarithm with its cut on the positive imaginary axis.

    It is continuous for Im <= 0, where Q is, and principal for Re > 0, where x and 1-x are.
    """
    if isinstance(value, arb) and value > 0:
        return value.log()
    return (value * _I).log() - acb(0, arb.pi() / 2)


def bound_on_disc(factors: tuple[Factor, ...], centre: Ball, radius: arb) -> tuple[arb, arb]:
    """Bound |integrand at eps = 0| and |Lambda| on a disc that no singularity touches.

    Lambda = sum of rate * log(factor) is the logarithm that comes with eps.
    """
    largest, largest_log = arb(1), arb(0)
    for factor in factors:
        exponent = factor.exponent
        if factor.is_polynomial:
            size = _largest_modulus(factor.coefficients, centre, radius)
            largest *= size ** int(exponent.constant.p)
            continue
        growth = arb(0)
        for zero in factor.zeros:
            growth -= (1 - radius / abs(zero - centre)).log()
        log = logarithm(_value(factor.coefficients, centre))
        power = arb(exponent.constant)
        largest *= (power * real_part(log) + abs(power) * growth).exp()
        largest_log += abs(arb(exponent.rate)) * (abs(log) + growth)
    return largest, largest_log


def _value(coefficients: tuple[Ball, ...], at: Ball) -> Ball:
    value = coefficients[-1]
    for c in coefficients[-2::-1]:
        value = c + at * value
    return value


def _largest_modulus(coefficients: tuple[Ball, ...], centre: Ball, radius: arb) -> arb:
    """Bound a polynomial of degree 1 or 2 on a disc by its Taylor coefficients at the centre."""
    size = abs(_value(coefficients, centre))
    if len(coefficients) == 3:
        _, c1, c2 = coefficients
        return size + radius * abs(c1 + 2 * centre * c2) + radius * radius * abs(c2)
    return size + radius * abs(coefficients[1])
