"""Where the sampled points of an integral lie: what to plot its coefficients against."""

from __future__ import annotations

import hashlib
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from numpy.typing import NDArray

from loopint.pipeline.rounded import Rounded
from loopint.report.errors import ReportError

if TYPE_CHECKING:
    from collections.abc import Mapping

    from loopint.pipeline.config import IntegralConfig, RunConfig
    from loopint.pipeline.expressions import Expression

MOST_CURVES = 8
Real = NDArray[np.float64]


@dataclass
class Scan:
    """The sampled points of one integral.

    Attributes
    ----------
    label, abscissa
        What goes along the horizontal axis: p^2, or a mass if p^2 is the same everywhere.
    parameters
        The other columns that vary, by name.
    thresholds
        The places of "threshold" and "pseudothreshold" on the abscissa for each sampled point;
        empty if a mass is complex or the abscissa is not p^2.
    """

    label: str
    abscissa: Real
    parameters: dict[str, Real] = field(default_factory=dict)
    thresholds: dict[str, Real] = field(default_factory=dict)

    def curves(self) -> list[NDArray[np.intp]] | None:
        """Return the places of each set of parameters, by rising abscissa; None if too many."""
        if not self.parameters:
            return [np.argsort(self.abscissa, kind="stable")]
        table = np.stack(list(self.parameters.values()), axis=1)
        sets, which = np.unique(table, axis=0, return_inverse=True)
        if len(sets) > MOST_CURVES:
            return None
        members = (np.flatnonzero(which.ravel() == n) for n in range(len(sets)))
        return [m[np.argsort(self.abscissa[m], kind="stable")] for m in members]

    def parameter_sets(self, curves: list[NDArray[np.intp]]) -> str:
        """Name the parameters of each curve, in their order."""
        first = [c[0] for c in curves]
        if len(self.parameters) == 1:
            ((name, values),) = self.parameters.items()
            return f"{name} = {', '.join(f'{values[n]:.6g}' for n in first)}"
        each = (", ".join(f"{k} = {v[n]:.6g}" for k, v in self.parameters.items()) for n in first)
        return "; ".join(each)


def find_scans(
    config: RunConfig, inputs: Mapping[str, str], rows: NDArray[np.intp]
) -> dict[str, Scan]:
    """Read the points of the sampled rows.

    Parameters
    ----------
    inputs
        Files of the points and their SHA-256.
    rows
        The sampled source rows, ascending.

    Returns
    -------
    dict
        By name of the result; without those that do not depend on the row.

    Raises
    ------
    ReportError
        If a file is not what the run has read.
    OSError, pyarrow.ArrowException
        If it cannot be read.
    """
    mu_squared = config.conventions.mu_squared
    expressions = [e for i in config.integrals for e in i.expressions().values()] + [mu_squared]
    names = sorted({column for e in expressions for column in e.columns})
    table = _sampled_points(config, inputs, names, rows)
    columns = {name: _as_doubles(table, name) for name in names}
    found = {}
    for entry in config.integrals:
        scan = _scan(entry, mu_squared, columns, rows.size)
        if scan is not None:
            found.update(dict.fromkeys(entry.results, scan))
    return found


def _scan(
    entry: IntegralConfig, mu_squared: Expression, columns: Mapping[str, Rounded], rows: int
) -> Scan | None:
    expressions = entry.expressions()
    varying = ((k, e, _values(e, columns, rows)) for k, e in expressions.items())
    key, expression, values = next((v for v in varying if _varies(v[2])), ("", None, None))
    if expression is None or values is None:
        return None
    others = {c for e in (*expressions.values(), mu_squared) for c in e.columns}
    if len(expression.columns) == 1:
        others -= expression.columns
    if len(others | expression.columns) == 1:
        others = set()  # everything follows from one column
    parameters = {c: columns[c].value for c in sorted(others) if _varies(columns[c].value)}
    label = key if expression.text == key else f"{key} = {expression.text}"
    scan = Scan(label, values, parameters)
    if key == "p_squared":
        scan.thresholds = _thresholds(entry, columns, rows)
    return scan


def _thresholds(
    entry: IntegralConfig, columns: Mapping[str, Rounded], rows: int
) -> dict[str, Real]:
    expressions, masses = entry.expressions(), []
    for squared, mass, width in entry.mass_keys:
        if width in expressions or f"Im {squared}" in expressions:
            return {}
        values = _values(expressions[squared if squared in expressions else mass], columns, rows)
        with np.errstate(invalid="ignore"):
            masses.append(np.sqrt(values) if squared in expressions else values)
    if len(masses) != 2:
        return {}
    one, two = masses
    found = {"threshold": (one + two) ** 2, "pseudothreshold": (one - two) ** 2}
    found["pseudothreshold"][(one == two) | (one * two == 0)] = np.nan  # p^2 = 0, or the same
    return {name: values for name, values in found.items() if np.isfinite(values).any()}


def _values(expression: Expression, columns: Mapping[str, Rounded], rows: int) -> Real:
    """Evaluate in floating point, for a plot."""
    found = expression.compute(columns)
    return (found if isinstance(found, Rounded) else Rounded.constant(found, rows)).value


def _varies(values: Real) -> bool:
    return bool(values.size) and not np.all(values == values[0])


def _sampled_points(
    config: RunConfig, inputs: Mapping[str, str], names: list[str], rows: NDArray[np.intp]
) -> pa.Table:
    """Read columns in the sampled rows, if the files are unchanged."""
    pieces, start = [], 0
    for name, digest in inputs.items():
        path = config.beside(Path(name))
        with path.open("rb") as stream:
            unchanged = hashlib.file_digest(stream, "sha256").hexdigest() == digest
        if not unchanged:
            raise ReportError(f"{path} has changed")
        with pq.ParquetFile(path) as file:
            for group in range(file.metadata.num_row_groups):
                count = file.metadata.row_group(group).num_rows
                low, high = np.searchsorted(rows, [start, start + count])
                if low < high:
                    wanted = pa.array(rows[low:high] - start)
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
