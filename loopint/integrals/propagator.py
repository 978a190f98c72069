"""Two-point integrals whose powers depend on epsilon: P(nu1, nu2), nu = n + a eps.

Such powers arise when a massless subloop sits on a line.  With N(eps) = 1, mu = 1, euclidean sign
and nu = nu1 + nu2, the evaluator is found in this order, decided exactly:

=========================  =======================================================================
integer powers             the bubble (`loopint.integrals.bubble`)
both lines massless        Gamma(d/2-nu1) Gamma(d/2-nu2) Gamma(nu-d/2)
                           / (Gamma(nu1) Gamma(nu2) Gamma(d-nu)) (-p^2-i0)^(d/2-nu)
one line massless (nu_a)   Gamma(d/2-nu_a) Gamma(nu-d/2)/(Gamma(d/2) Gamma(nu_b)) (m^2)^(d/2-nu)
                           2F1(nu-d/2, nu_a; d/2; p^2/m^2)
p^2 = 0                    Gamma(nu-d/2)/Gamma(nu) (m2^2)^(d/2-nu)
                           2F1(nu-d/2, nu1; nu; 1-m1^2/m2^2)
a power an integer <= 0    tadpoles (`loopint.integrals.numerators`)
otherwise                  quadrature of the Feynman parameter, proven, with both n >= 1
=========================  =======================================================================

The second is the G-function of Chetyrkin, Kataev, Tkachov, Nucl. Phys. B174 (1980) 345; the third
is Boos, Davydychev, Theor. Math. Phys. 89 (1991) 1052, with Gauss's sum on shell; the fourth is
Euler's integral (DLMF 15.6.1).  2F1(1, b; b+1; z) is evaluated as b Phi(z, 1, b), Lerch's function.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import TypeAlias

from flint import arb, fmpq

from loopint.core.conventions import Conventions, Measure, PropagatorSign
from loopint.core.epsilon_linear import EpsilonLinear, gamma_ratio
from loopint.core.errors import MorePrecisionNeeded, UnsupportedIntegralError
from loopint.core.kinematics import Region, TwoPoint, logarithm_below_cut
from loopint.core.laurent import BallSeries
from loopint.core.numbers import ExactComplex
from loopint.core.precision import BITS_PER_DIGIT, current_bits, working_precision
from loopint.hypergeometric.gauss import (
    GaussFunction,
    GaussParameters,
    NoTransformationError,
    times_power,
)
from loopint.integrals import bubble
from loopint.integrals.numerators import numerator_series
from loopint.integrals.powers import times_mass_exponent
from loopint.quadrature import integrate_feynman

Powers: TypeAlias = tuple[EpsilonLinear, ...]
ONE = ExactComplex(fmpq(1))
QUADRATURE_GUARD_DIGITS = 4


def check(powers: Powers, dimension: int) -> None:
    """Refuse integer parts beyond +-12 and rates beyond +-100."""
    bubble.check(tuple(int(nu.constant.p) for nu in powers), dimension)
    for nu in powers:
        if abs(nu.rate) > 100 or nu.rate.q > 1000:
            raise UnsupportedIntegralError(
                f"propagator power with the coefficient {nu.rate} of eps; "
                "accepted: rationals up to 100 with denominators up to 1000"
            )


def _integers(powers: Powers) -> tuple[int, int] | None:
    """Return the powers as integers if they do not depend on eps."""
    first, second = powers
    if first.rate != 0 or second.rate != 0:
        return None
    return int(first.constant.p), int(second.constant.p)


def _is_numerator(nu: EpsilonLinear) -> bool:
    return nu.rate == 0 and nu.constant <= 0


def region(point: TwoPoint, powers: Powers, dimension: int) -> str:
    """Name the region; '_isolated' as for the bubble, by the integer parts of the powers."""
    return bubble.region(point, tuple(int(nu.constant.p) for nu in powers), dimension)


def method(point: TwoPoint, powers: Powers, dimension: int) -> str:
    """Return 'exact', 'gamma', 'elementary', 'hypergeometric', 'lerch' or 'quadrature'."""
    integers = _integers(powers)
    if integers is not None:
        return bubble.method(point, integers, dimension)
    m1, m2 = point.m1_squared, point.m2_squared
    if point.region is Region.SCALELESS or _scaleless_line(point, powers):
        return "exact"
    if m1.is_zero and m2.is_zero:
        return "gamma"
    gauss = _gauss_plan(point, powers, dimension)
    if gauss is not None:
        if gauss.argument.is_zero or gauss.argument == ONE:
            return "gamma"
        lerch = gauss.function(Measure.PLAIN, dimension, 0).lerch_parameter
        if lerch is not None:
            return "lerch"
        return "hypergeometric"
    if any(_is_numerator(nu) for nu in powers):
        return "gamma"
    return "quadrature"


def _scaleless_line(point: TwoPoint, powers: Powers) -> bool:
    """Whether a line with an integer power <= 0 leaves a massless tadpole behind."""
    first, second = powers
    if _is_numerator(first) and point.m2_squared.is_zero:
        return True
    return _is_numerator(second) and point.m1_squared.is_zero


def series(
    point: TwoPoint, powers: Powers, dimension: int, highest: int, measure: Measure
) -> BallSeries:
    """Expand measure * P(nu1, nu2) through order `highest` at the working precision.

    Raises
    ------
    UnregulatedError
        If a Gamma function has a pole at every eps.
    UnsupportedIntegralError
        If no evaluator covers these powers at this point.
    """
    integers = _integers(powers)
    if integers is not None:
        return bubble.series(point, integers, dimension, highest, measure)
    if point.region is Region.SCALELESS or _scaleless_line(point, powers):
        return BallSeries.zero(highest)
    if point.m1_squared.is_zero and point.m2_squared.is_zero:
        return _both_massless(point, powers, dimension, highest, measure)
    gauss = _gauss_plan(point, powers, dimension)
    if gauss is not None:
        try:
            return gauss.series(dimension, highest, measure)
        except NoTransformationError:
            return _quadrature(point, powers, dimension, highest, measure)
    first, second = powers
    if _is_numerator(first):
        j = -int(first.constant.p)
        return numerator_series(point.exchanged(), second, j, dimension, highest, measure)
    if _is_numerator(second):
        j = -int(second.constant.p)
        return numerator_series(point, first, j, dimension, highest, measure)
    return _quadrature(point, powers, dimension, highest, measure)


def _half_dimension(dimension: int) -> EpsilonLinear:
    return EpsilonLinear.of(fmpq(dimension, 2), -1)


@lru_cache(maxsize=256)
def _massless_factor(
    powers: Powers, dimension: int, measure: Measure, highest: int, bits: int
) -> BallSeries:
    """Expand measure * the Gamma functions of two massless lines."""
    first, second = powers
    half = _half_dimension(dimension)
    total = first + second
    ratio = gamma_ratio(
        (half - first, half - second, total - half), (first, second, half + half - total)
    )
    if ratio is None:
        return BallSeries.zero(highest)
    with working_precision(bits + 32):
        return (measure.factor(dimension) * ratio).series_through(highest)


def _both_massless(
    point: TwoPoint, powers: Powers, dimension: int, highest: int, measure: Measure
) -> BallSeries:
    factor = _massless_factor(powers, dimension, measure, highest, current_bits())
    exponent = _half_dimension(dimension) - powers[0] - powers[1]
    return times_power(factor, exponent, logarithm_below_cut(arb(-point.p_squared)))


@dataclass(frozen=True, slots=True)
class _GaussPlan:
    """(m^2)^exponent * ratio * 2F1(a, b; c; argument)."""

    numerator: tuple[EpsilonLinear, ...]
    denominator: tuple[EpsilonLinear, ...]
    parameters: GaussParameters
    argument: ExactComplex
    m_squared: ExactComplex
    exponent: EpsilonLinear

    def function(self, measure: Measure, dimension: int, highest: int) -> GaussFunction:
        """Return measure * ratio * 2F1, with tables for the working precision."""
        ratio = gamma_ratio(self.numerator, self.denominator)
        assert ratio is not None
        prefactor = measure.factor(dimension) * ratio
        return GaussFunction(self.parameters, prefactor, highest, current_bits())

    def series(self, dimension: int, highest: int, measure: Measure) -> BallSeries:
        """Expand measure times the whole."""
        if gamma_ratio(self.numerator, self.denominator) is None:
            return BallSeries.zero(highest)
        function = self.function(measure, dimension, highest)
        value = function.evaluate(self.argument)
        if self.argument != ONE:  # at one the exact Gamma functions give the true order
            value = self._without_spurious_poles(value, highest)
        return times_mass_exponent(self.m_squared, value, self.exponent)

    def _without_spurious_poles(self, value: BallSeries, highest: int) -> BallSeries:
        """Make the orders below the true pole exact zeros.

        2F1/Gamma(c) is entire in its parameters (DLMF 15.2.2), so the pole is that of the
        remaining Gamma functions; poles of single terms of a transformation cancel.
        """
        lowest = sum(x.gamma().lowest_order for x in self.numerator)
        lowest -= sum(
            x.gamma().lowest_order
            for x in self.denominator
            if x != self.parameters.c and not x.is_pole_of_gamma
        )
        if highest < lowest:
            return BallSeries.zero(highest)
        coefficients = [value[k] for k in range(lowest, highest + 1)]
        if self.parameters.c.constant > 0 and _vanishes_at_zero(self.parameters, self.argument):
            coefficients[0] = arb(0)
        return BallSeries(lowest, coefficients)


def _vanishes_at_zero(p: GaussParameters, z: ExactComplex) -> bool:
    """Whether 2F1(a0, b0; c0; z), c0 > 0, is exactly zero; decided where it is elementary.

    That is where it, or by Euler's transformation (DLMF 15.8.1) its quotient by a power of 1-z, is
    a polynomial.
    """
    a, b, c = p.a.constant, p.b.constant, p.c.constant
    for x, y in ((a, b), (c - a, c - b)):
        degrees = [-int(t.p) for t in (x, y) if t.q == 1 and t <= 0]
        if degrees:
            term = value = ONE
            for n in range(min(degrees)):
                term = (term * z).scaled((x + n) * (y + n) / ((c + n) * (n + 1)))
                value = value + term
            return value.is_zero
    return False


def _gauss_plan(point: TwoPoint, powers: Powers, dimension: int) -> _GaussPlan | None:
    """Return the single Gauss function of the cases that have one."""
    half, total = _half_dimension(dimension), powers[0] + powers[1]
    m1, m2 = point.m1_squared, point.m2_squared
    excess = total - half
    if m1.is_zero or m2.is_zero:
        massless, massive, m_squared = (
            (powers[0], powers[1], m2) if m1.is_zero else (powers[1], powers[0], m1)
        )
        argument = ONE if point.snapped else ExactComplex(point.p_squared) / m_squared
        return _GaussPlan(
            (half - massless, excess),
            (half, massive),
            GaussParameters(excess, massless, half),
            argument,
            m_squared,
            -excess,
        )
    if point.p_squared == 0:
        if total.is_pole_of_gamma:
            return None
        return _GaussPlan(
            (excess,),
            (total,),
            GaussParameters(excess, powers[0], total),
            ONE - m1 / m2,
            m2,
            -excess,
        )
    return None


def _quadrature(
    point: TwoPoint, powers: Powers, dimension: int, highest: int, measure: Measure
) -> BallSeries:
    """Integrate the Feynman-parameter representation to about the working precision."""
    lowest = min(-2, highest)
    digits = max(5, int(current_bits() / BITS_PER_DIGIT) - QUADRATURE_GUARD_DIGITS)
    result = integrate_feynman(
        point,
        tuple((int(nu.constant.p), nu.rate) for nu in powers),
        dimension,
        (lowest, highest),
        Conventions(measure, PropagatorSign.EUCLIDEAN),
        digits=digits,
        attempts=2,  # the caller raises the precision
    )
    balls = [result.balls[k] for k in range(lowest, highest + 1)]
    if not all(ball.is_finite() for ball in balls):
        raise MorePrecisionNeeded
    return BallSeries(lowest, balls)
