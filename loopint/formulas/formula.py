"""The closed form of one integral, as data: abbreviations, pieces, coefficients."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import sympy

from loopint.core.epsilon_linear import EpsilonLinear
from loopint.core.errors import InputError
from loopint.formulas import printing
from loopint.formulas.expansion import Expr

if TYPE_CHECKING:
    from collections.abc import Mapping

    from loopint.core.conventions import Measure, PropagatorSign

Definition = tuple[Expr, Expr]
FORMS = ("text", "latex", "python", "sympy")


@dataclass(frozen=True)
class Piece:
    """What holds on one part of the domain.

    Attributes
    ----------
    conditions
        Relations that all hold there; none if it is the whole domain.
    definitions
        Abbreviations (symbol, expression), each in terms of the ones before it.
    closed_form
        The integral in d dimensions, in these abbreviations.
    coefficients
        From order to the Laurent coefficient, in these abbreviations.
    """

    conditions: tuple[Expr, ...]
    definitions: tuple[Definition, ...]
    closed_form: Expr
    coefficients: Mapping[int, Expr] = field(hash=False)

    @property
    def condition(self) -> Expr:
        """All conditions as one sympy expression."""
        return sympy.And(*self.conditions)

    def spelled_out(self, expression: Expr) -> Expr:
        """Replace every abbreviation."""
        known: dict[Expr, Expr] = {}
        for name, value in self.definitions:
            known[name] = _rebuilt(value, known)
        return _rebuilt(expression, known)


@dataclass(frozen=True)
class Formula:
    """Closed form and Laurent coefficients of one integral (see `loopint.formula`).

    Attributes
    ----------
    family, powers, kinematics, dimension, orders, propagator_sign, measure
        What was asked for.
    symbols
        The variables (squared momenta and masses, mu^2), without eps.
    pieces
        The formula as it is printed: with abbreviations, and by parts of the domain.
    domain
        For which p^2 and masses it holds.
    prescription
        How the i0 is taken into account.
    sources
        Where the relations that were used are published.
    """

    family: str
    powers: tuple[int | EpsilonLinear, ...]
    kinematics: str
    dimension: int
    orders: tuple[int, int]
    propagator_sign: PropagatorSign
    measure: Measure
    symbols: tuple[Expr, ...]
    pieces: tuple[Piece, ...]
    domain: str
    prescription: str
    sources: tuple[str, ...]

    @property
    def closed_form(self) -> Expr:
        """The integral as a function of `eps` and `symbols`, without abbreviations."""
        return self._joined([piece.spelled_out(piece.closed_form) for piece in self.pieces])

    @property
    def coefficients(self) -> dict[int, Expr]:
        """From order to the Laurent coefficient as a function of `symbols`."""
        return {order: self.coefficient(order) for order in self.pieces[0].coefficients}

    def coefficient(self, order: int) -> Expr:
        """Return one Laurent coefficient as a function of `symbols`.

        Raises
        ------
        KeyError
            If the order is outside `orders`, or a Gauss function with epsilon in its parameters has
            no coefficients in closed form.
        """
        return self._joined([piece.spelled_out(piece.coefficients[order]) for piece in self.pieces])

    def _joined(self, values: list[Expr]) -> Expr:
        if all(value == values[0] for value in values):
            return values[0]
        return sympy.Piecewise(
            *(
                (value, piece.spelled_out(piece.condition))
                for value, piece in zip(values, self.pieces, strict=True)
            ),
            evaluate=False,  # the conditions are disjoint as they stand
        )

    def as_text(self) -> str:
        """Return the formula as plain text."""
        return printing.as_text(self)

    def as_latex(self) -> str:
        """Return the formula as LaTeX (amsmath)."""
        return printing.as_latex(self)

    def as_python(self) -> str:
        """Return a Python module that needs only mpmath: a function for each coefficient."""
        return printing.as_python(self)

    def as_sympy(self) -> str:
        """Return Python text that rebuilds the expressions with sympy."""
        return printing.as_sympy(self)

    def printed(self, form: str) -> str:
        """Return the formula in a form of `FORMS`.

        Raises
        ------
        InputError
            If the form is unknown.
        """
        if form not in FORMS:
            raise InputError(f"format = {form!r} is unknown; accepted: {', '.join(FORMS)}")
        return str(getattr(self, f"as_{form}")())

    def __str__(self) -> str:
        return self.as_text()

    def _repr_latex_(self) -> str:
        return self.as_latex()


def _rebuilt(expression: Expr, known: dict[Expr, Expr]) -> Expr:
    """Replace symbols; polylogarithms are not evaluated: sympy would try for seconds."""
    if not expression.args:
        return known.get(expression, expression)
    if not expression.free_symbols & known.keys():
        return expression
    arguments = [_rebuilt(argument, known) for argument in expression.args]
    if isinstance(expression, sympy.polylog):
        return sympy.polylog(*arguments, evaluate=False)
    return expression.func(*arguments)
