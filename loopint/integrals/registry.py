"""From the name of a family to its evaluator: the one list of what can be computed."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, TypeAlias

from flint import arb, fmpq

from loopint.core.conventions import Conventions
from loopint.core.errors import InputError
from loopint.core.kinematics import OnePoint, TwoPoint
from loopint.core.laurent import BallSeries, check_orders
from loopint.integrals import bubble, tadpole
from loopint.integrals.proof import DEFAULT_MAX_PRECISION_BITS, Evaluation, check_digits, prove

if TYPE_CHECKING:
    from collections.abc import Callable

Point: TypeAlias = OnePoint | TwoPoint
Powers: TypeAlias = tuple[int, ...]


@dataclass(frozen=True, slots=True)
class Family:
    """A family of integrals.  Points are in units of mu^2, propagators have euclidean sign.

    Attributes
    ----------
    name
        What the user writes.
    default_powers
        Powers when none are given; its length is the number of propagators.
    check
        `check(powers, dimension)` raises `UnsupportedIntegralError` for what is not covered.
    region
        `region(point, powers, dimension)` names where the point lies.
    method
        `method(point, powers, dimension)` names how the value is computed.
    series
        `series(point, powers, dimension, highest, measure)` is the integral with its measure,
        known at least through order `highest`, at the working precision.
    """

    name: str
    default_powers: Powers
    check: Callable[[Powers, int], None]
    region: Callable[..., str]
    method: Callable[..., str]
    series: Callable[..., BallSeries]


FAMILIES: dict[str, Family] = {
    family.name: family
    for family in (
        Family("tadpole", (1,), tadpole.check, tadpole.region, tadpole.method, tadpole.series),
        Family("bubble", (1, 1), bubble.check, bubble.region, bubble.method, bubble.series),
    )
}


@dataclass(frozen=True, slots=True)
class Integral:
    """Which integral, in which dimension, to which orders; everything but the point.

    Build it with `Integral.parse`, which checks the arguments.
    """

    family: str
    powers: Powers
    dimension: int
    orders: tuple[int, int]

    @classmethod
    def parse(
        cls, family: str, powers: object, dimension: object, orders: tuple[int, int]
    ) -> Integral:
        """Check family, powers, dimension and orders.

        Raises
        ------
        InputError
            For an unknown family, malformed powers, a dimension that is not an integer from 1 to
            12, or an order range that is upside down.
        UnsupportedIntegralError
            For powers or a dimension that the family does not cover.
        """
        if family not in FAMILIES:
            raise InputError(f"family = {family!r} is unknown; accepted: {', '.join(FAMILIES)}")
        found = FAMILIES[family]
        if powers is None:
            powers = found.default_powers
        if isinstance(powers, int) and not isinstance(powers, bool):
            powers = (powers,)
        if (
            not isinstance(powers, tuple | list)
            or len(powers) != len(found.default_powers)
            or any(isinstance(n, bool) or not isinstance(n, int) for n in powers)
        ):
            raise InputError(
                f"powers = {powers!r}; accepted for a {family}: "
                f"{len(found.default_powers)} integer(s), such as {list(found.default_powers)}"
            )
        if isinstance(dimension, bool) or not isinstance(dimension, int):
            raise InputError(f"dimension = {dimension!r}; accepted: an integer from 1 to 12")
        if not 1 <= dimension <= 12:
            raise InputError(f"dimension = {dimension}; accepted: an integer from 1 to 12")
        found.check(tuple(powers), dimension)
        return cls(family, tuple(powers), dimension, check_orders(orders))

    @property
    def mass_dimension(self) -> fmpq:
        """The power of p^2 that the Laurent coefficients scale with: d0/2 - sum of powers."""
        return fmpq(self.dimension, 2) - sum(self.powers)


def evaluate(
    integral: Integral,
    point: Point,
    conventions: Conventions = Conventions(),  # noqa: B008 - immutable
    *,
    digits: int = 30,
    max_precision_bits: int = DEFAULT_MAX_PRECISION_BITS,
    accept: Callable[[BallSeries], bool] | None = None,
) -> Evaluation:
    """Evaluate one integral at one point with proven digits.

    Parameters
    ----------
    integral
        From `Integral.parse`.
    point
        `OnePoint` or `TwoPoint`, as the family needs, in the user's units.
    conventions
        Measure, propagator sign and mu^2 (same units).
    digits
        |error| <= 10^-digits |value| for each complex Laurent coefficient.
    max_precision_bits
        Cap on the working precision; when reached the result has `proven=False`.
    accept
        See `loopint.integrals.proof.prove`.
    """
    family = FAMILIES[integral.family]
    check_digits(digits)
    lowest, highest = integral.orders
    scale = conventions.mu_squared
    reduced = point if scale == 1 else point.scaled(1 / scale)
    sign = conventions.propagator_sign.sign(sum(integral.powers))
    measure = conventions.measure
    dimension = integral.mass_dimension

    def compute() -> BallSeries:
        series = family.series(reduced, integral.powers, integral.dimension, highest, measure)
        if sign < 0:
            series = -series
        if scale != 1 and dimension != 0:
            series = series.scaled(_rational_power(scale, dimension))
        return series

    series, bits, proven = prove(compute, (lowest, highest), digits, max_precision_bits, accept)
    region = family.region(point, integral.powers, integral.dimension)
    region += "_snapped" if point.snapped else ""
    method = family.method(reduced, integral.powers, integral.dimension)
    return Evaluation(series, integral.orders, digits, region, method, bits, proven)


def _rational_power(base: fmpq, exponent: fmpq) -> arb:
    """Return base^exponent for base > 0 and an integer or half-integer exponent."""
    if exponent.q == 1:
        return arb(base ** int(exponent.p))
    return arb(base).sqrt() ** int(exponent.p)
