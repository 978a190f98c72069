"""How far an integral moves when its arguments do: bounds for arguments that were rounded.

Let p^2, m1^2 and m2^2 each be known within a relative error delta (of the real and of the imaginary
part, if complex).  On a path from x = 0 to x = 1 around the roots of

    Q = x m1^2 + (1-x) m2^2 - x(1-x) p^2,   T = |x m1^2| + |(1-x) m2^2| + |x(1-x) p^2| <= kappa |Q|,

log Q then moves by at most kappa delta/(1 - kappa delta), and the integrals of log^k Q and
x log^k Q/Q by integrals of their derivatives.  On all paths |x| <= 1 and |1-x| <= 1, so that with
M = |p^2|+|m1^2|+|m2^2|, |x(1-x)| M <= T <= M and
|log|Q|| <= |log M| + log kappa + |log|x(1-x)||.

Paths, for real masses:

*   p^2 < (m1+m2)^2: the interval.  As x(1-x)/(x m1^2 + (1-x) m2^2) <= 1/(m1+m2)^2, kappa is 1 for
    p^2 <= 0 and ((m1+m2)^2 + p^2)/((m1+m2)^2 - p^2) above.
*   p^2 > (m1+m2)^2: with x = t/(1+t) and t = (m2/m1) tau,
    Q = x(1-x) {m1 m2 (tau + 1/tau) - S}, S = p^2-m1^2-m2^2, T <= |x(1-x)| {m1 m2 (r + 1/r) + M}
    for r = |tau|.  The path leads from 0 to i, on the unit circle through 1 to -i, and to -i
    infinity: above the smaller root and below the larger one, as i0 demands.  On the two rays
    kappa = 1 + M/S and the length in x is at most pi/2; on the half-circle
    kappa = (p^2 + (m1+m2)^2)/(p^2 - (m1+m2)^2) and the length is at most pi m1 m2/(m1^2+m2^2).
    The argument of Q stays within (-3 pi/2, 0).  With a massless line there is one ray only.

For complex masses a - i g with a >= 0:

*   p^2 < (sqrt a1 + sqrt a2)^2: the interval, sqrt(kappa^2 + 1) with kappa as for the masses a.
*   The path for the masses a, if g_i <= e a_i and e kappa <= 1/2: kappa (1+e)/(1 - e kappa).
*   The interval, kappa <= 6 + 2 (a_i + 2 p^2)/g_i for each line with a width: where
    x <= a2/(2 p^2), say, Re Q >= x a1 + (1-x) a2/2; elsewhere |Im Q| >= x g1 is at least
    g1/(a1 + 2 p^2) of x a1 + (1-x) a2.

That the path serves the true arguments too follows by continuity: Q vanishes nowhere on it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from loopint.arrays.masters import Master
from loopint.arrays.rounding import UNIT, Number, Real, size

HIGHEST = 3  # orders of eps
MOST = 2.0**-10  # kappa delta and kappa UNIT stay below
SLACK = 1.02  # second orders, and the rounding of all this
ARGUMENT = 5.5  # of Q on a path around roots: at least 3 pi/2 + arcsin(1/2)
# Int |log|x(1-x)||^j |dx| over the interval (1, 2, 4.72) or the rays, per unit of length
INTERIOR = (1.0, 2.0, 4.8)
# Int |log|x||^j |dx| / (m1^2 + |1-x| n), likewise, in units of log(1 + n/m1^2)/n
ONE_SIDED = (1.0, 3.0, 5.0)


@dataclass(frozen=True, slots=True)
class _Path:
    """Length and kappa of the rays (or the interval) and of the half-circle."""

    length: Real
    kappa: Real
    arc: Real
    arc_kappa: Real
    argument: Real


def moved(
    master: Master,
    kinematics: tuple[Real, Number, Number],
    delta: Real,
    log_mu: float,
    prefactor: list[float],
) -> list[Real]:
    """Bound how far prefactor * Master moves, in units of UNIT; infinite where nothing is known.

    Parameters
    ----------
    master, kinematics
        The integral and its arguments.
    delta
        Their relative errors, in units of UNIT.
    log_mu
        The master is multiplied by exp(log_mu eps).
    prefactor
        Coefficients of a series in eps.

    Returns
    -------
    list of arrays
        One for each coefficient of the product, eps^0 first.
    """
    with np.errstate(all="ignore"):
        p, m1, m2 = kinematics
        if master is Master.M2:
            m1, m2 = m2, m1
        path = _path(p, m1, m2)
        if master is Master.J:
            parts = _of_logarithms(path, p, m1, m2, log_mu)
        else:
            parts = _of_inverse(master is Master.P, path, p, m1, m2, log_mu)
        worst = np.maximum(path.kappa, np.where(path.arc > 0, path.arc_kappa, 1.0))
        known = worst * np.maximum(delta, 1.0) * UNIT < MOST  # false for nan
        result = []
        for k in range(len(prefactor)):
            total = sum(abs(prefactor[k - j]) * parts[j] for j in range(k + 1))
            result.append(np.where(known, SLACK * delta * total, np.inf))
        return result


def _of_logarithms(path: _Path, p: Real, m1: Number, m2: Number, log_mu: float) -> list[Real]:
    """Bound the coefficients of J = Int Q^(-eps), for delta = 1."""
    first, second = np.sqrt(size(m1)), np.sqrt(size(m2))
    reach = np.abs(np.log(np.abs(p) + size(m1) + size(m2)) - log_mu) + path.argument
    inside = (first + second) ** 2 / (first * second)
    inside = np.where(path.arc > 0, np.log(inside), 0.0)
    return [np.zeros_like(p), *_moments(path, path.length, path.arc, reach, inside, INTERIOR, 1)]


def _of_inverse(
    both: bool, path: _Path, p: Real, m1: Number, m2: Number, log_mu: float
) -> list[Real]:
    """Bound the coefficients of Int x Q^(-1-eps), or Int x(1-x) Q^(-1-eps), for delta = 1.

    1/|Q| <= kappa/T, |x(1-x)|/T <= 1/M, |x|/T <= 1/(m1^2 + |1-x| (m2^2+|p^2|)).
    """
    own, other, scale = size(m1), size(m2), np.abs(p)
    first, second = np.sqrt(own), np.sqrt(other)
    largest = scale + own + other
    reach = np.abs(np.log(largest) - log_mu) + path.argument
    constants = INTERIOR
    if both:
        weight = arc_weight = 1.0 / largest
        inside = (first + second) ** 2 / (first * second)
    else:
        constants = ONE_SIDED
        reach = reach + np.abs(np.log(own) - log_mu)
        ratio = (other + scale) / own
        weight = np.where(ratio > 0, np.log1p(ratio) / ratio, 1.0) / own
        arc_weight = 1.0 / (own + (other + scale) * first / (first + second))
        inside = (first + second) / second
    inside = np.where(path.arc > 0, np.log(inside), 0.0)
    found = _moments(path, path.length * weight, path.arc * arc_weight, reach, inside, constants, 2)
    return [found[0], found[1] + found[0], found[2] + found[1]]


def _moments(
    path: _Path,
    weight: Real,
    arc_weight: Real,
    reach: Real,
    inside: Real,
    constants: tuple[float, ...],
    power: int,
) -> list[Real]:
    """Integrate kappa^power (|log Q|)^j/j! for j = 0, 1, 2."""
    first, second = path.kappa**power * weight, path.arc_kappa**power * arc_weight
    on_rays = reach + np.log(path.kappa)
    on_arc = reach + np.log(path.arc_kappa) + inside
    return [
        (first * _moment(on_rays, constants, j) + second * on_arc**j) / (1.0, 1.0, 2.0)[j]
        for j in range(HIGHEST)
    ]


def _moment(constant: Real, moments: tuple[float, ...], j: int) -> Real:
    """Return the mean of (constant + l)^j, given the means of powers of l."""
    if j == 0:
        return np.ones_like(constant)
    if j == 1:
        return constant + moments[1]
    return constant * constant + 2.0 * moments[1] * constant + moments[2]


def _path(p: Real, m1: Number, m2: Number) -> _Path:
    a1, a2 = np.real(m1), np.real(m2)
    threshold = (np.sqrt(a1) + np.sqrt(a2)) ** 2
    timelike = np.maximum(p, 0.0)
    distance = threshold - timelike
    kappa = (threshold + timelike) / np.abs(distance)
    around = (distance < 0) & (p > 0)
    excess = p - a1 - a2
    product = np.sqrt(a1) * np.sqrt(a2)
    path = _Path(
        np.where(around, 0.5 * np.pi, 1.0),
        np.where(around, 1.0 + (p + a1 + a2) / excess, np.where(p > 0, kappa, 1.0)),
        np.where(around & (product > 0), np.pi * product / (a1 + a2), 0.0),
        np.where(around & (product > 0), kappa, 1.0),
        np.where(around, ARGUMENT, 0.1),
    )
    if np.iscomplexobj(m1) or np.iscomplexobj(m2):
        return _with_widths(path, p, (a1, a2), (-np.imag(m1), -np.imag(m2)), around)
    return path


def _with_widths(
    path: _Path, p: Real, a: tuple[Real, Real], g: tuple[Real, Real], around: Number
) -> _Path:
    """Adapt a path for the masses a to the masses a - i g."""
    stable = (g[0] == 0) & (g[1] == 0)
    narrow = np.maximum(*(np.where(y == 0, 0.0, y / x) for x, y in zip(a, g, strict=True)))
    room = 1.0 - narrow * np.maximum(path.kappa, path.arc_kappa)
    growth = (1.0 + narrow) / np.where(room >= 0.5, room, np.nan)
    direct = np.minimum(
        *(np.where(y > 0, 6.0 + 2.0 * (x + 2.0 * p) / y, np.inf) for x, y in zip(a, g, strict=True))
    )
    cost = growth * (path.length * path.kappa + path.arc * path.arc_kappa)
    straight = around & ~stable & ~(cost < direct)
    bent = around & ~straight & ~stable
    kappa = np.where(around, path.kappa * np.where(bent, growth, 1.0), np.hypot(path.kappa, 1.0))
    kappa = np.where(stable, path.kappa, np.where(straight, direct, kappa))
    kappa = np.where((a[0] < 0) | (a[1] < 0), np.inf, kappa)
    return _Path(
        np.where(straight, 1.0, path.length),
        kappa,
        np.where(straight, 0.0, path.arc),
        np.where(bent, path.arc_kappa * growth, path.arc_kappa),
        np.where(stable, path.argument, ARGUMENT),
    )
