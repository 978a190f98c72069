"""Truncated series in epsilon whose coefficients are arrays with error bounds.

Two forms.  `ArraySeries` has an absolute error for each coefficient.  `MajorisedSeries` has, with
|values[k]| <= sizes[k],

    error_k <= (relative + step k) sizes[k] + shift sizes[k-1],

a form that products with exp(rate eps) keep, since an error of the rate itself costs
|rate|^(k-1)/(k-1)! of it.  Errors are in units of UNIT throughout.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from loopint.arrays.rounding import PRODUCT, Number, Real, size

STEP = PRODUCT + 2.3 + 1.0  # rate^k/k! takes k products and divisions, a sum of k+1 terms k more


@dataclass(frozen=True, slots=True)
class ArraySeries:
    """sum_k values[k] eps^k; `errors[k]` bounds the error of values[k]."""

    values: list[Number]
    errors: list[Real]

    def __add__(self, other: ArraySeries) -> ArraySeries:
        values = [a + b for a, b in zip(self.values, other.values, strict=True)]
        errors = [
            a + b + size(value)
            for a, b, value in zip(self.errors, other.errors, values, strict=True)
        ]
        return ArraySeries(values, errors)

    def times_sign(self, sign: float) -> ArraySeries:
        """Multiply by 1 or -1."""
        return self if sign == 1.0 else ArraySeries([-v for v in self.values], self.errors)

    def scaled(self, factor: Number, factor_error: Real | float) -> ArraySeries:
        """Multiply by a factor known within `factor_error` (absolute)."""
        modulus = size(factor)
        more = factor_error + PRODUCT * modulus
        return ArraySeries(
            [factor * value for value in self.values],
            [
                modulus * error + more * size(value)
                for value, error in zip(self.values, self.errors, strict=True)
            ],
        )

    def times_constants(self, constants: list[float]) -> ArraySeries:
        """Multiply by a series whose coefficients are correctly rounded constants."""
        sizes = [size(value) for value in self.values]
        values, errors = [], []
        for k in range(len(sizes)):
            value, error = self.values[k] * constants[0], self.errors[k] * abs(constants[0])
            bound = sizes[k] * abs(constants[0])
            for j in range(1, k + 1):
                c = constants[j]
                if c != 0.0:
                    value = value + self.values[k - j] * c
                    error += self.errors[k - j] * abs(c)
                    bound += sizes[k - j] * abs(c)
            values.append(value)
            errors.append(error + (k + 2.0) * bound)
        return ArraySeries(values, errors)

    def times(self, other: MajorisedSeries) -> ArraySeries:
        """Return the product, truncated to the same length."""
        sizes = [size(value) for value in self.values]
        bounds = convolution(sizes, other.sizes)
        errors = convolution(self.errors, other.sizes)
        for k in range(len(errors)):
            errors[k] += (other.relative + (PRODUCT + (other.step + 1.0) * k)) * bounds[k]
            if k:
                errors[k] += other.shift * bounds[k - 1]
        return ArraySeries(convolution(self.values, other.values), errors)


@dataclass(frozen=True, slots=True)
class MajorisedSeries:
    """sum_k values[k] eps^k with the errors of the module text; constants may be floats."""

    values: list[Any]
    sizes: list[Any]
    relative: Real | float
    step: float
    shift: Real | float

    def times_exponential(self, rate: Number, rate_error: Real) -> MajorisedSeries:
        """Multiply by exp(rate eps) for a rate known within `rate_error`."""
        powers, sizes = _exponential(rate, len(self.values))
        return MajorisedSeries(
            _times_unit_series(self.values, powers),
            _times_unit_series(self.sizes, sizes),
            self.relative + PRODUCT,
            self.step + STEP,
            self.shift + rate_error,
        )

    def absolute(self) -> ArraySeries:
        """Return the same series with absolute errors."""
        return ArraySeries(list(self.values), self._errors(self.relative, self.step, self.shift))

    def scaled(self, factor: Number, factor_error: Real | float) -> ArraySeries:
        """Multiply by a factor known within `factor_error`, relative to itself."""
        modulus = size(factor)
        relative = (self.relative + factor_error + PRODUCT) * modulus
        errors = self._errors(relative, self.step * modulus, self.shift * modulus)
        return ArraySeries([factor * value for value in self.values], errors)

    def _errors(
        self, relative: Real | float, step: Real | float, shift: Real | float
    ) -> list[Real]:
        errors = [relative * self.sizes[0]]
        for k in range(1, len(self.sizes)):
            relative = relative + step
            errors.append(relative * self.sizes[k] + shift * self.sizes[k - 1])
        return errors


def constants_times_exponential(
    constants: list[float], rate: Number, rate_error: Real
) -> MajorisedSeries:
    """Return (sum_k constants[k] eps^k) exp(rate eps); the constants are correctly rounded."""
    powers, sizes = _exponential(rate, len(constants))
    moduli = [abs(c) for c in constants]
    return MajorisedSeries(
        _times_unit_series(constants, powers),
        _times_unit_series(moduli, sizes),
        1.0 + PRODUCT,
        STEP,
        rate_error,
    )


def exponential(rate: Number, rate_error: Real, length: int) -> ArraySeries:
    """Return exp(rate eps) for a rate known within `rate_error`."""
    powers, sizes = _exponential(rate, length)
    errors = [0.0 * rate_error]
    errors += [sizes[k - 1] * rate_error + (STEP * (k - 1)) * sizes[k] for k in range(1, length)]
    return ArraySeries(powers, errors)


def _exponential(rate: Number, length: int) -> tuple[list[Number], list[Real]]:
    modulus = size(rate)
    powers, sizes = [np.ones_like(rate), rate], [np.ones_like(modulus), modulus]
    for k in range(2, length):
        powers.append(powers[-1] * rate)
        powers[-1] *= 1.0 / k
        sizes.append(sizes[-1] * modulus)
        sizes[-1] *= 1.0 / k
    return powers[:length], sizes[:length]


def _times_unit_series(a: list[Any], b: list[Number]) -> list[Any]:
    """Return the coefficients of the product with a series that starts with 1."""
    result = [a[0]]
    for k in range(1, len(a)):
        total = b[k] + a[k] if isinstance(a[0], float) and a[0] == 1.0 else a[0] * b[k] + a[k]
        for j in range(1, k):
            if isinstance(a[j], float) and a[j] == 0.0:
                continue
            total += a[j] * b[k - j]
        result.append(total)
    return result


def convolution(a: list[Number], b: list[Any]) -> list[Number]:
    """Return the coefficients of the product of two series of one length.

    Coefficients of `a` beyond the first are complex if any is.
    """
    result = []
    for k in range(len(a)):
        total = a[k] * b[0]
        for j in range(1, k + 1):
            total += a[k - j] * b[j]
        result.append(total)
    return result
