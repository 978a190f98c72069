"""Which formula serves which point of a block, and the integrals that follow from J(-eps).

With J = Int Q^(-eps), M1 = Int x Q^(-1-eps), M2 = Int (1-x) Q^(-1-eps), P = Int x(1-x) Q^(-1-eps):

    lambda M1 = (1/eps) { -S (m1^2)^(-eps) - 2 m2^2 (m2^2)^(-eps) + A2 (1-2 eps) J },
    p^2 P = m1^2 M1 + m2^2 M2 - J,

S = p^2-m1^2-m2^2, A2 = p^2-m1^2+m2^2.  The first is integration by parts; nothing is divided by
p^2, and its braces vanish at eps = 0.  The second is homogeneity of Q; for small p^2 there is
`loopint.arrays.momentum_slope`.  All of it serves points that `loopint.arrays.ends` leaves, mostly
those where both roots of Q are far from the interval, and is a check of `ends` elsewhere.
"""

from __future__ import annotations

from collections.abc import Callable
from enum import Enum
from functools import partial

import numpy as np
from numpy.typing import NDArray

from loopint.arrays import gauss_rule
from loopint.arrays.circle import power_integral_below_threshold
from loopint.arrays.momentum_slope import momentum_slope, serves
from loopint.arrays.points import Points, complex_points, real_points
from loopint.arrays.quadratic import (
    above_threshold,
    nearer_root_distances,
    power_integral,
)
from loopint.arrays.rounding import QUOTIENT, Number, Real, as_complex, logarithm, quotient, size
from loopint.arrays.series import ArraySeries, exponential


class Master(Enum):
    """An integral over the Feynman parameter: powers of x and 1-x, and whether Q^-1 is present."""

    J = (0, 0, False)
    M1 = (1, 0, True)
    M2 = (0, 1, True)
    P = (1, 1, True)


def expand(
    master: Master,
    kinematics: tuple[Real, Number, Number],
    shift: tuple[Real, Real],
    highest: int,
) -> list[tuple[NDArray[np.intp], ArraySeries]]:
    """Expand through eps^highest at points scaled to largest entry 1/2 to 1.

    For J there is a factor exp(shift eps); `shift` is a number and its absolute error.

    Points come back in disjoint groups, each with one formula: what is computed for a point does
    not depend on the others.  Where no formula serves, errors are inf or nan.
    """
    p, m1, m2 = kinematics
    real = not (np.iscomplexobj(m1) or np.iscomplexobj(m2))
    if real:
        points = real_points(p, m1, m2, *shift)
    else:
        points = complex_points(p, as_complex(m1), as_complex(m2), *shift)
    first, second = nearer_root_distances(points)
    close = first + second < gauss_rule.FAR.distances  # false for nan
    a, b, inverse = master.value
    rule = partial(gauss_rule.moment, highest=highest, a=a, b=b, inverse=inverse)
    if master is Master.P:
        slope = close & serves(points)
        if real:
            slope &= points.kallen > 0
        rest = close & ~slope
    else:
        slope, rest = np.zeros(p.shape, dtype=bool), close
    middle = np.zeros(p.shape, dtype=bool)
    if inverse:  # in J less is lost
        middle = close & (first + second > gauss_rule.MIDDLE.distances)
        slope, rest = slope & ~middle, rest & ~middle
    groups: list[tuple[NDArray[np.bool_], Callable[[Points], ArraySeries]]] = [
        (~close, rule),
        (middle, partial(rule, ellipse=gauss_rule.MIDDLE)),
        (slope, partial(momentum_slope, highest=highest)),
    ]
    from_j = partial(_from_power_integral, master, highest)
    if real:
        below = rest & (points.kallen < 0)
        above = rest & above_threshold(points) & ~below
        groups += [
            (below, partial(from_j, True)),
            (above, partial(from_j, False)),
            (rest & ~(below | above), partial(from_j, False)),
        ]
    else:
        groups.append((rest, partial(from_j, False)))
    found = []
    for mask, evaluate in groups:
        index = np.flatnonzero(mask)
        if index.size:
            some = points if index.size == p.size else points.take(index)
            found.append((index, evaluate(some)))
    return found


def _from_power_integral(master: Master, highest: int, below: bool, points: Points) -> ArraySeries:
    evaluate = power_integral_below_threshold if below else power_integral
    if master is Master.J:
        return evaluate(points, highest)
    series = evaluate(points, highest + 1)
    moments = [m for m, needed in ((1, Master.M1), (2, Master.M2)) if master in (needed, Master.P)]
    found = [_first_moment(points, series, m) for m in moments]
    if master is not Master.P:
        return found[0]
    total = ArraySeries([-v for v in series.values[:-1]], series.errors[:-1])
    for m, moment in zip((points.m1, points.m2), found, strict=True):
        part = moment.scaled(m, 0.0)
        massless = m == 0  # m^2 M is then exactly zero in dimensional regularisation
        total = total + ArraySeries(
            [np.where(massless, 0.0, value) for value in part.values],
            [np.where(massless, 0.0, error) for error in part.errors],
        )
    inverse = 1.0 / points.p
    return total.scaled(inverse, np.abs(inverse))


def _first_moment(points: Points, series: ArraySeries, which: int) -> ArraySeries:
    """Return M1 or M2; infinite errors where the line with the higher power is massless."""
    own, other = (points.m1, points.m2) if which == 1 else (points.m2, points.m1)
    a = points.a2 if which == 1 else points.a1
    length = len(series.values)
    log_own, own_error = logarithm(np.where(own == 0, 1.0, own))
    log_other, other_error = logarithm(np.where(other == 0, 1.0, other))
    own_power = exponential(-log_own, np.where(own == 0, np.inf, own_error), length)
    other_power = exponential(-log_other, other_error, length)
    values, errors = series.values, series.errors
    lowered = ArraySeries(
        [values[0], *(values[k] - 2.0 * values[k - 1] for k in range(1, length))],
        [
            errors[0],
            *(
                errors[k] + 2.0 * errors[k - 1] + size(values[k]) + 2.0 * size(values[k - 1])
                for k in range(1, length)
            ),
        ],
    )
    braces = lowered.scaled(a, points.absolute_error(a))
    braces = braces + own_power.scaled(-points.excess, points.absolute_error(points.excess))
    braces = braces + other_power.scaled(-2.0 * other, 0.0)
    inverse = quotient(np.ones_like(points.kallen), points.kallen)
    without_first = ArraySeries(braces.values[1:], braces.errors[1:])
    return without_first.scaled(inverse, size(inverse) * (points.kallen_error + QUOTIENT))
