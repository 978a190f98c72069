"""The language of a user's own formula: arithmetic, functions of the trade, and i0.

A text is parsed into a syntax tree of which only listed kinds of nodes are accepted; it is never
evaluated as Python.  Values are balls with an infinitesimal part: z + eta t, eta -> 0+, where the
name `i0` stands for i eta.  On a branch cut Im t tells the side, exactly; where it is zero the
principal value is taken, as on a computer without i0, and counted.

Branches: log and non-integer powers on the negative real axis, polylogarithms and 2F1 on z > 1.
atanh, atan and asin are written in logarithms (DLMF 4.37.24, 4.23.26, 4.23.19) and follow them.
"""

from __future__ import annotations

import ast
import warnings
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import TypeAlias

from flint import acb, arb, fmpq

from loopint.core.errors import InputError
from loopint.core.numbers import Ball, exact_real

MAX_LENGTH = 20_000
MAX_DEPTH = 300
MAX_POWER = 1000
ZERO, ONE, IMAGINARY = acb(0), acb(1), acb(0, 1)


class Cuts:
    """Counts the evaluations on a branch cut that no i0 decides."""

    def __init__(self) -> None:
        self.undecided = 0


class Value:
    """z + eta t with an infinitesimal eta > 0."""

    __slots__ = ("t", "z")

    def __init__(self, z: acb, t: acb = ZERO) -> None:
        self.z, self.t = z, t

    @property
    def is_real(self) -> bool:
        """Whether z is exactly real."""
        return bool(self.z.imag == 0)

    def map(self, value: acb, derivative: Callable[[], acb]) -> Value:
        """Return f(z) with its infinitesimal part f'(z) t."""
        return Value(value, ZERO if self.t == 0 else derivative() * self.t)

    def __add__(self, other: Value) -> Value:
        return Value(self.z + other.z, self.t + other.t)

    def __sub__(self, other: Value) -> Value:
        return Value(self.z - other.z, self.t - other.t)

    def __neg__(self) -> Value:
        return Value(-self.z, -self.t)

    def __mul__(self, other: Value) -> Value:
        return Value(self.z * other.z, self.z * other.t + self.t * other.z)

    def __truediv__(self, other: Value) -> Value:
        if other.z == 0:
            raise ZeroDivisionError
        quotient = self.z / other.z
        return Value(quotient, (self.t - quotient * other.t) / other.z)


Names: TypeAlias = Mapping[str, Value]
Function: TypeAlias = Callable[[Cuts, Sequence[Value]], Value]


def of(value: Ball | fmpq | int) -> Value:
    """Return a number without infinitesimal part."""
    return Value(acb(value) if not isinstance(value, acb) else value)


# Functions --------------------------------------------------------------------------------------


def _side(cuts: Cuts, argument: Value) -> int:
    """Return +1 or -1, the side of the real axis, or 0 if nothing decides it."""
    side = argument.t.imag
    if side > 0:
        return 1
    if side < 0:
        return -1
    cuts.undecided += 1
    return 0


def logarithm(cuts: Cuts, x: Value) -> Value:
    """Return log; on its cut by the side, above it if undecided."""
    if x.z == 0:
        raise ZeroDivisionError
    if x.is_real and x.z.real < 0:
        pi = -arb.pi() if _side(cuts, x) < 0 else arb.pi()
        return x.map(acb((-x.z.real).log(), pi), lambda: 1 / x.z)
    return x.map(x.z.log(), lambda: 1 / x.z)


def exponential(_: Cuts, x: Value) -> Value:
    """Return exp."""
    value = x.z.exp()
    return x.map(value, lambda: value)


def power(cuts: Cuts, base: Value, exponent: Value) -> Value:
    """Return base^exponent: exact for an integer exponent, else by the logarithm."""
    whole = _integer(exponent)
    if whole is not None and abs(whole) <= MAX_POWER:
        if whole == 0:
            return of(1)
        if whole < 0:
            return of(1) / power(cuts, base, of(-whole))
        return base.map(base.z**whole, lambda: whole * base.z ** (whole - 1))
    if base.z == 0:
        if exponent.z.real > 0:
            return of(0)
        raise ZeroDivisionError
    return exponential(cuts, exponent * logarithm(cuts, base))


def square_root(cuts: Cuts, x: Value) -> Value:
    """Return the square root; sqrt(0) = 0."""
    if x.z == 0:
        return of(0)
    if x.is_real:
        root = acb(abs(x.z.real).sqrt())
        if x.z.real < 0:
            root *= -IMAGINARY if _side(cuts, x) < 0 else IMAGINARY
    else:
        root = x.z.sqrt()
    return x.map(root, lambda: 1 / (2 * root))


def _integer(x: Value) -> int | None:
    if x.t != 0 or not x.is_real or not x.z.real.is_exact() or not x.z.real.is_integer():
        return None
    found = x.z.real.unique_fmpz()
    return None if found is None else int(found)


def polylogarithm(cuts: Cuts, order: Value, x: Value) -> Value:
    """Return Li_s(z) for an integer s from 1 to 20; below its cut z > 1 if undecided."""
    s = _integer(order)
    if s is None or not 1 <= s <= 20:
        raise InputError("polylog(s, z) has an s other than 1 to 20; accepted: an integer")
    if s == 1:
        return -logarithm(cuts, of(1) - x)

    def derivative() -> acb:
        return polylogarithm(Cuts(), of(s - 1), x).z / x.z

    if x.is_real and x.z.real > 1:
        value = x.z.polylog(s)
        size = abs(value.imag)
        return x.map(acb(value.real, size if _side(cuts, x) > 0 else -size), derivative)
    if x.z == 0:
        return x.map(ZERO, lambda: ONE)
    return x.map(x.z.polylog(s), derivative)


def atanh(cuts: Cuts, x: Value) -> Value:
    """Return atanh(z) = (log(1+z) - log(1-z))/2."""
    return (logarithm(cuts, of(1) + x) - logarithm(cuts, of(1) - x)) / of(2)


def atan(cuts: Cuts, x: Value) -> Value:
    """Return atan(z) = -i atanh(i z)."""
    if x.is_real and x.t == 0:
        return of(x.z.real.atan())
    return of(-IMAGINARY) * atanh(cuts, of(IMAGINARY) * x)


def asin(cuts: Cuts, x: Value) -> Value:
    """Return asin(z) = -i log(i z + sqrt(1-z^2))."""
    root = square_root(cuts, of(1) - x * x)
    return of(-IMAGINARY) * logarithm(cuts, of(IMAGINARY) * x + root)


def gauss(cuts: Cuts, a: Value, b: Value, c: Value, x: Value) -> Value:
    """Return 2F1(a, b; c; z) for real a, b, c on its cut, else any; below z > 1 if undecided."""

    def value(shift: int) -> acb:
        found: acb = x.z.hypgeom_2f1(a.z + shift, b.z + shift, c.z + shift)
        if not (x.is_real and x.z.real > 1):
            return found
        if not (a.is_real and b.is_real and c.is_real):
            raise InputError("hyp2f1 on its cut has complex parameters; accepted: real ones")
        beside = (x.z + acb(0, arb(1) / 2**20)).hypgeom_2f1(a.z + shift, b.z + shift, c.z + shift)
        above = found if (found.imag > 0) == (beside.imag > 0) else found.conjugate()
        side = _side(cuts if shift == 0 else Cuts(), x)
        return above if side > 0 else above.conjugate()

    return x.map(value(0), lambda: a.z * b.z / c.z * value(1))


def lerch(_: Cuts, x: Value, s: Value, a: Value) -> Value:
    """Return Phi(z, s, a) off its cut, as sum_k z^k/(k+a)^s for |z| < 1 or an integer s = 1."""
    if _integer(s) == 1:
        return gauss(_, of(1), a, a + of(1), x) / a
    if not x.z.abs_upper() < arb("0.97"):
        raise InputError("lerch_phi(z, s, a) has |z| > 0.97 and s other than 1; accepted: |z| less")
    total, term = acb(0), acb(1)
    for k in range(6000):
        total += term * (a.z + k).pow(-s.z)
        term *= x.z
        if term.abs_upper() < arb(2) ** -220:
            break
    return x.map(total, lambda: ZERO)


def clausen(_: Cuts, x: Value) -> Value:
    """Return Cl_2(x) = Im Li_2(exp(i x)) for real x."""
    return of(acb((IMAGINARY * x.z).exp()).polylog(2).imag)


def zeta(_: Cuts, n: Value) -> Value:
    """Return zeta(n)."""
    if n.z == 1:
        raise ZeroDivisionError
    return of(n.z.zeta())


def gamma(_: Cuts, x: Value) -> Value:
    """Return Gamma(z)."""
    whole = _integer(x)
    if whole is not None and whole <= 0:
        raise ZeroDivisionError
    value = x.z.gamma()
    return x.map(value, lambda: value * x.z.digamma())


def step(_: Cuts, x: Value) -> Value:
    """Return the step function theta(x), 1/2 at 0."""
    if x.z.real > 0:
        return of(1)
    if x.z.real < 0:
        return of(0)
    return of(fmpq(1, 2))


def kallen(_: Cuts, x: Value, y: Value, z: Value) -> Value:
    """Return x^2 + y^2 + z^2 - 2xy - 2yz - 2zx."""
    difference = x - y - z
    return difference * difference - of(4) * y * z


FUNCTIONS: dict[str, tuple[int, Callable[..., Value]]] = {
    "log": (1, logarithm),
    "sqrt": (1, square_root),
    "exp": (1, exponential),
    "atan": (1, atan),
    "asin": (1, asin),
    "acos": (1, lambda cuts, x: of(acb(arb.pi()) / 2) - asin(cuts, x)),
    "atanh": (1, atanh),
    "polylog": (2, polylogarithm),
    "Li2": (1, lambda cuts, x: polylogarithm(cuts, of(2), x)),
    "Li3": (1, lambda cuts, x: polylogarithm(cuts, of(3), x)),
    "clausen2": (1, clausen),
    "lerch_phi": (3, lerch),
    "hyp2f1": (4, gauss),
    "gamma": (1, gamma),
    "zeta": (1, zeta),
    "conjugate": (1, lambda _, x: Value(x.z.conjugate(), x.t.conjugate())),
    "re": (1, lambda _, x: Value(acb(x.z.real), acb(x.t.real))),
    "im": (1, lambda _, x: of(x.z.imag)),
    "abs": (1, lambda _, x: of(abs(x.z))),
    "theta": (1, step),
    "kallen": (3, kallen),
    "Rational": (2, lambda _, x, y: x / y),
}
CONSTANTS: dict[str, Callable[[], Value]] = {
    "pi": lambda: of(arb.pi()),
    "euler_gamma": lambda: of(arb.const_euler()),
    "EulerGamma": lambda: of(arb.const_euler()),
    "I": lambda: of(IMAGINARY),
    "i": lambda: of(IMAGINARY),
    "i0": lambda: Value(ZERO, IMAGINARY),
}
GRAMMAR = (
    "numbers, columns, the kinematics of the integral, mu_squared, "
    f"{', '.join(CONSTANTS)}, + - * / **, and the functions {', '.join(FUNCTIONS)}"
)


# Parsing ----------------------------------------------------------------------------------------

Node: TypeAlias = Callable[[Names, Cuts], Value]


@dataclass(frozen=True)
class UserFormula:
    """A parsed formula.

    Attributes
    ----------
    text
        What the user wrote.
    names
        The names it needs a value for.

    Examples
    --------
    >>> formula = parse_formula("log(-x - i0)")
    >>> value = formula.evaluate({"x": of(1)}, Cuts())
    >>> value.real == 0, value.imag < 0
    (True, True)
    """

    text: str
    names: frozenset[str]
    _node: Node

    def evaluate(self, names: Names, cuts: Cuts) -> acb:
        """Return the value at the working precision.

        Raises
        ------
        InputError
            For a division by zero or an argument outside the domain of a function.
        """
        return self.value(names, cuts).z

    def value(self, names: Names, cuts: Cuts) -> Value:
        """Return the value with its infinitesimal part."""
        try:
            return self._node(names, cuts)
        except ZeroDivisionError:
            raise InputError(f"{_short(self.text)!r} divides by zero or has a pole there") from None


def parse_formula(text: str) -> UserFormula:
    """Parse a formula.

    Raises
    ------
    InputError
        For anything outside the language; the message shows the part and what is accepted.
    """
    if len(text) > MAX_LENGTH:
        raise InputError(
            f"the formula {_short(text)!r} has {len(text)} characters; accepted: up to {MAX_LENGTH}"
        )
    prepared = " ".join(text.split())
    try:
        if "#" in prepared:
            raise SyntaxError
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            tree = ast.parse(prepared, mode="eval").body
    except (SyntaxError, ValueError, RecursionError, MemoryError):
        raise InputError(f"{_short(text)!r} is not a formula; accepted: {GRAMMAR}") from None
    names: set[str] = set()
    node = _compile(tree, prepared, names, 1)
    return UserFormula(text, frozenset(names), node)


def _compile(tree: ast.expr, text: str, names: set[str], depth: int) -> Node:
    if depth > MAX_DEPTH:
        raise InputError(f"{_short(text)!r} is nested deeper than {MAX_DEPTH} levels")

    def inner(part: ast.expr) -> Node:
        return _compile(part, text, names, depth + 1)

    match tree:
        case ast.Constant(value=value) if type(value) in (int, float):
            written = (ast.get_source_segment(text, tree) or "").replace("_", "")
            number = exact_real(written)
            return lambda _names, _cuts: of(number)
        case ast.Name(id=name) if name in CONSTANTS:
            constant = CONSTANTS[name]
            return lambda _names, _cuts: constant()
        case ast.Name(id=name):
            names.add(name)
            return lambda known, _cuts: known[name]
        case ast.UnaryOp(op=ast.UAdd()):
            return inner(tree.operand)
        case ast.UnaryOp(op=ast.USub()):
            operand = inner(tree.operand)
            return lambda known, cuts: -operand(known, cuts)
        case ast.BinOp(op=ast.Pow()):
            base, exponent = inner(tree.left), inner(tree.right)
            return lambda known, cuts: power(cuts, base(known, cuts), exponent(known, cuts))
        case ast.BinOp(op=ast.Add() | ast.Sub() | ast.Mult() | ast.Div() as op):
            return _arithmetic(op, inner(tree.left), inner(tree.right))
        case ast.Call(func=ast.Name(id=name), keywords=[]) if name in FUNCTIONS:
            count, function = FUNCTIONS[name]
            if len(tree.args) != count:
                raise InputError(
                    f"{_shown(tree, text)!r} has {len(tree.args)} arguments; accepted: {count}"
                )
            arguments = [inner(argument) for argument in tree.args]
            return lambda known, cuts: function(cuts, *(a(known, cuts) for a in arguments))
    raise InputError(f"{_shown(tree, text)!r} is not allowed; accepted: {GRAMMAR}")


def _arithmetic(op: ast.operator, left: Node, right: Node) -> Node:
    match op:
        case ast.Add():
            return lambda known, cuts: left(known, cuts) + right(known, cuts)
        case ast.Sub():
            return lambda known, cuts: left(known, cuts) - right(known, cuts)
        case ast.Mult():
            return lambda known, cuts: left(known, cuts) * right(known, cuts)
    return lambda known, cuts: left(known, cuts) / right(known, cuts)


def _shown(tree: ast.expr, text: str) -> str:
    return _short(ast.get_source_segment(text, tree) or text)


def _short(text: str) -> str:
    return text if len(text) <= 60 else text[:57] + "..."
