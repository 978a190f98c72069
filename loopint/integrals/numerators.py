"""Bubbles in which one power is zero or negative: tadpoles with a numerator.

With euclidean sign, D1 = m1^2 - q^2, and j = -n2 >= 0,

    m2^2 - (q+p)^2 = X + D1 - 2 q.p,        X = m2^2 - m1^2 - p^2,

whose j-th power is expanded; odd powers of q.p integrate to zero, and even ones average to

    (2 q.p)^(2b) -> (4 p^2 q^2)^b (1/2)_b/(d/2)_b,        q^2 = m1^2 - D1.

Everything becomes tadpoles A(n) = A(1) (1-d/2)_(n-1)/(n-1)! (m1^2)^(1-n), so the sum is A(1) times
a rational function of eps with exact coefficients: what cancels, cancels exactly.
"""

from __future__ import annotations

from math import comb, factorial

from flint import fmpq

from loopint.core.numbers import ExactComplex

EpsilonSeries = list[ExactComplex]
ZERO = ExactComplex(fmpq(0))


def tadpole_ratio(
    p_squared: fmpq,
    m1_squared: ExactComplex,
    m2_squared: ExactComplex,
    power: int,
    numerator: int,
    dimension: int,
    terms: int,
) -> EpsilonSeries:
    """Return B(power, -numerator)/A(1) as the first `terms` exact coefficients in eps.

    Parameters
    ----------
    power
        n1 >= 1.
    numerator
        j = -n2 >= 0.
    m1_squared
        Nonzero.
    """
    x = m2_squared - m1_squared - ExactComplex(p_squared)
    total: EpsilonSeries = [ZERO] * terms
    for b in range(numerator // 2 + 1):
        average = _average(b, dimension, terms)
        for a in range(numerator - 2 * b + 1):
            i = numerator - 2 * b - a
            multinomial = factorial(numerator) // (factorial(i) * factorial(a) * factorial(2 * b))
            outer = _power(x, i).scaled(fmpq(multinomial) * (4 * p_squared) ** b)
            if outer.is_zero:
                continue
            for c in range(b + 1):
                n = power - a - c
                if n <= 0:
                    continue
                weight = outer * _power(m1_squared, b - c).scaled(fmpq((-1) ** c * comb(b, c)))
                weight = weight / _power(m1_squared, n - 1)
                series = _product(average, _pochhammer(n - 1, dimension, terms))
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


def _pochhammer(n: int, dimension: int, terms: int) -> list[fmpq]:
    """Expand (1 - d/2)_n / n! in eps."""
    result = [fmpq(1, factorial(n))] + [fmpq(0)] * (terms - 1)
    for j in range(n):
        constant = 1 - fmpq(dimension, 2) + j  # constant + eps
        result = [result[k] * constant + (result[k - 1] if k else fmpq(0)) for k in range(terms)]
    return result


def _product(a: list[fmpq], b: list[fmpq]) -> list[fmpq]:
    return [sum((a[j] * b[n - j] for j in range(n + 1)), start=fmpq(0)) for n in range(len(a))]


def _power(base: ExactComplex, exponent: int) -> ExactComplex:
    result = ExactComplex(fmpq(1))
    for _ in range(exponent):
        result = result * base
    return result
