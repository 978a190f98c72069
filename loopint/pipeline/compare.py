"""Compares a user's formula, or numbers, with proven coefficients, and tries what went wrong.

Both sides are evaluated in balls at the same exact points.  Where they disagree, transformations
that are known mistakes of the trade are applied to the proven side; those that restore the
agreement are reported, by region.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, TypeAlias

import numpy as np
import pyarrow as pa
from flint import acb, arb, fmpq

from loopint.core.conventions import Measure, PropagatorSign
from loopint.core.errors import InputError, LoopintError
from loopint.core.kinematics import OnePoint, TwoPoint
from loopint.core.laurent import complex_ball
from loopint.core.precision import BITS_PER_DIGIT, working_precision
from loopint.integrals.registry import Evaluator
from loopint.pipeline.chunks import OpenedRun, RowReader, open_run
from loopint.pipeline.comparison_config import ComparisonConfig
from loopint.pipeline.config import RunConfig
from loopint.pipeline.errors import ConfigError, unknown_name
from loopint.pipeline.formula_language import Cuts, UserFormula, Value, of, parse_formula
from loopint.pipeline.tables import write_parquet

if TYPE_CHECKING:
    from loopint.pipeline.plan import Cells, IntegralPlan, RowRequest

MOST_DIGITS, COLUMN_DIGITS = 30, 10
GUARD_DIGITS = 12
NAMED_ROWS = 5
CIRCLE_POINTS, CIRCLE_RADIUS = 64, fmpq(1, 16)  # singularities of eps lie beyond about 1/4
KINEMATICS = ("p_squared", "m1_squared", "m2_squared", "m_squared", "m1", "m2", "m", "mu_squared")


@dataclass(frozen=True)
class Compared:
    """One row: the user's number and the proven one."""

    row: int
    key: object
    region: str
    theirs: acb
    proven: acb
    digits: int


Transformation: TypeAlias = Callable[[Compared], acb]


@dataclass
class RegionAgreement:
    """How well a region agrees."""

    region: str
    rows: int
    worst: int
    median: int
    disagreeing: int


@dataclass(frozen=True)
class Hint:
    """A mistake that, made on the proven side, restores the agreement."""

    text: str
    regions: tuple[str, ...]
    rows: int
    of_rows: int
    worst_digits: int


@dataclass
class Comparison:
    """The outcome of one `[[comparison]]`.

    Attributes
    ----------
    config, digits
        What was asked.
    rows
        The compared rows.
    failures
        Row and reason where the formula has no value.
    undecided_cuts
        How often a value was taken on a branch cut that no i0 decides.
    """

    config: ComparisonConfig
    digits: int
    total_rows: int
    rows: list[Compared] = field(default_factory=list)
    failures: list[tuple[int, str]] = field(default_factory=list)
    undecided_cuts: int = 0
    hints: list[Hint] = field(default_factory=list)

    @property
    def agrees(self) -> bool:
        """Whether every row agrees to the digits asked for."""
        return bool(self.rows) and not self.disagreeing and not self.failures

    @property
    def disagreeing(self) -> list[Compared]:
        """The rows that do not agree, the worst first."""
        found = [row for row in self.rows if row.digits < self.digits]
        return sorted(found, key=lambda row: row.digits)

    def regions(self) -> list[RegionAgreement]:
        """Summarise by region, in the order of their names."""
        found = []
        for region in sorted({row.region for row in self.rows}):
            digits = sorted(row.digits for row in self.rows if row.region == region)
            found.append(
                RegionAgreement(
                    region,
                    len(digits),
                    digits[0],
                    digits[len(digits) // 2],
                    sum(n < self.digits for n in digits),
                )
            )
        return found


def compare_config(
    config: RunConfig, *, progress: Callable[[int, int], None] | None = None
) -> tuple[list[Comparison], Path]:
    """Carry out all comparisons of a config and write `comparison.parquet` beside its table.

    Raises
    ------
    ConfigError
        If there is nothing to compare, or a comparison does not fit the config or the points.
    """
    if not config.comparisons:
        raise ConfigError(
            f"{config.where}[[comparison]] is missing; accepted: [[comparison]] with the keys "
            f"{', '.join(ComparisonConfig.model_fields)}"
        )
    opened = open_run(config)
    jobs = [_Job.prepare(config, opened, entry) for entry in config.comparisons]
    total = sum(len(job.positions) for job in jobs)
    done = 0
    outcomes = []
    for job in jobs:
        outcome = Comparison(job.entry, job.digits, opened.source.row_count)
        for key, row, cells in job.read(opened):
            job.compare_row(outcome, row, key, cells)
            done += 1
            if progress is not None and done % 50 == 0:
                progress(done, total)
        if outcome.disagreeing:
            outcome.hints = job.hints(outcome)
        outcomes.append(outcome)
    path = config.output.directory / "comparison.parquet"
    path.parent.mkdir(parents=True, exist_ok=True)
    write_parquet(path, _table(outcomes))
    return outcomes, path


@dataclass
class _Job:
    """One comparison, ready to be applied to rows."""

    entry: ComparisonConfig
    plan: IntegralPlan
    digits: int
    bits: int
    formula: UserFormula | None
    let: list[tuple[str, UserFormula]]
    columns: list[str]
    positions: np.ndarray
    requests: dict[int, RowRequest] = field(default_factory=dict)

    @classmethod
    def prepare(cls, config: RunConfig, opened: OpenedRun, entry: ComparisonConfig) -> _Job:
        where = f'{config.where}[[comparison]] "{entry.name}"'
        plans = {plan.name: plan for plan in opened.plans}
        if entry.integral not in plans:
            raise ConfigError(
                f'{where} integral = "{entry.integral}" {unknown_name(entry.integral, plans)}'
            )
        plan = plans[entry.integral]
        low, high = plan.integral.orders
        if not low <= entry.order <= high:
            raise ConfigError(
                f"{where} order = {entry.order} is not computed; accepted: {low} to {high}"
            )
        text = entry.expression or entry.d_dimensional
        formula = None if text is None else parse_formula(text)
        let = [(name, parse_formula(value)) for name, value in entry.let.items()]
        columns = cls._columns(where, opened, entry, formula, let)
        digits = entry.digits
        if digits is None:
            digits = min(config.accuracy.digits, MOST_DIGITS)
            digits = min(digits, COLUMN_DIGITS) if formula is None else digits
        count = opened.source.row_count
        positions = np.arange(count)[:: max(1, -(-count // entry.rows))]
        bits = math.ceil((digits + GUARD_DIGITS) * BITS_PER_DIGIT) + 64
        return cls(entry, plan, digits, bits, formula, let, columns, positions)

    @staticmethod
    def _columns(
        where: str,
        opened: OpenedRun,
        entry: ComparisonConfig,
        formula: UserFormula | None,
        let: Sequence[tuple[str, UserFormula]],
    ) -> list[str]:
        """Return the columns that are needed; refuse unknown names."""
        given = {entry.column, entry.column_imaginary} - {None}
        known = {*KINEMATICS, *([] if entry.d_dimensional is None else ["eps"])}
        for name, value in [*let, *([] if formula is None else [("", formula)])]:
            given |= value.names - known
            known |= {name} - {""}
        names = sorted(str(name) for name in given)
        for name in names:
            if name not in opened.source.schema.names:
                accepted = [*sorted(known), *opened.source.schema.names]
                raise ConfigError(f"{where}: {name} {unknown_name(name, accepted)}")
        opened.source.check_columns(frozenset(names), where)
        return names

    def read(self, opened: OpenedRun) -> Iterator[tuple[object, int, Cells]]:
        """Yield key, row number and exact cells of the rows that are compared."""
        reader = RowReader(opened)
        reader.columns = sorted({*self.plan.columns, *self.columns})
        for index in range(opened.chunk_count):
            start, count = opened.chunk_bounds(index)
            inside = self.positions[(self.positions >= start) & (self.positions < start + count)]
            if inside.size:
                block = reader.read(start, count)
                for row, cells in zip(inside.tolist(), block.cells(inside - start), strict=True):
                    yield block.keys[row - start].as_py(), row, cells

    def compare_row(self, outcome: Comparison, row: int, key: object, cells: Cells) -> None:
        """Add a row to the outcome; rows that the run rejects are left out."""
        try:
            request = self.plan.request(cells)
            evaluator = self._evaluator(request)
            evaluation = evaluator(request.point)
        except LoopintError:
            return
        region = evaluation.region
        if self.entry.regions and region not in self.entry.regions:
            return
        cuts = Cuts()
        try:
            with working_precision(self.bits):
                theirs = self._theirs(request, cells, cuts)
                if not theirs.is_finite():
                    raise InputError("the value is not finite")
                proven = complex_ball(evaluation.series[self.entry.order])
                digits = agreed_digits(theirs, proven, 2 * self.digits + GUARD_DIGITS)
        except InputError as error:
            outcome.failures.append((row, str(error)))
            return
        outcome.undecided_cuts += cuts.undecided
        outcome.rows.append(Compared(row, key, region, theirs, proven, digits))
        self.requests[row] = request

    def _evaluator(self, request: RowRequest) -> Evaluator:
        return Evaluator(
            request.integral, request.conventions, digits=self.digits + GUARD_DIGITS // 2
        )

    def _theirs(self, request: RowRequest, cells: Cells, cuts: Cuts) -> acb:
        if self.formula is None:
            parts = [
                arb(_cell(cells, name)) if name else arb(0)
                for name in (self.entry.column, self.entry.column_imaginary)
            ]
            return acb(*parts)
        names = _kinematics(request) | {c: of(_cell(cells, c)) for c in self.columns}
        if self.entry.d_dimensional is None:
            return self._value(names, cuts)
        return self._laurent_coefficient(names, cuts)

    def _value(self, names: dict[str, Value], cuts: Cuts) -> acb:
        assert self.formula is not None
        for name, formula in self.let:
            names[name] = formula.value(names, cuts)
        return self.formula.evaluate(names, cuts)

    def _laurent_coefficient(self, names: dict[str, Value], cuts: Cuts) -> acb:
        """Return a coefficient in eps by Cauchy's integral on a circle, as a sum over its points.

        With N points and radius r the error is about (r/R)^N, R the distance of the nearest
        singularity beyond the pole at 0.
        """
        total = acb(0)
        for j in range(CIRCLE_POINTS):
            angle = arb(fmpq(2 * j + 1, CIRCLE_POINTS))
            unit = acb(angle.cos_pi(), angle.sin_pi())
            names["eps"] = of(unit * CIRCLE_RADIUS)
            total += self._value(names, cuts) * unit ** (-self.entry.order)
        return total / CIRCLE_POINTS * arb(CIRCLE_RADIUS) ** (-self.entry.order)

    # What may have gone wrong ------------------------------------------------------------------

    def hints(self, outcome: Comparison) -> list[Hint]:
        """Try the known mistakes on the rows that disagree."""
        failing = outcome.disagreeing
        chosen = failing[:: max(1, len(failing) // 60)]
        found: list[Hint] = []
        covered: set[int] = set()
        with working_precision(self.bits):
            for text, transformed in self._mistakes(chosen):
                hint = self._tried(text, transformed, chosen)
                if hint is not None and not hint[1] <= covered:
                    found.append(hint[0])
                    covered |= hint[1]
            if len(covered) < len(chosen):
                rest = [row for row in chosen if row.row not in covered]
                found += _by_constants(rest, self.digits)
        return found

    def _tried(
        self, text: str, transformed: Transformation, rows: Sequence[Compared]
    ) -> tuple[Hint, set[int]] | None:
        repaired: dict[int, int] = {}
        for row in rows:
            try:
                digits = agreed_digits(row.theirs, transformed(row), 2 * self.digits)
            except LoopintError:
                continue
            if digits >= self.digits:
                repaired[row.row] = digits
        if not repaired:
            return None
        regions = tuple(sorted({row.region for row in rows if row.row in repaired}))
        hint = Hint(text, regions, len(repaired), len(rows), min(repaired.values()))
        return hint, set(repaired)

    def _mistakes(self, rows: Sequence[Compared]) -> Iterator[tuple[str, Transformation]]:
        """Yield descriptions and transformed proven values, the simplest first."""
        order = self.entry.order
        yield (
            "the other side of the cut: complex conjugate (p^2 - i0)",
            lambda r: r.proven.conjugate(),
        )
        yield "the overall sign", lambda r: -r.proven
        yield "the imaginary part is missing", lambda r: acb(r.proven.real)
        yield "the real part is missing", lambda r: acb(0, r.proven.imag)
        yield (
            "half of the imaginary part is missing",
            lambda r: acb(r.proven.real, r.proven.imag / 2),
        )
        for factor, name in _FACTORS:
            yield f"a factor {name}", _times(factor)
        yield "other side and overall sign", lambda r: -r.proven.conjugate()
        requests = [self.requests[row.row] for row in rows]
        for change, text in _other_conventions(requests):
            other = self._changed(change, order)
            yield text, other
            yield f"{text}, and the other side of the cut", _after(other, acb.conjugate)
            yield f"{text}, and the overall sign", _after(other, acb.__neg__)
        if any(isinstance(request.point, TwoPoint) for request in requests):
            yield "the two masses are exchanged", self._changed(_exchanged, order)
        low, high = self.plan.integral.orders
        for k in range(low, high + 1):
            if k != order:
                yield f"it is the coefficient of eps^{k}", self._changed(_unchanged, k)

    def _changed(self, change: Callable[[RowRequest], RowRequest], order: int) -> Transformation:
        """Return what evaluates a row again, after a change."""

        def evaluated(row: Compared) -> acb:
            request = change(self.requests[row.row])
            return complex_ball(self._evaluator(request)(request.point).series[order])

        return evaluated


def _times(factor: Callable[[], acb]) -> Transformation:
    return lambda row: factor() * row.proven


def _after(first: Transformation, then: Callable[[acb], acb]) -> Transformation:
    return lambda row: then(first(row))


def _unchanged(request: RowRequest) -> RowRequest:
    return request


_FACTORS: tuple[tuple[Callable[[], acb], str], ...] = (
    (lambda: acb(2), "2"),
    (lambda: acb(1) / 2, "1/2"),
    (lambda: acb(-2), "-2"),
    (lambda: acb(0, 1), "i"),
    (lambda: acb(0, -1), "-i"),
    (lambda: acb(1 / (16 * arb.pi() ** 2)), "1/(16 pi^2)"),
    (lambda: acb(16 * arb.pi() ** 2), "16 pi^2"),
    (lambda: acb(0, 1 / (16 * arb.pi() ** 2)), "i/(16 pi^2)"),
    (lambda: acb(0, arb.pi() ** 2), "i pi^2"),
    (lambda: acb(arb.pi() ** 2), "pi^2"),
    (lambda: acb(arb.pi()), "pi"),
)


def _other_conventions(
    requests: Sequence[RowRequest],
) -> Iterator[tuple[Callable[[RowRequest], RowRequest], str]]:
    """Yield changes of measure, of mu^2 and of the propagator sign."""
    first = requests[0].conventions
    for measure in Measure:
        if measure is not first.measure:
            yield _changed(measure=measure), f"the measure is {measure}, not {first.measure}"
    if any(request.conventions.mu_squared != 1 for request in requests):
        yield _changed(mu_squared=fmpq(1)), "mu^2 is missing (mu^2 = 1)"
    sign = (
        PropagatorSign.EUCLIDEAN
        if first.propagator_sign is PropagatorSign.MINKOWSKI
        else PropagatorSign.MINKOWSKI
    )
    yield (
        _changed(propagator_sign=sign),
        f"the propagator sign is {sign}, not {first.propagator_sign}",
    )


def _changed(**settings: object) -> Callable[[RowRequest], RowRequest]:
    def change(request: RowRequest) -> RowRequest:
        return replace(request, conventions=replace(request.conventions, **settings))  # type: ignore[arg-type]

    return change


def _exchanged(request: RowRequest) -> RowRequest:
    point = request.point
    return replace(request, point=point.exchanged()) if isinstance(point, TwoPoint) else request


def _by_constants(rows: Sequence[Compared], digits: int) -> list[Hint]:
    """Say if difference or ratio is the same number everywhere."""
    if len(rows) < 3:
        return []
    found = []
    regions = tuple(sorted({row.region for row in rows}))
    for word, values in (
        ("the difference is", [row.theirs - row.proven for row in rows]),
        ("the ratio is", [row.theirs / row.proven for row in rows if row.proven.abs_lower() > 0]),
    ):
        if len(values) < 3:
            continue
        worst = min(agreed_digits(value, values[0], 2 * digits) for value in values)
        if worst >= min(digits, 8):
            number = _recognised(values[0], worst)
            found.append(
                Hint(f"{word} {number} in all of them", regions, len(rows), len(rows), worst)
            )
    return found


def _recognised(value: acb, digits: int) -> str:
    """Write a number, as a small rational times a constant of the trade if it is one."""
    shown = f"{float(value.real.mid()):.12g}"
    if not value.imag.contains(0):
        shown += f" {float(value.imag.mid()):+.12g} i"
    names = {"": arb(1), " pi": arb.pi(), " pi^2": arb.pi() ** 2, " gamma_E": arb.const_euler()}
    names[" log(4 pi)"], names[" zeta(3)"] = (4 * arb.pi()).log(), arb(3).zeta()
    for unit, factor in (("", value.real), (" i", value.imag)):
        if (value - (acb(factor) if not unit else acb(0, factor))).abs_upper() > arb(10) ** -digits:
            continue
        for name, constant in names.items():
            ratio = factor / constant
            for denominator in (1, 2, 3, 4, 6, 8, 12, 16, 24):
                near = round(float((ratio * denominator).mid()))
                if near and abs(near) < 1000:
                    gap = abs(ratio - arb(fmpq(near, denominator))).upper()
                    if gap < arb(10) ** -min(digits, 12):
                        return f"{fmpq(near, denominator)}{name}{unit} = {shown}"
    return shown


# Rows -------------------------------------------------------------------------------------------


def agreed_digits(a: acb, b: acb, most: int) -> int:
    """Return how many digits of b agree in a: floor(-log10 |a-b|/|b|), from 0 to `most`.

    A proven zero agrees with what is smaller than 10^-most.
    """
    gap = (a - b).abs_upper()
    size = b.abs_lower()
    if not size > 0:
        size = arb(1)
    ratio = gap / size
    if ratio == 0 or ratio.upper() < arb(10) ** -most:
        return most
    return max(0, min(most, math.floor(-float(ratio.upper().log() / arb(10).log()))))


def _kinematics(request: RowRequest) -> dict[str, Value]:
    """Return the exact kinematics by their names, in the units of the points."""
    point = request.point
    if isinstance(point, OnePoint):
        squares = {"m_squared": point.m_squared.ball(), "m": point.m_squared.ball().sqrt()}
    else:
        squares = {"p_squared": point.p_squared_ball}
        for name, mass in (("m1", point.m1_squared), ("m2", point.m2_squared)):
            squares[f"{name}_squared"] = mass.ball()
            squares[name] = mass.ball().sqrt()
    found = {name: of(value) for name, value in squares.items()}
    found["mu_squared"] = of(request.conventions.mu_squared)
    return found


def _cell(cells: Mapping[str, object], name: str) -> fmpq:
    value = cells[name]
    if isinstance(value, InputError):
        raise InputError(f"column {name} is {value}")
    assert isinstance(value, fmpq)
    return value


def _table(outcomes: Sequence[Comparison]) -> pa.Table:
    rows = [(outcome, row) for outcome in outcomes for row in outcome.rows]

    def parts(values: Sequence[acb]) -> tuple[list[float], list[float]]:
        return (
            [float(value.real.mid()) for value in values],
            [float(value.imag.mid()) for value in values],
        )

    theirs_re, theirs_im = parts([row.theirs for _, row in rows])
    re, im = parts([row.proven for _, row in rows])
    return pa.table(
        {
            "comparison": [outcome.config.name for outcome, _ in rows],
            "row": pa.array([row.row for _, row in rows], pa.int64()),
            "key": [str(row.key) for _, row in rows],
            "region": [row.region for _, row in rows],
            "re": theirs_re,
            "im": theirs_im,
            "proven_re": re,
            "proven_im": im,
            "agreed_digits": pa.array([row.digits for _, row in rows], pa.int16()),
            "agrees": [row.digits >= outcome.digits for outcome, row in rows],
        }
    )
