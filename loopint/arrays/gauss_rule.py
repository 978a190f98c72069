"""Moments of Q^s by a Gauss-Legendre rule, where both roots of Q are far from [0,1].

In y = 2x-1 let the roots lie outside the ellipse with foci +-1 and sum of semi-axes RHO.  With
y = (z + 1/z)/2 and a root (c + 1/c)/2, |c| >= RHO,

    1 - y/y_root = (1 - z/c)(1 - 1/(z c)) / (1 + c^-2),

which bounds q = log(Q(y)/Q(0)) and Q(0)/Q(y) on every smaller ellipse r < RHO, and the n-point rule
errs by at most (64/15) sup|f| r^(-2n)/(1-r^-2) (Trefethen, SIAM Rev. 50 (2008) 67, theorem 4.5).

Error of q: every root is at least 2.57 away from y, so Q has its three terms' sum bounded by 2 |Q|,
which makes Q known within 8 UNIT, also with the rounding of the node.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from math import factorial, log

import numpy as np
from flint import arb

from loopint.arrays.points import Points
from loopint.arrays.rounding import UNIT, Number, Real, logarithm, quotient, size
from loopint.arrays.series import ArraySeries, constants_times_exponential
from loopint.core.precision import working_precision

RHO = 7.0
NODES = 11
FAR_ROOTS = (RHO + 1.0 / RHO) / 2.0 * (1 + 1e-6)  # |1-x_a| + |x_a| on the ellipse, and rounding


@dataclass(frozen=True, slots=True)
class Node:
    """A node with everything that multiplies; all rounded correctly."""

    x: float
    one_minus_x: float
    product: float
    weight: float


@lru_cache(maxsize=1)
def rule() -> tuple[Node, ...]:
    """Return the Gauss-Legendre rule on [0,1]."""
    nodes = []
    with working_precision(128):
        for n in range(NODES):
            y, weight = arb.legendre_p_root(NODES, n, weight=True)
            x = (1 + y) / 2
            nodes.append(Node(*(float(z.mid()) for z in (x, (1 - y) / 2, x * (1 - x), weight / 2))))
    return tuple(nodes)


@lru_cache(maxsize=32)
def truncation_error(k: int, inverse: bool) -> float:
    """Bound the error of the rule for q^k/k!, or for that times Q(0)/Q, in units of UNIT."""
    best = float("inf")
    for r in np.linspace(2.0, 0.99 * RHO, 100):
        smaller = (1 - r / RHO) * (1 - 1 / (RHO * r))
        log_bound = 2 * (-log(smaller) + RHO**-2 / (1 - RHO**-2))
        sup = log_bound**k / factorial(k)
        if inverse:
            sup *= ((1 + RHO**-2) / smaller) ** 2
        best = min(best, 64 / 15 * sup * r ** (-2 * NODES) / (1 - r**-2))
    return best / UNIT


def moment(
    points: Points, highest: int, a: int = 0, b: int = 0, inverse: bool = False
) -> ArraySeries:
    """Expand Int x^a (1-x)^b Q^(-eps) dx, or with Q^(-1-eps) if `inverse`, through eps^highest."""
    centre = 0.5 * (points.m1 + points.m2) - 0.25 * points.p
    log_centre, centre_error = logarithm(centre)
    values: list[Number] = [np.zeros_like(points.m1) for _ in range(highest + 1)]
    errors: list[Real] = [np.zeros_like(points.p) for _ in range(highest + 1)]
    for node in rule():
        q_value = node.x * points.m1 + node.one_minus_x * points.m2 - node.product * points.p
        log_q, log_error = logarithm(q_value)
        q = log_centre - log_q
        q_error = log_error + centre_error + 12.0 + size(q)
        factor: Number | float = node.weight * node.x**a * node.one_minus_x**b
        term: Number = np.ones_like(points.m1)
        if inverse:
            term = quotient(centre, q_value)
        bound = size(term)
        relative = (20.0 if inverse else 0.0) + 6.0 + NODES
        previous = np.zeros_like(points.p)
        for k in range(highest + 1):
            if k:
                term = term * q / k
                previous, bound = bound, size(term)
                relative += 4.6
            values[k] = values[k] + factor * term
            errors[k] = errors[k] + factor * (relative * bound + q_error * previous)
    for k in range(highest + 1):
        errors[k] = errors[k] + truncation_error(k, inverse)
    result = ArraySeries(values, errors)
    if inverse:
        result = result.scaled(quotient(np.ones_like(centre), centre), 11.0 / size(centre))
    one = [1.0] + [0.0] * highest
    rate, rate_error = points.exponent(log_centre, centre_error + 4.0)
    return result.times(constants_times_exponential(one, rate, rate_error))
