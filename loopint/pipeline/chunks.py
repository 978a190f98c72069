"""One chunk of rows, from source to finished files: what a worker does."""

from __future__ import annotations

import heapq
import platform
from collections import Counter
from dataclasses import dataclass, field, fields
from typing import TYPE_CHECKING, Any, TypeAlias

import numpy as np
import pyarrow as pa

from loopint.pipeline.cross_check import DISAGREES, Check, cross_check, sample
from loopint.pipeline.doubles import evaluate_doubles, nothing_done, serves
from loopint.pipeline.errors import ConfigError
from loopint.pipeline.evaluate import RowEvaluator, RowRejectedError
from loopint.pipeline.manifest import table_metadata
from loopint.pipeline.plan import plan_integrals
from loopint.pipeline.points import exact_rows, open_points
from loopint.pipeline.run_directory import MAX_PARTS, ChunkRecord, OutputError, RunDirectory
from loopint.pipeline.tables import (
    TableLayout,
    WrittenIntegral,
    check_csv_key,
    cross_check_schema,
    records_table,
    rejected_schema,
    write_integral,
    write_parquet,
)

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from loopint.pipeline.config import RunConfig
    from loopint.pipeline.plan import Cells, IntegralPlan
    from loopint.pipeline.points import PointsSource
    from loopint.pipeline.tables import IntegralColumns


PlacedCheck: TypeAlias = tuple[int, str, Check]  # position in the chunk, integral, comparison

NAMED_DISAGREEMENTS = 20  # so many are named, the others only counted
SLOWEST = 5
FEWEST_ROWS, MOST_ROWS = 250, 8000
MANY_DIGITS, MOST_ROWS_WITH_MANY_DIGITS = 100, 1000  # their decimals take memory
MOST_ROWS_IN_DOUBLES = 125_000
CHUNKS = 32  # enough for even loads, if they are not too small


def default_chunk_rows(row_count: int, digits: int, in_doubles: bool = False) -> int:
    """Return how many rows make a chunk, by default.

    Depends on what the table depends on, never on the number of workers.

    Examples
    --------
    >>> [default_chunk_rows(rows, 16) for rows in (10, 2_000, 100_000, 10**7)]
    [250, 250, 3125, 8000]
    >>> default_chunk_rows(10**7, 12, in_doubles=True)
    125000
    """
    most = MOST_ROWS if digits <= MANY_DIGITS else MOST_ROWS_WITH_MANY_DIGITS
    if in_doubles:
        most = MOST_ROWS_IN_DOUBLES
    return max(FEWEST_ROWS, min(most, -(-row_count // CHUNKS)), -(-row_count // MAX_PARTS))


@dataclass(frozen=True)
class OpenedRun:
    """A config with its points: checked, and ready to be read.

    Attributes
    ----------
    key
        The field of the user's key column, or None.
    chunk_rows
        Rows of every chunk but the last.
    """

    source: PointsSource
    plans: tuple[IntegralPlan, ...]
    key: pa.Field | None
    layout: TableLayout
    rejected_schema: pa.Schema
    cross_check_schema: pa.Schema
    chunk_rows: int

    @property
    def chunk_count(self) -> int:
        """The number of chunks."""
        return -(-self.source.row_count // self.chunk_rows)

    def chunk_bounds(self, index: int) -> tuple[int, int]:
        """Return the first row of a chunk and its number of rows."""
        start = index * self.chunk_rows
        return start, min(self.chunk_rows, self.source.row_count - start)


def open_run(config: RunConfig, source: PointsSource | None = None) -> OpenedRun:
    """Open the points of a config, unless given, and check that they and the config fit.

    Raises
    ------
    ConfigError
        If they do not.
    """
    if source is None:
        if config.grid is not None and not config.points.file.exists():
            raise ConfigError(
                f"{config.points.file} does not exist yet; accepted: the same config with "
                "`loopint grid`, which writes it"
            )
        source = open_points(config.points.file, config.points.key)
    plans = plan_integrals(config, source)
    key = None if config.points.key is None else source.schema.field(config.points.key)
    if "csv" in config.output.formats:
        check_csv_key(key)
    layout = TableLayout(
        config.output.layout,
        key,
        [(plan.name, plan.integral.orders) for plan in plans],
        config.accuracy.digits,
        table_metadata(config),
    )
    return OpenedRun(
        source,
        plans,
        key,
        layout,
        rejected_schema(key),
        cross_check_schema(key),
        _chunk_rows(config, plans, source.row_count),
    )


def _chunk_rows(config: RunConfig, plans: Sequence[IntegralPlan], row_count: int) -> int:
    chosen = config.execution.chunk_rows
    if chosen is None:
        digits = config.accuracy.digits
        in_doubles = all(serves(plan, digits) for plan in plans)
        return default_chunk_rows(row_count, digits, in_doubles)
    if row_count > chosen * MAX_PARTS:
        raise ConfigError(
            f"{config.where}[execution] chunk_rows = {chosen} makes more than {MAX_PARTS} files of "
            f"{row_count} rows; accepted: at least {-(-row_count // MAX_PARTS)}"
        )
    return chosen


@dataclass(frozen=True)
class Block:
    """Rows as they were read.

    Attributes
    ----------
    start
        The number of the first row.
    keys
        The key of each row.
    table
        The columns that the plans use, as they are in the file.
    """

    start: int
    keys: pa.Array
    table: pa.Table

    def cells(self, positions: NDArray[np.intp] | None = None) -> list[Cells]:
        """Return the exact values of each row, or of the rows at some positions."""
        if not self.table.num_columns:
            return [{}] * (len(self.keys) if positions is None else len(positions))
        table = self.table if positions is None else self.table.take(pa.array(positions))
        return list(exact_rows(table, table.column_names))


class RowReader:
    """Reads rows with their keys and the columns that the plans use."""

    def __init__(self, opened: OpenedRun) -> None:
        self.source = opened.source
        self.key = None if opened.key is None else opened.key.name
        self.columns = sorted({column for plan in opened.plans for column in plan.columns})

    def read(self, start: int, count: int) -> Block:
        """Return `count` rows from row `start` on."""
        keys = pa.array(np.arange(start, start + count))
        wanted = [*self.columns, *([] if self.key is None else [self.key])]
        if not wanted:
            return Block(start, keys, pa.table({}))
        table = self.source.read_rows(start, count, wanted)
        if self.key is not None:
            keys = table.unify_dictionaries().column(self.key).combine_chunks()
        return Block(start, keys, table.select(self.columns))


@dataclass
class ChunkResults:
    """What became of the rows of a chunk; its files are written from this.

    Attributes
    ----------
    integrals
        The results of the accepted rows, in the order of the plans.
    accepted
        Their positions in the chunk.
    refused
        Position and reason of the other rows.
    checks
        The cross-checks, in the order of the rows.
    times
        Seconds, position and integral of what was evaluated on its own.
    """

    integrals: list[IntegralColumns]
    accepted: list[int] | NDArray[np.intp] = field(default_factory=list)
    refused: list[tuple[int, RowRejectedError]] = field(default_factory=list)
    checks: list[PlacedCheck] = field(default_factory=list)
    times: list[tuple[float, int, str]] = field(default_factory=list)


def evaluate_block(config: RunConfig, opened: OpenedRun, block: Block) -> ChunkResults:
    """Evaluate and cross-check rows: whole columns in doubles, or one after the other."""
    if any(serves(plan, config.accuracy.digits) for plan in opened.plans):
        return _evaluate_columns(config, opened, block)
    return _evaluate_rows(config, opened, block)


def _evaluate_columns(config: RunConfig, opened: OpenedRun, block: Block) -> ChunkResults:
    """Evaluate what doubles serve in doubles, and the remaining rows and integrals in balls."""
    accuracy, check, count = config.accuracy, config.cross_check, len(block.keys)
    digits = accuracy.digits
    found = [
        evaluate_doubles(plan, block.table, count, digits)
        if serves(plan, digits)
        else nothing_done(plan, count)
        for plan in opened.plans
    ]
    sampled = [
        sample(check.seed, plan.name, block.start, count, check.fraction) for plan in opened.plans
    ]
    needed = np.zeros(count, dtype=bool)
    for one, chosen in zip(found, sampled, strict=True):
        needed |= ~one.done | chosen
    positions = np.flatnonzero(needed)
    evaluator = RowEvaluator(opened.plans, digits, accuracy.max_precision_bits, accuracy.seconds)
    results = ChunkResults([])
    others: list[dict[int, WrittenIntegral]] = [{} for _ in found]
    for position, cells in zip(positions.tolist(), block.cells(positions), strict=True):
        wanted = [
            place
            for place, (one, chosen) in enumerate(zip(found, sampled, strict=True))
            if chosen[position] or not one.done[position]
        ]
        try:
            row = evaluator.some(cells, wanted)
        except RowRejectedError as error:
            results.refused.append((position, error))
            continue
        for place, computed in row.items():
            results.times.append((computed.seconds, position, computed.name))
            if found[place].done[position]:
                written = found[place].written(position)
            else:
                written = others[place][position] = write_integral(computed, digits)
            if sampled[place][position]:
                checks = cross_check(
                    computed,
                    written,
                    digits=check.digits,
                    arithmetic=check.arithmetic,
                    seconds=accuracy.seconds,
                )
                results.checks += [(position, computed.name, each) for each in checks]
    accepted = np.ones(count, dtype=bool)
    accepted[[position for position, _ in results.refused]] = False
    rows = np.flatnonzero(accepted)
    results.accepted = rows
    results.integrals = [one.columns(rest, rows) for one, rest in zip(found, others, strict=True)]
    return results


def _evaluate_rows(config: RunConfig, opened: OpenedRun, block: Block) -> ChunkResults:
    """Evaluate and cross-check rows one after the other."""
    accuracy, check = config.accuracy, config.cross_check
    evaluator = RowEvaluator(
        opened.plans, accuracy.digits, accuracy.max_precision_bits, accuracy.seconds
    )
    accepted: list[int] = []
    results = ChunkResults(opened.layout.columns(), accepted)
    sampled = [
        sample(check.seed, plan.name, block.start, len(block.keys), check.fraction).tolist()
        for plan in opened.plans
    ]
    for position, cells in enumerate(block.cells()):
        try:
            row = evaluator.row(cells)
        except RowRejectedError as error:
            results.refused.append((position, error))
            continue
        accepted.append(position)
        for computed, columns, chosen in zip(row, results.integrals, sampled, strict=True):
            written = write_integral(computed, accuracy.digits)
            columns.append(written)
            results.times.append((computed.seconds, position, computed.name))
            if chosen[position]:
                found = cross_check(
                    computed,
                    written,
                    digits=check.digits,
                    arithmetic=check.arithmetic,
                    seconds=accuracy.seconds,
                )
                results.checks += [(position, computed.name, one) for one in found]
    return results


class ChunkEvaluator:
    """Evaluates chunks of one run and writes their files.

    Parameters
    ----------
    config, source
        The run, with paths that hold where this process works.
    plan
        The hash of its plan, which the directory must hold.
    """

    def __init__(self, config: RunConfig, source: PointsSource, plan: str) -> None:
        self.config = config
        self.plan = plan
        self.opened = open_run(config, source)
        self.reader = RowReader(self.opened)
        self.directory = RunDirectory(config.output.directory)

    def __call__(self, index: int) -> ChunkRecord:
        """Evaluate chunk `index`, write its files and return its record.

        Raises
        ------
        OutputError
            If the directory is not that of the run, or a file cannot be written.
        """
        if self.directory.plan_hash() != self.plan:
            raise OutputError(
                f"{self.directory.path} is not the directory of this run for a worker process on "
                f"{platform.node()}; accepted: a directory that all workers share and that no "
                "other run replaces"
            )
        start, count = self.opened.chunk_bounds(index)
        block = self.reader.read(start, count)
        keys = block.keys
        results = evaluate_block(self.config, self.opened, block)
        table = self.opened.layout.build(
            keys.take(pa.array(results.accepted, type=pa.int64())), results.integrals
        )
        record = ChunkRecord(
            index=index,
            rows=count,
            rows_in_table=len(results.accepted),
            rows_rejected=len(results.refused),
            table_lines=table.num_rows,
            rejected_sha256=self._write_rejected(index, start, keys, results.refused),
            checked_sha256=self._write_checks(index, start, keys, results.checks),
            table_sha256=write_parquet(self.directory.part(index), table),
            counts={one.name: one.counts() for one in results.integrals},
            worst_digits={one.name: one.worst_digits() for one in results.integrals},
            precision_bits=max(one.precision_bits for one in results.integrals),
            slowest=[
                (seconds, start + position, name)
                for seconds, position, name in heapq.nlargest(SLOWEST, results.times)
            ],
            **self._count_checks(start, results.checks),
        )
        self.directory.commit(record)
        return record

    def _write_rejected(
        self, index: int, start: int, keys: pa.Array, refused: list[tuple[int, RowRejectedError]]
    ) -> str | None:
        if not refused:
            return None
        columns: dict[str, list[Any]] = {
            "row": [start + position for position, _ in refused],
            "integral": [error.integral for _, error in refused],
            "reason": [error.reason for _, error in refused],
        }
        schema = self.opened.rejected_schema
        table = records_table(schema, keys, [position for position, _ in refused], columns)
        return write_parquet(self.directory.rejected_chunk(index), table)

    def _write_checks(
        self, index: int, start: int, keys: pa.Array, checks: list[PlacedCheck]
    ) -> str | None:
        if not checks:
            return None
        columns: dict[str, list[Any]] = {
            "row": [start + position for position, _, _ in checks],
            "integral": [name for _, name, _ in checks],
        }
        for f in fields(Check):
            columns[f.name] = [getattr(check, f.name) for _, _, check in checks]
        schema = self.opened.cross_check_schema
        table = records_table(schema, keys, [position for position, _, _ in checks], columns)
        return write_parquet(self.directory.checked_chunk(index), table)

    def _count_checks(self, start: int, checks: list[PlacedCheck]) -> dict[str, Any]:
        """Return the fields of the record that describe the cross-checks."""
        statuses: dict[str, Counter[str]] = {plan.name: Counter() for plan in self.opened.plans}
        agreement: dict[str, int | None] = dict.fromkeys(statuses)
        for _, name, check in checks:
            statuses[name][check.status] += 1
            agreement[name] = smallest(agreement[name], check.agreed_digits)
        disagreements = [
            (start + position, name, check.order)
            for position, name, check in checks
            if check.status == DISAGREES
        ]
        return {
            "checks": {name: dict(counts) for name, counts in statuses.items()},
            "worst_agreement": agreement,
            "disagreements": disagreements[:NAMED_DISAGREEMENTS],
        }


def smallest(*values: int | None) -> int | None:
    """Return the smallest number given, or None if there is none."""
    return min((value for value in values if value is not None), default=None)
