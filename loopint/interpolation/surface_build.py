"""Builds interpolants in p^2 and one mass whose error is proven over both ranges."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np
from flint import arb, arb_mat, fmpq

from loopint.core.kinematics import TwoPoint
from loopint.core.laurent import complex_ball
from loopint.core.numbers import ExactComplex, float_with_bound
from loopint.core.precision import working_precision
from loopint.integrals.registry import Evaluator, Integral
from loopint.interpolation.analyticity import (
    GROWTH,
    HIGHEST_ORDER,
    LARGEST_RHO,
    STRIP,
    prefactor_sizes,
    truncation,
)
from loopint.interpolation.chebyshev import (
    BITS,
    NODE_DIGITS,
    SHIFT_ERROR,
    UNIT,
    clenshaw_error,
    from_values,
    lebesgue_constant,
    nearby_rational,
    node,
    shortened,
)
from loopint.interpolation.surface import Strip, SurfaceInterpolant, middle_and_half
from loopint.interpolation.surface_bound import Ellipse, largest_modulus
from loopint.pipeline.errors import ConfigError

if TYPE_CHECKING:
    from loopint.core.conventions import Conventions
    from loopint.interpolation.interpolant import Complex, Real

MOST_PIECES, MOST_DEGREE = 4000, 60
SLAB = 1.6  # the ends of an interval of the mass have at most this ratio
NEAREST = 0.4  # Re m / (middle of the interval) at the left end of its ellipse
MARGIN = 1e-12  # more than the rounding of the ends of the range in w


@dataclass(frozen=True)
class SurfaceJob:
    """One interpolation in two variables, in the user's units.

    Attributes
    ----------
    ends, mass_ends
        The ranges of p^2 and of the mass.
    other_squared
        M^2.
    mass_line
        0 or 1: the line whose mass varies.
    """

    name: str
    integral: str
    orders: tuple[int, ...]
    error: float
    where: str
    conventions: Conventions
    ends: tuple[float, float]
    mass_name: str
    mass_ends: tuple[float, float]
    other_squared: fmpq
    mass_line: int

    def build(self) -> tuple[SurfaceInterpolant, int]:
        """Return the interpolant and the largest degree."""
        slabs = self._slabs()
        with working_precision(BITS):
            unit = float(arb(self.conventions.mu_squared).sqrt().mid())
            root = arb(self.other_squared).sqrt()
            other = float(root.mid())
            low = float((root - arb(other)).mid())
        strips = [self._edges(below, slabs, other) for below in (True, False)]
        rectangles = [
            _Rectangle(below, w, m, other, unit)
            for below, edges in zip((True, False), strips, strict=True)
            for m in _intervals(slabs)
            for w in _intervals(edges)
        ]
        if len(rectangles) > MOST_PIECES:
            raise ConfigError(
                f"{self.where} range and mass_range need {len(rectangles)} pieces; accepted: "
                f"ranges with up to {MOST_PIECES}"
            )
        sizes = prefactor_sizes(self.conventions)
        chosen = [self._degrees(one, sizes) for one in rectangles]
        errors = dict.fromkeys(self.orders, 0.0)
        evaluator = Evaluator(
            Integral.parse("bubble", (1, 1), 4, (-1, HIGHEST_ORDER)),
            self.conventions,
            digits=NODE_DIGITS,
        )
        found: dict[int, list[Complex]] = {order: [] for order in self.orders}
        for one, (n, k, cut) in zip(rectangles, chosen, strict=True):
            for order, (values, error) in self._interpolate(one, n, k, evaluator).items():
                found[order].append(values)
                total = (cut if order >= 0 else 0.0) + error + _evaluation_error(values, one)
                errors[order] = max(errors[order], total)
        for order, error in errors.items():
            if error > self.error:
                raise ConfigError(
                    f"{self.where} error = {self.error} is not reached at order {order} (proven: "
                    f"{error:.1e}); accepted: a larger error"
                )
        coefficients = _stacked(found)
        degree = max(coefficients[self.orders[0]].shape[1:]) - 1
        return self._finished(slabs, strips, coefficients, errors, (other, low)), degree

    def _slabs(self) -> Real:
        """Cut the range of the mass geometrically."""
        first, last = self.mass_ends
        count = max(1, math.ceil(math.log(last / first) / math.log(SLAB)))
        edges = first * (last / first) ** (np.arange(count + 1) / count)
        edges[0], edges[-1] = first, last
        return edges

    def _edges(self, below: bool, slabs: Real, other: float) -> Real:
        """Cut the range of w on one side, for all masses, so that ellipses have room."""
        low, high = self.ends
        nearest, farthest = ((m + other) ** 2 for m in self.mass_ends)
        if below:
            start, stop = nearest - high, farthest - low
        else:
            start, stop = low - farthest, high - nearest
        if stop <= 0:
            return np.zeros(0)
        at = math.sqrt(max(start, 0.0)) * (1 - MARGIN)
        end = math.sqrt(stop) * (1 + MARGIN)
        middle, _ = middle_and_half(slabs[0], slabs[1])
        room = 2 * math.sqrt(NEAREST * middle * other)  # V of the lightest mass
        edges = [at]
        while at < end:
            length = 0.8 * ((at + STRIP * room) if below else room)
            at = end if at + 1.3 * length >= end else at + length
            edges.append(at)
            if len(edges) > MOST_PIECES:
                break
        return np.array(edges)

    def _degrees(self, one: _Rectangle, sizes: tuple[float, float]) -> tuple[int, int, float]:
        """Return the degrees in w and m, and the proven truncation error."""
        variable, mass = one.ellipses
        modulus = largest_modulus(variable, mass, one.other / one.unit, one.below)
        pole, constant = sizes
        bound = GROWTH * (constant + pole * modulus)
        share = self.error / 8
        n, first = self._degree(bound, variable.rho, share)
        norm = lebesgue_constant(n)
        k, second = self._degree(norm * bound, mass.rho, share)
        return n, k, first + second

    def _degree(self, bound: float, rho: float, share: float) -> tuple[int, float]:
        for n in range(1, MOST_DEGREE + 1):
            if (error := truncation(bound, rho, n)) <= share:
                return n, error
        raise ConfigError(
            f"{self.where} error = {self.error} needs a degree beyond {MOST_DEGREE}; accepted: a "
            "larger error, or a mass_range farther from zero"
        )

    def _interpolate(
        self, one: _Rectangle, n: int, k: int, evaluator: Evaluator
    ) -> dict[int, tuple[Complex, float]]:
        """Return the rounded coefficients by order, and the error of nodes and rounding."""
        with working_precision(BITS):
            rows = [
                [evaluator(self._point(one, i, n, j, k)).series for j in range(k + 1)]
                for i in range(n + 1)
            ]
            found = {}
            norm = lebesgue_constant(n) * lebesgue_constant(k)
            for order in self.orders:
                balls = [[complex_ball(series[order]) for series in row] for row in rows]
                radius = max(float(ball.rad().upper()) for row in balls for ball in row)
                re, re_error = _transformed([[ball.real.mid() for ball in row] for row in balls])
                im, im_error = _transformed([[ball.imag.mid() for ball in row] for row in balls])
                error = norm * (radius + SHIFT_ERROR) + re_error + im_error
                values, dropped = shortened(re + 1j * im, self.error / 8)
                found[order] = values, GROWTH * (error + dropped)
        return found

    def _point(self, one: _Rectangle, i: int, n: int, j: int, k: int) -> TwoPoint:
        """Return a node as a point with rational numbers close to it."""
        m = nearby_rational(node(*middle_and_half(*one.m), j, k))
        w = node(*middle_and_half(*one.w), i, n)
        t = (arb(m) + arb(self.other_squared).sqrt()) ** 2
        s = nearby_rational(t - w * w if one.below else t + w * w)
        point = TwoPoint(s, ExactComplex(m * m), ExactComplex(self.other_squared))
        return point if self.mass_line == 0 else point.exchanged()

    def _finished(
        self,
        slabs: Real,
        strips: list[Real],
        coefficients: dict[int, Complex],
        errors: dict[int, float],
        other: tuple[float, float],
    ) -> SurfaceInterpolant:
        count = len(slabs) - 1
        made, start = [], 0
        for edges in strips:
            columns = max(len(edges) - 1, 0)
            stop = start + count * columns
            shaped = {
                order: values[start:stop].reshape(count, columns, *values.shape[1:])
                for order, values in coefficients.items()
            }
            made.append(Strip(edges, shaped))
            start = stop
        return SurfaceInterpolant(
            self.name,
            self.integral,
            self.orders,
            self.ends,
            self.mass_name,
            self.mass_ends,
            errors,
            other,
            slabs,
            made[0],
            made[1],
            self.conventions.described,
        )


@dataclass(frozen=True)
class _Rectangle:
    """A piece: intervals of w and m on one side of the threshold, in the user's units."""

    below: bool
    w: tuple[float, float]
    m: tuple[float, float]
    other: float
    unit: float

    @property
    def ellipses(self) -> tuple[Ellipse, Ellipse]:
        """Ellipses around both intervals that stay away from the singularities, mu = 1."""
        middle, half = middle_and_half(*self.m)
        mass = Ellipse(middle / self.unit, half / self.unit, _rho((1 - NEAREST) * middle / half))
        nearest = 2 * math.sqrt(mass.leftmost * self.other / self.unit)  # V
        middle, half = middle_and_half(*self.w)
        if self.below:  # the larger half-axis reaches to the left
            rho = _rho((middle + STRIP * nearest * self.unit) / half)
        else:  # the smaller one downwards
            reach = STRIP * nearest * self.unit / half
            rho = min(reach + math.sqrt(reach * reach + 1), LARGEST_RHO)
        return Ellipse(middle / self.unit, half / self.unit, 0.999 * rho), mass


def _stacked(found: dict[int, list[Complex]]) -> dict[int, Complex]:
    """Return arrays (piece, j, k), filled up with zeros to one shape."""
    every = [values.shape for one in found.values() for values in one]
    shape = tuple(max(lengths) for lengths in zip(*every, strict=True))
    stacked = {}
    for order, pieces in found.items():
        stacked[order] = np.zeros((len(pieces), *shape), dtype=np.complex128)
        for place, values in zip(stacked[order], pieces, strict=True):
            place[: values.shape[0], : values.shape[1]] = values
    return stacked


def _transformed(values: list[list[arb]]) -> tuple[Real, float]:
    """Return the rounded Chebyshev coefficients in both variables and the sum of the roundings."""
    both = from_values(from_values(arb_mat(values)).transpose()).transpose()
    rounded = [float_with_bound(c) for c in both.entries()]
    numbers = np.array([value for value, _ in rounded]).reshape(both.nrows(), both.ncols())
    return numbers, sum(bound for _, bound in rounded)


def _rho(reach: float) -> float:
    """Return rho of the ellipse whose larger half-axis is `reach` half-lengths."""
    return 0.999 * min(reach + math.sqrt(reach * reach - 1), LARGEST_RHO)


def _intervals(edges: Real) -> Iterator[tuple[float, float]]:
    for start, stop in pairwise(edges):
        yield float(start), float(stop)


def _evaluation_error(c: Complex, one: _Rectangle) -> float:
    """Bound what `SurfaceInterpolant` loses in doubles, u = 2^-53.

    y is within 8u (1 + m/h') and T_k(y) is computed within 2.5u (k+1)^2; with the dot product, for
    each j, sum_k |c_jk| [8 (1 + m/h') k^2 + 2.5 (k+1)^2 + n_2 + 4] u.  w is within
    3u w + sqrt(20) u sqrt(t), twice the latter where the side of the threshold is not certain.
    """
    sizes = np.abs(c.real) + np.abs(c.imag)
    k = np.arange(sizes.shape[1], dtype=np.float64)
    _, half = middle_and_half(*one.m)
    inner = 8 * (1 + one.m[1] / half) * k**2 + 2.5 * (k + 1) ** 2 + sizes.shape[1] + 4
    _, half = middle_and_half(*one.w)
    shift = 8 * (1 + one.w[1] / half) + 10 * (one.m[1] + one.other) / half
    rows = sizes.sum(axis=1)
    return float(1.01 * UNIT * (sizes @ inner).sum()) + clenshaw_error(rows, shift)
