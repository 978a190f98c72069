"""J(s) = Int_0^1 Q(x)^s dx, s = -eps, in doubles: the formula of `loopint.integrals.quadratic`.

Each end of the integration contributes W_i (m_i^2)^(-eps) h(w_i), |W_i| = |2 m_i^2/D_i| being the
distance to the nearer root of Q, and T the integral between the roots.  Where both roots are far
from the interval these cancel; `loopint.arrays.gauss_rule` serves such points.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from loopint.arrays.points import Points
from loopint.arrays.rounding import (
    PRODUCT,
    QUOTIENT,
    UNIT,
    Number,
    Real,
    as_complex,
    logarithm,
    quotient,
    size,
)
from loopint.arrays.series import (
    ArraySeries,
    MajorisedSeries,
    constants_times_exponential,
)
from loopint.arrays.tables import DoubleTables, double_tables

LARGEST_ARGUMENT_ERROR = 2.0**33  # in units of UNIT: the tables' radii have room for this


def power_integral(points: Points, highest: int) -> ArraySeries:
    """Expand J through eps^highest, for p^2 or m1^2 - m2^2 different from zero.

    Real points have lambda >= 0 and are either all above threshold or none.
    """
    sigma1 = nearer_root(points.a1, points.root)
    sigma2 = nearer_root(points.a2, points.root)
    total = _end(points, points.m1, points.a1, sigma1, highest)
    add_in_place(total, _end(points, points.m2, points.a2, sigma2, highest))
    index = np.flatnonzero((sigma1 == sigma2) & (points.p != 0) & (points.kallen != 0))
    if index.size == 0:
        return total
    if index.size == points.p.size:
        return total + _between_roots(points, sigma1, highest)
    added = _between_roots(points.take(index), sigma1[index], highest)
    for k in range(highest + 1):
        if np.iscomplexobj(added.values[k]):
            total.values[k] = as_complex(total.values[k])
        total.values[k][index] += added.values[k]
        errors = total.errors[k][index] + added.errors[k]
        total.errors[k][index] = errors + size(total.values[k][index])
    return total


def above_threshold(points: Points) -> NDArray[np.bool_]:
    """Mark real points with lambda >= 0 where J has an imaginary part."""
    above: NDArray[np.bool_] = (points.p > 0) & (points.excess > 0) & (points.kallen != 0)
    return above


def add_in_place(total: ArraySeries, other: ArraySeries) -> None:
    """Add a series to another one of the same type."""
    for k, (value, error) in enumerate(zip(other.values, other.errors, strict=True)):
        total.values[k] += value
        total.errors[k] += error
        total.errors[k] += size(total.values[k])


def nearer_root_distances(points: Points) -> tuple[Real, Real]:
    """Return approximations of |W_1| and |W_2|; inf or nan where D = 0."""
    distances = []
    for m, a in ((points.m1, points.a1), (points.m2, points.a2)):
        if np.iscomplexobj(a):
            d = a + nearer_root(a, points.root) * points.root
            distances.append(2.0 * np.sqrt(_square(m) / _square(d)))
        else:
            below = points.kallen < 0
            d = np.where(below, 2.0 * np.sqrt(np.abs(points.p) * m), np.abs(a) + points.root)
            distances.append(np.where(m == 0, 0.0, 2.0 * m / d))
    return distances[0], distances[1]


def _square(x: Number) -> Real:
    square: Real = x.real * x.real + x.imag * x.imag
    return square


def nearer_root(a: Number, root: Number) -> Real:
    """Return sigma = +-1 with Re(sigma conj(A) R) >= 0; where that is a tie either is right.

    A wrong sign by rounding means such a tie within rounding, where w and 1/w agree likewise.
    """
    if np.iscomplexobj(a):
        return np.where(a.real * root.real + a.imag * root.imag < 0, -1.0, 1.0)
    return np.where(a < 0, -1.0, 1.0)


def _end(points: Points, m: Number, a: Number, sigma: Real, highest: int) -> ArraySeries:
    """Expand W (m^2)^(-eps) h(w); exactly zero for a massless end."""
    massless = m == 0
    signed = sigma * points.root
    d = a + signed
    d = np.where(d == 0, 1.0, d)
    d_error = 2.0 + points.root_error + (3.2 * UNIT) * points.largest / size(d)
    weight = quotient(2.0 * m, d)
    one_minus_w = np.where(massless, 1.0, quotient(2.0 * signed, d))
    w = quotient(2.0 * points.p * weight, d)
    w_error, v_error = (
        2.0 * d_error + (2.0 * QUOTIENT + PRODUCT + 1.0),
        points.root_error + d_error + QUOTIENT,
    )
    rate, rate_error = points.exponent(*logarithm(np.where(massless, 1.0, m)))
    tables = double_tables(highest, real=not np.iscomplexobj(w))

    def far(i: Any) -> ArraySeries:  # noqa: ANN401 - an index or a slice
        function = far_function(one_minus_w[i], v_error[i], tables)
        return function.times_exponential(rate[i], rate_error[i]).scaled(
            weight[i], d_error[i] + 6.0
        )

    def near(i: Any) -> ArraySeries:  # noqa: ANN401
        function = _near(w[i], w_error[i], one_minus_w[i], v_error[i], tables)
        power = constants_times_exponential([1.0] + [0.0] * highest, rate[i], rate_error[i])
        return function.times(power).scaled(weight[i], size(weight[i]) * (d_error[i] + QUOTIENT))

    mask = w.real > 0.5
    inside = np.flatnonzero(mask)
    if inside.size == 0:
        return far(slice(None))
    if inside.size == w.size:
        return near(slice(None))
    outside = np.flatnonzero(~mask)
    return joined(w, (outside, far(outside)), (inside, near(inside)))


def joined(like: Number, *parts: tuple[NDArray[np.intp], ArraySeries]) -> ArraySeries:
    """Put series of complementary sets of points together."""
    length = len(parts[0][1].values)
    values = [np.empty_like(like) for _ in range(length)]
    errors = [np.empty(like.shape) for _ in range(length)]
    for index, series in parts:
        for k in range(length):
            values[k][index] = series.values[k]
            errors[k][index] = series.errors[k]
    return ArraySeries(values, errors)


def far_function(v: Number, v_error: Real, tables: DoubleTables) -> MajorisedSeries:
    """Expand h(w) = 2F1(1, eps; 2-eps; w)/(1-eps), Re w <= 1/2, from v = 1-w."""
    log_v, error = logarithm(v)
    error += v_error
    table, u = tables.far, -log_v
    return MajorisedSeries(
        [1.0, *(polynomial(u) for polynomial in table.polynomials[1:])],
        [1.0, *table.sizes[1:]],
        table.error + table.slope * guarded(error),
        0.0,
        np.zeros(v.shape),
    )


def _near(w: Number, w_error: Real, v: Number, v_error: Real, tables: DoubleTables) -> ArraySeries:
    log_w, log_w_error = logarithm(w)
    log_w_error = guarded(log_w_error + w_error)
    log_v, log_v_error = logarithm(np.where(v == 0, 1.0, v))
    rate = log_w - 2.0 * log_v
    rate_error = log_w_error + 2.0 * (log_v_error + v_error) + size(rate)
    singular = constants_times_exponential(tables.singular, rate, rate_error).scaled(
        quotient(v, w), v_error + w_error + QUOTIENT
    )
    u = -log_w
    values, errors = [np.ones_like(u)], [0.0 * log_w_error]
    for k, polynomial in enumerate(tables.near.polynomials[1:], start=1):
        value = polynomial(u)
        value += singular.values[k]
        error = polynomial.error + polynomial.slope * log_w_error
        error += singular.errors[k]
        error += size(value)
        values.append(value)
        errors.append(error)
    return ArraySeries(values, errors)


def guarded(error: Real) -> Real:
    """Give up on arguments that might lie outside the radius of the tables."""
    return np.where(error < LARGEST_ARGUMENT_ERROR, error, np.inf)


def _between_roots(points: Points, sigma: Real, highest: int) -> ArraySeries:
    """Expand T = sigma R/p^2 (-lambda/p^2 - i0)^(-eps) Gamma(1-eps)^2/Gamma(2-2 eps).

    Im(-lambda/p^2) <= 0 wherever T is present, so that a positive one is a rounding error.
    """
    height = -points.kallen / points.p
    if np.iscomplexobj(height):
        height.imag = np.where(height.imag < 0, height.imag, -0.0)
        log_height, error = logarithm(height)
    else:
        log_height, error = logarithm(np.abs(height))
        if height[0] < 0:  # above threshold
            log_height = as_complex(log_height, -np.pi)
            error += np.pi
    tables = double_tables(highest, real=not np.iscomplexobj(points.root))
    rate, rate_error = points.exponent(log_height, error + points.kallen_error + 6.0)
    series = constants_times_exponential(tables.between_roots, rate, rate_error)
    return series.scaled(sigma * points.root / points.p, points.root_error + 2.0)
