"""Where the leading coefficient of a bubble vanishes exactly, decided with rational numbers.

A ball around zero never proves a relative accuracy, so a coefficient that is zero must be known to
be.  For N = n1 + n2 >= d0 the integral at eps = 0 is algebraic in two cases, and can vanish at
rational points such as p^2 = 2 m^2 for B(1,4) with a massless first line in d0 = 4:

one massless line, power n, z = p^2/m^2
    2F1(N-d0/2, n; d0/2; z) is a power of 1-z times the polynomial 2F1(d0-N, d0/2-n; d0/2; z)
    (Euler, DLMF 15.8.1); so is an infrared residue, for an integer n - d0/2 >= 0.
odd d0, two masses
    with s = d0/2 - N = -3/2, -5/2, ... the recurrences of `loopint.integrals.moments` and

        lambda Int Q^s = [Q' Q^(s+1)]_0^1/(s+1) - p^2 (2/(s+1) + 4) Int Q^(s+1)

    start from boundary terms alone, m1 and m2 times rationals: the integral is u m1 + v m2.
"""

from __future__ import annotations

from math import comb
from typing import TYPE_CHECKING

from flint import fmpq

from loopint.core.numbers import ExactComplex

if TYPE_CHECKING:
    from loopint.core.kinematics import TwoPoint

ZERO, ONE = ExactComplex(fmpq(0)), ExactComplex(fmpq(1))


def leading_order_vanishes(point: TwoPoint, n1: int, n2: int, dimension: int) -> bool:
    """Whether the leading coefficient of B(n1, n2) is known to be exactly zero.

    Both powers are positive, p^2 and lambda are not zero and not both lines are massless.  The
    leading coefficient is that of 1/eps for an infrared divergence, and of eps^0 otherwise.
    """
    if point.m1_squared.is_zero:
        return _polynomial_vanishes(point.p_squared, point.m2_squared, n1, n2, dimension)
    if point.m2_squared.is_zero:
        return _polynomial_vanishes(point.p_squared, point.m1_squared, n2, n1, dimension)
    if dimension % 2 == 1 and n1 + n2 >= dimension:
        return _sum_of_masses_vanishes(point, n1, n2, dimension)
    return False


def _polynomial_vanishes(
    p_squared: fmpq, m_squared: ExactComplex, massless: int, massive: int, dimension: int
) -> bool:
    half, total = fmpq(dimension, 2), massless + massive
    degrees = [-int(x.p) for x in (dimension - total + fmpq(0), half - massless) if x.q == 1]
    degrees = [degree for degree in degrees if degree >= 0]
    if not degrees:
        return False
    z = ExactComplex(p_squared) / m_squared
    term = value = ONE
    for j in range(min(degrees)):
        ratio = (dimension - total + j) * (half - massless + j) / ((half + j) * (1 + j))
        term = (term * z).scaled(ratio)
        value = value + term
    return value.is_zero


def _sum_of_masses_vanishes(point: TwoPoint, n1: int, n2: int, dimension: int) -> bool:
    """Whether u m1 + v m2 = 0; u and v are found one after the other."""
    m1, m2 = point.m1_squared, point.m2_squared
    u = _multiple_of_mass(point, n1, n2, dimension, at_one=True)
    v = _multiple_of_mass(point, n1, n2, dimension, at_one=False)
    if u.is_zero or v.is_zero:
        return u.is_zero and v.is_zero
    if u * u * m1 != v * v * m2:
        return False
    # u m1 = +-v m2: the sum is zero or twice the first
    first = u.ball() * m1.ball().sqrt()
    total = first + v.ball() * m2.ball().sqrt()
    return bool(abs(total) < abs(first))


def _multiple_of_mass(
    point: TwoPoint, n1: int, n2: int, dimension: int, *, at_one: bool
) -> ExactComplex:
    """Return u (the end x = 1) or v (x = 0) of Int x^(n1-1) (1-x)^(n2-1) Q^s = u m1 + v m2."""
    m1, m2 = point.m1_squared, point.m2_squared
    p = ExactComplex(point.p_squared)
    beta = m1 - m2 - p
    slope, mass = (p + m1 - m2, m1) if at_one else (-beta, m2)
    s0 = fmpq(dimension, 2) - n1 - n2
    power = ONE  # (m^2)^(s+1/2)
    moments = [ZERO]
    inverse, s = ONE / mass, fmpq(-1, 2)
    while s > s0:
        s = s - 1
        power = power * inverse
        lower = (p * moments[0]).scaled(2 / (s + 1) + 4)
        moments = [((slope * power).scaled(1 / (s + 1)) - lower) / point.kallen]
    for k in range(1, n1 + n2 - 1):
        right = -(beta * moments[k - 1]).scaled(k + s0)
        if at_one:
            right = right + power
        elif k == 1:
            right = right - power
        if k > 1:
            right = right - (m2 * moments[k - 2]).scaled(fmpq(k - 1))
        moments.append((right / p).scaled(1 / (k + 1 + 2 * s0)))
    total = ZERO
    for j in range(n2):
        total = total + moments[n1 - 1 + j].scaled(fmpq((-1) ** j * comb(n2 - 1, j)))
    return total
