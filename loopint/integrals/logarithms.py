"""The integral of log Q in logarithms: all that B(1,1) in d0 = 4 needs through order eps^0.

For real masses, with R = sqrt(|lambda|), A1 = p^2 + m1^2 - m2^2, A2 = p^2 - m1^2 + m2^2 and
c = m1^2 + m2^2 - p^2,

    Int_0^1 log(Q - i0) dx = -2 + (A1 log m1^2 + A2 log m2^2)/(2 p^2) + R/p^2 * Y,

    Y = -log((c+R)/(2 m1 m2))           p^2 < (m1-m2)^2,
    Y =  atan2(R, c)                    between the thresholds,
    Y =  log((R-c)/(2 m1 m2)) - i pi    p^2 > (m1+m2)^2

('t Hooft and Veltman, Nucl. Phys. B153 (1979) 365, appendix D, with the roots written out), and

    Int_0^1 log(Q - i0) dx = -2 + log m^2 - (m^2-p^2)/p^2 log((m^2-p^2-i0)/m^2)

for one massless line.  This is the same number as `loopint.integrals.quadratic` gives, several
times faster; small p^2 cancels here and not there, so that a result which has lost more than
`LOST_BITS` is given up for it.
"""

from __future__ import annotations

from flint import acb, arb, fmpq

from loopint.core.kinematics import TwoPoint, logarithm_below_cut
from loopint.core.numbers import Ball
from loopint.core.precision import current_bits

LOST_BITS = 14
ZERO = fmpq(0)


def logarithm_integral(point: TwoPoint) -> Ball | None:
    """Return Int_0^1 log Q dx for real masses, p^2 != 0 and lambda != 0, or None if it cancels."""
    m1, m2 = point.m1_squared.re, point.m2_squared.re
    if m1 and m2:
        value = _two_masses(point.p_squared, m1, m2, point.kallen.re)
    else:
        value = _one_mass(point.p_squared, m1 or m2)
    lost = current_bits() - int(value.rel_accuracy_bits())
    return value if lost <= LOST_BITS else None


def _two_masses(p: fmpq, m1: fmpq, m2: fmpq, kallen: fmpq) -> Ball:
    twice = arb(2 * p)
    below = arb(m1 + m2 - p)
    log1, log2 = arb(m1).log(), arb(m2).log()
    both = log1 + log2
    ends = p * both + (m1 - m2) * (log1 - log2)
    if kallen < ZERO:
        root = arb(-kallen).sqrt()
        return (ends + 2 * root * arb.atan2(root, below)) / twice - 2
    root = arb(kallen).sqrt()
    if p < m1 + m2:
        return (ends + root * (both - 2 * ((root + below) / 2).log())) / twice - 2
    real = ends + root * (2 * ((root - below) / 2).log() - both)
    return acb(real / twice - 2, -2 * arb.pi() * root / twice)


def _one_mass(p: fmpq, m: fmpq) -> Ball:
    rest = m - p
    ratio = logarithm_below_cut(arb(rest / m))
    return arb(m).log() - 2 - arb(rest / p) * ratio
