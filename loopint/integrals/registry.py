"""From the name of a family to its evaluator: the one list of what can be computed."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, TypeAlias

from flint import acb, arb, fmpq

from loopint.core.conventions import Conventions, PropagatorSign
from loopint.core.epsilon_linear import EpsilonLinear
from loopint.core.errors import InputError
from loopint.core.kinematics import OnePoint, TwoPoint
from loopint.core.laurent import BallSeries, check_orders
from loopint.core.lazy import lazy
from loopint.core.numbers import Ball, exact_real
from loopint.core.precision import bits_for_digits
from loopint.integrals import bubble, propagator, tadpole
from loopint.integrals.derivatives import (
    ONE_POINT_VARIABLES,
    TWO_POINT_VARIABLES,
    DerivativeTerm,
    check_derivatives,
    derivative_term,
)
from loopint.integrals.powers import times_exponential, times_linear
from loopint.integrals.proof import DEFAULT_MAX_PRECISION_BITS, Evaluation, check_digits, prove

if TYPE_CHECKING:
    from collections.abc import Callable

Point: TypeAlias = OnePoint | TwoPoint
Powers: TypeAlias = tuple[Any, ...]  # integers, or EpsilonLinear where powers may hold epsilon


@dataclass(frozen=True, slots=True)
class Family:
    """A family of integrals.  Points are in units of mu^2, propagators have euclidean sign.

    Attributes
    ----------
    name
        What the user writes.
    default_powers
        Powers when none are given; its length is the number of propagators.
    variables
        What an integral can be differentiated by.
    check
        `check(powers, dimension)` raises `UnsupportedIntegralError` for what is not covered.
    region
        `region(point, powers, dimension)` names where the point lies.
    method
        `method(point, powers, dimension)` names how the value is computed.
    series
        `series(point, powers, dimension, highest, measure)` is the integral with its measure,
        known at least through order `highest`, at the working precision.
    epsilon_powers
        Whether powers may depend on epsilon; the functions then get `EpsilonLinear` numbers.
    """

    name: str
    default_powers: Powers
    variables: tuple[str, ...]
    check: Callable[[Powers, int], None]
    region: Callable[..., str]
    method: Callable[..., str]
    series: Callable[..., BallSeries]
    epsilon_powers: bool = False


FAMILIES: dict[str, Family] = {
    family.name: family
    for family in (
        Family(
            "tadpole",
            (1,),
            ONE_POINT_VARIABLES,
            tadpole.check,
            tadpole.region,
            tadpole.method,
            tadpole.series,
        ),
        Family(
            "bubble",
            (1, 1),
            TWO_POINT_VARIABLES,
            bubble.check,
            bubble.region,
            bubble.method,
            bubble.series,
        ),
        Family(
            "propagator",
            (1, 1),
            TWO_POINT_VARIABLES,
            propagator.check,
            propagator.region,
            propagator.method,
            propagator.series,
            epsilon_powers=True,
        ),
    )
}


@dataclass(frozen=True)
class Integral:
    """Which integral, in which dimension, to which orders; everything but the point.

    `derivatives` names the variables that it is differentiated by, once for each time.  Build it
    with `Integral.parse`, which checks the arguments.
    """

    family: str
    powers: Powers
    dimension: int
    orders: tuple[int, int]
    derivatives: tuple[str, ...] = ()

    @classmethod
    def parse(
        cls,
        family: str,
        powers: object,
        dimension: object,
        orders: tuple[int, int],
        derivatives: object = (),
    ) -> Integral:
        """Check family, powers, dimension, orders and derivatives.

        Raises
        ------
        InputError
            For an unknown family, malformed powers, a dimension that is not an integer from 1 to
            12, an order range that is upside down, or an unknown variable of a derivative.
        UnsupportedIntegralError
            For powers or a dimension that the family does not cover.
        """
        if family not in FAMILIES:
            raise InputError(f"family = {family!r} is unknown; accepted: {', '.join(FAMILIES)}")
        found = FAMILIES[family]
        if powers is None:
            powers = found.default_powers
        parsed = _parse_powers(found, powers)
        if isinstance(dimension, bool) or not isinstance(dimension, int):
            raise InputError(f"dimension = {dimension!r}; accepted: an integer from 1 to 12")
        if not 1 <= dimension <= 12:
            raise InputError(f"dimension = {dimension}; accepted: an integer from 1 to 12")
        found.check(parsed, dimension)
        variables = check_derivatives(derivatives, found.variables)
        return cls(family, parsed, dimension, check_orders(orders), variables)

    @lazy
    def term(self) -> DerivativeTerm:
        """What is evaluated: the integral itself, or the one its derivative is a multiple of."""
        return derivative_term(self.powers, self.dimension, self.derivatives)

    @lazy
    def mass_dimension(self) -> fmpq:
        """The power of p^2 that the Laurent coefficients scale with.

        It is d0/2 - sum of powers - number of derivatives.
        """
        total = sum((_at_zero(n).constant for n in self.powers), start=fmpq(0))
        return fmpq(self.dimension, 2) - total - len(self.derivatives)

    @property
    def plain_powers(self) -> tuple[int | tuple[int, str], ...]:
        """The powers as integers, or as (n, "a") for n + a eps; `parse` takes them back."""
        return tuple(
            n
            if isinstance(n, int)
            else int(n.constant.p)
            if n.rate == 0
            else (int(n.constant.p), str(n.rate))
            for n in self.powers
        )

    @property
    def epsilon_power_free(self) -> bool:
        """Whether no power depends on epsilon."""
        return all(_at_zero(n).rate == 0 for n in self.powers)

    @lazy
    def epsilon_power(self) -> fmpq:
        """The coefficient of eps in the sum of the powers."""
        return sum((_at_zero(n).rate for n in self.powers), start=fmpq(0))


class Evaluator:
    """An integral in given conventions, prepared for many points.

    Parameters
    ----------
    integral
        From `Integral.parse`.
    conventions
        Measure, propagator sign and mu^2 (in the units of the points).
    digits
        |error| <= 10^-digits |value| for each complex Laurent coefficient.
    max_precision_bits
        Cap on the working precision; when reached the result has `proven=False`.

    Raises
    ------
    InputError
        For digits outside their range.
    """

    def __init__(
        self,
        integral: Integral,
        conventions: Conventions = Conventions(),  # noqa: B008 - immutable
        *,
        digits: int = 30,
        max_precision_bits: int = DEFAULT_MAX_PRECISION_BITS,
    ) -> None:
        self.integral = integral
        self.conventions = conventions
        self.digits = check_digits(digits)
        self.max_precision_bits = max_precision_bits
        self.family = FAMILIES[integral.family]
        self.term = term = integral.term
        self._unit_scale = conventions.mu_squared == 1
        self._inverse_scale = 1 / conventions.mu_squared
        total = sum(int(_at_zero(n).constant.p) for n in term.powers)
        self._sign = conventions.propagator_sign.sign(total)

    def __call__(
        self, point: Point, accept: Callable[[BallSeries], bool] | None = None
    ) -> Evaluation:
        """Evaluate at a point in the user's units; for `accept` see `prove`."""
        integral = self.integral
        reduced = point if self._unit_scale else point.scaled(self._inverse_scale)
        series, bits, proven = prove(
            lambda: self._series(reduced),
            integral.orders,
            self.digits,
            self.max_precision_bits,
            accept,
            lambda: self._hopeless_bits(reduced),
        )
        region, method = _region_and_method(self.family, integral, point)
        return Evaluation(series, integral.orders, self.digits, region, method, bits, proven)

    def out_of_time(self, point: Point) -> Evaluation:
        """Return an evaluation that was given up, with NaN in every order."""
        lowest, highest = self.integral.orders
        series = BallSeries(lowest, [arb("nan")] * (highest - lowest + 1))
        region, method = _region_and_method(self.family, self.integral, point)
        return Evaluation(
            series, self.integral.orders, self.digits, region, method, 0, False, timed_out=True
        )

    def _hopeless_bits(self, point: Point) -> int:
        """Return a precision at which a coefficient made of such numbers is zero if it looks so.

        Cancellations are as deep as the numbers are long, times the degree of the expressions: for
        p^2 = 10^-300 and m^2 = 10^300 thousands of bits, for p^2 = 2 and m^2 = 1 a few.
        """
        term = self.term
        degree = term.dimension + 2 * sum(abs(int(_at_zero(n).constant.p)) for n in term.powers)
        length = sum(int(x.p).bit_length() + int(x.q).bit_length() for x in _numbers(point))
        return 512 + 4 * bits_for_digits(self.digits) + 2 * degree * length

    def _series(self, point: Point) -> BallSeries:
        """Expand at the working precision; the point is in units of mu^2."""
        integral, term, conventions = self.integral, self.term, self.conventions
        highest = integral.orders[1]
        if term.coefficient == 0:
            return BallSeries.zero(highest)
        series = self.family.series(
            point, term.powers, term.dimension, highest, conventions.measure
        )
        for linear in term.linear_factors:
            series = times_linear(series, linear.constant, linear.rate)
        factor = self._sign * term.factor(conventions)
        if factor != 1:
            series = series.scaled(factor)
        if not self._unit_scale and integral.mass_dimension != 0:
            series = series.scaled(_rational_power(conventions.mu_squared, integral.mass_dimension))
        if integral.epsilon_power != 0:
            series = _times_epsilon_phase(series, integral.epsilon_power, conventions)
        return series


def evaluate(
    integral: Integral,
    point: Point,
    conventions: Conventions = Conventions(),  # noqa: B008 - immutable
    *,
    digits: int = 30,
    max_precision_bits: int = DEFAULT_MAX_PRECISION_BITS,
    accept: Callable[[BallSeries], bool] | None = None,
) -> Evaluation:
    """Evaluate one integral at one point with proven digits; see `Evaluator`."""
    evaluator = Evaluator(
        integral, conventions, digits=digits, max_precision_bits=max_precision_bits
    )
    return evaluator(point, accept)


def _region_and_method(family: Family, integral: Integral, point: Point) -> tuple[str, str]:
    term = integral.term
    if term.coefficient == 0:
        region, method = family.region(point, integral.powers, integral.dimension), "exact"
    else:
        region = family.region(point, term.powers, term.dimension)
        method = family.method(point, term.powers, term.dimension)
        if term.has_no_limit(point) and not region.endswith(bubble.ISOLATED):
            region += bubble.ISOLATED
    return region + ("_snapped" if point.snapped else ""), method


def _numbers(point: Point) -> list[fmpq]:
    if isinstance(point, OnePoint):
        return [point.m_squared.re, point.m_squared.im]
    masses = (point.m1_squared, point.m2_squared)
    return [point.p_squared, *(m.re for m in masses), *(m.im for m in masses)]


def _at_zero(power: int | EpsilonLinear) -> EpsilonLinear:
    return power if isinstance(power, EpsilonLinear) else EpsilonLinear.of(power, 0)


def _times_epsilon_phase(series: BallSeries, rate: fmpq, conventions: Conventions) -> BallSeries:
    """Multiply by what the part `rate` * eps of the powers adds to sign and scale.

    (-1)^(rate eps) = exp(-i pi rate eps) for minkowski propagators, and (mu^2)^(-rate eps), since
    mu^2 enters the definition only as (mu^2)^eps.
    """
    logarithm: Ball = arb(conventions.mu_squared).log()
    if conventions.propagator_sign is PropagatorSign.MINKOWSKI:
        logarithm = acb(logarithm, arb.pi())
    return times_exponential(series, -rate * logarithm)


def _shown(value: object) -> str:
    """Write a value as in a config, with decimals as they were typed."""
    if isinstance(value, list | tuple):
        return f"[{', '.join(map(_shown, value))}]"
    return repr(value) if isinstance(value, str) else str(value)


def _parse_powers(family: Family, powers: object) -> Powers:
    """Return one power for each propagator.

    Raises
    ------
    InputError
        If the number of powers or a power is wrong.
    """
    count = len(family.default_powers)
    kind = "n or [n, a] for n + a eps" if family.epsilon_powers else "integer(s)"
    wrong = InputError(
        f"powers = {_shown(powers)}; accepted for a {family.name}: {count} {kind}, "
        f"such as {list(family.default_powers)}"
    )
    if powers is None:
        powers = family.default_powers
    if isinstance(powers, int) and not isinstance(powers, bool):
        powers = (powers,)
    if not isinstance(powers, tuple | list) or len(powers) != count:
        raise wrong
    result: list[int | EpsilonLinear] = []
    for power in powers:
        rate: object = 0
        entry = power
        if family.epsilon_powers and isinstance(power, EpsilonLinear):
            result.append(power)
            continue
        if family.epsilon_powers and isinstance(power, tuple | list) and len(power) == 2:
            entry, rate = power
        if isinstance(entry, bool) or not isinstance(entry, int):
            raise wrong
        if not family.epsilon_powers:
            result.append(entry)
            continue
        try:
            result.append(EpsilonLinear.of(entry, exact_real(rate)))
        except InputError:
            raise wrong from None
    return tuple(result)


def _rational_power(base: fmpq, exponent: fmpq) -> arb:
    """Return base^exponent for base > 0 and an integer or half-integer exponent."""
    if exponent.q == 1:
        return arb(base ** int(exponent.p))
    return arb(base).sqrt() ** int(exponent.p)
