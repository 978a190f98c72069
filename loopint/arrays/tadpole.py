"""`tadpole_array`: the tadpole and its derivatives over arrays of squared masses."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
from flint import fmpq
from numpy.typing import ArrayLike

from loopint.arrays.evaluate import (
    BLOCK,
    DEFAULT_TOLERANCE,
    Arrays,
    Tolerance,
    finish,
    logarithm_of_scale,
)
from loopint.arrays.result import (
    MASS_RANGE,
    ArrayResult,
    broadcast,
    check_points,
    invalid_mass,
    mass_array,
)
from loopint.arrays.rounding import (
    PRODUCT,
    QUOTIENT,
    Number,
    Real,
    logarithm,
    quotient,
    size,
    square_root,
)
from loopint.arrays.series import ArraySeries, constants_times_exponential
from loopint.arrays.tables import TABLE_BITS, rounded_series
from loopint.core.conventions import Conventions, PropagatorSign
from loopint.core.gamma_factors import EpsilonFactor
from loopint.core.kinematics import OnePoint
from loopint.core.numbers import exact_complex
from loopint.core.precision import working_precision
from loopint.integrals.registry import Integral

if TYPE_CHECKING:
    from loopint.core.numbers import RealInput

LONGEST_SERIES = 12
LARGEST_EXPONENT = 12
SAFE_EXPONENT = 900  # powers of masses stay within 2^+-900


def tadpole_array(
    m_squared: ArrayLike,
    power: int = 1,
    *,
    dimension: int = 4,
    orders: tuple[int, int] = (-1, 0),
    mu_squared: RealInput = 1,
    propagator_sign: str = "minkowski",
    measure: str = "msbar",
    rel_tolerance: float = DEFAULT_TOLERANCE,
    relative_to: str = "series",
    derivatives: str | Sequence[str] = (),
    on_invalid: str = "raise",
) -> ArrayResult:
    """Evaluate the one-propagator integral A(n), or a derivative of it, over an array.

    Parameters
    ----------
    m_squared
        Squared masses: float64 >= 0, or complex128 with Im <= 0; a number counts as its exact
        binary value.
    power, dimension, mu_squared, propagator_sign, measure, derivatives
        As for `loopint.tadpole`; one value for all points.
    orders, rel_tolerance, relative_to, on_invalid
        As for `loopint.bubble_array`.

    Returns
    -------
    ArrayResult
        `values[order]`, `bounds[order]`, `fallback`, `invalid`, `status`.

    Raises
    ------
    InputError
        For an argument outside its range, or the first invalid point.

    Examples
    --------
    m^2 (1/eps + 1 - log m^2):

    >>> result = tadpole_array([1.0, 2.0])
    >>> result[0].real.round(4)
    array([1.    , 0.6137])
    """
    integral = Integral.parse("tadpole", power, dimension, orders, derivatives)
    conventions = Conventions.parse(measure, propagator_sign, mu_squared)
    tolerance = Tolerance.parse(rel_tolerance, relative_to)
    shape, (m,) = broadcast({"m_squared": mass_array("m_squared", m_squared)})
    invalid = check_points(shape, {"m_squared": (m, invalid_mass, MASS_RANGE)}, on_invalid)
    arrays = tadpole_doubles(integral, conventions, m, tolerance)
    finish(arrays, integral, conventions, lambda i: OnePoint(exact_complex(m[i])), invalid)
    return arrays.result(integral.orders, shape, invalid)


def tadpole_doubles(
    integral: Integral,
    conventions: Conventions,
    m: Number,
    tolerance: Tolerance,
    argument_error: Real | None = None,
) -> Arrays:
    """Evaluate valid points in doubles; the others are `missing`.

    Bounds hold for all m^2 within the relative errors `argument_error`, in units of UNIT.
    """
    arrays = Arrays.empty(integral.orders, m.size)
    if integral.term.powers[0] > 0:
        with np.errstate(all="ignore"):
            log_mu = logarithm_of_scale(conventions.mu_squared)
            moved = np.zeros(m.size) if argument_error is None else argument_error
            _fill(arrays, integral, conventions, m, log_mu, tolerance, moved)
    return arrays


def _fill(
    arrays: Arrays,
    integral: Integral,
    conventions: Conventions,
    masses: Number,
    log_mu: float,
    tolerance: Tolerance,
    argument_error: Real,
) -> None:
    """Evaluate factor * (m^2)^(d0/2-n) exp(-eps log(m^2/mu^2)) block by block."""
    term, dimension = integral.term, integral.dimension
    n = term.powers[0]
    gamma = EpsilonFactor.gamma
    factor = conventions.measure.factor(dimension) * gamma(n - fmpq(dimension, 2), 1) / gamma(n, 0)
    lowest, highest = factor.lowest_order, integral.orders[1]
    if highest < lowest:
        return
    twice = dimension - 2 * n
    if highest - lowest >= LONGEST_SERIES or abs(twice) > 2 * LARGEST_EXPONENT:
        arrays.missing[:] = masses != 0
        return
    sign = conventions.propagator_sign.sign(n)
    if conventions.propagator_sign is PropagatorSign.EUCLIDEAN and len(integral.derivatives) % 2:
        sign = -sign
    with working_precision(TABLE_BITS):
        expanded = factor.series_through(highest).scaled(sign * term.coefficient)
        coefficients = rounded_series(expanded.shifted(-lowest), highest - lowest)
    for start in range(0, masses.size, BLOCK):
        where = slice(start, start + BLOCK)
        series = _block(masses[where], twice, coefficients, log_mu, argument_error[where])
        arrays.store(where, lowest, series, tolerance)
        arrays.make_zero(np.flatnonzero(masses[where] == 0) + start)


def _block(
    m: Number, twice: int, coefficients: list[float], log_mu: float, argument_error: Real
) -> ArraySeries:
    log_m, log_error = logarithm(m)
    rate = log_mu - log_m
    power, steps = _half_integer_power(m, twice)
    error = log_error + abs(log_mu) + size(rate) + argument_error
    relative = steps + 0.5 * abs(twice) * argument_error
    series = constants_times_exponential(coefficients, rate, error).scaled(power, relative)
    unsafe = np.abs(np.log2(size(m))) * max(abs(twice), 2) > 2 * SAFE_EXPONENT
    for error in series.errors:
        error[unsafe] = np.nan
    return series


def _half_integer_power(m: Number, twice: int) -> tuple[Number, float]:
    """Return m^(twice/2) and its relative error in units of UNIT."""
    count = abs(twice) // 2
    power: Number = np.ones_like(m)
    steps = 0.0
    for _ in range(count):
        power = power * m
        steps += PRODUCT
    if twice % 2:
        power = power * (square_root(m) if np.iscomplexobj(m) else np.sqrt(m))
        steps += PRODUCT + 3.5
    if twice < 0:
        power = quotient(np.ones_like(m), power)
        steps += QUOTIENT
    return power, steps
