"""P = Int x(1-x) Q^(-1-eps) dx = (1/eps) dJ/dp^2 where p^2 is small and the masses differ.

There J is the sum of two ends, J = sum W_i (m_i^2)^(-eps) h(w_i) with W_1 + W_2 = 1, so that

    eps P = W_1' [ (m_1^2)^(-eps) h(w_1) - (m_2^2)^(-eps) h(w_2) ]
            + sum W_i (m_i^2)^(-eps) dh/du(w_i) w_i'/(1-w_i),    u = -log(1-w),
    W' = -W D'/D,   w' = (4 m^2/D^2)(1 - 2 p^2 D'/D),   D' = (R + sigma S)/R,

with (R + sigma S)(R - sigma S) = -4 m_1^2 m_2^2 where R + sigma S cancels.
Nothing is divided by p^2.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from loopint.arrays.points import Points
from loopint.arrays.quadratic import far_function, guarded, nearer_root
from loopint.arrays.rounding import PRODUCT, QUOTIENT, UNIT, Number, Real, logarithm, quotient, size
from loopint.arrays.series import ArraySeries, MajorisedSeries
from loopint.arrays.tables import double_tables

SMALL = 0.25  # of p^2 relative to the largest scale


def serves(points: Points) -> NDArray[np.bool_]:
    """Mark the points: |p^2| small, both ends nearer to the same root, |u| within the tables."""
    sigma1, sigma2 = nearer_root(points.a1, points.root), nearer_root(points.a2, points.root)
    good = (np.abs(points.p) < SMALL * points.largest) & (sigma1 != sigma2)
    good &= (points.m1 != 0) & (points.m2 != 0)
    for m, a, sigma in ((points.m1, points.a1, sigma1), (points.m2, points.a2, sigma2)):
        d = a + sigma * points.root
        good &= quotient(4.0 * points.p * m, d * d).real <= 0.5
    result: NDArray[np.bool_] = good & np.isfinite(points.kallen_error)
    return result


@dataclass(frozen=True, slots=True)
class _End:
    value: MajorisedSeries  # (m^2)^(-eps) h
    slope: ArraySeries  # W (m^2)^(-eps) dh/du w'/(1-w)
    growth: Number  # W'
    growth_error: Real  # relative


def momentum_slope(points: Points, highest: int) -> ArraySeries:
    """Expand P through eps^highest."""
    first, second = (
        _end(points, points.m1, points.a1, highest + 1),
        _end(points, points.m2, points.a2, highest + 1),
    )
    difference = first.value.scaled(first.growth, first.growth_error)
    difference = difference + second.value.scaled(-first.growth, first.growth_error)
    total = difference + first.slope + second.slope
    return ArraySeries(total.values[1:], total.errors[1:])


def _end(points: Points, m: Number, a: Number, highest: int) -> _End:
    sigma = nearer_root(a, points.root)
    signed, excess = sigma * points.root, points.excess
    d = a + signed
    d_error = 2.0 + points.root_error + (3.2 * UNIT) * points.largest / size(d)
    weight = quotient(2.0 * m, d)
    v = quotient(2.0 * signed, d)
    v_error = points.root_error + d_error + QUOTIENT

    # sigma R + S, of which D' is the multiple 1/(sigma R)
    total, other = signed + excess, signed - excess
    cancels = size(total) < size(other)
    total = np.where(cancels, quotient(-4.0 * points.m1 * points.m2, other), total)
    r_error = 1.5 * (points.root_error + 1.0) + (6.4 * UNIT) * points.largest / size(signed)
    slope_error = r_error + points.root_error + (2.0 * QUOTIENT + 2.0 * PRODUCT + 2.0)
    relative_slope = quotient(quotient(total, signed), d)  # D'/D
    relative_error = slope_error + d_error + QUOTIENT

    tables = double_tables(highest, real=not np.iscomplexobj(v))
    rate, rate_error = points.exponent(*logarithm(m))
    value = far_function(v, v_error, tables).times_exponential(rate, rate_error)
    log_v, log_error = logarithm(v)
    table, u = tables.far_slope, -log_v
    derivative = MajorisedSeries(
        [0.0, *(polynomial(u) for polynomial in table.polynomials[1:])],
        [0.0, *table.sizes[1:]],
        table.error + table.slope * guarded(log_error + v_error),
        0.0,
        np.zeros_like(points.p),
    ).times_exponential(rate, rate_error)
    twice = 2.0 * points.p * relative_slope
    bracket = 1.0 - twice
    bracket_error = (size(twice) * (relative_error + PRODUCT) + size(bracket)) / size(bracket)
    factor = quotient(weight * weight, m * v) * weight * bracket
    factor_error = 3.0 * (d_error + QUOTIENT) + v_error + bracket_error + 4.0 * PRODUCT + QUOTIENT
    growth = -weight * relative_slope
    growth_error = d_error + QUOTIENT + relative_error + PRODUCT
    return _End(value, derivative.scaled(factor, factor_error), growth, growth_error)
