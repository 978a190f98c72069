"""A whole run: chunks to workers, finished chunks to final files, and the closing account."""

from __future__ import annotations

import time
from collections import Counter
from dataclasses import dataclass
from functools import partial
from typing import TYPE_CHECKING, Any

from loopint.pipeline.chunks import (
    ChunkEvaluator,
    OpenedRun,
    chunk_bounds,
    chunk_count,
    open_run,
    smallest,
)
from loopint.pipeline.engines import run_tasks, usable_cores
from loopint.pipeline.manifest import manifest_content, package_version, plan_hash
from loopint.pipeline.run_directory import ChunkRecord, RunDirectory, write_json
from loopint.pipeline.tables import merge_parquet, write_csv

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence
    from pathlib import Path

    from loopint.pipeline.config import RunConfig
    from loopint.pipeline.points import PointsSource

    Progress = Callable[[int, int], None]

NAMED_DISAGREEMENTS = 20


@dataclass(frozen=True)
class RunOutcome:
    """How a run ended.

    Attributes
    ----------
    directory
        The run directory.
    exit_code
        0, or 3 if rows were rejected, stayed below the digits asked for, or failed the
        cross-check.
    summary
        The content of `summary.json`.
    """

    directory: Path
    exit_code: int
    summary: dict[str, Any]


def worker_count(config: RunConfig) -> int:
    """Return the number of worker processes: as configured, or one per usable core."""
    return config.execution.workers or usable_cores()


def run_config(
    config: RunConfig,
    *,
    overwrite: bool = False,
    workers: int | None = None,
    progress: Progress | None = None,
) -> RunOutcome:
    """Run a config: read points, evaluate, cross-check, write the run directory.

    A run that was interrupted continues; the finished files do not depend on interruptions or on
    the number of workers.  With more than one worker a script that calls this needs the usual
    `if __name__ == "__main__":` guard of `multiprocessing`.

    Parameters
    ----------
    config
        From `loopint.pipeline.config.load_config`.
    overwrite
        Replace the results of an earlier run in the directory, whatever its config.
    workers
        Worker processes, instead of `[execution] workers`.
    progress
        Called with the numbers of finished rows and of all rows.

    Raises
    ------
    ConfigError
        If config, points or directory cannot be used.
    EngineError
        If a worker process dies.
    OSError
        If a file cannot be read or written.
    """
    started = time.monotonic()
    opened = open_run(config)
    workers = workers or worker_count(config)
    inputs = opened.source.hashes()
    plan = plan_hash(config, inputs)
    directory = RunDirectory(config.output.directory)
    with directory.locked():
        directory.prepare(plan, manifest_content(config, plan, inputs), overwrite=overwrite)
        records, resumed = _evaluate_chunks(config, opened.source, directory, workers, progress)
        _finish(config, directory, opened, records)
        elapsed = time.monotonic() - started
        summary = _summary(config, opened.source.row_count, records)
        summary |= {
            "rows_resumed": resumed,
            "elapsed_seconds": round(elapsed, 3),
            "rows_per_second": _rate(opened.source.row_count - resumed, elapsed),
            "workers": workers,
        }
        write_json(directory.summary, summary)
        write_json(directory.manifest, manifest_content(config, plan, inputs, records))
    return RunOutcome(directory.path, exit_code(summary), summary)


def _evaluate_chunks(
    config: RunConfig,
    source: PointsSource,
    directory: RunDirectory,
    workers: int,
    progress: Progress | None,
) -> tuple[list[ChunkRecord], int]:
    """Evaluate what is not finished; return all records, and the rows found finished."""
    size = config.execution.chunk_rows
    records: dict[int, ChunkRecord] = {}
    for index in range(chunk_count(source, size)):
        record = directory.finished(index)
        if record is not None and record.rows == chunk_bounds(source, size, index)[1]:
            records[index] = record
    done = resumed = sum(record.rows for record in records.values())
    missing = [index for index in range(chunk_count(source, size)) if index not in records]
    if progress is not None:
        progress(done, source.row_count)
    if missing:
        make = partial(ChunkEvaluator, config, source)
        for record in run_tasks(make, missing, workers):
            records[record.index] = record
            done += record.rows
            if progress is not None:
                progress(done, source.row_count)
    return [records[index] for index in sorted(records)], resumed


def _finish(
    config: RunConfig, directory: RunDirectory, opened: OpenedRun, records: Sequence[ChunkRecord]
) -> None:
    """Write the files that cover all chunks."""
    indices = [record.index for record in records]
    merge_parquet(
        directory.rejected, opened.rejected_schema, map(directory.rejected_chunk, indices)
    )
    merge_parquet(
        directory.cross_check, opened.cross_check_schema, map(directory.checked_chunk, indices)
    )
    if "csv" in config.output.formats:
        write_csv(directory.csv, opened.layout.schema, map(directory.part, indices))


def _summary(
    config: RunConfig,
    row_count: int,
    records: Sequence[ChunkRecord],
) -> dict[str, Any]:
    rows_in_table = sum(record.rows_in_table for record in records)
    rows_rejected = sum(record.rows_rejected for record in records)
    if rows_in_table + rows_rejected != row_count:
        raise AssertionError(
            f"{row_count} rows in, {rows_in_table} in the table, {rows_rejected} rejected"
        )
    integrals = {
        integral.name: _integral_summary(integral.name, records) for integral in config.integrals
    }
    checks: Counter[str] = Counter()
    for entry in integrals.values():
        checks.update(entry["cross_check"]["coefficients"])
    disagreements = [found for record in records for found in record.disagreements]
    return {
        "title": config.title,
        "version": package_version(),
        "rows_in": row_count,
        "rows_in_table": rows_in_table,
        "rows_rejected": rows_rejected,
        "results_below_digits": sum(entry["below_digits"] for entry in integrals.values()),
        "table_lines": sum(record.table_lines for record in records),
        "digits": config.accuracy.digits,
        "worst_digits": smallest(*(entry["worst_digits"] for entry in integrals.values())),
        "precision_bits": max((record.precision_bits for record in records), default=0),
        "integrals": integrals,
        "cross_check": {
            "coefficients": sum(checks.values()),
            "ok": checks["ok"],
            "inconclusive": checks["inconclusive"],
            "disagrees": checks["disagrees"],
            "worst_agreed_digits": smallest(
                *(entry["cross_check"]["worst_agreed_digits"] for entry in integrals.values())
            ),
            "disagreements": [
                {"row": row, "integral": name, "order": order}
                for row, name, order in disagreements[:NAMED_DISAGREEMENTS]
            ],
        },
    }


def _rate(rows: int, seconds: float) -> float | None:
    return round(rows / seconds, 1) if rows and seconds else None


def _integral_summary(name: str, records: Sequence[ChunkRecord]) -> dict[str, Any]:
    regions: dict[str, Counter[str]] = {}
    checks: Counter[str] = Counter()
    for record in records:
        for region, statuses in record.counts[name].items():
            regions.setdefault(region, Counter()).update(statuses)
        checks.update(record.checks[name])
    return {
        "regions": {region: dict(sorted(regions[region].items())) for region in sorted(regions)},
        "below_digits": sum(statuses["below_digits"] for statuses in regions.values()),
        "worst_digits": smallest(*(record.worst_digits[name] for record in records)),
        "cross_check": {
            "coefficients": dict(sorted(checks.items())),
            "worst_agreed_digits": smallest(*(record.worst_agreement[name] for record in records)),
        },
    }


def exit_code(summary: dict[str, Any]) -> int:
    """Return 0 for a clean run, 3 if something in it needs attention."""
    attention = (
        summary["rows_rejected"]
        or summary["results_below_digits"]
        or summary["cross_check"]["disagrees"]
    )
    return 3 if attention else 0
