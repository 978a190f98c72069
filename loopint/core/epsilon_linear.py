"""Numbers constant + rate * eps: powers of propagators, hypergeometric parameters."""

from __future__ import annotations

from dataclasses import dataclass

from flint import arb, fmpq

from loopint.core.gamma_factors import EpsilonFactor


@dataclass(frozen=True, slots=True)
class EpsilonLinear:
    """constant + rate * eps.

    Examples
    --------
    >>> EpsilonLinear.of(2, 1) - EpsilonLinear.of("1/2", 3)
    EpsilonLinear(constant=3/2, rate=-2)
    """

    constant: fmpq
    rate: fmpq

    @classmethod
    def of(cls, constant: fmpq | int | str, rate: fmpq | int) -> EpsilonLinear:
        """Build from numbers; a string is a rational such as "1/2"."""
        if isinstance(constant, str):
            numerator, _, denominator = constant.partition("/")
            constant = fmpq(int(numerator), int(denominator or 1))
        return cls(fmpq(constant), fmpq(rate))

    def __add__(self, other: EpsilonLinear | int) -> EpsilonLinear:
        if isinstance(other, int):
            return EpsilonLinear(self.constant + other, self.rate)
        return EpsilonLinear(self.constant + other.constant, self.rate + other.rate)

    def __neg__(self) -> EpsilonLinear:
        return EpsilonLinear(-self.constant, -self.rate)

    def __sub__(self, other: EpsilonLinear | int) -> EpsilonLinear:
        return self + (-other)

    def __str__(self) -> str:
        if self.rate == 0:
            return str(self.constant)
        return f"{self.constant}{'+' if self.rate > 0 else '-'}{abs(self.rate)}*eps"

    def gamma(self) -> EpsilonFactor:
        """Return Gamma(constant + rate eps)."""
        return EpsilonFactor.gamma(self.constant, self.rate)

    @property
    def is_pole_of_gamma(self) -> bool:
        """Whether Gamma has a pole here at every eps."""
        return self.rate == 0 and self.constant.q == 1 and self.constant <= 0

    @property
    def size(self) -> float:
        """An upper bound on |constant| + |rate|."""
        return float(arb(abs(self.constant) + abs(self.rate)).upper())


def gamma_ratio(
    numerator: tuple[EpsilonLinear, ...], denominator: tuple[EpsilonLinear, ...]
) -> EpsilonFactor | None:
    """Return the product of Gammas over the product of Gammas, or None if it is exactly zero.

    Raises
    ------
    UnregulatedError
        If a Gamma function in the numerator has a pole at every eps.
    """
    result = EpsilonFactor()
    for x in numerator:
        result = result * x.gamma()
    if any(x.is_pole_of_gamma for x in denominator):
        return None
    for x in denominator:
        result = result / x.gamma()
    return result
