"""Interpolants as files: NAME.parquet holds the numbers, NAME.json everything else."""

from __future__ import annotations

import hashlib
import json
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from loopint.interpolation.interpolant import Interpolant, InterpolantError
from loopint.interpolation.surface import Strip, SurfaceInterpolant

if TYPE_CHECKING:
    import pyarrow as pa

    from loopint.interpolation.interpolant import Complex

FORMAT = 2
ACCEPTED = "accepted: a JSON file that loopint interpolate wrote, with its Parquet file"


def save_interpolant(
    interpolant: Interpolant | SurfaceInterpolant, directory: Path
) -> tuple[Path, Path]:
    """Write both files; return the paths of the JSON file and the Parquet file."""
    import pyarrow as pa  # noqa: PLC0415 - evaluation needs NumPy alone
    import pyarrow.parquet as pq  # noqa: PLC0415

    if isinstance(interpolant, Interpolant):
        columns, details = _curve_columns(interpolant), _curve_details(interpolant)
    else:
        columns, details = _surface_columns(interpolant), _surface_details(interpolant)
    table, text = (directory / f"{interpolant.name}.{end}" for end in ("parquet", "json"))
    pq.write_table(pa.table(columns), table)
    content = {
        "format": FORMAT,
        "name": interpolant.name,
        "integral": interpolant.integral,
        "orders": interpolant.orders,
        "range": interpolant.range,
        "error_bounds": {str(k): v for k, v in interpolant.error_bounds.items()},
        **details,
        "conventions": dict(interpolant.conventions),
        "table": table.name,
        "table_sha256": hashlib.sha256(table.read_bytes()).hexdigest(),
    }
    text.write_text(json.dumps(content, indent=2) + "\n", encoding="utf-8")
    return text, table


def _curve_details(interpolant: Interpolant) -> dict[str, Any]:
    return {"variables": ["p_squared"], "threshold": interpolant.threshold}


def _curve_columns(interpolant: Interpolant) -> dict[str, Any]:
    columns: dict[str, Any] = {
        "left": interpolant.edges[:-1],
        "right": interpolant.edges[1:],
        "centre": interpolant.centres,
        "half": interpolant.halves,
    }
    for order, values in interpolant.coefficients.items():
        columns[f"re_{order}"] = list(values.real)
        columns[f"im_{order}"] = list(values.imag)
    return columns


def _surface_details(interpolant: SurfaceInterpolant) -> dict[str, Any]:
    strip = interpolant.below if interpolant.below.intervals else interpolant.above
    return {
        "variables": ["p_squared", interpolant.mass_name],
        "mass_range": interpolant.mass_range,
        "other_mass": interpolant.other_mass,
        "terms": strip.coefficients[interpolant.orders[0]].shape[2:],
    }


def _surface_columns(interpolant: SurfaceInterpolant) -> dict[str, Any]:
    masses = interpolant.mass_edges
    rows: dict[str, list[Any]] = {
        name: [] for name in ("below", "mass_left", "mass_right", "w_left", "w_right")
    }
    for order in interpolant.orders:
        rows[f"re_{order}"], rows[f"im_{order}"] = [], []
    for strip in (interpolant.below, interpolant.above):
        for i in range(len(masses) - 1):
            for j in range(strip.intervals):
                rows["below"].append(strip is interpolant.below)
                rows["mass_left"].append(masses[i])
                rows["mass_right"].append(masses[i + 1])
                rows["w_left"].append(strip.edges[j])
                rows["w_right"].append(strip.edges[j + 1])
                for order in interpolant.orders:
                    values = strip.coefficients[order][i, j].ravel()
                    rows[f"re_{order}"].append(values.real)
                    rows[f"im_{order}"].append(values.imag)
    return rows


def load_interpolant(path: str | Path) -> Interpolant | SurfaceInterpolant:
    """Load an interpolant that `loopint interpolate` saved.

    Parameters
    ----------
    path
        The JSON file; the Parquet file stands beside it.

    Returns
    -------
    Interpolant or SurfaceInterpolant
        A function of p^2, or of p^2 and a mass.

    Raises
    ------
    InterpolantError
        If the files are not there, damaged, or do not belong together.
    """
    import pyarrow.parquet as pq  # noqa: PLC0415 - evaluation needs NumPy alone

    path = Path(path)
    try:
        content = json.loads(path.read_text(encoding="utf-8"))
        table_path = path.parent / content["table"]
        if content["format"] != FORMAT:
            raise InterpolantError(
                f"{path} has format {content['format']}; accepted: {FORMAT}, which loopint "
                "interpolate writes again"
            )
        if hashlib.sha256(table_path.read_bytes()).hexdigest() != content["table_sha256"]:
            raise InterpolantError(f"{table_path} does not belong to {path}; {ACCEPTED}")
        table = pq.read_table(table_path)
        make = _curve if len(content["variables"]) == 1 else _surface
        return make(content, table)
    except FileNotFoundError as error:
        raise InterpolantError(f"{error.filename} does not exist; {ACCEPTED}") from None
    except (OSError, ValueError, KeyError, TypeError, IndexError, AttributeError) as error:
        raise InterpolantError(f"{path} cannot be loaded: {error}; {ACCEPTED}") from None


def _coefficients(content: dict[str, Any], table: pa.Table) -> dict[int, Complex]:
    return {
        int(k): np.array(table.column(f"re_{k}").to_pylist())
        + 1j * np.array(table.column(f"im_{k}").to_pylist())
        for k in content["orders"]
    }


def _pair(value: list[Any]) -> tuple[float, float]:
    first, second = value
    return float(first), float(second)


def _curve(content: dict[str, Any], table: pa.Table) -> Interpolant:
    left, right = (table.column(name).to_numpy() for name in ("left", "right"))
    coefficients = _coefficients(content, table)
    return Interpolant(
        content["name"],
        content["integral"],
        tuple(coefficients),
        _pair(content["range"]),
        {k: float(content["error_bounds"][str(k)]) for k in coefficients},
        _pair(content["threshold"]),
        np.append(left, right[-1]),
        table.column("centre").to_numpy(),
        table.column("half").to_numpy(),
        coefficients,
        content["conventions"],
    )


def _surface(content: dict[str, Any], table: pa.Table) -> SurfaceInterpolant:
    coefficients = _coefficients(content, table)
    side = np.array(table.column("below").to_pylist(), dtype=bool)
    columns = {
        name: table.column(name).to_numpy()
        for name in ("mass_left", "mass_right", "w_left", "w_right")
    }
    masses = np.append(np.unique(columns["mass_left"]), columns["mass_right"].max())
    strips = []
    for chosen in (side, ~side):
        left, right = (columns[name][chosen] for name in ("w_left", "w_right"))
        edges = np.append(np.unique(left), right.max()) if left.size else np.zeros(0)
        shape = (len(masses) - 1, max(len(edges) - 1, 0), *content["terms"])
        strips.append(
            Strip(edges, {k: values[chosen].reshape(shape) for k, values in coefficients.items()})
        )
    return SurfaceInterpolant(
        content["name"],
        content["integral"],
        tuple(coefficients),
        _pair(content["range"]),
        str(content["variables"][1]),
        _pair(content["mass_range"]),
        {k: float(content["error_bounds"][str(k)]) for k in coefficients},
        _pair(content["other_mass"]),
        masses,
        strips[0],
        strips[1],
        content["conventions"],
    )
