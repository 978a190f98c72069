"""The one place where the working precision of ball arithmetic is changed.

python-flint keeps the precision in a context object shared by the whole process.  Every
function of the mathematics floor computes at the precision it finds there; only
`working_precision` changes it, and it always restores what it found.
"""

from __future__ import annotations

import math
from contextlib import contextmanager
from functools import cache
from typing import TYPE_CHECKING

import flint

if TYPE_CHECKING:
    from collections.abc import Iterator

BITS_PER_DIGIT = math.log2(10)
WORD = 32


class working_precision:  # noqa: N801 - reads as a function
    """Compute with `bits` bits inside the block and restore the old precision after it.

    Examples
    --------
    >>> import flint
    >>> with working_precision(128):
    ...     flint.ctx.prec
    128
    >>> flint.ctx.prec
    53
    """

    __slots__ = ("_bits", "_saved")

    def __init__(self, bits: int) -> None:
        self._bits = bits

    def __enter__(self) -> None:
        self._saved = flint.ctx.prec
        flint.ctx.prec = self._bits

    def __exit__(self, *_: object) -> None:
        flint.ctx.prec = self._saved


@contextmanager
def series_length(terms: int) -> Iterator[None]:
    """Truncate python-flint power series after `terms` terms inside the block."""
    saved = flint.ctx.cap
    flint.ctx.cap = terms
    try:
        yield
    finally:
        flint.ctx.cap = saved


def current_bits() -> int:
    """Return the working precision in bits."""
    return int(flint.ctx.prec)


@cache
def bits_for_digits(digits: int) -> int:
    """Return the relative accuracy in bits that proves `digits` digits of a complex value.

    A ball whose radius is below 2^-b times the larger component of its midpoint is within
    sqrt(2) 2^-b / (1 - 2^-b) of every number it holds, relative to that number.  Four guard
    bits cover that factor and the final rounding to the digits asked for.
    """
    return math.ceil(digits * BITS_PER_DIGIT) + 4


def round_up_to_word(bits: int) -> int:
    """Round up to a multiple of 32 so that points share kinematics-independent tables."""
    return -(-bits // WORD) * WORD
