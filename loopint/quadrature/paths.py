"""Where to integrate: a path in the Feynman parameter x on which log Q is unambiguous.

Q(x) = x m1^2 + (1-x) m2^2 - x(1-x) p^2 - i0 is integrated from 0 to 1.  With x = a + ib

    Im Q = 2 p^2 b (a - x0) + a Im m1^2 + (1-a) Im m2^2,
    x0   = (p^2 - Re(m1^2 - m2^2)) / (2 p^2),

so for p^2 > 0 a path above the real axis left of x0 and below it right of x0 stays in Im Q <= 0,
and no zero of Q is crossed on the way from the real axis to it: the -i0 is obeyed without adding a
small number.  Only when the zeros of Q are (nearly) real and between 0 and 1 is that detour needed.

The path is cut into straight legs.  Each leg starts at an *anchor* (0, x0 or 1) and Q is expanded
about the anchor with exact coefficients.  A zero of Q very close to the path is very close to an
anchor, and there nothing cancels.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from itertools import pairwise
from typing import TYPE_CHECKING, Any, TypeAlias

from flint import fmpq

from loopint.core.kinematics import Region, TwoPoint, kallen
from loopint.core.numbers import ZERO, ExactComplex
from loopint.quadrature.exponents import Place

if TYPE_CHECKING:
    from collections.abc import Sequence

Number: TypeAlias = Any  # a ball or an mpmath number: both arithmetics walk the same legs
ONE, HALF = fmpq(1), fmpq(1, 2)


@dataclass(frozen=True, slots=True)
class Arithmetic:
    """What the geometry needs from a kind of numbers.

    Attributes
    ----------
    exact
        Converts an exact number; a real number may stay real.
    sqrt
        Principal square root.
    larger
        `larger(a, b)` tells whether |a| seems at least |b|; only the accuracy depends on it.
    """

    exact: Callable[[ExactComplex], Number]
    sqrt: Callable[[Number], Number]
    larger: Callable[[Number, Number], bool]


@dataclass(frozen=True, slots=True)
class Leg:
    """A straight piece of the path, x = anchor + u with u from 0 to `end`.

    Attributes
    ----------
    anchor, co_anchor
        x and 1 - x where the leg starts.
    end
        u where the leg ends.
    orientation
        +1 if the path runs from the anchor outwards, -1 if it runs towards the anchor.
    quadratic
        (c0, c1, c2) with Q = c0 + c1 u + c2 u^2.
    zeros
        The zeros of Q in u, with multiplicity; fewer than two if c2 = 0.
    zero_order
        The order of the zero that Q has exactly at the anchor: 0, 1 or 2.
    """

    anchor: Number
    co_anchor: Number
    end: Number
    orientation: int
    quadratic: tuple[Number, Number, Number]
    zeros: tuple[Number, ...]
    zero_order: int

    @property
    def place(self) -> Place:
        """Where the anchor is."""
        if self.anchor == 0:
            return Place.START
        return Place.END if self.co_anchor == 0 else Place.INSIDE


@dataclass(frozen=True, slots=True)
class Path:
    """The legs from 0 to 1; `is_real` says that x is real and Q >= 0 on all of them."""

    legs: tuple[Leg, ...]
    is_real: bool


def normalisation(point: TwoPoint) -> fmpq:
    """Return the power of two next above the largest of |p^2|, |m1^2|, |m2^2|, exactly."""
    m1, m2 = point.m1_squared, point.m2_squared
    largest = max(abs(part) for part in (point.p_squared, m1.re, m1.im, m2.re, m2.im))
    exponent = int(largest.p).bit_length() - int(largest.q).bit_length() + 1
    return fmpq(1 << exponent) if exponent >= 0 else fmpq(1, 1 << -exponent)


def resolve_on_shell(point: TwoPoint) -> TwoPoint:
    """Replace a point moved onto p^2 = m^2 (other line massless) by that rational point."""
    if point.snapped_onto is None or not (point.m1_squared.is_zero or point.m2_squared.is_zero):
        return point
    on_shell = point.m1_squared.re + point.m2_squared.re
    return replace(point, p_squared=on_shell, snapped_onto=None)


def zero_orders(point: TwoPoint) -> tuple[int, int, int]:
    """Return the order of the zero of Q at x = 0, at x = 1, and inside (0, 1), exactly.

    Inside, only the double zero at threshold is on the way; a pair of simple real zeros is
    avoided by the path.
    """
    if point.snapped_onto is not None:
        return 0, 0, 2 if point.snapped_onto is Region.THRESHOLD else 0
    p, m1, m2 = ExactComplex(point.p_squared), point.m1_squared, point.m2_squared
    slope_at_0, slope_at_1 = m1 - m2 - p, m1 - m2 + p
    at_0 = (2 if slope_at_0.is_zero else 1) if m2.is_zero else 0
    at_1 = (2 if slope_at_1.is_zero else 1) if m1.is_zero else 0
    inside = 2 if point.region is Region.THRESHOLD else 0
    return at_0, at_1, inside


def build_path(point: TwoPoint, numbers: Arithmetic) -> Path:
    """Return the path for a point that is not scaleless, in the given arithmetic."""
    point = resolve_on_shell(point)
    if point.snapped_onto is not None:
        return _snapped_path(point, numbers)
    return _exact_path(point, numbers)


def _exact_path(point: TwoPoint, numbers: Arithmetic) -> Path:
    p, m1, m2 = point.p_squared, point.m1_squared, point.m2_squared
    momentum = ExactComplex(p)
    discriminant = kallen(momentum, m1, m2)
    anchors, detour = [ZERO, ONE], False
    if p != 0:
        middle = HALF - (m1.re - m2.re) / (2 * p)
        if 0 < middle < 1:
            anchors = [ZERO, middle, ONE]
            detour = p > 0 and discriminant.re > 0
    root = numbers.sqrt(numbers.exact(discriminant))
    legs = []
    for (a, b), side in zip(pairwise(anchors), (1, -1), strict=False):
        height = side * (b - a) / 2 if detour else ZERO
        for anchor, other, orientation in ((a, b, 1), (b, a, -1)):
            at = ExactComplex(anchor)
            slope = m1 - m2 - momentum + momentum.scaled(2 * anchor)
            value = m1.scaled(anchor) + m2.scaled(1 - anchor)
            value = value - momentum.scaled(anchor * (1 - anchor))
            order = (2 if slope.is_zero else 1) if value.is_zero else 0
            c0, c1, c2 = (numbers.exact(c) for c in (value, slope, momentum))
            if p == 0:
                zeros: tuple[Number, ...] = () if slope.is_zero else (-c0 / c1,)
            elif discriminant.is_zero:
                zeros = (-c1 / (2 * c2),) * 2
            else:
                zeros = _two_zeros(c0, c1, c2, root, numbers)
            legs.append(
                Leg(
                    numbers.exact(at),
                    numbers.exact(ExactComplex(1 - anchor)),
                    numbers.exact(ExactComplex((other - anchor) / 2, height)),
                    orientation,
                    (c0, c1, c2),
                    zeros,
                    order,
                )
            )
    return Path(tuple(legs), point.masses_are_real and not detour)


def _two_zeros(
    c0: Number, c1: Number, c2: Number, root: Number, numbers: Arithmetic
) -> tuple[Number, Number]:
    """Solve c0 + c1 u + c2 u^2 = 0, given the square root of its discriminant, without loss."""
    plus, minus = c1 + root, c1 - root
    doubled = plus if numbers.larger(plus, minus) else minus
    return -doubled / (2 * c2), -2 * c0 / doubled


def _snapped_path(point: TwoPoint, numbers: Arithmetic) -> Path:
    """Return the path for p^2 = (m1 +- m2)^2 with irrational masses: Q is a square.

    Q = (total x - signed)^2 with signed = m2, total = m1 + m2 at threshold and signed = -m2,
    total = m1 - m2 at pseudothreshold.
    """
    m1 = numbers.sqrt(numbers.exact(point.m1_squared))
    m2 = numbers.sqrt(numbers.exact(point.m2_squared))
    at_threshold = point.snapped_onto is Region.THRESHOLD
    signed = m2 if at_threshold else -m2
    total = m1 + signed
    zero, one = numbers.exact(ExactComplex(ZERO)), numbers.exact(ExactComplex(ONE))
    # Each anchor with 1 - x and the root of Q there: total x - signed.
    first, last = (zero, one, -signed), (one, zero, m1)
    stops: Sequence[tuple[Number, Number, Number]] = (first, last)
    if at_threshold:
        stops = (first, (signed / total, m1 / total, zero), last)
    legs = []
    for a, b in pairwise(stops):
        for (anchor, co_anchor, value), other, orientation in ((a, b[0], 1), (b, a[0], -1)):
            legs.append(
                Leg(
                    anchor,
                    co_anchor,
                    (other - anchor) / 2,
                    orientation,
                    (value * value, 2 * total * value, total * total),
                    (-value / total,) * 2,
                    2 if value is zero else 0,
                )
            )
    return Path(tuple(legs), is_real=True)
