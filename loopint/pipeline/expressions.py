"""Arithmetic on columns, evaluated exactly in rational numbers.

The language is `+ - * /`, `**` with an integer exponent from -64 to 64, unary signs, parentheses,
decimal numbers and column names, with Python's precedence.  Numbers are exact (0.1 is 1/10).  A
column whose name is not a plain identifier, or is a Python keyword, is written between backquotes:
`` `lambda` * `m a`**2 ``.

The text is parsed to a syntax tree, checked against a short whitelist and turned into closures
once; it is never executed as Python.
"""

from __future__ import annotations

import ast
import operator
import re
import warnings
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, TypeAlias

from flint import fmpq

from loopint.core.errors import InputError
from loopint.core.numbers import exact_real

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping
    from decimal import Decimal

    Compute: TypeAlias = "Callable[[Mapping[str, fmpq]], fmpq]"

MAX_LENGTH = 2000
MAX_DEPTH = 50
MAX_EXPONENT = 64
MAX_BITS = 1_000_000
GRAMMAR = (
    "numbers, column names (odd ones in `backquotes`), + - * /, ** with an integer exponent, "
    "parentheses"
)
_BACKQUOTED = re.compile(r"`([^`]*)`")
_BINARY: dict[type[ast.operator], Callable[[fmpq, fmpq], fmpq]] = {
    ast.Add: operator.add,
    ast.Sub: operator.sub,
    ast.Mult: operator.mul,
    ast.Div: operator.truediv,
}


@dataclass(frozen=True)
class Expression:
    """A parsed expression; build it with `parse_expression`.

    Attributes
    ----------
    text
        What the user wrote, with white space tidied.
    columns
        The columns it needs.
    constant
        Its value if it needs no column, else None.

    Examples
    --------
    >>> total = parse_expression("(m_a + m_b)**2")
    >>> total.evaluate({"m_a": fmpq(1, 2), "m_b": fmpq(1)})
    9/4
    """

    text: str
    columns: frozenset[str]
    constant: fmpq | None
    _node: _Node = field(repr=False, compare=False)

    def evaluate(self, values: Mapping[str, fmpq]) -> fmpq:
        """Return the exact value at one row.

        Raises
        ------
        InputError
            For a division by zero, or numbers so long that the result could exceed 10^6 bits.
        """
        if self.constant is not None:
            return self.constant
        node = self._node
        if node.grows:
            longest = max(values[column].height_bits() for column in self.columns)
            _check_size(node.offset + node.degree * longest, self.text)
        return node.compute(values)

    def compute(self, columns: Mapping[str, Any]) -> Any:  # noqa: ANN401 - any arithmetic type
        """Return the value for columns of a type with arithmetic, such as `Rounded`.

        A constant expression is an `fmpq` whatever the columns.
        """
        return self._node.compute(columns)

    def __reduce__(self) -> tuple[Callable[[str], Expression], tuple[str]]:
        return parse_expression, (self.text,)  # closures do not pickle


@dataclass(frozen=True, slots=True)
class _Node:
    """A compiled piece, with a bound on its size.

    Numerator and denominator have at most offset + degree * b bits when those of every column
    have at most b.  Thus one comparison before the evaluation keeps every intermediate result
    small.
    """

    compute: Compute
    columns: frozenset[str]
    constant: fmpq | None
    degree: int
    offset: int

    @property
    def grows(self) -> bool:
        """Whether the value can be longer than the columns."""
        return self.degree > 1 or self.offset > 0

    @classmethod
    def number(cls, value: fmpq) -> _Node:
        return cls(lambda _: value, frozenset(), value, 0, int(value.height_bits()))

    @classmethod
    def column(cls, name: str) -> _Node:
        return cls(operator.itemgetter(name), frozenset((name,)), None, 1, 0)


def parse_expression(source: str | int | Decimal) -> Expression:
    """Parse a number, a column name or arithmetic on columns.

    Raises
    ------
    InputError
        For anything outside the language, a text longer than 2000 characters or nested deeper
        than 50 levels, a number longer than 10^6 bits, or a constant part that divides by zero.

    Examples
    --------
    >>> parse_expression("1e-1 + 1/5").constant
    3/10
    >>> sorted(parse_expression("`my mass`**2 - p").columns)
    ['my mass', 'p']
    >>> parse_expression("sqrt(p)")
    Traceback (most recent call last):
    ...
    loopint.core.errors.InputError: 'sqrt(p)' is not allowed; accepted: numbers, column names \
(odd ones in `backquotes`), + - * /, ** with an integer exponent, parentheses
    """
    if not isinstance(source, str):
        exact_real(source)  # refuses booleans, NaN and infinity
        source = str(source)
    if len(source) > MAX_LENGTH:
        raise InputError(
            f"the expression {_short(source)!r} has {len(source)} characters; "
            f"accepted: at most {MAX_LENGTH}"
        )
    parser = _Parser(source)
    node = parser.compile(parser.tree(), 1)
    return Expression(parser.text, node.columns, node.constant, node)


class _Parser:
    """One text on its way to a compiled node."""

    def __init__(self, source: str) -> None:
        pieces = _BACKQUOTED.split(source)  # outside, quoted, outside, ...
        prefix = "quoted_"
        while prefix in source:
            prefix += "_"
        outside = [" ".join(piece.split()) for piece in pieces[::2]]
        self.text = outside[0]
        self.prepared = outside[0]
        self.quoted: dict[str, str] = {}
        for name, after in zip(pieces[1::2], outside[1:], strict=True):
            placeholder = f"{prefix}{len(self.quoted)}_"
            self.quoted[placeholder] = name
            self.text += f" `{name}` {after}"
            self.prepared += f" {placeholder} {after}"
        self.text, self.prepared = self.text.strip(), self.prepared.strip()

    def tree(self) -> ast.expr:
        """Return the syntax tree, still unchecked."""
        if "#" in self.prepared or "`" in self.prepared or "" in self.quoted.values():
            raise self.malformed()  # a comment would silently hide what follows it
        try:
            with warnings.catch_warnings():
                warnings.simplefilter("ignore")  # Python's advice on literals is not for our user
                return ast.parse(self.prepared, mode="eval").body
        except (SyntaxError, ValueError, RecursionError, MemoryError):
            raise self.malformed() from None

    def malformed(self) -> InputError:
        return InputError(
            f"{_short(self.text)!r} is not arithmetic on columns; accepted: {GRAMMAR}"
        )

    def shown(self, node: ast.expr) -> str:
        """Return what the user wrote for this node."""
        written = ast.get_source_segment(self.prepared, node) or ""
        for placeholder, name in self.quoted.items():
            written = written.replace(placeholder, f"`{name}`")
        return _short(written)

    def compile(self, node: ast.expr, depth: int) -> _Node:
        if depth > MAX_DEPTH:
            raise InputError(
                f"{_short(self.text)!r} is nested deeper than {MAX_DEPTH} levels; accepted: "
                f"{MAX_DEPTH} (a long sum can be grouped by parentheses)"
            )
        match node:
            case ast.Constant(value=value) if type(value) in (int, float):
                written = ast.get_source_segment(self.prepared, node) or ""
                return _Node.number(exact_real(written.replace("_", "")))
            case ast.Name():
                # the written name: Python would normalise some letters, such as the micro sign
                name = ast.get_source_segment(self.prepared, node) or node.id
                return _Node.column(self.quoted.get(name, name))
            case ast.UnaryOp(op=ast.UAdd()):
                return self.compile(node.operand, depth + 1)
            case ast.UnaryOp(op=ast.USub()):
                return self.negate(self.compile(node.operand, depth + 1))
            case ast.BinOp(op=ast.Pow()):
                return self.power(node, depth)
            case ast.BinOp(op=ast.BitXor()):
                raise InputError(f"{self.shown(node)!r} uses ^; accepted: ** for a power")
            case ast.BinOp(op=op) if type(op) in _BINARY:
                return self.binary(node, depth)
        raise InputError(f"{self.shown(node)!r} is not allowed; accepted: {GRAMMAR}")

    @staticmethod
    def negate(inner: _Node) -> _Node:
        if inner.constant is not None:
            return _Node.number(-inner.constant)
        compute = inner.compute
        return _Node(
            lambda values: -compute(values), inner.columns, None, inner.degree, inner.offset
        )

    def binary(self, node: ast.BinOp, depth: int) -> _Node:
        left, right = self.compile(node.left, depth + 1), self.compile(node.right, depth + 1)
        apply = _BINARY[type(node.op)]
        first, second = left.compute, right.compute
        compute: Compute
        if isinstance(node.op, ast.Div):
            if right.constant == 0:
                raise _division_by_zero(self.shown(node))
            compute = _guarded(lambda values: first(values) / second(values), self.shown(node))
        else:

            def compute(values: Mapping[str, fmpq]) -> fmpq:
                return apply(first(values), second(values))

        carry = isinstance(node.op, ast.Add | ast.Sub)
        return self.sized(
            compute,
            left.columns | right.columns,
            left.degree + right.degree,
            left.offset + right.offset + carry,
        )

    def power(self, node: ast.BinOp, depth: int) -> _Node:
        exponent = _integer(node.right)
        if exponent is None or abs(exponent) > MAX_EXPONENT:
            raise InputError(
                f"{self.shown(node)!r} has the exponent {self.shown(node.right)!r}; accepted: "
                f"a written integer from -{MAX_EXPONENT} to {MAX_EXPONENT}"
            )
        base = self.compile(node.left, depth + 1)
        inner, size = base.compute, abs(exponent)

        def compute(values: Mapping[str, fmpq]) -> fmpq:
            return inner(values) ** exponent

        return self.sized(
            _guarded(compute, self.shown(node)) if exponent < 0 else compute,
            base.columns,
            base.degree * size,
            base.offset * size + 1,
        )

    def sized(self, compute: Compute, columns: frozenset[str], degree: int, offset: int) -> _Node:
        """Return a node whose size is acceptable; a constant one is computed at once."""
        _check_size(offset, self.text)
        if columns:
            return _Node(compute, columns, None, degree, offset)
        return _Node.number(compute({}))


def _guarded(compute: Compute, shown: str) -> Compute:
    """Turn a division by zero into a sentence that shows where."""

    def guarded(values: Mapping[str, fmpq]) -> fmpq:
        try:
            return compute(values)
        except ZeroDivisionError:
            raise _division_by_zero(shown) from None

    return guarded


def _division_by_zero(shown: str) -> InputError:
    return InputError(f"division by zero in {shown}; accepted: a divisor other than 0")


def _integer(node: ast.expr) -> int | None:
    """Return a written integer with an optional sign, else None."""
    match node:
        case ast.UnaryOp(op=ast.USub(), operand=ast.Constant(value=value)) if type(value) is int:
            return -value
        case ast.UnaryOp(op=ast.UAdd(), operand=ast.Constant(value=value)) if type(value) is int:
            return value
        case ast.Constant(value=value) if type(value) is int:
            return value
    return None


def _check_size(bits: int, text: str) -> None:
    if bits > MAX_BITS:
        raise InputError(
            f"{_short(text)!r} can give a number of {bits} bits; accepted: at most {MAX_BITS}"
        )


def _short(text: str) -> str:
    return text if len(text) <= 60 else text[:57] + "..."
