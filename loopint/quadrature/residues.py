"""The pole of the parameter integral where it is a rational number.

Near an end with t = x or t = 1-x the integrand is t^(-1-K + b eps) g(t): the pole is g_K/(b eps),
g_K the K-th Taylor coefficient of g at eps = 0.  With an integer power of Q it is rational, and
known to vanish where it does.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from flint import fmpq

from loopint.core.numbers import ExactComplex
from loopint.quadrature.exponents import Integrand, Place, is_divergent
from loopint.quadrature.paths import resolve_on_shell, zero_orders

if TYPE_CHECKING:
    from loopint.core.kinematics import TwoPoint

ZERO, ONE = ExactComplex(fmpq(0)), ExactComplex(fmpq(1))


def exact_pole(integrand: Integrand, point: TwoPoint) -> ExactComplex | None:
    """Return the coefficient of 1/eps, or None if it is not known to be rational."""
    point = resolve_on_shell(point)
    if point.snapped or integrand.quadratic.constant.q != 1:
        return None
    p, m1, m2 = ExactComplex(point.p_squared), point.m1_squared, point.m2_squared
    at_start, at_end, inside = zero_orders(point)
    if is_divergent(integrand.near(Place.INSIDE, inside), Place.INSIDE):
        return None
    total = ZERO
    for place, order, other, quadratic in (
        (Place.START, at_start, integrand.second, [m2, m1 - m2 - p, p]),
        (Place.END, at_end, integrand.first, [m1, m2 - m1 - p, p]),
    ):
        exponent = integrand.near(place, order)
        if not is_divergent(exponent, place):
            continue
        if other.constant.q != 1:
            return None
        terms = -int(exponent.constant.p)  # K + 1
        regular = _power(quadratic[order:], int(integrand.quadratic.constant.p), terms)
        rest = _power([ONE, -ONE], int(other.constant.p), terms)
        for j in range(terms):
            total = total + (regular[j] * rest[terms - 1 - j]).scaled(1 / exponent.rate)
    return total


def _power(base: list[ExactComplex], exponent: int, terms: int) -> list[ExactComplex]:
    """Return the first Taylor coefficients of a polynomial, not zero at zero, to a power.

    n a_0 c_n = sum_k (exponent k - n + k) a_k c_(n-k).
    """
    lead = ONE
    for _ in range(abs(exponent)):
        lead = lead * base[0]
    result = [lead if exponent >= 0 else ONE / lead]
    for n in range(1, terms):
        total = ZERO
        for k in range(1, min(n, len(base) - 1) + 1):
            total = total + (base[k] * result[n - k]).scaled(fmpq(exponent * k - n + k))
        result.append((total / base[0]).scaled(fmpq(1, n)))
    return result
