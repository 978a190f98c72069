r"""A bound on the bubble B(1,1) in d0 = 4 as a function of p^2 and one mass, both complex.

Let m be the mass of one line, M > 0 that of the other, t = (m+M)^2 and v = sqrt(t - s), s = p^2.
Through order eps^0 the bubble is a constant and J = Int_0^1 log Q dx, which is with
v0 = 2 sqrt(m M)

    J = -2 + log(m M) + [(m^2-M^2) log(m/M) + 2 v v0 G(v/v0)]/(t - v^2),
    G(z) = sqrt(1-z^2) arccos z

(`loopint.integrals.logarithms` with sqrt(-lambda) = v sqrt(v0^2-v^2); above threshold v = -i u).
G is analytic except on z <= -1: at z = 1 both factors change sign together.  So J is analytic in
(v, m) where Re m > 0, v/v0 is not <= -1, and v is not -(m+M); at v = m+M, where s = 0, the bracket
vanishes because it does for positive masses, where J is the integral and regular.

Let r > 0 be the smallest Re m in a domain of m.  Then Re v0 = 2 sqrt(M) Re sqrt(m) >= 2 sqrt(r M),
and Re(m+M) >= r + M >= 2 sqrt(r M): every singular v has Re v <= -V, V = 2 sqrt(r M).  The bound
of one variable (`loopint.interpolation.analyticity`) has the same form with V in the place of v0.

J is bounded on a product of two ellipses by its values on the product of their boundaries, which
are covered with complex balls.  Close to s = 0 the closed form cancels.  There, with Re m^2 > 0,
Q = Q_0 - x(1-x) s and Q_0 = x m^2 + (1-x) M^2,

    |Q_0| >= Re Q_0 >= x(1-x) T,   T = (sqrt(Re m^2) + M)^2,

so that |s| <= T/2 gives |1 - Q/Q_0| <= 1/2 and |log Q| <= |log Q_0| + 1.3, where Q_0 lies in the
right half-plane between min(Re m^2, M^2) and max(|m|^2, M^2) in modulus.

With I_1, I_2 the interpolation in n_1+1, n_2+1 Chebyshev points and f bounded by B in the product,

    |f - I_1 I_2 f| <= |f - I_1 f| + |I_1 (f - I_2 f)|
                    <= 4 B rho_1^(-n_1)/(rho_1-1) + L(n_1) 4 B rho_2^(-n_2)/(rho_2-1),

L(n) = 2/pi log(n+1) + 1 the bound on the norm of I_1 (Trefethen, Approximation Theory and
Approximation Practice (2013), theorems 8.2 and 15.2).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cache

from flint import acb, arb

from loopint.core.precision import working_precision

ARCS, MOST_ARCS = 24, 24 * 2**6  # of a boundary
BITS = 64
I_UNIT = acb(0, 1)


@dataclass(frozen=True)
class Ellipse:
    """The ellipse of parameter rho around an interval."""

    centre: float
    half: float
    rho: float

    @property
    def leftmost(self) -> float:
        """Its smallest real part."""
        return self.centre - self.half * (self.rho + 1 / self.rho) / 2

    @property
    def lowest(self) -> float:
        """The smaller half-axis."""
        return self.half * (self.rho - 1 / self.rho) / 2

    def arc(self, k: int, arcs: int) -> acb:
        """Enclose the k-th of so many arcs of the boundary in a ball."""
        e = self.rho * _circle_arc(k, arcs)
        return self.centre + self.half * (e + 1 / e) / 2


def largest_modulus(variable: Ellipse, mass: Ellipse, other: float, below: bool) -> float:
    """Bound |J| for v (below threshold) or u = i v in one ellipse and m in the other.

    Everything in units of mu; inf if the ellipses reach a singularity, or the balls prove nothing.
    """
    reach = -variable.leftmost if below else variable.lowest
    if mass.leftmost <= 0 or reach >= 2 * math.sqrt(mass.leftmost * other) * (1 - 1e-12):
        return math.inf
    torus = _Torus(variable, mass, arb(other), below)
    with working_precision(BITS):
        largest = max(torus.bound(i, j, ARCS) for i in range(ARCS) for j in range(ARCS))
    return 1.001 * largest


@dataclass(frozen=True)
class _Torus:
    """The product of both boundaries."""

    variable: Ellipse
    mass: Ellipse
    other: arb
    below: bool

    def bound(self, i: int, j: int, arcs: int) -> float:
        """Bound |J| on the product of two arcs, cut further where s = 0 is not decided."""
        v, m = self.variable.arc(i, arcs), self.mass.arc(j, arcs)
        if not self.below:
            v = -I_UNIT * v
        total = m + self.other
        s = total * total - v * v
        near = _near_zero(s, m * m, self.other * self.other)
        if near is not None:
            return float(near)
        if not s.contains(0):
            product = m * self.other
            v0 = 2 * product.sqrt()
            bracket = (m * m - self.other * self.other) * (m / self.other).log()
            value = product.log() - 2 + (bracket + 2 * v * v0 * _g(v / v0)) / s
            if value.is_finite():
                return float(value.abs_upper())
        if arcs >= MOST_ARCS:
            return math.inf
        return max(self.bound(2 * i + a, 2 * j + b, 2 * arcs) for a in (0, 1) for b in (0, 1))


def _g(z: acb) -> acb:
    """Enclose G(z); close to z = 1 as |arccos z| = 2 |arcsin sqrt((1-z)/2)| <= pi |(1-z)/2|^(1/2).

    |arcsin w| <= arcsin |w| <= pi/2 |w| for |w| <= 1, since its Taylor coefficients are positive.
    """
    rest = (1 - z).abs_upper()
    if rest < arb(1) / 8:
        size = arb(0, (arb.pi() * rest * ((1 + z).abs_upper() / 2).sqrt()).upper())
        return acb(size, size)
    if z.imag.mid() < 0:
        return _g(z.conjugate()).conjugate()
    if z.real.mid() > 1:  # both functions of the definition have their cuts here
        root = (z - 1).sqrt() * (z + 1).sqrt()
        return -root * (z + root).log()
    root = (1 - z * z).sqrt()
    return -I_UNIT * root * (z + I_UNIT * root).log()  # no cancellation for Im z >= 0


def _near_zero(s: acb, m_squared: acb, other_squared: arb) -> arb | None:
    """Bound |J| where |s| <= T/2; None elsewhere."""
    real = m_squared.real.lower()
    if not real > 0:
        return None
    total = real.sqrt() + other_squared.sqrt()
    if not s.abs_upper() <= (total * total / 2).lower():
        return None
    lower, upper = real.min(other_squared), m_squared.abs_upper().max(other_squared)
    sizes = abs(lower.log()).max(abs(upper.log()))
    return (sizes + arb.pi() / 2 + arb("1.3")).upper()


@cache
def _circle_arc(k: int, arcs: int) -> acb:
    with working_precision(BITS):
        return acb(arb(2 * k) / arcs + arb(0, arb(1) / arcs)).exp_pi_i()
