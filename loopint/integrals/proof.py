"""Raise the working precision until the digits asked for are proven."""

from __future__ import annotations

from typing import TYPE_CHECKING, NamedTuple

from loopint.core.errors import InputError, MorePrecisionNeeded
from loopint.core.laurent import BallSeries, LaurentSeries, worst_accuracy_bits
from loopint.core.numbers import accuracy_bits
from loopint.core.precision import bits_for_digits, round_up_to_word, working_precision
from loopint.core.time_limit import check_time

if TYPE_CHECKING:
    from collections.abc import Callable

MIN_DIGITS = 5
MAX_DIGITS = 2000
DEFAULT_MAX_PRECISION_BITS = 20_000
GUARD_BITS = 20
FLOAT_BITS = 58  # a float64 and a few bits to decide how it rounds


class Evaluation(NamedTuple):
    """One integral at one point: proven balls, and how they were obtained.

    `proven` is False when `max_precision_bits` was reached before the digits asked for, or when a
    coefficient could not be told from zero; the balls still hold the true values.  `timed_out` says
    that a time limit came first: the balls are then NaN.
    """

    series: BallSeries
    orders: tuple[int, int]
    digits: int
    region: str
    method: str
    precision_bits: int
    proven: bool
    timed_out: bool = False

    @property
    def status(self) -> str:
        """'ok', 'below_digits' or 'timed_out'."""
        if self.timed_out:
            return "timed_out"
        return "ok" if self.proven else "below_digits"

    def rounded(self) -> LaurentSeries:
        """Return mpmath numbers with bounds."""
        return LaurentSeries.from_balls(
            self.series,
            self.orders,
            digits=self.digits,
            region=self.region,
            method=self.method,
            status=self.status,
            precision_bits=self.precision_bits,
        )


def check_digits(digits: int) -> int:
    """Return digits if it is an integer from 5 to 2000, else raise `InputError`."""
    if (
        isinstance(digits, bool)
        or not isinstance(digits, int)
        or not MIN_DIGITS <= digits <= MAX_DIGITS
    ):
        raise InputError(
            f"digits = {digits!r}; accepted: an integer from {MIN_DIGITS} to {MAX_DIGITS}"
        )
    return digits


def prove(
    compute: Callable[[], BallSeries],
    orders: tuple[int, int],
    digits: int,
    max_bits: int,
    accept: Callable[[BallSeries], bool] | None = None,
    hopeless_bits: Callable[[], int] | None = None,
) -> tuple[BallSeries, int, bool]:
    """Evaluate at rising precision until every order has `digits` proven digits.

    Parameters
    ----------
    compute
        Evaluates the series at the working precision; may raise `MorePrecisionNeeded`.
    orders
        The inclusive range of orders that counts.
    digits, max_bits
        Relative accuracy of each complex coefficient, and the cap on the working precision.
    accept
        A further condition on the result, such as unique rounding to float64.  It is tried at
        most four times and never turns a proven result into a failure.
    hopeless_bits
        From this precision on a coefficient that is still not told from zero is left at its bound:
        it is zero, and no precision proves a relative accuracy of zero.

    Returns
    -------
    series, bits, proven
        `proven` is False if the cap, or `hopeless_bits`, came first.
    """
    needed = bits_for_digits(digits)
    start = needed if accept is None else max(needed, FLOAT_BITS)  # the wish is one of floats
    bits = min(round_up_to_word(start + GUARD_BITS), max_bits)
    wishes = 0
    while True:
        check_time()
        series: BallSeries | None = None
        missing = bits  # double the precision unless the accuracy tells better
        with working_precision(bits):
            try:
                series = compute()
            except MorePrecisionNeeded:
                if bits >= max_bits:
                    raise
            else:
                accuracy = worst_accuracy_bits(series, orders)
                if accuracy is None or accuracy >= needed:
                    if accept is None or wishes == 4 or bits >= max_bits or accept(series):
                        return series, bits, True
                    wishes += 1
                elif accuracy > 0:
                    missing = needed - accuracy
                elif (
                    hopeless_bits is not None
                    and bits >= hopeless_bits()
                    and _only_zeros_miss(series, orders, needed)
                ):
                    return series, bits, False
        if bits >= max_bits:
            assert series is not None
            return series, bits, False
        bits = min(round_up_to_word(bits + missing + 8), max_bits)


def _only_zeros_miss(series: BallSeries, orders: tuple[int, int], needed: int) -> bool:
    """Whether every coefficient without the accuracy needed is one that may be zero."""
    for k in range(max(orders[0], series.lowest), orders[1] + 1):
        bits = accuracy_bits(series[k])
        if bits is not None and bits < needed and not series[k].contains(0):
            return False
    return True
