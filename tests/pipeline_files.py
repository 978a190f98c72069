"""Small points files and configs for the tests of the pipeline."""

from __future__ import annotations

import random
import signal
from typing import TYPE_CHECKING, Any

import pyarrow as pa
import pyarrow.parquet as pq

if TYPE_CHECKING:
    from pathlib import Path

CONFIG = """
title = "two fields"
[points]
file = "{points}"
{key}
[[integral]]
name = "mixed"
family = "bubble"
orders = [-1, 1]
p_squared = "s"
m1 = "m_alder"
m2 = "m_cedar"
width2 = "0.01"

[[integral]]
name = "equal"
family = "bubble"
p_squared = "s"
m1 = "m_alder"
m2 = "m_alder"

[[integral]]
name = "loop"
family = "tadpole"
m_squared = "m_alder**2"

[accuracy]
digits = {digits}
[cross_check]
fraction = {fraction}
[output]
directory = "{out}"
layout = "{layout}"
formats = {formats}
[execution]
workers = {workers}
chunk_rows = {chunk_rows}
"""


def points_table(rows: int, **replaced: dict[int, Any]) -> pa.Table:
    """Return points on both sides of the thresholds; `replaced` sets single cells."""
    source = random.Random(11)
    columns: dict[str, list[Any]] = {
        "point": [f"p{i}" for i in range(rows)],
        "s": [source.uniform(-3, 9) for _ in range(rows)],
        "m_alder": [source.uniform(0.1, 1.5) for _ in range(rows)],
        "m_cedar": [source.uniform(0.1, 1.5) for _ in range(rows)],
    }
    for name, cells in replaced.items():
        for row, value in cells.items():
            columns[name][row] = value
    return pa.table(columns)


def write_run(
    directory: Path,
    table: pa.Table,
    *,
    out: str = "out",
    layout: str = "long",
    formats: str = '["parquet"]',
    digits: int = 16,
    fraction: str = "0.1",
    workers: int = 1,
    chunk_rows: int = 8,
    key: str = 'key = "point"',
    name: str = "run.toml",
) -> Path:
    """Write points and config and return the path of the config."""
    points = directory / "points.parquet"
    if not points.exists():
        pq.write_table(table, points)
    config = directory / name
    config.write_text(
        CONFIG.format(
            points=points.as_posix(),
            out=(directory / out).as_posix(),
            layout=layout,
            formats=formats,
            digits=digits,
            fraction=fraction,
            workers=workers,
            chunk_rows=chunk_rows,
            key=key,
        )
    )
    return config


def file_contents(directory: Path) -> dict[str, bytes]:
    """Return the bytes of every result file that must not depend on how the run went."""
    files = [
        *sorted((directory / "table").iterdir()),
        directory / "rejected.parquet",
        directory / "cross_check.parquet",
    ]
    if (directory / "table.csv").exists():
        files.append(directory / "table.csv")
    return {path.name: path.read_bytes() for path in files}


def hear_interrupts() -> None:
    """Undo what a shell does to a command in the background: it ignores Ctrl-C, and so do we."""
    signal.signal(signal.SIGINT, signal.default_int_handler)
