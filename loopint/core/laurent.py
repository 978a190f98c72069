"""Laurent series in epsilon with ball coefficients, and the series handed to the user."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import mpmath
from flint import acb, arb, fmpq

from loopint.core.errors import InputError, LostOrderError
from loopint.core.numbers import (
    Ball,
    accuracy_bits,
    imaginary_part,
    is_exact_zero,
    mpf_with_bound,
    real_part,
)
from loopint.core.time_limit import check_time

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable, Iterator, Mapping

UNIT = arb(1)


class BallSeries:
    """Sum of c_k eps^k for k = lowest .. highest, plus unknown terms above `highest`.

    Coefficients below `lowest` are exactly zero.  Products and quotients keep only the orders
    that are known: multiplying by a series that starts at eps^-1 loses one order at the top, and
    asking for it raises `LostOrderError` instead of giving a number.

    Parameters
    ----------
    lowest
        The power of epsilon of the first coefficient.
    coefficients
        `arb` or `acb` balls, one for each power; at least one.

    Examples
    --------
    >>> from flint import arb
    >>> one_over_eps = BallSeries(-1, [arb(1), arb(2), arb(3)])
    >>> (one_over_eps * one_over_eps).lowest, (one_over_eps * one_over_eps).highest
    (-2, 0)
    """

    __slots__ = ("coefficients", "lowest")

    def __init__(self, lowest: int, coefficients: Iterable[Ball]) -> None:
        self.lowest = lowest
        self.coefficients = list(coefficients)
        if not self.coefficients:
            raise LostOrderError("a Laurent series needs at least one known order")

    @classmethod
    def zero(cls, highest: int) -> BallSeries:
        """Return the series that is exactly zero through order `highest`."""
        return cls(highest, [arb(0)])

    @property
    def highest(self) -> int:
        """The highest known order."""
        return self.lowest + len(self.coefficients) - 1

    def __getitem__(self, order: int) -> Ball:
        place = order - self.lowest
        if place < 0:
            return arb(0)
        try:
            return self.coefficients[place]
        except IndexError:
            raise LostOrderError(
                f"order {order} is above the highest known order {self.highest}"
            ) from None

    def __add__(self, other: BallSeries) -> BallSeries:
        if self.lowest == other.lowest:
            pairs = zip(self.coefficients, other.coefficients, strict=False)
            return BallSeries(self.lowest, [a + b for a, b in pairs])
        lowest = min(self.lowest, other.lowest)
        highest = min(self.highest, other.highest)
        return BallSeries(lowest, [self[k] + other[k] for k in range(lowest, highest + 1)])

    def __neg__(self) -> BallSeries:
        return self.map(lambda c: -c)

    def __sub__(self, other: BallSeries) -> BallSeries:
        return self + (-other)

    def __mul__(self, other: BallSeries) -> BallSeries:
        a, b = self.coefficients, other.coefficients
        terms = min(len(a), len(b))
        return BallSeries(self.lowest + other.lowest, convolve(a, b, terms))

    def scaled(self, factor: Ball | fmpq | int) -> BallSeries:
        """Return the series times a constant."""
        return BallSeries(self.lowest, [c * factor for c in self.coefficients])

    def shifted(self, powers: int) -> BallSeries:
        """Return the series times eps^powers."""
        return BallSeries(self.lowest + powers, self.coefficients)

    def truncated(self, highest: int) -> BallSeries:
        """Forget the orders above `highest`."""
        if highest >= self.highest:
            return self
        if highest < self.lowest:
            return BallSeries.zero(highest)
        return BallSeries(self.lowest, self.coefficients[: highest - self.lowest + 1])

    def map(self, function: Callable[[Ball], Ball]) -> BallSeries:
        """Apply a function to each coefficient."""
        return BallSeries(self.lowest, [function(c) for c in self.coefficients])

    def inverse(self) -> BallSeries:
        """Return 1 / series.

        Leading coefficients that are exactly zero are skipped, and each costs an order.

        Raises
        ------
        ZeroDivisionError
            If the first coefficient that is not exactly zero has a ball that contains zero, or
            if all are exactly zero.
        """
        a = self.coefficients
        first = next((i for i, c in enumerate(a) if not is_exact_zero(c)), None)
        if first is None or a[first].contains(0):
            raise ZeroDivisionError("the leading coefficient cannot be separated from zero")
        a = a[first:]
        lead = 1 / a[0]
        result: list[Ball] = [lead]
        for n in range(1, len(a)):
            total = a[1] * result[n - 1]
            for j in range(2, n + 1):
                total = total + a[j] * result[n - j]
            result.append(-lead * total)
        return BallSeries(-(self.lowest + first), result)

    def __repr__(self) -> str:
        terms = ", ".join(f"{k}: {self[k]}" for k in range(self.lowest, self.highest + 1))
        return f"BallSeries({{{terms}}})"


def convolve(a: list[Ball], b: list[Ball], terms: int) -> list[Ball]:
    """Return the first coefficients of the product of two power series."""
    check_time()
    result: list[Ball] = []
    for n in range(terms):
        total = a[0] * b[n]
        for j in range(1, n + 1):
            total = total + a[j] * b[n - j]
        result.append(total)
    return result


def exponential(rate: Ball, terms: int, constant: Ball = UNIT) -> list[Ball]:
    """Return the first coefficients of constant * exp(rate * eps) as a power series in eps.

    A rate that is exactly zero gives exact zeros.
    """
    result = [constant]
    for k in range(1, terms):
        last = result[-1] * rate
        result.append(last / k if k > 1 else last)
    return result


@dataclass(frozen=True)
class LaurentSeries:
    """Laurent coefficients of one integral with proven error bounds.

    `series[k]` is the coefficient of eps^k as an `mpmath.mpc`; `series.bounds[k]` bounds
    |true value - series[k]| (the complex distance).  Coefficients have the mass dimension of the
    integral.

    Attributes
    ----------
    orders
        The inclusive range (lowest, highest) that was asked for.
    coefficients, bounds
        Mappings from order to value and to error bound.
    digits
        The relative accuracy asked for.
    region
        Where the point lies, decided exactly (see `loopint.core.kinematics.Region`).
    method
        How the value was computed.
    status
        "ok", or "below_digits" when `max_precision_bits` was reached first: the bounds still hold.
    precision_bits
        The working precision at which the bounds were reached.
    """

    orders: tuple[int, int]
    coefficients: Mapping[int, mpmath.mpc]
    bounds: Mapping[int, mpmath.mpf]
    digits: int
    region: str
    method: str
    status: str
    precision_bits: int
    balls: Mapping[int, Ball] = field(repr=False, compare=False)

    @classmethod
    def from_balls(
        cls,
        series: BallSeries,
        orders: tuple[int, int],
        *,
        digits: int,
        region: str,
        method: str,
        status: str,
        precision_bits: int,
    ) -> LaurentSeries:
        """Round proven balls to numbers with bounds."""
        coefficients: dict[int, mpmath.mpc] = {}
        bounds: dict[int, mpmath.mpf] = {}
        balls: dict[int, Ball] = {}
        for order in range(orders[0], orders[1] + 1):
            ball = balls[order] = series[order]
            re, re_bound = mpf_with_bound(real_part(ball), digits)
            im, im_bound = mpf_with_bound(imaginary_part(ball), digits)
            coefficients[order] = mpmath.mp.make_mpc((re._mpf_, im._mpf_))
            bounds[order] = _hypotenuse_up(re_bound, im_bound)
        return cls(
            orders, coefficients, bounds, digits, region, method, status, precision_bits, balls
        )

    def __getitem__(self, order: int) -> mpmath.mpc:
        if not self.orders[0] <= order <= self.orders[1]:
            raise LostOrderError(
                f"order {order} was not computed; accepted: {self.orders[0]} to {self.orders[1]}"
            )
        return self.coefficients[order]

    def __iter__(self) -> Iterator[int]:
        return iter(range(self.orders[0], self.orders[1] + 1))

    def __len__(self) -> int:
        return self.orders[1] - self.orders[0] + 1

    def _repr_html_(self) -> str:
        rows = "".join(
            f"<tr><td>ε<sup>{order}</sup></td><td>{_shown(self[order], self.digits)}</td>"
            f"<td>{mpmath.nstr(self.bounds[order], 2)}</td></tr>"
            for order in self
        )
        return (
            f"<p>{self.digits} digits, region {self.region}, method {self.method}, status "
            f"{self.status}</p><table><tr><th>order</th><th>coefficient</th><th>|error| ≤</th></tr>"
            f"{rows}</table>"
        )

    def _repr_latex_(self) -> str:
        terms = [
            rf"\left({_shown(self[order], min(self.digits, 10))}\right) \varepsilon^{{{order}}}"
            for order in self
            if self[order] != 0 or self.bounds[order] != 0
        ]
        return rf"${' + '.join(terms) or '0'} + O(\varepsilon^{{{self.orders[1] + 1}}})$"

    def __repr__(self) -> str:
        lines = [
            f"LaurentSeries, {self.digits} digits, region {self.region}, "
            f"method {self.method}, status {self.status}"
        ]
        for order in self:
            value = mpmath.nstr(self[order], self.digits, min_fixed=-5, max_fixed=self.digits)
            bound = mpmath.nstr(self.bounds[order], 2)
            lines.append(f"  eps^{order:<3d} {value}  +/- {bound}")
        return "\n".join(lines)


def _shown(value: mpmath.mpc, digits: int) -> str:
    """Write a complex number without a part that is zero."""
    re, im = (str(mpmath.nstr(part, digits)) for part in (value.real, abs(value.imag)))
    if value.imag == 0:
        return re
    return f"{re} {'-' if value.imag < 0 else '+'} {im} i"


def _hypotenuse_up(a: mpmath.mpf, b: mpmath.mpf) -> mpmath.mpf:
    """Return an upper bound on sqrt(a^2 + b^2) for the bounds of the two components."""
    if not b:
        return a
    if not a:
        return b
    with mpmath.workprec(40):
        return mpmath.sqrt(a * a + b * b) * (1 + mpmath.mpf(2) ** -30)


def worst_accuracy_bits(series: BallSeries, orders: tuple[int, int]) -> int | None:
    """Return the smallest relative accuracy over the orders, or None if all are exact."""
    worst: int | None = None
    for k in range(max(orders[0], series.lowest), orders[1] + 1):
        bits = accuracy_bits(series[k])
        if bits is not None and (worst is None or bits < worst):
            worst = bits
    return worst


def check_orders(orders: tuple[int, int]) -> tuple[int, int]:
    """Return a valid inclusive (lowest, highest) range.

    Raises
    ------
    InputError
        If it is not two integers in increasing order between -20 and 60.
    """
    try:
        lowest, highest = orders
    except (TypeError, ValueError):
        raise InputError(
            f"orders = {orders!r} is not a pair; accepted: (lowest, highest), such as (-1, 2)"
        ) from None
    for order in (lowest, highest):
        if isinstance(order, bool) or not isinstance(order, int) or not -20 <= order <= 60:
            raise InputError(f"orders = {orders!r}; accepted: two integers from -20 to 60")
    if lowest > highest:
        raise InputError(f"orders = {orders!r} is upside down; accepted: lowest <= highest")
    return lowest, highest


def complex_ball(ball: Ball) -> acb:
    """Return the ball as an `acb`."""
    return ball if isinstance(ball, acb) else acb(ball)
