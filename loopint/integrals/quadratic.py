"""The integral of a power of the Feynman-parameter polynomial: J(s) = Int_0^1 Q(x)^s dx.

One formula for every kinematic case
------------------------------------
With Q(x) = x m1^2 + (1-x) m2^2 - x(1-x) p^2 - i0 let

    R = sqrt(lambda),    A1 = p^2 + m1^2 - m2^2,    A2 = p^2 - m1^2 + m2^2,

so that A_i^2 = lambda + 4 p^2 m_i^2, and the roots of Q lie at 1-x = (A1 -+ R)/(2 p^2).  The
primitive of Q^s that vanishes at the root x_a, by Euler's integral (DLMF 15.6.1) and Pfaff's
transformation (DLMF 15.8.1), is

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

from flint import acb, arb, fmpq

from loopint.core.errors import MorePrecisionNeeded
from loopint.core.gamma_factors import EpsilonFactor
from loopint.core.kinematics import Region, TwoPoint, logarithm_below_cut
from loopint.core.laurent import BallSeries
from loopint.core.numbers import Ball, ExactComplex, real_part
from loopint.core.precision import working_precision
from loopint.hypergeometric.tables import EpsilonTable
from loopint.hypergeometric.unit_gauss import GaussParameters, gauss_table
from loopint.integrals.powers import times_exponential, times_mass_power

HALF = arb(0.5)


@dataclass(frozen=True)
class QuadraticTables:
    """Everything in prefactor * Int Q^s dx that does not depend on kinematics.

    With s = s0 - eps, and each through order `highest` at one precision:

    far
        prefactor f(w)/(1+s), for Re w <= 1/2
    near, singular
        prefactor g(1-w)/(1+2s), and the prefactor of the power of 1-w beside it
    between_roots
        prefactor Gamma(1+s)^2/Gamma(2+2s)
    """

    s0: fmpq
    far: EpsilonTable
    near: EpsilonTable
    singular: BallSeries
    between_roots: BallSeries


def quadratic_tables(
    s0: fmpq, prefactor: EpsilonFactor, highest: int, bits: int
) -> QuadraticTables:
    """Build the tables for an integer or half-integer s0."""
    one = fmpq(1)
    gamma, linear = EpsilonFactor.gamma, EpsilonFactor.linear_factor
    with working_precision(bits + 32):
        return QuadraticTables(
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
            singular=(
                prefactor * gamma(1 + s0, -1) * gamma(-1 - 2 * s0, 2) / gamma(-s0, 1)
            ).series_through(highest),
            between_roots=(
                prefactor * gamma(1 + s0, -1) * gamma(1 + s0, -1) / gamma(2 + 2 * s0, -2)
            ).series_through(highest),
        )


def quadratic_power_integral(point: TwoPoint, tables: QuadraticTables) -> BallSeries:
    """Expand prefactor * Int_0^1 Q(x)^s dx for p^2 != 0 and lambda != 0."""
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
    one_minus_w: Ball


def _endpoints(point: TwoPoint) -> tuple[_Endpoint, _Endpoint]:
    m1, m2 = point.m1_squared, point.m2_squared
    p2 = ExactComplex(point.p_squared)
    size = point.kallen
    root = size.ball().sqrt() if size.re > 0 or size.im else acb(0, arb(-size.re).sqrt())
    a1, a2 = p2 + m1 - m2, p2 - m1 + m2
    sigma1 = _nearer_root(a1, size, root)
    sigma2 = _nearer_root(a2, size, root, tie=-sigma1)
    p_squared = arb(point.p_squared)
    return (
        _endpoint(m1, a1, sigma1, root, p_squared),
        _endpoint(m2, a2, sigma2, root, p_squared),
    )


def _endpoint(
    m_squared: ExactComplex, a: ExactComplex, sigma: int, root: Ball, p_squared: arb
) -> _Endpoint:
    signed = root if sigma > 0 else -root
    inverse = 2 / (a.ball() + signed)
    weight = m_squared.ball() * inverse
    return _Endpoint(m_squared, sigma, weight, p_squared * weight * inverse, signed * inverse)


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


def _endpoint_term(end: _Endpoint, tables: QuadraticTables) -> BallSeries:
    """Expand prefactor * weight * (m^2)^s * f(w)/(1+s)."""
    if real_part(end.w) <= HALF:
        value = tables.far.evaluate(-(-end.w).log1p())
    else:
        value = _near_one(end, tables)
    return times_mass_power(end.m_squared, value, tables.s0, constant=end.weight)


def _near_one(end: _Endpoint, tables: QuadraticTables) -> BallSeries:
    v, s0 = end.one_minus_w, tables.s0
    log_w = (-v).log1p()
    singular = tables.singular
    # v^(1+2s) w^(-1-s) at eps = 0
    constant = v / end.w if s0 == 0 else ((1 + 2 * s0) * v.log() - (1 + s0) * log_w).exp()
    singular = times_exponential(singular, log_w - 2 * v.log(), constant)
    return tables.near.evaluate(-log_w) + singular


def _between_roots(point: TwoPoint, sigma: int, tables: QuadraticTables) -> BallSeries:
    """Expand prefactor * T, the integral from one root of Q to the other."""
    height = point.kallen.scaled(-1 / point.p_squared).ball()  # 4 Q half-way between the roots
    logarithm = logarithm_below_cut(height)
    constant = sigma * point.kallen.ball().sqrt() / arb(point.p_squared)
    if tables.s0 != 0:
        constant = constant * (arb(tables.s0) * logarithm).exp()
    return times_exponential(tables.between_roots, -logarithm, constant)
