"""What array evaluations return, and the check of array input."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from loopint.arrays.rounding import Complex, Number, Real
from loopint.core.errors import InputError

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping

ACCEPTED_REAL = "finite float64 numbers, or integers that float64 holds exactly"
MASS_RANGE = "real numbers >= 0, or complex ones with Im <= 0, all finite"
ON_INVALID = ("raise", "nan")


@dataclass(frozen=True)
class ArrayResult:
    """Laurent coefficients of one integral at an array of points.

    Attributes
    ----------
    orders
        The inclusive range (lowest, highest) that was asked for.
    values
        From order to a complex128 array of the broadcast shape.
    bounds
        From order to a float64 array: a proven bound on |true value - value|, the complex
        distance.  It is infinite only where float64 overflows or ball arithmetic gives up, and nan
        at invalid points.
    fallback
        Which points were evaluated in ball arithmetic.
    invalid
        Which points were rejected; only with `on_invalid="nan"`.
    """

    orders: tuple[int, int]
    values: Mapping[int, Complex]
    bounds: Mapping[int, Real]
    fallback: NDArray[np.bool_]
    invalid: NDArray[np.bool_]

    @property
    def shape(self) -> tuple[int, ...]:
        """The broadcast shape of the points."""
        return self.fallback.shape

    @property
    def status(self) -> str:
        """'ok', or 'invalid_points' or 'unbounded_points' if there are some."""
        if self.invalid.any():
            return "invalid_points"
        finite = all(np.isfinite(bound).all() for bound in self.bounds.values())
        return "ok" if finite else "unbounded_points"

    def __getitem__(self, order: int) -> Complex:
        return self.values[order]

    def __repr__(self) -> str:
        return (
            f"ArrayResult(orders={self.orders}, shape={self.shape}, "
            f"fallback={int(self.fallback.sum())}, status={self.status!r})"
        )


def real_array(name: str, values: ArrayLike) -> Real:
    """Return float64 numbers without changing any value.

    Raises
    ------
    InputError
        For anything that is not real, or that float64 does not hold exactly.
    """
    array = np.asarray(values)
    if array.dtype == np.float64:
        return array
    if array.dtype.kind in "iuf" and array.dtype.itemsize <= 8:
        converted: Real = array.astype(np.float64)
        if array.dtype.kind == "f" or array.size == 0:
            return converted
        if array.min() >= -(2**53) and array.max() <= 2**53:
            return converted
        raise InputError(f"{name} has integers beyond 2^53; accepted: {ACCEPTED_REAL}")
    raise InputError(f"{name} has dtype {array.dtype}; accepted: {ACCEPTED_REAL}")


def mass_array(name: str, values: ArrayLike) -> Number:
    """Return float64 or complex128 numbers; complex ones whose imaginary parts vanish are real."""
    array = np.asarray(values)
    if array.dtype.kind != "c":
        return real_array(name, array)
    if array.dtype.itemsize > 16:
        raise InputError(f"{name} has dtype {array.dtype}; accepted: complex128 numbers")
    converted: Complex = array.astype(np.complex128)
    return converted if converted.imag.any() else converted.real.copy()


def broadcast(arrays: Mapping[str, Number]) -> tuple[tuple[int, ...], list[Number]]:
    """Return the common shape and one flat array for each name.

    Raises
    ------
    InputError
        If the shapes do not agree.
    """
    try:
        shape = np.broadcast_shapes(*(array.shape for array in arrays.values()))
    except ValueError:
        shapes = ", ".join(f"{name} {array.shape}" for name, array in arrays.items())
        raise InputError(
            f"the shapes {shapes} do not fit together; accepted: shapes that NumPy broadcasts"
        ) from None
    return shape, [np.broadcast_to(array, shape).reshape(-1) for array in arrays.values()]


def invalid_mass(m: Number) -> NDArray[np.bool_]:
    """Mark squared masses that are not real >= 0 or complex with Im <= 0, all finite."""
    if np.iscomplexobj(m):
        wrong: NDArray[np.bool_] = (m.imag > 0) | ((m.imag == 0) & (m.real < 0))
        return wrong | ~np.isfinite(m)
    right: NDArray[np.bool_] = (m >= 0) & (m < np.inf)
    return ~right


def check_points(
    shape: tuple[int, ...],
    checks: Mapping[str, tuple[Number, Callable[[Any], NDArray[np.bool_]], str]],
    on_invalid: str,
) -> NDArray[np.bool_]:
    """Return which points are invalid.

    Raises
    ------
    InputError
        With `on_invalid="raise"`, for the first invalid point.
    """
    if on_invalid not in ON_INVALID:
        raise InputError(f"on_invalid = {on_invalid!r}; accepted: {', '.join(ON_INVALID)}")
    invalid: NDArray[np.bool_] | None = None
    for name, (array, check, accepted) in checks.items():
        wrong = check(array)
        if on_invalid == "raise" and wrong.any():
            first = int(np.argmax(wrong))
            position = [int(i) for i in np.unravel_index(first, shape)]
            where = f" at index {position}" if position else ""
            raise InputError(f"{name} = {array[first].item()!r}{where}; accepted: {accepted}")
        invalid = wrong if invalid is None else invalid | wrong
    assert invalid is not None
    return invalid
