"""What a page shows, gathered from the files of a run in one pass and bounded memory."""

from __future__ import annotations

import hashlib
import json
from collections import Counter
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from numpy.typing import NDArray

from loopint.core.errors import LoopintError
from loopint.pipeline.config import RunConfig
from loopint.pipeline.rounded import Rounded
from loopint.pipeline.tables import order_tag

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping, Sequence

    from loopint.pipeline.config import MassKeys
    from loopint.pipeline.expressions import Expression

SAMPLED_POINTS = 2000
SHOWN_REJECTIONS = 50
LEAST_CERTAIN = 10
MOST_THRESHOLDS = 6
LOWEST_DECADE, HIGHEST_DECADE = -40, 0
Real = NDArray[np.float64]


class ReportError(LoopintError):
    """A directory of which no page can be made."""


@dataclass
class Coefficient:
    """One Laurent coefficient over the sampled rows, and the bounds of all rows."""

    order: int
    re: list[Real] = field(default_factory=list)
    im: list[Real] = field(default_factory=list)
    decades: Counter[int] = field(default_factory=Counter)
    exact: int = 0


@dataclass(order=True)
class Uncertain:
    """A coefficient with a large relative bound."""

    relative_bound: float
    key: str = field(compare=False)
    integral: str = field(compare=False)
    order: int = field(compare=False)
    region: str = field(compare=False)
    re: float = field(compare=False)
    im: float = field(compare=False)


@dataclass
class IntegralData:
    """One integral of the table.

    Attributes
    ----------
    coefficients
        By order.
    rows
        The sampled source rows, in the order of the coefficients' values.
    abscissa
        p^2 (m^2 of a tadpole) in the sampled rows, or None if the points are not there any more.
    label
        What the abscissa is.
    marks
        Name and place of (pseudo)thresholds, if the masses are the same in all rows.
    """

    name: str
    coefficients: dict[int, Coefficient]
    abscissa: Real | None = None
    label: str = "row"
    marks: list[tuple[str, float]] = field(default_factory=list)

    @property
    def is_constant(self) -> bool:
        """Whether every coefficient is the same in all sampled rows."""
        parts = [part for c in self.coefficients.values() for part in (c.re, c.im)]
        return all(np.unique(np.concatenate(part)).size <= 1 for part in parts if part)


@dataclass
class RunData:
    """Everything a page shows."""

    directory: Path
    manifest: Mapping[str, Any]
    summary: Mapping[str, Any]
    integrals: list[IntegralData]
    sampled_rows: NDArray[np.intp]
    table_rows: int
    uncertain: list[Uncertain]
    rejections: list[Mapping[str, Any]]
    reasons: list[tuple[str, int]]
    agreed: Counter[int]
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
        rejected = pq.read_table(directory / "rejected.parquet")
        accepted = np.ones(summary["rows_in"], dtype=bool)
        accepted[rejected.column("row").to_numpy()] = False
        rows = np.flatnonzero(accepted)
        chosen = rows[:: max(1, -(-rows.size // SAMPLED_POINTS))]
        integrals = [
            IntegralData(name, {k: Coefficient(k) for k in range(low, high + 1)})
            for name, (low, high) in ((n, i.orders) for n, i in config.results.items())
        ]
        uncertain = _read_table(directory, config, integrals, rows, chosen)
        data = RunData(
            directory,
            manifest,
            summary,
            integrals,
            chosen,
            rows.size,
            uncertain,
            rejected.slice(0, SHOWN_REJECTIONS).to_pylist(),
            Counter(rejected.column("reason").to_pylist()).most_common(10),
            _agreement(directory),
            "",
        )
    except ReportError:
        raise
    except (OSError, pa.ArrowException, KeyError, ValueError, TypeError) as error:
        reason = str(error).strip().splitlines()[0] if str(error).strip() else type(error).__name__
        raise ReportError(
            f"{directory} cannot be read as a run: {reason}; accepted: the directory of a finished "
            "loopint run"
        ) from None
    data.points_note = _add_abscissas(data, config)
    return data


def _json(directory: Path, name: str) -> dict[str, Any]:
    path = directory / name
    try:
        found = json.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError:
        raise ReportError(
            f"{path} does not exist; accepted: the directory of a finished loopint run"
        ) from None
    except (OSError, ValueError) as error:
        raise ReportError(f"{path} cannot be read: {error}; accepted: a file of a run") from None
    if not isinstance(found, dict):
        raise ReportError(f"{path} is not an object; accepted: a file that loopint run wrote")
    return found


# The table --------------------------------------------------------------------------------------


def _tables(directory: Path) -> Iterator[pa.Table]:
    parts = sorted((directory / "table").glob("part-*.parquet"))
    for part in parts:
        with pq.ParquetFile(part) as file:
            for group in range(file.metadata.num_row_groups):
                yield file.read_row_group(group)


def _read_table(
    directory: Path,
    config: RunConfig,
    integrals: list[IntegralData],
    rows: NDArray[np.intp],
    chosen: NDArray[np.intp],
) -> list[Uncertain]:
    """Fill the coefficients; return the least certain ones."""
    key = config.points.key or "row"
    is_chosen = np.zeros((rows.max() + 1) if rows.size else 0, dtype=bool)
    is_chosen[chosen] = True
    seen: Counter[tuple[str, int]] = Counter()
    worst: list[Uncertain] = []
    for table in _tables(directory):
        for one in integrals:
            for order, coefficient in one.coefficients.items():
                part = _coefficient_columns(table, config.output.layout, one.name, order, key)
                if part is None:
                    continue
                keys, re, im, re_bound, im_bound, regions = part
                start = seen[one.name, order]
                seen[one.name, order] += re.size
                mask = is_chosen[rows[start : start + re.size]]
                coefficient.re.append(re[mask])
                coefficient.im.append(im[mask])
                relative = _relative(re, im, re_bound, im_bound)
                coefficient.exact += int((relative == 0).sum())
                coefficient.decades.update(_decades(relative[relative > 0]))
                places = _largest(relative)
                worst += [
                    Uncertain(
                        float(relative[i]),
                        str(keys[i].as_py()),
                        one.name,
                        order,
                        str(regions[i].as_py()),
                        float(re[i]),
                        float(im[i]),
                    )
                    for i in places
                    if relative[i] > 0
                ]
        worst = sorted(worst, reverse=True)[:LEAST_CERTAIN]
    return worst


def _coefficient_columns(
    table: pa.Table, layout: str, name: str, order: int, key: str
) -> tuple[pa.ChunkedArray, Real, Real, Real, Real, pa.ChunkedArray] | None:
    """Return key, parts, bounds and region of one coefficient."""
    columns = ("re", "im", "re_bound", "im_bound")
    if layout == "wide":
        prefix = f"{name}_{order_tag(order)}_"
        found = [table.column(prefix + column).to_numpy() for column in columns]
        return (table.column(key), *found, table.column(f"{name}_region"))
    integral = np.asarray(table.column("integral").to_pylist())
    lines = np.flatnonzero((integral == name) & (table.column("order").to_numpy() == order))
    if not lines.size:
        return None
    part = table.take(pa.array(lines))
    found = [part.column(column).to_numpy() for column in columns]
    return (part.column(key), *found, part.column("region"))


def _decades(relative: Real) -> dict[int, int]:
    """Count numbers by the power of ten above them."""
    decades = np.ceil(np.log10(relative))
    clipped = np.clip(decades, LOWEST_DECADE, HIGHEST_DECADE).astype(np.intp) - LOWEST_DECADE
    counts = np.bincount(clipped)
    return {int(n) + LOWEST_DECADE: int(counts[n]) for n in np.flatnonzero(counts)}


def _largest(values: Real) -> list[int]:
    """Return the places of the largest numbers, the first of equal ones first."""
    if values.size > LEAST_CERTAIN:
        least = np.partition(values, -LEAST_CERTAIN)[-LEAST_CERTAIN]
        candidates = np.flatnonzero(values >= least)
    else:
        candidates = np.arange(values.size)
    order = np.argsort(-values[candidates], kind="stable")[:LEAST_CERTAIN]
    return [int(place) for place in candidates[order]]


def _relative(re: Real, im: Real, re_bound: Real, im_bound: Real) -> Real:
    """Return bound / |value|, 0 where exact."""
    with np.errstate(all="ignore"):
        bound, size = np.hypot(re_bound, im_bound), np.hypot(re, im)
        found = np.where(bound == 0, 0.0, bound / size)
    return np.where(np.isnan(found), 1.0, np.minimum(found, 1.0))


def _agreement(directory: Path) -> Counter[int]:
    """Count the cross-checked coefficients by digits of agreement."""
    found: Counter[int] = Counter()
    column = pq.read_table(directory / "cross_check.parquet", columns=["agreed_digits"])
    for digits in column.column(0).to_pylist():
        if digits is not None:
            found[min(digits, -LOWEST_DECADE)] += 1
    return found


# The points -------------------------------------------------------------------------------------


def _add_abscissas(data: RunData, config: RunConfig) -> str:
    """Find p^2 in the sampled rows; return what a reader should know if it is not there."""
    try:
        table = _sampled_points(data, config)
    except (OSError, pa.ArrowException, ReportError) as error:
        return f"The points could not be read ({error}); curves are drawn over the row number."
    for entry in config.integrals:
        expressions = entry.expressions()
        wanted = "p_squared" if "p_squared" in expressions else entry.mass_keys[0].squared
        if wanted not in expressions:
            wanted = entry.mass_keys[0].mass
        expression = expressions[wanted]
        if not expression.columns:
            continue  # the same in every row
        label = wanted if expression.text == wanted else f"{wanted} = {expression.text}"
        values, marks = _values(expression, table), _marks(expressions, entry.mass_keys, table)
        for one in data.integrals:
            if one.name in entry.results:
                one.abscissa, one.label, one.marks = values, label, marks
    return ""


def _sampled_points(data: RunData, config: RunConfig) -> pa.Table:
    """Read the columns of the expressions in the sampled rows, if the files are unchanged."""
    names = sorted(
        {c for i in config.integrals for e in i.expressions().values() for c in e.columns}
    )
    pieces, start = [], 0
    for name, digest in data.manifest["inputs"].items():
        path = config.beside(Path(name))
        with path.open("rb") as stream:
            unchanged = hashlib.file_digest(stream, "sha256").hexdigest() == digest
        if not unchanged:
            raise ReportError(f"{path} has changed")
        with pq.ParquetFile(path) as file:
            for group in range(file.metadata.num_row_groups):
                count = file.metadata.row_group(group).num_rows
                inside = (data.sampled_rows >= start) & (data.sampled_rows < start + count)
                if inside.any():
                    wanted = pa.array(data.sampled_rows[inside] - start)
                    pieces.append(file.read_row_group(group, names).take(wanted))
                start += count
    return pa.concat_tables(pieces) if pieces else pa.table({name: [] for name in names})


def _as_doubles(table: pa.Table, name: str) -> Rounded:
    column = table.column(name)
    if pa.types.is_dictionary(column.type):
        column = column.cast(column.type.value_type)
    if pa.types.is_string(column.type) or pa.types.is_large_string(column.type):
        values = np.array([_number(text) for text in column.to_pylist()], dtype=np.float64)
    else:
        values = column.cast(pa.float64(), safe=False).to_numpy(zero_copy_only=False)
    return Rounded.of(np.asarray(values, dtype=np.float64))


def _number(text: str | None) -> float:
    try:
        top, _, bottom = (text or "nan").partition("/")
        return float(top) / float(bottom or 1)
    except (ValueError, ZeroDivisionError):
        return float("nan")


def _marks(
    expressions: Mapping[str, Expression], keys: Sequence[MassKeys], table: pa.Table
) -> list[tuple[str, float]]:
    """Return the (pseudo)thresholds of the sampled rows, if the masses take few values."""
    if len(keys) != 2 or table.num_rows == 0:
        return []
    masses = []
    for squared, mass, width in keys:
        if width in expressions or f"Im {squared}" in expressions:
            return []
        values = _values(expressions[squared if squared in expressions else mass], table)
        masses.append(np.sqrt(values) if squared in expressions else values)
    pairs = np.unique(np.stack(masses, axis=1), axis=0)
    pairs = pairs[np.isfinite(pairs).all(axis=1)]
    if not 0 < len(pairs) <= MOST_THRESHOLDS:
        return []
    found = [("threshold", float(a + b) ** 2) for a, b in pairs]
    return found + [("pseudothreshold", float(a - b) ** 2) for a, b in pairs if a * b * (a - b)]


def _values(expression: Expression, table: pa.Table) -> Real:
    """Evaluate in floating point, for a plot."""
    found = expression.compute({name: _as_doubles(table, name) for name in expression.columns})
    if not isinstance(found, Rounded):
        found = Rounded.constant(found, table.num_rows)
    return found.value
