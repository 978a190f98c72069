"""The table of a run in another format: NumPy's .npz."""

from __future__ import annotations

import zipfile
from collections.abc import Sequence
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from loopint.pipeline.run_directory import replacing

METADATA = "loopint"
EPOCH = (1980, 1, 1, 0, 0, 0)  # the same bytes whenever it is written


def write_npz(path: Path, schema: pa.Schema, parts: Sequence[Path]) -> None:
    """Write the columns of a table as members of an .npz file, one column in memory at a time.

    Numbers are float64 or integers, text is Unicode; integers with nulls become floats with nan.
    The member `loopint` holds the conventions and the meanings of the columns as JSON text.

    Raises
    ------
    OutputError
        If the file cannot be written.
    """
    with (
        replacing(path) as temporary,
        zipfile.ZipFile(temporary, "w", zipfile.ZIP_DEFLATED, compresslevel=1) as archive,
    ):
        metadata = (schema.metadata or {}).get(METADATA.encode(), b"{}").decode()
        _write_member(archive, METADATA, np.array(metadata))
        for name in schema.names:
            pieces = [pq.read_table(part, columns=[name]).column(0) for part in parts]
            chunks = [chunk for piece in pieces for chunk in piece.chunks]
            column = pa.chunked_array(chunks, schema.field(name).type)
            _write_member(archive, name, _as_array(column))


def _as_array(column: pa.ChunkedArray) -> np.ndarray:
    kind = column.type
    if pa.types.is_floating(kind) or (pa.types.is_integer(kind) and not column.null_count):
        return np.asarray(column.to_numpy())
    if pa.types.is_integer(kind):
        return np.asarray(column.cast(pa.float64()).to_numpy())
    return np.array(["" if v is None else str(v) for v in column.to_pylist()], dtype=np.str_)


def _write_member(archive: zipfile.ZipFile, name: str, array: np.ndarray) -> None:
    member = zipfile.ZipInfo(f"{name}.npy", EPOCH)
    member.compress_type = zipfile.ZIP_DEFLATED
    with archive.open(member, "w", force_zip64=True) as stream:
        np.lib.format.write_array(stream, np.asarray(array), allow_pickle=False)
