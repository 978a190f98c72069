"""Exact two-point kinematics: the Källén function, thresholds, regions.

Everything here is decided with rational arithmetic, never by a tolerance.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from enum import StrEnum

from flint import acb, arb, fmpq

from loopint.core.errors import InputError
from loopint.core.lazy import lazy
from loopint.core.numbers import ZERO, Ball, ExactComplex
from loopint.core.precision import working_precision

FOUR = fmpq(4)


class Region(StrEnum):
    """Where a point lies relative to the thresholds of its integral."""

    SCALELESS = "scaleless"
    MASSIVE = "massive"
    ZERO_MOMENTUM = "zero_momentum"
    SPACELIKE = "spacelike"
    BELOW_PSEUDOTHRESHOLD = "below_pseudothreshold"
    PSEUDOTHRESHOLD = "pseudothreshold"
    BELOW_THRESHOLD = "below_threshold"
    THRESHOLD = "threshold"
    ON_SHELL = "on_shell"
    ABOVE_THRESHOLD = "above_threshold"
    COMPLEX_MASS = "complex_mass"


def kallen(x: ExactComplex, y: ExactComplex, z: ExactComplex) -> ExactComplex:
    """Return the Källén function x^2 + y^2 + z^2 - 2xy - 2yz - 2zx, exactly.

    Examples
    --------
    >>> from loopint.core.numbers import exact_complex as c
    >>> kallen(c(4), c(1), c(1))
    ExactComplex(re=0, im=0)
    """
    difference = x - y - z
    return difference * difference - (y * z).scaled(FOUR)


def check_mass_squared(value: ExactComplex, name: str) -> ExactComplex:
    """Return a squared mass that is real and >= 0, or complex with negative imaginary part.

    Raises
    ------
    InputError
        For a negative real value, or a positive imaginary part (an unstable particle has
        m^2 - i m Gamma, so Im m^2 <= 0).
    """
    if value.im > ZERO:
        raise InputError(f"{name} has Im = {_short(value.im)} > 0; accepted: Im m^2 <= 0")
    if value.re < ZERO and not value.im:
        raise InputError(f"{name} = {_short(value.re)} is negative; accepted: real m^2 >= 0")
    return value


def _short(value: fmpq) -> str:
    text = str(value)
    return text if len(text) <= 25 else arb(value).str(10, radius=False)


@dataclass(frozen=True)
class OnePoint:
    """Kinematics of a tadpole, in units of mu^2."""

    m_squared: ExactComplex

    @property
    def region(self) -> Region:
        """The region of the point."""
        if self.m_squared.is_zero:
            return Region.SCALELESS
        return Region.MASSIVE if self.m_squared.is_real else Region.COMPLEX_MASS

    @property
    def snapped(self) -> bool:
        """Always False: a tadpole has no threshold to be moved onto."""
        return False

    def scaled(self, factor: fmpq) -> OnePoint:
        """Return the point with every squared mass times a positive factor."""
        return OnePoint(self.m_squared.scaled(factor))


@dataclass(frozen=True)
class TwoPoint:
    """Kinematics of a two-point integral.

    Parameters
    ----------
    p_squared
        Real external p^2, understood as p^2 + i0.
    m1_squared, m2_squared
        Squared masses with Im <= 0, understood as m^2 - i0 when real.
    snapped_onto
        `Region.THRESHOLD`, `PSEUDOTHRESHOLD` or `ON_SHELL` if the user asked that this point be
        moved there; p^2 is then (m1 +- m2)^2 exactly, whatever `p_squared` holds.
    """

    p_squared: fmpq
    m1_squared: ExactComplex
    m2_squared: ExactComplex
    snapped_onto: Region | None = None

    @property
    def snapped(self) -> bool:
        """Whether the point was moved onto a threshold at the user's request."""
        return self.snapped_onto is not None

    @lazy
    def masses_are_real(self) -> bool:
        """Whether both squared masses are real."""
        return not (self.m1_squared.im or self.m2_squared.im)

    @lazy
    def kallen(self) -> ExactComplex:
        """lambda(p^2, m1^2, m2^2), exactly; zero for a snapped point."""
        if self.snapped:
            return ExactComplex(ZERO)
        if not self.masses_are_real:
            return kallen(ExactComplex(self.p_squared), self.m1_squared, self.m2_squared)
        m1, m2 = self.m1_squared.re, self.m2_squared.re
        rest = self.p_squared - m1 - m2
        return ExactComplex(rest * rest - FOUR * m1 * m2)

    @lazy
    def region(self) -> Region:
        """The region of the point, decided exactly."""
        if self.snapped_onto is not None:
            return self.snapped_onto
        p = self.p_squared
        if not p:
            massless = self.m1_squared.is_zero and self.m2_squared.is_zero
            return Region.SCALELESS if massless else Region.ZERO_MOMENTUM
        if not self.masses_are_real:
            return Region.COMPLEX_MASS
        if p < ZERO:
            return Region.SPACELIKE
        m1, m2 = self.m1_squared.re, self.m2_squared.re
        size = self.kallen.re
        if size < ZERO:
            return Region.BELOW_THRESHOLD
        beyond = p - m1 - m2  # zero of lambda: +- 2 m1 m2
        if not (m1 and m2):
            if not size:
                return Region.ON_SHELL
            return Region.ABOVE_THRESHOLD if beyond > ZERO else Region.BELOW_THRESHOLD
        if not size:
            return Region.THRESHOLD if beyond > ZERO else Region.PSEUDOTHRESHOLD
        return Region.ABOVE_THRESHOLD if beyond > ZERO else Region.BELOW_PSEUDOTHRESHOLD

    @property
    def p_squared_ball(self) -> arb:
        """p^2 as a ball at the working precision, also for a snapped point."""
        if self.snapped_onto is None:
            return arb(self.p_squared)
        m1, m2 = arb(self.m1_squared.re).sqrt(), arb(self.m2_squared.re).sqrt()
        total = m1 - m2 if self.snapped_onto is Region.PSEUDOTHRESHOLD else m1 + m2
        return total * total

    def scaled(self, factor: fmpq) -> TwoPoint:
        """Return the point with p^2 and the squared masses times a positive factor."""
        return TwoPoint(
            self.p_squared * factor,
            self.m1_squared.scaled(factor),
            self.m2_squared.scaled(factor),
            self.snapped_onto,
        )

    def exchanged(self) -> TwoPoint:
        """Return the point with the two lines exchanged."""
        return TwoPoint(self.p_squared, self.m2_squared, self.m1_squared, self.snapped_onto)


def snap_to_threshold(point: TwoPoint, tolerance: fmpq) -> TwoPoint:
    """Move a point onto a threshold if it lies within a relative distance of it.

    The point moves when |p^2 - t| <= tolerance * t for t = (m1 + m2)^2 or, for two different
    masses, t = (m1 - m2)^2.  Points exactly on a threshold, points with complex masses and a
    tolerance of zero are returned unchanged.

    Examples
    --------
    >>> from loopint.core.numbers import exact_complex as c, exact_real as r
    >>> near = TwoPoint(r("4.0000001"), c(1), c(1))
    >>> snap_to_threshold(near, r("1e-6")).region
    <Region.THRESHOLD: 'threshold'>
    """
    if tolerance == 0 or not point.masses_are_real or point.kallen.is_zero:
        return point
    massless = point.m1_squared.is_zero or point.m2_squared.is_zero
    candidates = [Region.ON_SHELL] if massless else [Region.THRESHOLD]
    if not massless and point.m1_squared != point.m2_squared:
        candidates.append(Region.PSEUDOTHRESHOLD)
    with working_precision(256):
        for candidate in candidates:
            moved = replace(point, snapped_onto=candidate)
            target = moved.p_squared_ball
            if target > 0 and abs(arb(point.p_squared) - target) <= arb(tolerance) * target:
                return moved
    return point


def squared_mass(m: fmpq, width: fmpq) -> ExactComplex:
    """Return m^2 - i m Gamma for a particle of mass m and width Gamma, both >= 0.

    Raises
    ------
    InputError
        If the mass or the width is negative.
    """
    if m < 0:
        raise InputError(f"mass = {_short(m)} is negative; accepted: mass >= 0")
    if width < 0:
        raise InputError(f"width = {_short(width)} is negative; accepted: width >= 0")
    return ExactComplex(m * m, -m * width)


def logarithm_below_cut(ball: Ball) -> Ball:
    """Return log(z - i0): on the negative real axis the imaginary part is -pi.

    A real negative ball gives log|z| - i pi exactly on that side.
    """
    if isinstance(ball, arb):
        if ball < 0:
            return acb((-ball).log(), -arb.pi())
        return ball.log()
    return ball.log()
