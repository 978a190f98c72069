"""Fill result arrays block by block; points whose bound misses the tolerance go to balls."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from flint import arb
from numpy.typing import NDArray

from loopint.arrays.fallback import evaluate_points
from loopint.arrays.logarithms import FinitePart
from loopint.arrays.result import ArrayResult
from loopint.arrays.rounding import SLACK, UNIT, Complex, Number, Real, size
from loopint.arrays.series import ArraySeries
from loopint.core.errors import InputError
from loopint.core.numbers import exact_real
from loopint.core.precision import working_precision

if TYPE_CHECKING:
    from collections.abc import Callable

    from flint import fmpq

    from loopint.core.conventions import Conventions
    from loopint.integrals.registry import Integral, Point

BLOCK = 8192  # points at a time: the working set stays in the cache
DEFAULT_TOLERANCE = 1e-12
LOOSEST_TOLERANCE = 1e-9  # first-order error propagation is proven well below this
RELATIVE_TO = ("series", "coefficient")


@dataclass(frozen=True, slots=True)
class Tolerance:
    """The bound of order k must be at most `relative` times a size.

    The size is |coefficient k|, or with `of_series` the largest |coefficient| up to order k.
    """

    relative: float
    of_series: bool

    @classmethod
    def parse(cls, relative: float, relative_to: str) -> Tolerance:
        """Check both settings; raises `InputError`."""
        if relative_to not in RELATIVE_TO:
            raise InputError(f"relative_to = {relative_to!r}; accepted: {', '.join(RELATIVE_TO)}")
        if not isinstance(relative, int | float) or not 2.0**-52 <= relative < 1:
            raise InputError(f"rel_tolerance = {relative!r}; accepted: a number from 2^-52 to 1")
        return cls(min(float(relative), LOOSEST_TOLERANCE), relative_to == "series")


@dataclass(frozen=True, slots=True)
class Arrays:
    """Flat result arrays, and which points are still missing."""

    values: dict[int, Complex]
    bounds: dict[int, Real]
    missing: NDArray[np.bool_]

    @classmethod
    def empty(cls, orders: tuple[int, int], count: int) -> Arrays:
        """Return exact zeros at every order."""
        span = range(orders[0], orders[1] + 1)
        return cls(
            {k: np.zeros(count, dtype=np.complex128) for k in span},
            {k: np.zeros(count) for k in span},
            np.zeros(count, dtype=bool),
        )

    def make_zero(self, index: NDArray[np.intp]) -> None:
        """Store what is exactly zero."""
        for order, value in self.values.items():
            value[index] = 0.0
            self.bounds[order][index] = 0.0
        self.missing[index] = False

    def result(
        self, orders: tuple[int, int], shape: tuple[int, ...], invalid: NDArray[np.bool_]
    ) -> ArrayResult:
        """Give the arrays their shape."""
        return ArrayResult(
            orders,
            {k: value.reshape(shape) for k, value in self.values.items()},
            {k: bound.reshape(shape) for k, bound in self.bounds.items()},
            self.missing.reshape(shape),
            invalid.reshape(shape),
        )

    def fill(self, order: int, value: float, error: float) -> None:
        """Store one number, with its error in units of UNIT, for all points."""
        if order in self.values:
            self.values[order][:] = value
            self.bounds[order][:] = SLACK * UNIT * error

    def store(
        self,
        where: slice | NDArray[np.intp],
        lowest: int,
        series: ArraySeries,
        tolerance: Tolerance,
        leading: float = 0.0,
    ) -> None:
        """Store a series that starts at eps^lowest, and mark what misses the tolerance.

        `leading` is the size of a coefficient below `lowest` that has been stored before.
        Imaginary parts of real series are left alone.
        """
        largest: Real | float = leading
        missing = np.zeros(series.errors[0].shape, dtype=bool)
        for k, (value, error) in enumerate(zip(series.values, series.errors, strict=True)):
            modulus = size(value)
            if tolerance.of_series:
                modulus = np.maximum(modulus, largest, out=modulus)
                largest = modulus
            bound = error * (SLACK * UNIT)
            missing |= ~(bound <= modulus * tolerance.relative)  # true for nan
            missing |= modulus == np.inf
            if lowest + k in self.values:
                stored = self.values[lowest + k]
                if np.iscomplexobj(value):
                    stored[where] = value
                else:
                    stored.real[where] = value
                self.bounds[lowest + k][where] = bound
        self.missing[where] = missing

    def store_parts(
        self,
        where: slice | NDArray[np.intp],
        order: int,
        found: FinitePart,
        tolerance: Tolerance,
        leading: float,
    ) -> None:
        """Store one order given by its real and imaginary part."""
        modulus = np.abs(found.re)
        modulus = np.maximum(modulus, np.abs(found.im), out=modulus)  # at most |value|
        if tolerance.of_series:
            modulus = np.maximum(modulus, leading, out=modulus)
        modulus *= tolerance.relative
        bound = found.error
        bound *= SLACK * UNIT
        self.missing[where] = ~(bound <= modulus)  # true for nan
        self.values[order].real[where] = found.re
        self.values[order].imag[where] = found.im
        self.bounds[order][where] = bound

    def widen(self, where: NDArray[np.intp], more: dict[int, Real], tolerance: Tolerance) -> None:
        """Add to bounds, in units of UNIT, and mark what then misses the tolerance."""
        largest = np.zeros(where.size)
        missing = np.zeros(where.size, dtype=bool)
        for order, bounds in self.bounds.items():
            modulus = size(self.values[order][where])
            if tolerance.of_series:
                modulus = largest = np.maximum(modulus, largest)
            if order in more:
                bounds[where] += (SLACK * UNIT) * more[order]
            missing |= ~(bounds[where] <= modulus * tolerance.relative)
        self.missing[where] |= missing


def finish(
    arrays: Arrays,
    integral: Integral,
    conventions: Conventions,
    point: Callable[[int], Point],
    invalid: NDArray[np.bool_],
) -> None:
    """Evaluate what is missing in ball arithmetic, and make what is invalid nan."""
    arrays.missing[invalid] = False
    missing = np.flatnonzero(arrays.missing)
    evaluate_points(integral, conventions, point, missing, arrays.values, arrays.bounds)
    for order, value in arrays.values.items():
        value[invalid] = complex(np.nan, np.nan)
        arrays.bounds[order][invalid] = np.nan


def logarithm_of_scale(mu_squared: object) -> float:
    """Return log mu^2, correctly rounded; raises `InputError` unless mu^2 > 0."""
    exact: fmpq = exact_real(mu_squared)
    with working_precision(160):
        return float(arb(exact).log().mid())


def logarithm_remainder(mu_squared: object) -> float:
    """Return what `logarithm_of_scale` leaves of log mu^2, again rounded."""
    with working_precision(160):
        exact: fmpq = exact_real(mu_squared)
        return float((arb(exact).log() - arb(logarithm_of_scale(mu_squared))).mid())


def scaled_by_power_of_two(arrays: list[Number]) -> tuple[list[Number], NDArray[np.int32], Real]:
    """Return the arrays times 2^-e with the largest entry in [1/2, 1), e, and 2^-e.

    Where that is not exact, or entries span more than 2^200, 2^-e is nan.
    """
    parts = [part for array in arrays for part in _parts(array)]
    top = parts[0]
    for part in parts[1:]:
        top = np.maximum(top, part)
    exponent = np.frexp(top)[1]
    factor = np.ldexp(1.0, -exponent)
    usable = (np.abs(exponent) < 1000) | (top == 0)
    for part in parts:
        usable &= (part == 0) | (part * factor >= 2.0**-200)
    factor = np.where(usable, factor, np.nan)
    return [array * factor for array in arrays], exponent, factor


def _parts(array: Number) -> list[Real]:
    if np.iscomplexobj(array):
        return [np.abs(array.real), np.abs(array.imag)]
    return [np.abs(array)]
