"""Error-free transformations and the constants of the rounding model (see `loopint.arrays`).

An unevaluated sum hi + lo of two doubles carries about 106 bits.  Sources: Knuth, The Art of
Computer Programming 2, 4.2.2 (sum); Dekker, Numer. Math. 18 (1971) 224 (product).
"""

from __future__ import annotations

from typing import Any, TypeAlias, cast

import numpy as np
from numpy.typing import NDArray

Real: TypeAlias = NDArray[np.float64]
Complex: TypeAlias = NDArray[np.complex128]
Number: TypeAlias = NDArray[Any]  # float64 or complex128

UNIT = 2.0**-53
FUNCTION = 8.0  # 4 ulp of an elementary function, in units of UNIT relative to the result
SLACK = 1.01  # second-order terms, and the rounding of the bounds themselves
PRODUCT = 2.3  # at least sqrt(5): one complex product, in units of UNIT
QUOTIENT = 6.3  # at least 4 + sqrt(5): see `quotient`
SPLITTER = 2.0**27 + 1.0


def two_sum(a: Real, b: Real) -> tuple[Real, Real]:
    """Return fl(a+b) and its rounding error, exactly."""
    total = a + b
    part = total - a
    return total, (a - (total - part)) + (b - part)


def two_product(a: Real, b: Real) -> tuple[Real, Real]:
    """Return fl(a*b) and its rounding error, exactly."""
    product = a * b
    a_high, a_low = _split(a)
    b_high, b_low = _split(b)
    error = ((a_high * b_high - product) + a_high * b_low + a_low * b_high) + a_low * b_low
    return product, error


def _split(a: Real) -> tuple[Real, Real]:
    """Split into two halves of at most 26 bits."""
    shifted = SPLITTER * a
    high = shifted - (shifted - a)
    return high, a - high


def sum_of_three(a: Real, b: Real, c: Real) -> tuple[Real, Real]:
    """Return a+b+c as hi + lo, within 2.1 UNIT^2 (|a|+|b|+|c|)."""
    total, first = two_sum(a, b)
    total, second = two_sum(total, c)
    return two_sum(total, first + second)


def sum_of_products(terms: list[tuple[float, tuple[Real, Real], tuple[Real, Real]]]) -> Real:
    """Return sum of factor * (x + x_low)(y + y_low) for factors that are powers of two.

    The error is at most UNIT |result| + 60 UNIT^2 sum |factor x y| for up to four terms.
    """
    high: Real | None = None
    low: Real | float = 0.0
    for factor, (x, x_low), (y, y_low) in terms:
        product, error = two_product(factor * x, y)
        error = error + factor * (x * y_low + x_low * y)
        if high is None:
            high, low = product, error
        else:
            high, lost = two_sum(high, product)
            low = low + (error + lost)
    assert high is not None
    return high + low


def size(x: Number) -> Real:
    """Return |x| within 2 UNIT."""
    if np.iscomplexobj(x):
        return cast("Real", np.sqrt(x.real * x.real + x.imag * x.imag))
    return cast("Real", np.abs(x))


def logarithm(x: Number) -> tuple[Number, Real]:
    """Return the principal logarithm and its absolute error in units of UNIT, for exact x."""
    if not np.iscomplexobj(x):
        value = np.log(x)
        return value, FUNCTION * np.abs(value)
    value = as_complex(0.5 * np.log(x.real * x.real + x.imag * x.imag), np.arctan2(x.imag, x.real))
    return value, 1.0 + FUNCTION * size(value)


def square_root(x: Complex) -> Complex:
    """Return the principal square root; its relative error is at most 3.5 UNIT."""
    modulus = np.sqrt(x.real * x.real + x.imag * x.imag)
    larger = np.sqrt(0.5 * (modulus + np.abs(x.real)))
    smaller = np.abs(x.imag) / (2.0 * larger)
    right = x.real >= 0
    return as_complex(
        np.where(right, larger, smaller), np.copysign(np.where(right, smaller, larger), x.imag)
    )


def quotient(x: Number, y: Number) -> Number:
    """Return x/y; 1/|y|^2 is within 3 UNIT, and the relative error at most QUOTIENT."""
    if not np.iscomplexobj(y):
        return np.divide(x, y)
    inverse: Number = np.conj(y) * (1.0 / (y.real * y.real + y.imag * y.imag))
    return x * inverse


def as_complex(re: Number, im: Real | float = 0.0) -> Complex:
    """Return re + i im; complex `re` is returned as it is."""
    if isinstance(re, np.ndarray) and re.dtype == np.complex128:
        return re
    result = np.empty(re.shape, dtype=np.complex128)
    result.real, result.imag = re, im
    return result
