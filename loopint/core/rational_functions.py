"""Quotients of multivariate polynomials with integer coefficients, always in lowest terms."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from flint import Ordering, fmpz_mpoly, fmpz_mpoly_ctx

if TYPE_CHECKING:
    from collections.abc import Sequence


@dataclass(frozen=True, slots=True)
class RationalFunction:
    """A quotient of two polynomials, in lowest terms.

    The leading coefficient of the denominator is positive, so that equal functions are equal
    objects.  Build variables with `variables`, and everything else by arithmetic.

    Examples
    --------
    >>> x, y = variables(("x", "y"))
    >>> (x * x - y * y) / (2 * x + 2 * y)
    RationalFunction(x - y, 2)
    """

    numerator: fmpz_mpoly
    denominator: fmpz_mpoly

    @property
    def is_zero(self) -> bool:
        """Whether the function vanishes identically."""
        return self.numerator.is_zero()

    def __add__(self, other: RationalFunction | int) -> RationalFunction:
        if isinstance(other, int):
            return RationalFunction(
                self.numerator + other * self.denominator, self.denominator
            )  # still in lowest terms
        if self.denominator == other.denominator:
            return _reduced(self.numerator + other.numerator, self.denominator)
        common = self.denominator.gcd(other.denominator)
        mine, theirs = self.denominator / common, other.denominator / common
        # Only factors of `common` can cancel (Knuth, The Art of Computer Programming 2, 4.5.1).
        top = self.numerator * theirs + other.numerator * mine
        cancelled = top.gcd(common)
        return RationalFunction(top / cancelled, mine * (other.denominator / cancelled))

    __radd__ = __add__

    def __neg__(self) -> RationalFunction:
        return RationalFunction(-self.numerator, self.denominator)

    def __sub__(self, other: RationalFunction | int) -> RationalFunction:
        return self + (-other)

    def __rsub__(self, other: int) -> RationalFunction:
        return -self + other

    def __mul__(self, other: RationalFunction | int) -> RationalFunction:
        if isinstance(other, int):
            return _reduced(self.numerator * other, self.denominator)
        a = self.numerator.gcd(other.denominator)
        b = other.numerator.gcd(self.denominator)
        return RationalFunction(
            (self.numerator / a) * (other.numerator / b),
            (self.denominator / b) * (other.denominator / a),
        )

    __rmul__ = __mul__

    def __truediv__(self, other: RationalFunction | int) -> RationalFunction:
        if isinstance(other, int):
            return _reduced(self.numerator, self.denominator * other)
        return self * other.inverse()

    def __rtruediv__(self, other: int) -> RationalFunction:
        return self.inverse() * other

    def inverse(self) -> RationalFunction:
        """Return one over the function."""
        if self.is_zero:
            raise ZeroDivisionError("one over a rational function that is zero")
        sign = 1 if self.numerator.leading_coefficient() > 0 else -1
        return RationalFunction(sign * self.denominator, sign * self.numerator)

    def __repr__(self) -> str:
        return f"RationalFunction({self.numerator}, {self.denominator})"


def variables(names: Sequence[str]) -> tuple[RationalFunction, ...]:
    """Return the variables of these names as functions of one another.

    Functions of different sets of names do not combine.
    """
    context = fmpz_mpoly_ctx.get(tuple(names), Ordering.lex)
    one = context.constant(1)
    return tuple(RationalFunction(generator, one) for generator in context.gens())


def _reduced(top: fmpz_mpoly, bottom: fmpz_mpoly) -> RationalFunction:
    common = top.gcd(bottom)
    if bottom.leading_coefficient() < 0:
        common = -common
    return RationalFunction(top / common, bottom / common)
