"""What a page shows, gathered from the files of a run in bounded memory."""

from __future__ import annotations

import json
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import pyarrow as pa

from loopint.pipeline.config import RunConfig
from loopint.report.errors import ReportError
from loopint.report.records import Checks, Rejections, read_checks, read_rejections
from loopint.report.scan import Scan, find_scans
from loopint.report.table import TableData, read_table

if TYPE_CHECKING:
    from collections.abc import Mapping
    from pathlib import Path

    from numpy.typing import NDArray

SAMPLED_POINTS = 2000


@dataclass
class RunData:
    """Everything a page shows.

    Attributes
    ----------
    sampled_rows
        The source rows whose coefficients are kept for figures: evenly spread, always the same.
    table_rows
        How many source rows are in the table.
    scans
        Where the sampled points of an integral lie, by its name; empty if the points are gone.
    points_note
        What a reader should know if the points could not be read, else empty.
    """

    directory: Path
    manifest: Mapping[str, Any]
    summary: Mapping[str, Any]
    table: TableData
    sampled_rows: NDArray[np.intp]
    table_rows: int
    rejections: Rejections
    checks: Checks
    scans: dict[str, Scan]
    points_note: str


def load_run(directory: Path) -> RunData:
    """Read the files of a finished run.

    Raises
    ------
    ReportError
        If the directory holds no finished run, or a file of it cannot be read.
    """
    manifest, summary = (_json(directory, name) for name in ("manifest.json", "summary.json"))
    if manifest.get("state") != "finished":
        raise ReportError(
            f"{directory} holds an unfinished run; accepted: a finished one (the same loopint run "
            "continues it)"
        )
    try:
        config = RunConfig.model_validate(manifest["config"], strict=False)
        rejections, accepted = read_rejections(directory, summary["rows_in"])
        rows = np.flatnonzero(accepted)
        sampled = rows[:: max(1, -(-rows.size // SAMPLED_POINTS))]
        table = read_table(directory, config, rows, sampled)
        checks = read_checks(directory)
        inputs = dict(manifest["inputs"])
    except ReportError:
        raise
    except (OSError, pa.ArrowException, KeyError, ValueError, TypeError, IndexError) as error:
        reason = str(error).strip().splitlines()[0] if str(error).strip() else type(error).__name__
        raise ReportError(
            f"{directory} cannot be read as a run: {reason}; accepted: the directory of a finished "
            "loopint run"
        ) from None
    scans, note = {}, ""
    try:
        scans = find_scans(config, inputs, sampled)
    except (OSError, pa.ArrowException, KeyError, ReportError) as error:
        note = f"The points could not be read ({error}); curves are drawn over the row number."
    return RunData(
        directory, manifest, summary, table, sampled, rows.size, rejections, checks, scans, note
    )


def _json(directory: Path, name: str) -> dict[str, Any]:
    path = directory / name
    try:
        found = json.loads(path.read_text(encoding="utf-8"))
    except (FileNotFoundError, NotADirectoryError):
        raise ReportError(
            f"{path} does not exist; accepted: the directory of a finished loopint run"
        ) from None
    except (OSError, ValueError) as error:
        raise ReportError(f"{path} cannot be read: {error}; accepted: a file of a run") from None
    if not isinstance(found, dict):
        raise ReportError(f"{path} is not an object; accepted: a file that loopint run wrote")
    return found
