"""Epsilon-coefficients of F(w) = 2F1(1, b; c; w) for b = b0 + b1 eps, c = c0 + c1 eps.

Algorithm
---------
F satisfies the first-order equation (from the ratio of neighbouring Taylor terms)

    w (1-w) F' = (b w - (c-1)) F + (c-1),

which in u = -log(1-w), where d/du = (1-w) d/dw, w = 1 - exp(-u), becomes

    w dF/du + (c-1 - b w) F = c-1.

At order eps^k, with F = sum_k F_k eps^k and r_k the terms of lower order,

    w F_k' + (c0-1 - b0 w) F_k = r_k,
    r_k = (b1 w - c1) F_(k-1) + (c0-1) [k=0] + c1 [k=1],

and the integrating factor u^(c0-1) E^(c0-1) exp(-b0 u), E = (exp(u)-1)/u, gives for c0 > 1

    F_k = E^(1-c0) exp(b0 u) sum_n s_n u^n / (n + c0 - 1),
    s = E^(c0-2) exp((1-b0) u) r_k.                                               (*)

So every F_k is a power series in u with the radius 2 pi of E, computed once; a point costs the
evaluation of polynomials.  In the part of the unit disc with Re w <= 1/2, |u| <= pi/3 (maximum
principle; the maximum of |log(1-w)| over the boundary is at w = exp(+-i pi/3)), hence each term
gains a factor 6.  For c0 <= 1 the first terms of the Taylor series are split off,

    F(b, c) = sum_{n<m} (b)_n/(c)_n w^n + (b)_m/(c)_m w^m F(b+m, c+m),    c0 + m > 1,

with coefficients that may carry a pole in eps.

Bound
-----
Write E = exp(u/2) S(u), S(u) = sinh(u/2)/(u/2).  With t = x u, 0 <= x <= 1, (*) is

    F_k(u) = Int_0^1 dx x^(c0-2) exp( h (u-t) + t - u/2 ) [S(t)/S(u)]^(c0-2) r_k(t) / S(u),
    h = b0 - (c0-2)/2.

On |u| <= R < 2 pi the product for sinh (DLMF 4.36.1) gives |S(u)| >= sin(R/2)/(R/2) = 1/K,
|S| <= sinh(R/2)/(R/2), and |S(t)/S(u)| <= K, because |1+x^2 z| <= (1-x^2) + x^2 |1+z|.  Hence, for
c0 >= 2 (else with the ratio of the bounds on |S|), the weighted suprema
m_k = sup |F_k(u)| exp(-|h| |u|) obey

    m_k <= K^(c0-1) exp(R/2)/(c0-1) * ( (|b1| (exp(R)-1) + |c1|) m_(k-1) + |c1| [k=1] ),

m_0 <= K^(c0-1) exp(R/2), and Cauchy's estimate bounds the n-th coefficient of F_k by
m_k exp(|h| R) R^-n.  That is far from sharp, so the table is computed to a length at which it is
negligible, and shorter polynomials are cut from it whose tails are bounded by the computed
coefficients themselves plus that remainder.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import flint
from flint import arb, arb_series, fmpq

from loopint.core.gamma_factors import EpsilonFactor
from loopint.core.numbers import real_part
from loopint.core.precision import series_length, working_precision
from loopint.hypergeometric.tables import EpsilonTable

LARGEST_RADIUS = 17 / 16  # just above pi/3
CAUCHY_RADII = (2.0, 2.5, 3.0, 3.5, 4.0, 4.5, 5.0, 5.5)


@dataclass(frozen=True, slots=True)
class GaussParameters:
    """b = b0 + b1 eps and c = c0 + c1 eps of 2F1(1, b; c; w)."""

    b0: fmpq
    b1: fmpq
    c0: fmpq
    c1: fmpq

    def raised(self, steps: int) -> GaussParameters:
        """Return the parameters (b + steps, c + steps)."""
        return GaussParameters(self.b0 + steps, self.b1, self.c0 + steps, self.c1)

    def term(self, n: int) -> EpsilonFactor:
        """Return the Taylor coefficient (b)_n / (c)_n, exactly."""
        result = EpsilonFactor()
        for j in range(n):
            result = result * EpsilonFactor.linear_factor(self.b0 + j, self.b1)
            result = result / EpsilonFactor.linear_factor(self.c0 + j, self.c1)
        return result


@lru_cache(maxsize=256)
def gauss_table(
    parameters: GaussParameters, prefactor: EpsilonFactor, highest: int, bits: int
) -> EpsilonTable:
    """Return the table of prefactor * 2F1(1, b; c; w) through order eps^highest.

    The truncation error of every coefficient is below 2^-bits at any |u| <= 17/16, and is included
    in the balls returned.
    """
    steps = max(0, 1 + math.floor(1 - int(parameters.c0.p) / int(parameters.c0.q)))
    factors = [prefactor * parameters.term(n) for n in range(steps + 1)]
    lowest = min([*(factor.lowest_order for factor in factors), highest])
    terms = highest - lowest + 1
    guard = 40 + 8 * terms
    high = parameters.raised(steps)
    with working_precision(bits + guard):
        weights = [_coefficients_from(factor, lowest, terms) for factor in factors]
        remainders = _remainders(high, weights, terms)
        length = _safe_length(remainders, bits + 16)
    with series_length(length), working_precision(bits + guard + length // 2):
        weights = [_coefficients_from(factor, lowest, terms) for factor in factors]
        w, power = _one_minus_exp_minus_u(), arb_series([1])
        orders = [arb_series([0])] * terms
        for row in weights[:-1]:
            orders = [total + power * c for total, c in zip(orders, row, strict=True)]
            power = power * w
        shape = _times_factor(_expand(high, terms, bits + guard + length // 8), weights[-1])
        orders = [total + power * new for total, new in zip(orders, shape, strict=True)]
        columns = [_coefficients(series, length) for series in orders]

    def remainder(k: int, radius: arb) -> arb:
        if all(bound == 0 for bound in remainders[k]):
            return arb(0)
        return min(
            (
                bound * (radius / cauchy) ** length / (1 - radius / cauchy)
                for cauchy, bound in zip(CAUCHY_RADII, remainders[k], strict=True)
                if radius < cauchy
            ),
            key=lambda bound: float(bound.log().mid()),
        )

    return EpsilonTable(lowest, columns, remainder, LARGEST_RADIUS, bits)


def _coefficients_from(factor: EpsilonFactor, lowest: int, terms: int) -> list[arb]:
    """Return the coefficients of eps^lowest, ..., eps^(lowest + terms - 1)."""
    wanted = lowest + terms - factor.lowest_order
    if wanted <= 0:
        return [arb(0)] * terms
    series = factor.series(wanted)
    return [real_part(series[k]) for k in range(lowest, lowest + terms)]


def _remainders(high: GaussParameters, weights: list[list[arb]], terms: int) -> list[list[arb]]:
    """Return, for each order and Cauchy radius, a bound on the whole function on |u| <= R."""
    result: list[list[arb]] = [[] for _ in range(terms)]
    for radius in CAUCHY_RADII:
        size = arb(radius).exp() - 1  # |w| on the circle
        bounds = _bounds(high, terms, radius)
        for k in range(terms):
            total = arb(0)
            for n, row in enumerate(weights[:-1]):
                total = total + abs(row[k]) * size**n
            last, top = weights[-1], size ** (len(weights) - 1)
            for j in range(k + 1):
                total = total + top * abs(last[j]) * bounds[k - j]
            result[k].append(_upper(total))
    return result


def _upper(x: arb) -> arb:
    return arb(x.upper())


def _coefficients(series: arb_series, length: int) -> list[arb]:
    found = list(series.coeffs())
    return found + [arb(0)] * (length - len(found))


def _times_factor(orders: list[arb_series], factor: list[arb]) -> list[arb_series]:
    result = []
    for k in range(len(orders)):
        total = orders[k] * factor[0]
        for j in range(1, k + 1):
            if factor[j] != 0:
                total = total + orders[k - j] * factor[j]
        result.append(total)
    return result


def _safe_length(remainders: list[list[arb]], bits: int) -> int:
    """Return the smallest length at which Cauchy's estimate is below 2^-bits at |u| = 17/16."""
    lengths = []
    for i, radius in enumerate(CAUCHY_RADII):
        worst = max(float((1 + order[i]).log().upper()) for order in remainders) / math.log(2)
        lengths.append((bits + worst + 4) / math.log2(radius / LARGEST_RADIUS))
    return math.ceil(min(lengths)) + 1


def _expand(p: GaussParameters, terms: int, bits: int) -> list[arb_series]:
    """Apply (*) of the module text; needs c0 > 1.

    With F_k = outer I_k, the factor inside times the one outside is E^-1 exp(u) = u/w, so that
    s_k = (b1 u - c1 u/w) I_(k-1) for k > 1: two long products for each order.  Coefficients fall
    like 6^-n: bits beyond an error of 2^-bits are dropped, which makes the products faster.
    """
    base = _shortened(_exp_minus_one_over_u(), bits)
    outer = _shortened(_real_power(base, 1 - p.c0) * _exp_series(p.b0), bits)
    u_over_w = _shortened(_u_over_w(base), bits)
    inner = _shortened(u_over_w / outer, bits)
    b1, c1, start = arb(p.b1), arb(p.c1), arb(p.c0 - 1)
    step = arb_series([0, b1]) - c1 * u_over_w
    orders: list[arb_series] = []
    s = start * inner
    for k in range(terms):
        integral = _shortened(
            arb_series([c / (n + start) for n, c in enumerate(_coefficients(s, flint.ctx.cap))]),
            bits,
        )
        orders.append(outer * integral)
        if k + 1 < terms:
            s = step * integral
            if k == 0:
                s = s + c1 * inner
    return orders


def _shortened(series: arb_series, bits: int) -> arb_series:
    """Round every coefficient to an error of about 2^-bits, which its ball then holds."""
    result = []
    for c in series.coeffs():
        mantissa, exponent = c.mid().man_exp()
        kept = bits + int(mantissa).bit_length() + int(exponent)
        if kept < 2:
            result.append(arb(0, c.abs_upper()))
            continue
        with working_precision(kept):
            result.append(+c)
    return arb_series(result)


def _bounds(p: GaussParameters, terms: int, radius: float) -> list[arb]:
    """Return M_k with |F_k(u)| <= M_k on |u| <= radius; see the module text."""
    half = arb(radius) / 2
    smallest = half.sin() / half  # of |S|
    largest = half.sinh() / half
    excess = arb(p.c0 - 2)
    ratio = (1 / smallest) ** excess if p.c0 >= 2 else (largest / smallest) ** (-excess)
    gain = ratio / smallest * half.exp() / arb(p.c0 - 1)
    w = arb(radius).exp() - 1
    b1, c1 = abs(arb(p.b1)), abs(arb(p.c1))
    weighted: list[arb] = []
    for k in range(terms):
        right = arb(p.c0 - 1) if k == 0 else (b1 * w + c1) * weighted[k - 1]
        if k == 1:
            right = right + c1
        weighted.append(_upper(gain * right))
    growth = (abs(arb(p.b0) - excess / 2) * radius).exp()
    return [_upper(growth * bound) for bound in weighted]


def _exp_series(rate: fmpq) -> arb_series:
    """Return exp(rate u)."""
    return (arb_series([0, 1]) * arb(rate)).exp() if rate != 0 else arb_series([1])


def _exp_minus_one_over_u() -> arb_series:
    """Return E = (exp(u) - 1)/u = sum u^n / (n+1)!."""
    coefficients, term = [], arb(1)
    for n in range(flint.ctx.cap):
        term = term / (n + 1)
        coefficients.append(term)
    return arb_series(coefficients)


def _one_minus_exp_minus_u() -> arb_series:
    """Return w = 1 - exp(-u), with an exact zero constant term."""
    coefficients = list((-(_exp_series(fmpq(-1)))).coeffs())
    coefficients[0] = arb(0)
    return arb_series(coefficients)


def _u_over_w(base: arb_series) -> arb_series:
    """Return u/w = u/(1 - exp(-u)) = 1/E(-u)."""
    return 1 / arb_series([-c if n % 2 else c for n, c in enumerate(base.coeffs())])


def _real_power(base: arb_series, exponent: fmpq) -> arb_series:
    """Return base^exponent for a power series with constant term 1."""
    if exponent == 0:
        return arb_series([1])
    if exponent.q == 1:
        power = base ** abs(int(exponent.p))
        return power if exponent > 0 else 1 / power
    return (base.log() * arb(exponent)).exp()
