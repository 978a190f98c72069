"""Kinematics-independent tables: epsilon coefficients as truncated power series in one variable.

A table is computed once for a function, a precision and a highest order, and shared by all points;
a point costs the evaluation of polynomials.  The truncation is proven: the caller gives a bound on
everything beyond the computed coefficients, and shorter polynomials for small arguments are cut
with the sum of the dropped coefficients' sizes as their error.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import TypeAlias

from flint import acb, arb, arb_poly

from loopint.core.errors import MorePrecisionNeeded
from loopint.core.laurent import BallSeries
from loopint.core.numbers import Ball
from loopint.core.precision import working_precision

SMALLEST_EXPONENT = 40  # below 2^-40 of the radius the polynomials no longer get shorter by much

Remainder: TypeAlias = Callable[[int, arb], arb]


class EpsilonTable:
    """Coefficients of eps^lowest, eps^(lowest+1), ... as power series in a variable u.

    Parameters
    ----------
    lowest
        The first power of epsilon.
    orders
        For each power the coefficients of u^0, u^1, ..., all of one length.
    remainder
        `remainder(k, radius)` bounds the sum over the terms beyond the computed ones of the k-th
        power, sum_{n >= length} |a_n| radius^n.
    largest_radius
        The largest |u| that may be evaluated.
    bits
        Truncation errors are kept below 2^-bits where the computed length allows it; they are in
        the balls returned in any case.
    """

    def __init__(
        self,
        lowest: int,
        orders: list[list[arb]],
        remainder: Remainder,
        largest_radius: float,
        bits: int,
    ) -> None:
        self.lowest = lowest
        self.largest_radius = largest_radius
        self._orders = orders
        self._remainder = remainder
        self._bits = bits
        self._cut: dict[int, list[tuple[arb_poly, arb]]] = {}

    def __len__(self) -> int:
        """Return the number of computed terms."""
        return len(self._orders[0])

    def evaluate(self, u: Ball) -> BallSeries:
        """Enclose every epsilon coefficient at u.

        Raises
        ------
        MorePrecisionNeeded
            If the ball u is not known to lie within the largest radius.
        """
        size = float(abs(u).upper()) if isinstance(u, arb) else float(u.abs_upper())
        if not size <= self.largest_radius:
            raise MorePrecisionNeeded
        exponent = 0
        if size < self.largest_radius / 2:
            exponent = SMALLEST_EXPONENT
            if size > 0:
                exponent = min(exponent, -math.frexp(size / self.largest_radius)[1])
        pieces = self._cut.get(exponent)
        if pieces is None:
            pieces = self._cut[exponent] = self._truncate(exponent)
        real = isinstance(u, arb)
        return BallSeries(
            self.lowest,
            [polynomial(u) + (tail if real else acb(tail, tail)) for polynomial, tail in pieces],
        )

    def shortest(self, radius: arb, goal: arb) -> list[tuple[list[arb], arb]]:
        """Return, for each power of epsilon, coefficients whose tail is below `goal`.

        Beside the coefficients stands a bound on the tail for |u| <= radius, at the working
        precision; it exceeds the goal only if the computed length does not reach it.
        """
        pieces = []
        for k, coefficients in enumerate(self._orders):
            terms = self._terms_needed(k, radius, goal)
            pieces.append((coefficients[:terms], self._tail(k, radius, terms)))
        return pieces

    def _truncate(self, exponent: int) -> list[tuple[arb_poly, arb]]:
        """Cut polynomials for |u| <= largest_radius 2^-exponent."""
        with working_precision(64):
            radius = arb(self.largest_radius) * arb(2) ** -exponent
            goal = arb(2) ** -self._bits
            terms = max(self._terms_needed(k, radius, goal) for k in range(len(self._orders)))
            tails = [self._tail(k, radius, terms) for k in range(len(self._orders))]
        with working_precision(self._bits + 32):
            return [
                (arb_poly(coefficients[:terms]), arb(0, tail) if tail != 0 else arb(0))
                for coefficients, tail in zip(self._orders, tails, strict=True)
            ]

    def _tail(self, k: int, radius: arb, terms: int) -> arb:
        """Bound sum_{n >= terms} |a_n| radius^n."""
        coefficients = self._orders[k]
        total = arb(0)
        for n in range(len(coefficients) - 1, terms - 1, -1):
            total = total * radius + coefficients[n].abs_upper()
        return (total * radius**terms + self._remainder(k, radius)).upper()

    def _terms_needed(self, k: int, radius: arb, goal: arb) -> int:
        """Return the smallest number of terms whose tail bound is below the goal."""
        low, high = 1, len(self._orders[k])
        while low < high:
            middle = (low + high) // 2
            if self._tail(k, radius, middle) <= goal:
                high = middle
            else:
                low = middle + 1
        return low
