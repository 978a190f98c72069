"""Rejected rows and cross-checks of a run, counted; only the first ones are kept."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np
import pyarrow.compute as pc
import pyarrow.parquet as pq

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping
    from pathlib import Path

    import pyarrow as pa
    from numpy.typing import NDArray

SHOWN_ROWS = 50
SHOWN_REASONS = 10
MOST_DIGITS = 40  # agreement to more counts as this
_VALUE = r"([^<>])= *[-+]?[0-9][-+0-9./e]*"  # of one row, in a reason that many rows share


@dataclass
class Rejections:
    """The rejected rows.

    Attributes
    ----------
    first
        The first rows, as written.
    reasons
        The most frequent reasons, their numbers left out, and how often each occurs.
    other
        How many rows have another reason.
    """

    first: list[Mapping[str, Any]] = field(default_factory=list)
    reasons: list[tuple[str, int]] = field(default_factory=list)
    other: int = 0


@dataclass
class Checks:
    """The cross-checked coefficients: digits of agreement, and the first that did not pass."""

    agreed: Counter[int] = field(default_factory=Counter)
    failed: list[Mapping[str, Any]] = field(default_factory=list)


def read_rejections(directory: Path, rows: int) -> tuple[Rejections, NDArray[np.bool_]]:
    """Return the rejected rows, and which of the source rows are in the table."""
    found, counts = Rejections(), Counter[str]()
    accepted = np.ones(rows, dtype=bool)
    for table in _groups(directory / "rejected.parquet"):
        accepted[table.column("row").to_numpy()] = False
        if (missing := SHOWN_ROWS - len(found.first)) > 0:
            found.first += table.slice(0, missing).to_pylist()
        reasons = pc.replace_substring_regex(table.column("reason"), _VALUE, r"\1= …")
        for counted in pc.value_counts(reasons).to_pylist():
            counts[counted["values"]] += counted["counts"]
    found.reasons = counts.most_common(SHOWN_REASONS)
    found.other = counts.total() - sum(count for _, count in found.reasons)
    return found, accepted


def read_checks(directory: Path) -> Checks:
    """Return the account of the cross-checks."""
    found = Checks()
    for table in _groups(directory / "cross_check.parquet"):
        for counted in pc.value_counts(table.column("agreed_digits")).to_pylist():
            if (digits := counted["values"]) is not None:
                found.agreed[min(digits, MOST_DIGITS)] += counted["counts"]
        if (missing := SHOWN_ROWS - len(found.failed)) > 0:
            failed = table.filter(pc.not_equal(table.column("status"), "ok"))
            found.failed += failed.slice(0, missing).to_pylist()
    return found


def _groups(path: Path) -> Iterator[pa.Table]:
    with pq.ParquetFile(path) as file:
        for group in range(file.metadata.num_row_groups):
            yield file.read_row_group(group)
