"""A certified interpolant in p^2 and one mass, as a user loads it: NumPy only.

Let m be the mass that varies, M the other and t = (m+M)^2.  Pieces are rectangles in m and
w = sqrt(|t - s|), a set of them below the threshold and one above.  On each every coefficient is
sum_jk c_jk T_j(x) T_k(y) with x = (w - c)/h and y = (m - c')/h'.

t - s cancels close to the threshold, so that it is computed in twice the precision.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from loopint.interpolation.interpolant import Complex, InterpolantError, Real, chebyshev_sum

BLOCK = 32768
SPLITTER = 134217729.0  # 2^27 + 1

Index = NDArray[np.intp]


@dataclass(frozen=True)
class Strip:
    """The pieces on one side of the threshold: a grid of rectangles.

    Attributes
    ----------
    edges
        The ends of the intervals of w, increasing; empty if the range has no point on this side.
    coefficients
        From order to an array (intervals of m, intervals of w, j, k).
    """

    edges: Real
    coefficients: Mapping[int, Complex]

    @property
    def intervals(self) -> int:
        """The number of intervals of w."""
        return max(len(self.edges) - 1, 0)


@dataclass(frozen=True)
class SurfaceInterpolant:
    """Laurent coefficients of one integral as functions of p^2 and the mass of one line.

    Attributes
    ----------
    name, integral
        Its name, and the integral in words.
    orders
        The powers of epsilon.
    range, mass_range
        The ends of the ranges of p^2 and of the mass, in the units of the points.
    mass_name
        The column that is the mass.
    error_bounds
        From order to a proven bound on |true coefficient - value| over both ranges, the rounding
        of the evaluation included.
    other_mass
        M as the sum of two doubles.
    mass_edges
        The ends of the intervals of the mass.
    below, above
        The pieces on both sides of the threshold.
    conventions
        Measure, propagator sign and mu^2.

    Examples
    --------
    >>> surface = load_interpolant("resonance.json")  # doctest: +SKIP
    >>> surface(0, [1.5, 9.2], 1.25)                  # doctest: +SKIP
    """

    name: str
    integral: str
    orders: tuple[int, ...]
    range: tuple[float, float]
    mass_name: str
    mass_range: tuple[float, float]
    error_bounds: Mapping[int, float]
    other_mass: tuple[float, float]
    mass_edges: Real
    below: Strip
    above: Strip
    conventions: Mapping[str, str]

    @property
    def pieces(self) -> int:
        """The number of rectangles."""
        return (len(self.mass_edges) - 1) * (self.below.intervals + self.above.intervals)

    def __call__(
        self, order: int, p_squared: ArrayLike, mass: ArrayLike, *, outside: str = "raise"
    ) -> Complex:
        """Return the coefficient of eps^order.

        Parameters
        ----------
        order
            One of `orders`.
        p_squared, mass
            Numbers or arrays within `range` and `mass_range`; they are broadcast.
        outside
            "raise", or "nan" for points outside the ranges.

        Raises
        ------
        InterpolantError
            For an order that is not held, or a point outside the ranges.
        """
        s, m, shape = self._checked(order, p_squared, mass, outside)
        value = np.full(s.size, complex(np.nan, np.nan))
        for group in self._groups(order, s, m):
            value[group.points] = group.value()
        return value.reshape(shape)

    def gradient(
        self, order: int, p_squared: ArrayLike, mass: ArrayLike, *, outside: str = "raise"
    ) -> tuple[Complex, Complex]:
        """Return the derivatives by p^2 and by the mass; infinite at the threshold itself.

        They are derivatives of the interpolant; their error is not bounded, and small away from
        the threshold.
        """
        s, m, shape = self._checked(order, p_squared, mass, outside)
        by_s, by_m = (np.full(s.size, complex(np.nan, np.nan)) for _ in range(2))
        for group in self._groups(order, s, m):
            by_s[group.points], by_m[group.points] = group.slopes(self.other_mass[0])
        return by_s.reshape(shape), by_m.reshape(shape)

    def _checked(
        self, order: int, p_squared: ArrayLike, mass: ArrayLike, outside: str
    ) -> tuple[Real, Real, tuple[int, ...]]:
        """Return the points as flat arrays, nan where they are outside the ranges."""
        if order not in self.error_bounds:
            raise InterpolantError(
                f"order {order} is not in the interpolant {self.name}; accepted: "
                f"{', '.join(map(str, self.orders))}"
            )
        try:
            s, m = np.broadcast_arrays(
                np.asarray(p_squared, dtype=np.float64), np.asarray(mass, dtype=np.float64)
            )
        except ValueError:
            raise InterpolantError(
                f"p_squared of shape {np.shape(p_squared)} and {self.mass_name} of shape "
                f"{np.shape(mass)} do not fit; accepted: shapes that NumPy broadcasts"
            ) from None
        shape = s.shape
        s, m = s.flatten(), m.flatten()
        outliers = np.zeros(s.size, dtype=bool)
        for what, values, ends in (
            ("p_squared", s, self.range),
            (self.mass_name, m, self.mass_range),
        ):
            wrong = ~((values >= ends[0]) & (values <= ends[1]))
            if wrong.any() and outside != "nan":
                raise InterpolantError(
                    f"{what} = {values[wrong][0]} is outside the range of {self.name}; accepted: "
                    f'{ends[0]} to {ends[1]}, or outside = "nan"'
                )
            outliers |= wrong
        s[outliers] = np.nan
        return s, m, shape

    def _groups(self, order: int, s: Real, m: Real) -> Iterator[_Group]:
        """Sort the points into pieces."""
        for start in range(0, s.size, BLOCK):
            here = start + np.flatnonzero(~np.isnan(s[start : start + BLOCK]))
            distance = threshold_distance(s[here], m[here], self.other_mass)
            slab = np.searchsorted(self.mass_edges[1:-1], m[here], side="right")
            below = distance > 0
            for strip, chosen in ((self.below, below), (self.above, ~below)):
                if not strip.intervals:  # the last bit of a threshold at the end of the range
                    strip = self.above if strip is self.below else self.below  # noqa: PLW2901
                points = np.flatnonzero(chosen)
                w = np.sqrt(np.abs(distance[points]))
                interval = np.searchsorted(strip.edges[1:-1], w, side="right")
                piece = slab[points] * strip.intervals + interval
                by_piece = np.argsort(piece, kind="stable")
                starts = np.flatnonzero(np.diff(piece[by_piece], prepend=-1))
                for part in np.split(by_piece, starts[1:]):
                    if part.size:
                        i, j = divmod(int(piece[part[0]]), strip.intervals)
                        yield _Group(
                            here[points[part]],
                            w[part],
                            m[here[points[part]]],
                            (strip.edges[j], strip.edges[j + 1]),
                            (self.mass_edges[i], self.mass_edges[i + 1]),
                            strip.coefficients[order][i, j],
                            strip is self.below,
                        )

    @property
    def region(self) -> str:
        """The ranges in words."""
        low, high = self.range
        first, last = self.mass_range
        return f"p^2 from {low:g} to {high:g}, {self.mass_name} from {first:g} to {last:g}"

    def _repr_html_(self) -> str:
        rows = "".join(
            f"<tr><td>ε<sup>{k}</sup></td><td>{self.error_bounds[k]:.1e}</td></tr>"
            for k in self.orders
        )
        return (
            f"<p><b>{self.name}</b>: {self.integral}, {self.region}, {self.pieces} pieces</p>"
            f"<table><tr><th>order</th><th>error at most</th></tr>{rows}</table>"
        )

    def __repr__(self) -> str:
        bounds = ", ".join(f"eps^{k}: {self.error_bounds[k]:.1e}" for k in self.orders)
        return (
            f"SurfaceInterpolant({self.name}: {self.integral}, {self.region}, {self.pieces} "
            f"pieces, error <= {{{bounds}}})"
        )


@dataclass(frozen=True)
class _Group:
    """Points in one piece."""

    points: Index
    w: Real
    m: Real
    w_ends: tuple[float, float]
    m_ends: tuple[float, float]
    coefficients: Complex
    below: bool

    def value(self) -> Complex:
        """Return the coefficient of epsilon at the points."""
        x, y = _scaled(self.w, self.w_ends), _scaled(self.m, self.m_ends)
        return _sum_both(self.coefficients, x, chebyshev_values(self.coefficients.shape[1], y))

    def slopes(self, other: float) -> tuple[Complex, Complex]:
        """Return the derivatives by p^2 and by the mass."""
        x, y = _scaled(self.w, self.w_ends), _scaled(self.m, self.m_ends)
        c = self.coefficients
        values = chebyshev_values(c.shape[1], y)
        by_w = _sum_both(_slope(c), x, values) * (2 / (self.w_ends[1] - self.w_ends[0]))
        by_m = _sum_both(_slope(c.T).T, x, values) * (2 / (self.m_ends[1] - self.m_ends[0]))
        sign = -1.0 if self.below else 1.0  # w^2 = -+(t - s)
        with np.errstate(divide="ignore", invalid="ignore"):
            by_s = by_w * (sign / (2 * self.w))
            by_m -= by_w * (sign * (self.m + other) / self.w)
        return by_s, by_m


def threshold_distance(s: Real, m: Real, other: tuple[float, float]) -> Real:
    """Return (m + M)^2 - s within 3u of itself and 20 u^2 (m+M)^2, u = 2^-53.

    The sum m + M = a + b and the square a^2 = p + e are exact but for the low part of M (Dekker,
    Numer. Math. 18 (1971) 224; Knuth, The Art of Computer Programming 2, section 4.2.2).
    """
    a = m + other[0]
    back = a - m
    b = (m - (a - back)) + (other[0] - back) + other[1]
    high = SPLITTER * a
    high -= high - a
    low = a - high
    p = a * a
    e = ((high * high - p) + 2.0 * high * low) + low * low
    return ((p - s) + e) + (2.0 * a + b) * b


def chebyshev_values(count: int, y: Real) -> Real:
    """Return T_0(y) .. T_(count-1)(y) as rows."""
    found = np.ones((count, y.size))
    if count > 1:
        found[1] = y
    double = 2.0 * y
    for k in range(2, count):
        np.multiply(double, found[k - 1], out=found[k])
        found[k] -= found[k - 2]
    return found


def _scaled(value: Real, ends: tuple[float, float]) -> Real:
    centre, half = middle_and_half(*ends)
    return np.clip((value - centre) / half, -1.0, 1.0)


def middle_and_half(start: float, stop: float) -> tuple[float, float]:
    """Return the middle and half the length of an interval, as every evaluation uses them."""
    return (start + stop) / 2, (stop - start) / 2


def _sum_both(c: Complex, x: Real, values: Real) -> Complex:
    """Return sum_jk c_jk T_j(x) T_k(y) with T_k(y) given."""
    result = np.empty(x.size, dtype=np.complex128)
    result.real = chebyshev_sum(c.real @ values, x)
    result.imag = chebyshev_sum(c.imag @ values, x) if c.imag.any() else 0.0
    return result


def _slope(c: Complex) -> Complex:
    """Return the Chebyshev coefficients of the derivative by the first variable."""
    n = len(c)
    found = np.zeros((max(n, 2), c.shape[1]), dtype=np.complex128)
    for j in range(n - 1, 0, -1):
        found[j - 1] = 2 * j * c[j]
        if j + 1 < n:
            found[j - 1] += found[j + 1]
    found[0] /= 2
    return found[:n]
