"""What is to be computed: one integral at one point, and where its parameter integral diverges."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from flint import fmpq

from loopint.core.conventions import PropagatorSign
from loopint.core.epsilon_linear import EpsilonLinear
from loopint.core.errors import UnregulatedError, UnsupportedIntegralError
from loopint.core.kinematics import OnePoint, Region, TwoPoint
from loopint.quadrature.exponents import Integrand, Place, gamma_pole, is_divergent
from loopint.quadrature.paths import resolve_on_shell, zero_orders
from loopint.quadrature.prefactor import lowest_order

if TYPE_CHECKING:
    from loopint.core.conventions import Conventions


@dataclass(frozen=True, slots=True)
class Representation:
    """One integral at one point, in the form scale^exponent * prefactor * moments."""

    point: OnePoint | TwoPoint
    powers: tuple[EpsilonLinear, ...]
    dimension: int
    orders: tuple[int, int]
    conventions: Conventions

    @property
    def is_zero(self) -> bool:
        """Whether the integral vanishes identically."""
        if isinstance(self.point, OnePoint):
            (power,) = self.powers
            return self.point.m_squared.is_zero or (power.rate == 0 and power.constant <= 0)
        return self.point.region is Region.SCALELESS

    @property
    def total(self) -> EpsilonLinear:
        """nu, the sum of the powers."""
        return sum(self.powers, EpsilonLinear.of(0, 0))

    @property
    def exponent(self) -> EpsilonLinear:
        """d/2 - nu, the power of Q."""
        return EpsilonLinear(fmpq(self.dimension, 2), fmpq(-1)) - self.total

    @property
    def gamma(self) -> EpsilonLinear:
        """Return nu - d/2, the argument of the Gamma function in the numerator."""
        return -self.exponent

    @property
    def lowest(self) -> int:
        """The lowest order that can be different from zero."""
        return lowest_order(self.gamma, self.powers) + self.integrand_lowest

    @property
    def integrand_lowest(self) -> int:
        """-1 if the parameter integral has a pole, else 0."""
        return -1 if any(is_divergent(*end) for end in self.ends()) else 0

    @property
    def terms(self) -> int:
        """How many coefficients of each factor are needed."""
        return max(self.orders[1] - self.lowest + 1, 0)

    @property
    def integrand(self) -> Integrand:
        """What is integrated over x."""
        first, second = (power - 1 for power in self.powers)
        return Integrand(first, second, self.exponent, self.terms, self.integrand_lowest)

    def ends(self) -> list[tuple[EpsilonLinear, Place]]:
        """Return the places where the integrand may be singular, with the exponent there."""
        if isinstance(self.point, OnePoint):
            return []
        first, second = (power - 1 for power in self.powers)
        plain = Integrand(first, second, self.exponent, 0)
        orders = zero_orders(resolve_on_shell(self.point))
        return [
            (plain.near(place, order), place)
            for place, order in zip((Place.START, Place.END, Place.INSIDE), orders, strict=True)
        ]

    def check_existence(self) -> None:
        """Refuse integer powers <= 0 of a two-point integral, and divergences at every eps.

        Raises
        ------
        UnsupportedIntegralError
            For a power that is an integer below 1 at every eps: 1/Gamma vanishes, the integral
            diverges.
        UnregulatedError
            For a divergence that does not depend on eps.
        """
        for power in self.powers:
            if isinstance(self.point, TwoPoint) and power.is_pole_of_gamma:
                raise UnsupportedIntegralError(
                    f"power {power} has no Feynman-parameter integral; accepted: integer powers of "
                    "at least 1, or powers that depend on eps"
                )
        causes = {
            Place.START: "the infrared end x = 0",
            Place.END: "the infrared end x = 1",
            Place.INSIDE: "the threshold",
        }
        found = [
            causes[place]
            for exponent, place in self.ends()
            if exponent.rate == 0 and is_divergent(exponent, place)
        ]
        if self.gamma.rate == 0 and gamma_pole(self.gamma):
            found.append(f"Gamma({self.gamma})")
        if found:
            raise UnregulatedError(
                f"powers {', '.join(map(str, self.powers))} in dimension {self.dimension}: the "
                f"divergence of {found[0]} is there for every eps; accepted: powers that "
                "dimensional regularisation makes finite"
            )

    @property
    def sign(self) -> int:
        """The sign at eps = 0."""
        return self.conventions.propagator_sign.sign(int(self.total.constant.p))

    @property
    def phase_rate(self) -> fmpq:
        """Return r in the phase exp(-i pi r eps) of (-1)^nu; zero for euclidean propagators."""
        is_minkowski = self.conventions.propagator_sign is PropagatorSign.MINKOWSKI
        return self.total.rate if is_minkowski else fmpq(0)
