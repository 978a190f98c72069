"""Two-point integrals in which the power of one line is an integer <= 0: tadpoles with a numerator.

With euclidean sign, D1 = m1^2 - q^2, j = -n2 >= 0 and any power nu of the first line,

    m2^2 - (q+p)^2 = X + D1 - 2 q.p,        X = m2^2 - m1^2 - p^2,

whose j-th power is expanded; odd powers of q.p integrate to zero, and even ones average to

    (2 q.p)^(2b) -> (4 p^2 q^2)^b (1/2)_b/(d/2)_b,        q^2 = m1^2 - D1.

Everything becomes tadpoles A(nu-k), 0 <= k <= j, and with i = j - k and mu = nu - j

    A(nu-k) = Gamma(mu-d/2)/Gamma(nu) (mu-d/2)_i (mu+i)_(j-i) (m1^2)^(d/2-mu-i),

so the sum is one Gamma prefactor times a power series in eps with exact coefficients: what cancels,
cancels exactly, and tadpoles with a power <= 0 drop out by themselves.
"""

from __future__ import annotations

from math import comb, factorial

from flint import fmpq

from loopint.core.conventions import Measure
from loopint.core.epsilon_linear import EpsilonLinear, gamma_ratio
from loopint.core.kinematics import TwoPoint
from loopint.core.laurent import BallSeries
from loopint.core.numbers import ExactComplex
from loopint.integrals.powers import times_mass_exponent

ZERO = ExactComplex(fmpq(0))


def numerator_series(
    point: TwoPoint,
    power: EpsilonLinear,
    numerator: int,
    dimension: int,
    highest: int,
    measure: Measure,
) -> BallSeries:
    """Expand measure * B(power, -numerator) through order `highest`.

    Parameters
    ----------
    point
        The line with the power comes first; its mass is not zero.
    power
        nu, an integer plus a multiple of eps.
    numerator
        j >= 0.

    Raises
    ------
    UnregulatedError
        If the tadpoles have a pole at every eps.
    """
    half = EpsilonLinear.of(fmpq(dimension, 2), -1)
    lowest_power = power - numerator
    ratio = gamma_ratio((lowest_power - half,), (power,))
    if ratio is None:  # a power <= 0 on both lines
        return BallSeries.zero(highest)
    factor = measure.factor(dimension) * ratio
    terms = highest - factor.lowest_order + 1
    if terms <= 0:
        return BallSeries.zero(highest)
    exact = _sum_of_tadpoles(point, power, numerator, dimension, terms)
    series = factor.series_times(exact)
    return times_mass_exponent(point.m1_squared, series, half - power)


def _sum_of_tadpoles(
    point: TwoPoint, power: EpsilonLinear, j: int, dimension: int, terms: int
) -> list[ExactComplex]:
    """Return the exact coefficients beside Gamma(mu-d/2)/Gamma(nu) (m1^2)^(d/2-nu)."""
    m1, m2 = point.m1_squared, point.m2_squared
    x = m2 - m1 - ExactComplex(point.p_squared)
    lowest_power = power - j
    over_half = lowest_power - EpsilonLinear.of(fmpq(dimension, 2), -1)
    tadpoles = [
        _product(_rising(over_half, i, terms), _rising(lowest_power + i, j - i, terms))
        for i in range(j + 1)
    ]
    total = [ZERO] * terms
    for b in range(j // 2 + 1):
        average = _average(b, dimension, terms)
        for a in range(j - 2 * b + 1):
            rest = j - 2 * b - a
            multinomial = factorial(j) // (factorial(rest) * factorial(a) * factorial(2 * b))
            outer = _power(x, rest).scaled(fmpq(multinomial) * (4 * point.p_squared) ** b)
            if outer.is_zero:
                continue
            for c in range(b + 1):
                i = j - a - c
                weight = outer * _power(m1, b - c + j - i).scaled(fmpq((-1) ** c * comb(b, c)))
                series = _product(average, tadpoles[i])
                total = [t + weight.scaled(r) for t, r in zip(total, series, strict=True)]
    return total


def _average(b: int, dimension: int, terms: int) -> list[fmpq]:
    """Expand (1/2)_b / (d/2)_b in eps, d/2 = dimension/2 - eps."""
    result = [fmpq(1)] + [fmpq(0)] * (terms - 1)
    for j in range(b):
        constant = fmpq(dimension, 2) + j
        inverse = [fmpq(1) / constant ** (n + 1) for n in range(terms)]  # 1/(constant - eps)
        result = [c * fmpq(2 * j + 1, 2) for c in _product(result, inverse)]
    return result


def _rising(start: EpsilonLinear, n: int, terms: int) -> list[fmpq]:
    """Expand the Pochhammer symbol (start)_n in eps."""
    result = [fmpq(1)] + [fmpq(0)] * (terms - 1)
    for j in range(n):
        constant = start.constant + j
        result = [
            result[k] * constant + (result[k - 1] * start.rate if k else fmpq(0))
            for k in range(terms)
        ]
    return result


def _product(a: list[fmpq], b: list[fmpq]) -> list[fmpq]:
    return [sum((a[j] * b[n - j] for j in range(n + 1)), start=fmpq(0)) for n in range(len(a))]


def _power(base: ExactComplex, exponent: int) -> ExactComplex:
    result = ExactComplex(fmpq(1))
    for _ in range(exponent):
        result = result * base
    return result
