"""Is a run directory what the run has written?  Hashes, counts, conventions, some rows again."""

from __future__ import annotations

import json
import random
from collections import Counter
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from flint import acb, arb
from pydantic import ValidationError

from loopint.core.laurent import complex_ball
from loopint.core.precision import working_precision
from loopint.pipeline.chunks import RowReader, open_run
from loopint.pipeline.config import RunConfig
from loopint.pipeline.config_messages import explain
from loopint.pipeline.cross_check import DISAGREES, OK, cross_check
from loopint.pipeline.errors import ConfigError
from loopint.pipeline.evaluate import RowEvaluator, RowRejectedError
from loopint.pipeline.manifest import decisive_versions
from loopint.pipeline.run_directory import RunDirectory, file_sha256
from loopint.pipeline.tables import Written, WrittenIntegral, order_tag

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping, Sequence

    from loopint.pipeline.chunks import OpenedRun
    from loopint.pipeline.evaluate import Computed

FURTHER_DIGITS = 8  # of the evaluation that a stored value is compared with
COMPARED_BITS = 4096


@dataclass
class Verification:
    """What was found.

    Attributes
    ----------
    directory
        The run directory.
    files
        How many files have the contents that the manifest names.
    rows
        Rows of the source.
    evaluated
        Rows that were evaluated again, and of them those that were rejected again.
    coefficients, confirmed
        Stored coefficients that were compared, and those that the quadrature confirms too.
    findings
        A sentence for everything that is not as it should be.
    notes
        A sentence for everything that could not be verified.
    """

    directory: Path
    files: int = 0
    rows: int = 0
    evaluated: int = 0
    coefficients: int = 0
    confirmed: int = 0
    findings: list[str] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)

    @property
    def exit_code(self) -> int:
        """0, or 3 if something is not as it should be."""
        return 3 if self.findings else 0


def verify_run(path: Path, *, rows: int = 20, seed: int = 1) -> Verification:
    """Compare a finished run with its manifest and evaluate some of its rows again.

    Parameters
    ----------
    path
        The run directory.
    rows
        How many rows, drawn at random, are evaluated again: with more digits by the closed forms,
        and by quadrature.
    seed
        Of the draw.

    Raises
    ------
    ConfigError
        If it holds no finished run, or the manifest cannot be read.
    """
    manifest = _manifest(path)
    found = Verification(path)
    directory = RunDirectory(path)
    try:
        config = RunConfig.model_validate(manifest["config"], strict=False)
        expected = {str(entry["file"]): str(entry["sha256"]) for entry in manifest["table"]}
        expected |= manifest["files"]
        _check_files(found, directory, expected)
        if not found.findings:
            _check_counts(found, directory, manifest)
            _check_conventions(found, directory, manifest)
        if not found.findings:
            _evaluate_again(found, directory, manifest, config, rows, seed)
    except ValidationError as error:
        reason = explain(error, manifest["config"], RunConfig)
        raise ConfigError(f"{directory.manifest}: {reason}") from None
    except (KeyError, TypeError, ValueError, AttributeError, IndexError) as error:
        raise ConfigError(
            f"{directory.manifest} is not a manifest of this version: {error!r}; accepted: a "
            "directory that loopint run wrote"
        ) from None
    except MemoryError:
        raise
    except (OSError, pa.ArrowException) as error:
        found.findings.append(f"a file cannot be read: {error}")
    return found


def _manifest(path: Path) -> dict[str, Any]:
    accepted = "accepted: the directory of a finished loopint run"
    file = RunDirectory(path).manifest
    try:
        manifest = json.loads(file.read_text(encoding="utf-8"))
        state = manifest["state"]
    except FileNotFoundError:
        raise ConfigError(f"{file} does not exist; {accepted}") from None
    except (OSError, ValueError, TypeError, KeyError) as error:
        raise ConfigError(f"{file} cannot be read as a manifest: {error}; {accepted}") from None
    if state != "finished":
        raise ConfigError(
            f"{path} holds an unfinished run; accepted: a finished one (the same loopint run "
            "continues it)"
        )
    return dict(manifest)


def _check_files(found: Verification, directory: RunDirectory, expected: Mapping[str, str]) -> None:
    """Compare the hash of every file, and look for others that a reader would take for parts."""
    for name, sha256 in expected.items():
        file = directory.path / name
        try:
            same = file_sha256(file) == sha256
        except FileNotFoundError:
            found.findings.append(f"{name} is missing")
            continue
        except OSError as error:
            found.findings.append(f"{name} cannot be read: {error.strerror}")
            continue
        found.files += same
        if not same:
            found.findings.append(f"{name} has been changed: its SHA-256 is not the manifest's")
    for file in sorted(directory.table.glob("*")):
        if f"table/{file.name}" not in expected:
            found.findings.append(f"table/{file.name} is not a file of this run")


def _check_counts(
    found: Verification, directory: RunDirectory, manifest: Mapping[str, Any]
) -> None:
    """See that every source row is in the table or rejected, in files as in the summary."""
    summary = json.loads(directory.summary.read_text(encoding="utf-8"))
    found.rows = int(summary["rows_in"])
    lines = sum(
        pq.read_metadata(directory.path / entry["file"]).num_rows for entry in manifest["table"]
    )
    counts = {
        "source rows of the parts": (
            sum(entry["source_rows"] for entry in manifest["table"]),
            found.rows,
        ),
        "rows in table and rejected": (
            summary["rows_in_table"] + summary["rows_rejected"],
            found.rows,
        ),
        "lines of the parts": (lines, summary["table_lines"]),
        "rows of rejected.parquet": (
            pq.read_metadata(directory.rejected).num_rows,
            summary["rows_rejected"],
        ),
        "rows of cross_check.parquet": (
            pq.read_metadata(directory.cross_check).num_rows,
            summary["cross_check"]["coefficients"],
        ),
    }
    found.findings += [
        f"{what}: {counted}, expected {expected}"
        for what, (counted, expected) in counts.items()
        if counted != expected
    ]


def _check_conventions(
    found: Verification, directory: RunDirectory, manifest: Mapping[str, Any]
) -> None:
    """See that every part carries the conventions of the manifest."""
    for entry in manifest["table"]:
        metadata = pq.read_schema(directory.path / entry["file"]).metadata or {}
        carried = json.loads(metadata.get(b"loopint", b"{}"))
        if carried.get("conventions") != manifest["conventions"]:
            found.findings.append(f"{entry['file']} carries other conventions than the manifest")


def _evaluate_again(
    found: Verification,
    directory: RunDirectory,
    manifest: Mapping[str, Any],
    config: RunConfig,
    rows: int,
    seed: int,
) -> None:
    current = decisive_versions()
    others = [name for name, version in current.items() if manifest["versions"][name] != version]
    if others:
        found.notes.append(f"written with another version of {', '.join(others)}")
    try:
        opened = open_run(config)
        inputs = list(opened.source.hashes().values())
    except ConfigError as error:
        found.notes.append(f"no row is evaluated again: {error}")
        return
    if inputs != list(manifest["inputs"].values()):
        found.findings.append("the points are not those of the run: their SHA-256 differs")
        return
    rejected = pq.read_table(directory.rejected, columns=["row", "reason"])
    reasons = dict(zip(*(rejected.column(i).to_pylist() for i in (0, 1)), strict=True))
    chosen = random.Random(seed).sample(range(found.rows), min(rows, found.rows))
    reader = RowReader(opened)
    digits = config.accuracy.digits
    evaluator = RowEvaluator(
        opened.plans,
        digits + FURTHER_DIGITS,
        config.accuracy.max_precision_bits,
        config.accuracy.seconds,
    )
    stored = _StoredRows(directory, manifest, opened, sorted(reasons))
    for row in sorted(chosen):
        found.evaluated += 1
        try:
            computed = evaluator.row(reader.read(row, 1).cells()[0])
        except RowRejectedError as error:
            if reasons.get(row) != error.reason:
                found.findings.append(f"row {row} should have been rejected: {error.reason}")
            continue
        if row in reasons:
            found.findings.append(f"row {row} is rejected, but can be evaluated")
            continue
        for one, written in zip(computed, stored.read(row), strict=True):
            _compare(found, row, one, written, config)


def _compare(
    found: Verification, row: int, computed: Computed, written: WrittenIntegral, config: RunConfig
) -> None:
    """Compare what is stored with balls, and with the quadrature."""
    if "timed_out" in (written.status, computed.evaluation.status):
        return
    where = f"row {row} integral {written.name}"
    if written.region != computed.evaluation.region:
        found.findings.append(
            f"{where}: region {written.region}, expected {computed.evaluation.region}"
        )
    with working_precision(COMPARED_BITS):
        for order, number in enumerate(written.numbers, start=written.lowest_order):
            found.coefficients += 1
            if not number.is_finite:
                continue  # beyond the range of float64
            ball = complex_ball(computed.evaluation.series[order])
            held = acb(arb(number.re, number.re_bound), arb(number.im, number.im_bound))
            if not held.overlaps(ball):
                found.findings.append(f"{where} order {order}: the true value is out of its bounds")
    checks = cross_check(
        computed,
        written,
        digits=config.cross_check.digits,
        arithmetic=config.cross_check.arithmetic,
    )
    statuses = Counter(check.status for check in checks)
    found.confirmed += statuses[OK]
    if statuses[DISAGREES]:
        found.findings.append(f"{where}: the quadrature disagrees")


class _StoredRows:
    """Finds the lines of a source row in the parts."""

    def __init__(
        self,
        directory: RunDirectory,
        manifest: Mapping[str, Any],
        opened: OpenedRun,
        rejected: Sequence[int],
    ) -> None:
        self._directory = directory
        self._files = [entry["file"] for entry in manifest["table"]]
        self._starts = np.cumsum([0, *(entry["source_rows"] for entry in manifest["table"])])
        self._rejected = np.array(rejected, dtype=np.int64)
        self._layout = opened.layout
        self._part: tuple[int, pa.Table] | None = None

    def read(self, row: int) -> list[WrittenIntegral]:
        """Return the integrals of a row that is in the table."""
        part = int(np.searchsorted(self._starts, row, side="right")) - 1
        start = int(self._starts[part])
        before = np.searchsorted(self._rejected, [start, row])
        place = row - start - int(before[1] - before[0])
        if self._part is None or self._part[0] != part:
            self._part = part, pq.read_table(self._directory.path / self._files[part])
        return list(self._integrals(self._part[1], place))

    def _integrals(self, table: pa.Table, place: int) -> Iterator[WrittenIntegral]:
        if self._layout.layout == "wide":
            line = table.slice(place, 1).to_pylist()[0]
            for name, (lowest, highest) in self._layout.integrals:
                numbers = [
                    _written(line, f"{name}_{order_tag(order)}_")
                    for order in range(lowest, highest + 1)
                ]
                yield _integral(name, lowest, numbers, line, f"{name}_")
            return
        count = sum(highest - lowest + 1 for _, (lowest, highest) in self._layout.integrals)
        lines = iter(table.slice(place * count, count).to_pylist())
        for name, (lowest, highest) in self._layout.integrals:
            mine = [next(lines) for _ in range(lowest, highest + 1)]
            yield _integral(name, lowest, [_written(line, "") for line in mine], mine[0], "")


def _written(line: Mapping[str, Any], prefix: str) -> Written:
    re, im, re_bound, im_bound = (
        float(line[prefix + column]) for column in ("re", "im", "re_bound", "im_bound")
    )
    return Written(re, im, re_bound, im_bound, None, None, None)


def _integral(
    name: str, lowest: int, numbers: list[Written], line: Mapping[str, Any], prefix: str
) -> WrittenIntegral:
    region, status = (str(line[prefix + column]) for column in ("region", "status"))
    return WrittenIntegral(name, lowest, tuple(numbers), region, "", status, 0)
