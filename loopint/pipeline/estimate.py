"""What a run would do, found out without evaluating it: regions, rejected rows, time."""

from __future__ import annotations

import time
from collections import Counter
from dataclasses import dataclass
from functools import partial
from typing import TYPE_CHECKING, Any

import numpy as np
import pyarrow as pa

from loopint.pipeline.chunks import OpenedRun, RowReader, evaluate_block, open_run
from loopint.pipeline.cross_check import cross_check
from loopint.pipeline.doubles import REGIONS, certain_regions, serves
from loopint.pipeline.engines import run_tasks
from loopint.pipeline.evaluate import RowEvaluator, RowRejectedError, row_requests
from loopint.pipeline.run import worker_count
from loopint.pipeline.tables import write_integral

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from loopint.pipeline.chunks import Block
    from loopint.pipeline.config import RunConfig
    from loopint.pipeline.evaluate import Computed
    from loopint.pipeline.points import PointsSource

    Progress = Callable[[int, int], None]

SAMPLED_ROWS = 20
CHECKED_ROWS = 5
COLUMN_ROWS = 2000
SHOWN_REJECTIONS = 10
PARALLEL_ROWS = 100_000
START_SECONDS = 1.0  # starting the worker processes


@dataclass(frozen=True)
class Rejection:
    """A row that a run will reject."""

    key: Any
    row: int
    integral: str
    reason: str


@dataclass(frozen=True)
class Survey:
    """What `validate` reports.

    Attributes
    ----------
    rows, rows_rejected
        Source rows, and how many of them have unusable cells or kinematics.  Integrals that turn
        out to be unregulated are only found by evaluating.
    rejections
        The first rejected rows.
    regions
        integral -> region -> number of rows.
    table_lines
        Lines of the result table.
    seconds
        Estimated time of the run, from a sample of rows.
    row_seconds, check_seconds, checks, workers
        What the estimate is made of: time per row, time per cross-checked integral, expected
        number of these, and worker processes.
    """

    rows: int
    rows_rejected: int
    rejections: list[Rejection]
    regions: dict[str, dict[str, int]]
    table_lines: int
    seconds: float
    row_seconds: float
    check_seconds: float
    checks: int
    workers: int

    @property
    def exit_code(self) -> int:
        """3 if rows will be rejected, else 0."""
        return 3 if self.rows_rejected else 0


@dataclass(frozen=True)
class _ChunkSurvey:
    index: int
    rows: int
    rejected: int
    rejections: list[Rejection]
    regions: dict[str, Counter[str]]


class _ChunkSurveyor:
    """Classifies the rows of a chunk, those of which doubles are sure as columns."""

    def __init__(self, config: RunConfig, source: PointsSource) -> None:
        self.opened = open_run(config, source)
        self.in_columns = all(serves(plan, config.accuracy.digits) for plan in self.opened.plans)
        self.plans = self.opened.plans
        self.reader = RowReader(self.opened)

    def __call__(self, index: int) -> _ChunkSurvey:
        start, count = self.opened.chunk_bounds(index)
        block = self.reader.read(start, count)
        regions: dict[str, Counter[str]] = {plan.name: Counter() for plan in self.plans}
        rejected = 0
        rejections: list[Rejection] = []
        positions = self._classify_columns(block, regions) if self.in_columns else np.arange(count)
        for position, cells in zip(positions.tolist(), block.cells(positions), strict=True):
            try:
                requests = row_requests(self.plans, cells)
            except RowRejectedError as error:
                rejected += 1
                if len(rejections) < SHOWN_REJECTIONS:
                    key = block.keys[position].as_py()
                    rejections.append(
                        Rejection(key, start + position, error.integral, error.reason)
                    )
            else:
                for request in requests:
                    snapped = "_snapped" if request.point.snapped else ""
                    regions[request.name][f"{request.point.region}{snapped}"] += 1
        return _ChunkSurvey(index, count, rejected, rejections, regions)

    def _classify_columns(self, block: Block, regions: dict[str, Counter[str]]) -> NDArray[np.intp]:
        """Count the rows whose regions are certain in doubles; return the others."""
        count = len(block.keys)
        found = [certain_regions(plan, block.table, count) for plan in self.plans]
        certain = np.logical_and.reduce([usable for _, usable in found])
        for plan, (codes, _) in zip(self.plans, found, strict=True):
            for code, rows in enumerate(np.bincount(codes[certain], minlength=len(REGIONS))):
                if rows:
                    regions[plan.name][str(REGIONS[code])] += int(rows)
        return np.flatnonzero(~certain)


def survey_config(config: RunConfig, *, progress: Progress | None = None) -> Survey:
    """Check config and points and estimate the time of a run; nothing is written.

    Raises
    ------
    ConfigError
        If config or points cannot be used.
    """
    opened = open_run(config)
    source, plans = opened.source, opened.plans
    chunks = _classify(config, opened, progress)
    good = source.row_count - sum(chunk.rejected for chunk in chunks)
    regions: dict[str, Counter[str]] = {plan.name: Counter() for plan in plans}
    for chunk in chunks:
        for name, counts in chunk.regions.items():
            regions[name].update(counts)
    rejections = [rejection for chunk in chunks for rejection in chunk.rejections]
    row_seconds, check_seconds = _time_sample(config, opened)
    if any(serves(plan, config.accuracy.digits) for plan in plans):
        row_seconds = _time_columns(config, opened)
    checks = round(good * len(plans) * float(config.cross_check.share))
    workers = min(worker_count(config), len(chunks))
    busy = good * row_seconds + checks * check_seconds
    coefficients = sum(p.integral.orders[1] - p.integral.orders[0] + 1 for p in plans)
    return Survey(
        rows=source.row_count,
        rows_rejected=source.row_count - good,
        rejections=rejections[:SHOWN_REJECTIONS],
        regions={name: dict(sorted(counts.items())) for name, counts in regions.items()},
        table_lines=good * (coefficients if config.output.layout == "long" else 1),
        seconds=busy / workers + (START_SECONDS if workers > 1 else 0.0),
        row_seconds=row_seconds,
        check_seconds=check_seconds,
        checks=checks,
        workers=workers,
    )


def _classify(
    config: RunConfig, opened: OpenedRun, progress: Progress | None
) -> list[_ChunkSurvey]:
    source = opened.source
    indices = range(opened.chunk_count)
    # Classifying a row is so cheap that processes only pay for many rows.
    workers = worker_count(config) if source.row_count > PARALLEL_ROWS else 1
    found: list[_ChunkSurvey] = []
    done = 0
    for chunk in run_tasks(partial(_ChunkSurveyor, config, source), indices, workers):
        found.append(chunk)
        done += chunk.rows
        if progress is not None:
            progress(done, source.row_count)
    return sorted(found, key=lambda chunk: chunk.index)


def _time_columns(config: RunConfig, opened: OpenedRun) -> float:
    """Return seconds per row where whole columns are evaluated, from consecutive rows."""
    count = min(opened.source.row_count, COLUMN_ROWS)
    block = RowReader(opened).read((opened.source.row_count - count) // 2, count)
    unchecked = config.cross_check.model_copy(update={"fraction": "none"})
    config = config.model_copy(update={"cross_check": unchecked})
    evaluate_block(config, opened, block)  # fills the tables that all points share
    started = time.perf_counter()
    results = evaluate_block(config, opened, block)
    opened.layout.build(block.keys.take(pa.array(results.accepted, pa.int64())), results.integrals)
    return (time.perf_counter() - started) / count


def _time_sample(config: RunConfig, opened: OpenedRun) -> tuple[float, float]:
    """Return seconds per row and per cross-checked integral, from rows spread evenly."""
    reader = RowReader(opened)
    total = opened.source.row_count
    size = min(SAMPLED_ROWS, total)
    sample = [(2 * i + 1) * total // (2 * size) for i in range(size)]
    keys: list[pa.Array] = []
    rows = []
    for row in sample:
        block = reader.read(row, 1)
        keys.append(block.keys)
        rows += block.cells()

    accuracy = config.accuracy
    evaluator = RowEvaluator(
        opened.plans, accuracy.digits, accuracy.max_precision_bits, accuracy.seconds
    )

    def evaluate() -> list[list[Computed]]:
        computed = []
        for cells in rows:
            try:
                computed.append(evaluator.row(cells))
            except RowRejectedError:
                continue
        return computed

    evaluate()  # fills the tables that all points share
    started = time.perf_counter()
    computed = evaluate()
    if not computed:
        return 0.0, 0.0
    results = [[write_integral(one, config.accuracy.digits) for one in row] for row in computed]
    columns = opened.layout.columns()
    for result in results:
        for written, column in zip(result, columns, strict=True):
            column.append(written)
    opened.layout.build(pa.concat_arrays(keys).slice(0, len(computed)), columns)
    row_seconds = (time.perf_counter() - started) / len(computed)
    if not config.cross_check.share:
        return row_seconds, 0.0
    step = max(1, size // CHECKED_ROWS)
    to_check = [
        pair
        for row, result in zip(computed[::step], results[::step], strict=True)
        for pair in zip(row, result, strict=True)
    ]
    started = time.perf_counter()
    for one, table in to_check:
        cross_check(
            one,
            table,
            digits=config.cross_check.digits,
            arithmetic=config.cross_check.arithmetic,
        )
    return row_seconds, (time.perf_counter() - started) / len(to_check)
