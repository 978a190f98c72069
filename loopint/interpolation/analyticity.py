r"""A bound on the bubble B(1,1) in d0 = 4 at complex p^2, and how fast Chebyshev series converge.

Let s = p^2, t = (m1+m2)^2 and v0 = 2 sqrt(m1 m2), with both masses positive.  Through order eps^0
the bubble is a constant and J = Int_0^1 log Q dx.  In v = sqrt(t - s) the threshold is a regular
point of J: Re v > 0 is the first sheet of s, and on the second sheet, Re v < 0,

    J_II(s) = J_I(s) + D(s),    |D| = 2 pi |R/s|,    R^2 = lambda = v^2 (v^2 - v0^2),

the continued discontinuity, which has no logarithm.  (Higher orders do have one: log(lambda) at
threshold, and are not interpolated.)  D is singular at the pseudothreshold, v = -v0, and at s = 0,
v = -sqrt(t), on the second sheet only.

On the first sheet |J| <= Int |log Q| dx.  If |s| >= t/4 write Q = s (x-x_a)(x-x_b): the roots are
bounded by |x| <= 1 + (|m1^2-m2^2| + t)/(2|s|) <= 5, and Int_0^1 |log|x-a|| dx is at most
2 + log(1+|a|).  If |s| < t/4 then x(1-x) 3t/4 <= |Q| <= 17 t/16.  Both give

    |J| <= A + 2 (2 + log 6) + pi,      A = max(|log(t/4)|, |log max|s||) + 0.3.

On the strip -0.9 v0 < Re v < 0 of the second sheet |s| = |sqrt(t)-v| |sqrt(t)+v| >= t/10.

With one massless line t = m^2 and

    J = -2 + log m^2 + (1 - t/s) L,   L = 2 log(w/m) below threshold, 2 log(u/m) - i pi above,

w = sqrt(t-s), u = sqrt(s-t).  The logarithm at threshold stays in every variable, but J is analytic
where Re w > 0 (s = 0 is regular there, |(1-t/s) L| <= 2.1 for |s| <= t/2) and where Re u > 0 (the
upper half of that plane is the first sheet of s, the lower half the second, with its pole s = 0 at
u = -i m), so that pieces shrink towards the threshold.  On the last one J differs from its value at
threshold by at most (w^2/|s|) (2 |log(w/m)| + pi).  In an ellipse with Re u >= l/10
|s| = |u-im| |u+im| >= l^2/100, and |s| >= t - |u|^2.

A function bounded by M inside the ellipse with foci -1, 1 and half-axes (rho +- 1/rho)/2 differs
from its interpolant in n+1 Chebyshev points by at most 4 M rho^(-n)/(rho-1)
(Trefethen, Approximation Theory and Approximation Practice (2013), theorem 8.2).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Protocol

from loopint.core.conventions import Conventions
from loopint.core.gamma_factors import EpsilonFactor
from loopint.core.precision import working_precision

STRIP = 0.9
HIGHEST_ORDER = 0
GROWTH = 1.001  # more than every rounding in these few operations together
LARGEST_RHO = 60.0
NEAREST = 0.1  # Re w in an ellipse, relative to the start of its piece
INNERMOST = 1e-9  # the last piece in w/m: J changes by less than 1e-16 there


class Geometry(Protocol):
    """Where a bubble is analytic, and how large it is there; lengths in units of mu."""

    def length(self, below: bool, at: float) -> float:
        """Return the length of a good piece from w = at on."""
        ...

    def largest_ellipse(self, below: bool, left: float, right: float) -> float:
        """Return rho of an ellipse around [left, right] that stays where J is analytic."""
        ...

    def bound(self, below: bool, left: float, radius: float) -> float:
        """Return a bound on |J| in the ellipse of a piece that starts at left; |w| <= radius."""
        ...

    def jump(self, stop: float) -> float | None:
        """Return a bound on the change of J from w = 0 to stop, or None if 0 is a regular point."""
        ...


@dataclass(frozen=True)
class Sheets:
    """The geometry of a bubble with positive masses, in units of mu^2.

    Attributes
    ----------
    threshold
        t = (m1+m2)^2.
    v0
        2 sqrt(m1 m2).
    """

    threshold: float
    v0: float

    def largest_ellipse(self, below: bool, left: float, right: float) -> float:
        """Return rho of an ellipse around [left, right] that stays on the strip.

        `below`: the variable is v = sqrt(t-s), limited to the left; else u = sqrt(s-t) = i v,
        limited towards negative imaginary parts.
        """
        half, middle = (right - left) / 2, (right + left) / 2
        if below:
            reach = (middle + STRIP * self.v0) / half  # of the larger half-axis
            return min(reach + math.sqrt(reach * reach - 1), LARGEST_RHO)
        reach = STRIP * self.v0 / half  # of the smaller half-axis
        return min(reach + math.sqrt(reach * reach + 1), LARGEST_RHO)

    def length(self, below: bool, at: float) -> float:
        """Return the length of a good piece: the ellipse grows with the distance."""
        return 0.8 * ((at + STRIP * self.v0) if below else self.v0)

    def jump(self, stop: float) -> None:  # noqa: ARG002 - of every geometry
        """Return None: v = 0 is a regular point."""
        return

    def bound(self, below: bool, left: float, radius: float) -> float:  # noqa: ARG002
        """Return a bound on |J| on both sheets for |v| <= radius."""
        t = self.threshold
        a = max(abs(math.log(t / 4)), abs(math.log(t + radius * radius))) + 0.3
        first = a + 2 * (2 + math.log(6)) + math.pi
        second = 2 * math.pi * radius * math.sqrt(self.v0**2 + radius * radius) / (0.1 * t)
        return GROWTH * (first + second)


@dataclass(frozen=True)
class OneMass:
    """The geometry of a bubble with one massless line; m is the other mass, in units of mu."""

    m: float

    def length(self, below: bool, at: float) -> float:  # noqa: ARG002 - of every geometry
        """Return twice the distance from threshold, and a small length at threshold."""
        return 2 * at if at else INNERMOST * self.m

    def largest_ellipse(self, below: bool, left: float, right: float) -> float:  # noqa: ARG002
        """Return rho of an ellipse around [left, right] with Re w >= left/10."""
        half, middle = (right - left) / 2, (right + left) / 2
        reach = (middle - left * NEAREST) / half
        return min(reach + math.sqrt(reach * reach - 1), LARGEST_RHO) if left else 2.0

    def bound(self, below: bool, left: float, radius: float) -> float:
        """Return a bound on |J| where Re w >= left/10 and |w| <= radius."""
        t = self.m**2
        ends = (left * NEAREST / self.m, radius / self.m)
        logarithm = 2 * max(abs(math.log(end)) for end in ends) + 2 * math.pi
        if below:
            largest = max(3 * logarithm, 2.1)
        else:
            smallest = max((left * NEAREST) ** 2, t - radius**2)
            largest = (1 + t / smallest) * logarithm
        return GROWTH * (2 + abs(math.log(t)) + largest)

    def jump(self, stop: float) -> float:
        """Return a bound on |J(w) - J(0)| for w <= stop, much smaller than m."""
        share = (stop / self.m) ** 2
        return GROWTH * share / (1 - share) * (2 * abs(math.log(stop / self.m)) + math.pi)


def prefactor_sizes(conventions: Conventions) -> tuple[float, float]:
    """Return |a| and |b| of the prefactor a/eps + b, so that |finite part| <= |b| + |a J|."""
    factor = conventions.measure.factor(4) * EpsilonFactor.gamma(0, 1)
    with working_precision(64):
        series = factor.series_through(0)
        return float(abs(series[-1]).upper()), float(abs(series[0]).upper())


def coefficient_bound(modulus: float, conventions: Conventions) -> float:
    """Bound the finite part of B where |J| <= modulus, in units where mu = 1."""
    pole, constant = prefactor_sizes(conventions)
    return GROWTH * (constant + pole * modulus)


def truncation(bound: float, rho: float, degree: int) -> float:
    """Return 4 M rho^(-n)/(rho-1)."""
    return GROWTH * 4 * bound * rho**-degree / (rho - 1)
