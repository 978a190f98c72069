"""Laurent series in epsilon with symbolic coefficients, and what is expanded into them."""

from __future__ import annotations

import operator
from dataclasses import dataclass
from functools import reduce as fold
from typing import TYPE_CHECKING, Any, TypeAlias

import sympy

from loopint.core.rational_functions import RationalFunction, variables

if TYPE_CHECKING:
    from collections.abc import Iterator

    from flint import fmpq, fmpz_mpoly

    from loopint.core.gamma_factors import EpsilonFactor

Expr: TypeAlias = Any  # sympy has no types
EPS = sympy.Symbol("eps")


@dataclass(frozen=True)
class Expansion:
    """Known coefficients of eps^lowest, eps^(lowest+1), ..."""

    lowest: int
    terms: tuple[Expr, ...]

    @property
    def highest(self) -> int:
        """The highest known order."""
        return self.lowest + len(self.terms) - 1

    def __getitem__(self, order: int) -> Expr:
        if order < self.lowest:
            return sympy.S.Zero
        return self.terms[order - self.lowest]

    def __mul__(self, other: Expansion) -> Expansion:
        count = min(len(self.terms), len(other.terms))
        a, b = self.terms, other.terms
        product = [sum((a[j] * b[n - j] for j in range(n + 1)), sympy.S.Zero) for n in range(count)]
        return Expansion(self.lowest + other.lowest, tuple(product))

    def __add__(self, other: Expansion) -> Expansion:
        lowest = min(self.lowest, other.lowest)
        highest = min(self.highest, other.highest)
        return Expansion(lowest, tuple(self[k] + other[k] for k in range(lowest, highest + 1)))

    def scaled(self, factor: Expr) -> Expansion:
        """Return the series times a constant."""
        return Expansion(self.lowest, tuple(factor * c for c in self.terms))


def exponential(rate: Expr, count: int) -> Expansion:
    """Expand exp(rate * eps)."""
    return Expansion(0, tuple(rate**k / sympy.factorial(k) for k in range(count)))


def rational(value: fmpq) -> Expr:
    """Write an exact rational number for sympy."""
    return sympy.Rational(int(value.p), int(value.q))


def expand_factor(factor: EpsilonFactor, count: int) -> Expansion:
    """Expand a product of Gamma functions: rationals, pi, zeta values, gamma_E, log 2, log pi.

    A power of sqrt(pi) is left out; see `root_pi`.
    """
    result = Expansion(0, (rational(factor.rational),) + (sympy.S.Zero,) * (count - 1))
    for rate, power in factor.linear:
        result = result * _linear_power(rational(rate), power, count)
    exponent = [sympy.S.Zero] * count
    for k in range(1, count):
        weight = sum((rational((-b) ** k * power) / k for b, power in factor.gammas), sympy.S.Zero)
        if k == 1:
            # log Gamma(1+x) = -gamma_E x + sum zeta(k) (-x)^k/k, DLMF 5.7.3
            exponent[1] = (
                (weight + rational(factor.euler)) * sympy.EulerGamma
                + rational(factor.log_two) * sympy.log(2)
                + rational(factor.log_pi) * sympy.log(sympy.pi)
            )
        else:
            exponent[k] = weight * sympy.zeta(k)
    series = [sympy.S.One]
    for n in range(1, count):
        total = sum((k * exponent[k] * series[n - k] for k in range(1, n + 1)), sympy.S.Zero)
        series.append(sympy.expand(total / n))
    return Expansion(factor.lowest_order, (result * Expansion(0, tuple(series))).terms)


def root_pi(factor: EpsilonFactor) -> Expr:
    """Return the power of sqrt(pi) that `expand_factor` leaves out."""
    return sympy.pi ** sympy.Rational(factor.sqrt_pi, 2)


def _linear_power(rate: Expr, power: int, count: int) -> Expansion:
    """Expand (1 + rate eps)^power."""
    return Expansion(0, tuple(sympy.binomial(power, k) * rate**k for k in range(count)))


def expand_rational(function: Expr, count: int) -> Expansion:
    """Expand a rational function of eps to `count` orders from its leading one."""
    top, bottom = sympy.fraction(sympy.factor(function))
    if top == 0:
        return Expansion(0, (sympy.S.Zero,) * count)
    result = _polynomial(top, count)
    for factor in sympy.Mul.make_args(bottom):
        base, power = factor.as_base_exp()
        inverse = _inverse(_polynomial(base, count))
        for _ in range(int(power)):
            result = result * inverse
    return result


def _polynomial(polynomial: Expr, count: int) -> Expansion:
    ascending = sympy.Poly(polynomial, EPS).all_coeffs()[::-1]
    lowest = next(k for k, c in enumerate(ascending) if c != 0)
    terms = [*ascending[lowest:], *[sympy.S.Zero] * count][:count]
    return Expansion(lowest, tuple(terms))


def _inverse(series: Expansion) -> Expansion:
    a = series.terms
    result = [1 / a[0]]
    for n in range(1, len(a)):
        total = sum((a[j] * result[n - j] for j in range(1, n + 1)), sympy.S.Zero)
        result.append(-total / a[0])
    return Expansion(-series.lowest, tuple(result))


def tidy(expression: Expr, generators: list[Expr], roots: list[Expr]) -> Expr:
    """Group by the rational functions of the kinematics that multiply logarithms and constants.

    Parameters
    ----------
    expression
        A polynomial in generators and roots with coefficients rational in the kinematics; those
        that vanish identically disappear.
    generators
        Symbols of transcendental functions.
    roots
        Symbols of square roots, kept with the rational functions.
    """
    constants = [
        *sorted(expression.atoms(sympy.zeta), key=str),
        *(c for c in (sympy.pi, sympy.EulerGamma) if expression.has(c)),
        *sorted((f for f in expression.atoms(sympy.log) if f.is_number), key=str),
    ]
    present = [g for g in generators if expression.has(g)] + constants
    outside = [r for r in (*roots, sympy.I) if expression.has(r)]
    split = _Splitter(expression, present, outside)
    groups: dict[Expr, Expr] = {}
    for monomial, root, content, coefficient in split.terms():
        sign, factors = oriented_factors(coefficient)
        function = sympy.Mul(*(b**e for b, e in factors.items()), root)
        groups[function] = groups.get(function, sympy.S.Zero) + content * sign * monomial
    return sympy.Add(*(_product(function, group) for function, group in groups.items()))


class _Splitter:
    """Split an expression into terms generators * roots * rational function, by FLINT.

    The expression is one quotient of polynomials in everything that occurs; its denominator has
    neither generators nor roots.
    """

    def __init__(self, expression: Expr, generators: list[Expr], roots: list[Expr]) -> None:
        inside = [*generators, *roots]
        free = sorted(expression.free_symbols - set(inside), key=str)
        self._names = [*inside, *free]
        self._inner, self._outer = len(generators), len(inside)
        values = variables([f"x{k}" for k in range(len(self._names) + 1)])
        self._one = values[-1] / values[-1]
        self._known: dict[Expr, RationalFunction] = dict(zip(self._names, values[:-1], strict=True))
        self._value = self._convert(expression)

    def _convert(self, expression: Expr) -> RationalFunction:
        found = self._known.get(expression)
        if found is None:
            found = self._known[expression] = self._computed(expression)
        return found

    def _computed(self, expression: Expr) -> RationalFunction:
        if expression.is_Rational:
            return self._one * int(expression.p) / int(expression.q)
        if expression.is_Add:
            return fold(operator.add, map(self._convert, expression.args))
        if expression.is_Mul:
            return fold(operator.mul, map(self._convert, expression.args))
        base, exponent = expression.as_base_exp()
        assert exponent.is_Integer, expression
        power = fold(operator.mul, [self._convert(base)] * abs(int(exponent)))
        return power if exponent > 0 else power.inverse()

    def terms(self) -> Iterator[tuple[Expr, Expr, Expr, Expr]]:
        """Yield monomial, root, number, and product of factors without a common number."""
        top, bottom = self._value.numerator, self._value.denominator
        context = top.context()
        parts: dict[tuple[int, ...], dict[tuple[int, ...], Any]] = {}
        for exponents, number in top.to_dict().items():
            key = list(exponents[: self._outer])
            sign = 1
            if sympy.I in self._names:  # i^2 = -1
                k = self._names.index(sympy.I)
                sign = (-1) ** (key[k] // 2)
                key[k] %= 2
            rest = (0,) * self._outer + tuple(exponents[self._outer :])
            part = parts.setdefault(tuple(key), {})
            part[rest] = part.get(rest, 0) + sign * number
        for powers, part in parts.items():
            polynomial = context.from_dict(part)
            if polynomial.is_zero():
                continue
            common = polynomial.gcd(bottom)
            inner = zip(self._names[: self._inner], powers[: self._inner], strict=True)
            outer = zip(self._names[self._inner : self._outer], powers[self._inner :], strict=True)
            above, top_product = self._factorised(polynomial / common)
            below, bottom_product = self._factorised(bottom / common)
            yield (
                sympy.Mul(*(g**e for g, e in inner)),
                sympy.Mul(*(r**e for r, e in outer)),
                sympy.Rational(above, below),
                top_product / bottom_product,
            )

    def _factorised(self, polynomial: fmpz_mpoly) -> tuple[int, Expr]:
        content, factors = polynomial.factor()
        product = sympy.S.One
        for factor, power in factors:
            terms = []
            for exponents, number in factor.to_dict().items():
                powers = zip(self._names, exponents[:-1], strict=True)
                terms.append(int(number) * sympy.Mul(*(x**e for x, e in powers)))
            product *= sympy.Add(*terms) ** int(power)
        return int(content), product


def _product(function: Expr, group: Expr) -> Expr:
    """Multiply, with the number that a sum has in common in front."""
    if function == 1:
        return group
    content, primitive = group.as_content_primitive()
    if primitive.could_extract_minus_sign():
        content, primitive = -content, -primitive
    return sympy.Mul(content, function, primitive)


def oriented_factors(product: Expr) -> tuple[Expr, dict[Expr, int]]:
    """Split a factorised rational function into a number and its factors with their powers.

    Signs are chosen so that c - k eps has c > 0 and that p^2 is positive in every factor.
    """
    number, rest = product.as_coeff_Mul()
    found: dict[Expr, int] = {}
    for factor in sympy.Mul.make_args(rest):
        if factor == 1:
            continue
        base, exponent = factor.as_base_exp()
        if base.is_Add and _is_reversed(base):
            base, number = -base, number * (-1) ** exponent
        found[base] = found.get(base, 0) + exponent
    return number, found


def _is_reversed(base: Expr) -> bool:
    if base.free_symbols == {EPS}:
        return bool(base.subs(EPS, 0) < 0)
    p_squared = sympy.Symbol("p_squared")
    if p_squared in base.free_symbols:
        return bool(sympy.Poly(base, p_squared).LC().could_extract_minus_sign())
    return bool(base.could_extract_minus_sign())
