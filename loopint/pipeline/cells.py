"""Whole columns of the points as doubles, with what their rounding costs."""

from __future__ import annotations

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from flint import fmpq

from loopint.arrays.rounding import Real
from loopint.pipeline.rounded import LARGEST, SMALLEST, Rounded

EXACT_INTEGERS = 2.0**53
DECIMAL_128_DIGITS = 38
EXACT_POWER_OF_TEN = 22  # 10^22 is a double
DECIMAL_TEXT = r"^-?[0-9]+(\.[0-9]*)?([eE][-+]?[0-9]{1,3})?$"
INTEGER_TEXT = r"^-?[0-9]{1,15}$"


def rounded_column(column: pa.ChunkedArray) -> Rounded:
    """Return a column as doubles.

    Nothing is known of nulls, of numbers beyond 2^+-900, and of texts other than decimal numbers.

    Examples
    --------
    >>> rounded_column(pa.chunked_array([["0.1", "3", "1/3"]])).error
    array([ 1.,  0., inf])
    """
    kind = column.type
    if pa.types.is_dictionary(kind):
        column = column.cast(kind.value_type)
        kind = column.type
    if pa.types.is_floating(kind):
        return Rounded.of(_numpy(column, np.nan).astype(np.float64))
    if pa.types.is_integer(kind):
        return _integers(_numpy(column, 0)).where(~_nulls(column))
    if pa.types.is_decimal(kind):
        return _decimals(column)
    if pa.types.is_string(kind) or pa.types.is_large_string(kind):
        return _texts(column)
    return Rounded(np.zeros(len(column)), np.full(len(column), np.inf))


def _integers(values: np.ndarray) -> Rounded:
    """Take 64-bit integers, which NumPy rounds to nearest."""
    converted = values.astype(np.float64)
    return Rounded(converted, np.where(np.abs(converted) < EXACT_INTEGERS, 0.0, 1.0))


def _decimals(column: pa.ChunkedArray) -> Rounded:
    """Take unscaled integers that fit into 64 bits, and divide by the power of ten."""
    rows, kind = len(column), column.type
    unknown = Rounded(np.zeros(rows), np.full(rows, np.inf))
    if kind.precision > DECIMAL_128_DIGITS or not 0 <= kind.scale <= EXACT_POWER_OF_TEN:
        return unknown
    array = column.cast(pa.decimal128(DECIMAL_128_DIGITS, kind.scale)).combine_chunks()
    if isinstance(array, pa.ChunkedArray):
        array = pa.concat_arrays(array.chunks) if array.num_chunks else pa.array([], array.type)
    if not rows:
        return unknown
    words = np.frombuffer(array.buffers()[1], dtype="<i8")
    words = words[2 * array.offset : 2 * (array.offset + rows)]
    low, high = words[::2], words[1::2]
    fits = high == (low >> 63)
    unscaled = _integers(low).where(fits & ~_nulls(column))
    return unscaled / Rounded.constant(fmpq(10) ** kind.scale, rows)


def _texts(column: pa.ChunkedArray) -> Rounded:
    """Take decimal numbers, which Arrow rounds to nearest."""
    decimal = pc.fill_null(pc.match_substring_regex(column, DECIMAL_TEXT), False)
    values: Real = _numpy(pc.if_else(decimal, column, "nan").cast(pa.float64()), np.nan)
    sizes = np.abs(values)
    integer = _numpy(pc.fill_null(pc.match_substring_regex(column, INTEGER_TEXT), False), False)
    rounded = np.where((sizes > SMALLEST) & (sizes < LARGEST), 1.0, np.inf)  # inf for 1e-999
    return Rounded(values, np.where(integer, 0.0, rounded))


def _nulls(column: pa.ChunkedArray) -> np.ndarray:
    return _numpy(column.is_null(), False)


def _numpy(column: pa.ChunkedArray, missing: object) -> np.ndarray:
    if column.null_count:
        column = column.fill_null(missing)
    return np.asarray(column.to_numpy())
