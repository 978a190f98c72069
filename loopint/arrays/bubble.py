"""`bubble_array`: the bubble and its first derivatives over arrays of points."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import lru_cache, partial
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from loopint.arrays.conditioning import moved
from loopint.arrays.end_tables import end_tables
from loopint.arrays.ends import GROUPED, Variable, Work, expand_plain
from loopint.arrays.ends import expand as expand_ends
from loopint.arrays.evaluate import (
    BLOCK,
    DEFAULT_TOLERANCE,
    Arrays,
    Tolerance,
    finish,
    logarithm_of_scale,
    logarithm_remainder,
    scaled_by_power_of_two,
)
from loopint.arrays.logarithms import FinitePart, finite_part
from loopint.arrays.masters import Master, expand
from loopint.arrays.result import (
    ACCEPTED_REAL,
    MASS_RANGE,
    ArrayResult,
    broadcast,
    check_points,
    invalid_mass,
    mass_array,
    real_array,
)
from loopint.arrays.rounding import Number, Real
from loopint.arrays.series import ArraySeries, constants_times_exponential
from loopint.arrays.tables import TABLE_BITS, remainders, rounded_series
from loopint.core.conventions import Conventions, Measure
from loopint.core.gamma_factors import EpsilonFactor
from loopint.core.kinematics import TwoPoint
from loopint.core.numbers import exact_complex, exact_real
from loopint.core.precision import working_precision
from loopint.integrals.registry import Integral

if TYPE_CHECKING:
    from loopint.core.numbers import RealInput

HIGHEST_ORDER = 2
EXTENDED_UNIT = 2.0 ** (52 - np.finfo(np.longdouble).nmant)  # of a rounding, in units of UNIT
EXTENDED = EXTENDED_UNIT < 1e-3 and np.finfo(np.longdouble).nmant in (63, 112)
LOG_TWO = 0.6931471805599453
PLAIN_RANGE = 2.0**200
LOGARITHM_BLOCK = 2 * BLOCK
GROUPED_BLOCK = 8 * BLOCK  # it is split into groups of points
SAFE_EXPONENT = 900  # results in units of 1/mass^2 neither overflow nor underflow


@dataclass(frozen=True, slots=True)
class Recipe:
    """factor * Master, where Laurent coefficients start at eps^lowest.

    `prefactor` holds the rounded coefficients of everything that multiplies the master integral,
    `remainder` what the rounding leaves.
    """

    master: Master
    lowest: int
    prefactor: list[float]
    remainder: list[float]
    sign: int
    measure: Measure


def recipe(integral: Integral, conventions: Conventions) -> Recipe | None:
    """Return how an integral follows from a master, or None if it is left to ball arithmetic.

    B(1,1) = Gamma(eps) J, B(2,1) = Gamma(1+eps) M1, dB(1,1)/dm1^2 = -Gamma(1+eps) M1,
    dB(1,1)/dp^2 = Gamma(1+eps) P with euclidean sign and without measure.
    """
    if integral.dimension != 4 or integral.orders[1] > HIGHEST_ORDER:
        return None
    sign = conventions.propagator_sign.sign(sum(integral.powers))
    choice: dict[tuple[tuple[int, ...], tuple[str, ...]], tuple[Master, int]] = {
        ((1, 1), ()): (Master.J, sign),
        ((2, 1), ()): (Master.M1, sign),
        ((1, 2), ()): (Master.M2, sign),
        ((1, 1), ("m1_squared",)): (Master.M1, -1),
        ((1, 1), ("m2_squared",)): (Master.M2, -1),
        ((1, 1), ("p_squared",)): (Master.P, 1),
    }
    found = choice.get((integral.powers, integral.derivatives))
    if found is None:
        return None
    master, sign = found
    lowest = -1 if master is Master.J else 0
    prefactor = _prefactor(conventions.measure, lowest, integral.orders[1])
    return Recipe(master, lowest, *prefactor, sign, conventions.measure)


@lru_cache(maxsize=64)
def _prefactor(measure: Measure, lowest: int, highest: int) -> tuple[list[float], list[float]]:
    """Expand measure * Gamma(eps) or measure * Gamma(1+eps) from eps^lowest."""
    gamma = EpsilonFactor.gamma(1 + lowest, 1)
    with working_precision(TABLE_BITS):
        series = (measure.factor(4) * gamma).series_through(max(highest, lowest))
        series = series.shifted(-lowest)
        rounded = rounded_series(series, max(highest - lowest, 0))
        return rounded, remainders(series, rounded)


def bubble_array(
    p_squared: ArrayLike,
    m1_squared: ArrayLike,
    m2_squared: ArrayLike,
    powers: tuple[int, int] = (1, 1),
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
    """Evaluate the two-propagator integral B(n1, n2), or a derivative of it, over arrays.

    Doubles with proven bounds where d0 = 4, orders are at most 2 and the integral is B(1,1),
    B(2,1), B(1,2) or a first derivative of B(1,1); ball arithmetic, thousands of times slower, for
    every other integral and for single points whose bound misses the tolerance.

    Parameters
    ----------
    p_squared
        Real float64 array; a number counts as its exact binary value, understood as p^2 + i0.
    m1_squared, m2_squared
        Squared masses: float64 >= 0, or complex128 with Im <= 0.  Shapes are broadcast.
    powers, dimension, mu_squared, propagator_sign, measure, derivatives
        As for `loopint.bubble`; one value for all points.
    orders
        Inclusive range of powers of epsilon; orders below the pole are exact zeros.
    rel_tolerance
        Largest accepted bound, relative to a size; default 1e-12, never looser than 1e-9.
    relative_to
        "series": the size is the largest coefficient from the leading one to the one in question,
        so that a coefficient passing through zero needs no ball arithmetic.  "coefficient": the
        coefficient itself.
    on_invalid
        "raise", or "nan": invalid points become nan.

    Returns
    -------
    ArrayResult
        `values[order]`, `bounds[order]`, `fallback`, `invalid`, `status`.

    Raises
    ------
    InputError
        For an argument outside its range, or the first invalid point.
    UnsupportedIntegralError
        For powers or a dimension that are not covered.

    Examples
    --------
    Equal masses at zero momentum, at threshold and above it:

    >>> import numpy as np
    >>> result = bubble_array(np.array([0.0, 4.0, 5.0]), 1.0, 1.0)
    >>> bool(abs(result[0][1] - 2) <= result.bounds[0][1])
    True
    >>> result[0].imag.round(4)  # pi sqrt(lambda)/p^2 above threshold
    array([0.   , 0.   , 1.405])
    """
    integral = Integral.parse("bubble", powers, dimension, orders, derivatives)
    conventions = Conventions.parse(measure, propagator_sign, mu_squared)
    tolerance = Tolerance.parse(rel_tolerance, relative_to)
    shape, (p, m1, m2) = broadcast(
        {
            "p_squared": real_array("p_squared", p_squared),
            "m1_squared": mass_array("m1_squared", m1_squared),
            "m2_squared": mass_array("m2_squared", m2_squared),
        }
    )
    invalid = check_points(
        shape,
        {
            "p_squared": (p, lambda x: ~np.isfinite(x), ACCEPTED_REAL),
            "m1_squared": (m1, invalid_mass, MASS_RANGE),
            "m2_squared": (m2, invalid_mass, MASS_RANGE),
        },
        on_invalid,
    )
    arrays = bubble_doubles(integral, conventions, (p, m1, m2), tolerance)

    def point(i: int) -> TwoPoint:
        return TwoPoint(exact_real(p[i]), exact_complex(m1[i]), exact_complex(m2[i]))

    finish(arrays, integral, conventions, point, invalid)
    return arrays.result(integral.orders, shape, invalid)


def bubble_doubles(
    integral: Integral,
    conventions: Conventions,
    kinematics: tuple[Real, Number, Number],
    tolerance: Tolerance,
    argument_error: Real | None = None,
) -> Arrays:
    """Evaluate valid points in doubles; the others, and all without a recipe, are `missing`.

    Bounds hold for all arguments within the relative errors `argument_error`, in units of UNIT.
    """
    p, m1, m2 = kinematics
    arrays = Arrays.empty(integral.orders, p.size)
    plan = recipe(integral, conventions)
    if plan is None:
        arrays.missing[:] = True
        return arrays
    if integral.orders[1] >= plan.lowest:
        with np.errstate(all="ignore"):
            log_mu = logarithm_of_scale(conventions.mu_squared)
            remainder = logarithm_remainder(conventions.mu_squared)
            _fill(arrays, plan, kinematics, (log_mu, remainder), tolerance)
            if argument_error is not None:
                _widen(arrays, plan, kinematics, log_mu, tolerance, argument_error)
    arrays.make_zero(np.flatnonzero((p == 0) & (m1 == 0) & (m2 == 0)))  # scaleless
    return arrays


def _widen(
    arrays: Arrays,
    plan: Recipe,
    kinematics: tuple[Real, Number, Number],
    log_mu: float,
    tolerance: Tolerance,
    argument_error: Real,
) -> None:
    """Add to the bounds what the errors of the arguments cost."""
    index = np.flatnonzero((argument_error > 0) & ~arrays.missing)
    for start in range(0, index.size, BLOCK):
        where = index[start : start + BLOCK]
        p, m1, m2 = (array[where] for array in kinematics)
        more = moved(plan.master, (p, m1, m2), argument_error[where], log_mu, plan.prefactor)
        arrays.widen(where, {plan.lowest + k: e for k, e in enumerate(more)}, tolerance)


def _fill(
    arrays: Arrays,
    plan: Recipe,
    kinematics: tuple[Real, Number, Number],
    scale: tuple[float, float],
    tolerance: Tolerance,
) -> None:
    """Evaluate block by block; `scale` is log mu^2 as a sum of two numbers.

    Real masses take real formulas also in complex arrays, and two orders of B(1,1) the formula
    with logarithms first: what is computed for a point does not depend on the others.
    """
    p, m1, m2 = kinematics
    log_mu = scale[0]
    if plan.master is Master.J:
        pole = plan.sign * plan.prefactor[0]
        arrays.fill(-1, pole, 0.0 if abs(pole) == 1.0 else abs(pole))
        if len(plan.prefactor) == 1:
            return
    if np.iscomplexobj(m1) or np.iscomplexobj(m2):
        real = (m1.imag == 0) & (m2.imag == 0)
        index = np.flatnonzero(~real)
        index = _fill_by_ends(arrays, plan, index, kinematics, log_mu, tolerance)
        _fill_general(arrays, plan, index, kinematics, log_mu, tolerance)
        index = np.flatnonzero(real)
        kinematics = (p, np.real(m1), np.real(m2))
    else:
        index = np.arange(p.size)
    if plan.master is Master.J and len(plan.prefactor) == 2:
        _fill_with_logarithms(arrays, plan, index, kinematics, log_mu, tolerance)
        index = index[arrays.missing[index]]
        if EXTENDED:
            _fill_in_extended_precision(arrays, plan, index, kinematics, scale, tolerance)
            index = index[arrays.missing[index]]
        arrays.values[0][index] = 0.0
    index = _fill_by_ends(arrays, plan, index, kinematics, log_mu, tolerance)
    _fill_general(arrays, plan, index, kinematics, log_mu, tolerance)


def _fill_by_ends(
    arrays: Arrays,
    plan: Recipe,
    index: NDArray[np.intp],
    kinematics: tuple[Real, Number, Number],
    log_mu: float,
    tolerance: Tolerance,
) -> NDArray[np.intp]:
    """Evaluate with `loopint.arrays.ends`; return where that missed the tolerance.

    Plain doubles serve most real points of B(1,1); derivatives near lambda = 0 need more of it.
    """
    if index.size == 0:
        return index
    p, m1, m2 = kinematics
    real = not (np.iscomplexobj(m1) or np.iscomplexobj(m2))
    variable, sign = Variable.NONE, float(plan.sign)
    if plan.master is Master.P:
        variable = Variable.MOMENTUM
    elif plan.master is not Master.J:
        variable, sign = Variable.MASS, -sign
    if plan.master is Master.M2:
        m1, m2 = m2, m1
    highest = len(plan.prefactor) - (1 if plan.master is Master.J else 0)
    within = log_mu if variable is Variable.NONE else 0.0
    work = Work(variable, highest, within, end_tables(plan.measure, highest, real))
    leading = abs(plan.prefactor[0]) if plan.master is Master.J else 0.0
    arrays.missing[index] = True
    passes = [expand_ends if variable is Variable.NONE else partial(_in_own_units, log_mu)]
    if real and variable is Variable.NONE:
        passes.insert(0, expand_plain)
    whole = index.size == p.size
    all_plain = whole and all(_outside_plain_range(array).size == 0 for array in (p, m1, m2))
    for evaluate in passes:
        for start in range(0, index.size, GROUPED):
            where = index[start : start + GROUPED]
            if not all_plain:
                where = where[_usable(p[where]) & _usable(m1[where]) & _usable(m2[where])]
            for group, series in evaluate(work, p[where], m1[where], m2[where]):
                arrays.store(where[group], 0, series.times_sign(sign), tolerance, leading)
        index = index[arrays.missing[index]]
        for order, value in arrays.values.items():
            if order >= 0:
                value[index] = 0.0  # real series leave imaginary parts alone
    return index


def _in_own_units(
    log_mu: float, work: Work, p: Real, first: Number, second: Number
) -> Iterator[tuple[NDArray[np.intp], ArraySeries]]:
    """Evaluate derivatives at points scaled by powers of two, so that logarithms cost least.

    The unit is mu^2, or the squared mass next to it if both lie on one side.
    """
    sizes = [np.where(m == 0, np.abs(n), np.abs(m)) for m, n in ((first, second), (second, first))]
    exponents = [np.frexp(np.where(m == 0, np.abs(p), m) * np.sqrt(0.5))[1] for m in sizes]
    exponent = np.maximum(round(log_mu / LOG_TWO), np.minimum(*exponents))
    exponent = np.minimum(exponent, np.maximum(*exponents))
    factor = np.ldexp(1.0, -exponent)
    scale = exponent * LOG_TWO
    shift: Real = np.asarray(log_mu - scale, dtype=np.float64)
    shift_error = 2.0 * np.abs(scale) + abs(log_mu) + np.abs(shift)
    one = [1.0] + [0.0] * (work.highest - 1)
    for group, series in expand_ends(work, p * factor, first * factor, second * factor):
        result = series.times(constants_times_exponential(one, shift[group], shift_error[group]))
        units = factor[group]
        yield (
            group,
            ArraySeries([v * units for v in result.values], [e * units for e in result.errors]),
        )


def _usable(array: Number) -> NDArray[np.bool_]:
    """Mark entries that are zero or within 2^+-200."""
    sizes = np.abs(array)
    usable: NDArray[np.bool_] = ((sizes > 1 / PLAIN_RANGE) | (sizes == 0)) & (sizes < PLAIN_RANGE)
    return usable


def _fill_general(
    arrays: Arrays,
    plan: Recipe,
    index: NDArray[np.intp],
    kinematics: tuple[Real, Number, Number],
    log_mu: float,
    tolerance: Tolerance,
) -> None:
    leading = abs(plan.prefactor[0]) if plan.master is Master.J else 0.0
    for start in range(0, index.size, GROUPED_BLOCK):
        where = index[start : start + GROUPED_BLOCK]
        block = [array[where] for array in kinematics]
        arrays.missing[where] = True
        for group, series in _general_block(plan, block, log_mu):
            arrays.store(where[group], 0, series, tolerance, leading)


def _fill_with_logarithms(
    arrays: Arrays,
    plan: Recipe,
    index: NDArray[np.intp],
    kinematics: tuple[Real, Real, Real],
    log_mu: float,
    tolerance: Tolerance,
) -> None:
    all_plain = all(_outside_plain_range(array).size == 0 for array in kinematics)
    whole = index.size == kinematics[0].size
    pole, constant = (plan.sign * c for c in plan.prefactor)
    for start in range(0, index.size, LOGARITHM_BLOCK):
        stop = start + LOGARITHM_BLOCK
        where = slice(start, stop) if whole else index[start:stop]
        block = [array[where] for array in kinematics]
        found = finite_part(block[0], block[1], block[2])
        if not all_plain:
            for array in block:
                found.error[_outside_plain_range(array)] = np.nan
        _finish_finite_part(found, pole, constant, log_mu)
        arrays.store_parts(where, 0, found, tolerance, abs(plan.prefactor[0]))


def _fill_in_extended_precision(
    arrays: Arrays,
    plan: Recipe,
    index: NDArray[np.intp],
    kinematics: tuple[Real, Real, Real],
    scale: tuple[float, float],
    tolerance: Tolerance,
) -> None:
    """Evaluate the formula with logarithms in 64 bits or more, and round to doubles."""
    extended: Any = np.longdouble
    pairs = zip(plan.prefactor, plan.remainder, strict=True)
    pole, constant = (plan.sign * (extended(c) + low) for c, low in pairs)
    log_mu = extended(scale[0]) + scale[1]
    for start in range(0, index.size, BLOCK):
        where = index[start : start + BLOCK]
        block = [array[where] for array in kinematics]
        p, m1, m2 = (array.astype(extended) for array in block)
        found = finite_part(p, m1, m2)
        _finish_finite_part(found, pole, constant, log_mu)
        error = found.error
        error *= EXTENDED_UNIT
        error += np.abs(found.re) + found.im  # rounding to doubles
        for array in block:
            error[_outside_plain_range(array)] = np.nan
        rounded = FinitePart(*(part.astype(np.float64) for part in (found.re, found.im, error)))
        arrays.store_parts(where, 0, rounded, tolerance, abs(plan.prefactor[0]))


def _outside_plain_range(array: Real) -> NDArray[np.intp]:
    """Return where entries are neither zero nor within 2^+-200."""
    if array.size == 0:
        return np.flatnonzero(array)
    sizes = np.abs(array)
    if sizes.min() > 1 / PLAIN_RANGE and sizes.max() < PLAIN_RANGE:
        return np.flatnonzero(np.zeros(0))
    inside = (sizes > 1 / PLAIN_RANGE) & (sizes < PLAIN_RANGE)
    return np.flatnonzero(~(inside | (sizes == 0)))


def _finish_finite_part(found: FinitePart, pole: float, constant: float, log_mu: float) -> None:
    """Go from the order eps of J to the finite part of the integral, in place."""
    if log_mu != 0.0:
        found.re[...] += log_mu
        found.error[...] += abs(log_mu) + np.abs(found.re)
    if pole != 1.0 or constant != 0.0:
        found.error[...] += 3.0 * (np.abs(found.re) + found.im)
        found.error[...] *= abs(pole)
        found.re[...] *= pole
        found.im[...] *= pole
        found.re[...] += constant
        found.error[...] += 3.0 * (np.abs(found.re) + abs(constant))


def _general_block(
    plan: Recipe, block: list[Number], log_mu: float
) -> Iterator[tuple[NDArray[np.intp], ArraySeries]]:
    """Evaluate scaled points with the series in epsilon, group by group."""
    (p, m1, m2), exponent, factor = scaled_by_power_of_two(block)
    usable = ~np.isnan(factor)
    if plan.master is not Master.J:
        usable &= np.abs(exponent) < SAFE_EXPONENT
    kept = np.flatnonzero(usable & ((p != 0) | (m1 != 0) | (m2 != 0)))
    highest = len(plan.prefactor) - 1
    signed = [plan.sign * c for c in plan.prefactor]
    scale = exponent[kept] * LOG_TWO
    shift: Real = np.asarray(log_mu - scale, dtype=np.float64)
    shift_error = 2.0 * np.abs(scale) + abs(log_mu) + np.abs(shift)
    if plan.master is Master.J:
        now = (shift, shift_error)
    else:  # the masters cancel best in their own units
        now = (np.zeros_like(shift), np.zeros_like(shift))
    for group, series in expand(plan.master, (p[kept], m1[kept], m2[kept]), now, highest):
        index = kept[group]
        if plan.master is Master.J:
            series.values[0] = np.ones(group.size)  # Int dx, exactly
            series.errors[0] *= 0.0
            result = series.times_constants(signed)
            result = ArraySeries(result.values[1:], result.errors[1:])  # but for the pole
        else:
            later = constants_times_exponential(signed, shift[group], shift_error[group])
            result = series.times(later)
            result = ArraySeries(
                [value * factor[index] for value in result.values],
                [error * factor[index] for error in result.errors],
            )
        yield index, result
