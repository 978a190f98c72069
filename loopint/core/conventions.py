"""What multiplies the bare integral: measure, propagator sign, renormalisation scale."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

from flint import fmpq

from loopint.core.errors import InputError
from loopint.core.gamma_factors import EpsilonFactor
from loopint.core.numbers import exact_real


class Measure(StrEnum):
    """The factor N(eps) in front of Int d^dq/(i pi^(d/2)).

    ========  =================================================================
    msbar     exp(gamma_E eps)
    plain     1
    gamma     1/Gamma(1+eps)
    r_gamma   Gamma(1-2 eps) / (Gamma(1+eps) Gamma(1-eps)^2)
    two_pi    Int d^dq/(i (2 pi)^d) instead, that is (4 pi)^(-d/2)
    ========  =================================================================
    """

    MSBAR = "msbar"
    PLAIN = "plain"
    GAMMA = "gamma"
    R_GAMMA = "r_gamma"
    TWO_PI = "two_pi"

    def factor(self, dimension: int) -> EpsilonFactor:
        """Return the factor in d = dimension - 2 eps, exactly."""
        gamma = EpsilonFactor.gamma
        match self:
            case Measure.MSBAR:
                return EpsilonFactor(euler=fmpq(1))
            case Measure.PLAIN:
                return EpsilonFactor()
            case Measure.GAMMA:
                return gamma(1, 1).inverse()
            case Measure.R_GAMMA:
                return gamma(1, -2) / (gamma(1, 1) * gamma(1, -1) * gamma(1, -1))
            case Measure.TWO_PI:
                return EpsilonFactor(
                    rational=fmpq(1, 2**dimension),
                    sqrt_pi=-dimension,
                    log_two=fmpq(2),
                    log_pi=fmpq(1),
                )


class PropagatorSign(StrEnum):
    """minkowski: 1/(q^2 - m^2 + i0); euclidean: 1/(m^2 - q^2 - i0)."""

    MINKOWSKI = "minkowski"
    EUCLIDEAN = "euclidean"

    def sign(self, total_power: int) -> int:
        """Return what multiplies the euclidean integral: (-1)^total_power or 1."""
        return -1 if self is PropagatorSign.MINKOWSKI and total_power % 2 else 1


@dataclass(frozen=True, slots=True)
class Conventions:
    """Measure, propagator sign and mu^2 (a positive rational, in the units of p^2)."""

    measure: Measure = Measure.MSBAR
    propagator_sign: PropagatorSign = PropagatorSign.MINKOWSKI
    mu_squared: fmpq = fmpq(1)  # noqa: RUF009 - an immutable number

    @classmethod
    def parse(cls, measure: str, propagator_sign: str, mu_squared: object) -> Conventions:
        """Check the three settings.

        Raises
        ------
        InputError
            For an unknown name or a mu^2 that is not a positive number.
        """
        try:
            parsed_measure = Measure(measure)
        except ValueError:
            raise InputError(
                f"measure = {measure!r} is unknown; accepted: {', '.join(Measure)}"
            ) from None
        try:
            parsed_sign = PropagatorSign(propagator_sign)
        except ValueError:
            raise InputError(
                f"propagator_sign = {propagator_sign!r} is unknown; "
                f"accepted: {', '.join(PropagatorSign)}"
            ) from None
        return cls(parsed_measure, parsed_sign, check_mu_squared(mu_squared))

    @property
    def described(self) -> dict[str, str]:
        """The three settings as text."""
        return {
            "measure": str(self.measure),
            "propagator_sign": str(self.propagator_sign),
            "mu_squared": str(self.mu_squared),
        }


def check_mu_squared(value: object) -> fmpq:
    """Return mu^2 as a positive rational or raise `InputError`."""
    mu_squared = exact_real(value)
    if mu_squared <= 0:
        raise InputError(f"mu_squared = {value} is not positive; accepted: mu^2 > 0")
    return mu_squared
