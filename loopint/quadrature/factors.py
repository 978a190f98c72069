"""The integrand on one leg as a product of powers of polynomials with known zeros.

    x^(n1-1+a1 eps) (1-x)^(n2-1+a2 eps) Q^(s0+s1 eps)

Both arithmetics work with these factors.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from loopint.core.epsilon_linear import EpsilonLinear
    from loopint.quadrature.exponents import Integrand
    from loopint.quadrature.paths import Leg, Number

from loopint.quadrature.exponents import Place, is_natural


@dataclass(frozen=True, slots=True)
class Factor:
    """A polynomial, from the constant coefficient upwards, its zeros, and its exponent."""

    coefficients: tuple[Number, ...]
    zeros: tuple[Number, ...]
    exponent: EpsilonLinear

    @property
    def is_trivial(self) -> bool:
        """Whether the exponent is zero for every eps."""
        return bool(self.exponent.constant == 0 and self.exponent.rate == 0)

    @property
    def is_polynomial(self) -> bool:
        """Whether the factor with its exponent is regular everywhere, for every eps."""
        return is_natural(self.exponent)

    @property
    def needs_logarithm(self) -> bool:
        """Whether an integer power does not give the factor."""
        return bool(self.exponent.rate != 0 or self.exponent.constant.q != 1)


def leg_factors(leg: Leg, integrand: Integrand) -> tuple[Factor, ...]:
    """Return the factors in u, x = anchor + u."""
    factors = (
        Factor((leg.anchor, 1), (-leg.anchor,), integrand.first),
        Factor((leg.co_anchor, -1), (leg.co_anchor,), integrand.second),
        Factor(leg.quadratic, leg.zeros, integrand.quadratic),
    )
    return tuple(factor for factor in factors if not factor.is_trivial)


def regular_factors(leg: Leg, integrand: Integrand) -> tuple[Factor, ...]:
    """Return the factors in t = orientation * u without what vanishes at the anchor.

    The exponent of t is `integrand.near(leg.place, leg.zero_order)`.
    """
    side = leg.orientation
    c0, c1, c2 = leg.quadratic
    quadratic = (c0, side * c1, c2)[leg.zero_order :]
    zeros = tuple(side * zero for zero in leg.zeros if not bool(zero == 0))
    factors = [Factor(quadratic, zeros, integrand.quadratic)]
    if leg.place is not Place.START:
        factors.append(Factor((leg.anchor, side), (-side * leg.anchor,), integrand.first))
    if leg.place is not Place.END:
        factors.append(Factor((leg.co_anchor, -side), (side * leg.co_anchor,), integrand.second))
    return tuple(factor for factor in factors if not factor.is_trivial)


def has_singular_anchor(leg: Leg, integrand: Integrand) -> bool:
    """Whether a factor is singular where the leg starts, even if another one cancels it."""
    return leg.zero_order > 0 or not is_natural(integrand.near(leg.place, 0))
