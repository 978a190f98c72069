r"""Laurent series in epsilon of 2F1(a, b; c; z) with integer a, b, c at eps = 0.

With a = a0 + a1 eps and so on, the functions

    F = 2F1(a, b; c; z),        H = z/c 2F1(a+1, b+1; c+1; z) = z F'/(a b)

at (a, b, c) = (a1 eps, b1 eps, 1 + c1 eps) are iterated integrals: Euler's differential equation
(DLMF 15.10.1) reads

    z F' = a1 b1 eps^2 H,
    z H' = z/(1-z) F + eps [ (a1+b1-c1) z/(1-z) - c1 ] H,

with F = 1 and H = 0 at z = 0, and is integrated order by order.  Contiguous relations (DLMF
15.5.11-15.5.18) lead from there to any a0, b0, c0 as matrices that act on (F, H), rational in z and
eps.  H instead of z F' keeps them free of poles in eps (but for c0 <= 0), and F and H independent
where a1 or b1 vanishes.  A parameter that is an integer at every eps limits the steps:

======================  =====================================================================
a or b an integer <= 0  2F1 is a polynomial
c-a or c-b the same     (1-z)^(c-a-b) times a polynomial (Euler's transformation, DLMF 15.8.1)
otherwise               steps down in a, b and up in c first: no step divides by zero
======================  =====================================================================
"""

from __future__ import annotations

from typing import TYPE_CHECKING, TypeAlias

import sympy
from flint import fmpq

from loopint.core.rational_functions import RationalFunction, variables
from loopint.formulas.expansion import Expansion, Expr, exponential, rational
from loopint.formulas.iterated import (
    ONE,
    Words,
    combined,
    integrated,
    is_covered,
    lyndon_polynomial,
    written,
)

if TYPE_CHECKING:
    from collections.abc import Callable

    from flint import fmpz, fmpz_mpoly

    from loopint.core.epsilon_linear import EpsilonLinear

EPS, Z = variables(("eps", "z"))
UNIT = Z / Z
Row: TypeAlias = tuple[RationalFunction, RationalFunction]
Matrix: TypeAlias = tuple[Row, Row]


def gauss_expansion(
    a: EpsilonLinear,
    b: EpsilonLinear,
    c: EpsilonLinear,
    count: int,
    z: Expr,
    function: Callable[[str], Expr],
) -> Expansion:
    """Expand 2F1(a, b; c; z).

    Parameters
    ----------
    a, b, c
        Integers at eps = 0; c is not an integer <= 0 at every eps.
    count
        Number of orders.
    z
        The argument in the rational coefficients.
    function
        From "1" and "0...01...1" to -log(1-z) and Nielsen's polylogarithms of z.

    Returns
    -------
    Expansion
        Shorter than `count` if an order needs other functions.
    """
    for first, second in ((a, b), (b, a)):
        if first.is_pole_of_gamma:
            return _polynomial(first, second, c, count, z)
    excess = c - a - b
    for first, second in ((c - a, c - b), (c - b, c - a)):
        if first.is_pole_of_gamma:  # (1-z)^(c-a-b) = (1-z)^e0 exp(-e1 eps H(1; z))
            power = exponential(-rational(excess.rate) * function("1"), count)
            series = _polynomial(first, second, c, count, z) * power
            return series.scaled((1 - z) ** rational(excess.constant))
    row = _contiguous(a, b, c)[0]
    lowest = min(_lowest_order(x) for x in row if not x.is_zero)
    rows = [_epsilon_series(x, lowest, count) for x in row]
    words = _base_words(a.rate, b.rate, c.rate, count)
    terms: list[Expr] = []
    for order in range(count):
        total: dict[tuple[str, ...], RationalFunction] = {}
        for coefficients, orders in zip(rows, words, strict=True):
            for k in range(order + 1):
                if coefficients[k].is_zero:
                    continue
                for key, number in lyndon_polynomial(orders[order - k]).items():
                    one = coefficients[k] * int(number.p) / int(number.q)
                    total[key] = total[key] + one if key in total else one
        total = {key: x for key, x in total.items() if not x.is_zero}
        if not is_covered(dict.fromkeys(total, ONE)):
            break
        parts = (_written(x, z) * written({key: ONE}, function) for key, x in total.items())
        terms.append(sympy.Add(*parts))
    return Expansion(lowest, tuple(terms))


def _base_words(a1: fmpq, b1: fmpq, c1: fmpq, count: int) -> tuple[list[Words], list[Words]]:
    """Return the orders of F and H at (a1 eps, b1 eps, 1 + c1 eps) as iterated integrals."""
    f: list[Words] = [{"": ONE}]
    h: list[Words] = [{"1": ONE}]
    for order in range(1, count):
        before = h[order - 1]
        f.append(combined((a1 * b1, integrated("0", h[order - 2]))) if order > 1 else {})
        h.append(
            combined(
                (ONE, integrated("1", f[order])),
                (a1 + b1 - c1, integrated("1", before)),
                (-c1, integrated("0", before)),
            )
        )
    return f, h


def _polynomial(
    a: EpsilonLinear, b: EpsilonLinear, c: EpsilonLinear, count: int, z: Expr
) -> Expansion:
    """Expand the sum of the terms up to n = -a."""
    term = total = UNIT
    for n in range(-int(a.constant.p)):
        term = term * _exact(a + n) * _exact(b + n) * Z / (_exact(c + n) * (n + 1))
        total = total + term
    lowest = _lowest_order(total)
    series = _epsilon_series(total, lowest, count)
    return Expansion(lowest, tuple(_written(x, z) for x in series))


# Contiguous relations ---------------------------------------------------------------------------


def _exact(x: EpsilonLinear) -> RationalFunction:
    constant, rate = x.constant, x.rate
    return UNIT * int(constant.p) / int(constant.q) + EPS * int(rate.p) / int(rate.q)


def _contiguous(a: EpsilonLinear, b: EpsilonLinear, c: EpsilonLinear) -> Matrix:
    """Return the matrix from (F, H) at (a1 eps, b1 eps, 1 + c1 eps) to (F, H) at (a, b, c)."""
    now = [_exact(x) - int(x.constant.p) for x in (a, b, c)]
    now[2] = now[2] + 1
    steps = [int(x.constant.p) for x in (a, b, c)]
    steps[2] -= 1
    matrix: Matrix = ((UNIT, UNIT - 1), (UNIT - 1, UNIT))
    down = [(k, -1, -steps[k]) for k in (0, 1)]
    up = [(k, 1, steps[k]) for k in (0, 1)]
    for index, direction, number in (*down, (2, 1, steps[2]), (2, -1, -steps[2]), *up):
        for _ in range(max(0, number)):
            step = _step_c if index == 2 else _step_b
            x, y = (now[1], now[0]) if index == 0 else (now[0], now[1])
            matrix = _product(step(x, y, now[2], direction), matrix)
            now[index] = now[index] + direction
    return matrix


def _step_b(
    a: RationalFunction, b: RationalFunction, c: RationalFunction, direction: int
) -> Matrix:
    """Return the matrix from b to b + direction; a and b may change places."""
    rest = 1 - Z
    if direction > 0:
        below = rest * (b + 1)
        return (UNIT, a), (Z / below, (b + a * Z - c + 1) / below)
    return (
        ((c - b - a * Z) / (c - b), rest * a * b / (c - b)),
        (Z / (c - b), -rest * b / (c - b)),
    )


def _step_c(
    a: RationalFunction, b: RationalFunction, c: RationalFunction, direction: int
) -> Matrix:
    """Return the matrix from c to c + direction."""
    rest = 1 - Z
    if direction > 0:
        front = c / (Z * (c - a) * (c - b))
        return (
            (front * Z * (c - a - b), front * rest * a * b),
            (front * Z, -front * c * rest),
        )
    below = rest * (c - 1)
    return (UNIT, a * b / (c - 1)), (Z / below, Z * (a + b - c + 1) / below)


def _product(left: Matrix, right: Matrix) -> Matrix:
    def row(x: Row) -> Row:
        first, second = right
        return x[0] * first[0] + x[1] * second[0], x[0] * first[1] + x[1] * second[1]

    return row(left[0]), row(left[1])


# Rational functions of eps and z ----------------------------------------------------------------


def _by_order(polynomial: fmpz_mpoly) -> dict[int, RationalFunction]:
    """Return the coefficients of the powers of eps."""
    context = polynomial.context()
    parts: dict[int, dict[tuple[int, ...], fmpz]] = {}
    for (order, power), number in polynomial.to_dict().items():
        parts.setdefault(int(order), {})[0, int(power)] = number
    one = context.constant(1)
    return {order: RationalFunction(context.from_dict(p), one) for order, p in parts.items()}


def _lowest_order(x: RationalFunction) -> int:
    return min(_by_order(x.numerator)) - min(_by_order(x.denominator))


def _epsilon_series(x: RationalFunction, lowest: int, count: int) -> list[RationalFunction]:
    """Return the coefficients of eps^lowest and the following orders."""
    zero = UNIT - 1
    if x.is_zero:
        return [zero] * count
    top, bottom = _by_order(x.numerator), _by_order(x.denominator)
    first = min(bottom)
    result: list[RationalFunction] = []
    for k in range(count):
        total = top.get(k + lowest + first, zero)
        for j in range(1, k + 1):
            if first + j in bottom:
                total = total - bottom[first + j] * result[k - j]
        result.append(total / bottom[first])
    return result


def _written(x: RationalFunction, z: Expr) -> Expr:
    def polynomial(p: fmpz_mpoly) -> Expr:
        return sympy.Add(*(int(n) * z ** int(k) for (_, k), n in p.to_dict().items()))

    return polynomial(x.numerator) / polynomial(x.denominator)
