"""Arithmetic on columns of doubles that knows in which rows it is exact.

An expression of the config is evaluated on whole columns; rows in which any operation rounds are
left to rational arithmetic.  Rounding errors come from error-free transformations
(`loopint.arrays.rounding`), which are exact themselves while nothing over- or underflows.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from flint import fmpq
from numpy.typing import NDArray

from loopint.arrays.rounding import Real, two_product, two_sum

LARGEST, SMALLEST = 2.0**900, 2.0**-900


@dataclass(frozen=True, slots=True)
class ExactDoubles:
    """Doubles, and the rows in which they are exactly what they stand for.

    Examples
    --------
    >>> m = ExactDoubles.of(np.array([0.5, 0.1]))
    >>> (m * m).exact
    array([ True, False])
    >>> (m * fmpq(1, 3)).exact
    array([False, False])
    """

    value: Real
    exact: NDArray[np.bool_]

    @classmethod
    def of(cls, value: Real) -> ExactDoubles:
        """Take numbers as they are; what is not finite is not exact."""
        return cls(value, np.isfinite(value))

    @classmethod
    def constant(cls, number: fmpq | int, rows: int) -> ExactDoubles:
        """Return a column that holds one number."""
        number = fmpq(number)
        value = nearest_double(number)
        exact = value is not None and fmpq(*value.as_integer_ratio()) == number
        return cls(np.full(rows, np.nan if value is None else value), np.full(rows, exact))

    def _other(self, other: object) -> ExactDoubles | None:
        if isinstance(other, ExactDoubles):
            return other
        if isinstance(other, fmpq | int):
            return ExactDoubles.constant(other, self.value.size)
        return None

    def __neg__(self) -> ExactDoubles:
        return ExactDoubles(-self.value, self.exact)

    def __add__(self, other: object) -> ExactDoubles:
        right = self._other(other)
        if right is None:
            return NotImplemented
        with np.errstate(all="ignore"):
            total, lost = two_sum(self.value, right.value)
        return ExactDoubles(total, self.exact & right.exact & (lost == 0) & np.isfinite(total))

    __radd__ = __add__

    def __sub__(self, other: object) -> ExactDoubles:
        right = self._other(other)
        return NotImplemented if right is None else self + (-right)

    def __rsub__(self, other: object) -> ExactDoubles:
        return (-self) + other

    def __mul__(self, other: object) -> ExactDoubles:
        right = self._other(other)
        if right is None:
            return NotImplemented
        a, b = self.value, right.value
        with np.errstate(all="ignore"):
            product, lost = two_product(a, b)
            safe = (a == 0) | (b == 0) | (_in_range(a) & _in_range(b) & _in_range(product))
        lost = np.where((a == 0) | (b == 0), 0.0, lost)
        return ExactDoubles(product, self.exact & right.exact & safe & (lost == 0))

    __rmul__ = __mul__

    def __truediv__(self, other: object) -> ExactDoubles:
        right = self._other(other)
        if right is None:
            return NotImplemented
        with np.errstate(all="ignore"):
            quotient = self.value / right.value
            back, lost = two_product(quotient, right.value)
            safe = _in_range(quotient) & _in_range(right.value) & _in_range(self.value)
            safe &= (back == self.value) & (lost == 0)
            safe |= (self.value == 0) & (right.value != 0)
        return ExactDoubles(quotient, self.exact & right.exact & safe)

    def __rtruediv__(self, other: object) -> ExactDoubles:
        left = self._other(other)
        return NotImplemented if left is None else left / self

    def __pow__(self, exponent: int) -> ExactDoubles:
        if exponent < 0:
            return 1 / self**-exponent
        result = ExactDoubles.constant(1, self.value.size)
        for _ in range(exponent):
            result = result * self
        return result


def nearest_double(number: fmpq) -> float | None:
    """Return the float64 nearest to a rational number, or None beyond its range."""
    try:
        return int(number.p) / int(number.q)
    except OverflowError:
        return None


def _in_range(x: Real) -> NDArray[np.bool_]:
    size = np.abs(x)
    result: NDArray[np.bool_] = (size < LARGEST) & (size > SMALLEST)
    return result
