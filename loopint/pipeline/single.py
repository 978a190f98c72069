"""One integral at one point, given as text: what `loopint point` evaluates."""

from __future__ import annotations

from dataclasses import dataclass
from decimal import ROUND_CEILING, Decimal, localcontext
from typing import TYPE_CHECKING, Any

from loopint.core.conventions import Conventions
from loopint.core.errors import InputError, MorePrecisionNeeded
from loopint.core.kinematics import (
    OnePoint,
    TwoPoint,
    check_mass_squared,
    snap_to_threshold,
    squared_mass,
)
from loopint.core.laurent import complex_ball
from loopint.core.numbers import (
    ZERO,
    ExactComplex,
    decimal_string,
    exact_complex,
    exact_real,
    imaginary_part,
    real_part,
)
from loopint.core.precision import working_precision
from loopint.integrals.registry import FAMILIES, Integral, evaluate
from loopint.pipeline.cross_check import Check, cross_check
from loopint.pipeline.errors import unknown_name
from loopint.pipeline.evaluate import Computed
from loopint.pipeline.plan import RowRequest
from loopint.pipeline.tables import DECIMAL_GUARD, proven_digits, write_integral

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from flint import fmpq

    from loopint.core.laurent import LaurentSeries
    from loopint.core.numbers import Ball
    from loopint.formulas.formula import Formula

CHECK_DIGITS = 12  # what the quadrature is asked for, if the point itself asks for more
BOUND_DIGITS = 3


@dataclass(frozen=True)
class Coefficient:
    """A Laurent coefficient as text.

    `re` and `im` are rounded to two digits more than were asked for; `bound` is an upper bound on
    the distance of re + i im from the true value, rounding included; `digits` are the proven
    digits, None if the coefficient is exact.
    """

    order: int
    re: str
    im: str
    bound: str
    digits: int | None


@dataclass(frozen=True)
class PointResult:
    """One integral at one point."""

    integral: Integral
    conventions: Conventions
    kinematics: dict[str, str]
    series: LaurentSeries
    coefficients: list[Coefficient]
    checks: list[Check] | None

    @property
    def exit_code(self) -> int:
        """3 if the digits were not reached or the cross-check disagrees, else 0."""
        disagrees = any(check.agrees is False for check in self.checks or ())
        return 3 if self.series.status != "ok" or disagrees else 0

    def as_dict(self) -> dict[str, Any]:
        """Return the result as JSON-able data; numbers are decimal strings."""
        found: dict[str, Any] = {
            "family": self.integral.family,
            "powers": list(self.integral.plain_powers),
            "dimension": self.integral.dimension,
            "orders": list(self.integral.orders),
            "derivatives": list(self.integral.derivatives),
            "kinematics": self.kinematics,
            "conventions": self.conventions.described,
            "digits": self.series.digits,
            "region": self.series.region,
            "method": self.series.method,
            "status": self.series.status,
            "precision_bits": self.series.precision_bits,
            "coefficients": [
                {"order": c.order, "re": c.re, "im": c.im, "bound": c.bound, "digits": c.digits}
                for c in self.coefficients
            ],
        }
        if self.checks is not None:
            found["cross_check"] = [
                {
                    "order": check.order,
                    "quadrature_re": check.quadrature_re,
                    "quadrature_im": check.quadrature_im,
                    "quadrature_bound": check.quadrature_bound,
                    "agreed_digits": check.agreed_digits,
                    "status": check.status,
                    "note": check.note,
                }
                for check in self.checks
            ]
        return found


def evaluate_point(
    family: str,
    kinematics: Mapping[str, str | None],
    *,
    powers: str | None = None,
    dimension: int = 4,
    orders: str = "-1,0",
    derivatives: Sequence[str] = (),
    digits: int = 30,
    mu_squared: str = "1",
    propagator_sign: str = "minkowski",
    measure: str = "msbar",
    max_precision_bits: int,
    snap_tolerance: str = "0",
    check: bool = False,
) -> PointResult:
    """Evaluate one integral at one point.

    Parameters
    ----------
    family
        "tadpole" or "bubble".
    kinematics
        By option name (`p_squared`, `m1_squared`, `m1`, `width1`, ...); values are decimals or
        rationals, a complex squared mass is "re,im"; None for what was not given.
    powers, orders
        Integers separated by commas.
    derivatives
        The variables to differentiate by, once for each time.
    check
        Also integrate the Feynman representation.

    Raises
    ------
    InputError
        For anything that cannot be used; the message names the option.
    UnsupportedIntegralError, UnregulatedError
        See `loopint.integrals.registry`.
    """
    if family not in FAMILIES:
        raise InputError(f"family {family!r} {unknown_name(family, FAMILIES)}")
    integral = Integral.parse(
        family,
        None if powers is None else _powers(powers),
        dimension,
        _pair(orders),
        tuple(derivatives),
    )
    given = {name: value for name, value in kinematics.items() if value is not None}
    point = _point(family, given)
    if isinstance(point, TwoPoint):
        tolerance = _number("snap_tolerance", snap_tolerance)
        if not 0 <= tolerance < 1:
            raise InputError(f"--snap-tolerance {snap_tolerance}; accepted: 0 to below 1")
        point = snap_to_threshold(point, tolerance)
    conventions = Conventions.parse(measure, propagator_sign, _number("mu_squared", mu_squared))
    if not 64 <= max_precision_bits <= 1_000_000:
        raise InputError(
            f"--max-precision-bits {max_precision_bits}; accepted: an integer from 64 to 1000000"
        )
    try:
        evaluation = evaluate(
            integral, point, conventions, digits=digits, max_precision_bits=max_precision_bits
        )
    except MorePrecisionNeeded:
        raise InputError(
            f"--max-precision-bits {max_precision_bits} leaves the value undecided; accepted: more"
        ) from None
    series = evaluation.rounded()
    checks = None
    if check:
        request = RowRequest(0, family, integral, point, conventions)
        computed = Computed(request, evaluation)
        checks = cross_check(
            computed,
            write_integral(computed, digits),
            digits=min(digits, CHECK_DIGITS),
            arithmetic="balls",
        )
    coefficients = [_coefficient(series, order) for order in series]
    return PointResult(integral, conventions, given, series, coefficients, checks)


def requested_formula(
    family: str,
    *,
    powers: str | None = None,
    kinematics: str = "general",
    dimension: int = 4,
    orders: str = "-1,2",
    propagator_sign: str = "minkowski",
    measure: str = "msbar",
) -> Formula:
    """Return the closed form of an integral whose powers and orders are given as text.

    Raises
    ------
    InputError, UnsupportedIntegralError
        See `loopint.formula`.
    """
    from loopint.formulas.build import build_formula  # noqa: PLC0415 - sympy is slow to import

    return build_formula(
        family,
        None if powers is None else _powers(powers),
        kinematics=kinematics,
        dimension=dimension,
        orders=_pair(orders),
        propagator_sign=propagator_sign,
        measure=measure,
    )


def _coefficient(series: LaurentSeries, order: int) -> Coefficient:
    ball = series.balls[order]
    proven = proven_digits(ball)
    shown = max(1, series.digits if proven is None else min(series.digits, proven)) + DECIMAL_GUARD
    re, im = decimal_string(real_part(ball), shown), decimal_string(imaginary_part(ball), shown)
    return Coefficient(order, re, im, _bound(ball, re, im), proven)


def _bound(ball: Ball, re: str, im: str) -> str:
    """Bound the distance of two decimal strings from every number in the ball."""
    if not ball.is_finite():
        return "inf"
    with working_precision(64 + int(ball.bits()) + 4 * max(len(re), len(im))):
        gap = complex_ball(ball) - complex_ball(exact_complex((re, im)).ball())
    with working_precision(64):
        upper = gap.abs_upper()
    if upper == 0:
        return "0"
    mantissa, exponent = (int(part) for part in upper.man_exp())
    with localcontext(prec=40) as context:
        bound = Decimal(mantissa) * Decimal(2) ** exponent * (1 + Decimal(10) ** -30)
        context.prec, context.rounding = BOUND_DIGITS, ROUND_CEILING
        return f"{+bound:e}"


def _point(family: str, given: Mapping[str, str]) -> OnePoint | TwoPoint:
    if len(FAMILIES[family].default_powers) == 1:
        lines = [("m_squared", "m", "width")]
        accepted = list(lines[0])
    else:
        lines = [("m1_squared", "m1", "width1"), ("m2_squared", "m2", "width2")]
        accepted = ["p_squared", *lines[0], *lines[1]]
    for name in given:
        if name not in accepted:
            options = ", ".join(_option(name) for name in accepted)
            raise InputError(f"{_option(name)} does not belong to a {family}; accepted: {options}")
    masses = [_mass(given, *line) for line in lines]
    if len(masses) == 1:
        return OnePoint(masses[0])
    if "p_squared" not in given:
        raise InputError("--p-squared is missing; accepted: a real number, such as -1.5 or 1/3")
    return TwoPoint(_number("p_squared", given["p_squared"]), masses[0], masses[1])


def _mass(given: Mapping[str, str], squared: str, mass: str, width: str) -> ExactComplex:
    accepted = f"accepted: {_option(squared)}, or {_option(mass)} with or without {_option(width)}"
    if squared in given:
        for other in (mass, width):
            if other in given:
                raise InputError(
                    f"{_option(squared)} and {_option(other)} are both given; {accepted}"
                )
        text = given[squared]
        parts = text.split(",")
        if len(parts) > 2:
            raise InputError(f"{_option(squared)} {text!r} has {len(parts)} parts; accepted: re,im")
        re = _number(squared, parts[0])
        im = _number(squared, parts[1]) if len(parts) == 2 else ZERO
        return check_mass_squared(ExactComplex(re, im), _option(squared))
    if mass not in given:
        raise InputError(f"a mass is missing; {accepted}")
    gamma = _number(width, given[width]) if width in given else ZERO
    return squared_mass(_number(mass, given[mass]), gamma)


def _option(name: str) -> str:
    return "--" + name.replace("_", "-")


def _number(name: str, text: str) -> fmpq:
    try:
        return exact_real(text)
    except InputError:
        shown = text if len(text) <= 60 else text[:57] + "..."
        raise InputError(
            f"{_option(name)} {shown!r} is not a number; accepted: a decimal or a rational, such "
            "as 0.25, 1e-3 or 1/4"
        ) from None


def _integers(name: str, text: str, example: str) -> tuple[int, ...]:
    try:
        return tuple(int(part) for part in text.split(","))
    except ValueError:
        raise InputError(
            f"{_option(name)} {text!r}; accepted: integers separated by commas, {example}"
        ) from None


def _powers(text: str) -> list[int | tuple[int, str]]:
    """Read powers separated by commas; n:a stands for n + a eps."""
    result: list[int | tuple[int, str]] = []
    for part in text.split(","):
        n, colon, rate = part.partition(":")
        try:
            result.append((int(n), rate) if colon else int(n))
        except ValueError:
            raise InputError(
                f"--powers {text!r}; accepted: integers separated by commas, such as 1,1; for a "
                "propagator also n:a for n + a eps, such as 1:1/2,1"
            ) from None
    return result


def _pair(text: str) -> tuple[int, int]:
    found = _integers("orders", text, "such as -1,2")
    if len(found) != 2:
        raise InputError(f"--orders {text!r}; accepted: lowest,highest, such as -1,2")
    return found[0], found[1]
