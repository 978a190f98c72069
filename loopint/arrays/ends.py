"""F(eps) J(-eps) and its first derivatives as sums over the two ends, in conditioned formulas.

F = measure * Gamma(1+eps).  With the notation of `loopint.integrals.quadratic` and
w = exp(-2 chi), tanh chi = sigma R/A, an end contributes one of

    far    W m^(-eps) h(u),     W = 2 m/D,  u = -log(1-w)
    near   c m^(-eps) N(t),     c = W exp(chi) = sigma sqrt(m/p^2),  t = chi^2,

N(t) = exp(-chi) g(1-w)/(1-2 eps), which is even in chi: by the quadratic transformation DLMF
15.8.14 it is 2F1(1/2, eps-1/2; eps+1/2; -sinh^2 chi)/(1-2 eps).  Between the thresholds
chi = i psi, tan psi = R/|A|, so that t = -psi^2 and everything is real.  What near ends leave out,
sigma (R/p^2)(lambda/p^2)^(-eps) S with S = Gamma(1-eps) Gamma(2 eps-1)/Gamma(eps), has the form of
T, the integral between the roots, and is combined with it before anything is rounded: with
2 S cos(pi eps) = -B, B = Gamma(1-eps)^2/Gamma(2-2 eps), the sum below threshold, for one, is
-(R/p^2)(-lambda/p^2)^(-eps) B tan(pi eps), and it is zero around the pseudothreshold.

Derivatives divide by lambda only where the integral itself does.  From (S = p^2-m1^2-m2^2 here,
and R with its sigma)

    d(chi_1)/dm1^2 = -S/(2 m1^2 R),  d(chi_2)/dm1^2 = -1/R,  d(chi_1)/dp^2 = A2/(2 p^2 R):

    far, by m1^2    dW1 = W1 (R+S)/(2 m1^2 R),    du1 = 2 p^2 S/(D1 lambda)
                    dW2 = W2/R,                   du2 = 2 p^2 W2/lambda
         by p^2     dW1 = -W1 (R+A2)/(2 p^2 R),   du1 = -W1 A2/lambda
    near, by m1^2   dc1 = c1/(2 m1^2),            dt1 = -(chi_1/R) S/m1^2
                    dc2 = 0,                      dt2 = -2 chi_2/R
         by p^2     dc1 = -c1/(2 p^2),            dt1 = (chi_1/R) A2/p^2

with (R+S)(R-S) = -4 m1^2 m2^2 and (R+A2)(R-A2) = -4 p^2 m2^2 where the first factor cancels.

Bound.  Every contribution is exp(rate eps) sum_k L_k eps^k, L_k = a H_k + b H'_k - g H_(k-1), whose
terms have relative errors of at most rho.  Let r >= |rate|, let M_k be the coefficients of
exp(r eps) sum_k Lmax_k eps^k, Lmax_k = |a| sizes[k] + |b| slope_sizes[k] + |g| sizes[k-1], and let
the rate err by 9 r + x.  An error of the rate costs at most (9 r + x) M_(k-1).  Evaluating the
product by Horner's rule in rate/j costs 3 + PRODUCT units for each factor of the rate, that is
another (3 + PRODUCT) r M_(k-1), and one unit that is counted in rho.  Altogether the k-th
coefficient errs by at most rho M_k + (GROWTH r + x) M_(k-1), in units of UNIT.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from enum import Enum
from typing import Any, TypeAlias

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
GROUPED = 32 * BLOCK  # points that are sorted by region together
REAL_GROWTH, COMPLEX_GROWTH = 13.0, 15.0  # at least 9 + 3 + PRODUCT, where a real PRODUCT is 1
NEAR_REAL = 0.25  # near where 1-w is below
NEAR_COMPLEX = 0.75  # near where Re w is above
LOG1P = 32.0  # relative error of `complex_log1p` where |1+x| >= 1, |x| <= 3

Index: TypeAlias = NDArray[np.intp]
Sizes: TypeAlias = "tuple[Real, Real | None, Real | None]"


class Variable(Enum):
    """What F J is differentiated by; MASS is the squared mass of the first line."""

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

    @property
    def growth(self) -> float:
        """GROWTH of the module text."""
        return REAL_GROWTH if self.real else COMPLEX_GROWTH

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
    """What is asked for: the coefficients of eps^1 ... eps^highest times exp(log_mu eps).

    With `far_only`, points with real masses and near ends are left alone: their errors are inf.
    """

    variable: Variable
    highest: int
    log_mu: float
    tables: EndTables
    far_only: bool = False


@dataclass(frozen=True, slots=True)
class Factors:
    """L_k = a H_k + b H'_k - g H_(k-1); `sizes` bound |a|, |b|, |g|, None being zero.

    `rho` bounds the relative errors of all terms, with respect to `sizes`.
    """

    a: Number
    b: Number | None
    g: Number | None
    sizes: Sizes
    rho: Real


@dataclass(slots=True)
class Sum:
    """Coefficients of eps^1, eps^2, ... and their errors."""

    values: list[Number]
    errors: list[Real]

    def series(self) -> ArraySeries:
        """Return the coefficients as a series."""
        return ArraySeries(self.values, self.errors)


def plain_block(p: Real, m1: Real, m2: Real, circle: bool = False) -> Block:
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
        circle,
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


def expand(work: Work, p: Real, m1: Number, m2: Number) -> Iterator[tuple[Index, ArraySeries]]:
    """Evaluate with lambda and A beyond double precision, in groups of points.

    Where this does not serve, errors are inf or nan.  What is computed for a point does not depend
    on the others.
    """
    if np.iscomplexobj(m1) or np.iscomplexobj(m2):
        for start in range(0, p.size, BLOCK):
            where = np.arange(start, min(start + BLOCK, p.size))
            yield where, _general(work, precise_block(p[where], m1[where], m2[where])).series()
        return
    whole = precise_block(p, m1, m2)
    near = [7.0 * whole.root < np.abs(a) for a in whole.a]
    for index, region in _sorted(p, whole.excess, whole.kallen, m1 - m2, near):
        yield index, _REGIONS[region](work, whole.take(index, region is Region.CIRCLE)).series()


def expand_plain(work: Work, p: Real, m1: Real, m2: Real) -> Iterator[tuple[Index, ArraySeries]]:
    """Evaluate real masses in plain doubles; errors are large near lambda = 0."""
    work = replace(work, far_only=True)
    excess = p - m1
    excess -= m2
    kallen = excess * excess
    kallen -= (4.0 * m1) * m2
    for index, region in _sorted(p, excess, kallen, m1 - m2, []):
        block = plain_block(p[index], m1[index], m2[index], region is Region.CIRCLE)
        yield index, _REGIONS[region](work, block).series()


class Region(Enum):
    """Which formula serves real masses."""

    BELOW = 0
    CIRCLE = 1
    ABOVE = 2


def _sorted(
    p: Real, excess: Real, kallen: Real, difference: Real, more: list[NDArray[np.bool_]]
) -> Iterator[tuple[Index, Region]]:
    """Sort by region, by the presence of T, and by whatever else saves masks later."""
    below = kallen < 0
    above = (p > 0) & (excess > 0) & ~below
    code = below.view(np.uint8).copy()
    for bit, mask in enumerate((above, np.abs(p) >= np.abs(difference), *more), start=1):
        code |= mask.view(np.uint8) << np.uint8(bit)
    for present in np.flatnonzero(np.bincount(code)):
        index = np.flatnonzero(code == present)
        for start in range(0, index.size, BLOCK):
            yield index[start : start + BLOCK], Region(int(present) & 3)


# --- groups of points -------------------------------------------------------------------------


def _circle(work: Work, block: Block) -> Sum:
    """Between the thresholds."""
    total = _near_end(work, block, 0, np.where(block.a[0] < 0, -1.0, 1.0))
    _add(total, _near_end(work, block, 1, np.where(block.a[1] < 0, -1.0, 1.0)))
    both = np.flatnonzero((block.a[0] >= 0) & (block.a[1] >= 0))
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


def _below_pseudothreshold(work: Work, block: Block) -> Sum:
    """Below the pseudothreshold."""
    sigma = nearer_root(block.a[0], block.root), nearer_root(block.a[1], block.root)
    total, near = _both_ends(work, block, sigma)
    root = work.tables.root
    cases = [(np.flatnonzero((sigma[0] == sigma[1]) & (block.p < 0)), _real(root[-1, 0, 0]))]
    if near is not None:
        cases += _singular_cases(work, sigma[0] * near[0] + sigma[1] * near[1])
    return _with_root(work, block, total, cases)


def _general(work: Work, block: Block) -> Sum:
    """Complex masses.

    Near ends leave out a power of lambda/p^2 whose phase is that of w/(v^2 m^2), v = 1-w.  Without
    T it is taken as it is where that phase is principal; otherwise T's power of -lambda/p^2 is.
    """
    sigma = nearer_root(block.a[0], block.root), nearer_root(block.a[1], block.root)
    total, near = _both_ends(work, block, sigma)
    between = np.where((sigma[0] == sigma[1]) & (block.p != 0), sigma[0], 0.0)
    ratio = block.kallen / block.p
    height = -ratio
    height.imag = np.where((between != 0) & (height.imag >= 0), -0.0, height.imag)  # T: Im <= 0
    keys = np.stack([between, np.zeros_like(between), np.zeros_like(between)])
    count = np.zeros_like(between)
    index = np.flatnonzero(near[0] | near[1]) if near is not None else np.zeros(0, dtype=np.intp)
    if near is not None:
        some, plain = block.take(index), between[index] == 0
        for i in range(2):
            step = np.where(near[i][index], sigma[i][index], 0.0)
            phase = _phase(some, i, sigma[i][index])
            plain &= (step == 0) | (np.abs(phase + np.angle(ratio[index])) < 1.0)  # 2 pi n
            up = phase + np.angle(height[index]) > 0  # pi, otherwise -pi
            keys[1, index] += np.where(up, step, 0.0)
            keys[2, index] += np.where(up, 0.0, step)
            count[index] += step
        count[index[~plain]] = 0.0
        keys[:, index[plain]] = 0.0
        height[index[plain]] = ratio[index[plain]]
    cases = _singular_cases(work, count) if index.size else []
    present = {(-1.0, 0.0, 0.0), (1.0, 0.0, 0.0), *map(tuple, keys[:, index].T)}
    for key in sorted(present):
        constants = work.tables.root[int(key[0]), int(key[1]), int(key[2])]
        if any(constants.sizes):
            same = (keys[0] == key[0]) & (keys[1] == key[1]) & (keys[2] == key[2])
            cases.append((np.flatnonzero(same), constants))
    return _with_root(work, block, total, cases, height)


def _phase(block: Block, i: int, sigma: Real) -> Real:
    """Return Im(log w - 2 log(1-w) - log m^2)."""
    d = block.a[i] + sigma * block.root
    v, weight = quotient(2.0 * sigma * block.root, d), quotient(2.0 * block.m[i], d)
    w = 2.0 * block.p * quotient(weight, d)
    phase: Real = np.angle(w) - 2.0 * np.angle(v) - np.angle(block.m[i])
    return phase


def _singular_cases(work: Work, count: Real) -> list[tuple[Index, Constants]]:
    """Return multiples of S by what the near ends leave out."""
    one = work.tables.singular
    cases = []
    for n in (-2, -1, 1, 2):
        index = np.flatnonzero(count == n)
        if index.size:
            constants = Constants(tuple(n * c for c in one), tuple(1.001 * abs(n * c) for c in one))
            cases.append((index, constants))
    return cases


def _real(constants: Constants) -> Constants:
    return Constants(tuple(c.real for c in constants.values), constants.sizes)


def _both_ends(
    work: Work, block: Block, sigma: tuple[Real, Real]
) -> tuple[Sum, tuple[NDArray[np.bool_], NDArray[np.bool_]] | None]:
    """Add the two ends; say which are near, or None if none is."""
    if work.far_only:
        total = _far_end(work, block, 0, sigma[0])
        _add(total, _far_end(work, block, 1, sigma[1]))
        return total, None
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
    d_error += 1.0 if block.real else 2.0
    weight = quotient(2.0 * m, d)
    v = quotient(2.0 * signed, d)
    log_v, u_error = logarithm(v)
    u_error += d_error
    u_error += block.root_error
    u_error += exact_quotient
    serves = u_error < LARGEST_ARGUMENT_ERROR
    if work.far_only:
        serves &= v >= NEAR_REAL
    u_error = np.where(serves, u_error, np.inf)
    u = np.negative(log_v, out=log_v)
    tables = work.tables
    if work.variable is Variable.NONE:
        rho = tables.far.slope * u_error
        rho += d_error
        rho += tables.far.error + exact_quotient + block.product + 5.0
        factors = Factors(weight, None, None, (size(weight), None, None), rho)
        return _evaluate(work, block, i, (tables.far, tables.far_slope), u, factors)
    rho = max(tables.far.slope, tables.far_slope.slope) * u_error
    rho += 2.0 * np.maximum(d_error + block.root_error, d_error + 0.5 * block.kallen_error)
    rho += max(tables.far.error, tables.far_slope.error) + 2.0 * exact_quotient
    rho += 4.0 * block.product + 8.0
    factors = _far_factors(work.variable, block, i, signed, d, weight, rho)
    return _evaluate(work, block, i, (tables.far, tables.far_slope), u, factors)


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
        g_size = size(g)
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
    return Factors(a, b, g, (size(a), b_size, g_size), rho)


def _near_end(work: Work, block: Block, i: int, sigma: Real) -> Sum:
    """Evaluate where w is close to 1 or on the unit circle."""
    p, m = block.p, block.m[i]
    chi: Number
    c: Number
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
        chi = 0.5 * complex_log1p(x)
        t = chi * chi
        chi_error = block.root_error + d_error + block.product + block.quotient + 1.0 + LOG1P
        if block.real:
            c, c_error = sigma * np.sqrt(m / p), 2.0
        else:
            c, c_error = square_root(as_complex(m * (1.0 / p))), 6.0
            weight = quotient(2.0 * m, d)
            c *= np.where(c.real * weight.real + c.imag * weight.imag < 0, -1.0, 1.0)
    t_error = size(t) * (2.0 * chi_error + PRODUCT)
    t_error = np.where(t_error < LARGEST_ARGUMENT_ERROR, t_error, np.inf)
    tables = work.tables
    pair = (tables.near, tables.near_slope)
    rho = max(tables.near.slope, tables.near_slope.slope) * t_error
    rho += max(tables.near.error, tables.near_slope.error) + c_error + 8.0
    if work.variable is Variable.NONE:
        return _evaluate(
            work, block, i, pair, t, Factors(c, None, None, (size(c), None, None), rho)
        )
    rho += chi_error + block.root_error + 4.0 * (block.quotient + block.product)
    at_zero = block.kallen == 0
    if at_zero.any():
        chi, signed = np.where(at_zero, 1.0, chi), np.where(at_zero, block.a[i], signed)
    growth = quotient(chi, signed) * c
    zero = np.zeros_like(p)
    if work.variable is Variable.MASS and i == 0:
        g = quotient(c, m)
        scale = quotient(growth, m)
        b, b_size = -scale * block.excess, size(scale) * (size(block.excess) + block.loose)
        sizes: Sizes = (0.5 * size(g), b_size, size(g))
        return _evaluate(work, block, i, pair, t, Factors(0.5 * g, b, g, sizes, rho))
    if work.variable is Variable.MASS:
        b = -2.0 * growth
        factors = Factors(np.zeros_like(c), b, None, (zero, size(b), None), rho)
        return _evaluate(work, block, i, pair, t, factors)
    other, scale, a = block.a[1 - i], growth / p, c * (-0.5 / p)
    sizes = (size(a), size(scale) * (size(other) + block.loose), None)
    return _evaluate(work, block, i, pair, t, Factors(a, scale * other, None, sizes, rho))


def complex_log1p(x: Number) -> Number:
    """Return log(1+x) for |1+x| >= 1 and |x| <= 3, with relative error LOG1P."""
    if not np.iscomplexobj(x):
        return np.log1p(x)
    a, b = x.real, x.imag
    return as_complex(0.5 * np.log1p(2.0 * a + (a * a + b * b)), np.arctan2(b, 1.0 + a))


def _with_root(
    work: Work,
    block: Block,
    total: Sum,
    cases: list[tuple[Index, Constants]],
    height: Number | None = None,
) -> Sum:
    """Add (R/p^2) height^(-eps) times constants where they apply; |lambda/p^2| if not given."""
    for index, constants in cases:
        if index.size == 0:
            continue
        every = index.size == block.p.size
        some = block if every else block.take(index, block.circle)
        added = _root_part(work, some, constants, None if height is None else height[index])
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


def _root_part(work: Work, block: Block, constants: Constants, height: Number | None) -> Sum:
    p, kallen = block.p, block.kallen
    if height is None:
        height = np.abs(kallen / p)
    if work.variable is Variable.NONE:
        height = np.where(kallen == 0, 1.0, height)  # times R = 0
    logs = logarithm(height)[0]
    extra = block.kallen_error + 4.0
    weight = block.root / p
    rho = block.root_error + 9.0
    simple = work.variable is Variable.NONE
    if simple:
        factors = Factors(weight, None, None, (size(weight), None, None), rho)
        return _product(work, logs, constants.values, constants.sizes, factors, extra)
    rho += block.kallen_error + 5.0 * block.product + block.quotient + 4.0
    scale = quotient(weight, kallen)
    if work.variable is Variable.MASS:
        a = -scale * block.a[1]
        bound = size(scale) * (size(block.a[1]) + block.loose)
        factors = Factors(a, None, 2.0 * a, (bound, None, 2.0 * bound), rho)
    else:
        # the factor of eps is 2 S/lambda - 1/p^2 = A1 A2/(p^2 lambda), the other one
        # S/lambda - 1/p^2 = [p^2 (m1^2+m2^2) - (m1^2-m2^2)^2]/(p^2 lambda), if that loses less
        total, difference = block.m[0] + block.m[1], block.m[0] - block.m[1]
        first, second = p * total, difference * difference
        inverse, small = scale / p, weight / p
        more = scale * block.excess
        more_size = size(scale) * (size(block.excess) + block.loose)
        a_size, direct_size = size(inverse) * (size(first) + size(second)), more_size + size(small)
        direct = direct_size < a_size
        a = np.where(direct, more - small, inverse * (first - second))
        a_size = np.where(direct, direct_size, a_size)
        g = inverse * (block.a[0] * block.a[1])
        g_size = size(block.a[0]) + block.loose
        g_size = size(inverse) * (g_size * (size(block.a[1]) + block.loose))
        factors = Factors(a, None, g, (a_size, None, g_size), rho)
    return _product(work, logs, constants.values, constants.sizes, factors, extra)


def _evaluate(
    work: Work,
    block: Block,
    i: int,
    pair: tuple[EndTable, EndTable],
    x: Number,
    factors: Factors,
) -> Sum:
    """Evaluate an end; exactly zero for a massless one."""
    m = block.m[i]
    massless = m == 0
    some = bool(massless.any())
    logs, _ = logarithm(np.where(massless, 1.0, m) if some else m)
    value, slope = pair
    constant = value is work.tables.far  # its first polynomial
    rows: list[Number | float] = list(value(x, 1 if constant else 0))
    if constant:
        rows.insert(0, float(value.coefficients[-1, 0, 0]))
    slopes = None if factors.b is None else list(slope(x))
    extra = 0.0 if block.real else 1.0
    found = _product(work, logs, rows, value.sizes, factors, extra, slopes, slope.sizes)
    if some:
        own = work.variable is Variable.MASS and i == 0
        for k in range(work.highest):
            found.values[k][massless] = 0.0
            found.errors[k][massless] = np.inf if own else 0.0
    return found


def _product(
    work: Work,
    logs: Number,
    rows: Sequence[Number | complex],
    sizes: tuple[float, ...],
    factors: Factors,
    extra: Real | float,
    slopes: list[Number] | None = None,
    slope_sizes: tuple[float, ...] = (),
) -> Sum:
    """Return the coefficients of exp((log_mu - logs) eps) sum_k L_k eps^k with their errors.

    The logarithms err by 8 |logs| + `extra`.
    """
    highest = work.highest
    reach = size(logs)
    if work.log_mu:
        reach = reach + abs(work.log_mu)
    rate = work.log_mu - logs
    a_size, b_size, g_size = factors.sizes
    simple = factors.b is None and factors.g is None
    lines: list[Any] = list(rows)
    bounds: list[Any] = list(sizes)
    if not simple:
        for k in range(highest + 1):
            lines[k], bounds[k] = factors.a * rows[k], a_size * sizes[k]
            if b_size is not None and slopes is not None:
                lines[k] = lines[k] + (factors.b * slopes[k])
                bounds[k] = bounds[k] + b_size * slope_sizes[k]
            if factors.g is not None and g_size is not None and k:
                lines[k] = lines[k] - factors.g * rows[k - 1]
                bounds[k] = bounds[k] + g_size * sizes[k - 1]
    values = _times_exponential(lines, rate)
    majorants = _times_exponential(bounds, reach)
    growth = REAL_GROWTH if not np.iscomplexobj(factors.a) else COMPLEX_GROWTH
    slack = growth * reach + extra
    errors: list[Real] = []
    previous = bounds[0]
    for majorant in majorants:
        error = slack * previous
        error += factors.rho * majorant
        previous = majorant
        errors.append(error)
    if simple:
        values = [value * factors.a for value in values]
        errors = [error * a_size for error in errors]
    return Sum(values, errors)


def _times_exponential(lines: Sequence[Number | complex], rate: Number) -> list[Number]:
    """Return the coefficients of eps^1, eps^2, ... of exp(rate eps) sum_k lines[k] eps^k.

    Products are not in place: NumPy rounds those of complex arrays differently for one number.
    """
    rates = [rate, *(rate * (1.0 / j) for j in range(2, len(lines)))]
    values = []
    for k in range(1, len(lines)):
        value = rates[k - 1] * lines[0]
        value += lines[1]
        for j in range(2, k + 1):
            value = value * rates[k - j]
            value += lines[j]
        values.append(value)
    return values


_REGIONS = {
    Region.BELOW: _below_pseudothreshold,
    Region.CIRCLE: _circle,
    Region.ABOVE: _above_threshold,
}
