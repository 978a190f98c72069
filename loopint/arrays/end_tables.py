"""Polynomials in double precision for the two ends of the Feynman-parameter interval.

Power series with ball coefficients are cut to the shortest polynomials that serve: on a real
interval by re-expansion in Chebyshev polynomials, whose dropped coefficients bound the error as
|T_n| <= 1; on a disc by the sum of the dropped terms.  Both bounds include the tail of the power
series itself.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from itertools import product
from math import comb, factorial

import numpy as np
from flint import acb, arb, arb_poly, fmpq

from loopint.arrays.rounding import UNIT, Number, Real
from loopint.core.conventions import Measure
from loopint.core.gamma_factors import EpsilonFactor
from loopint.core.numbers import real_part
from loopint.core.precision import working_precision
from loopint.integrals.quadratic import quadratic_tables

GAUSS_BITS = 420  # long enough series for arguments as large as pi
BITS = 600
SERIES_RADIUS = 1.75  # of u, with room for derivatives
GOAL = 2.0**-53  # of the truncation error
REAL_STEP, COMPLEX_STEP = 2.0, 3.3  # rounding of one step of Horner's rule, in units of UNIT

FAR_REAL = (-0.6932, 1.3864)  # u = -log(1-w) from -log 2 to log 4
NEAR_REAL = (-2.4675, 0.0208)  # t = (log w)^2/4 from -pi^2/4 to (log 4/3)^2/4
FAR_COMPLEX = 89 / 64  # |u| where |w| <= 1 and Re w <= 3/4
NEAR_COMPLEX = 17 / 128  # |t| where |w| <= 1 and Re w >= 3/4


@dataclass(frozen=True, slots=True)
class EndTable:
    """One polynomial in x - centre, |x - centre| <= radius, for each power of epsilon from eps^0.

    `sizes[k]` bounds the k-th one; its error is at most `error` + `slope` * (error of x), in units
    of UNIT and relative to that size: Horner's rule gives sum (step n + 2) |c_n| r^n, including the
    rounding of c_n, and the rounding of x - centre is counted as an error of x.
    """

    centre: float
    radius: float
    coefficients: Real  # (degree + 1, powers of epsilon, 1), the highest degree first
    sizes: tuple[float, ...]
    error: float
    slope: float

    def __call__(self, x: Number, first: int = 0) -> Number:
        """Return the polynomials from eps^first by Horner's rule, one row each."""
        shifted = x - self.centre if self.centre else x
        rows = self.coefficients[:, first:]
        value: Number = np.multiply(rows[0], shifted)
        other = np.empty_like(value)
        value += rows[1]
        for row in rows[2:]:
            np.multiply(value, shifted, out=other)
            other += row
            value, other = other, value
        return value


@dataclass(frozen=True, slots=True)
class Constants:
    """A series with constant coefficients, rounded correctly, and bounds on their sizes."""

    values: tuple[complex, ...]
    sizes: tuple[float, ...]


@dataclass(frozen=True, slots=True)
class EndTables:
    """Everything in F(eps) J(-eps) that does not depend on kinematics, F = measure Gamma(1+eps).

    far, far_slope
        F h as a function of u, and its derivative.
    near, near_slope
        F N as a function of t, and its derivative.
    root
        With the key (b, plus, minus): F {b B + S [plus exp(i pi eps) + minus exp(-i pi eps)]}.
    above
        F {B exp(i pi eps) + n S} for n = 0, 1, 2.
    singular
        F S.
    """

    far: EndTable
    far_slope: EndTable
    near: EndTable
    near_slope: EndTable
    root: dict[tuple[int, int, int], Constants]
    above: tuple[Constants, ...]
    singular: tuple[float, ...]


@lru_cache(maxsize=32)
def end_tables(measure: Measure, highest: int, real: bool) -> EndTables:
    """Return the tables through eps^highest for real or for complex arguments."""
    prefactor = measure.factor(4) * EpsilonFactor.gamma(1, 1)
    tables = quadratic_tables(fmpq(0), prefactor, highest, GAUSS_BITS)
    with working_precision(BITS):
        far = tables.far.shortest(arb(SERIES_RADIUS), arb(0))
        near = [_even_part(row) for row in tables.near.shortest(arb(5), arb(0))]
        shapes = []
        for rows, interval, disc in (
            (far, FAR_REAL, FAR_COMPLEX),
            (near, NEAR_REAL, NEAR_COMPLEX),
        ):
            slopes = [_differentiated(row) for row in rows]
            shapes += [
                _on_interval(pieces, *interval) if real else _on_disc(pieces, disc)
                for pieces in (rows, slopes)
            ]
        between = [real_part(tables.between_roots[k]) for k in range(highest + 1)]
        singular = [real_part(tables.singular[k]) for k in range(highest + 1)]
        return EndTables(
            shapes[0],
            shapes[1],
            shapes[2],
            shapes[3],
            _roots(between, singular),
            _above(between, singular),
            tuple(float(c.mid()) for c in singular),
        )


Piece = tuple[list[arb], float, arb]
"""Coefficients, a radius R, and a bound on sum |c_n| R^n over the terms beyond them."""


def _even_part(row: tuple[list[arb], arb]) -> Piece:
    """Multiply g(2 chi) by exp(-chi), which is even in chi, and return it as a series in chi^2.

    With x = 2 chi and sum |g_n| R^n <= G, the coefficients of the product beyond x^n have
    sum |c_j| r^j <= (r/R)^n G exp(R/2).
    """
    coefficients, tail = row
    length, radius = len(coefficients), arb(5)
    total = tail
    for n, c in enumerate(coefficients):
        total = total + c.abs_upper() * radius**n
    exponential, term = [], arb(1)
    for n in range(length):
        exponential.append(term)
        term = term * arb(-0.5) / (n + 1)
    product = list((arb_poly(coefficients) * arb_poly(exponential)).coeffs())[:length]
    even = [c * 4**n for n, c in enumerate(product[::2])]
    smaller = arb(3.5)  # of x; t up to 3.06
    rest = (smaller / radius) ** length * total * (radius / 2).exp()
    return even, float(smaller**2 / 4), rest.upper()


def _differentiated(row: Piece | tuple[list[arb], arb]) -> Piece:
    """Differentiate: n (r/R)^n falls for n >= 20 if r = 0.95 R."""
    coefficients, radius, tail = _piece(row)
    smaller = 0.95 * radius
    length = len(coefficients)
    rest = tail * length * arb(0.95) ** length / smaller
    return [n * c for n, c in enumerate(coefficients)][1:], smaller, rest.upper()


def _piece(row: Piece | tuple[list[arb], arb]) -> Piece:
    return row if len(row) == 3 else (row[0], SERIES_RADIUS, row[1])


def _on_interval(
    rows: list[Piece] | list[tuple[list[arb], arb]], low: float, high: float
) -> EndTable:
    """Cut polynomials for low <= x <= high."""
    centre = round((low + high) * 32) / 64
    half = max(high - centre, centre - low)
    found = []
    for series, radius, remainder in map(_piece, rows):
        assert abs(centre) + half <= radius
        coefficients, tail = _cut(series, remainder, abs(centre) + half, GOAL * 2.0**-20)
        shifted = arb_poly(coefficients)(arb_poly([centre, half]))
        chebyshev = _chebyshev(list(shifted.coeffs()))
        terms, dropped = len(chebyshev), tail
        while terms > 1:
            more = dropped + chebyshev[terms - 1].abs_upper()
            if not more <= GOAL:
                break
            terms, dropped = terms - 1, more
        monomial = _monomial(chebyshev[:terms])
        found.append(([c / arb(half) ** n for n, c in enumerate(monomial)], dropped))
    return _rounded(found, centre, half, REAL_STEP)


def _on_disc(rows: list[Piece] | list[tuple[list[arb], arb]], disc: float) -> EndTable:
    """Cut polynomials for |x| <= disc."""
    found = []
    for coefficients, radius, tail in map(_piece, rows):
        assert disc <= radius
        found.append(_cut(coefficients, tail, disc, GOAL))
    return _rounded(found, 0.0, disc, COMPLEX_STEP)


def _cut(coefficients: list[arb], tail: arb, radius: float, goal: float) -> tuple[list[arb], arb]:
    """Drop as many terms as the goal allows for |x| <= radius."""
    terms, dropped = len(coefficients), tail
    while terms > 1:
        more = dropped + coefficients[terms - 1].abs_upper() * arb(radius) ** (terms - 1)
        if not more <= goal:
            break
        terms, dropped = terms - 1, more
    return coefficients[:terms], dropped


def _chebyshev(coefficients: list[arb]) -> list[arb]:
    """Convert from powers: y^n = 2^(1-n) sum' binomial(n, j) T_(n-2j), half of it for T_0."""
    result = [arb(0)] * len(coefficients)
    for n, c in enumerate(coefficients):
        for j in range(n // 2 + 1):
            k = n - 2 * j
            weight = fmpq(comb(n, j), 2 ** (n - 1) if n else 1)
            result[k] += c * arb(weight / 2 if k == 0 and n else weight)
    return result


def _monomial(chebyshev: list[arb]) -> list[arb]:
    """Convert to powers by T_(n+1) = 2 y T_n - T_(n-1)."""
    y = arb_poly([0, 1])
    previous, current = arb_poly([1]), y
    total = arb_poly(chebyshev[:1])
    for c in chebyshev[1:]:
        total = total + c * current
        previous, current = current, 2 * y * current - previous
    return list(total.coeffs())


def _rounded(
    found: list[tuple[list[arb], arb]], centre: float, radius: float, step: float
) -> EndTable:
    degree = max(len(coefficients) for coefficients, _ in found)
    table = np.zeros((degree, len(found), 1))
    sizes, errors, slopes = [], [0.0], [0.0]
    for k, (coefficients, dropped) in enumerate(found):
        rounded = [float(c.mid()) for c in coefficients]
        for n, c in enumerate(rounded):
            table[degree - 1 - n, k, 0] = c
        terms = [abs(c) * radius**n for n, c in enumerate(rounded)]
        slope = sum(n * abs(c) * radius ** (n - 1) for n, c in enumerate(rounded) if n)
        error = sum((step * n + 2) * term for n, term in enumerate(terms))
        error += float(dropped) / UNIT + (slope * radius if centre else 0.0)
        size = max(1.001 * sum(terms), float(dropped) / UNIT)
        sizes.append(size)
        if size > 0:
            errors.append(1.001 * error / size)
            slopes.append(1.001 * slope / size)
    return EndTable(centre, radius, table, tuple(sizes), max(errors), max(slopes))


def _roots(between: list[arb], singular: list[arb]) -> dict[tuple[int, int, int], Constants]:
    """Combine B and S exp(+-i pi eps) for everything that occurs, before rounding."""
    length = len(between)
    turn = [acb(0, arb.pi()) ** k / factorial(k) for k in range(length)]
    plus = [
        sum((singular[k - j] * turn[j] for j in range(k + 1)), start=acb(0)) for k in range(length)
    ]
    result = {}
    for b, p, m in product((-1, 0, 1), range(-2, 3), range(-2, 3)):
        rows = [b * between[k] + p * plus[k] + m * plus[k].conjugate() for k in range(length)]
        result[b, p, m] = _constants(rows)
    return result


def _above(between: list[arb], singular: list[arb]) -> tuple[Constants, ...]:
    """Return B exp(i pi eps) + n S for n = 0, 1, 2."""
    length = len(between)
    turn = [acb(0, arb.pi()) ** k / factorial(k) for k in range(length)]
    turned = [
        sum((between[k - j] * turn[j] for j in range(k + 1)), start=acb(0)) for k in range(length)
    ]
    return tuple(
        _constants([x + n * y for x, y in zip(turned, singular, strict=True)]) for n in range(3)
    )


def _constants(rows: list[acb]) -> Constants:
    """Round; what vanishes (B + 2 S cos(pi eps) = 0) shows as a tiny ball."""
    values = tuple(complex(_rounded_real(c.real), _rounded_real(c.imag)) for c in rows)
    return Constants(values, tuple(1.001 * abs(value) for value in values))


def _rounded_real(x: arb) -> float:
    return 0.0 if x.contains(0) else float(x.mid())
