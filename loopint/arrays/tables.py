"""Double-precision polynomials cut from the kinematics-independent tables of ball arithmetic."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from flint import arb, fmpq

from loopint.arrays.rounding import UNIT, Number
from loopint.core.gamma_factors import EpsilonFactor
from loopint.core.laurent import BallSeries
from loopint.core.numbers import real_part
from loopint.core.precision import working_precision
from loopint.hypergeometric.tables import EpsilonTable
from loopint.integrals.quadratic import quadratic_tables

TABLE_BITS = 128
REAL_RADIUS = 0.6932  # log 2 and rounding
COMPLEX_RADIUS = 17 / 16  # pi/3 and rounding
GOAL = 2.0**-55  # of the truncation error
REAL_STEP, COMPLEX_STEP = 2.0, 3.3  # rounding of one step of Horner's rule, units of UNIT


@dataclass(frozen=True, slots=True)
class Polynomial:
    """A polynomial in u for |u| <= radius with proven errors, in units of UNIT.

    The error of its value is at most `error` + `slope` * (error of u): with coefficients c_n,
    Horner's rule gives sum (step n + 2) |c_n| r^n, which includes the rounding of c_n.
    """

    coefficients: tuple[float, ...]
    radius: float
    error: float
    slope: float

    def __call__(self, u: Number) -> Number:
        """Evaluate by Horner's rule.

        Two buffers: NumPy rounds complex products in place differently for single numbers.
        """
        value = np.full(u.shape, self.coefficients[-1], dtype=u.dtype)
        other = np.empty_like(value)
        for c in self.coefficients[-2::-1]:
            np.multiply(value, u, out=other)
            other += c
            value, other = other, value
        return value


@dataclass(frozen=True, slots=True)
class PolynomialTable:
    """One polynomial for each power of epsilon.

    `sizes[k]` bounds the k-th one for |u| <= radius; every error is at most `error` + `slope` *
    (error of u), relative to that size.
    """

    polynomials: tuple[Polynomial, ...]
    sizes: tuple[float, ...]
    error: float
    slope: float


@dataclass(frozen=True, slots=True)
class DoubleTables:
    """`loopint.integrals.quadratic.QuadraticTables` for s = -eps in doubles.

    `far_slope` is the derivative of `far` with respect to u.
    """

    far: PolynomialTable
    far_slope: PolynomialTable
    near: PolynomialTable
    singular: list[float]
    between_roots: list[float]


@lru_cache(maxsize=16)
def double_tables(highest: int, real: bool) -> DoubleTables:
    """Return the tables through order `highest`, for real or for complex arguments."""
    tables = quadratic_tables(fmpq(0), EpsilonFactor(), highest, TABLE_BITS)
    return DoubleTables(
        _polynomials(tables.far, highest, real),
        _polynomials(tables.far, highest, real, slopes=True),
        _polynomials(tables.near, highest, real),
        rounded_series(tables.singular, highest),
        rounded_series(tables.between_roots, highest),
    )


def rounded_series(series: BallSeries, highest: int) -> list[float]:
    """Return the real coefficients of eps^0 ... eps^highest, rounded within UNIT."""
    return [float(real_part(series[k]).mid()) for k in range(highest + 1)]


def remainders(series: BallSeries, rounded: list[float]) -> list[float]:
    """Return what `rounded_series` leaves, again rounded."""
    return [float((real_part(series[k]) - arb(c)).mid()) for k, c in enumerate(rounded)]


def _polynomials(
    table: EpsilonTable, highest: int, real: bool, slopes: bool = False
) -> PolynomialTable:
    radius = REAL_RADIUS if real else COMPLEX_RADIUS
    step = REAL_STEP if real else COMPLEX_STEP
    assert table.lowest == 0
    with working_precision(TABLE_BITS):
        if slopes:
            pieces = _differentiated(table, radius)[: highest + 1]
        else:
            pieces = table.shortest(arb(radius), arb(GOAL))[: highest + 1]
    polynomials, sizes = [], []
    for coefficients, tail in pieces:
        rounded = tuple(float(c.mid()) for c in coefficients)
        terms = [abs(c) * radius**n for n, c in enumerate(rounded)]
        error = sum((step * n + 2) * term for n, term in enumerate(terms))
        slope = sum(n * abs(c) * radius ** (n - 1) for n, c in enumerate(rounded) if n)
        polynomials.append(
            Polynomial(rounded, radius, 1.001 * (error + float(tail) / UNIT), 1.001 * slope)
        )
        sizes.append(1.001 * sum(terms))
    pairs = [pair for pair in zip(polynomials, sizes, strict=True) if pair[1] > 0]
    return PolynomialTable(
        tuple(polynomials),
        tuple(sizes),
        max(polynomial.error / bound for polynomial, bound in pairs),
        max(polynomial.slope / bound for polynomial, bound in pairs),
    )


def _differentiated(table: EpsilonTable, radius: float) -> list[tuple[list[arb], arb]]:
    """Return the derivatives' coefficients and tails.

    With N terms kept, sum_{n>=N} n |c_n| r^(n-1) <= (N/r) (r/R)^N sum_{n>=N} |c_n| R^n for
    R = 1.5 r, because n (r/R)^n falls for n >= 3.
    """
    pieces = []
    for coefficients, tail in table.shortest(arb(1.5 * radius), arb(GOAL)):
        terms = max(len(coefficients), 3)
        more = tail * terms / radius * arb(1.5) ** -terms
        slopes = [n * c for n, c in enumerate(coefficients)][1:]
        pieces.append((slopes or [arb(0)], more.upper()))
    return pieces
