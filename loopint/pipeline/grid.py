"""Makes points from axes: exact numbers first, rounded only when they are written."""

from __future__ import annotations

import hashlib
import json
import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import partial
from typing import TYPE_CHECKING

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from flint import arb, fmpq
from numpy.typing import NDArray

from loopint.core.errors import InputError
from loopint.core.precision import working_precision
from loopint.pipeline.config import config_as_dict
from loopint.pipeline.errors import ConfigError, unknown_name
from loopint.pipeline.grid_config import MOST_ROWS
from loopint.pipeline.rounded import finite_double
from loopint.pipeline.run_directory import replacing

if TYPE_CHECKING:
    from pathlib import Path

    from loopint.pipeline.config import GridRunConfig
    from loopint.pipeline.expressions import Expression
    from loopint.pipeline.grid_config import AxisConfig

ROWS_AT_A_TIME = 200_000
DEFAULT_CLOSEST = fmpq(1, 10**12)
KEY = "point"
Real = NDArray[np.float64]


@dataclass(frozen=True)
class Axis:
    """The values of one column.

    Attributes
    ----------
    exact
        The exact values; None where they are doubles anyway (irrational spacings, random).
    values
        The values as doubles.
    """

    name: str
    exact: list[fmpq] | None
    values: Real
    as_text: bool

    def array(self, index: NDArray[np.intp]) -> pa.Array:
        """Return some of the values as they are written."""
        if self.as_text and self.exact is not None:
            return pa.array([str(self.exact[i]) for i in index.tolist()], pa.string())
        return pa.array(self.values[index])


@dataclass(frozen=True)
class Grid:
    """What was written.

    Attributes
    ----------
    thresholds
        Name and place of those thresholds that no axis moves.
    """

    path: Path
    rows: int
    key: str
    axes: tuple[Axis, ...]
    constants: dict[str, fmpq]
    thresholds: dict[str, float]


def write_grid(config: GridRunConfig, *, overwrite: bool = False) -> Grid:
    """Write the points of `[grid]` to the file of `[points]`.

    Raises
    ------
    ConfigError
        If the grid cannot be made, or the file exists and does not hold this grid.
    """
    grid = config.grid
    where = f"{config.where}[grid]"
    constants = _constants(grid.constants, where)
    thresholds = {
        name: _number(value, constants, f"{where} thresholds {name}")
        for name, value in grid.thresholds.items()
        if value.columns <= constants.keys()
    }
    random = np.random.default_rng(grid.seed)
    axes = tuple(
        _axis(axis, constants, thresholds, random, f'{config.where}[[grid.axis]] "{axis.name}"')
        for axis in grid.axes
    )
    rows = _row_count([axis.values.size for axis in axes], grid.mode, where)
    key = config.points.key or KEY
    if key in constants or any(axis.name == key for axis in axes):
        raise ConfigError(f"{where}: {key} is a column and the key; accepted: two names")
    identity = hashlib.sha256(
        json.dumps(config_as_dict(config)["grid"], sort_keys=True).encode()
    ).hexdigest()
    path = config.points.file
    _check_target(path, identity, overwrite)
    path.parent.mkdir(parents=True, exist_ok=True)
    fields = [pa.field(key, pa.int64())]
    fields += [pa.field(a.name, pa.string() if _text(a) else pa.float64()) for a in axes]
    fields += [pa.field(name, pa.string()) for name in constants]
    schema = pa.schema(fields, metadata={"loopint_grid": identity})
    blocks = partial(_indices, [axis.values.size for axis in axes], grid.mode, rows)
    with replacing(path) as temporary, pq.ParquetWriter(temporary, schema) as writer:
        start = 0
        for index in blocks():
            count = index[0].size
            columns = [pa.array(np.arange(start + 1, start + count + 1))]
            columns += [axis.array(i) for axis, i in zip(axes, index, strict=True)]
            columns += [pa.array([str(value)] * count) for value in constants.values()]
            writer.write_table(pa.Table.from_arrays(columns, schema=schema))
            start += count
    places = {name: float(arb(value).mid()) for name, value in thresholds.items()}
    return Grid(path, rows, key, axes, constants, places)


def _text(axis: Axis) -> bool:
    return axis.as_text and axis.exact is not None


def _check_target(path: Path, identity: str, overwrite: bool) -> None:
    """Refuse to replace a file that is not this grid."""
    if overwrite or not path.exists():
        return
    try:
        metadata = pq.read_schema(path).metadata or {}
    except MemoryError:
        raise
    except (OSError, pa.ArrowException):
        metadata = {}
    if metadata.get(b"loopint_grid") != identity.encode():
        raise ConfigError(
            f"{path} exists and does not hold this grid; accepted: another [points] file, or "
            "--overwrite"
        )


def _row_count(sizes: Sequence[int], mode: str, where: str) -> int:
    if mode == "zip" and len(set(sizes)) > 1:
        raise ConfigError(
            f'{where} mode = "zip" has axes of {", ".join(map(str, sizes))} values; accepted: one '
            "length"
        )
    rows = sizes[0] if mode == "zip" else math.prod(sizes)
    if rows > MOST_ROWS:
        raise ConfigError(f"{where} has {rows} rows; accepted: up to {MOST_ROWS}")
    return rows


def _indices(sizes: Sequence[int], mode: str, rows: int) -> Iterator[list[NDArray[np.intp]]]:
    """Yield the places of the values of each axis, some rows at a time, the last axis fastest."""
    for start in range(0, rows, ROWS_AT_A_TIME):
        row = np.arange(start, min(start + ROWS_AT_A_TIME, rows))
        if mode == "zip":
            yield [row] * len(sizes)
        else:
            yield list(np.unravel_index(row, sizes))


# One axis ---------------------------------------------------------------------------------------


def _axis(
    config: AxisConfig,
    constants: Mapping[str, fmpq],
    thresholds: Mapping[str, fmpq],
    random: np.random.Generator,
    where: str,
) -> Axis:
    def number(value: Expression | None, key: str) -> fmpq:
        assert value is not None  # the config has checked it
        return _number(value, constants, f"{where} {key}")

    if config.spacing == "values":
        return _exact(config, [number(value, "values") for value in config.values], where)
    low, high = number(config.start, "from"), number(config.stop, "to")
    count = config.count or 1
    if low >= high:
        raise ConfigError(f"{where} from = {low} is not below to = {high}; accepted: from < to")
    match config.spacing:
        case "linear":
            step = (high - low) / max(count - 1, 1)
            return _exact(config, [low + step * i for i in range(count)], where)
        case "clustered":
            return _exact(config, _clustered(config, low, high, count, thresholds, where), where)
        case "random":
            return _random(config, low, high, random, where)
        case "chebyshev":
            angle = (2 * np.arange(count)[::-1] + 1) * np.pi / (2 * count)
            a, b = finite_double(low, where), finite_double(high, where)
            return Axis(config.name, None, (a + b) / 2 + (b - a) / 2 * np.cos(angle), False)
    a, b = _logarithms(low, high, where)
    return Axis(config.name, None, np.exp(np.linspace(a, b, count)), False)


def _exact(config: AxisConfig, values: list[fmpq], where: str) -> Axis:
    doubles = np.array([finite_double(value, where) for value in values])
    return Axis(config.name, values, doubles, config.type == "string")


def _random(
    config: AxisConfig, low: fmpq, high: fmpq, random: np.random.Generator, where: str
) -> Axis:
    count = config.count or 1
    if config.scale == "linear":
        values = random.uniform(finite_double(low, where), finite_double(high, where), count)
    else:
        values = np.exp(random.uniform(*_logarithms(low, high, where), count))
    return Axis(config.name, None, values, False)


def _clustered(
    config: AxisConfig,
    low: fmpq,
    high: fmpq,
    count: int,
    thresholds: Mapping[str, fmpq],
    where: str,
) -> list[fmpq]:
    """Return an even grid, and points that approach each threshold geometrically on both sides.

    Half of the points are even; each threshold is hit exactly, and its neighbours go from the
    relative distance `closest` to a tenth of the range.
    """
    for name in config.around:
        if name not in thresholds:
            raise ConfigError(f"{where} around: {name} {unknown_name(name, thresholds)}")
    closest = DEFAULT_CLOSEST
    if config.closest is not None:
        closest = config.closest.evaluate({})
    if not 0 < closest < 1:
        raise ConfigError(f"{where} closest = {closest}; accepted: between 0 and 1")
    even = max(2, count // 2)
    step = (high - low) / (even - 1)
    found = {low + step * i for i in range(even)}
    places = [thresholds[name] for name in config.around]
    per_side = max(1, (count - even) // (2 * len(places)))
    widest = (high - low) / 10
    for place in places:
        found.add(place)
        nearest = closest * (abs(place) or high - low)
        with working_precision(64):
            ratio = float((arb(widest) / arb(nearest)).log()) / max(per_side - 1, 1)
        for i in range(per_side):
            distance = nearest * fmpq(*math.exp(min(ratio * i, 700)).as_integer_ratio())
            found |= {place - distance, place + distance}
    return sorted(value for value in found if low <= value <= high)


def _logarithms(low: fmpq, high: fmpq, where: str) -> tuple[float, float]:
    if low <= 0:
        raise ConfigError(f"{where} from = {low} has no logarithm; accepted: a positive number")
    return math.log(finite_double(low, where)), math.log(finite_double(high, where))


def _constants(given: Mapping[str, Expression], where: str) -> dict[str, fmpq]:
    """Evaluate the constants, each in terms of the ones before it."""
    found: dict[str, fmpq] = {}
    for name, value in given.items():
        found[name] = _number(value, found, f"{where} constants {name}")
    return found


def _number(value: Expression, constants: Mapping[str, fmpq], where: str) -> fmpq:
    for name in value.columns:
        if name not in constants:
            raise ConfigError(f"{where}: {name} {unknown_name(name, constants)}")
    try:
        return value.evaluate(constants)
    except InputError as error:
        raise ConfigError(f"{where}: {error}") from None


# A picture --------------------------------------------------------------------------------------

BARS = " .:-=+*#%@"


def picture(axis: Axis, marks: Mapping[str, float], width: int) -> list[str]:
    """Draw how densely the values of an axis lie, with marks below it, as lines of text."""
    values = axis.values
    low, high = float(values.min()), float(values.max())
    if low == high:
        return []
    counts, _ = np.histogram(values, bins=width, range=(low, high))
    top = counts.max()
    scaled = np.ceil(counts / top * (len(BARS) - 1)).astype(int)
    lines = ["".join(BARS[i] for i in scaled)]
    found = sorted(marks.items(), key=lambda mark: mark[1])
    inside = {name: place for name, place in found if low <= place <= high}
    if inside:
        ruler = [" "] * width
        for place in inside.values():
            ruler[min(width - 1, int((place - low) / (high - low) * width))] = "|"
        lines.append("".join(ruler).rstrip())
        lines.append(", ".join(f"| {name} = {place:.6g}" for name, place in inside.items()))
    return lines
