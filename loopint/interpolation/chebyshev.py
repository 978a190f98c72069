"""Chebyshev interpolation in points of the second kind, and what doubles lose in it."""

from __future__ import annotations

import math
from functools import cache

import numpy as np
from flint import arb, arb_mat, fmpq

from loopint.core.precision import current_bits
from loopint.interpolation.interpolant import Complex, Real

UNIT = 2.0**-53
BITS = 160
NODE_DIGITS = 24
SHIFT_ERROR = 1e-20
"""More than the rounding of the nodes does: at threshold sqrt(2^-BITS) and |dJ/dw| sqrt(t) < 2 pi,
in the rest much less."""


def node(centre: float, half: float, j: int, n: int) -> arb:
    """Return the j-th of n+1 nodes of an interval."""
    return arb(centre) + arb(half) * arb(fmpq(j, n)).cos_pi()


def nearby_rational(ball: arb) -> fmpq:
    """Return the midpoint of a ball."""
    mantissa, exponent = (int(part) for part in ball.mid().man_exp())
    return fmpq(mantissa) * fmpq(2) ** exponent


def lebesgue_constant(n: int) -> float:
    """Bound the interpolant of degree n by its values: Trefethen, theorem 15.2."""
    return 2 / math.pi * math.log(n + 1) + 1


def from_values(values: arb_mat) -> arb_mat:
    """Return the Chebyshev coefficients of the interpolants of values in the nodes, by columns."""
    return _transformation(values.nrows() - 1, current_bits()) * values


@cache
def _transformation(n: int, bits: int) -> arb_mat:  # noqa: ARG001 - the precision found
    """Return the matrix from values in n+1 nodes to coefficients (Trefethen, chapter 3)."""
    half = fmpq(1, 2)
    return arb_mat(
        [
            [
                arb(fmpq(j * k, n)).cos_pi()
                * arb(fmpq(2, n) * (half if j in {0, n} else 1) * (half if k in {0, n} else 1))
                for j in range(n + 1)
            ]
            for k in range(n + 1)
        ]
    )


def clenshaw_error(sizes: Real, shift: float) -> float:
    """Bound what Clenshaw's recurrence loses in doubles.

    Each step adds at most UNIT (4 |2x b_(k+1)| + 3 |b_(k+2)| + 2 |c_k|), which reaches the result
    multiplied by at most k+1, and |b_k| <= sum_j (j-k+1) |c_j|.

    Parameters
    ----------
    sizes
        Bounds on |c_k|.
    shift
        The error of x in units of UNIT.
    """
    n = len(sizes)
    beta = np.zeros(n + 2)
    running = 0.0
    for k in range(n - 1, -1, -1):
        running += sizes[k:].sum()
        beta[k] = running
    place = np.arange(n, dtype=np.float64)
    clenshaw = ((place + 1) * (8 * beta[1 : n + 1] + 3 * beta[2 : n + 2] + 2 * sizes)).sum()
    slope = (place**2 * sizes).sum()
    return float(1.01 * UNIT * (clenshaw + shift * slope + sizes.sum()))


def shortened(c: Complex, error: float) -> tuple[Complex, float]:
    """Drop the last rows and columns as far as their sum allows; return what the error gains.

    The proven degrees are those for any function with the same bound; this one needs fewer.
    """
    sizes = np.abs(c.real) + np.abs(c.imag)
    keep = []
    for axis in (0, 1):
        tail = np.cumsum(sizes.sum(axis=1 - axis)[::-1])[::-1]  # from each place to the end
        keep.append(max(int((tail > error / 2).sum()), 2))
    dropped = sizes[keep[0] :].sum() + sizes[: keep[0], keep[1] :].sum()
    return c[: keep[0], : keep[1]], 1.001 * float(dropped)
