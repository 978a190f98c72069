"""The result table, read in one pass: samples for figures, counts of everything."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from numpy.typing import NDArray

from loopint.pipeline.tables import order_tag

if TYPE_CHECKING:
    from collections.abc import Iterator
    from pathlib import Path

    from loopint.pipeline.config import RunConfig

LEAST_CERTAIN = 10
STEPS = 4  # bins of the histogram in a decade
LOWEST_DECADE, HIGHEST_DECADE = -40, 0
NO_DIGITS = 2**15 - 1  # exact, or not written
Real = NDArray[np.float64]


@dataclass
class Coefficient:
    """One Laurent coefficient.

    Attributes
    ----------
    re, im
        The values in the sampled rows, in pieces.
    exact
        In how many rows of the table it is exact.
    """

    order: int
    re: list[Real] = field(default_factory=list)
    im: list[Real] = field(default_factory=list)
    exact: int = 0

    def values(self) -> tuple[Real, Real]:
        """Return real and imaginary parts in the sampled rows."""
        nothing = np.zeros(0)
        return np.concatenate([nothing, *self.re]), np.concatenate([nothing, *self.im])

    def constant(self) -> complex | None:
        """Return the value if it is the same in all sampled rows, else None."""
        re, im = self.values()
        if re.size and np.all(re == re[0]) and np.all(im == im[0]):
            return complex(re[0], im[0])
        return None


@dataclass
class Uncertain:
    """A coefficient with few proven digits or a large relative bound."""

    digits: int | None
    relative_bound: float
    key: str
    integral: str
    order: int
    region: str
    re: float
    im: float

    @property
    def rank(self) -> tuple[int, float]:
        """Least certain first."""
        return (NO_DIGITS if self.digits is None else self.digits, -self.relative_bound)


@dataclass
class TableData:
    """What a page shows of the table.

    Attributes
    ----------
    coefficients
        Name of the integral -> order -> coefficient.
    bounds
        All inexact coefficients by relative bound b: n counts (n-1)/STEPS < log10 b <= n/STEPS.
    uncertain
        The least certain coefficients.
    """

    coefficients: dict[str, dict[int, Coefficient]]
    bounds: Counter[int] = field(default_factory=Counter)
    uncertain: list[Uncertain] = field(default_factory=list)


@dataclass
class _Lines:
    """One coefficient in a piece of the table."""

    keys: pa.ChunkedArray
    re: Real
    im: Real
    re_bound: Real
    im_bound: Real
    digits: NDArray[np.int64]
    regions: pa.ChunkedArray
    places: NDArray[np.intp]  # in keys and regions


def read_table(
    directory: Path, config: RunConfig, rows: NDArray[np.intp], sampled: NDArray[np.intp]
) -> TableData:
    """Read the table of a run.

    Parameters
    ----------
    rows
        The source rows that are in the table.
    sampled
        Those whose coefficients are kept.
    """
    orders = {n: range(i.orders[0], i.orders[1] + 1) for n, i in config.results.items()}
    data = TableData({name: {k: Coefficient(k) for k in ks} for name, ks in orders.items()})
    is_sampled = np.zeros((rows.max() + 1) if rows.size else 0, dtype=bool)
    is_sampled[sampled] = True
    seen: Counter[tuple[str, int]] = Counter()
    key = config.points.key or "row"
    split = _split_wide if config.output.layout == "wide" else _split_long
    for table in _groups(directory):
        for (name, order), lines in split(table, orders, key):
            start = seen[name, order]
            seen[name, order] += lines.re.size
            mask = is_sampled[rows[start : start + lines.re.size]]
            coefficient = data.coefficients[name][order]
            coefficient.re.append(lines.re[mask])
            coefficient.im.append(lines.im[mask])
            relative = _relative(lines)
            coefficient.exact += int((relative == 0).sum())
            data.bounds.update(_binned(relative[relative > 0]))
            data.uncertain += _least_certain(name, order, lines, relative)
        data.uncertain = sorted(data.uncertain, key=lambda u: u.rank)[:LEAST_CERTAIN]
    return data


def _groups(directory: Path) -> Iterator[pa.Table]:
    for part in sorted((directory / "table").glob("part-*.parquet")):
        with pq.ParquetFile(part) as file:
            for group in range(file.metadata.num_row_groups):
                yield file.read_row_group(group)


def _split_wide(
    table: pa.Table, orders: dict[str, range], key: str
) -> Iterator[tuple[tuple[str, int], _Lines]]:
    keys, places = table.column(key), np.arange(table.num_rows)
    digits = np.full(table.num_rows, NO_DIGITS)  # a wide table does not say
    for name, wanted in orders.items():
        regions = table.column(f"{name}_region")
        for order in wanted:
            prefix = f"{name}_{order_tag(order)}_"
            numbers = {c: table.column(prefix + c).to_numpy() for c in _NUMBERS}
            lines = _Lines(keys=keys, digits=digits, regions=regions, places=places, **numbers)
            yield (name, order), lines


def _split_long(
    table: pa.Table, orders: dict[str, range], key: str
) -> Iterator[tuple[tuple[str, int], _Lines]]:
    """Bring the lines of each coefficient together, by one sorting."""
    encoded = table.column("integral").combine_chunks().dictionary_encode()
    names, codes = encoded.dictionary.to_pylist(), encoded.indices.to_numpy()
    line_orders = table.column("order").to_numpy().astype(np.int64)
    sorting = np.lexsort((line_orders, codes))
    changes = np.diff(codes[sorting]) | np.diff(line_orders[sorting])
    numbers = {c: table.column(c).to_numpy() for c in _NUMBERS}
    digits = table.column("digits").fill_null(NO_DIGITS).to_numpy().astype(np.int64)
    keys, regions = table.column(key), table.column("region")
    for places in np.split(sorting, np.flatnonzero(changes) + 1):
        if places.size and (name := names[codes[places[0]]]) in orders:
            own = {c: column[places] for c, column in numbers.items()}
            found = digits[places]
            lines = _Lines(keys=keys, digits=found, regions=regions, places=places, **own)
            yield (name, int(line_orders[places[0]])), lines


_NUMBERS = ("re", "im", "re_bound", "im_bound")


def _relative(lines: _Lines) -> Real:
    """Return bound / |value|: 0 where exact, at most 1."""
    with np.errstate(all="ignore"):
        bound, size = np.hypot(lines.re_bound, lines.im_bound), np.hypot(lines.re, lines.im)
        found = np.where(bound == 0, 0.0, bound / size)
    return np.where(np.isnan(found), 1.0, np.minimum(found, 1.0))


def _binned(relative: Real) -> dict[int, int]:
    lowest, highest = STEPS * LOWEST_DECADE, STEPS * HIGHEST_DECADE
    bins = np.clip(np.ceil(STEPS * np.log10(relative)), lowest, highest).astype(np.intp) - lowest
    counts = np.bincount(bins)
    return {int(n) + lowest: int(counts[n]) for n in np.flatnonzero(counts)}


def _least_certain(name: str, order: int, lines: _Lines, relative: Real) -> Iterator[Uncertain]:
    for i in _worst(lines.digits, relative):
        place, digits = int(lines.places[i]), int(lines.digits[i])
        yield Uncertain(
            None if digits == NO_DIGITS else digits,
            float(relative[i]),
            _text(lines.keys[place].as_py()),
            name,
            order,
            str(lines.regions[place].as_py()),
            float(lines.re[i]),
            float(lines.im[i]),
        )


def _worst(digits: NDArray[np.int64], relative: Real) -> NDArray[np.intp]:
    """Return the inexact places with the fewest digits, then the largest bound, then the first."""
    places = np.flatnonzero(relative > 0)
    if places.size > LEAST_CERTAIN:  # sort no more than needed
        few = digits[places]
        limit = np.partition(few, LEAST_CERTAIN - 1)[LEAST_CERTAIN - 1]
        tied = places[few == limit]
        if tied.size > LEAST_CERTAIN:
            least = np.partition(relative[tied], -LEAST_CERTAIN)[-LEAST_CERTAIN]
            tied = tied[relative[tied] >= least]
        places = np.concatenate([places[few < limit], tied])
    return places[np.lexsort((places, -relative[places], digits[places]))][:LEAST_CERTAIN]


def _text(value: Any) -> str:  # noqa: ANN401 - a key of any type
    return "" if value is None else str(value)
