"""Exact input numbers and the way back from balls to floats, mpmath numbers and decimals.

Kinematic input is never rounded: `"0.1"` is 1/10, a float is its exact binary value.  That is
what allows p^2 = (m1+m2)^2 to be decided instead of guessed.
"""

from __future__ import annotations

import math
import numbers
import re
from dataclasses import dataclass
from decimal import Decimal, InvalidOperation
from fractions import Fraction
from typing import TypeAlias

import mpmath
from flint import acb, arb, fmpq
from mpmath.libmp import from_man_exp

from loopint.core.errors import InputError
from loopint.core.precision import BITS_PER_DIGIT, working_precision

MAX_EXPONENT = 10_000
MAX_LENGTH = 20_000
REAL_KINDS = "an int, Fraction, Decimal, finite float, or a string such as '0.1', '1e-3' or '1/3'"
_RATIONAL = re.compile(r"\s*([+-]?\d+)\s*/\s*(\d+)\s*\Z")

Ball: TypeAlias = arb | acb
RealInput: TypeAlias = "int | float | str | Fraction | Decimal | mpmath.mpf | fmpq"
ComplexInput: TypeAlias = (
    "RealInput | complex | mpmath.mpc | ExactComplex | tuple[RealInput, RealInput]"
)

ZERO = fmpq(0)


@dataclass(frozen=True, slots=True)
class ExactComplex:
    """A complex number with rational real and imaginary parts.

    Examples
    --------
    >>> exact_complex(("1/3", -2)) * exact_complex(3)
    ExactComplex(re=1, im=-6)
    """

    re: fmpq
    im: fmpq = ZERO

    @property
    def is_real(self) -> bool:
        """Whether the imaginary part is exactly zero."""
        return not self.im

    @property
    def is_zero(self) -> bool:
        """Whether the number is exactly zero."""
        return not self.re and not self.im

    def __add__(self, other: ExactComplex) -> ExactComplex:
        return ExactComplex(self.re + other.re, self.im + other.im)

    def __sub__(self, other: ExactComplex) -> ExactComplex:
        return ExactComplex(self.re - other.re, self.im - other.im)

    def __neg__(self) -> ExactComplex:
        return ExactComplex(-self.re, -self.im)

    def __mul__(self, other: ExactComplex) -> ExactComplex:
        return ExactComplex(
            self.re * other.re - self.im * other.im, self.re * other.im + self.im * other.re
        )

    @property
    def norm(self) -> fmpq:
        """The square of the absolute value."""
        return self.re * self.re + self.im * self.im

    def scaled(self, factor: fmpq) -> ExactComplex:
        """Return the number times a rational factor."""
        return ExactComplex(self.re * factor, self.im * factor)

    def __truediv__(self, other: ExactComplex) -> ExactComplex:
        return (self * other.conjugate()).scaled(1 / other.norm)

    def conjugate(self) -> ExactComplex:
        """Return the complex conjugate."""
        return ExactComplex(self.re, -self.im)

    def ball(self) -> Ball:
        """Enclose the number at the working precision: an `arb` if real, else an `acb`."""
        return acb(arb(self.re), arb(self.im)) if self.im else arb(self.re)

    def __repr__(self) -> str:
        return f"ExactComplex(re={self.re}, im={self.im})"


def _shown(value: object) -> str:
    text = repr(value)
    return text if len(text) <= 60 else text[:57] + "..."


def _from_decimal(value: Decimal, shown: object) -> fmpq:
    if not value.is_finite():
        raise InputError(f"{_shown(shown)} is not a finite number; accepted: {REAL_KINDS}")
    if not value:
        return ZERO
    if abs(value.adjusted()) > MAX_EXPONENT:
        raise InputError(
            f"{_shown(shown)} has a decimal exponent beyond +-{MAX_EXPONENT}, the largest accepted"
        )
    return fmpq(*value.as_integer_ratio())


def _from_string(value: str) -> fmpq:
    if len(value) > MAX_LENGTH:
        raise InputError(f"{_shown(value)} is longer than {MAX_LENGTH} characters")
    if match := _RATIONAL.match(value):
        numerator = _from_decimal(Decimal(match[1]), value)
        denominator = _from_decimal(Decimal(match[2]), value)
        if denominator == 0:
            raise InputError(f"{_shown(value)} divides by zero; accepted: {REAL_KINDS}")
        return numerator / denominator
    try:
        number = Decimal(value.strip())
    except InvalidOperation:
        raise InputError(f"{_shown(value)} is not a number; accepted: {REAL_KINDS}") from None
    return _from_decimal(number, value)


def _from_float(value: float) -> fmpq:
    if not math.isfinite(value):
        raise InputError(f"{value!r} is not a finite number; accepted: {REAL_KINDS}")
    return fmpq(*value.as_integer_ratio())


def _from_mpf(value: mpmath.mpf) -> fmpq:
    if not mpmath.isfinite(value):
        raise InputError(f"{_shown(value)} is not a finite number; accepted: {REAL_KINDS}")
    sign, mantissa, exponent, _ = value._mpf_
    if abs(exponent) > 4 * MAX_EXPONENT:
        raise InputError(f"{_shown(value)} has a binary exponent beyond +-{4 * MAX_EXPONENT}")
    signed = -int(mantissa) if sign else int(mantissa)
    return fmpq(signed << exponent) if exponent >= 0 else fmpq(signed, 1 << -exponent)


def exact_real(value: object) -> fmpq:
    """Convert a real number to its exact rational value.

    Parameters
    ----------
    value
        int, Fraction (or any `numbers.Rational`), Decimal, finite float (its exact binary
        value), NumPy integer or float, `mpmath.mpf`, or a string: a decimal ("0.1" is 1/10)
        or a rational ("1/3").

    Raises
    ------
    InputError
        For anything else: NaN, infinity, booleans, None, malformed strings, and decimal
        exponents beyond +-10000.

    Examples
    --------
    >>> exact_real("0.1"), exact_real("1/3"), exact_real(0.5)
    (1/10, 1/3, 1/2)
    """
    if isinstance(value, fmpq):
        return value
    if isinstance(value, bool):
        raise InputError(f"{value!r} is not a real number; accepted: {REAL_KINDS}")
    if isinstance(value, float):
        return _from_float(value)
    if isinstance(value, str):
        return _from_string(value)
    if isinstance(value, Decimal):
        return _from_decimal(value, value)
    if isinstance(value, mpmath.mpf):
        return _from_mpf(value)
    if isinstance(value, numbers.Rational):
        return fmpq(int(value.numerator), int(value.denominator))
    item = getattr(value, "item", None)  # NumPy scalars
    if (
        callable(item)
        and isinstance(number := item(), int | float)
        and not isinstance(number, bool)
    ):
        return exact_real(number)
    raise InputError(f"{_shown(value)} is not a real number; accepted: {REAL_KINDS}")


def exact_complex(value: object) -> ExactComplex:
    """Convert a real or complex number to its exact value.

    Complex input is a Python or NumPy complex, an `mpmath.mpc`, or a pair (re, im) of anything
    `exact_real` takes.

    Examples
    --------
    >>> exact_complex(("1", "-0.1"))
    ExactComplex(re=1, im=-1/10)
    """
    if isinstance(value, ExactComplex):
        return value
    if isinstance(value, complex):
        return ExactComplex(_from_float(value.real), _from_float(value.imag))
    if isinstance(value, mpmath.mpc):
        return ExactComplex(_from_mpf(value.real), _from_mpf(value.imag))
    if isinstance(value, tuple | list):
        if len(value) != 2:
            raise InputError(f"{_shown(value)} is not a complex number; accepted: a pair (re, im)")
        return ExactComplex(exact_real(value[0]), exact_real(value[1]))
    item = getattr(value, "item", None)
    if callable(item) and isinstance(number := item(), complex):
        return exact_complex(number)
    return ExactComplex(exact_real(value))


def is_exact_zero(ball: Ball) -> bool:
    """Whether a ball is the single point zero."""
    return bool(ball == 0)


def real_part(ball: Ball) -> arb:
    """Return the real part of a ball."""
    return ball.real if isinstance(ball, acb) else ball


def imaginary_part(ball: Ball) -> arb:
    """Return the imaginary part of a ball; exactly zero for an `arb`."""
    return ball.imag if isinstance(ball, acb) else arb(0)


def accuracy_bits(ball: Ball) -> int | None:
    """Return the relative accuracy of a ball in bits, or None if it is exact.

    The radius is smaller than 2^-accuracy times the larger component of the midpoint.
    """
    if ball.is_exact():
        return None
    if not ball.is_finite():
        return -(10**9)
    return int(ball.rel_accuracy_bits())


def _man_exp(x: arb) -> tuple[int, int]:
    mantissa, exponent = x.man_exp()
    return int(mantissa), int(exponent)


def _dyadic(mantissa: int, exponent: int) -> arb:
    with working_precision(max(mantissa.bit_length(), 2) + 8):
        return arb((mantissa, exponent))


def _distance_upper(ball: arb, point: arb) -> tuple[int, int]:
    """Return mantissa and exponent of an upper bound on |x - point| over x in the ball."""
    exact_bits = 64 + ball.mid().bits() + point.bits()
    gap = ball - point
    if not gap.is_exact() or ball.is_exact():
        with working_precision(exact_bits):
            gap = ball - point
    with working_precision(32):
        return _man_exp(gap.abs_upper())


def mpf_with_bound(ball: arb, digits: int) -> tuple[mpmath.mpf, mpmath.mpf]:
    """Round the midpoint to `digits` digits and return it with a bound on its error.

    The bound covers the radius of the ball and the rounding, and is itself rounded up.
    """
    if ball == 0:
        return mpmath.mpf(0), mpmath.mpf(0)
    if not ball.is_finite():
        return mpmath.mpf("nan"), mpmath.mpf("inf")
    mantissa, exponent = _man_exp(ball.mid())
    bits = math.ceil(digits * BITS_PER_DIGIT) + 8
    raw = from_man_exp(mantissa, exponent, bits, "n")
    rounded = _dyadic(int(-raw[1] if raw[0] else raw[1]), int(raw[2]))  # gmpy2 integers occur
    bound = from_man_exp(*_distance_upper(ball, rounded), 32, "u")
    return mpmath.mp.make_mpf(raw), mpmath.mp.make_mpf(bound)


def float_with_bound(ball: arb) -> tuple[float, float]:
    """Round the midpoint to the nearest float64 and bound its distance from every point held.

    An overflowing midpoint gives +-inf with an infinite bound.

    Examples
    --------
    >>> from flint import arb
    >>> float_with_bound(arb(1) / 4)
    (0.25, 0.0)
    """
    if ball == 0:
        return 0.0, 0.0
    if not ball.is_finite():
        return math.nan, math.inf
    value = float(ball.mid())  # to nearest, ties to even; tests compare it with integers
    if math.isinf(value):
        return value, math.inf
    gap = (ball - arb(value)).abs_upper()  # its own rounding is in the ball
    return value, 0.0 if gap == 0 else math.nextafter(float(gap), math.inf)


def rounds_uniquely(ball: arb) -> bool:
    """Whether every number in the ball rounds to the same float64."""
    if ball.is_exact():
        return True
    if not ball.is_finite():
        return False
    return float(ball.lower()) == float(ball.upper())  # they round outwards


def decimal_string(ball: arb, digits: int) -> str:
    """Return the midpoint as a decimal string of `digits` significant digits.

    Examples
    --------
    >>> from flint import arb
    >>> decimal_string(arb(1) / 4, 5)
    '0.25'
    """
    if ball == 0:
        return "0"
    value, _ = mpf_with_bound(ball, digits + 3)
    return str(mpmath.nstr(value, digits, min_fixed=-5, max_fixed=digits))
