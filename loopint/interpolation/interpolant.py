"""A certified interpolant as a user loads it: NumPy only.

The range of s = p^2 is cut into pieces at the threshold t.  On each piece every coefficient is a
Chebyshev series in x = (w - c)/h, where w = sqrt(t - s) below the threshold and sqrt(s - t) above:
in that variable the threshold is a regular point.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import ArrayLike, NDArray

from loopint.core.errors import LoopintError

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
BLOCK = 8192  # the working set stays in the cache


class InterpolantError(LoopintError):
    """An interpolant that cannot be loaded, or an argument outside its range."""


@dataclass(frozen=True)
class Interpolant:
    """Laurent coefficients of one integral as functions of p^2 over a range.

    Attributes
    ----------
    name, integral
        Its name, and the integral in words.
    orders
        The powers of epsilon.
    range
        The ends of the range of p^2, in the units of the points.
    error_bounds
        From order to a proven bound on |true coefficient - value| over the whole range, the
        rounding of the evaluation included.
    edges
        The ends of the pieces in s, increasing.
    coefficients
        From order to an array (pieces, degree + 1) of Chebyshev coefficients.
    conventions
        Measure, propagator sign and mu^2.

    Examples
    --------
    >>> interpolant = load_interpolant("resonance.json")  # doctest: +SKIP
    >>> interpolant(0, [1.5, 9.2])                        # doctest: +SKIP
    """

    name: str
    integral: str
    orders: tuple[int, ...]
    range: tuple[float, float]
    error_bounds: Mapping[int, float]
    threshold: tuple[float, float]
    edges: Real
    centres: Real
    halves: Real
    coefficients: Mapping[int, Complex]
    conventions: Mapping[str, str]

    @property
    def region(self) -> str:
        """The range in words."""
        return f"p^2 from {self.range[0]:g} to {self.range[1]:g}"

    @property
    def pieces(self) -> int:
        """The number of pieces."""
        return len(self.centres)

    @cached_property
    def pieces_below(self) -> int:
        """The number of pieces below the threshold."""
        return int((self.edges[1:] <= self.threshold[0]).sum())

    def __call__(self, order: int, p_squared: ArrayLike, *, outside: str = "raise") -> Complex:
        """Return the coefficient of eps^order.

        Parameters
        ----------
        order
            One of `orders`.
        p_squared
            Numbers or an array within `range`.
        outside
            "raise", or "nan" for points outside the range.

        Raises
        ------
        InterpolantError
            For an order that is not held, or a point outside the range.
        """
        s = self._checked(order, p_squared, outside)
        coefficients = self.coefficients[order]
        value = np.empty(s.size, dtype=np.complex128)
        for start in range(0, s.size, BLOCK):
            block = slice(start, start + BLOCK)
            _, piece, x = self._locate(s[block])
            value[block] = _clenshaw(coefficients, piece, x)
        value[np.isnan(s)] = complex(np.nan, np.nan)
        return value.reshape(np.shape(p_squared))

    def gradient(self, order: int, p_squared: ArrayLike, *, outside: str = "raise") -> Complex:
        """Return the derivative by p^2; infinite at the threshold itself.

        It is the derivative of the interpolant; its error is not bounded, and small away from the
        threshold.
        """
        s = self._checked(order, p_squared, outside)
        slopes = _derivative(self.coefficients[order])
        value = np.empty(s.size, dtype=np.complex128)
        for start in range(0, s.size, BLOCK):
            block = slice(start, start + BLOCK)
            below, piece, x = self._locate(s[block])
            half = self.halves[piece]
            w = x * half + self.centres[piece]
            with np.errstate(divide="ignore", invalid="ignore"):
                chain = np.where(below, -0.5, 0.5) / (w * half)
                value[block] = _clenshaw(slopes, piece, x) * chain
        value[np.isnan(s)] = complex(np.nan, np.nan)
        return value.reshape(np.shape(p_squared))

    def _checked(self, order: int, p_squared: ArrayLike, outside: str) -> Real:
        """Return the points as a flat array, nan where they are outside the range."""
        if order not in self.coefficients:
            raise InterpolantError(
                f"order {order} is not in the interpolant {self.name}; accepted: "
                f"{', '.join(map(str, self.orders))}"
            )
        s = np.array(p_squared, dtype=np.float64).ravel()
        wrong = ~((s >= self.range[0]) & (s <= self.range[1]))
        if wrong.any():
            if outside != "nan":
                raise InterpolantError(
                    f"p_squared = {s[wrong][0]} is outside the range of {self.name}; accepted: "
                    f'{self.range[0]} to {self.range[1]}, or outside = "nan"'
                )
            s[wrong] = np.nan
        return s

    def _locate(self, s: Real) -> tuple[NDArray[np.bool_], NDArray[np.intp], Real]:
        """Return whether s is below threshold, its piece, and x within the piece."""
        distance = (s - self.threshold[0]) - self.threshold[1]
        below = distance < 0
        piece = np.searchsorted(self._inner_edges, s, side="right")
        # the threshold is no double: the sign of the distance decides, not the edge
        side = self.pieces_below
        if 0 < side < len(self.centres):
            piece = np.where(below, np.minimum(piece, side - 1), np.maximum(piece, side))
        w = np.sqrt(np.abs(distance))
        x = np.clip((w - self.centres[piece]) / self.halves[piece], -1.0, 1.0)
        return below, piece, x

    @cached_property
    def _inner_edges(self) -> Real:
        return self.edges[1:-1]

    def _repr_html_(self) -> str:
        rows = "".join(
            f"<tr><td>ε<sup>{k}</sup></td><td>{self.error_bounds[k]:.1e}</td></tr>"
            for k in self.orders
        )
        return (
            f"<p><b>{self.name}</b>: {self.integral}, p² from {self.range[0]:g} to "
            f"{self.range[1]:g}, {len(self.centres)} pieces</p><table><tr><th>order</th>"
            f"<th>error at most</th></tr>{rows}</table>"
        )

    def __repr__(self) -> str:
        bounds = ", ".join(f"eps^{k}: {self.error_bounds[k]:.1e}" for k in self.orders)
        return (
            f"Interpolant({self.name}: {self.integral}, p^2 in [{self.range[0]:g}, "
            f"{self.range[1]:g}], {len(self.centres)} pieces, error <= {{{bounds}}})"
        )


def _clenshaw(coefficients: Complex, piece: NDArray[np.intp], x: Real) -> Complex:
    """Sum Chebyshev series, each point with the coefficients of its piece."""
    first, last = int(piece.min()), int(piece.max())
    result = np.empty(x.size, dtype=np.complex128)
    if first == last:
        result.real, result.imag = (chebyshev_sum(c, x) for c in _parts(coefficients[first]))
        return result
    order = np.argsort(piece, kind="stable")
    x, piece = x[order], piece[order]
    starts = np.searchsorted(piece, np.arange(first, last + 2))
    for i in range(first, last + 1):
        block = order[starts[i - first] : starts[i - first + 1]]
        if block.size:
            inside = x[starts[i - first] : starts[i - first + 1]]
            re, im = _parts(coefficients[i])
            result.real[block] = chebyshev_sum(re, inside)
            result.imag[block] = chebyshev_sum(im, inside)
    return result


def _parts(c: Complex) -> tuple[Real, Real]:
    return c.real, c.imag


def chebyshev_sum(c: Real, x: Real) -> Real:
    """Return sum_k c_k T_k(x) by Clenshaw's recurrence; each c_k is a number or an array like x."""
    if not c.any():
        return np.zeros_like(x)
    length = int(np.flatnonzero(c.any(axis=tuple(range(1, c.ndim))))[-1]) + 1
    double = 2.0 * x
    above, current, work = np.zeros_like(x), np.zeros_like(x), np.empty_like(x)
    for k in range(length - 1, 0, -1):
        np.multiply(double, current, out=work)
        work -= above
        work += c[k]
        above, current, work = current, work, above
    result: Real = x * current - above + c[0]
    return result


def _derivative(coefficients: Complex) -> Complex:
    """Return the Chebyshev coefficients of the derivatives by x."""
    n = coefficients.shape[1]
    found = np.zeros((coefficients.shape[0], max(n, 2)), dtype=np.complex128)
    for k in range(n - 1, 0, -1):
        found[:, k - 1] = 2 * k * coefficients[:, k]
        if k + 1 < found.shape[1]:
            found[:, k - 1] += found[:, k + 1]
    found[:, 0] /= 2
    return found
