"""J(-eps) for real masses between pseudothreshold and threshold, where lambda < 0.

With R = sqrt(-lambda) and D = A + i R both roots of Q are complex conjugate, |D|^2 = 4 p^2 m^2,
w = conj(D)/D lies on the unit circle, the ends contribute real parts and T is absent.  In terms of
psi = arctan2(R, |A|), s = sign A and L = log(-lambda/(p^2 m^2))/2,

    log w = -2 i s psi,    log(1-w) = L + i s (pi/2 - psi),    W = (A - i R)/(2 p^2),
    log w - 2 log(1-w) = -2 L - i pi s,    (1-w)/w = R (-R + i A)/(2 p^2 m^2).
"""

from __future__ import annotations

from typing import Any

import numpy as np

from loopint.arrays.points import Points
from loopint.arrays.quadratic import add_in_place, guarded, joined
from loopint.arrays.rounding import FUNCTION, PRODUCT, UNIT, Complex, Real, as_complex, size
from loopint.arrays.series import (
    ArraySeries,
    MajorisedSeries,
    constants_times_exponential,
)
from loopint.arrays.tables import DoubleTables, double_tables

NEAR = np.pi / 6  # psi where Re w = 1/2


def power_integral_below_threshold(points: Points, highest: int) -> ArraySeries:
    """Expand J through eps^highest; real coefficients."""
    total = _end(points, points.m1, points.a1, highest)
    add_in_place(total, _end(points, points.m2, points.a2, highest))
    return total


def _end(points: Points, m: Real, a: Real, highest: int) -> ArraySeries:
    """Expand Re W (m^2)^(-eps) h(w)."""
    p, root = points.p, points.root
    product = p * m
    half = 0.5 / p
    weight = as_complex(a * half, -root * half)
    modulus = np.sqrt(m / p)  # |W|
    # A errs by 1 + 3.2 UNIT largest/|A|, seen from |D| = 2 sqrt(p^2 m^2)
    a_error = 1.0 + (1.6 * UNIT) * points.largest / np.sqrt(product)
    weight_error = points.root_error + a_error + 3.0
    sign = np.where(a < 0, -1.0, 1.0)
    psi = np.arctan2(root, np.abs(a))
    psi_error = FUNCTION * psi + 0.5 * points.root_error + a_error
    log_size = 0.5 * np.log(-points.kallen / product)
    log_error = 0.5 * points.kallen_error + 1.0 + FUNCTION * np.abs(log_size)
    log_m = np.log(m)
    power_rate, power_error = points.exponent(log_m, FUNCTION * np.abs(log_m))
    tables = double_tables(highest, real=False)

    def far(i: Any) -> ArraySeries:  # noqa: ANN401 - an index or a slice
        u = as_complex(-log_size[i], -sign[i] * (0.5 * np.pi - psi[i]))
        error = guarded(log_error[i] + psi_error[i] + 3.0)
        series = _far(u, error, weight[i], modulus[i], weight_error[i], tables)
        return series.times_exponential(power_rate[i], power_error[i]).absolute()

    def near(i: Any) -> ArraySeries:  # noqa: ANN401
        factor = root[i] * (0.5 / product[i]) * as_complex(-root[i], a[i])
        function = _near(
            as_complex(np.zeros_like(psi[i]), 2.0 * sign[i] * psi[i]),
            guarded(2.0 * psi_error[i]),
            as_complex(-2.0 * log_size[i], -np.pi * sign[i]),
            2.0 * log_error[i] + np.pi,
            factor,
            2.0 * points.root_error[i] + a_error[i] + 7.0,
            tables,
        )
        power = constants_times_exponential([1.0] + [0.0] * highest, power_rate[i], power_error[i])
        return _real_part(function, weight[i], modulus[i], weight_error[i]).times(power)

    mask = psi < NEAR
    inside = np.flatnonzero(mask)
    if inside.size == 0:
        return far(slice(None))
    if inside.size == psi.size:
        return near(slice(None))
    outside = np.flatnonzero(~mask)
    return joined(psi, (outside, far(outside)), (inside, near(inside)))


def _far(
    u: Complex,
    error: Real,
    weight: Complex,
    modulus: Real,
    weight_error: Real,
    tables: DoubleTables,
) -> MajorisedSeries:
    """Expand Re W h(w) from u = -log(1-w)."""
    table = tables.far
    values = [weight.real]
    for polynomial in table.polynomials[1:]:
        value = polynomial(u)
        values.append(weight.real * value.real - weight.imag * value.imag)
    return MajorisedSeries(
        values,
        [modulus * bound for bound in (1.0, *table.sizes[1:])],
        table.error + table.slope * error + weight_error + (PRODUCT + 1.0),
        0.0,
        np.zeros_like(modulus),
    )


def _near(
    u: Complex,
    u_error: Real,
    rate: Complex,
    rate_error: Real,
    factor: Complex,
    factor_error: Real,
    tables: DoubleTables,
) -> ArraySeries:
    """Expand h(w) from u = -log w and what belongs to the power of 1-w."""
    singular = constants_times_exponential(tables.singular, rate, rate_error)
    added = singular.scaled(factor, factor_error)
    values, errors = [np.ones_like(u)], [0.0 * u_error]
    for k, polynomial in enumerate(tables.near.polynomials[1:], start=1):
        value = polynomial(u)
        value += added.values[k]
        values.append(value)
        error = polynomial.error + polynomial.slope * u_error
        errors.append(error + added.errors[k] + size(value))
    return ArraySeries(values, errors)


def _real_part(
    series: ArraySeries, weight: Complex, modulus: Real, weight_error: Real
) -> ArraySeries:
    """Return Re W h."""
    values = [weight.real * v.real - weight.imag * v.imag for v in series.values]
    errors = [
        modulus * (error + (weight_error + PRODUCT) * size(value))
        for value, error in zip(series.values, series.errors, strict=True)
    ]
    return ArraySeries(values, errors)
