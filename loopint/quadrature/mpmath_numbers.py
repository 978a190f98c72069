"""Private mpmath contexts and what is computed with in them.

The user's `mpmath.mp` is never changed.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING, Any, TypeAlias

import mpmath

from loopint.quadrature.paths import Arithmetic, Number

if TYPE_CHECKING:
    from flint import fmpq

    from loopint.core.numbers import ExactComplex

Context: TypeAlias = Any  # mpmath has no type hints
GUARD_DIGITS = 10
ROUNDING = 2**8  # units in the last place, a cautious guess


@dataclass(frozen=True, slots=True)
class Estimate:
    """A value, an error estimate, and the size of the terms that were added up to the value."""

    value: Number
    error: Number
    size: Number


@lru_cache(maxsize=8)
def context(digits: int) -> Context:
    """Return a private mpmath context with guard digits; kept, because it stores nodes."""
    private = mpmath.mp.clone()
    private.dps = digits + GUARD_DIGITS
    return private


def real(ctx: Context, value: fmpq) -> Number:
    """Return an exact rational as an mpf."""
    return ctx.mpf(int(value.p)) / int(value.q)


def exact(ctx: Context, value: ExactComplex) -> Number:
    """Return an exact number as an mpf, or as an mpc if it is not real."""
    if value.is_real:
        return real(ctx, value.re)
    return ctx.mpc(real(ctx, value.re), real(ctx, value.im))


def numbers(ctx: Context) -> Arithmetic:
    """Return what the geometry of the path needs."""
    return Arithmetic(
        exact=lambda value: exact(ctx, value),
        sqrt=ctx.sqrt,
        larger=lambda a, b: abs(a) >= abs(b),
    )


def logarithm(ctx: Context, value: Number) -> Number:
    """Return the logarithm with its cut on the positive imaginary axis."""
    if ctx.im(value) == 0 and ctx.re(value) > 0:
        return ctx.log(ctx.re(value))
    return ctx.log(ctx.j * value) - ctx.j * ctx.pi / 2
