"""The finite part of the two-point integral with real masses: three logarithms per point.

With l_i = log m_i^2 the order eps of J = Int Q^(-eps) dx is 2 - V_1 l_1 - V_2 l_2 - X,

lambda >= 0:  V_i = sign(A_i) 2 m_i^2/d_i, d_i = |A_i| + R,
              X = R/|p^2| log1p(2|p^2|/min(d_1, d_2))                    if A_1 A_2 < 0
              X = R/|p^2| [log(d_1 d_2/(4|p^2|)) - i pi theta(p^2)]      if A_1 A_2 > 0
lambda < 0:   V_i = A_i/(2 p^2),  X = (R/p^2) arctan2(R, -S)

R = sqrt|lambda|, A_1,2 = p^2 +- (m1^2-m2^2), S = p^2-m1^2-m2^2: the two ends and T of
`loopint.integrals.quadratic`, whose log(1-w_i) = log(2R/d_i) combine.  All in the arithmetic of the
arguments: plain doubles, or extended precision for the few points where a bound is too large.

Bound, in units of u of that arithmetic, with M = |p^2|+m1^2+m2^2 and D = |m1^2-m2^2|: lambda errs
by 7 M^2, R by rho = 3.6 M^2/|lambda| + 2 relative to itself, A_i by D + |A_i|, d_i by
3 + rho + D/d_i relative to itself, and the angle by rho/2 + R M/(2 m1^2 m2^2).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from loopint.arrays.rounding import Real

STEP = 16.0  # a logarithm within 4 ulp, times a rounded coefficient, added
PI_LOW = 1.2246467991473532e-16  # pi less its double, lost in doubles


@dataclass(frozen=True, slots=True)
class FinitePart:
    """The order eps of J: real and imaginary part, and the error in units of u."""

    re: Real
    im: Real
    error: Real


def finite_part(p: Real, m1: Real, m2: Real) -> FinitePart:
    """Evaluate unscaled points with nonzero entries within 2^+-200.

    Where the formula does not serve (p^2 = 0, lambda = 0, strong cancellations) the error is
    large, inf or nan.
    """
    excess = p - m1
    excess -= m2
    kallen = excess * excess
    product = 4.0 * m1
    product *= m2
    kallen -= product
    mask = kallen < 0
    below = np.flatnonzero(mask)
    if below.size == 0:
        return _outside(p, m1, m2, kallen)
    if below.size == p.size:
        return _between_thresholds(p, m1, m2, excess, kallen)
    rest = np.flatnonzero(~mask)
    result = FinitePart(np.empty_like(p), np.empty_like(p), np.empty_like(p))
    for index, part in (
        (below, _between_thresholds(p[below], m1[below], m2[below], excess[below], kallen[below])),
        (rest, _outside(p[rest], m1[rest], m2[rest], kallen[rest])),
    ):
        result.re[index], result.im[index] = part.re, part.im
        result.error[index] = part.error
    return result


def _root(p: Real, m1: Real, m2: Real, kallen: Real) -> tuple[Real, Real, Real, Real]:
    """Return |p^2|, M, sqrt|lambda| and rho."""
    distance, size = np.abs(p), np.abs(kallen)
    largest = distance + m1
    largest += m2
    rho = largest * largest
    rho *= 3.6
    rho /= size
    rho += 2.0
    return distance, largest, np.sqrt(size, out=size), rho


def _between_thresholds(p: Real, m1: Real, m2: Real, excess: Real, kallen: Real) -> FinitePart:
    """Lambda < 0, so p^2 > 0 and both masses are nonzero; otherwise lambda is a rounding error."""
    _, largest, root, rho = _root(p, m1, m2, kallen)
    half = 0.5 / p
    difference = m1 - m2
    log1, log2 = np.log(m1), np.log(m2)
    term1, term2 = (p + difference) * half * log1, (p - difference) * half * log2
    factor = root / p
    angle = factor * np.arctan2(root, -excess)
    value = 2.0 - term1 - term2 - angle
    error = (
        (np.abs(log1) + np.abs(log2)) * np.abs(difference * half)
        + STEP * (np.abs(term1) + np.abs(term2))
        + (rho + STEP) * angle
        + rho * factor
        + 4.0 * (largest * half)
        + 3.0 * np.abs(value)
    )
    error += 8.0
    if p.min() <= 0:
        error[p <= 0] = np.inf
    return FinitePart(value, np.zeros_like(p), error)


def _outside(p: Real, m1: Real, m2: Real, kallen: Real) -> FinitePart:
    """Lambda >= 0; a massless line has coefficient zero."""
    distance, _, root, rho = _root(p, m1, m2, kallen)
    difference = m1 - m2
    a1, a2 = p + difference, p - difference
    d1, d2 = np.abs(a1) + root, np.abs(a2) + root
    term1 = np.copysign(2.0 * m1 / d1, a1) * _log_mass(m1)
    term2 = np.copysign(2.0 * m2 / d2, a2) * _log_mass(m2)
    smaller = np.minimum(d1, d2)
    twice = 2.0 * distance
    ratio = twice / smaller
    factor = root / distance
    a1 *= a2  # not zero within 2^+-200 unless one is
    mask = a1 > 0
    same, opposite = np.flatnonzero(mask), np.flatnonzero(~mask)
    logs = np.empty_like(p)
    logs[same] = np.log(d1[same] * d2[same] / (2.0 * twice[same]))
    logs[opposite] = np.log1p(ratio[opposite])
    logs *= factor
    value = 2.0 - term1 - term2 - logs

    delta = np.abs(difference, out=difference)
    delta /= smaller
    sensitivity = np.minimum(ratio, 1.0, out=ratio)  # of X |p^2|/R to d_1 and d_2
    sensitivity[same] = 2.0
    imaginary = np.where(mask & (p > 0), (factor.dtype.type(np.pi) + PI_LOW) * factor, 0.0)
    delta += rho
    delta += 6.0
    error = (np.abs(term1) + np.abs(term2)) * (delta + STEP)
    error += (np.abs(logs) + 1.3 * imaginary) * (rho + STEP)
    sensitivity *= factor
    sensitivity *= delta
    error += sensitivity
    error += 3.0 * np.abs(value)
    error += 8.0
    return FinitePart(value, imaginary, error)


def _log_mass(m: Real) -> Real:
    result: Real = np.log(m if m.min() > 0 else np.where(m > 0, m, 1.0))
    return result
