"""Derivatives with respect to p^2 and squared masses: exact relations to other integrals.

Under the Feynman integral d/dm1^2 brings down x and d/dp^2 brings down -x(1-x), so that with the
default propagator sign and the measure Int d^dq/(i pi^(d/2))

    dA(n)/dm^2        = n A(n+1)
    dB(n1, n2)/dm1^2  = n1 B(n1+1, n2)
    dB(n1, n2)/dp^2   = n1 n2 B^(d+2)(n1+1, n2+1)

for integers of either sign (the dimension shift is Tarasov's, hep-th/9606018).  They compose, so
that every derivative is one integer times one integral:

    d^(k+k1+k2) B(n1, n2) / (dp^2)^k (dm1^2)^k1 (dm2^2)^k2
        = (n1)_(k+k1) (n2)_(k+k2) B^(d+2k)(n1+k+k1, n2+k+k2),   (n)_k = n (n+1) ... (n+k-1).

The factor of the measure belongs to the integral that is differentiated: N(eps) is the same in
d + 2k dimensions, but `two_pi` has (4 pi)^(-d/2) and leaves (4 pi)^k.  With euclidean propagator
sign each derivative with respect to a squared mass changes the sign.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from math import prod
from typing import TYPE_CHECKING, Any

from flint import arb

from loopint.core.conventions import Conventions, Measure, PropagatorSign
from loopint.core.epsilon_linear import EpsilonLinear
from loopint.core.errors import InputError
from loopint.core.kinematics import OnePoint, TwoPoint

if TYPE_CHECKING:
    from collections.abc import Sequence

MAX_DERIVATIVES = 4
P_SQUARED = "p_squared"
ONE_POINT_VARIABLES = ("m_squared",)
TWO_POINT_VARIABLES = (P_SQUARED, "m1_squared", "m2_squared")


@dataclass(frozen=True, slots=True)
class DerivativeTerm:
    """The integral that a derivative is a multiple of.

    Attributes
    ----------
    coefficient
        The integer in front, for the default propagator sign and without measure.
    powers, dimension
        Powers and d0 of the integral.
    momentum_steps
        How often p^2 was differentiated.
    mass_steps
        How often the squared mass of each line was differentiated.
    linear_factors
        Further factors that depend on eps, where the powers do.
    """

    coefficient: int
    powers: tuple[Any, ...]
    dimension: int
    momentum_steps: int
    mass_steps: tuple[int, ...]
    linear_factors: tuple[EpsilonLinear, ...] = ()

    def factor(self, conventions: Conventions) -> int | arb:
        """Return derivative / integral, both in these conventions, at the working precision."""
        factor = self.coefficient
        if conventions.propagator_sign is PropagatorSign.EUCLIDEAN and sum(self.mass_steps) % 2:
            factor = -factor
        if conventions.measure is Measure.TWO_PI and self.momentum_steps and factor:
            return (4 * arb.pi()) ** self.momentum_steps * factor
        return factor

    def has_no_limit(self, point: OnePoint | TwoPoint) -> bool:
        """Whether the squared mass of a massless line is differentiated without a limit at zero.

        Nearby points carry (m^2)^(d/2-n) of the region of small momentum on the line, n its power
        in the differentiated integral; at m^2 = 0 dimensional regularisation drops it.
        """
        if not any(self.mass_steps):
            return False
        masses = (
            (point.m_squared,)
            if isinstance(point, OnePoint)
            else (point.m1_squared, point.m2_squared)
        )
        lines = zip(masses, self.powers, self.mass_steps, strict=True)
        return self.coefficient != 0 and any(
            mass.is_zero and steps > 0 and self.dimension <= 2 * _constant(n)
            for mass, n, steps in lines
        )


def _constant(power: int | EpsilonLinear) -> int:
    return int(power.constant.p) if isinstance(power, EpsilonLinear) else power


def check_derivatives(names: object, variables: Sequence[str]) -> tuple[str, ...]:
    """Return the variables of a derivative in their standard order; () is no derivative.

    Parameters
    ----------
    names
        One name, or a list or tuple of names, one for each time the integral is differentiated.
    variables
        The names that are accepted.

    Raises
    ------
    InputError
        For an unknown name, or more than four.

    Examples
    --------
    >>> check_derivatives(["m1_squared", "p_squared"], TWO_POINT_VARIABLES)
    ('p_squared', 'm1_squared')
    """
    found = (names,) if isinstance(names, str) else names
    accepted = f"accepted: up to {MAX_DERIVATIVES} names out of {', '.join(variables)}"
    if not isinstance(found, tuple | list) or len(found) > MAX_DERIVATIVES:
        raise InputError(f"derivatives = {names!r}; {accepted}")
    for name in found:
        if name not in variables:
            raise InputError(f"derivatives: {name!r} is unknown; {accepted}")
    return tuple(sorted(found, key=list(variables).index))


@lru_cache(maxsize=1024)
def derivative_term(
    powers: tuple[Any, ...], dimension: int, derivatives: tuple[str, ...]
) -> DerivativeTerm:
    """Return the integral and the integer that a derivative consists of.

    Parameters
    ----------
    powers, dimension
        Of the integral that is differentiated: a tadpole if it has one power, else a bubble.
    derivatives
        From `check_derivatives`; () gives the integral itself.

    Examples
    --------
    >>> term = derivative_term((1, 2), 4, ("p_squared",))
    >>> term.coefficient, term.powers, term.dimension
    (2, (2, 3), 6)
    """
    variables = ONE_POINT_VARIABLES if len(powers) == 1 else TWO_POINT_VARIABLES
    momentum = derivatives.count(P_SQUARED)
    masses = tuple(derivatives.count(name) for name in variables if name != P_SQUARED)
    raised = tuple(n + momentum + steps for n, steps in zip(powers, masses, strict=True))
    steps_up = [
        n + k for n, steps in zip(powers, masses, strict=True) for k in range(momentum + steps)
    ]
    coefficient = prod(n for n in steps_up if isinstance(n, int))
    linear = tuple(n for n in steps_up if isinstance(n, EpsilonLinear))
    return DerivativeTerm(coefficient, raised, dimension + 2 * momentum, momentum, masses, linear)
