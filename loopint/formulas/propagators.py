"""Closed forms of two-point integrals whose powers depend on epsilon.

The d-dimensional forms are those of `loopint.integrals.propagator`.  One product of Gamma functions
has Laurent coefficients in logarithms and zeta values.  A Gauss function whose parameters depend on
epsilon has coefficients in Nielsen polylogarithms in even d0 (`loopint.formulas.gauss_series`); in
odd d0 it is given in d dimensions only.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import sympy
from flint import fmpq

from loopint.core.epsilon_linear import EpsilonLinear
from loopint.core.errors import UnsupportedIntegralError
from loopint.formulas.expansion import EPS, Expr, rational
from loopint.integrals.reduction import Kinematics

if TYPE_CHECKING:
    from collections.abc import Sequence

ONE = EpsilonLinear.of(1, 0)
COVERED = (
    Kinematics.BOTH_MASSLESS,
    Kinematics.ON_SHELL,
    Kinematics.ZERO_MOMENTUM_EQUAL_MASS,
    Kinematics.ZERO_MOMENTUM_ONE_MASSLESS,
    Kinematics.ONE_MASSLESS,
    Kinematics.ZERO_MOMENTUM,
)


@dataclass(frozen=True)
class GammaProduct:
    """prod Gamma(numerator) / prod Gamma(denominator)."""

    numerator: tuple[EpsilonLinear, ...]
    denominator: tuple[EpsilonLinear, ...]


@dataclass(frozen=True)
class GaussForm:
    """gammas * z^power * 2F1(a, b; c; z)."""

    gammas: GammaProduct
    a: EpsilonLinear
    b: EpsilonLinear
    c: EpsilonLinear
    power: int = 0


def check_kinematics(kinematics: Kinematics) -> None:
    """Refuse kinematics without a closed form."""
    if kinematics not in COVERED:
        raise UnsupportedIntegralError(
            f'a propagator with epsilon in its powers has no closed form for kinematics "'
            f'{kinematics}"; accepted: {", ".join(COVERED)}; loopint.propagator evaluates the '
            "integral, by quadrature where both n >= 1"
        )


def gamma_product(
    kinematics: Kinematics, powers: Sequence[EpsilonLinear], dimension: int
) -> GammaProduct | None:
    """Return the Gamma functions of a one-scale integral, or None if a Gauss function remains.

    A massless line is line 1.
    """
    first, second = powers
    half = EpsilonLinear.of(fmpq(dimension, 2), -1)
    total = first + second
    excess = total - half
    match kinematics:
        case Kinematics.BOTH_MASSLESS:
            return GammaProduct(
                (half - first, half - second, excess), (first, second, half + half - total)
            )
        case Kinematics.ON_SHELL:
            return GammaProduct(
                (excess, half + half - total - first), (second, half + half - total)
            )
        case Kinematics.ZERO_MOMENTUM_EQUAL_MASS:
            return GammaProduct((excess,), (total,))
        case Kinematics.ZERO_MOMENTUM_ONE_MASSLESS:
            return GammaProduct((half - first, excess), (half, second))
    return None


def gauss_form(
    kinematics: Kinematics, powers: Sequence[EpsilonLinear], dimension: int
) -> GaussForm:
    """Return the Gauss function of an integral with two scales.

    Its argument is p^2/m^2 with one massless line, and 1 - m1^2/m2^2 at p^2 = 0.
    """
    first, second = powers
    half = EpsilonLinear.of(fmpq(dimension, 2), -1)
    total = first + second
    excess = total - half
    if kinematics is Kinematics.ONE_MASSLESS:
        gammas = GammaProduct((half - first, excess), (half, second))
        return GaussForm(gammas, excess, first, half)
    if not total.is_pole_of_gamma:
        return GaussForm(GammaProduct((excess,), (total,)), excess, first, total)
    # 2F1(a, b; c; z)/Gamma(c) at c = -n, DLMF 15.2.3_5
    power = 1 - int(total.constant.p)
    a, b, c = excess + power, first + power, total + 2 * power
    return GaussForm(GammaProduct((a, b), (first, c)), a, b, c, power)


def linear(value: EpsilonLinear) -> Expr:
    """Write constant + rate eps."""
    return rational(value.constant) + rational(value.rate) * EPS


def gauss_function(form: GaussForm, z: Expr) -> Expr:
    """Write z^power 2F1, or Lerch's function where 2F1(1, b; b+1; z) = b Phi(z, 1, b)."""
    for one, other in ((form.a, form.b), (form.b, form.a)):
        if one == ONE and form.c == other + 1:
            return z**form.power * linear(other) * sympy.lerchphi(z, 1, linear(other))
    return z**form.power * _gauss(form.a, form.b, form.c, z)


def _gauss(a: EpsilonLinear, b: EpsilonLinear, c: EpsilonLinear, z: Expr) -> Expr:
    """Write 2F1(a, b; c; z), a power of 1-z where a parameter cancels (DLMF 15.4.6)."""
    if c in {a, b}:
        return (1 - z) ** -linear(b if c == a else a)
    return sympy.hyper((linear(a), linear(b)), (linear(c),), z)


def beyond_one(form: GaussForm, z: Expr) -> Expr:
    """Write 2F1(a, b; c; z + i0) for z > 1 by functions of 1/z or 1 - 1/z (DLMF 15.8.2, 15.8.5).

    Raises
    ------
    UnsupportedIntegralError
        If both transformations have two terms that are not separate at any eps.
    """
    a, b, c = form.a, form.b, form.c
    if (a - b).rate != 0:
        return _by_inverse(a, b, c, z) + _by_inverse(b, a, c, z)
    excess = c - a - b
    if excess.rate == 0:
        raise UnsupportedIntegralError(
            "a propagator with powers n1 - eps/2 and n2 - eps has no closed form above threshold; "
            "accepted: other coefficients of eps; loopint.propagator evaluates all"
        )
    first = _gammas((c, excess), (c - a, c - b)) * z ** -linear(a)
    first *= _gauss(a, a - c + 1, -excess + 1, 1 - 1 / z)
    second = _gammas((c, -excess), (a, b)) * ((z - 1) ** linear(excess)) * z ** linear(a - c)
    second *= sympy.exp(-sympy.I * sympy.pi * linear(excess))  # (1 - z - i0)^(c-a-b)
    return first + second * _gauss(c - a, -a + 1, excess + 1, 1 - 1 / z)


def _by_inverse(a: EpsilonLinear, b: EpsilonLinear, c: EpsilonLinear, z: Expr) -> Expr:
    """Write one of the two terms in powers of 1/z."""
    phase = sympy.exp(sympy.I * sympy.pi * linear(a))  # (-z - i0)^(-a)
    inner = _gauss(a, a - c + 1, a - b + 1, 1 / z)
    return _gammas((c, b - a), (b, c - a)) * phase * z ** -linear(a) * inner


def _gammas(top: tuple[EpsilonLinear, ...], bottom: tuple[EpsilonLinear, ...]) -> Expr:
    if any(x.is_pole_of_gamma for x in bottom):
        return sympy.S.Zero
    numerator = sympy.Mul(*(sympy.gamma(linear(x)) for x in top))
    return numerator / sympy.Mul(*(sympy.gamma(linear(x)) for x in bottom))


def gamma_expression(product: GammaProduct) -> Expr:
    """Write the Gamma functions."""
    return _gammas(product.numerator, product.denominator)
