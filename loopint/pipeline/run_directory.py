"""The run directory: its files, its lock, and what a killed run left behind.

Every file appears under its final name only when it is complete: it is written next to it under a
name of its own that starts with a dot, and then renamed.  A chunk counts as finished when its
record, written last, is there and its other files still have the recorded SHA-256.  The state of a
run is nothing but these files and the plan hash in `manifest.json`.
"""

from __future__ import annotations

import hashlib
import json
import os
import secrets
import shutil
from contextlib import contextmanager, suppress
from dataclasses import asdict, dataclass, field
from typing import TYPE_CHECKING, Any

from loopint.core.errors import LoopintError
from loopint.pipeline.errors import ConfigError

if TYPE_CHECKING:
    from collections.abc import Iterator
    from pathlib import Path

Counts = dict[str, dict[str, dict[str, int]]]
MAX_PARTS = 100_000  # names of parts sort like their numbers


class OutputError(LoopintError):
    """A file of the run cannot be written; what is finished is kept."""


@dataclass(frozen=True)
class ChunkRecord:
    """What one finished chunk contributes to the summary.

    Attributes
    ----------
    index, rows, rows_in_table, rows_rejected, table_lines
        Which chunk, its source rows, and where they went.
    table_sha256, rejected_sha256, checked_sha256
        Hashes of its files; None for a file that would be empty and is not written.
    counts
        integral -> region -> status -> number of rows.
    worst_digits
        integral -> smallest number of proven digits, None if every coefficient is exact.
    precision_bits
        The highest working precision that was needed.
    checks
        integral -> cross-check status -> number of Laurent coefficients.
    worst_agreement
        integral -> smallest number of digits on which table and quadrature agree.
    disagreements
        Row, integral and order of the first coefficients that failed the cross-check.
    """

    index: int
    rows: int
    rows_in_table: int
    rows_rejected: int
    table_lines: int
    table_sha256: str
    rejected_sha256: str | None = None
    checked_sha256: str | None = None
    counts: Counts = field(default_factory=dict)
    worst_digits: dict[str, int | None] = field(default_factory=dict)
    precision_bits: int = 0
    checks: dict[str, dict[str, int]] = field(default_factory=dict)
    worst_agreement: dict[str, int | None] = field(default_factory=dict)
    disagreements: list[tuple[int, str, int]] = field(default_factory=list)
    slowest: list[tuple[float, int, str]] = field(default_factory=list)


@contextmanager
def replacing(path: Path) -> Iterator[Path]:
    """Give a temporary path in the same directory that becomes `path` if the block succeeds.

    Two processes that write the same file do not meet: the last complete one stays.

    Raises
    ------
    OutputError
        If the file cannot be written.
    """
    temporary = path.with_name(f".{path.name}.{secrets.token_hex(4)}.tmp")
    try:
        yield temporary
        os.replace(temporary, path)
    except OSError as error:
        _remove(temporary)
        raise OutputError(
            f"{path} cannot be written: {_reason(error)}; what is finished is kept, and the same "
            "command continues from it"
        ) from None
    except BaseException:
        _remove(temporary)
        raise


def _remove(path: Path) -> None:
    with suppress(OSError):
        path.unlink()


def _reason(error: OSError) -> str:
    """Return why in the words of the system, also for the errors of Arrow."""
    return os.strerror(error.errno) if error.errno else str(error)


def write_json(path: Path, content: Any) -> None:  # noqa: ANN401 - any JSON value
    """Write JSON in one step."""
    with replacing(path) as temporary:
        temporary.write_text(json.dumps(content, indent=2) + "\n", encoding="utf-8")


def file_sha256(path: Path) -> str:
    """Return the SHA-256 of a file as hexadecimal digits."""
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()


class RunDirectory:
    """Paths and state of one run directory.

    Parameters
    ----------
    path
        `[output] directory`.
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        self.table = path / "table"
        self.csv = path / "table.csv"
        self.npz = path / "table.npz"
        self.rejected = path / "rejected.parquet"
        self.cross_check = path / "cross_check.parquet"
        self.summary = path / "summary.json"
        self.manifest = path / "manifest.json"
        self.work = path / ".work"

    def part(self, index: int) -> Path:
        """Return the path of a table part."""
        return self.table / f"part-{index:05d}.parquet"

    def rejected_chunk(self, index: int) -> Path:
        """Return the path of the rejected rows of one chunk."""
        return self.work / f"rejected-{index:05d}.parquet"

    def checked_chunk(self, index: int) -> Path:
        """Return the path of the cross-check records of one chunk."""
        return self.work / f"cross_check-{index:05d}.parquet"

    def _record(self, index: int) -> Path:
        return self.work / f"chunk-{index:05d}.json"

    @contextmanager
    def locked(self) -> Iterator[None]:
        """Create the directory and keep other runs out of it inside the block.

        Raises
        ------
        ConfigError
            If the path is a file or cannot be written, or another run holds the directory.
        """
        if self.path.exists() and not self.path.is_dir():
            raise ConfigError(
                f"[output] directory = {str(self.path)!r} is a file; accepted: a directory, "
                "which is created if it does not exist"
            )
        try:
            self.work.mkdir(parents=True, exist_ok=True)
            lock = (self.work / "lock").open("w", encoding="ascii")
        except OSError as error:
            raise ConfigError(
                f"[output] directory = {str(self.path)!r} cannot be written: {_reason(error)}; "
                "accepted: a directory that this user may write"
            ) from None
        with lock:
            try:
                import fcntl  # noqa: PLC0415 - POSIX only
            except ImportError:  # pragma: no cover - elsewhere the user sees to it
                yield
                return
            try:
                fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
            except BlockingIOError:
                raise ConfigError(
                    f"{self.path} is being written by another run; accepted: wait until it ends, "
                    "or another [output] directory"
                ) from None
            yield

    def prepare(self, plan_hash: str, manifest: dict[str, Any], *, overwrite: bool) -> None:
        """Make the directory ready to start or to continue the run with this plan.

        Raises
        ------
        ConfigError
            If it holds the results of a different plan and `overwrite` is False, or files that
            no run has written.
        """
        found = self.plan_hash()
        if found is None:
            self._refuse_foreign_files()
        elif overwrite:
            self._clear()
        elif found != plan_hash:
            raise ConfigError(
                f"{self.path} holds the results of a different config, input or version; accepted: "
                "--overwrite to replace them, or another [output] directory"
            )
        self.table.mkdir(exist_ok=True)
        self.remove_leftovers()
        if found != plan_hash or overwrite:
            write_json(self.manifest, manifest)

    def closing_hashes(self) -> dict[str, str]:
        """Return the SHA-256 of the files that cover all chunks, by their names."""
        files = (self.csv, self.npz, self.rejected, self.cross_check, self.summary)
        return {path.name: file_sha256(path) for path in files if path.exists()}

    def remove_leftovers(self) -> None:
        """Remove what processes that were killed have begun to write."""
        for directory in (self.path, self.table, self.work):
            for leftover in directory.glob(".*.tmp"):
                leftover.unlink(missing_ok=True)

    def plan_hash(self) -> str | None:
        """Return the hash of the plan whose results the directory holds, or None."""
        try:
            return str(json.loads(self.manifest.read_text(encoding="utf-8"))["plan_hash"])
        except FileNotFoundError:
            return None
        except (ValueError, KeyError, TypeError):
            return None

    def _refuse_foreign_files(self) -> None:
        ours = (
            self.table, self.csv, self.npz, self.rejected, self.cross_check, self.summary,
            self.manifest,
        )  # fmt: skip
        for path in ours:
            if path.exists() and not (path.is_dir() and not any(path.iterdir())):
                raise ConfigError(
                    f"{self.path} holds {path.name!r}, which no loopint run wrote; accepted: a new "
                    "or empty [output] directory"
                )

    def _clear(self) -> None:
        """Remove what a run writes, and nothing else; the manifest last."""
        shutil.rmtree(self.table, ignore_errors=True)
        for path in self.work.iterdir():
            if path.name != "lock":
                path.unlink(missing_ok=True)
        report = self.path / "report.html"
        for path in (self.csv, self.npz, self.rejected, self.cross_check, self.summary, report):
            path.unlink(missing_ok=True)
        self.manifest.unlink(missing_ok=True)

    def commit(self, record: ChunkRecord) -> None:
        """Mark a chunk as finished, after its other files are in place."""
        write_json(self._record(record.index), asdict(record))

    def finished(self, index: int) -> ChunkRecord | None:
        """Return the record of a chunk if all its files are there and unchanged, else None."""
        try:
            record = ChunkRecord(**json.loads(self._record(index).read_text(encoding="utf-8")))
            intact = all(
                expected is None or file_sha256(path) == expected
                for path, expected in (
                    (self.part(index), record.table_sha256),
                    (self.rejected_chunk(index), record.rejected_sha256),
                    (self.checked_chunk(index), record.checked_sha256),
                )
            )
        except (OSError, ValueError, TypeError):
            return None
        return record if intact else None
