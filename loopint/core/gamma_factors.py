"""Prefactors built from Gamma functions of a + b eps, held exactly until they are expanded.

For integer or half-integer a every such product is, by Gamma(x+1) = x Gamma(x) (DLMF 5.5.1) and
the duplication formula Gamma(1/2+x) = 2^(1-2x) sqrt(pi) Gamma(2x)/Gamma(x) (DLMF 5.5.5),

    rational * eps^n * sqrt(pi)^j * prod (1 + r eps)^k
             * exp( eps (c_gamma gamma_E + c_2 log 2 + c_pi log pi) ) * prod Gamma(1 + b eps)^k

with rational r, b, c and integer n, j, k, and

    log Gamma(1+x) = -gamma_E x + sum_{k>=2} zeta(k) (-x)^k / k          (DLMF 5.7.3).

All cancellations (poles against zeros, gamma_E against gamma_E) therefore happen in rational
numbers: the pole order is known, and coefficients that vanish are exact zeros.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, replace
from functools import lru_cache

from flint import arb, fmpq

from loopint.core.errors import UnregulatedError
from loopint.core.laurent import BallSeries, convolve
from loopint.core.numbers import ZERO, ExactComplex
from loopint.core.precision import current_bits

Powers = tuple[tuple[fmpq, int], ...]
ONE = fmpq(1)


def _merge(a: Powers, b: Powers) -> Powers:
    total: Counter[fmpq] = Counter()
    for rate, power in (*a, *b):
        total[rate] += power
    return tuple(sorted((rate, power) for rate, power in total.items() if power and rate != 0))


@dataclass(frozen=True, slots=True)
class EpsilonFactor:
    """An exact prefactor; see the module text for the form.

    Examples
    --------
    >>> (EpsilonFactor.gamma(-1, 1) / EpsilonFactor.gamma(2, 1)).lowest_order
    -1
    """

    rational: fmpq = ONE
    lowest_order: int = 0
    sqrt_pi: int = 0
    linear: Powers = ()
    euler: fmpq = ZERO
    log_two: fmpq = ZERO
    log_pi: fmpq = ZERO
    gammas: Powers = ()

    @classmethod
    def gamma(cls, a: fmpq | int, b: fmpq | int) -> EpsilonFactor:
        """Return Gamma(a + b eps) for integer or half-integer a.

        Raises
        ------
        UnregulatedError
            If b = 0 and a is an integer <= 0: a pole that no epsilon moves.
        """
        a, b = fmpq(a), fmpq(b)
        if a.q == 1:
            steps, base = int(a.p) - 1, cls(gammas=_merge((), ((b, 1),)))
        elif a.q == 2:
            steps = (int(a.p) - 1) // 2
            base = cls(
                sqrt_pi=1, log_two=-2 * b, gammas=_merge(((2 * b, 1),), ((b, -1),))
            )  # Gamma(1/2 + b eps)
        else:
            raise ValueError(f"Gamma({a} + {b} eps): the constant must be a multiple of 1/2")
        start = a - steps
        if steps >= 0:
            for j in range(steps):
                base = base * cls.linear_factor(start + j, b)
        else:
            for j in range(1, -steps + 1):
                base = base / cls.linear_factor(start - j, b)
        return base

    @classmethod
    def linear_factor(cls, a: fmpq | int, b: fmpq | int) -> EpsilonFactor:
        """Return a + b eps; exactly zero is refused with `UnregulatedError`."""
        a, b = fmpq(a), fmpq(b)
        if a != 0:
            return cls(rational=a, linear=_merge((), ((b / a, 1),)))
        if b != 0:
            return cls(rational=b, lowest_order=1)
        raise UnregulatedError(
            "a Gamma function sits on a pole at every eps: these powers are not regulated "
            "dimensionally"
        )

    @classmethod
    def constant(cls, value: fmpq | int) -> EpsilonFactor:
        """Return a rational constant different from zero."""
        return cls(rational=fmpq(value))

    def __mul__(self, other: EpsilonFactor) -> EpsilonFactor:
        return EpsilonFactor(
            self.rational * other.rational,
            self.lowest_order + other.lowest_order,
            self.sqrt_pi + other.sqrt_pi,
            _merge(self.linear, other.linear),
            self.euler + other.euler,
            self.log_two + other.log_two,
            self.log_pi + other.log_pi,
            _merge(self.gammas, other.gammas),
        )

    def inverse(self) -> EpsilonFactor:
        """Return one over the factor."""
        return EpsilonFactor(
            1 / self.rational,
            -self.lowest_order,
            -self.sqrt_pi,
            tuple((rate, -power) for rate, power in self.linear),
            -self.euler,
            -self.log_two,
            -self.log_pi,
            tuple((rate, -power) for rate, power in self.gammas),
        )

    def __truediv__(self, other: EpsilonFactor) -> EpsilonFactor:
        return self * other.inverse()

    def split_two(self) -> tuple[EpsilonFactor, int]:
        """Return the factor without 2^(k eps), and the integer k.

        2^(k eps) (m^2)^(-eps) = (m^2/2^k)^(-eps) has an exact base, so that a logarithm which
        vanishes does so exactly.

        Examples
        --------
        >>> EpsilonFactor.gamma(fmpq(1, 2), 1).split_two()[1]
        -2
        """
        whole = int(self.log_two.floor())
        return replace(self, log_two=self.log_two - whole), whole

    def series(self, terms: int) -> BallSeries:
        """Expand to `terms` orders, starting at `lowest_order`, at the working precision."""
        return _expand(self, terms, current_bits())

    def series_times(self, exact: list[ExactComplex]) -> BallSeries:
        """Expand the factor times a power series with exact coefficients, to as many orders.

        What is rational in the factor is multiplied exactly, so that what cancels is exactly zero.
        """
        terms = len(exact)
        rational = _rational_part(self, terms)
        product = [
            sum((exact[j].scaled(rational[n - j]) for j in range(n + 1)), start=ExactComplex(ZERO))
            for n in range(terms)
        ]
        rest = replace(self, linear=()).series(terms)
        coefficients = convolve([c.ball() for c in product], rest.coefficients, terms)
        return BallSeries(self.lowest_order, coefficients)

    def series_through(self, highest: int) -> BallSeries:
        """Expand through order `highest`; exactly zero if that is below the lowest order."""
        terms = highest - self.lowest_order + 1
        return self.series(terms) if terms > 0 else BallSeries.zero(highest)


@lru_cache(maxsize=512)
def _expand(factor: EpsilonFactor, terms: int, bits: int) -> BallSeries:  # noqa: ARG001 - cache key
    body = _exponential_part(factor, terms)
    rational = _rational_part(factor, terms)
    lead = arb(factor.rational)
    if factor.sqrt_pi:
        root = arb.pi().sqrt()
        lead = lead * (root**factor.sqrt_pi)
    product = convolve([arb(c) for c in rational], list(body), terms)
    return BallSeries(factor.lowest_order, [lead * c for c in product])


def _rational_part(factor: EpsilonFactor, terms: int) -> list[fmpq]:
    """Expand prod (1 + r eps)^k exactly."""
    result = [ONE] + [ZERO] * (terms - 1)
    for rate, power in factor.linear:
        for _ in range(abs(power)):
            if power > 0:
                for n in range(terms - 1, 0, -1):
                    result[n] += rate * result[n - 1]
            else:
                for n in range(1, terms):
                    result[n] -= rate * result[n - 1]
    return result


def _exponential_part(factor: EpsilonFactor, terms: int) -> list[arb]:
    """Expand exp( sum_k s_k eps^k ) by n e_n = sum_k k s_k e_(n-k)."""
    exponent = [arb(0)]
    for k in range(1, terms):
        weight = sum(((-rate) ** k * power for rate, power in factor.gammas), start=ZERO) / fmpq(k)
        if k == 1:
            rate = factor.euler + weight  # log Gamma(1+x) = -gamma_E x + ...
            total = _scaled(rate, arb.const_euler())
            total = total + _scaled(factor.log_two, arb.const_log2())
            exponent.append(total + _scaled(factor.log_pi, arb.pi().log()))
        else:
            exponent.append(_scaled(weight, _zeta(k)))
    result = [arb(1)]
    for n in range(1, terms):
        total = arb(0)
        for k in range(1, n + 1):
            if exponent[k] != 0 and result[n - k] != 0:
                total = total + k * exponent[k] * result[n - k]
        result.append(total / n)
    return result


def _scaled(weight: fmpq, value: arb) -> arb:
    return arb(0) if weight == 0 else arb(weight) * value


def _zeta(k: int) -> arb:
    return arb(k).zeta()
