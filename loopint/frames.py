"""`loopint.evaluate`: a table of points in, the table of a run out, without a config file."""

from __future__ import annotations

import math
import tempfile
from collections.abc import Mapping, Sequence
from decimal import Decimal
from fractions import Fraction
from pathlib import Path
from typing import Any

import pyarrow as pa
import pyarrow.parquet as pq
from pydantic import ValidationError

from loopint.core.errors import InputError
from loopint.pipeline.chunks import RowReader, evaluate_block, open_run
from loopint.pipeline.config import RunConfig
from loopint.pipeline.config_messages import explain
from loopint.pipeline.errors import ConfigError

ROW_REASONS = "rejected"


def evaluate(
    points: Any,  # noqa: ANN401 - a pandas frame, an Arrow table or a mapping
    integrals: Sequence[Mapping[str, Any]],
    *,
    key: str | None = None,
    layout: str = "wide",
    digits: int = 16,
    mu_squared: object = 1,
    propagator_sign: str = "minkowski",
    measure: str = "msbar",
    snap_tolerance: object = 0,
    on_error: str = "reject",
) -> Any:  # noqa: ANN401
    """Evaluate integrals at a table of points, as `loopint run` does.

    Parameters
    ----------
    points
        A pandas DataFrame, an Arrow table (anything `pyarrow.table` takes), or a mapping of column
        names to sequences.  Numbers are exact: floats by their binary value, Decimal, Fraction and
        strings ("0.1", "1/3") as written.
    integrals
        For each integral the keys of `[[integral]]`: name, family, powers, dimension, orders,
        derivatives, p_squared, m1_squared or m1 and width1, ...; a kinematic variable is a
        number, a column, or arithmetic on columns.
    key
        A column carried through; by default the table has the column `row`.
    layout
        "wide" (a line per point) or "long" (a line per point, integral and order).
    digits, mu_squared, propagator_sign, measure, snap_tolerance
        As in a config.
    on_error
        "reject" leaves rows out that cannot be evaluated, "raise" raises for the first.

    Returns
    -------
    pandas.DataFrame or pyarrow.Table
        A frame for a frame, otherwise a table; columns as documented for `loopint run`.  Rows left
        out are in `frame.attrs["rejected"]`, or in the schema metadata under `rejected`, as text.

    Raises
    ------
    InputError, ConfigError
        For points or keys that cannot be used, or with `on_error="raise"` a row.

    Examples
    --------
    >>> loop = {"name": "B", "family": "bubble", "p_squared": "s", "m1": 1, "m2": "m"}
    >>> table = evaluate({"s": [5.0, "9"], "m": ["1/2", 2]}, [loop], key="s")
    >>> table.column("B_region").to_pylist()
    ['above_threshold', 'threshold']
    """
    if on_error not in {"reject", "raise"}:
        raise InputError(f'on_error = {on_error!r}; accepted: "reject" or "raise"')
    table = _as_table(points)
    is_frame = hasattr(points, "attrs") and hasattr(points, "iloc")
    with tempfile.TemporaryDirectory() as folder:
        file = Path(folder) / "points.parquet"
        pq.write_table(table, file)
        raw: dict[str, Any] = {
            "points": {"file": file, **({} if key is None else {"key": key})},
            "integral": [_exact_keys(one) for one in integrals],
            "conventions": {
                "mu_squared": _exact_text(mu_squared),
                "propagator_sign": propagator_sign,
                "measure": measure,
            },
            "accuracy": {"digits": digits, "snap_tolerance": _decimal(snap_tolerance)},
            "cross_check": {"fraction": "none"},
            "output": {"directory": Path(folder) / "out", "layout": layout},
        }
        result, rejected = _evaluated(_config(raw))
    if rejected and on_error == "raise":
        row, integral, reason = rejected[0]
        raise InputError(f"row {row}: integral {integral}: {reason}")
    if is_frame:
        frame = result.to_pandas()
        frame.attrs[ROW_REASONS] = rejected
        return frame
    if rejected:
        metadata = {**(result.schema.metadata or {}), ROW_REASONS: str(rejected)}
        result = result.replace_schema_metadata(metadata)
    return result


def _config(raw: dict[str, Any]) -> RunConfig:
    try:
        return RunConfig.model_validate(raw)
    except ValidationError as error:
        raise ConfigError(explain(error, raw, RunConfig)) from None


def _evaluated(config: RunConfig) -> tuple[pa.Table, list[tuple[int, str, str]]]:
    """Return the table, and row, integral and reason of what was left out."""
    opened = open_run(config)
    reader = RowReader(opened)
    tables, rejected = [], []
    for index in range(opened.chunk_count):
        start, count = opened.chunk_bounds(index)
        block = reader.read(start, count)
        results = evaluate_block(config, opened, block)
        accepted = pa.array(results.accepted, pa.int64())
        tables.append(opened.layout.build(block.keys.take(accepted), results.integrals))
        rejected += [
            (start + place, error.integral, error.reason) for place, error in results.refused
        ]
    return pa.concat_tables(tables), rejected


def _as_table(points: Any) -> pa.Table:  # noqa: ANN401
    """Return an Arrow table whose numbers are exact."""
    if isinstance(points, pa.Table):
        return points
    if hasattr(points, "iloc"):
        points = {str(name): points[name].tolist() for name in points.columns}
    if isinstance(points, Mapping):
        columns = {str(name): _column(name, values) for name, values in points.items()}
        lengths = {name: len(column) for name, column in columns.items()}
        if len(set(lengths.values())) > 1:
            found = ", ".join(f"{name} {length}" for name, length in lengths.items())
            raise InputError(f"the columns have different lengths ({found}); accepted: one length")
        return pa.table(columns)
    try:
        return pa.table(points)
    except (TypeError, ValueError, pa.ArrowException):
        raise InputError(
            f"points of type {type(points).__name__}; accepted: a pandas DataFrame, an Arrow table "
            "or a mapping of columns"
        ) from None


def _column(name: object, values: Any) -> pa.Array:  # noqa: ANN401
    try:
        listed = values.tolist() if hasattr(values, "tolist") else list(values)
    except TypeError:
        raise InputError(f"column {name} is {values!r}; accepted: a sequence of numbers") from None
    kinds = {type(value) for value in listed if value is not None}
    if kinds <= {float} or kinds <= {int} or kinds <= {str} or kinds <= {bool}:
        return pa.array(listed)
    return pa.array([None if value is None else _exact_text(value) for value in listed])


def _exact_text(value: object) -> Any:  # noqa: ANN401
    """Write a number so that it is read back exactly; other values are left alone."""
    if isinstance(value, float) and math.isfinite(value):
        top, bottom = value.as_integer_ratio()
        return f"{top}/{bottom}"
    if isinstance(value, Fraction | Decimal | int | float) and not isinstance(value, bool):
        return str(value)
    return value


def _exact_keys(integral: Mapping[str, Any]) -> dict[str, Any]:
    """Return the keys of an integral with exact numbers for floats."""
    kept = {"powers", "dimension", "orders", "derivatives", "name", "family"}
    found: dict[str, Any] = {}
    for key, value in integral.items():
        if key in kept:
            found[key] = list(value) if isinstance(value, tuple) else value
        elif isinstance(value, complex):
            found[key] = [_exact_text(value.real), _exact_text(value.imag)]
        elif isinstance(value, list | tuple):
            found[key] = [_exact_text(part) for part in value]
        else:
            found[key] = _exact_text(value)
    return found


def _decimal(value: object) -> Decimal:
    try:
        return Decimal(str(value))
    except ArithmeticError:
        raise InputError(f"snap_tolerance = {value!r}; accepted: a number") from None
