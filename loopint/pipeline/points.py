"""Kinematic points in Parquet files: opened, checked, and read row by row without rounding."""

from __future__ import annotations

import hashlib
import os
from bisect import bisect_right
from dataclasses import dataclass, replace
from itertools import accumulate
from pathlib import Path
from typing import TYPE_CHECKING, TypeAlias

import pyarrow as pa
import pyarrow.parquet as pq

from loopint.core.errors import InputError
from loopint.core.numbers import MAX_EXPONENT, exact_real
from loopint.pipeline.errors import ConfigError, unknown_name

if TYPE_CHECKING:
    from collections.abc import Iterable, Iterator, Mapping, Sequence

    from flint import fmpq

    Cell: TypeAlias = "fmpq | InputError"

ACCEPTED_TYPES = "integer, float, decimal or string"
BATCH_ROWS = 65_536
BUFFER_BYTES = 1 << 20  # stream column chunks instead of loading whole row groups


@dataclass(frozen=True, slots=True)
class PointsFile:
    """One Parquet file: where it is, how many rows each of its row groups holds, and its state.

    The state is the size and the time of the last change in nanoseconds.
    """

    path: Path
    group_rows: tuple[int, ...]
    state: tuple[int, int]

    @property
    def row_count(self) -> int:
        """Rows in the file."""
        return sum(self.group_rows)

    def check_unchanged(self) -> None:
        """Raise `ConfigError` if the file is not the one that was opened."""
        try:
            changed = _state(self.path) != self.state
        except OSError as error:
            raise ConfigError(
                f"{self.path} cannot be read: {_first_line(error)}; "
                "accepted: a file that stays in place during the run"
            ) from None
        if changed:
            raise ConfigError(
                f"{self.path} has changed since it was opened; "
                "accepted: a file that stays unchanged during the run"
            )


class PointsSource:
    """The rows of one or several Parquet files, numbered from 0 in file order.

    Holds paths and row counts only, so it can be sent to another process; every process that
    reads opens the files itself and keeps at most one batch of rows in memory.

    Attributes
    ----------
    schema
        Columns and types, of the first file.
    key
        The column carried through to the tables, or None.
    """

    def __init__(self, parts: Sequence[PointsFile], schema: pa.Schema, key: str | None) -> None:
        self.parts = tuple(parts)
        self.schema = schema
        self.key = key
        self._starts = [0, *accumulate(part.row_count for part in self.parts)]
        self._cursor: _Cursor | None = None

    def __reduce__(
        self,
    ) -> tuple[type[PointsSource], tuple[tuple[PointsFile, ...], pa.Schema, str | None]]:
        return PointsSource, (self.parts, self.schema, self.key)

    @property
    def files(self) -> tuple[Path, ...]:
        """The Parquet files in the order their rows are numbered."""
        return tuple(part.path for part in self.parts)

    @property
    def row_count(self) -> int:
        """Rows in all files."""
        return self._starts[-1]

    def check_columns(self, names: Iterable[str], where: str) -> None:
        """Check that columns exist and hold real numbers.

        Parameters
        ----------
        names
            Columns that are needed.
        where
            What needs them; starts the sentence of the error.

        Raises
        ------
        ConfigError
            For a column that is missing or of another type than integer, float, decimal or string.
        """
        for name in sorted(names):
            if name not in self.schema.names:
                raise ConfigError(
                    f"{where}: column {name} of {self.files[0]} "
                    f"{unknown_name(name, self.schema.names)}"
                )
            kind = self.schema.field(name).type
            if not _holds_numbers(kind):
                raise ConfigError(
                    f"{where}: column {name} of {self.files[0]} has type {kind}; "
                    f"accepted: {ACCEPTED_TYPES}"
                )

    def read_rows(self, start: int, count: int, columns: Sequence[str]) -> pa.Table:
        """Read a range of rows; ranges that ascend are read without decoding anything twice.

        Parameters
        ----------
        start, count
            First row (from 0) and number of rows; a range beyond the end is cut short.
        columns
            At least one column; repetitions are dropped.

        Raises
        ------
        ConfigError
            If a file was damaged, removed or changed since it was opened.
        """
        names = list(dict.fromkeys(columns))
        stop = min(start + count, self.row_count)
        schema = pa.schema([self.schema.field(name) for name in names])
        pieces: list[pa.RecordBatch] = []
        while start < stop:
            index = bisect_right(self._starts, start) - 1  # the last of equals skips empty files
            offset = self._starts[index]
            batch = self._batch(self.parts[index], start - offset, names)
            self.parts[index].check_unchanged()  # what was read is what was hashed
            piece = batch.slice(0, stop - start)
            # files may differ in what a field says besides its type, such as "not null"
            pieces.append(pa.RecordBatch.from_arrays(piece.columns, schema=schema))
            start += piece.num_rows
        return pa.Table.from_batches(pieces, schema) if pieces else schema.empty_table()

    def _batch(self, part: PointsFile, row: int, names: list[str]) -> pa.RecordBatch:
        """Return the rows of one decoded batch from `row` of a file onwards; at least one."""
        cursor = self._cursor
        if cursor is None or not cursor.can_reach(part, row, names):
            cursor = self._cursor = _Cursor(part, row, names)
        return cursor.from_row(row)

    def hashes(self) -> dict[str, str]:
        """Return the SHA-256 of every file, by path."""
        found = {}
        for part in self.parts:
            path = part.path
            try:
                with path.open("rb") as stream:
                    found[path.as_posix()] = hashlib.file_digest(stream, "sha256").hexdigest()
            except OSError as error:
                raise ConfigError(f"{path} cannot be read: {error.strerror or error}") from None
            part.check_unchanged()
        return found

    def check_unchanged(self) -> None:
        """Raise `ConfigError` if a file has changed since it was opened."""
        for part in self.parts:
            part.check_unchanged()

    def with_absolute_paths(self) -> PointsSource:
        """Return the same source for a process that works in another directory."""
        parts = [replace(part, path=part.path.absolute()) for part in self.parts]
        return PointsSource(parts, self.schema, self.key)


class _Cursor:
    """A position in one file that only moves forward, one batch of rows at a time."""

    def __init__(self, part: PointsFile, row: int, names: list[str]) -> None:
        self.part = part
        self.names = names
        starts = [0, *accumulate(part.group_rows)]
        group = bisect_right(starts, row) - 1
        self.start = self.stop = starts[group]
        self.batch: pa.RecordBatch | None = None
        self.batches = self._open(group)

    def _open(self, group: int) -> Iterator[pa.RecordBatch]:
        self.part.check_unchanged()
        groups = list(range(group, len(self.part.group_rows)))
        try:
            # partitioning is the business of the directory, not of a single file
            with pq.ParquetFile(self.part.path, buffer_size=BUFFER_BYTES) as file:
                yield from file.iter_batches(BATCH_ROWS, row_groups=groups, columns=self.names)
        except MemoryError:  # Arrow's own is an ArrowException too
            raise
        except (pa.ArrowException, OSError) as error:
            raise ConfigError(
                f"{self.part.path} cannot be read: {_first_line(error)}; "
                "accepted: an undamaged Parquet file that stays in place during the run"
            ) from None

    def can_reach(self, part: PointsFile, row: int, names: list[str]) -> bool:
        """Whether moving forward reaches the row without decoding a whole row group in vain."""
        if part != self.part or names != self.names or row < self.start:
            return False
        return row - self.stop < max(self.part.group_rows)

    def from_row(self, row: int) -> pa.RecordBatch:
        while self.batch is None or row >= self.stop:
            batch = next(self.batches, None)
            if batch is None:
                raise ConfigError(
                    f"{self.part.path} has fewer rows than when it was opened; "
                    "accepted: a file that stays unchanged during the run"
                )
            self.batch = batch.select(self.names)
            self.start, self.stop = self.stop, self.stop + batch.num_rows
        return self.batch.slice(row - self.start)


def open_points(path: Path, key: str | None = None) -> PointsSource:
    """Open a Parquet file, or all Parquet files of a directory in the order of their names.

    Sub-directories, hidden files and files of other types in the directory are ignored.

    Parameters
    ----------
    path
        File or directory.
    key
        Column carried through to the tables, of any type.

    Raises
    ------
    ConfigError
        If there is nothing to read: a missing path, a file that is not Parquet, a directory
        without Parquet files, no row at all, files with different columns, a column name used
        twice, a missing key.
    """
    parts: list[PointsFile] = []
    schema: pa.Schema | None = None
    for file in _parquet_files(path):
        found, part = _inspect(file)
        if schema is None:
            schema = found
        else:
            _check_same_columns(schema, parts[0].path, found, file)
        parts.append(part)
    assert schema is not None
    source = PointsSource(parts, schema, key)
    if source.row_count == 0:
        raise ConfigError(f"{path} has no rows; accepted: at least one point")
    if key is not None and key not in schema.names:
        raise ConfigError(
            f'[points] key = "{key}": column {key} of {source.files[0]} '
            f"{unknown_name(key, schema.names)}"
        )
    return source


def _parquet_files(path: Path) -> list[Path]:
    accepted = "accepted: a Parquet file or a directory of *.parquet files"
    try:
        if path.is_dir():
            files = sorted(
                entry
                for entry in path.iterdir()
                if entry.suffix.lower() == ".parquet"
                and not entry.name.startswith(".")
                and entry.is_file()
            )
            if not files:
                raise ConfigError(f"directory {path} holds no *.parquet file; {accepted}")
            return files
        if not path.exists():
            raise ConfigError(f"{path} does not exist; {accepted}")
        if not path.is_file():
            raise ConfigError(f"{path} is no regular file; {accepted}")
    except OSError as error:
        raise ConfigError(f"{path} cannot be read: {error.strerror or error}") from None
    return [path]


def _inspect(path: Path) -> tuple[pa.Schema, PointsFile]:
    """Read the footer of one file."""
    try:
        with path.open("rb"):  # a plain message for a file that may not be read
            state = _state(path)
    except OSError as error:
        raise ConfigError(f"{path} cannot be read: {error.strerror or error}") from None
    try:
        with pq.ParquetFile(path) as file:
            schema, metadata = file.schema_arrow, file.metadata
            groups = tuple(
                metadata.row_group(index).num_rows for index in range(metadata.num_row_groups)
            )
    except MemoryError:
        raise
    except (pa.ArrowException, OSError, ValueError) as error:
        raise ConfigError(
            f"{path} is not a readable Parquet file ({_first_line(error)}); accepted: Parquet"
        ) from None
    names = schema.names
    for name in names:
        if names.count(name) > 1:
            raise ConfigError(f"{path} has two columns named {name}; accepted: distinct names")
    return schema, PointsFile(path, groups, state)


def _state(path: Path) -> tuple[int, int]:
    found = path.stat()
    return found.st_size, found.st_mtime_ns


def _check_same_columns(
    first: pa.Schema, first_path: Path, other: pa.Schema, other_path: Path
) -> None:
    rest = f"{first_path}; accepted: the same columns and types in every file"
    for name in first.names:
        if name not in other.names:
            raise ConfigError(f"{other_path} lacks column {name} of {rest}")
        expected, found = first.field(name).type, other.field(name).type
        if found != expected:
            raise ConfigError(
                f"column {name} has type {found} in {other_path} but {expected} in {rest}"
            )
    for name in other.names:
        if name not in first.names:
            raise ConfigError(f"{other_path} has column {name}, unlike {rest}")


def _holds_numbers(kind: pa.DataType) -> bool:
    if pa.types.is_dictionary(kind):
        kind = kind.value_type
    types = pa.types
    return bool(
        types.is_integer(kind)
        or types.is_floating(kind)
        or types.is_decimal(kind)
        or types.is_string(kind)
        or types.is_large_string(kind)
    )


def exact_cell(value: object) -> fmpq:
    """Return the exact value of one cell, as pyarrow hands it out.

    A float is its exact binary value; a string is a decimal ("0.1" is 1/10) or a rational.

    Raises
    ------
    InputError
        For null, NaN, infinity and strings that are not numbers.  The message continues
        "column x is ...".

    Examples
    --------
    >>> exact_cell("1/3"), exact_cell(0.5)
    (1/3, 1/2)
    >>> exact_cell(float("nan"))
    Traceback (most recent call last):
    ...
    loopint.core.errors.InputError: nan; accepted: a finite number
    """
    if value is None:
        raise InputError("null; accepted: a finite number")
    if isinstance(value, float) and value - value != 0:
        raise InputError(f"{value!r}; accepted: a finite number")
    try:
        return exact_real(value)
    except InputError:
        text = repr(value)
        shown = text if len(text) <= 60 else text[:57] + "..."
        raise InputError(
            f"{shown}; accepted: a finite number such as 0.1, 1e-3 or 1/3, with exponents up to "
            f"+-{MAX_EXPONENT}"
        ) from None


def exact_rows(table: pa.Table, columns: Sequence[str]) -> Iterator[Mapping[str, Cell]]:
    """Yield, row by row, the exact value of each column, or the reason why there is none."""
    exact = [[_cell(value) for value in _as_list(table.column(name))] for name in columns]
    if not columns:
        yield from ({} for _ in range(table.num_rows))
    for cells in zip(*exact, strict=True):
        yield dict(zip(columns, cells, strict=True))


def _as_list(column: pa.ChunkedArray) -> list[object]:
    """Return the values; a string that is not UTF-8 stays bytes, which are no number."""
    try:
        return list(column.to_pylist())
    except UnicodeDecodeError:
        return [_decoded(value) for value in column.cast(pa.large_binary()).to_pylist()]


def _decoded(value: bytes | None) -> object:
    try:
        return None if value is None else value.decode()
    except UnicodeDecodeError:
        return value


def _cell(value: object) -> Cell:
    try:
        return exact_cell(value)
    except InputError as reason:
        return reason


def _first_line(error: Exception) -> str:
    if isinstance(error, OSError) and error.errno:
        return os.strerror(error.errno)
    lines = str(error).strip().splitlines() or [type(error).__name__]
    return lines[0].rstrip(".")
