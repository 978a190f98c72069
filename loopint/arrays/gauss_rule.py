"""Moments of Q^s by a Gauss-Legendre rule, where both roots of Q are far from [0,1].

In y = 2x-1 let the roots lie outside the ellipse with foci +-1 and sum of semi-axes RHO.  With
y = (z + 1/z)/2 and a root (c + 1/c)/2, |c| >= RHO,

    1 - y/y_root = (1 - z/c)(1 - 1/(z c)) / (1 + c^-2),

which bounds q = log(Q(y)/Q(0)) and Q(0)/Q(y) on every smaller ellipse r < RHO, and the n-point rule
errs by at most (64/15) sup|f| r^(-2n)/(1-r^-2) (Trefethen, SIAM Rev. 50 (2008) 67, theorem 4.5).

Error of Q: each of its three terms is within 4 UNIT, also with the rounding of the node, and the
sum adds at most 2 UNIT of the sizes' sum.  For RHO = 7 every root is at least 2.57 away from y, so
that sum is at most 2 |Q|; for the nearer roots it is computed.
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


@dataclass(frozen=True, slots=True)
class Ellipse:
    """Sum of the semi-axes of an ellipse without roots of Q, and how many nodes then suffice."""

    rho: float
    nodes: int

    @property
    def distances(self) -> float:
        """|1-x_a| + |x_a| on the ellipse, and rounding."""
        return (self.rho + 1.0 / self.rho) / 2.0 * (1 + 1e-6)


FAR = Ellipse(7.0, 11)
MIDDLE = Ellipse(1.6, 58)


@dataclass(frozen=True, slots=True)
class Node:
    """A node with everything that multiplies; all rounded correctly."""

    x: float
    one_minus_x: float
    product: float
    weight: float


@lru_cache(maxsize=4)
def rule(count: int) -> tuple[Node, ...]:
    """Return the Gauss-Legendre rule on [0,1]."""
    nodes = []
    with working_precision(128):
        for n in range(count):
            y, weight = arb.legendre_p_root(count, n, weight=True)
            x = (1 + y) / 2
            nodes.append(Node(*(float(z.mid()) for z in (x, (1 - y) / 2, x * (1 - x), weight / 2))))
    return tuple(nodes)


@lru_cache(maxsize=64)
def truncation_error(ellipse: Ellipse, k: int, inverse: bool) -> float:
    """Bound the error of the rule for q^k/k!, or for that times Q(0)/Q, in units of UNIT."""
    best, rho = float("inf"), ellipse.rho
    for r in np.linspace(1.2, 0.99 * rho, 100):
        smaller = (1 - r / rho) * (1 - 1 / (rho * r))
        log_bound = 2 * (-log(smaller) + rho**-2 / (1 - rho**-2))
        sup = log_bound**k / factorial(k)
        if inverse:
            sup *= ((1 + rho**-2) / smaller) ** 2
        best = min(best, 64 / 15 * sup * r ** (-2 * ellipse.nodes) / (1 - r**-2))
    return best / UNIT


def moment(
    points: Points,
    highest: int,
    a: int = 0,
    b: int = 0,
    inverse: bool = False,
    ellipse: Ellipse = FAR,
) -> ArraySeries:
    """Expand Int x^a (1-x)^b Q^(-eps) dx, or with Q^(-1-eps) if `inverse`, through eps^highest."""
    centre = 0.5 * (points.m1 + points.m2) - 0.25 * points.p
    log_centre, centre_error = logarithm(centre)
    values: list[Number] = [np.zeros_like(points.m1) for _ in range(highest + 1)]
    errors: list[Real] = [np.zeros_like(points.p) for _ in range(highest + 1)]
    sizes = size(points.m1), size(points.m2), np.abs(points.p)
    rounding: Real | float = 8.0
    centre_rounding: Real | float = 4.0
    if ellipse is not FAR:
        total = 0.5 * (sizes[0] + sizes[1]) + 0.25 * sizes[2]
        centre_rounding = 1.0 + 3.0 * total / size(centre)
    for node in rule(ellipse.nodes):
        q_value = node.x * points.m1 + node.one_minus_x * points.m2 - node.product * points.p
        if ellipse is not FAR:
            total = node.x * sizes[0] + node.one_minus_x * sizes[1] + node.product * sizes[2]
            rounding = 6.0 * total / size(q_value)
        log_q, log_error = logarithm(q_value)
        q = log_centre - log_q
        q_error = log_error + centre_error + centre_rounding + rounding + size(q)
        factor: Number | float = node.weight * node.x**a * node.one_minus_x**b
        term: Number = np.ones_like(points.m1)
        if inverse:
            term = quotient(centre, q_value)
        bound = size(term)
        relative = (centre_rounding + rounding + 8.0 if inverse else 0.0) + 6.0 + ellipse.nodes
        previous = np.zeros_like(points.p)
        for k in range(highest + 1):
            if k:
                term = term * q / k
                previous, bound = bound, size(term)
                relative += 4.6
            values[k] = values[k] + factor * term
            errors[k] = errors[k] + factor * (relative * bound + q_error * previous)
    for k in range(highest + 1):
        errors[k] = errors[k] + truncation_error(ellipse, k, inverse)
    result = ArraySeries(values, errors)
    if inverse:
        result = result.scaled(
            quotient(np.ones_like(centre), centre), (centre_rounding + 7.0) / size(centre)
        )
    one = [1.0] + [0.0] * highest
    rate, rate_error = points.exponent(log_centre, centre_error + centre_rounding)
    return result.times(constants_times_exponential(one, rate, rate_error))
