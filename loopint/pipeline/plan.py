"""What to evaluate in each row: config and columns, compiled once, applied to every row."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, TypeAlias, cast

from flint import arb, fmpq

from loopint.core.conventions import Conventions
from loopint.core.errors import InputError
from loopint.core.kinematics import (
    OnePoint,
    TwoPoint,
    check_mass_squared,
    snap_to_threshold,
    squared_mass,
)
from loopint.core.numbers import ZERO, ExactComplex, exact_real
from loopint.pipeline.errors import ConfigError
from loopint.pipeline.rounded import Rounded

if TYPE_CHECKING:
    from loopint.integrals.registry import Integral
    from loopint.pipeline.config import MassKeys, RunConfig
    from loopint.pipeline.expressions import Expression
    from loopint.pipeline.points import PointsSource
LineColumns: TypeAlias = tuple[Rounded, Rounded | None]  # Re and Im of m^2
Values: TypeAlias = Mapping[str, fmpq]
Cells: TypeAlias = Mapping[str, fmpq | InputError]


@dataclass(frozen=True, slots=True)
class RowRequest:
    """One integral at one row, ready to be evaluated."""

    integral_index: int
    name: str
    integral: Integral
    point: OnePoint | TwoPoint
    conventions: Conventions


@dataclass(frozen=True, slots=True)
class _Quantity:
    """An expression and the key it was given under."""

    key: str
    expression: Expression

    @property
    def columns(self) -> frozenset[str]:
        return self.expression.columns

    def over(self, columns: Mapping[str, Rounded], rows: int) -> Rounded:
        """Evaluate in all rows at once."""
        found = self.expression.compute(columns)
        return found if isinstance(found, Rounded) else Rounded.constant(found, rows)

    def real(self, values: Values) -> fmpq:
        try:
            return self.expression.evaluate(values)
        except InputError as error:
            raise InputError(f"{self.key}: {error}") from None


@dataclass(frozen=True, slots=True)
class _SquaredMass:
    """A line given by m^2, real or complex."""

    re: _Quantity
    im: _Quantity | None

    @property
    def columns(self) -> frozenset[str]:
        return self.re.columns | (self.im.columns if self.im else frozenset())

    def check_fixed_parts(self) -> None:
        """Refuse a fixed imaginary part that no row can make valid."""
        if self.im and not self.im.columns:
            check_mass_squared(ExactComplex(ZERO, self.im.real({})), self.re.key)

    def over(self, columns: Mapping[str, Rounded], rows: int) -> LineColumns:
        return self.re.over(columns, rows), self.im.over(columns, rows) if self.im else None

    def value(self, values: Values) -> ExactComplex:
        im = self.im.real(values) if self.im else ZERO
        return check_mass_squared(ExactComplex(self.re.real(values), im), self.re.key)


@dataclass(frozen=True, slots=True)
class _MassAndWidth:
    """A line given by m and Gamma, that is m^2 - i m Gamma."""

    mass: _Quantity
    width: _Quantity | None

    @property
    def columns(self) -> frozenset[str]:
        return self.mass.columns | (self.width.columns if self.width else frozenset())

    def check_fixed_parts(self) -> None:
        """Refuse a fixed mass or width that no row can make valid."""
        for quantity in (self.mass, self.width):
            if quantity and not quantity.columns:
                _not_negative(quantity, {})

    def over(self, columns: Mapping[str, Rounded], rows: int) -> LineColumns:
        mass = _where_not_negative(self.mass.over(columns, rows))
        if self.width is None:
            return mass * mass, None
        width = _where_not_negative(self.width.over(columns, rows))
        return mass * mass, -(mass * width)

    def value(self, values: Values) -> ExactComplex:
        mass = _not_negative(self.mass, values)
        width = _not_negative(self.width, values) if self.width else ZERO
        return squared_mass(mass, width)


@dataclass(frozen=True, slots=True)
class _FixedMass:
    """A line that is the same in every row."""

    squared: ExactComplex

    def over(self, columns: Mapping[str, Rounded], rows: int) -> LineColumns:  # noqa: ARG002
        re = Rounded.constant(self.squared.re, rows)
        return re, None if self.squared.is_real else Rounded.constant(self.squared.im, rows)

    def value(self, values: Values) -> ExactComplex:  # noqa: ARG002 - same call as the others
        return self.squared


Line: TypeAlias = _SquaredMass | _MassAndWidth | _FixedMass


@dataclass(frozen=True, slots=True)
class IntegralPlan:
    """One integral of the config, or a derivative of it, ready to be applied to rows.

    Attributes
    ----------
    index, name
        Place of the section in the config, and the name in the tables.
    integral
        Family, powers, dimension, orders and derivatives.
    columns
        The columns that its kinematics and mu^2 need, sorted.
    """

    index: int
    name: str
    integral: Integral
    columns: tuple[str, ...]
    _lines: tuple[Line, ...]
    _p_squared: _Quantity | None
    _mu_squared: _Quantity
    _tolerance: fmpq
    _conventions: Conventions

    @property
    def has_fixed_conventions(self) -> bool:
        """Whether mu^2 is the same in every row."""
        return not self._mu_squared.columns

    @property
    def fixed_conventions(self) -> Conventions:
        """The conventions if mu^2 is the same in every row."""
        return self._conventions

    @property
    def snaps(self) -> bool:
        """Whether points may be moved onto a threshold."""
        return bool(self._tolerance)

    def over(
        self, columns: Mapping[str, Rounded], rows: int
    ) -> tuple[Rounded | None, list[LineColumns]]:
        """Return p^2 (None for a tadpole) and the squared masses of all rows, unchecked."""
        p_squared = None if self._p_squared is None else self._p_squared.over(columns, rows)
        return p_squared, [line.over(columns, rows) for line in self._lines]

    def mu_squared_over(self, columns: Mapping[str, Rounded], rows: int) -> Rounded:
        """Return mu^2 of all rows, unchecked."""
        return self._mu_squared.over(columns, rows)

    def point(self, cells: Cells) -> OnePoint | TwoPoint:
        """Return the exact kinematic point of a row.

        Parameters
        ----------
        cells
            The exact value of every column in `columns`, or the `InputError` of a bad cell.

        Raises
        ------
        InputError
            For a bad cell, a division by zero, a negative m^2, mass or width, or Im m^2 > 0.  The
            message names the column or the key.
        """
        values = self._values(cells)
        masses = [line.value(values) for line in self._lines]
        if self._p_squared is None:
            return OnePoint(masses[0])
        point = TwoPoint(self._p_squared.real(values), masses[0], masses[1])
        return snap_to_threshold(point, self._tolerance) if self._tolerance else point

    def conventions(self, cells: Cells) -> Conventions:
        """Return measure, propagator sign and mu^2 of a row.

        Raises
        ------
        InputError
            For a bad cell, a division by zero, or mu^2 <= 0.
        """
        if not self._mu_squared.columns:
            return self._conventions
        mu_squared = _positive(self._mu_squared, self._values(cells))
        return replace(self._conventions, mu_squared=mu_squared)

    def request(self, cells: Cells) -> RowRequest:
        """Return everything that one evaluation needs; see `point` and `conventions`."""
        return RowRequest(
            self.index, self.name, self.integral, self.point(cells), self.conventions(cells)
        )

    def _values(self, cells: Cells) -> Values:
        for column in self.columns:
            if isinstance(cells[column], InputError):
                raise InputError(f"column {column} is {cells[column]}")
        return cast("Values", cells)


def plan_integrals(config: RunConfig, source: PointsSource) -> tuple[IntegralPlan, ...]:
    """Compile every integral of a config for the columns of a source.

    Raises
    ------
    ConfigError
        For a column that is missing or holds no numbers, and for kinematics or mu^2 that no row
        can make valid, such as a fixed negative m^2.
    """
    mu_squared = _Quantity("mu_squared", config.conventions.mu_squared)
    where = f"{config.where}[conventions] mu_squared"
    source.check_columns(mu_squared.columns, where)
    conventions = Conventions(config.conventions.measure, config.conventions.propagator_sign)
    if not mu_squared.columns:
        try:
            conventions = replace(conventions, mu_squared=_positive(mu_squared, {}))
        except InputError as error:
            raise ConfigError(f"{config.where}[conventions] {error}") from None
    tolerance = exact_real(config.accuracy.snap_tolerance)
    plans = []
    for index, entry in enumerate(config.integrals):
        where = f'{config.where}[[integral]] "{entry.name}"'
        quantities = {key: _Quantity(key, found) for key, found in entry.expressions().items()}
        for key, quantity in quantities.items():
            source.check_columns(quantity.columns, f"{where} {key}")
        needed = mu_squared.columns.union(*(found.columns for found in quantities.values()))
        lines = tuple(_line(quantities, keys, where) for keys in entry.mass_keys)
        plans += [
            IntegralPlan(
                index,
                name,
                integral,
                tuple(sorted(needed)),
                lines,
                quantities.get("p_squared"),
                mu_squared,
                tolerance,
                conventions,
            )
            for name, integral in entry.results.items()
        ]
    return tuple(plans)


def _line(quantities: Mapping[str, _Quantity], keys: MassKeys, where: str) -> Line:
    """Compile one line; a fixed one is checked at once."""
    line: _SquaredMass | _MassAndWidth
    if keys.squared in quantities:
        line = _SquaredMass(quantities[keys.squared], quantities.get(keys.imaginary))
    else:
        line = _MassAndWidth(quantities[keys.mass], quantities.get(keys.width))
    try:
        line.check_fixed_parts()
        return line if line.columns else _FixedMass(line.value({}))
    except InputError as error:
        raise ConfigError(f"{where} {error}") from None


def _where_not_negative(column: Rounded) -> Rounded:
    """Leave rows with a negative mass or width to the arithmetic that rejects them."""
    return column.where(column.value >= 0)


def _not_negative(quantity: _Quantity, values: Values) -> fmpq:
    value = quantity.real(values)
    if value < 0:
        raise InputError(f"{quantity.key} = {_short(value)} is negative; accepted: >= 0")
    return value


def _positive(quantity: _Quantity, values: Values) -> fmpq:
    value = quantity.real(values)
    if value <= 0:
        raise InputError(f"{quantity.key} = {_short(value)} is not positive; accepted: > 0")
    return value


def _short(value: fmpq) -> str:
    text = str(value)
    return text if len(text) <= 25 else str(arb(value).str(10, radius=False))
