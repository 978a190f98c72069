"""Feynman-parameter moments: prefactor * Int_0^1 x^a (1-x)^b Q(x)^s dx with s = s0 - eps.

Q(x) = x m1^2 + (1-x) m2^2 - x(1-x) p^2 - i0 = p^2 x^2 + beta x + m2^2, beta = m1^2 - m2^2 - p^2.

Every integer-power two-point integral in every dimension is such a moment.  Which formula serves
a point is decided exactly, in this order:

=====================  ===========================================================================
both massless          Gamma functions: Q = -p^2 x(1-x)
p^2 = 0, m1 = m2       Q is constant
p^2 = 0                Q is linear in x: powers of the masses
lambda = 0             Q = p^2 (x-x0)^2: powers of the masses
otherwise              M_k = Int x^k Q^s by recurrence from M_0 (`loopint.integrals.quadratic`)
=====================  ===========================================================================

The recurrence is the integral of the derivative of x^(k-1) Q^(s+1),

    (k+1+2s) p^2 M_k = [x^(k-1) Q^(s+1)]_0^1 - beta (k+s) M_(k-1) - (k-1) m2^2 M_(k-2),

the one-variable form of integration by parts (Chetyrkin, Tkachov, Nucl. Phys. B192 (1981) 159).
A boundary term with a massless line is zero by analytic continuation in eps.  A factor k+1+2s that
vanishes at eps = 0 costs one order, which the tables provide.
"""

from __future__ import annotations

from functools import cached_property
from math import comb, factorial

from flint import acb, arb, fmpq

from loopint.core.gamma_factors import EpsilonFactor
from loopint.core.kinematics import Region, TwoPoint, logarithm_below_cut
from loopint.core.laurent import BallSeries
from loopint.core.numbers import Ball, ExactComplex, real_part
from loopint.core.precision import working_precision
from loopint.core.time_limit import check_time
from loopint.integrals.powers import (
    mass_power,
    over_linear,
    times_exponential,
    times_linear,
    times_mass_power,
)
from loopint.integrals.quadratic import (
    QuadraticTables,
    quadratic_power_integral,
    quadratic_tables,
)

ONE = ExactComplex(fmpq(1))


class FeynmanMoment:
    """prefactor * Int x^a (1-x)^b Q^(s0-eps), with its kinematics-independent tables.

    Parameters
    ----------
    a, b
        Integers >= 0.
    s0
        Integer or half-integer.
    prefactor
        Exact factor in front.
    highest
        Results are known at least through this order.
    bits
        The working precision the tables are made for.
    """

    def __init__(
        self, a: int, b: int, s0: fmpq, prefactor: EpsilonFactor, highest: int, bits: int
    ) -> None:
        self.a, self.b, self.s0, self.prefactor = a, b, s0, prefactor
        self.bits = bits
        self.highest = highest if s0 >= 0 else highest + 1  # a factor may vanish at eps = 0

    @cached_property
    def tables(self) -> QuadraticTables:
        """Tables of M_0."""
        return quadratic_tables(self.s0, self.prefactor, self.highest, self.bits)

    @cached_property
    def bare(self) -> BallSeries:
        """The prefactor alone."""
        return self._expanded(self.prefactor)

    @property
    def is_plain(self) -> bool:
        """Whether this is Gamma(eps) * measure * Int Q^(-eps) dx: d0 = 4, powers (1,1)."""
        return self.a == self.b == 0 and self.s0 == 0

    @cached_property
    def lead(self) -> Ball:
        """The first coefficient of the prefactor."""
        return self.prefactor.series(1).coefficients[0]

    @cached_property
    def without_two(self) -> tuple[BallSeries, int]:
        """The prefactor divided by 2^(k eps), and k."""
        factor, two = self.prefactor.split_two()
        return self._expanded(factor), two

    @cached_property
    def massless_factor(self) -> EpsilonFactor:
        """Prefactor * Gamma(a+1+s) Gamma(b+1+s) / Gamma(a+b+2+2s)."""
        gamma, s0 = EpsilonFactor.gamma, self.s0
        top = self.prefactor * gamma(self.a + 1 + s0, -1) * gamma(self.b + 1 + s0, -1)
        return top / gamma(self.a + self.b + 2 + 2 * s0, -2)

    @cached_property
    def massless(self) -> tuple[BallSeries, int]:
        """The expansion of `massless_factor` divided by 2^(k eps), and k."""
        factor, two = self.massless_factor.split_two()
        return self._expanded(factor), two

    def _expanded(self, factor: EpsilonFactor) -> BallSeries:
        with working_precision(self.bits + 32):
            return factor.series_through(self.highest)

    def integrate(self, point: TwoPoint) -> BallSeries:
        """Expand the moment at a point that is not scaleless."""
        m1, m2 = point.m1_squared, point.m2_squared
        if m1.is_zero and m2.is_zero:
            return self._both_massless(point)
        if point.p_squared == 0:
            if m1 == m2:
                return self._constant(m1)
            return (
                self._one_massless(point, 1) if m1.is_zero or m2.is_zero else self._linear(m1, m2)
            )
        if point.kallen.is_zero:
            if m1.is_zero or m2.is_zero:
                return self._one_massless(point, 2)
            return self._equal_masses(m1) if m1 == m2 else self._square(point)
        if kummer_line(point, self.a, self.b) is not None:
            return self._kummer(point)
        return self._recurrence(point)

    def _both_massless(self, point: TwoPoint) -> BallSeries:
        factor, two = self.massless
        logarithm = logarithm_below_cut(arb(-point.p_squared))
        constant = arb(1) if self.s0 == 0 else (arb(self.s0) * logarithm).exp()
        base = logarithm_below_cut(arb(-point.p_squared * fmpq(2) ** -two))
        return times_exponential(factor, -base).scaled(constant)

    def _constant(self, m_squared: ExactComplex) -> BallSeries:
        a, b = self.a, self.b
        beta = fmpq(factorial(a) * factorial(b), factorial(a + b + 1))
        bare, two = self.without_two
        return times_mass_power(m_squared, bare, self.s0, two).scaled(beta)

    def _one_massless(self, point: TwoPoint, zeros: int) -> BallSeries:
        """Integrate where Q = m^2 y^zeros, y vanishing at the massless end: Euler's beta integral.

        One massless line at p^2 = 0 (zeros = 1) or on shell (zeros = 2).
        """
        gamma, s0 = EpsilonFactor.gamma, self.s0
        massless, massive, m = self.b, self.a, point.m2_squared
        if point.m2_squared.is_zero:
            massless, massive, m = self.a, self.b, point.m1_squared
        factor = self.prefactor * gamma(massless + 1 + zeros * s0, -zeros) * gamma(massive + 1, 0)
        factor = factor / gamma(massless + massive + 2 + zeros * s0, -zeros)
        factor, two = factor.split_two()
        return times_mass_power(m, self._expanded(factor), s0, two)

    def _kummer(self, point: TwoPoint) -> BallSeries:
        """Integrate at p^2 = -m^2, one line massless and the power of the other one.

        The Gauss function of Boos and Davydychev (`loopint.integrals.propagator`) is Kummer's,
        2F1(a, b; 1+a-b; -1) (DLMF 15.4.26): with n the massless power,
        Gamma(1+s) Gamma(1+n/2) / (n Gamma(1+n/2+s)) (m^2)^s.
        """
        m = kummer_line(point, self.a, self.b)
        assert m is not None
        gamma, s0, n = EpsilonFactor.gamma, self.s0, self.a + self.b + 1
        top = self.prefactor * gamma(1 + s0, -1) * gamma(1 + fmpq(n, 2), 0)
        factor = top / gamma(1 + fmpq(n, 2) + s0, -1) / EpsilonFactor.constant(n)
        factor, two = factor.split_two()
        return times_mass_power(m, self._expanded(factor), s0, two)

    def _equal_masses(self, m_squared: ExactComplex) -> BallSeries:
        """Integrate at p^2 = 4 m^2, where Q = 4 m^2 y^2 with y = x - 1/2.

        As in `_square`, but both ends have the same power: what is beside it is rational in eps.
        """
        half = fmpq(1, 2)
        x0, unit = ExactComplex(half), ONE
        coefficients = _product_of_powers([x0, unit], self.a, [x0, -unit], self.b)
        pole: fmpq | None = None
        terms = self.highest - self.prefactor.lowest_order + 1
        if terms <= 0:
            return BallSeries.zero(self.highest)
        regular = [fmpq(0)] * terms
        for j in range(0, len(coefficients), 2):
            exponent = j + 1 + 2 * self.s0
            c = 2 * coefficients[j].re * half ** (j + 1)
            if exponent == 0:
                pole = -c / 2
                continue
            for n in range(terms):  # c / (exponent - 2 eps)
                regular[n] += c * fmpq(2) ** n / exponent ** (n + 1)
        factor, two = self.prefactor.split_two()
        if pole is None:
            exact, shift = regular, 0
        else:
            exact, shift = [pole, *regular[:-1]], -1
        series = factor.series_times([ExactComplex(c) for c in exact]).shifted(shift)
        return times_mass_power(m_squared, series, self.s0, two)

    def _linear(self, m1: ExactComplex, m2: ExactComplex) -> BallSeries:
        """Use y = Q as variable: x = (y - m2^2)/delta, 1-x = (m1^2 - y)/delta."""
        delta = m1 - m2
        inverse = ONE / delta
        x = [-(m2 * inverse), inverse]
        rest = [m1 * inverse, -inverse]
        coefficients = _product_of_powers(x, self.a, rest, self.b)
        ends = [m for m in (m1, m2) if not m.is_zero]
        total: BallSeries | None = None
        for j, c in enumerate(coefficients):
            if c.is_zero:
                continue
            exponent = self.s0 + j + 1
            part = None
            for m in ends:
                term = times_mass_power(m, self.bare, exponent)
                term = term if m is m1 else -term
                part = term if part is None else part + term
            assert part is not None
            part = over_linear(part, exponent, -1).scaled((c * inverse).ball())
            total = part if total is None else total + part
        assert total is not None
        return total

    def _square(self, point: TwoPoint) -> BallSeries:
        """Integrate powers of y = x - x0 where Q = p^2 y^2.

        Int_0^1 y^j |y|^(2s) (p^2)^s dx
            = [(1-x0)^(j+1) (m1^2)^s - (-x0)^(j+1) (m2^2)^s] / (j+1+2s),

        also at threshold, where 0 < x0 < 1.  If j+1+2s0 = 0 both powers at eps = 0 are +-(p^2)^s0:
        they are taken out, so that they cancel exactly where they do.
        """
        right, left, coefficients = self._around_double_root(point)
        ends = [
            (m, length, sign)
            for m, length, sign in (
                (point.m1_squared, right, 1),
                (point.m2_squared, left, -1),
            )
            if not m.is_zero
        ]
        total: BallSeries | None = None
        for j, c in enumerate(coefficients):
            if c == 0:
                continue
            exponent = j + 1 + 2 * self.s0
            parts = []
            for m, length, sign in ends:
                power, logarithm = mass_power(m, self.s0)
                if exponent == 0:
                    scale: Ball | int = sign * self._sign_of_root(point, m, length)
                else:
                    scale = sign * length ** (j + 1) * power
                parts.append(times_exponential(self.bare, -logarithm).scaled(scale))
            part = parts[0] if len(parts) == 1 else parts[0] + parts[1]
            part = over_linear(part, exponent, -2).scaled(c)
            if exponent == 0:
                part = part.scaled(self._p_squared_power(point))
            total = part if total is None else total + part
        assert total is not None
        if not point.snapped and self._leading_square_vanishes(point):
            lead = total.lowest
            total = BallSeries(lead, [arb(0), *total.coefficients[1:]])
        return total.map(real_part) if point.masses_are_real else total

    def _leading_square_vanishes(self, point: TwoPoint) -> bool:
        """Whether the sum of `_square` at eps = 0, p^2 to a power times a rational, is zero."""
        half = fmpq(1, 2)
        x0 = ExactComplex(half) - (point.m1_squared - point.m2_squared).scaled(
            half / point.p_squared
        )
        total = ExactComplex(fmpq(0))
        ends = ((point.m1_squared, ONE - x0, 1), (point.m2_squared, -x0, -1))
        for j, c in enumerate(_product_of_powers([x0, ONE], self.a, [ONE - x0, -ONE], self.b)):
            exponent = j + 1 + 2 * self.s0
            if c.is_zero:
                continue
            if exponent == 0:
                return False
            for m, length, sign in ends:
                # length^(j+1) (m^2)^s0, where m = +-length sqrt(p^2)
                root = self._sign_of_root(point, m, length.ball())
                power = _integer_power(length, int(exponent.p))
                total = total + (c * power).scaled(sign * root / exponent)
        return total.is_zero

    def _around_double_root(self, point: TwoPoint) -> tuple[Ball, Ball, list[Ball]]:
        """Return 1-x0, -x0 and the coefficients of x^a (1-x)^b in powers of x - x0."""
        if point.snapped:
            m1, m2 = arb(point.m1_squared.re).sqrt(), arb(point.m2_squared.re).sqrt()
            if point.snapped_onto is Region.PSEUDOTHRESHOLD:
                m2 = -m2
            right, left = m1 / (m1 + m2), -m2 / (m1 + m2)
            x, rest = [-left, arb(1)], [right, arb(-1)]
            return right, left, _ball_product_of_powers(x, self.a, rest, self.b)
        twice_p = ExactComplex(2 * point.p_squared)
        difference = point.m1_squared - point.m2_squared
        x0 = (ExactComplex(point.p_squared) - difference) / twice_p
        exact = _product_of_powers([x0, ONE], self.a, [ONE - x0, -ONE], self.b)
        return (ONE - x0).ball(), (-x0).ball(), [c.ball() for c in exact]

    def _sign_of_root(self, point: TwoPoint, m: ExactComplex, length: Ball) -> int:
        """Return the sign of length^(j+1) (m^2)^s0 relative to (p^2)^s0, j = -1-2 s0."""
        if self.s0.q == 1:
            return 1
        root = m.ball().sqrt() / (length * _square_root(point.p_squared_ball))  # +-1
        return 1 if real_part(root) > 0 else -1

    def _p_squared_power(self, point: TwoPoint) -> Ball:
        p_squared = point.p_squared_ball
        if self.s0.q == 1:
            return p_squared ** int(self.s0.p)
        return _square_root(p_squared) ** int(self.s0.p)

    def _recurrence(self, point: TwoPoint) -> BallSeries:
        top = self.a + self.b
        if top == 0:
            return quadratic_power_integral(point, self.tables)
        a, b = self.a, self.b
        if point.m1_squared.norm < point.m2_squared.norm:
            # From the end of the lighter line: the roots of Q, by powers of which errors grow, are
            # smaller.  Near p^2 = m^2 with a massless line they are next to x = 0.
            point, a, b = point.exchanged(), b, a
        moments = [quadratic_power_integral(point, self.tables)]
        m1, m2 = point.m1_squared, point.m2_squared
        inverse_p = 1 / arb(point.p_squared)
        beta = (m1 - m2 - ExactComplex(point.p_squared)).ball()
        at_one = self._boundary(m1)
        at_zero = self._boundary(m2)
        for k in range(1, top + 1):
            check_time()
            right = times_linear(moments[k - 1], k + self.s0, -1).scaled(-beta)
            if at_one is not None:
                right = right + at_one
            if k == 1 and at_zero is not None:
                right = right - at_zero
            if k > 1 and not m2.is_zero:
                right = right - moments[k - 2].scaled((k - 1) * m2.ball())
            moments.append(over_linear(right, k + 1 + 2 * self.s0, -2).scaled(inverse_p))
        total = moments[a]
        for j in range(1, b + 1):
            total = total + moments[a + j].scaled((-1) ** j * comb(b, j))
        return total

    def _boundary(self, m_squared: ExactComplex) -> BallSeries | None:
        """Expand prefactor * (m^2)^(s+1), or None for a massless end."""
        if m_squared.is_zero:
            return None
        return times_mass_power(m_squared, self.bare, self.s0 + 1)


def kummer_line(point: TwoPoint, a: int, b: int) -> ExactComplex | None:
    """Return m^2 if p^2 = -m^2, the other line is massless and m has the power one."""
    m1, m2 = point.m1_squared, point.m2_squared
    m, raised = (m2, b) if m1.is_zero else (m1, a)
    if raised or not (m1.is_zero or m2.is_zero) or m != ExactComplex(-point.p_squared):
        return None
    return m


def _integer_power(base: ExactComplex, exponent: int) -> ExactComplex:
    result = ONE
    for _ in range(abs(exponent)):
        result = result * base
    return result if exponent >= 0 else ONE / result


def _square_root(x: arb) -> Ball:
    return x.sqrt() if x > 0 else acb(0, (-x).sqrt())


def ultraviolet_moment(point: TwoPoint, a: int, b: int, s0: int) -> ExactComplex:
    """Return Int_0^1 x^a (1-x)^b Q^s0 exactly, for an integer s0 >= 0: the ultraviolet pole."""
    p = ExactComplex(point.p_squared)
    q = [point.m2_squared, point.m1_squared - point.m2_squared - p, p]
    zero = ExactComplex(fmpq(0))
    powers = _product_of_powers([zero, ONE], a, [ONE, -ONE], b)
    for _ in range(s0):
        powers = _polynomial_product(powers, q)
    total = zero
    for n, c in enumerate(powers):
        total = total + c.scaled(fmpq(1, n + 1))
    return total


def _polynomial_product(a: list[ExactComplex], b: list[ExactComplex]) -> list[ExactComplex]:
    result = [ExactComplex(fmpq(0))] * (len(a) + len(b) - 1)
    for i, x in enumerate(a):
        for j, y in enumerate(b):
            result[i + j] = result[i + j] + x * y
    return result


def _product_of_powers(
    x: list[ExactComplex], a: int, y: list[ExactComplex], b: int
) -> list[ExactComplex]:
    """Return the coefficients of x^a y^b for two polynomials."""
    result = [ONE]
    for _ in range(a):
        result = _polynomial_product(result, x)
    for _ in range(b):
        result = _polynomial_product(result, y)
    return result


def _ball_product_of_powers(x: list[arb], a: int, y: list[arb], b: int) -> list[Ball]:
    result: list[Ball] = [arb(1)]
    for factor in [x] * a + [y] * b:
        low = [c * factor[0] for c in result] + [arb(0)]
        high = [arb(0)] + [c * factor[1] for c in result]
        result = [u + v for u, v in zip(low, high, strict=True)]
    return result
