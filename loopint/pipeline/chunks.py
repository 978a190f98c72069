"""One chunk of rows, from source to finished files: what a worker does."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, fields
from typing import TYPE_CHECKING, Any, TypeAlias

import pyarrow as pa

from loopint.pipeline.cross_check import DISAGREES, Check, cross_check, is_sampled
from loopint.pipeline.evaluate import Computed, RowRejectedError, evaluate_row
from loopint.pipeline.manifest import table_metadata
from loopint.pipeline.plan import plan_integrals
from loopint.pipeline.points import exact_rows, open_points
from loopint.pipeline.run_directory import ChunkRecord, RunDirectory
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
    from loopint.pipeline.config import RunConfig
    from loopint.pipeline.plan import Cells, IntegralPlan
    from loopint.pipeline.points import PointsSource


PlacedCheck: TypeAlias = tuple[int, str, Check]  # position in the chunk, integral, comparison


def chunk_bounds(source: PointsSource, chunk_rows: int, index: int) -> tuple[int, int]:
    """Return the first row of a chunk and its number of rows."""
    start = index * chunk_rows
    return start, min(chunk_rows, source.row_count - start)


def chunk_count(source: PointsSource, chunk_rows: int) -> int:
    """Return the number of chunks."""
    return -(-source.row_count // chunk_rows)


@dataclass(frozen=True)
class OpenedRun:
    """A config with its points: checked, and ready to be read.

    Attributes
    ----------
    key
        The field of the user's key column, or None.
    """

    source: PointsSource
    plans: tuple[IntegralPlan, ...]
    key: pa.Field | None
    layout: TableLayout
    rejected_schema: pa.Schema
    cross_check_schema: pa.Schema


def open_run(config: RunConfig, source: PointsSource | None = None) -> OpenedRun:
    """Open the points of a config, unless given, and check that they and the config fit.

    Raises
    ------
    ConfigError
        If they do not.
    """
    if source is None:
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
    return OpenedRun(source, plans, key, layout, rejected_schema(key), cross_check_schema(key))


class RowReader:
    """Reads rows with their keys and the exact values of the columns that the plans use."""

    def __init__(self, opened: OpenedRun) -> None:
        self.source = opened.source
        self.key = None if opened.key is None else opened.key.name
        self.columns = sorted({column for plan in opened.plans for column in plan.columns})

    def read(self, start: int, count: int) -> tuple[pa.Array, list[Cells]]:
        """Return keys and cells of `count` rows from row `start` on."""
        rows: list[Cells] = [{}] * count
        keys = pa.array(range(start, start + count), type=pa.int64())
        wanted = [*self.columns, *([] if self.key is None else [self.key])]
        if not wanted:
            return keys, rows
        table = self.source.read_rows(start, count, wanted)
        if self.columns:
            rows = list(exact_rows(table, self.columns))
        if self.key is not None:
            keys = table.unify_dictionaries().column(self.key).combine_chunks()
        return keys, rows


class ChunkEvaluator:
    """Evaluates chunks of one run and writes their files."""

    def __init__(self, config: RunConfig, source: PointsSource) -> None:
        self.config = config
        self.opened = open_run(config, source)
        self.reader = RowReader(self.opened)
        self.directory = RunDirectory(config.output.directory)

    def __call__(self, index: int) -> ChunkRecord:
        """Evaluate chunk `index`, write its files and return its record."""
        accuracy = self.config.accuracy
        start, count = chunk_bounds(self.opened.source, self.config.execution.chunk_rows, index)
        keys, rows = self.reader.read(start, count)
        positions: list[int] = []
        accepted: list[list[Computed]] = []
        refused: list[tuple[int, RowRejectedError]] = []
        for position, cells in enumerate(rows):
            try:
                computed = evaluate_row(
                    self.opened.plans,
                    cells,
                    digits=accuracy.digits,
                    max_precision_bits=accuracy.max_precision_bits,
                )
            except RowRejectedError as error:
                refused.append((position, error))
            else:
                positions.append(position)
                accepted.append(computed)
        results = [[write_integral(one, accuracy.digits) for one in row] for row in accepted]
        table = self.opened.layout.build(keys.take(pa.array(positions, type=pa.int64())), results)
        checks = self._check(start, positions, accepted, results)
        self._write_rejected(index, start, keys, refused)
        self._write_checks(index, start, keys, checks)
        sha256 = write_parquet(self.directory.part(index), table)
        record = ChunkRecord(
            index=index,
            rows=count,
            rows_in_table=len(accepted),
            rows_rejected=len(refused),
            table_lines=table.num_rows,
            table_sha256=sha256,
            **self._count(results),
            **self._count_checks(start, checks),
        )
        self.directory.commit(record)
        return record

    def _check(
        self,
        start: int,
        positions: list[int],
        accepted: list[list[Computed]],
        results: list[list[WrittenIntegral]],
    ) -> list[PlacedCheck]:
        settings = self.config.cross_check
        found: list[PlacedCheck] = []
        for position, row, result in zip(positions, accepted, results, strict=True):
            for computed, table in zip(row, result, strict=True):
                name = computed.name
                if is_sampled(settings.seed, start + position, name, settings.fraction):
                    checks = cross_check(
                        computed, table, digits=settings.digits, arithmetic=settings.arithmetic
                    )
                    found += [(position, name, check) for check in checks]
        return found

    def _write_rejected(
        self, index: int, start: int, keys: pa.Array, refused: list[tuple[int, RowRejectedError]]
    ) -> None:
        columns: dict[str, list[Any]] = {
            "row": [start + position for position, _ in refused],
            "integral": [error.integral for _, error in refused],
            "reason": [error.reason for _, error in refused],
        }
        schema = self.opened.rejected_schema
        table = records_table(schema, keys, [position for position, _ in refused], columns)
        write_parquet(self.directory.rejected_chunk(index), table)

    def _write_checks(
        self, index: int, start: int, keys: pa.Array, checks: list[PlacedCheck]
    ) -> None:
        columns: dict[str, list[Any]] = {
            "row": [start + position for position, _, _ in checks],
            "integral": [name for _, name, _ in checks],
        }
        for f in fields(Check):
            columns[f.name] = [getattr(check, f.name) for _, _, check in checks]
        schema = self.opened.cross_check_schema
        table = records_table(schema, keys, [position for position, _, _ in checks], columns)
        write_parquet(self.directory.checked_chunk(index), table)

    def _count(self, results: list[list[WrittenIntegral]]) -> dict[str, Any]:
        """Return the fields of the record that describe the evaluated rows."""
        names = [plan.name for plan in self.opened.plans]
        counts: dict[str, dict[str, dict[str, int]]] = {name: {} for name in names}
        worst: dict[str, int | None] = dict.fromkeys(names)
        bits = 0
        for row in results:
            for one in row:
                by_status = counts[one.name].setdefault(one.region, {})
                by_status[one.status] = by_status.get(one.status, 0) + 1
                worst[one.name] = smallest(worst[one.name], *(n.digits for n in one.numbers))
                bits = max(bits, one.precision_bits)
        return {"counts": counts, "worst_digits": worst, "precision_bits": bits}

    def _count_checks(self, start: int, checks: list[PlacedCheck]) -> dict[str, Any]:
        """Return the fields of the record that describe the cross-checks."""
        statuses: dict[str, Counter[str]] = {plan.name: Counter() for plan in self.opened.plans}
        agreement: dict[str, int | None] = dict.fromkeys(statuses)
        for _, name, check in checks:
            statuses[name][check.status] += 1
            agreement[name] = smallest(agreement[name], check.agreed_digits)
        return {
            "checks": {name: dict(counts) for name, counts in statuses.items()},
            "worst_agreement": agreement,
            "disagreements": [
                (start + position, name, check.order)
                for position, name, check in checks
                if check.status == DISAGREES
            ],
        }


def smallest(*values: int | None) -> int | None:
    """Return the smallest number given, or None if there is none."""
    return min((value for value in values if value is not None), default=None)
