"""G = F(eps) J(-eps) and its first derivatives as sums over the two ends, with conditioned formulas.

F = measure * Gamma(1+eps).  With the notation of `loopint.integrals.quadratic` and
w = exp(-2 chi), tanh chi = sigma R/A, an end contributes one of

    far    W m^(-eps) h(u),     W = 2 m/D,  u = -log(1-w)
    near   c m^(-eps) N(t),     c = W exp(chi) = sigma sqrt(m/p^2),  t = chi^2,

N(t) = exp(-chi) g(1-w)/(1-2 eps), which is even in chi: by the quadratic transformation DLMF
15.8.17 it is 2F1(1/2, eps-1/2; eps+1/2; -sinh^2 chi)/(1-2 eps).  Between the thresholds
chi = i psi, tan psi = R/|A|, so that t = -psi^2 and everything is real.  What near ends leave out,
sigma (R/p^2)(lambda/p^2)^(-eps) S with S = Gamma(1-eps) Gamma(2 eps-1)/Gamma(eps), has the form of
T, the integral between the roots, and is combined with it before anything is rounded: with
2 S cos(pi eps) = -B, B = Gamma(1-eps)^2/Gamma(2-2 eps), the sum below threshold, for one, is
-(R/p^2)(-lambda/p^2)^(-eps) B tan(pi eps), and it is zero around the pseudothreshold.

Derivatives divide by lambda only where the integral itself does.  From d(chi_1)/dm1^2 = -S/(2 m1^2 R),
d(chi_2)/dm1^2 = -1/R, d(chi_1)/dp^2 = A2/(2 p^2 R) (S = p^2-m1^2-m2^2 here, R with its sigma):

    far, by m1^2    dW1 = W1 (R+S)/(2 m1^2 R),    du1 = 2 p^2 S/(D1 lambda)
                    dW2 = W2/R,                   du2 = 2 p^2 W2/lambda
         by p^2     dW1 = -W1 (R+A2)/(2 p^2 R),   du1 = -W1 A2/lambda
    near, by m1^2   dc1 = c1/(2 m1^2),            dt1 = -(chi_1/R) S/m1^2
                    dc2 = 0,                      dt2 = -2 chi_2/R
         by p^2     dc1 = -c1/(2 p^2),            dt1 = (chi_1/R) A2/p^2

with (R+S)(R-S) = -4 m1^2 m2^2 and (R+A2)(R-A2) = -4 p^2 m2^2 where the first factor cancels.

Bound.  Every contribution is exp(rate eps) sum_k L_k eps^k, L_k = a H_k + b H'_k - g H_(k-1),
with |H_k| <= sizes[k].  With r >= |rate|, M_k the coefficients of exp(r eps) sum |L_k| eps^k obey
r M_(k-1) <= k M_k, so that an error 9 r of the rate costs 9 k M_k, and evaluating the product by
Horner's rule another (3+PRODUCT) k M_k: together GROWTH k M_k.  Hence the error of the k-th
coefficient is at most the k-th coefficient of exp(r eps) sum_k (|a| (rho_a + GROWTH K) sizes[k] +
...) eps^k, where rho are the relative errors of what multiplies, through eps^K.  All in units of
UNIT.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from enum import Enum

import numpy as np
from numpy.typing import NDArray

from loopint.arrays.end_tables import Constants, EndTable, EndTables
from loopint.arrays.points import complex_points, real_points
from loopint.arrays.quadratic import LARGEST_ARGUMENT_ERROR, nearer_root
from loopint.arrays.rounding import (
    PRODUCT,
    QUOTIENT,
    UNIT,
    Number,
    Real,
    as_complex,
    logarithm,
    quotient,
    size,
    square_root,
)
from loopint.arrays.series import ArraySeries

BLOCK = 8192  # points at a time: the working set stays in the cache
GROUPED = 8 * BLOCK  # points that are sorted by region together
GROWTH = 15.0  # at least 9 + 3 + PRODUCT
NEAR_REAL = 0.25  # near where 1-w is below
NEAR_COMPLEX = 0.25  # near where Re w is above
LOG1P = 32.0  # relative error of `_log1p` where |1+x| >= 1, |x| <= 3

Index = NDArray[np.intp]


class Variable(Enum):
    """What G is differentiated by; MASS is the squared mass of the first line."""

    NONE = 0
    MASS = 1
    MOMENTUM = 2


@dataclass(frozen=True, slots=True)
class Block:
    """Points of one kind.

    `excess` and `a` err by |value| + `loose`, `kallen` and `root` relative to themselves; `circle`
    says that lambda < 0 and `root` = sqrt(-lambda).
    """

    p: Real
    m: tuple[Number, Number]
    excess: Number
    a: tuple[Number, Number]
    loose: Real
    kallen: Number
    kallen_error: Real
    root: Number
    root_error: Real
    circle: bool = False

    @property
    def real(self) -> bool:
        """Whether masses are real."""
        return not np.iscomplexobj(self.root)

    @property
    def quotient(self) -> float:
        """Relative error of a quotient."""
        return 1.0 if self.real else QUOTIENT

    @property
    def product(self) -> float:
        """Relative error of a product."""
        return 1.0 if self.real else PRODUCT

    def take(self, index: Index | slice, circle: bool = False) -> Block:
        """Return some of the points."""
        return Block(
            self.p[index],
            (self.m[0][index], self.m[1][index]),
            self.excess[index],
            (self.a[0][index], self.a[1][index]),
            self.loose[index],
            self.kallen[index],
            self.kallen_error[index],
            self.root[index],
            self.root_error[index],
            circle,
        )


@dataclass(frozen=True, slots=True)
class Work:
    """What is asked for: the coefficients of eps^1 ... eps^highest times exp(log_mu eps)."""

    variable: Variable
    highest: int
    log_mu: float
    tables: EndTables


@dataclass(frozen=True, slots=True)
class Factors:
    """L_k = a H_k + b H'_k - g H_(k-1); `sizes` bound |a|, |b|, |g| (1 + rounding).

    Entries may be None for zero.
    """

    a: Number
    b: Number | None
    g: Number | None
    sizes: tuple[Real, Real | None, Real | None]


@dataclass(slots=True)
class Sum:
    """Coefficients of eps^1, eps^2, ... and their errors."""

    values: list[Number]
    errors: list[Real]


def plain_block(p: Real, m1: Real, m2: Real) -> Block:
    """Derive everything for real masses in plain doubles: lambda errs by 7 (|p^2|+m1^2+m2^2)^2."""
    difference = m1 - m2
    excess = (p - m1) - m2
    kallen = excess * excess
    kallen -= (4.0 * m1) * m2
    largest = np.abs(p) + m1
    largest += m2
    root = np.abs(kallen)
    error = largest * largest
    error *= 7.0
    error /= root
    np.sqrt(root, out=root)
    return Block(
        p,
        (m1, m2),
        excess,
        (p + difference, p - difference),
        largest,  # of the rounding in p - m1 and m1 - m2
        kallen,
        error,
        root,
        0.51 * error + 1.0,
    )


def precise_block(p: Real, m1: Number, m2: Number) -> Block:
    """Derive everything from lambda and A beyond double precision."""
    nil = np.zeros_like(p)
    if np.iscomplexobj(m1) or np.iscomplexobj(m2):
        points = complex_points(p, as_complex(m1), as_complex(m2), nil, nil)
    else:
        points = real_points(p, m1, m2, nil, nil)
    return Block(
        p,
        (points.m1, points.m2),
        points.excess,
        (points.a1, points.a2),
        (3.2 * UNIT) * points.largest,
        points.kallen,
        points.kallen_error,
        points.root,
        points.root_error,
    )


def expand(work: Work, whole: Block) -> Iterator[tuple[Index, ArraySeries]]:
    """Evaluate groups of points in turn; where this does not serve, errors are inf or nan.

    What is computed for a point does not depend on the others.
    """
    if not whole.real:
        yield from _in_blocks(work, whole, np.arange(whole.p.size), _general, False)
        return
    below = whole.kallen < 0
    above = (whole.p > 0) & (whole.excess > 0) & ~below
    for mask, evaluate, circle in (
        (below, _circle, True),
        (above, _above_threshold, False),
        (~(below | above), _spacelike, False),
    ):
        yield from _in_blocks(work, whole, np.flatnonzero(mask), evaluate, circle)


def _in_blocks(
    work: Work,
    whole: Block,
    index: Index,
    evaluate: Callable[[Work, Block], Sum],
    circle: bool,
) -> Iterator[tuple[Index, ArraySeries]]:
    for start in range(0, index.size, BLOCK):
        where = index[start : start + BLOCK]
        found = evaluate(work, whole.take(where, circle))
        yield where, ArraySeries(found.values, found.errors)


# --- groups of points -------------------------------------------------------------------------


def _circle(work: Work, block: Block) -> Sum:
    """Between the thresholds."""
    total = _near_end(work, block, 0, np.where(block.a[0] < 0, -1.0, 1.0))
    _add(total, _near_end(work, block, 1, np.where(block.a[1] < 0, -1.0, 1.0)))
    both = np.flatnonzero((block.a[0] > 0) & (block.a[1] > 0))
    found = work.tables.root[1, 0, 2]
    constants = Constants(tuple(-c.imag for c in found.values), found.sizes)
    return _with_root(work, block, total, [(both, constants)])


def _above_threshold(work: Work, block: Block) -> Sum:
    one = np.ones_like(block.p)
    total, near = _both_ends(work, block, (one, one))
    if near is None:
        return _with_root(work, block, total, [(np.arange(one.size), work.tables.above[0])])
    count = near[0].astype(int) + near[1]
    cases = [(np.flatnonzero(count == n), work.tables.above[n]) for n in range(3)]
    return _with_root(work, block, total, cases)


def _spacelike(work: Work, block: Block) -> Sum:
    """Below the pseudothreshold."""
    sigma = nearer_root(block.a[0], block.root), nearer_root(block.a[1], block.root)
    total, near = _both_ends(work, block, sigma)
    root = work.tables.root
    cases = [(np.flatnonzero((sigma[0] == sigma[1]) & (block.p < 0)), _real(root[-1, 0, 0]))]
    if near is not None:
        count = sigma[0] * near[0] + sigma[1] * near[1]
        half = root[0, 1, 0]
        singular = Constants(work.tables.singular, half.sizes)
        opposite = Constants(tuple(-c for c in singular.values), half.sizes)
        cases += [(np.flatnonzero(count == 1), singular), (np.flatnonzero(count == -1), opposite)]
    return _with_root(work, block, total, cases)


def _general(work: Work, block: Block) -> Sum:
    """Complex masses."""
    sigma = nearer_root(block.a[0], block.root), nearer_root(block.a[1], block.root)
    total, near = _both_ends(work, block, sigma)
    key = np.zeros((3, block.p.size), dtype=np.int64)
    key[0] = np.where((sigma[0] == sigma[1]) & (block.p != 0), sigma[0], 0)
    if near is not None:
        angle = np.angle(_height(block))
        for i in range(2):
            d = block.a[i] + sigma[i] * block.root
            v, weight = 2.0 * sigma[i] * quotient(block.root, d), quotient(2.0 * block.m[i], d)
            w = 2.0 * block.p * quotient(weight, d)
            turn = np.angle(w) - 2.0 * np.angle(v) - np.angle(block.m[i]) + angle
            up = np.rint(turn * (0.5 / np.pi) - 0.5) == 0.0  # pi, otherwise -pi
            step = np.where(near[i], sigma[i], 0).astype(np.int64)
            key[1] += np.where(up, step, 0)
            key[2] += np.where(up, 0, step)
    codes = (key[0] * 5 + key[1]) * 5 + key[2]
    cases = []
    for code in np.unique(codes[codes != 0]):
        where = np.flatnonzero(codes == code)
        first = where[0]
        constants = work.tables.root[int(key[0, first]), int(key[1, first]), int(key[2, first])]
        if any(constants.sizes):
            cases.append((where, constants))
    return _with_root(work, block, total, cases)


def _real(constants: Constants) -> Constants:
    return Constants(tuple(c.real for c in constants.values), constants.sizes)


def _both_ends(
    work: Work, block: Block, sigma: tuple[Real, Real]
) -> tuple[Sum, tuple[NDArray[np.bool_], NDArray[np.bool_]] | None]:
    """Add the two ends; say which are near, or None if none is."""
    totals, masks = [], []
    for i in range(2):
        signed = sigma[i] * block.root
        d = block.a[i] + signed
        if block.real:
            mask = 2.0 * signed / d < NEAR_REAL
        else:
            mask = quotient(4.0 * block.p * block.m[i], d * d).real > NEAR_COMPLEX
        masks.append(mask)
        near = np.flatnonzero(mask)
        if near.size == 0:
            totals.append(_far_end(work, block, i, sigma[i]))
        elif near.size == mask.size:
            totals.append(_near_end(work, block, i, sigma[i]))
        else:
            far = np.flatnonzero(~mask)
            parts = (
                (far, _far_end(work, block.take(far), i, sigma[i][far])),
                (near, _near_end(work, block.take(near), i, sigma[i][near])),
            )
            totals.append(_joined(block.root, work.highest, parts))
    total = totals[0]
    _add(total, totals[1])
    return total, (masks[0], masks[1]) if masks[0].any() or masks[1].any() else None


def _joined(like: Number, highest: int, parts: tuple[tuple[Index, Sum], ...]) -> Sum:
    values = [np.empty_like(like) for _ in range(highest)]
    errors = [np.empty(like.shape) for _ in range(highest)]
    for index, part in parts:
        for k in range(highest):
            values[k][index] = part.values[k]
            errors[k][index] = part.errors[k]
    return Sum(values, errors)


def _add(total: Sum, other: Sum) -> None:
    """Add in place; the rounding is in the errors of the parts."""
    for k in range(len(total.values)):
        total.values[k] += other.values[k]
        total.errors[k] += other.errors[k]


# --- contributions ----------------------------------------------------------------------------


def _far_end(work: Work, block: Block, i: int, sigma: Real) -> Sum:
    m, exact_quotient = block.m[i], block.quotient
    signed = sigma * block.root
    d = block.a[i] + signed
    d_error = block.loose / size(d)
    d_error += block.root_error
    d_error += 2.0
    weight = quotient(2.0 * m, d)
    log_v, u_error = logarithm(quotient(2.0 * signed, d))
    u_error += d_error
    u_error += block.root_error
    u_error += exact_quotient
    u_error = np.where(u_error < LARGEST_ARGUMENT_ERROR, u_error, np.inf)
    u = np.negative(log_v, out=log_v)
    tables = work.tables
    if work.variable is Variable.NONE:
        rho = tables.far.slope * u_error
        rho += d_error
        rho += tables.far.error + exact_quotient + block.product + 4.0 + GROWTH * work.highest
        factors = Factors(weight, None, None, (size(weight) * rho, None, None))
        return _evaluate(work, block, m, (tables.far, tables.far_slope), u, factors)
    rho = max(tables.far.slope, tables.far_slope.slope) * u_error
    rho += 2.0 * d_error + 2.0 * block.kallen_error + 3.0 * block.root_error
    rho += max(tables.far.error, tables.far_slope.error) + 5.0 * (exact_quotient + block.product)
    rho += 8.0 + GROWTH * work.highest
    factors = _far_factors(work.variable, block, i, signed, d, weight, rho)
    return _evaluate(work, block, m, (tables.far, tables.far_slope), u, factors)


def _far_factors(
    variable: Variable,
    block: Block,
    i: int,
    signed: Number,
    d: Number,
    weight: Number,
    rho: Real,
) -> Factors:
    """Return dW, W du and the factor of eps; the errors of sums that do not cancel are in rho."""
    p, kallen, loose = block.p, block.kallen, block.loose
    g: Number | None = None
    g_size: Real | None = None
    if variable is Variable.MASS and i == 0:
        plus, minus = signed + block.excess, signed - block.excess
        a = np.where(
            size(plus) < size(minus),
            quotient(-2.0 * weight * block.m[1], signed * minus),
            quotient(plus, d * signed),
        )
        rho = rho + loose / np.maximum(size(plus), size(minus))
        b = quotient(2.0 * p * weight * block.excess, d * kallen)
        b_size = size(quotient(2.0 * p * weight, d * kallen)) * (size(block.excess) + loose)
        g = quotient(np.full_like(d, 2.0), d)
        g_size = size(g) * rho
    elif variable is Variable.MASS:
        a = quotient(weight, signed)
        b = quotient(2.0 * p * weight * weight, kallen)
        b_size = size(b)
    else:
        other = block.a[1 - i]
        plus, minus = signed + other, signed - other
        a = np.where(
            size(plus) < size(minus),
            quotient(2.0 * weight * block.m[1 - i], signed * minus),
            quotient(-weight * plus, 2.0 * p * signed),
        )
        rho = rho + loose / np.maximum(size(plus), size(minus))
        squared = quotient(weight * weight, kallen)
        b = -squared * other
        b_size = size(squared) * (size(other) + loose)
    return Factors(a, b, g, (size(a) * rho, b_size * rho, g_size))


def _near_end(work: Work, block: Block, i: int, sigma: Real) -> Sum:
    """Evaluate where w is close to 1 or on the unit circle."""
    p, m = block.p, block.m[i]
    if block.circle:
        chi = np.arctan(block.root / np.abs(block.a[i]))
        t = -chi * chi
        c = sigma * np.sqrt(m / p)
        signed, c_error = sigma * block.root, 2.0
        chi_error = 12.0 + block.root_error + 0.5 * block.loose / np.sqrt(p * m)
    else:
        signed = sigma * block.root
        d = block.a[i] + signed
        d_error = 2.0 + block.root_error + block.loose / size(d)
        x = quotient(signed * d, 2.0 * p * m)
        chi = 0.5 * _log1p(x)
        t = chi * chi
        chi_error = block.root_error + d_error + block.product + block.quotient + 1.0 + LOG1P
        if block.real:
            c, c_error = sigma * np.sqrt(m / p), 2.0
        else:
            c, c_error = square_root(m * (1.0 / p)), 6.0
            weight = quotient(2.0 * m, d)
            c *= np.where(c.real * weight.real + c.imag * weight.imag < 0, -1.0, 1.0)
    t_error = size(t) * (2.0 * chi_error + PRODUCT)
    t_error = np.where(t_error < LARGEST_ARGUMENT_ERROR, t_error, np.inf)
    tables = work.tables
    pair = (tables.near, tables.near_slope)
    rho = max(tables.near.slope, tables.near_slope.slope) * t_error
    rho += max(tables.near.error, tables.near_slope.error) + c_error + GROWTH * work.highest + 8.0
    if work.variable is Variable.NONE:
        return _evaluate(
            work, block, m, pair, t, Factors(c, None, None, (size(c) * rho, None, None))
        )
    rho += chi_error + block.root_error + 4.0 * (block.quotient + block.product)
    growth = quotient(chi, signed) * c
    zero = np.zeros_like(p)
    if work.variable is Variable.MASS and i == 0:
        g = quotient(c, m)
        scale = quotient(growth, m)
        b, b_size = -scale * block.excess, size(scale) * (size(block.excess) + block.loose)
        sizes = (0.5 * size(g) * rho, b_size * rho, size(g) * rho)
        return _evaluate(work, block, m, pair, t, Factors(0.5 * g, b, g, sizes))
    if work.variable is Variable.MASS:
        b = -2.0 * growth
        factors = Factors(np.zeros_like(c), b, None, (zero, size(b) * rho, None))
        return _evaluate(work, block, m, pair, t, factors)
    other, scale, a = block.a[1 - i], growth / p, c * (-0.5 / p)
    sizes = (size(a) * rho, size(scale) * (size(other) + block.loose) * rho, None)
    return _evaluate(work, block, m, pair, t, Factors(a, scale * other, None, sizes))


def _log1p(x: Number) -> Number:
    """Return log(1+x) for |1+x| >= 1 and |x| <= 3, with relative error LOG1P."""
    if not np.iscomplexobj(x):
        return np.log1p(x)
    a, b = x.real, x.imag
    return as_complex(0.5 * np.log1p(2.0 * a + (a * a + b * b)), np.arctan2(b, 1.0 + a))


def _height(block: Block) -> Number:
    """Return -lambda/p^2, where Im <= 0 wherever it matters: a positive one is rounding."""
    height = -block.kallen / block.p
    if np.iscomplexobj(height):
        height.imag = np.where(height.imag < 0, height.imag, -0.0)
    return height


def _with_root(work: Work, block: Block, total: Sum, cases: list[tuple[Index, Constants]]) -> Sum:
    """Add (R/p^2)(-lambda/p^2)^(-eps) times constants where they apply."""
    for index, constants in cases:
        if index.size == 0:
            continue
        every = index.size == block.p.size
        added = _root_part(work, block if every else block.take(index, block.circle), constants)
        for k in range(work.highest):
            if np.iscomplexobj(added.values[k]):
                total.values[k] = as_complex(total.values[k])
            if every:
                total.values[k] += added.values[k]
                total.errors[k] += added.errors[k]
            else:
                total.values[k][index] += added.values[k]
                total.errors[k][index] += added.errors[k]
    return total


def _root_part(work: Work, block: Block, constants: Constants) -> Sum:
    p, kallen = block.p, block.kallen
    height = _height(block)
    logs = np.log(np.abs(height)) if block.real else logarithm(height)[0]
    weight = block.root / p
    rho = block.root_error + work.highest * (block.kallen_error + 4.0)
    rho += 4.0 * (block.quotient + block.product) + 12.0 + GROWTH * work.highest
    if work.variable is Variable.NONE:
        factors = Factors(weight, None, None, (size(weight) * rho, None, None))
        return _product(work, logs, constants.values, constants.sizes, None, None, factors)
    rho += 2.0 * block.kallen_error
    scale = quotient(weight, kallen)
    if work.variable is Variable.MASS:
        a = -scale * block.a[1]
        bound = size(scale) * (size(block.a[1]) + block.loose) * rho
        factors = Factors(a, None, 2.0 * a, (bound, None, 2.0 * bound))
    else:
        first, second = scale * block.excess, weight / p
        large = size(scale) * (size(block.excess) + block.loose) * rho
        small = size(second) * rho
        sizes = (large + small, None, 2.0 * large + small)
        factors = Factors(first - second, None, 2.0 * first - second, sizes)
    return _product(work, logs, constants.values, constants.sizes, None, None, factors)


def _evaluate(
    work: Work,
    block: Block,
    m: Number,
    pair: tuple[EndTable, EndTable],
    x: Number,
    factors: Factors,
) -> Sum:
    """Evaluate an end; exactly zero for a massless one."""
    massless = m == 0
    some = bool(massless.any())
    logs, _ = logarithm(np.where(massless, 1.0, m) if some else m)
    value, slope = pair
    constant = value is work.tables.far  # its first polynomial
    rows: list[Number | float] = list(value(x, 1 if constant else 0))
    if constant:
        rows.insert(0, float(value.coefficients[-1, 0, 0]))
    slopes = None if factors.b is None else list(slope(x))
    found = _product(work, logs, rows, value.sizes, slopes, slope.sizes, factors)
    if some:
        own = work.variable is Variable.MASS and m is block.m[0]
        for k in range(work.highest):
            found.values[k][massless] = 0.0
            found.errors[k][massless] = np.inf if own else 0.0
    return found


def _product(
    work: Work,
    logs: Number,
    rows: list[Number | float] | tuple[complex, ...],
    sizes: tuple[float, ...],
    slopes: list[Number] | None,
    slope_sizes: tuple[float, ...] | None,
    factors: Factors,
) -> Sum:
    """Return the coefficients of exp((log_mu - logs) eps) sum_k L_k eps^k with their errors."""
    highest = work.highest
    reach = size(logs)
    reach += 1.0 + abs(work.log_mu)
    rate = work.log_mu - logs if work.log_mu else -logs
    alpha, beta, gamma = factors.sizes
    simple = factors.b is None and factors.g is None
    lines: list[Number | float] = list(rows)
    bounds: list[Real | float] = list(sizes)
    if not simple:
        for k in range(highest + 1):
            line, bound = factors.a * rows[k], alpha * sizes[k]
            if factors.b is not None and slopes is not None and slope_sizes is not None:
                line = line + factors.b * slopes[k]
                bound = bound + beta * slope_sizes[k]
            if factors.g is not None and k:
                line = line - factors.g * rows[k - 1]
                bound = bound + gamma * sizes[k - 1]
            lines[k], bounds[k] = line, bound
    rates, reaches = [rate], [reach]
    for j in range(2, highest + 1):
        rates.append(rate * (1.0 / j))
        reaches.append(reach * (1.0 / j))
    values, errors = [], []
    for k in range(1, highest + 1):
        value, error = rates[k - 1] * lines[0], reaches[k - 1] * bounds[0]
        value += lines[1]
        error += bounds[1]
        for j in range(2, k + 1):
            value *= rates[k - j]
            value += lines[j]
            error *= reaches[k - j]
            error += bounds[j]
        if simple:
            value *= factors.a
            error *= alpha
        values.append(value)
        errors.append(error)
    return Sum(values, errors)
