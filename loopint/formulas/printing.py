"""A formula as text, as LaTeX, as a Python module that needs only mpmath, and as sympy code."""

from __future__ import annotations

import inspect
import re
import textwrap
from typing import TYPE_CHECKING, Any

import sympy
from sympy.printing.latex import LatexPrinter
from sympy.printing.pycode import MpmathPrinter
from sympy.printing.str import StrPrinter

from loopint.formulas import special
from loopint.formulas.expansion import EPS, Expr
from loopint.formulas.names import (
    HEADINGS,
    LATEX_NAMES,
    LETTERS,
    MEASURES,
    TEXT_NAMES,
    integral_definition,
    power_text,
)

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable, Sequence

    from loopint.formulas.formula import Definition, Formula, Piece

WIDTH = 100
SQUARED = "_squared"
NO_COEFFICIENTS = (
    "of this Gauss function have no closed form here; loopint.propagator evaluates them"
)


# Text -----------------------------------------------------------------------------------------


class _TextPrinter(StrPrinter):  # type: ignore[misc] # sympy has no types
    """Write as a physicist would: p^2, Li2(x), 2F1(a, b; c; z), i."""

    def _print_Symbol(self, expr: Any) -> str:  # noqa: ANN401, N802
        name = str(expr.name)
        if name.endswith(SQUARED):
            return f"{TEXT_NAMES.get(name.removesuffix(SQUARED), name.removesuffix(SQUARED))}^2"
        return TEXT_NAMES.get(name, name)

    def _print_Pow(self, expr: Any, rational: bool = False) -> str:  # noqa: ANN401, N802
        base, exponent = expr.as_base_exp()
        if base.is_Symbol and base.name.endswith(SQUARED) and (2 * exponent).is_Integer:
            stem = base.name.removesuffix(SQUARED)
            power = 2 * exponent
            text = TEXT_NAMES.get(stem, stem)
            if power < 0:
                return f"1/{text}" if power == -1 else f"1/{text}^{-power}"
            return text if power == 1 else f"{text}^{power}"
        return str(super()._print_Pow(expr, rational=rational))

    def _print_Add(self, expr: Any, order: Any = None) -> str:  # noqa: ANN401, N802
        terms = sorted(self._as_ordered_terms(expr, order=order), key=_rank)
        text = ""
        for term in terms:
            one = self._print(term)
            if one.startswith("-"):
                text += f" - {one[1:]}" if text else one
            else:
                text += f" + {one}" if text else one
        return text

    def _print_ImaginaryUnit(self, expr: Any) -> str:  # noqa: ANN401, ARG002, N802
        return "i"

    def _print_EulerGamma(self, expr: Any) -> str:  # noqa: ANN401, ARG002, N802
        return "gamma_E"

    def _call(self, name: str, arguments: Iterable[Any]) -> str:
        return f"{name}({', '.join(self._print(a) for a in arguments)})"

    def _print_gamma(self, expr: Any) -> str:  # noqa: ANN401
        return self._call("Gamma", expr.args)

    def _print_acos(self, expr: Any) -> str:  # noqa: ANN401
        return self._call("arccos", expr.args)

    def _print_Max(self, expr: Any) -> str:  # noqa: ANN401, N802
        return self._call("max", expr.args)

    def _print_Min(self, expr: Any) -> str:  # noqa: ANN401, N802
        return self._call("min", expr.args)

    def _print_polylog(self, expr: Any) -> str:  # noqa: ANN401
        return self._call(f"Li{expr.args[0]}", expr.args[1:])

    def _print_NielsenS(self, expr: Any) -> str:  # noqa: ANN401, N802
        return self._call(f"S{expr.args[0]}{expr.args[1]}", expr.args[2:])

    def _print_log_sine(self, expr: Any) -> str:  # noqa: ANN401
        return self._call(f"Ls{expr.args[0]}", expr.args[1:])

    def _print_clausen2(self, expr: Any) -> str:  # noqa: ANN401
        return self._call("Cl2", expr.args)

    def _print_lerchphi(self, expr: Any) -> str:  # noqa: ANN401
        return self._call("Phi", expr.args)

    def _print_hyper(self, expr: Any) -> str:  # noqa: ANN401
        (a, b), (c,) = expr.ap, expr.bq
        first, second, third, z = map(self._print, (a, b, c, expr.argument))
        return f"2F1({first}, {second}; {third}; {z})"

    def _print_Relational(self, expr: Any) -> str:  # noqa: ANN401, N802
        return f"{self._print(expr.lhs)} {expr.rel_op} {self._print(expr.rhs)}"


def _rank(term: Any) -> tuple[int, bool]:  # noqa: ANN401
    """Order the terms of a sum: numbers, then p^2, then the rest; positive ones first."""
    symbols = {str(s) for s in term.free_symbols}
    kind = 0 if not symbols else 1 if symbols <= {"p_squared", "p"} else 2
    return kind, kind == 2 and bool(term.could_extract_minus_sign())


def text_of(expression: Expr) -> str:
    """Write one expression as text.

    Examples
    --------
    >>> text_of(sympy.polylog(2, sympy.Symbol("m1_squared") ** 2) - sympy.I)
    '-i + Li2(m1^4)'
    """
    return str(_TextPrinter().doprint(expression)).replace("**", "^")


def as_text(formula: Formula) -> str:
    """Return the formula as plain text."""
    lines = [
        f"{_title(formula)}, {HEADINGS[formula.kinematics]}, d = {formula.dimension} - 2 eps",
        "",
        *_wrapped(integral_definition(formula.family, formula.powers, formula.propagator_sign)),
        f"  {MEASURES[formula.measure]}",
        "",
        *_wrapped(f"domain: {formula.domain}"),
        *_wrapped(f"i0: {formula.prescription}"),
        "",
    ]
    common, rest = _shared(formula.pieces)
    if shared := _text_lines(common):
        lines += ["with", *shared, ""]
    for piece, own in zip(formula.pieces, rest, strict=True):
        if piece.conditions and (special_here := _text_lines(own)):
            lines += [f"for {_condition(piece)}", *special_here, ""]
    lines.append("in d dimensions")
    for prefix, value in _by_piece(formula, [p.closed_form for p in formula.pieces]):
        lines += _wrapped(f"{prefix}{LETTERS[formula.family]} = {text_of(value)}")
    lines += ["", "Laurent coefficients"]
    if not formula.pieces[0].coefficients:
        lines.append(f"  {NO_COEFFICIENTS}")
    for order in formula.pieces[0].coefficients:
        values = [p.coefficients[order] for p in formula.pieces]
        for prefix, value in _by_piece(formula, values):
            lines += _wrapped(f"eps^{order}: {prefix}{text_of(value)}")
    lines += ["", *_explanations("\n".join(lines)), "sources"]
    lines += [line for source in formula.sources for line in _wrapped(source)]
    return "\n".join(lines) + "\n"


def _title(formula: Formula) -> str:
    return f"{formula.family}({', '.join(map(power_text, formula.powers))})"


def _wrapped(text: str) -> list[str]:
    return textwrap.wrap(
        text,
        WIDTH,
        initial_indent="  ",
        subsequent_indent="      ",
        break_long_words=False,
        break_on_hyphens=False,
    )


def _condition(piece: Piece) -> str:
    return _chained(piece, text_of, " and ", "<")


def _chained(piece: Piece, write: Callable[[Expr], str], link: str, less: str) -> str:
    """Write all conditions, a < b and b < c as a < b < c."""
    if len(piece.conditions) == 2:
        first, second = piece.conditions
        if not isinstance(first, sympy.Ne) and first.gts == second.lts:
            return f" {less} ".join(map(write, (first.lts, first.gts, second.gts)))
    return link.join(write(c) for c in piece.conditions)


def _text_lines(definitions: Sequence[Definition]) -> list[str]:
    lines = []
    for name, value in definitions:
        left, right = text_of(name), text_of(value)
        if left != right:  # m1 = sqrt(m1^2) says nothing
            lines += _wrapped(f"{left} = {right}")
    return lines


def _by_piece(formula: Formula, values: list[Expr]) -> list[tuple[str, Expr]]:
    """Pair values with a label, one value if they agree."""
    if all(value == values[0] for value in values):
        return [("", values[0])]
    return [
        (f"({_condition(piece)}) ", value)
        for piece, value in zip(formula.pieces, values, strict=True)
    ]


def _explanations(text: str) -> list[str]:
    known = {
        "Li": "Li2, Li3, ...: polylogarithms",
        "S12(": "Snp(z) = (-1)^(n+p-1)/((n-1)! p!) Int_0^1 log(t)^(n-1) log(1-z t)^p dt/t "
        "(Nielsen), Sn1 = Li(n+1)",
        "Cl2(": "Cl2(x) = sum_k sin(k x)/k^2 (Clausen)",
        "Ls3(": "Lsj(x) = -Int_0^x log(2 sin(t/2))^(j-1) dt (log-sine), Ls2 = Cl2",
        "Phi(": "Phi(z, s, a) = sum_k z^k/(k+a)^s (Lerch)",
    }
    found = [f"  {meaning}" for mark, meaning in known.items() if re.search(_mark(mark), text)]
    return ["functions", *found, ""] if found else []


def _mark(mark: str) -> str:
    return r"\bLi\d\(" if mark == "Li" else re.escape(mark)


def _shared(pieces: Sequence[Piece]) -> tuple[list[Definition], list[list[Definition]]]:
    """Split off the definitions that are the same everywhere.

    A rational function or a mass may be missing in some pieces; everything else has to be in all.
    """
    values: dict[Expr, set[Expr]] = {}
    for piece in pieces:
        for name, value in piece.definitions:
            values.setdefault(name, set()).add(value)
    common: dict[Expr, Expr] = {}
    for piece in pieces:
        for name, value in piece.definitions:
            count = sum((name, value) in p.definitions for p in pieces)
            harmless = value.is_rational_function() or (value.is_Pow and value.base.is_Symbol)
            everywhere = count == len(pieces) or (count > 1 and harmless)
            own = {s for s in value.free_symbols if s in values and s not in common}
            if len(values[name]) == 1 and everywhere and not own:
                common[name] = value
    rest = [[d for d in piece.definitions if d[0] not in common] for piece in pieces]
    return list(common.items()), rest


# LaTeX ----------------------------------------------------------------------------------------


class _LatexPrinter(LatexPrinter):  # type: ignore[misc]
    """Write p^{2}, m_1^{4}, Greek names as in the text."""

    def _print_Symbol(self, expr: Any, style: str = "plain") -> str:  # noqa: ANN401, N802
        name = str(expr.name)
        if name.endswith(SQUARED):
            return f"{_latex_name(name.removesuffix(SQUARED))}^{{2}}"
        return LATEX_NAMES.get(name) or str(super()._print_Symbol(expr, style=style))

    def _print_Pow(self, expr: Any) -> str:  # noqa: ANN401, N802
        base, exponent = expr.as_base_exp()
        if base.is_Symbol and base.name.endswith(SQUARED) and (2 * exponent).is_Integer:
            stem, power = _latex_name(base.name.removesuffix(SQUARED)), 2 * exponent
            if power < 0:
                return rf"\frac{{1}}{{{stem}{'' if power == -1 else f'^{{{-power}}}'}}}"
            return stem if power == 1 else f"{stem}^{{{power}}}"
        return str(super()._print_Pow(expr))


def _latex_name(name: str) -> str:
    return LATEX_NAMES.get(name, name)


def latex_of(expression: Expr) -> str:
    """Write one expression as LaTeX."""
    return str(_LatexPrinter({"inv_trig_style": "full"}).doprint(expression))


def as_latex(formula: Formula) -> str:
    """Return the formula as one align* environment (amsmath)."""
    common, rest = _shared(formula.pieces)
    rows = [_latex_row(name, value) for name, value in common]
    for piece, own in zip(formula.pieces, rest, strict=True):
        own_rows = [_latex_row(name, value) for name, value in own]
        if piece.conditions and any(own_rows):
            rows += [rf"&\text{{for }} {_latex_condition(piece)}:", *own_rows]
    values = [p.closed_form for p in formula.pieces]
    powers = ", ".join(map(power_text, formula.powers)).replace("eps", r"\varepsilon")
    name = f"{LETTERS[formula.family]}({powers})"
    rows += _latex_values(formula, name, values)
    for order in formula.pieces[0].coefficients:
        values = [p.coefficients[order] for p in formula.pieces]
        rows += _latex_values(formula, rf"{name}\big|_{{\varepsilon^{{{order}}}}}", values)
    body = " \\\\\n".join(row for row in rows if row)
    return f"\\begin{{align*}}\n{body}\n\\end{{align*}}\n"


def _latex_row(name: Expr, value: Expr) -> str:
    left, right = latex_of(name), latex_of(value)
    return "" if left == right else f"{left} &= {right}"


def _latex_condition(piece: Piece) -> str:
    return _chained(piece, latex_of, r" \text{ and } ", "<")


def _latex_values(formula: Formula, name: str, values: list[Expr]) -> list[str]:
    if all(value == values[0] for value in values):
        return [f"{name} &= {latex_of(values[0])}"]
    return [
        rf"{name} &= {latex_of(value)} \quad \left({_latex_condition(piece)}\right)"
        for piece, value in zip(formula.pieces, values, strict=True)
    ]


# Python ---------------------------------------------------------------------------------------


class _PythonPrinter(MpmathPrinter):  # type: ignore[misc]
    """Write with mpmath and the functions of `loopint.formulas.special`."""

    def _print_hyper(self, expr: Any) -> str:  # noqa: ANN401
        arguments = (*expr.ap, *expr.bq, expr.argument)
        return f"mpmath.hyp2f1({', '.join(self._print(a) for a in arguments)})"

    def _call(self, name: str, expr: Any) -> str:  # noqa: ANN401
        return f"{name}({', '.join(self._print(a) for a in expr.args)})"

    def _print_lerchphi(self, expr: Any) -> str:  # noqa: ANN401
        return self._call("mpmath.lerchphi", expr)

    def _print_polylog(self, expr: Any) -> str:  # noqa: ANN401
        return self._call("mpmath.polylog", expr)

    def _print_zeta(self, expr: Any) -> str:  # noqa: ANN401
        return self._call("mpmath.zeta", expr)

    def _print_NielsenS(self, expr: Any) -> str:  # noqa: ANN401, N802
        return self._call("nielsen_polylogarithm", expr)

    def _print_log_sine(self, expr: Any) -> str:  # noqa: ANN401
        return self._call("log_sine", expr)

    def _print_clausen2(self, expr: Any) -> str:  # noqa: ANN401
        return f"mpmath.clsin(2, {self._print(expr.args[0])})"

    def _print_Max(self, expr: Any) -> str:  # noqa: ANN401, N802
        return self._call("max", expr)

    def _print_Min(self, expr: Any) -> str:  # noqa: ANN401, N802
        return self._call("min", expr)


def _python_of(expression: Expr) -> str:
    return str(_PythonPrinter({"fully_qualified_modules": True}).doprint(expression))


def as_python(formula: Formula) -> str:
    """Return a Python module that needs only mpmath."""
    arguments = [str(s) for s in formula.symbols]
    functions = [
        _python_function(
            formula,
            "closed_form",
            ["eps", *arguments],
            f"Return {_title(formula)} in d = {formula.dimension} - 2 eps dimensions.",
            [piece.closed_form for piece in formula.pieces],
        )
    ]
    names = {}
    for order in formula.pieces[0].coefficients:
        name = names[order] = f"coefficient_{'m' if order < 0 else ''}{abs(order)}"
        functions.append(
            _python_function(
                formula,
                name,
                arguments,
                f"Return the coefficient of eps^{order}.",
                [piece.coefficients[order] for piece in formula.pieces],
            )
        )
    table = "".join(f"    {order}: {name},\n" for order, name in names.items())
    body = "\n\n\n".join([*_python_helpers(functions), *functions])
    docstring = "\n".join(
        [
            f"{_title(formula)}, {HEADINGS[formula.kinematics]}, d = {formula.dimension} - 2 eps.",
            "",
            integral_definition(formula.family, formula.powers, formula.propagator_sign),
            MEASURES[formula.measure],
            "",
            f"Domain: {formula.domain}.",
            f"i0: {formula.prescription}.",
            "Precision: that of mpmath.mp.dps.",
            "",
            "Sources:",
            *(f"  {source}" for source in formula.sources),
        ]
    )
    return f'"""{docstring}\n"""\n\nimport mpmath\n\n\n{body}\n\n\nCOEFFICIENTS = {{\n{table}}}\n'


def _python_helpers(functions: list[str]) -> list[str]:
    helpers = []
    for function in (special.nielsen_polylogarithm, special.log_sine):
        if any(f"{function.__name__}(" in text for text in functions):
            source = re.sub(r"  # noqa.*", "", inspect.getsource(function))
            helpers.append(re.sub(r": (Any|int)\b(?=[,)])|( -> Any)", "", source).strip())
    return helpers


def _python_function(
    formula: Formula, name: str, arguments: list[str], docstring: str, values: list[Expr]
) -> str:
    listed = ", ".join(arguments)
    lines = [f"def {name}({listed}):", f'    """{docstring}"""']
    if all(value.is_Integer for value in values):
        return "\n".join([*lines, f"    return mpmath.mpf({values[0]})"])
    lines.append(f"    {listed} = map(mpmath.mpmathify, ({listed}))")
    common, rest = _shared(formula.pieces)
    pieces = list(zip(formula.pieces, rest, values, strict=True))
    if all(value == values[0] for value in values) and not values[0].free_symbols & {
        n for own in rest for n, _ in own
    }:
        pieces = [(formula.pieces[0], [], values[0])]
    needed = set().union(
        *(_needed(value, own) for _, own, value in pieces),
        *(c.free_symbols for piece, _, _ in pieces if len(pieces) > 1 for c in piece.conditions),
    )
    lines += _assignments(common, needed, "    ")
    if len(pieces) == 1:
        _, own, value = pieces[0]
        lines += _assignments(own, value.free_symbols, "    ")
        lines.append(f"    return {_python_of(value)}")
        return "\n".join(lines)
    for piece, own, value in pieces:
        condition = " and ".join(_python_of(c) for c in piece.conditions)
        lines.append(f"    if {condition}:")
        lines += _assignments(own, value.free_symbols, "        ")
        lines.append(f"        return {_python_of(value)}")
    lines.append(f'    raise ValueError("outside the domain: {formula.domain}")')
    return "\n".join(lines)


def _needed(value: Expr, definitions: Sequence[Definition]) -> set[Expr]:
    """Return all symbols that a value needs, through the definitions."""
    needed = set(value.free_symbols)
    for name, expression in reversed(definitions):
        if name in needed:
            needed |= expression.free_symbols
    return needed


def _assignments(definitions: Sequence[Definition], needed: set[Expr], indent: str) -> list[str]:
    needed = set(needed)
    lines = []
    for name, value in reversed(definitions):
        if name in needed:
            needed |= value.free_symbols
            lines.append(f"{indent}{name} = {_python_of(value)}")
    return lines[::-1]


# Sympy ----------------------------------------------------------------------------------------


def as_sympy(formula: Formula) -> str:
    """Return Python text that rebuilds `closed_form` and `coefficients` with sympy."""
    symbols = [*map(str, formula.symbols), str(EPS)]
    lines = [
        f"# {_title(formula)}, {HEADINGS[formula.kinematics]}, d = {formula.dimension} - 2 eps",
        "import sympy",
        "from sympy import *",
        "",
        "from loopint.formulas.functions import NielsenS, clausen2, log_sine",
        "",
        f'{", ".join(symbols)} = symbols("{" ".join(symbols)}")',
        "pieces = []",
        "",
        "",
        "def polylog(s, z):",
        "    return sympy.polylog(s, z, evaluate=False)  # sympy would try for seconds",
        "",
    ]
    for piece in formula.pieces:
        lines.append("")
        if piece.conditions:
            lines.append(f"# {_condition(piece)}")
        lines += [f"{name} = {_sympy_of(value)}" for name, value in piece.definitions]
        conditions = ", ".join(_sympy_of(c) for c in piece.conditions)
        lines += [
            f"condition = And({conditions})",
            f"closed = {_sympy_of(piece.closed_form)}",
            "series = {",
            *(f"    {k}: {_sympy_of(value)}," for k, value in piece.coefficients.items()),
            "}",
            "pieces.append((condition, closed, series))",
        ]
    lines += [
        "",
        "",
        "def joined(values):",
        "    if all(value == values[0] for value in values):",
        "        return values[0]",
        "    cases = zip(values, [piece[0] for piece in pieces])",
        "    return Piecewise(*cases, evaluate=False)",
        "",
        "",
        "closed_form = joined([piece[1] for piece in pieces])",
        "coefficients = {k: joined([piece[2][k] for piece in pieces]) for k in pieces[0][2]}",
    ]
    return "\n".join(lines) + "\n"


def _sympy_of(expression: Expr) -> str:
    return str(sympy.sstr(expression, sympy_integers=True))
