"""Two propagators with integer powers: the bubble B(n1, n2).

One formula for every kinematic case
------------------------------------
With N(eps) = 1, mu = 1 and euclidean sign, B(1,1) = Gamma(-s) J with s = d/2 - 2 and

    J = Int_0^1 Q(x)^s dx,    Q(x) = x m1^2 + (1-x) m2^2 - x(1-x) p^2 - i0.

Let R = sqrt(lambda), A1 = p^2 + m1^2 - m2^2, A2 = p^2 - m1^2 + m2^2; then
A_i^2 = lambda + 4 p^2 m_i^2, and the roots of Q lie at 1-x = (A1 -+ R)/(2 p^2).  The primitive of
Q^s that vanishes at the root x_a, by Euler's integral (DLMF 15.6.1) and Pfaff's transformation
(DLMF 15.8.1), is

    F_a(x) = (x-x_a) Q(x)^s f((x-x_a)/(x-x_b)) / (1+s),    f(w) = 2F1(1, -s; 2+s; w).

Take at x = 1 and at x = 0 the nearer root.  With sigma_i = +-1 such that
Re(sigma_i conj(A_i) R) >= 0 and D_i = A_i + sigma_i R this is

    J = sum_i 2 m_i^2 / D_i * (m_i^2)^s f(w_i) / (1+s)  +  T,
    w_i = 4 p^2 m_i^2 / D_i^2,     1 - w_i = 2 sigma_i R / D_i,     |w_i| <= 1,
    T = sigma R/p^2 (-lambda/p^2 - i0)^s Gamma(1+s)^2/Gamma(2+2s)   if sigma_1 = sigma_2 = sigma,
    T = 0                                                           otherwise.

No difference of nearly equal numbers is left in w_i, 1-w_i and D_i: lambda and A_i are exact.

Why it holds for complex masses (Im m^2 <= 0, p^2 real)
-------------------------------------------------------
On [0,1], Im Q <= 0 and log Q is principal.  If the nearer root is the same for 0 and 1
(sigma_1 = -sigma_2), the other root lies beyond the perpendicular bisector of the roots, so outside
the triangle 0, x_a, 1, and J = F_a(1) - F_a(0).  Otherwise the bisector cuts [0,1] at some X.  On
the bisector Q = -lambda/(4 p^2) (1 + t^2) with real t, so its phase is constant there, and the
segment between the roots carries the same phase: the phase of Q(X), which is in [-pi, 0].  Hence
-lambda/p^2 has Im <= 0, and T, the integral between the roots, takes its principal logarithm (on
the cut: from below).  Each half of the polygon 0, x_c, x_a, 1 lies on its side of the bisector,
where the only root is its corner, so Q^s is continued without crossing a branch cut.

Near w = 1 (threshold and pseudothreshold) f follows from DLMF 15.8.4,

    f(w)/(1+s) = g(1-w)/(1+2s) + Gamma(1+s) Gamma(-1-2s)/Gamma(-s) (1-w)^(1+2s) w^(-1-s),
    g(v) = 2F1(1, -s; -2s; v).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

from flint import acb, arb, fmpq

from loopint.core.conventions import Measure
from loopint.core.errors import MorePrecisionNeeded, UnsupportedIntegralError
from loopint.core.gamma_factors import EpsilonFactor
from loopint.core.kinematics import Region, TwoPoint, logarithm_below_cut
from loopint.core.laurent import BallSeries, exponential
from loopint.core.numbers import Ball, ExactComplex, real_part
from loopint.core.precision import current_bits, working_precision
from loopint.hypergeometric.unit_gauss import GaussParameters, GaussTable, gauss_table
from loopint.integrals.tadpole import mass_power

HALF = arb(0.5)


def check(powers: tuple[int, ...], dimension: int) -> None:
    """Refuse what is not covered: anything but powers (1, 1) in d0 = 4."""
    if powers != (1, 1) or dimension != 4:
        raise UnsupportedIntegralError(
            f"bubble with powers {list(powers)} in dimension {dimension}; "
            "accepted: powers [1, 1], dimension 4"
        )


def method(point: TwoPoint, powers: tuple[int, ...], dimension: int) -> str:  # noqa: ARG001
    """Return 'exact', 'elementary', 'gamma' or 'hypergeometric'."""
    match point.region:
        case Region.SCALELESS:
            return "exact"
        case Region.ZERO_MOMENTUM | Region.THRESHOLD | Region.PSEUDOTHRESHOLD | Region.ON_SHELL:
            return "elementary"
    if point.kallen.is_zero:
        return "elementary"
    return "gamma" if point.m1_squared.is_zero and point.m2_squared.is_zero else "hypergeometric"


@dataclass(frozen=True)
class BubbleTables:
    """Everything in prefactor * Int Q^s dx that does not depend on kinematics.

    With s = s0 - eps, and each through order `highest` at one precision:

    far
        prefactor f(w)/(1+s), for Re w <= 1/2
    near, singular
        prefactor g(1-w)/(1+2s), and the prefactor of the power of 1-w beside it
    between_roots
        prefactor Gamma(1+s)^2/Gamma(2+2s)
    at_one
        prefactor f(1)/(1+s) = prefactor/(1+2s), Gauss's sum (DLMF 15.4.20)
    bare
        prefactor
    """

    s0: fmpq
    far: GaussTable
    near: GaussTable
    singular: BallSeries
    between_roots: BallSeries
    at_one: BallSeries
    bare: BallSeries


@lru_cache(maxsize=256)
def bubble_tables(twice_s0: int, prefactor: EpsilonFactor, highest: int, bits: int) -> BubbleTables:
    """Build the tables for s0 = 0 or -1/2, shared by all points."""
    s0, one = fmpq(twice_s0, 2), fmpq(1)
    gamma, linear = EpsilonFactor.gamma, EpsilonFactor.linear_factor

    def expanded(factor: EpsilonFactor) -> BallSeries:
        terms = highest - factor.lowest_order + 1
        return factor.series(terms) if terms > 0 else BallSeries.zero(highest)

    with working_precision(bits + 32):
        return BubbleTables(
            s0=s0,
            far=gauss_table(
                GaussParameters(-s0, one, 2 + s0, -one),
                prefactor / linear(1 + s0, -1),
                highest,
                bits,
            ),
            near=gauss_table(
                GaussParameters(-s0, one, -2 * s0, 2 * one),
                prefactor / linear(1 + 2 * s0, -2),
                highest,
                bits,
            ),
            singular=expanded(
                prefactor * gamma(1 + s0, -1) * gamma(-1 - 2 * s0, 2) / gamma(-s0, 1)
            ),
            between_roots=expanded(
                prefactor * gamma(1 + s0, -1) * gamma(1 + s0, -1) / gamma(2 + 2 * s0, -2)
            ),
            at_one=expanded(prefactor / linear(1 + 2 * s0, -2)),
            bare=expanded(prefactor),
        )


@lru_cache(maxsize=256)
def _unit_power_tables(dimension: int, measure: Measure, highest: int, bits: int) -> BubbleTables:
    """Return the tables of B(1,1) with its prefactor measure * Gamma(-s)."""
    twice_s0 = dimension - 4
    prefactor = measure.factor(dimension) * EpsilonFactor.gamma(fmpq(-twice_s0, 2), 1)
    return bubble_tables(twice_s0, prefactor, highest, bits)


def series(
    point: TwoPoint,
    powers: tuple[int, ...],  # noqa: ARG001 - (1, 1) is the only case, see `check`
    dimension: int,
    highest: int,
    measure: Measure,
) -> BallSeries:
    """Expand measure * B(1,1) through order `highest` at the working precision."""
    if point.region is Region.SCALELESS or highest < -1:
        return BallSeries.zero(highest)
    tables = _unit_power_tables(dimension, measure, highest, current_bits())
    result = unit_power_integral(point, tables)
    # J = 1 + O(eps): the pole is the exact leading coefficient of the prefactor
    return BallSeries(-1, [tables.bare[-1], *(result[k] for k in range(highest + 1))])


def unit_power_integral(point: TwoPoint, tables: BubbleTables) -> BallSeries:
    """Expand prefactor * Int_0^1 Q(x)^s dx.

    The point must not be scaleless; at s0 = -1/2 it must not be at threshold.
    """
    if point.p_squared == 0 and point.m1_squared == point.m2_squared:
        return _mass_term(point.m1_squared, tables.bare, tables.s0)
    first, second = _endpoints(point)
    parts = [_endpoint_term(end, tables) for end in (first, second) if not end.m_squared.is_zero]
    if first.sigma == second.sigma:
        parts.append(_between_roots(point, first.sigma, tables))
    total = parts[0]
    for part in parts[1:]:
        total = total + part
    if point.masses_are_real and point.region is not Region.ABOVE_THRESHOLD:
        return total.map(real_part)  # Q > 0 on (0,1)
    return total


@dataclass(frozen=True, slots=True)
class _Endpoint:
    """One end of the Feynman-parameter interval seen from the nearer root of Q."""

    m_squared: ExactComplex
    sigma: int
    weight: Ball  # 2 m^2 / D
    w: Ball
    one_minus_w: Ball  # exactly zero when lambda = 0


def _endpoints(point: TwoPoint) -> tuple[_Endpoint, _Endpoint]:
    m1, m2 = point.m1_squared, point.m2_squared
    p2 = ExactComplex(point.p_squared)
    if point.kallen.is_zero:
        return _degenerate_endpoints(point)
    size = point.kallen
    root = size.ball().sqrt() if size.re > 0 or size.im != 0 else acb(0, arb(-size.re).sqrt())
    a1, a2 = p2 + m1 - m2, p2 - m1 + m2
    sigma1 = _nearer_root(a1, size, root)
    sigma2 = _nearer_root(a2, size, root, tie=-sigma1)
    return (
        _endpoint(m1, a1, sigma1, root, point.p_squared),
        _endpoint(m2, a2, sigma2, root, point.p_squared),
    )


def _endpoint(
    m_squared: ExactComplex, a: ExactComplex, sigma: int, root: Ball, p_squared: fmpq
) -> _Endpoint:
    signed = root if sigma > 0 else -root
    d = a.ball() + signed
    weight = m_squared.scaled(fmpq(2)).ball() / d
    w = 2 * arb(p_squared) * weight / d
    return _Endpoint(m_squared, sigma, weight, w, 2 * signed / d)


def _nearer_root(a: ExactComplex, size: ExactComplex, root: Ball, tie: int = 1) -> int:
    """Return the sign that makes Re(sigma conj(A) R) >= 0, decided exactly where it is zero.

    It is zero if and only if A^2 conj(lambda) is real and <= 0 (|w| = 1: both roots are equally
    near, and either sign is right).
    """
    if a.is_real and size.is_real:
        if size.re < 0 or a.re == 0:
            return tie
        return 1 if a.re > 0 else -1
    square = a * a * size.conjugate()
    if square.is_real and square.re <= 0:
        return tie
    projection = real_part(a.conjugate().ball() * root)
    if projection > 0:
        return 1
    if projection < 0:
        return -1
    raise MorePrecisionNeeded


def _degenerate_endpoints(point: TwoPoint) -> tuple[_Endpoint, _Endpoint]:
    """Treat lambda = 0: Q is a square, w = 1, and 2 m_i^2/A_i is m1/(m1 +- m2), m2/(m2 +- m1).

    For a snapped point p^2 is defined by the masses, so A_i is not available as a rational.
    """
    m1, m2 = point.m1_squared, point.m2_squared
    one, zero = arb(1), arb(0)
    if point.snapped:
        root1, root2 = arb(m1.re).sqrt(), arb(m2.re).sqrt()
        if point.snapped_onto is Region.PSEUDOTHRESHOLD:
            root2 = -root2
        weights: tuple[Ball, Ball] = (root1 / (root1 + root2), root2 / (root1 + root2))
    else:
        p2 = ExactComplex(point.p_squared)
        a1, a2 = p2 + m1 - m2, p2 - m1 + m2  # A_i^2 = 4 p^2 m_i^2
        weights = (_ratio(m1, a1), _ratio(m2, a2))
    return (
        _Endpoint(m1, 1, weights[0], one, zero),
        _Endpoint(m2, -1, weights[1], one, zero),
    )


def _ratio(m_squared: ExactComplex, a: ExactComplex) -> Ball:
    if m_squared.is_zero:
        return arb(0)
    return m_squared.scaled(fmpq(2)).ball() / a.ball()


def _endpoint_term(end: _Endpoint, tables: BubbleTables) -> BallSeries:
    """Expand prefactor * weight * (m^2)^s * f(w)/(1+s)."""
    if end.one_minus_w == 0:
        value = tables.at_one
    elif real_part(end.w) <= HALF:
        value = tables.far.evaluate(-(-end.w).log1p())
    else:
        value = _near_one(end, tables)
    return _mass_term(end.m_squared, value, tables.s0).scaled(end.weight)


def _near_one(end: _Endpoint, tables: BubbleTables) -> BallSeries:
    v, s0 = end.one_minus_w, tables.s0
    log_w = (-v).log1p()
    singular = tables.singular
    # v^(1+2s) w^(-1-s) at eps = 0
    constant = v / end.w if s0 == 0 else ((1 + 2 * s0) * v.log() - (1 + s0) * log_w).exp()
    singular = _times_exponential(singular, log_w - 2 * v.log()).scaled(constant)
    return tables.near.evaluate(-log_w) + singular


def _between_roots(point: TwoPoint, sigma: int, tables: BubbleTables) -> BallSeries:
    """Expand prefactor * T, the integral from one root of Q to the other."""
    height = point.kallen.scaled(-1 / point.p_squared).ball()  # 4 Q half-way between the roots
    logarithm = logarithm_below_cut(height)
    constant = sigma * point.kallen.ball().sqrt() / arb(point.p_squared)
    if tables.s0 != 0:
        constant = constant * (arb(tables.s0) * logarithm).exp()
    return _times_exponential(tables.between_roots, -logarithm).scaled(constant)


def _mass_term(m_squared: ExactComplex, value: BallSeries, s0: fmpq) -> BallSeries:
    """Return value * (m^2)^(s0 - eps)."""
    power, logarithm = mass_power(m_squared, s0)
    result = _times_exponential(value, -logarithm)
    return result if s0 == 0 else result.scaled(power)


def _times_exponential(value: BallSeries, rate: Ball) -> BallSeries:
    """Return value * exp(rate eps)."""
    return value * BallSeries(0, exponential(rate, len(value.coefficients)))
