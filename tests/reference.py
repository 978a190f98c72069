"""Independent evaluations in mpmath that tests compare with; nothing here calls loopint."""

from __future__ import annotations

from fractions import Fraction
from functools import lru_cache
from itertools import pairwise
from typing import TypeAlias

import mpmath

Exact: TypeAlias = Fraction
ExactPair: TypeAlias = "Fraction | tuple[Fraction, Fraction]"


def to_mp(value: ExactPair | int) -> mpmath.mpf | mpmath.mpc:
    """Round a rational, or a pair of rationals, to the current mpmath precision."""
    if isinstance(value, tuple):
        return mpmath.mpc(to_mp(value[0]), to_mp(value[1]))
    value = Fraction(value)
    return mpmath.mpf(value.numerator) / value.denominator


def msbar_gamma_series(terms: int) -> list[mpmath.mpf]:
    """Expand eps Gamma(eps) exp(gamma_E eps) by DLMF 5.7.3."""
    exponent = [mpmath.mpf(0), mpmath.mpf(0)]
    exponent += [mpmath.zeta(k) * (-1) ** k / k for k in range(2, terms)]
    result = [mpmath.mpf(1)]
    for n in range(1, terms):
        result.append(mpmath.fsum(k * exponent[k] * result[n - k] for k in range(1, n + 1)) / n)
    return result


@lru_cache(maxsize=8)
def tanh_sinh_nodes(precision: int) -> list[tuple[mpmath.mpf, mpmath.mpf, mpmath.mpf]]:
    """Return (x, 1-x, weight) of the double-exponential rule on (0,1) (Takahasi, Mori 1974)."""
    step = mpmath.mpf(1) / 64 if precision > 120 else mpmath.mpf(1) / 32
    nodes = []
    j = 0
    while True:
        t = j * step
        growth = mpmath.pi / 2 * mpmath.sinh(t)
        small = 1 / (1 + mpmath.exp(2 * growth))  # distance from the nearer end
        weight = step * mpmath.pi / 2 * mpmath.cosh(t) / mpmath.cosh(growth) ** 2 / 2
        if weight < mpmath.mpf(2) ** (-precision - 10):
            return nodes
        nodes.append((1 - small, small, weight))
        if j:
            nodes.append((small, 1 - small, weight))
        j += 1


def bubble_by_quadrature(
    p2: Fraction, m1: ExactPair, m2: ExactPair, highest: int, digits: int
) -> dict[int, mpmath.mpc]:
    """MS-bar B(1,1), d0 = 4, mu = 1: double-exponential quadrature of log^k Q, orders -1..highest.

    Above threshold the path leaves the real axis to the side where Im Q < 0; elsewhere it is
    straight.  Distances to the ends are kept, so that zeros of Q at the ends are harmless.
    """
    with mpmath.workdps(digits + 15):
        p, a, b = to_mp(p2), mpmath.mpmathify(to_mp(m1)), mpmath.mpmathify(to_mp(m2))
        sums = _log_moments(p, a, b, highest + 1)
        gamma = msbar_gamma_series(highest + 2)
        return {
            k - 1: mpmath.fsum(gamma[k - j] * sums[j] for j in range(k + 1))
            for k in range(highest + 2)
        }


def _log_moments(p: mpmath.mpf, a: mpmath.mpc, b: mpmath.mpc, highest: int) -> list[mpmath.mpc]:
    """Return Int_0^1 (-log Q)^k / k! dx for k = 0 .. highest."""
    centre = (p - mpmath.re(a) + mpmath.re(b)) / (2 * p) if p else mpmath.mpf(-1)
    corners: list[mpmath.mpc] = [mpmath.mpf(0), mpmath.mpf(1)]
    if p > 0 and 0 < centre < 1:
        corners = [
            mpmath.mpf(0),
            mpmath.mpc(centre / 2, centre / 3),
            centre,
            mpmath.mpc((1 + centre) / 2, -(1 - centre) / 3),
            mpmath.mpf(1),
        ]
    sums = [mpmath.mpc(0)] * (highest + 1)
    precision = mpmath.mp.prec
    for start, end in pairwise(corners):
        length = end - start
        for left, right, weight in tanh_sinh_nodes(precision):
            if end == 1 and right < left:
                y = right * length  # 1 - x
                q = a + y * (b - a) - y * (1 - y) * p
            else:
                x = start + left * length
                q = b + x * (a - b) - x * (1 - x) * p
            logarithm = mpmath.log(mpmath.mpc(0, 1) * q) - mpmath.mpc(0, mpmath.pi / 2)
            term = weight * length
            for k in range(highest + 1):
                sums[k] += term
                term *= -logarithm / (k + 1)
    return sums


def at_epsilon(series: object, epsilon: mpmath.mpf) -> mpmath.mpc:
    """Sum a Laurent series of the package at a number epsilon."""
    return mpmath.fsum(series[k] * epsilon**k for k in series)
