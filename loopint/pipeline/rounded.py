"""Arithmetic on columns of doubles that knows how far each number may be from the exact one.

An expression of the config is evaluated on whole columns.  Rounding errors come from error-free
transformations (`loopint.arrays.rounding`), which are exact themselves while nothing over- or
underflows, so that what is exact is known to be exact.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from flint import fmpq
from numpy.typing import NDArray

from loopint.arrays.rounding import UNIT, Real, two_product, two_sum
from loopint.pipeline.errors import ConfigError

LARGEST, SMALLEST = 2.0**900, 2.0**-900
GROWTH = 1.0 + 2.0**-48  # the rounding of the errors themselves
MOST = 2.0**20  # a larger error is no use
LEAST = 2.0**-100  # of what is not exact: covers what underflows


@dataclass(frozen=True, slots=True)
class Rounded:
    """Doubles with proven relative errors.

    Attributes
    ----------
    value
        The doubles.
    error
        |exact - value| <= error * 2^-53 * |value|: 0 where the double is exact (a zero always is),
        infinite where nothing is known.

    Examples
    --------
    >>> m = Rounded.of(np.array([0.5, 0.1]))
    >>> (m * m).error
    array([0., 1.])
    >>> (m * fmpq(1, 3)).error
    array([1., 2.])
    """

    value: Real
    error: Real

    @classmethod
    def of(cls, value: Real) -> Rounded:
        """Take numbers as they are; nothing is known of what is not finite."""
        return cls(value, np.where(np.isfinite(value), 0.0, np.inf))

    @classmethod
    def constant(cls, number: fmpq | int, rows: int) -> Rounded:
        """Return a column that holds one number."""
        number = fmpq(number)
        value = nearest_double(number)
        if value is None or (number and not SMALLEST < abs(value) < LARGEST):
            return cls(np.full(rows, np.nan), np.full(rows, np.inf))
        exact = fmpq(*value.as_integer_ratio()) == number
        return cls(np.full(rows, value), np.full(rows, 0.0 if exact else 1.0))

    @property
    def exact(self) -> NDArray[np.bool_]:
        """Where the doubles are exactly what they stand for."""
        result: NDArray[np.bool_] = self.error == 0
        return result

    def where(self, kept: NDArray[np.bool_]) -> Rounded:
        """Forget what is known of the other rows."""
        return Rounded(self.value, np.where(kept, self.error, np.inf))

    def _other(self, other: object) -> Rounded | None:
        if isinstance(other, Rounded):
            return other
        if isinstance(other, fmpq | int):
            return Rounded.constant(other, self.value.size)
        return None

    @classmethod
    def _with_error(cls, value: Real, error: Real) -> Rounded:
        return cls(value, np.where(error < MOST, error * GROWTH, np.inf))  # nan becomes infinite

    def __neg__(self) -> Rounded:
        return Rounded(-self.value, self.error)

    def __add__(self, other: object) -> Rounded:
        right = self._other(other)
        if right is None:
            return NotImplemented
        a, b = self.value, right.value
        with np.errstate(all="ignore"):
            total, lost = two_sum(a, b)
            inexact = (self.error != 0) | (right.error != 0) | (lost != 0)
            error = self.error * np.abs(a) + right.error * np.abs(b) + np.abs(lost) / UNIT
            error = np.maximum(error / np.abs(total), LEAST)
            error = np.where(inexact, np.where(_in_range(total), error, np.inf), 0.0)
            error = np.where(np.isfinite(total), error, np.inf)
        return self._with_error(total, error)

    __radd__ = __add__

    def __sub__(self, other: object) -> Rounded:
        right = self._other(other)
        return NotImplemented if right is None else self + (-right)

    def __rsub__(self, other: object) -> Rounded:
        return (-self) + other

    def __mul__(self, other: object) -> Rounded:
        right = self._other(other)
        if right is None:
            return NotImplemented
        a, b = self.value, right.value
        with np.errstate(all="ignore"):
            product, lost = two_product(a, b)
            inside = _in_range(a) & _in_range(b) & _in_range(product)
            error = self.error + right.error + UNIT * self.error * right.error
            error = error + np.where(lost == 0, 0.0, 1.0)
            nil = (a == 0) | (b == 0)
            known = np.isfinite(self.error) & np.isfinite(right.error)
            error = np.where(nil & known, 0.0, np.where(inside, error, np.inf))
        return self._with_error(product, error)

    __rmul__ = __mul__

    def __truediv__(self, other: object) -> Rounded:
        right = self._other(other)
        if right is None:
            return NotImplemented
        a, b = self.value, right.value
        with np.errstate(all="ignore"):
            quotient = a / b
            back, lost = two_product(quotient, b)
            inside = _in_range(quotient) & _in_range(a) & _in_range(b)
            error = (self.error + right.error) * (1.0 + 2.0 * UNIT * right.error)
            error = error + np.where((back == a) & (lost == 0), 0.0, 1.0 + 2.0**-20)
            nil = (a == 0) & (b != 0) & np.isfinite(self.error) & np.isfinite(right.error)
            error = np.where(nil, 0.0, np.where(inside, error, np.inf))
        return self._with_error(quotient, error)

    def __rtruediv__(self, other: object) -> Rounded:
        left = self._other(other)
        return NotImplemented if left is None else left / self

    def __pow__(self, exponent: int) -> Rounded:
        if exponent < 0:
            return 1 / self**-exponent
        if exponent == 0:
            return Rounded.constant(1, self.value.size).where(np.isfinite(self.error))
        result = self
        for _ in range(exponent - 1):
            result = result * self
        return result


def nearest_double(number: fmpq) -> float | None:
    """Return the float64 nearest to a rational number, or None beyond its range."""
    try:
        return int(number.p) / int(number.q)
    except OverflowError:
        return None


def finite_double(number: fmpq, where: str) -> float:
    """Return the float64 nearest to a number that `where` of a config gives.

    Raises
    ------
    ConfigError
        If it is beyond the range of float64.
    """
    found = nearest_double(number)
    if found is None:
        raise ConfigError(f"{where} holds a number beyond the range of float64")
    return found


def _in_range(x: Real) -> NDArray[np.bool_]:
    size = np.abs(x)
    result: NDArray[np.bool_] = (size < LARGEST) & (size > SMALLEST)
    return result
