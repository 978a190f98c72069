"""Write configs/quickstart.parquet: a scan of an invented hidden sector.

Fields: alder (stable, 1.2 GeV), birch (stable, five masses), cedar (unstable, 2.5 GeV, width
80 MeV).  For each birch mass the scan in s = p^2 is linear from -6 to 14 GeV^2 and dense around the
alder-birch threshold and pseudothreshold, both of which are hit exactly: all columns are decimals.

Run it from the top of a checkout: python configs/quickstart_points.py
"""

from __future__ import annotations

import sys
from decimal import Decimal
from pathlib import Path

import pyarrow as pa
import pyarrow.parquet as pq

ALDER, CEDAR, CEDAR_WIDTH = Decimal("1.2"), Decimal("2.5"), Decimal("0.08")
BIRCH = [Decimal(text) for text in ("0", "0.05", "0.35", "0.8", "1.2")]
SPACING = Decimal("0.0625")
NEAR = [Decimal(1).scaleb(-k) for k in range(1, 13)]


def momenta(birch: Decimal) -> list[Decimal]:
    """Return p^2 values in increasing order, without repetition."""
    values = {Decimal(-6) + SPACING * k for k in range(321)}
    for threshold in ((ALDER + birch) ** 2, (ALDER - birch) ** 2):
        values.add(threshold)
        for step in NEAR:
            values.update({threshold - step, threshold + step, threshold + 3 * step})
    return sorted(values)


def table() -> pa.Table:
    """Return the points: a key and five exact decimal columns (GeV, GeV^2)."""
    rows = [(s, birch) for birch in BIRCH for s in momenta(birch)]
    decimal = pa.decimal128(20, 14)
    count = len(rows)
    return pa.table(
        {
            "point": pa.array(range(1, count + 1), pa.int32()),
            "s": pa.array([s for s, _ in rows], decimal),
            "m_alder": pa.array([ALDER] * count, decimal),
            "m_birch": pa.array([birch for _, birch in rows], decimal),
            "m_cedar": pa.array([CEDAR] * count, decimal),
            "width_cedar": pa.array([CEDAR_WIDTH] * count, decimal),
        }
    )


if __name__ == "__main__":
    target = Path(sys.argv[1] if len(sys.argv) > 1 else "configs/quickstart.parquet")
    points = table()
    pq.write_table(points, target, compression="zstd")
    print(f"{points.num_rows} points written to {target}")
