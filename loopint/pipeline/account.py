"""The account of a run: the sum of what its chunks report."""

from __future__ import annotations

import heapq
from collections import Counter
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any

from loopint.pipeline.chunks import NAMED_DISAGREEMENTS, SLOWEST, smallest

if TYPE_CHECKING:
    from collections.abc import Iterable

    from loopint.pipeline.run_directory import ChunkRecord


class Account:
    """Adds up chunk records in any order; of each it keeps no more than a line.

    Parameters
    ----------
    names
        The names of the integrals, in the order of the config.
    """

    def __init__(self, names: Iterable[str]) -> None:
        self.rows = 0
        self._integrals = {name: _IntegralAccount() for name in names}
        self._records: dict[int, ChunkRecord] = {}
        self._precision_bits = 0
        self._disagreements: list[tuple[int, str, int]] = []
        self._slowest: list[tuple[float, int, str]] = []

    def add(self, record: ChunkRecord) -> None:
        """Add the record of one finished chunk."""
        self.rows += record.rows
        self._precision_bits = max(self._precision_bits, record.precision_bits)
        for name, account in self._integrals.items():
            account.add(name, record)
        named = self._disagreements + [(row, name, k) for row, name, k in record.disagreements]
        self._disagreements = sorted(named, key=lambda found: found[0])[:NAMED_DISAGREEMENTS]
        slowest = [(seconds, row, name) for seconds, row, name in record.slowest]
        self._slowest = heapq.nlargest(SLOWEST, self._slowest + slowest)
        self._records[record.index] = replace(
            record,
            counts={},
            worst_digits={},
            checks={},
            worst_agreement={},
            disagreements=[],
            slowest=[],
        )

    def records(self) -> list[ChunkRecord]:
        """Return rows, lines and hashes of the chunks in their order, without the details."""
        return [self._records[index] for index in sorted(self._records)]

    def summary(self, rows_in: int) -> dict[str, Any]:
        """Return the sums for `summary.json`.

        Parameters
        ----------
        rows_in
            The rows of the source: every one must be in the table or rejected.
        """
        records = self._records.values()
        rows_in_table = sum(record.rows_in_table for record in records)
        rows_rejected = sum(record.rows_rejected for record in records)
        if rows_in_table + rows_rejected != rows_in:
            raise AssertionError(
                f"{rows_in} rows in, {rows_in_table} in the table, {rows_rejected} rejected"
            )
        integrals = {name: account.summary() for name, account in self._integrals.items()}
        checks: Counter[str] = Counter()
        for account in self._integrals.values():
            checks.update(account.checks)
        return {
            "rows_in_table": rows_in_table,
            "rows_rejected": rows_rejected,
            "results_below_digits": sum(entry["below_digits"] for entry in integrals.values()),
            "results_timed_out": sum(entry["timed_out"] for entry in integrals.values()),
            "table_lines": sum(record.table_lines for record in records),
            "worst_digits": smallest(*(entry["worst_digits"] for entry in integrals.values())),
            "precision_bits": self._precision_bits,
            "slowest": [
                {"row": row, "integral": name, "seconds": float(f"{seconds:.3g}")}
                for seconds, row, name in self._slowest
            ],
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
                    for row, name, order in self._disagreements
                ],
            },
        }


@dataclass
class _IntegralAccount:
    """The sums of one integral."""

    regions: dict[str, Counter[str]] = field(default_factory=dict)
    checks: Counter[str] = field(default_factory=Counter)
    worst_digits: int | None = None
    worst_agreement: int | None = None

    def add(self, name: str, record: ChunkRecord) -> None:
        for region, statuses in record.counts[name].items():
            self.regions.setdefault(region, Counter()).update(statuses)
        self.checks.update(record.checks[name])
        self.worst_digits = smallest(self.worst_digits, record.worst_digits[name])
        self.worst_agreement = smallest(self.worst_agreement, record.worst_agreement[name])

    def summary(self) -> dict[str, Any]:
        return {
            "regions": {
                region: dict(sorted(self.regions[region].items()))
                for region in sorted(self.regions)
            },
            "below_digits": sum(statuses["below_digits"] for statuses in self.regions.values()),
            "timed_out": sum(statuses["timed_out"] for statuses in self.regions.values()),
            "worst_digits": self.worst_digits,
            "cross_check": {
                "coefficients": dict(sorted(self.checks.items())),
                "worst_agreed_digits": self.worst_agreement,
            },
        }
