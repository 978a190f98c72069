"""Exponents n + a eps, and where the parameter integral is singular because of them.

Near an end of the integration, or near the double zero of Q at threshold, the integrand is
t^(c - 1 + b eps) times a function that is regular at t = 0.  Whether the integral has a pole in
eps there (c = 0, -1, -2, ... and b != 0), or is not regulated at all (b = 0), is decided here,
exactly.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import Enum
from fractions import Fraction
from typing import TypeAlias

from flint import fmpq

from loopint.core.epsilon_linear import EpsilonLinear
from loopint.core.errors import InputError
from loopint.core.numbers import exact_real

Rate: TypeAlias = int | fmpq | Fraction
Power: TypeAlias = int | tuple[int, Rate]


class Place(Enum):
    """Where on the integration range a leg is anchored."""

    START = "x = 0"
    END = "x = 1"
    INSIDE = "0 < x < 1"


def parse_power(power: object) -> EpsilonLinear:
    """Read an integer n, or a pair (n, a) meaning n + a eps with a rational a.

    Raises
    ------
    InputError
        For anything else.

    Examples
    --------
    >>> str(parse_power((1, Fraction(1, 2))))
    '1+1/2*eps'
    """
    n, rate = power if isinstance(power, tuple | list) and len(power) == 2 else (power, 0)
    if type(n) is not int or isinstance(rate, bool) or not isinstance(rate, int | fmpq | Fraction):
        raise InputError(
            f"power = {power!r}; accepted: an integer n, or a pair (n, a) of an integer and a "
            "rational, meaning n + a eps"
        )
    return EpsilonLinear(fmpq(n), exact_real(rate))


def is_natural(exponent: EpsilonLinear) -> bool:
    """Whether an exponent is 0, 1, 2, ... for every eps: a polynomial stays one."""
    return bool(exponent.rate == 0 and exponent.constant.q == 1 and exponent.constant >= 0)


def gamma_pole(argument: EpsilonLinear) -> int:
    """Return 1 if Gamma has a pole at eps = 0, else 0."""
    return 1 if argument.constant.q == 1 and argument.constant <= 0 else 0


@dataclass(frozen=True, slots=True)
class Integrand:
    """x^first (1-x)^second Q^quadratic, expanded to `terms` orders from eps^`lowest`.

    With Lambda = (rates of the exponents) . (log x, log(1-x), log Q) the coefficient of eps^k is
    the integrand at eps = 0 times Lambda^k / k!.  `lowest` is -1 if the integral has a pole, else
    0; the pole comes from an end or from the threshold, never from the expansion of the integrand.
    """

    first: EpsilonLinear
    second: EpsilonLinear
    quadratic: EpsilonLinear
    terms: int
    lowest: int = 0

    def near(self, place: Place, zero_order: int) -> EpsilonLinear:
        """Return the exponent of the distance t from a place where Q ~ t^zero_order."""
        own = {Place.START: self.first, Place.END: self.second}.get(place, EpsilonLinear.of(0, 0))
        q = self.quadratic
        return own + EpsilonLinear(q.constant * zero_order, q.rate * zero_order)


def is_divergent(exponent: EpsilonLinear, place: Place) -> bool:
    """Whether Int dt t^exponent (regular function) has a pole, or is infinite if the rate is zero.

    At an interior zero both sides count: odd powers of t cancel between them.
    """
    c = exponent.constant + 1
    if c.q != 1 or c > 0:
        return False
    return place is not Place.INSIDE or int(c.p) % 2 == 0
