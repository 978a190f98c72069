"""Epsilon-expansion of 2F1(a, b; c; z) whose parameters are linear in epsilon.

a = a0 + a1 eps and so on, with multiples of 1/2 as constants.  z is an exact number; on the cut
z > 1 the value is the one at z + i0.

Algorithm
---------
One of six arguments y = z, 1-z, 1/z and y/(y-1) of these is small: at most 1/2 for real z.  The
linear transformations DLMF 15.8.1 (Pfaff), 15.8.2 and 15.8.4 lead there; their Gamma functions are
held exactly (`loopint.core.gamma_factors`), so that poles in eps, which cancel between the two
terms, cost orders but no knowledge.  A transformation whose Gamma functions have a pole at every
eps is passed over.  The Taylor series in y is a table of epsilon coefficients shared by all points.

Bound
-----
With t_n the Taylor coefficients, for n >= m > |c0| + |c1|,

    |t_{n+1}/t_n| <= q = (1 + (|a0|+|a1|)/m) (1 + (|b0|+|b1|)/m) / (1 - (|c0|+|c1|)/m)

for all |eps| <= 1, so by Cauchy's estimate on that circle the epsilon coefficients obey
|t_{n,k}| <= q^(n-m) sum_j |t_{m,k-j}|, and the terms from m on sum to at most
|y|^m/(1 - q |y|) sum_j |t_{m,k-j}|.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

from flint import arb, fmpq

from loopint.core.epsilon_linear import EpsilonLinear, gamma_ratio
from loopint.core.errors import MorePrecisionNeeded, UnregulatedError
from loopint.core.gamma_factors import EpsilonFactor
from loopint.core.kinematics import logarithm_below_cut
from loopint.core.laurent import BallSeries, exponential
from loopint.core.numbers import Ball, ExactComplex, real_part
from loopint.core.precision import working_precision
from loopint.core.time_limit import check_time
from loopint.hypergeometric.lerch import lerch_phi_series
from loopint.hypergeometric.tables import EpsilonTable

RADII = (0.5078125, 0.65, 0.8, 0.9, 0.96)  # a little above 1/2, for the rounding of y
ONE = ExactComplex(fmpq(1))


class NoTransformationError(Exception):
    """No transformation brings this argument into the disc where the series converges fast."""


@dataclass(frozen=True, slots=True)
class GaussParameters:
    """The parameters a, b; c."""

    a: EpsilonLinear
    b: EpsilonLinear
    c: EpsilonLinear

    def pfaff(self) -> GaussParameters:
        """Return a, c-b; c."""
        return GaussParameters(self.a, self.c - self.b, self.c)


def taylor_table(
    parameters: GaussParameters, prefactor: EpsilonFactor, highest: int, bits: int, radius: float
) -> EpsilonTable:
    """Return the table of prefactor * 2F1(a, b; c; y) in powers of y, for |y| <= radius."""
    p = parameters
    spread = p.a.size + p.b.size + p.c.size
    terms = math.ceil((bits + 32) / -math.log2(radius)) + 8 * math.ceil(spread) + 8
    terms = max(terms, math.ceil(3 * spread / (1 / radius - 1)))  # q radius < 1
    with working_precision(bits + 48 + 2 * terms.bit_length()):
        lowest, orders, last = _taylor_coefficients(p, prefactor, highest, terms)
    with working_precision(64):
        q = (1 + arb(p.a.size) / terms) * (1 + arb(p.b.size) / terms)
        q = q / (1 - arb(p.c.size) / terms)
        sizes = [_upper_sum(last[: k + 1]) for k in range(len(last))]
    assert q * arb(radius) < 1

    def remainder(k: int, r: arb) -> arb:
        return sizes[k] * r**terms / (1 - q * r)

    return EpsilonTable(lowest, orders, remainder, radius, bits)


def _upper_sum(values: list[arb]) -> arb:
    return arb(sum((abs(c) for c in values), start=arb(0)).upper())


def _taylor_coefficients(
    p: GaussParameters, prefactor: EpsilonFactor, highest: int, terms: int
) -> tuple[int, list[list[arb]], list[arb]]:
    """Return the lowest order, the coefficients by order, and the first one beyond (by order).

    The last are exact zeros if the series ends before.
    """
    rows: list[tuple[int, list[arb]]] = []
    valuation = prefactor.lowest_order
    length = max(highest - valuation + 3, 3)  # c may pass zero and lower the valuation
    row = [real_part(x) for x in prefactor.series(length).coefficients]
    ended = False
    for n in range(terms + 1):
        check_time()
        rows.append((valuation, row))
        for x in (p.a + n, p.b + n):
            if x.constant == 0:
                ended = ended or x.rate == 0
                valuation, row = valuation + 1, [r * x.rate for r in row]
            else:
                row = _times(row, x)
        x = p.c + n
        if x.constant == 0:
            if x.rate == 0 and not ended:
                raise UnregulatedError("2F1 with c an integer <= 0 at every eps")
            if not ended:
                valuation, row = valuation - 1, [r / x.rate for r in row]
        else:
            row = _over(row, x)
        row = [r / (n + 1) for r in row]
        if ended:
            break
    lowest = min(*(v for v, _ in rows), highest)
    count = highest - lowest + 1

    def aligned(entry: tuple[int, list[arb]]) -> list[arb]:
        v, values = entry
        return ([arb(0)] * (v - lowest) + values)[:count]

    columns = [aligned(entry) for entry in rows]
    last = [arb(0)] * count if ended else columns.pop()
    return lowest, [[column[k] for column in columns] for k in range(count)], last


def _times(row: list[arb], x: EpsilonLinear) -> list[arb]:
    return [row[0] * x.constant] + [
        row[k] * x.constant + row[k - 1] * x.rate for k in range(1, len(row))
    ]


def _over(row: list[arb], x: EpsilonLinear) -> list[arb]:
    result: list[arb] = []
    for k, value in enumerate(row):
        result.append((value - result[k - 1] * x.rate if k else value) / x.constant)
    return result


class GaussFunction:
    """prefactor * 2F1(a, b; c; z) through order `highest`, with shared tables.

    Parameters
    ----------
    parameters
        a, b; c.  c0 may be an integer <= 0 only if c1 != 0.
    prefactor
        Exact factor in front.
    highest, bits
        Highest order, and the working precision the tables are made for.
    """

    def __init__(
        self, parameters: GaussParameters, prefactor: EpsilonFactor, highest: int, bits: int
    ) -> None:
        self.parameters = parameters
        self.prefactor = prefactor
        self.highest = highest
        self.bits = bits

    @property
    def lerch_parameter(self) -> EpsilonLinear | None:
        """B if the function is 2F1(1, b; b+1; z) = b Phi(z, 1, b), else None."""
        p = self.parameters
        one = EpsilonLinear.of(1, 0)
        for first, second in ((p.a, p.b), (p.b, p.a)):
            regular = second.constant.q != 1 or second.constant > 0
            if first == one and p.c == second + 1 and regular:
                return second
        return None

    def at_one(self) -> BallSeries:
        """Gauss's sum (DLMF 15.4.20), continued analytically in eps."""
        p = self.parameters
        ratio = gamma_ratio((p.c, p.c - p.a - p.b), (p.c - p.a, p.c - p.b))
        if ratio is None:
            return BallSeries.zero(self.highest)
        return (self.prefactor * ratio).series_through(self.highest)

    def evaluate(self, z: ExactComplex) -> BallSeries:
        """Enclose the function at z.

        Raises
        ------
        NoTransformationError
            If no argument of the six is usable.
        UnregulatedError
            If a Gamma function has a pole at every eps.
        """
        if z.is_zero:
            return self.prefactor.series_through(self.highest)
        if z == ONE:
            return self.at_one()
        parameter = self.lerch_parameter
        if parameter is not None:
            return self._lerch(z, parameter)
        for size, base, pfaff in _arguments(z):
            if size > RADII[-1]:
                break
            try:
                return self._transformed(z, base, pfaff, size)
            except UnregulatedError:
                continue
        raise NoTransformationError

    def _lerch(self, z: ExactComplex, b: EpsilonLinear) -> BallSeries:
        factor = self.prefactor * EpsilonFactor.linear_factor(b.constant, b.rate)
        terms = self.highest - factor.lowest_order + 1
        if terms <= 0:
            return BallSeries.zero(self.highest)
        return factor.series(terms) * lerch_phi_series(z, 1, b.constant, b.rate, terms)

    def _transformed(self, z: ExactComplex, base: str, pfaff: bool, size: float) -> BallSeries:
        p = self.parameters
        if base == "z":
            return self._direct(p, self.prefactor, z, pfaff, size)
        if base == "1-z":  # DLMF 15.8.4
            y = ONE - z
            gap = p.c - p.a - p.b
            log = logarithm_below_cut(y.ball())
            parts = [
                ((p.c, gap), (p.c - p.a, p.c - p.b), GaussParameters(p.a, p.b, -gap + 1), None),
                (
                    (p.c, -gap),
                    (p.a, p.b),
                    GaussParameters(p.c - p.a, p.c - p.b, gap + 1),
                    (gap, log),
                ),
            ]
        else:  # DLMF 15.8.2
            y = ONE / z
            log = logarithm_below_cut((-z).ball())
            parts = [
                (
                    (p.c, second - first),
                    (second, p.c - first),
                    GaussParameters(first, first - p.c + 1, first - second + 1),
                    (-first, log),
                )
                for first, second in ((p.a, p.b), (p.b, p.a))
            ]
        total = BallSeries.zero(self.highest)
        for numerator, denominator, inner, power in parts:
            ratio = gamma_ratio(numerator, denominator)
            if ratio is None:
                continue
            value = self._direct(inner, self.prefactor * ratio, y, pfaff, size)
            if power is not None:
                value = times_power(value, *power)
            total = total + value
        return total

    def _direct(
        self, p: GaussParameters, factor: EpsilonFactor, y: ExactComplex, pfaff: bool, size: float
    ) -> BallSeries:
        """Sum the Taylor series in y or, after Pfaff's transformation, in y/(y-1)."""
        radius = next(r for r in RADII if r >= size)
        if not pfaff:
            return _table(p, factor, self.highest, self.bits, radius).evaluate(y.ball())
        table = _table(p.pfaff(), factor, self.highest, self.bits, radius)
        value = table.evaluate((y / (y - ONE)).ball())
        return times_power(value, -p.a, (ONE - y).ball().log())


_table = lru_cache(maxsize=512)(taylor_table)


def times_power(value: BallSeries, exponent: EpsilonLinear, log: Ball) -> BallSeries:
    """Return value * exp((constant + rate eps) log)."""
    if exponent.rate != 0:
        rest = exponential(exponent.rate * log, len(value.coefficients))
        value = value * BallSeries(0, rest)
    if exponent.constant != 0:
        value = value.scaled((exponent.constant * log).exp())
    return value


def _arguments(z: ExactComplex) -> list[tuple[float, str, bool]]:
    """Return the candidates (|argument|, base, Pfaff or not), the smallest first."""
    found = []
    with working_precision(64):
        for base, y in (("z", z), ("1-z", ONE - z), ("1/z", ONE / z)):
            if y.is_real and y.re >= 1:
                continue
            for pfaff in (False, True):
                argument = y / (y - ONE) if pfaff else y
                size = abs(argument.ball()).upper()
                if not size.is_finite():
                    raise MorePrecisionNeeded
                found.append((float(size), base, pfaff))
    return sorted(found)
