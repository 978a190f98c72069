"""Two propagators with integer powers, in any integer dimension: the bubble B(n1, n2).

With N(eps) = 1, mu = 1 and euclidean sign, N = n1 + n2 and s = d/2 - N,

    B(n1, n2) = Gamma(-s)/(Gamma(n1) Gamma(n2)) Int_0^1 x^(n1-1) (1-x)^(n2-1) Q(x)^s dx,

a Feynman-parameter moment (`loopint.integrals.moments`) if both powers are positive, tadpoles
(`loopint.integrals.numerators`) if one is not, and zero if neither is.
"""

from __future__ import annotations

from functools import lru_cache
from math import factorial

from flint import arb, fmpq

from loopint.core.conventions import Measure
from loopint.core.epsilon_linear import EpsilonLinear
from loopint.core.errors import UnsupportedIntegralError
from loopint.core.gamma_factors import EpsilonFactor
from loopint.core.kinematics import Region, TwoPoint
from loopint.core.laurent import BallSeries
from loopint.core.numbers import Ball
from loopint.core.precision import current_bits
from loopint.integrals.logarithms import logarithm_integral
from loopint.integrals.moments import FeynmanMoment, kummer_line, ultraviolet_moment
from loopint.integrals.numerators import numerator_series
from loopint.integrals.vanishing import leading_order_vanishes

MAX_POWER = 12
ISOLATED = "_isolated"
SINGULAR = (Region.THRESHOLD, Region.ON_SHELL)


def check(powers: tuple[int, ...], dimension: int) -> None:  # noqa: ARG001 - any dimension
    """Refuse powers beyond +-12."""
    if any(abs(n) > MAX_POWER for n in powers):
        raise UnsupportedIntegralError(
            f"bubble with powers {list(powers)}; "
            f"accepted: integers from -{MAX_POWER} to {MAX_POWER}"
        )


def method(point: TwoPoint, powers: tuple[int, ...], dimension: int) -> str:  # noqa: ARG001
    """Return 'exact' (zero), 'gamma', 'elementary' or 'hypergeometric'."""
    n1, n2 = powers
    if _vanishes(point, n1, n2):
        return "exact"
    if n1 <= 0 or n2 <= 0:
        return "gamma"
    if point.m1_squared.is_zero and point.m2_squared.is_zero:
        return "gamma"
    if point.p_squared == 0 or point.kallen.is_zero:
        return "elementary"
    return "gamma" if kummer_line(point, n1 - 1, n2 - 1) else "hypergeometric"


def region(point: TwoPoint, powers: tuple[int, ...], dimension: int) -> str:
    """Name the region; '_isolated' says that nearby points do not tend to the value.

    At threshold nearby points carry a term (-lambda)^(s+1/2), and on shell with a massless partner
    a term (m^2-p^2)^(n+2s), n the power of the massive line.  Where that exponent is not positive
    at eps = 0, dimensional regularisation still gives a finite value or a pole exactly there, but
    it is not a limit.
    """
    found = point.region
    n1, n2 = powers
    isolated = False
    if n1 > 0 and n2 > 0 and found in SINGULAR:
        exponent = dimension - 2 * (n1 + n2)  # 2s
        if found is Region.THRESHOLD:
            isolated = exponent + 1 <= 0
        else:
            massive = n2 if point.m1_squared.is_zero else n1
            isolated = massive + exponent <= 0
    return found.value + ISOLATED if isolated else found.value


def series(
    point: TwoPoint, powers: tuple[int, ...], dimension: int, highest: int, measure: Measure
) -> BallSeries:
    """Expand measure * B(n1, n2) through order `highest` at the working precision.

    Orders below the true pole are exact zeros, and an ultraviolet pole is exact.
    """
    n1, n2 = powers
    if _vanishes(point, n1, n2):
        return BallSeries.zero(highest)
    if n1 <= 0 or n2 <= 0:
        ordered = point.exchanged() if n1 <= 0 else point
        power = EpsilonLinear.of(max(n1, n2), 0)
        return numerator_series(ordered, power, -min(n1, n2), dimension, highest, measure)
    moment = _moment(n1, n2, dimension, measure, highest, current_bits())
    if highest == 0 and moment.is_plain and _has_logarithms(point):
        integral = logarithm_integral(point)
        if integral is not None:
            lead, constant = moment.bare.coefficients
            return BallSeries(-1, [lead, constant - lead * integral])
    result = moment.integrate(point)
    if point.m1_squared.is_zero and point.m2_squared.is_zero:
        return result
    return _clean(result, point, (n1, n2), dimension, highest, moment)


def _has_logarithms(point: TwoPoint) -> bool:
    """Whether Int log Q dx is one formula with logarithms: real masses, no degenerate point."""
    if not point.masses_are_real or not point.p_squared or point.kallen.is_zero:
        return False
    return not (point.m1_squared.is_zero and point.m2_squared.is_zero)


def _vanishes(point: TwoPoint, n1: int, n2: int) -> bool:
    """Whether the integral is scaleless, or a polynomial."""
    if n1 <= 0 and n2 <= 0:
        return True
    if n1 <= 0:
        return point.m2_squared.is_zero
    if n2 <= 0:
        return point.m1_squared.is_zero
    return not point.p_squared and point.m1_squared.is_zero and point.m2_squared.is_zero


@lru_cache(maxsize=256)
def _moment(
    n1: int, n2: int, dimension: int, measure: Measure, highest: int, bits: int
) -> FeynmanMoment:
    """Return the moment of B(n1, n2) with its prefactor and tables, shared by all points."""
    s0 = fmpq(dimension, 2) - n1 - n2
    prefactor = measure.factor(dimension) * EpsilonFactor.gamma(-s0, 1)
    prefactor = prefactor * EpsilonFactor.constant(fmpq(1, factorial(n1 - 1) * factorial(n2 - 1)))
    return FeynmanMoment(n1 - 1, n2 - 1, s0, prefactor, highest, bits)


def _clean(
    result: BallSeries,
    point: TwoPoint,
    powers: tuple[int, int],
    dimension: int,
    highest: int,
    moment: FeynmanMoment,
) -> BallSeries:
    """Replace what is known exactly: orders below the pole, and the ultraviolet pole."""
    n1, n2 = powers
    known: dict[int, Ball] = {}
    lowest = -1 if _has_pole(point, n1, n2, dimension) else 0
    if moment.s0 >= 0 and moment.s0.q == 1 and not point.snapped:
        lead = moment.lead
        if moment.s0 != 0 or lead != 1 or n1 * n2 > 1:
            pole = ultraviolet_moment(point, n1 - 1, n2 - 1, int(moment.s0.p))
            lead = arb(0) if pole.is_zero else pole.ball() * lead
        known[-1] = lead
    if highest < lowest:
        return BallSeries.zero(highest)
    if lowest == 0 and result[0].contains(0) and _finite_part_vanishes(point, powers, dimension):
        known[0] = arb(0)
    return BallSeries(lowest, [known.get(k, result[k]) for k in range(lowest, highest + 1)])


def _finite_part_vanishes(point: TwoPoint, powers: tuple[int, int], dimension: int) -> bool:
    """Whether the coefficient of eps^0 is exactly zero, there being no pole."""
    if not point.p_squared or point.kallen.is_zero:
        return False
    lines = zip((point.m1_squared, point.m2_squared), powers, strict=True)
    if dimension % 2 == 0 and any(m.is_zero and 2 * n >= dimension for m, n in lines):
        return False  # an infrared residue that vanishes: eps^0 is the next coefficient
    return leading_order_vanishes(point, *powers, dimension)


def _has_pole(point: TwoPoint, n1: int, n2: int, dimension: int) -> bool:
    """Whether B has a 1/eps pole, at least one mass being nonzero.

    Ultraviolet for 2N <= d0 (even); infrared on a massless line of power n for 2n >= d0 (even), and
    on shell for N < d0 <= n + N; and the threshold singularity in odd d0 for N < d0 < 2N.
    """
    total, even = n1 + n2, dimension % 2 == 0
    if even and 2 * total <= dimension:
        return True
    if point.m1_squared.is_zero or point.m2_squared.is_zero:
        massless, massive = (n1, n2) if point.m1_squared.is_zero else (n2, n1)
        if point.region is Region.ON_SHELL:
            # Gamma(-s) Gamma(massive+2s)/Gamma(d-N)
            return total < dimension <= 2 * massless + massive
        if even and 2 * massless >= dimension:
            return not leading_order_vanishes(point, n1, n2, dimension)
        return False
    return point.region is Region.THRESHOLD and not even and total < dimension < 2 * total
