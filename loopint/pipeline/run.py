"""A whole run: chunks to workers, finished chunks to final files, and the closing account."""

from __future__ import annotations

import time
from contextlib import closing
from dataclasses import dataclass
from functools import partial
from typing import TYPE_CHECKING, Any

from loopint.pipeline.account import Account
from loopint.pipeline.chunks import ChunkEvaluator, open_run
from loopint.pipeline.engines import choose_engine, usable_cores
from loopint.pipeline.errors import ConfigError
from loopint.pipeline.exports import write_npz
from loopint.pipeline.interrupts import interrupts_remembered
from loopint.pipeline.manifest import manifest_content, package_version, plan_hash
from loopint.pipeline.run_directory import RunDirectory, write_json
from loopint.pipeline.tables import merge_parquet, write_csv

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence
    from pathlib import Path

    from loopint.pipeline.chunks import OpenedRun
    from loopint.pipeline.config import RunConfig
    from loopint.pipeline.engines import Engine
    from loopint.pipeline.run_directory import ChunkRecord

    Progress = Callable[[int, int], None]


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

    A run that was interrupted continues; the finished files do not depend on interruptions, on the
    engine or on the number of workers.  With more than one worker a script that calls this needs
    the usual `if __name__ == "__main__":` guard of `multiprocessing`.

    Parameters
    ----------
    config
        From `loopint.pipeline.config.load_config`.
    overwrite
        Replace the results of an earlier run in the directory, whatever its config.
    workers
        Worker processes, instead of `[execution] workers`; not with a scheduler.
    progress
        Called with the numbers of finished rows and of all rows.

    Raises
    ------
    ConfigError
        If config, points or directory cannot be used.
    EngineError
        If worker processes fail.
    OutputError
        If a file cannot be written.
    """
    started = time.monotonic()
    if workers and config.execution.scheduler:
        raise ConfigError(
            f"workers = {workers} cannot be chosen with [execution] scheduler, which has its own; "
            "accepted: one of the two"
        )
    workers = workers or worker_count(config)
    engine = choose_engine(config.execution.engine, workers, config.execution.scheduler)
    opened = open_run(config)
    inputs = opened.source.hashes()
    plan = plan_hash(config, inputs, opened.chunk_rows)
    directory = RunDirectory(config.output.directory)
    with directory.locked():
        directory.prepare(plan, manifest_content(config, plan, inputs), overwrite=overwrite)
        account = Account(config.results)
        resumed = _evaluate_chunks(config, opened, directory, plan, engine, account, progress)
        _finish(config, directory, opened, account.records())
        summary = _summary(config, opened, account)
        elapsed = time.monotonic() - started
        summary |= {
            "rows_resumed": resumed,
            "elapsed_seconds": round(elapsed, 3),
            "rows_per_second": _rate(opened.source.row_count - resumed, elapsed),
            "engine": config.execution.engine,
            "workers": None if config.execution.scheduler else workers,
        }
        write_json(directory.summary, summary)
        records, hashes = account.records(), directory.closing_hashes()
        write_json(directory.manifest, manifest_content(config, plan, inputs, records, hashes))
    return RunOutcome(directory.path, exit_code(summary), summary)


def _evaluate_chunks(
    config: RunConfig,
    opened: OpenedRun,
    directory: RunDirectory,
    plan: str,
    engine: Engine,
    account: Account,
    progress: Progress | None,
) -> int:
    """Evaluate what is not finished; return how many rows were found finished."""
    missing = []
    for index in range(opened.chunk_count):
        record = directory.finished(index)
        if record is not None and record.rows == opened.chunk_bounds(index)[1]:
            account.add(record)
        else:
            missing.append(index)
    resumed, total = account.rows, opened.source.row_count
    if progress is not None:
        progress(resumed, total)
    if missing:
        source = opened.source.with_absolute_paths()
        make = partial(ChunkEvaluator, _with_absolute_directory(config), source, plan)
        with (
            interrupts_remembered() as raise_interrupt,
            closing(engine(make, missing)) as records,  # Ctrl-C ends the workers at once
        ):
            for record in records:
                raise_interrupt()
                account.add(record)
                if progress is not None:
                    progress(account.rows, total)
        directory.remove_leftovers()  # of workers that died and were replaced
        opened.source.check_unchanged()
    return resumed


def _with_absolute_directory(config: RunConfig) -> RunConfig:
    output = config.output.model_copy(update={"directory": config.output.directory.absolute()})
    return config.model_copy(update={"output": output})


def _finish(
    config: RunConfig, directory: RunDirectory, opened: OpenedRun, records: Sequence[ChunkRecord]
) -> None:
    """Write the files that cover all chunks."""
    rejected = (r.index for r in records if r.rejected_sha256)
    checked = (r.index for r in records if r.checked_sha256)
    merge_parquet(
        directory.rejected, opened.rejected_schema, map(directory.rejected_chunk, rejected)
    )
    merge_parquet(
        directory.cross_check, opened.cross_check_schema, map(directory.checked_chunk, checked)
    )
    if "csv" in config.output.formats:
        parts = (directory.part(record.index) for record in records)
        write_csv(directory.csv, opened.layout.schema, parts)
    if "npz" in config.output.formats:
        parts = (directory.part(record.index) for record in records)
        write_npz(directory.npz, opened.layout.schema, list(parts))


def _summary(config: RunConfig, opened: OpenedRun, account: Account) -> dict[str, Any]:
    return {
        "title": config.title,
        "version": package_version(),
        "rows_in": opened.source.row_count,
        "digits": config.accuracy.digits,
        **account.summary(opened.source.row_count),
    }


def _rate(rows: int, seconds: float) -> float | None:
    return round(rows / seconds, 1) if rows and seconds else None


def exit_code(summary: dict[str, Any]) -> int:
    """Return 0 for a clean run, 3 if something in it needs attention."""
    attention = (
        summary["rows_rejected"]
        or summary["results_below_digits"]
        or summary["results_timed_out"]
        or summary["cross_check"]["disagrees"]
    )
    return 3 if attention else 0
