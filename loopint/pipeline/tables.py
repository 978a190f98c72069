"""Result tables: long and wide layout, their columns, and how they are written.

float64 columns hold the number nearest to the proven ball; the bound columns bound the distance
from the true value, rounding included.
"""

from __future__ import annotations

import json
import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.csv
import pyarrow.parquet as pq

from loopint.core.numbers import (
    Ball,
    decimal_string,
    float_with_bound,
    imaginary_part,
    real_part,
)
from loopint.core.precision import working_precision
from loopint.pipeline.errors import ConfigError
from loopint.pipeline.run_directory import file_sha256, replacing

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence
    from pathlib import Path

    from loopint.pipeline.evaluate import Computed

TINY = 1e-290
FLOAT_DIGITS = 17  # a float64 holds no more
DECIMAL_GUARD = 2
ROWS_PER_GROUP = 100_000

COLUMN_MEANINGS = {
    "row": "0-based row of the source, counted over all its files",
    "integral": "name of the integral in the config",
    "order": "power of epsilon",
    "re": "real part, the nearest float64; with method double a float64 within re_bound",
    "im": "imaginary part, as re; exactly 0 where it vanishes",
    "re_bound": "|true real part - re| is at most this: proven, rounding included",
    "im_bound": "|true imaginary part - im| is at most this: proven, rounding included",
    "re_decimal": "real part as a decimal string; re_decimal + i im_decimal is within "
    "10^-n |value| of the true value, n the smaller of the digits asked for and `digits`",
    "im_decimal": "imaginary part as a decimal string, see re_decimal",
    "digits": "proven digits of the complex coefficient before rounding to float64: "
    "|error| <= 10^-digits |value|; null if the coefficient is exact",
    "region": "where the point lies, decided exactly; `_snapped` if it was moved there on request",
    "method": "how the integral was computed",
    "status": "ok; below_digits: max_precision_bits (or the range of float64) came first, "
    "the bounds hold all the same; timed_out: time_limit came first, no number",
}


@dataclass(frozen=True, slots=True)
class Written:
    """A Laurent coefficient as it stands in a table."""

    re: float
    im: float
    re_bound: float
    im_bound: float
    re_decimal: str | None
    im_decimal: str | None
    digits: int | None

    def as_tuple(self) -> tuple[Any, ...]:
        """Return the fields in their order."""
        return (
            self.re,
            self.im,
            self.re_bound,
            self.im_bound,
            self.re_decimal,
            self.im_decimal,
            self.digits,
        )

    @property
    def is_finite(self) -> bool:
        """Whether both parts are within the range of float64."""
        return math.isfinite(self.re) and math.isfinite(self.im)


@dataclass(frozen=True, slots=True)
class WrittenIntegral:
    """One integral of one row as it stands in a table; one number for each order."""

    name: str
    lowest_order: int
    numbers: tuple[Written, ...]
    region: str
    method: str
    status: str
    precision_bits: int


def write_integral(computed: Computed, digits: int) -> WrittenIntegral:
    """Round an evaluated integral for a table.

    A coefficient beyond the range of float64 is below the digits asked for, unless decimal strings
    carry it.
    """
    evaluation = computed.evaluation
    lowest, highest = evaluation.orders
    numbers = tuple(written(evaluation.series[k], digits) for k in range(lowest, highest + 1))
    beyond = digits <= FLOAT_DIGITS and not all(number.is_finite for number in numbers)
    return WrittenIntegral(
        computed.name,
        lowest,
        numbers,
        evaluation.region,
        evaluation.method,
        "below_digits" if beyond and not evaluation.timed_out else evaluation.status,
        evaluation.precision_bits,
    )


def written(ball: Ball, digits: int) -> Written:
    """Round a proven ball for a table; decimal strings are made if digits > 17."""
    real, imaginary = real_part(ball), imaginary_part(ball)
    re, re_bound = float_with_bound(real)
    im, im_bound = float_with_bound(imaginary)
    proven = proven_digits(ball)
    re_decimal = im_decimal = None
    if digits > FLOAT_DIGITS:
        shown = max(1, digits if proven is None else min(digits, proven)) + DECIMAL_GUARD
        re_decimal, im_decimal = decimal_string(real, shown), decimal_string(imaginary, shown)
    return Written(re, im, re_bound, im_bound, re_decimal, im_decimal, proven)


def proven_digits(ball: Ball) -> int | None:
    """Return n such that 1.1 |error| <= 10^-n |value| for every number in the ball.

    The 10 % leave room for the rounding to n + 2 decimal digits.  None if the ball is exact, 0 if
    nothing is proven.

    Examples
    --------
    >>> from flint import arb
    >>> proven_digits(arb(2, 1e-9)), proven_digits(arb(2))
    (9, None)
    """
    if ball.is_exact():
        return None
    if not ball.is_finite():
        return 0
    size, radius = ball.abs_lower(), ball.rad()
    if not size > 0:
        return 0
    small, large = float(radius), float(size)
    if small > TINY and TINY < large < 1 / TINY:
        decades = math.log10(1.1 * small / large)
    else:  # beyond the range of float64
        with working_precision(64):
            mantissa, exponent = map(int, (11 * radius / (10 * size)).upper().man_exp())
        decades = (math.log2(mantissa) + exponent) * math.log10(2)
    return min(max(math.floor(-decades - 1e-9), 0), 2**15 - 1)


class IntegralColumns:
    """The results of one integral in the rows of a chunk, column by column.

    This is where evaluators and tables meet.  An evaluator of single rows calls `append`; one that
    evaluates whole columns fills the attributes with NumPy or Arrow arrays instead.

    Parameters
    ----------
    name
        Name of the integral.
    orders
        Lowest and highest order.

    Attributes
    ----------
    numbers
        For each field of `Written` the columns of the orders, lowest first.
    region, method, status
        One entry per row.
    precision_bits
        The highest working precision of any row.
    """

    def __init__(self, name: str, orders: tuple[int, int]) -> None:
        self.name = name
        self.orders = range(orders[0], orders[1] + 1)
        self.numbers: dict[str, list[Any]] = {
            field: [[] for _ in self.orders] for field in Written.__slots__
        }
        self._appends = [
            [self.numbers[field][place].append for field in Written.__slots__]
            for place in range(len(self.orders))
        ]
        self.region: Any = []
        self.method: Any = []
        self.status: Any = []
        self.precision_bits = 0

    def append(self, integral: WrittenIntegral) -> None:
        """Add the result of the next row."""
        self.region.append(integral.region)
        self.method.append(integral.method)
        self.status.append(integral.status)
        self.precision_bits = max(self.precision_bits, integral.precision_bits)
        for number, appends in zip(integral.numbers, self._appends, strict=True):
            for append, value in zip(appends, number.as_tuple(), strict=True):
                append(value)

    def counts(self) -> dict[str, dict[str, int]]:
        """Return region -> status -> number of rows."""
        found: dict[str, dict[str, int]] = {}
        groups = pa.table({"region": self.region, "status": self.status}, schema=_GROUPS)
        counted = groups.group_by(["region", "status"], use_threads=False).aggregate(
            [([], "count_all")]
        )
        for group in counted.to_pylist():
            found.setdefault(group["region"], {})[group["status"]] = group["count_all"]
        return found

    def worst_digits(self) -> int | None:
        """Return the smallest number of proven digits, None if every coefficient is exact."""
        smallest = (pc.min(pa.array(column, _DIGITS)).as_py() for column in self.numbers["digits"])
        return min((digits for digits in smallest if digits is not None), default=None)


_DIGITS = pa.int16()
_GROUPS = pa.schema([("region", pa.string()), ("status", pa.string())])


def order_tag(order: int) -> str:
    """Return the name of an order in wide columns: `m1` for eps^-1, `0`, `1`, ..."""
    return f"m{-order}" if order < 0 else str(order)


class TableLayout:
    """The columns of the result table.

    Parameters
    ----------
    layout
        "long": a line per row, integral and order.  "wide": a line per row.
    key
        The key column of the points, or None: then the column `row` counts the source rows.
    integrals
        Name and orders of each integral.
    digits
        The digits asked for.
    metadata
        Goes as JSON under the key `loopint` into the schema; the column meanings are added.
    """

    def __init__(
        self,
        layout: str,
        key: pa.Field | None,
        integrals: Sequence[tuple[str, tuple[int, int]]],
        digits: int,
        metadata: dict[str, Any],
    ) -> None:
        self.layout = layout
        self.key = key_field(key)
        self.integrals = tuple(integrals)
        decimals = ("re_decimal", "im_decimal") if digits > FLOAT_DIGITS else ()
        self._numbers = ("re", "im", "re_bound", "im_bound", *decimals)
        fields = self._long_fields() if layout == "long" else self._wide_fields()
        refuse_clash(self.key, [f.name for f in fields])
        text = json.dumps({**metadata, "layout": layout, "columns": self._meanings()})
        self.schema = pa.schema([self.key, *fields], metadata={"loopint": text})

    def _long_fields(self) -> list[pa.Field]:
        return [
            pa.field("integral", pa.string(), nullable=False),
            pa.field("order", pa.int16(), nullable=False),
            *(_number_field(name, name) for name in self._numbers),
            pa.field("digits", pa.int16()),
            pa.field("region", pa.string(), nullable=False),
            pa.field("method", pa.string(), nullable=False),
            pa.field("status", pa.string(), nullable=False),
        ]

    def _wide_fields(self) -> list[pa.Field]:
        fields = []
        for name, (lowest, highest) in self.integrals:
            fields.append(pa.field(f"{name}_region", pa.string(), nullable=False))
            fields.append(pa.field(f"{name}_status", pa.string(), nullable=False))
            for order in range(lowest, highest + 1):
                fields += [
                    _number_field(f"{name}_{order_tag(order)}_{column}", column)
                    for column in self._numbers
                ]
        return fields

    def _meanings(self) -> dict[str, str]:
        if self.layout == "long":
            names = [f.name for f in self._long_fields()]
            meanings = {name: COLUMN_MEANINGS[name] for name in names}
        else:
            meanings = {f"NAME_{c}": COLUMN_MEANINGS[c] for c in ("region", "status")}
            for column in self._numbers:
                meanings[f"NAME_ORDER_{column}"] = COLUMN_MEANINGS[column]
            meanings["ORDER"] = "power of epsilon; m1 stands for -1"
        if self.key.name == "row":
            meanings["row"] = COLUMN_MEANINGS["row"]
        return meanings

    def columns(self) -> list[IntegralColumns]:
        """Return what `build` takes, still without rows."""
        return [IntegralColumns(name, orders) for name, orders in self.integrals]

    def build(self, keys: pa.Array, integrals: Sequence[IntegralColumns]) -> pa.Table:
        """Return the table of some rows.

        Parameters
        ----------
        keys
            The key of each row.
        integrals
            Their results, in the order of the layout.
        """
        arrange = self._long_arrays if self.layout == "long" else self._wide_arrays
        return pa.Table.from_arrays(arrange(keys, integrals), schema=self.schema)

    def _long_arrays(self, keys: pa.Array, integrals: Sequence[IntegralColumns]) -> list[pa.Array]:
        """Stack the columns of all integrals and orders, then bring the lines of a row together."""
        rows = len(keys)
        names = [one.name for one in integrals for _ in one.orders]
        orders = [order for one in integrals for order in one.orders]
        lines = len(names)
        sorting = pa.array(np.arange(rows * lines).reshape(lines, rows).T.ravel())
        found = {
            self.key.name: keys.take(pa.array(np.repeat(np.arange(rows), lines))),
            "integral": pa.array(names, pa.string()).take(_cycle(lines, rows)),
            "order": pa.array(orders, pa.int16()).take(_cycle(lines, rows)),
        }
        for name in (*self._numbers, "digits"):
            kind = self.schema.field(name).type
            stacked = [_array(column, kind) for one in integrals for column in one.numbers[name]]
            found[name] = pa.concat_arrays(stacked).take(sorting)
        for name in ("region", "method", "status"):
            repeated = [
                _array(getattr(one, name), pa.string()) for one in integrals for _ in one.orders
            ]
            found[name] = pa.concat_arrays(repeated).take(sorting)
        return [found[f.name] for f in self.schema]

    def _wide_arrays(self, keys: pa.Array, integrals: Sequence[IntegralColumns]) -> list[pa.Array]:
        arrays = [keys]
        for one in integrals:
            arrays += [_array(one.region, pa.string()), _array(one.status, pa.string())]
            for place in range(len(one.orders)):
                for name in self._numbers:
                    kind = pa.string() if name.endswith("decimal") else pa.float64()
                    arrays.append(_array(one.numbers[name][place], kind))
        return arrays


def _array(column: Any, kind: pa.DataType) -> pa.Array:  # noqa: ANN401 - list, NumPy or Arrow
    return column.cast(kind) if isinstance(column, pa.Array) else pa.array(column, kind)


def _cycle(length: int, times: int) -> pa.Array:
    """Return 0, 1, ..., length - 1 over and over."""
    return pa.array(np.tile(np.arange(length), times))


def _number_field(name: str, column: str) -> pa.Field:
    kind = pa.string() if column.endswith("decimal") else pa.float64()
    return pa.field(name, kind, nullable=False)


def key_field(key: pa.Field | None) -> pa.Field:
    """Return the field of the key column: the user's, or `row` if there is none."""
    if key is None:
        return pa.field("row", pa.int64(), nullable=False)
    return pa.field(key.name, key.type, key.nullable)


def refuse_clash(key: pa.Field, names: Sequence[str]) -> None:
    """Raise `ConfigError` if the key column has the name of a column that is written."""
    if key.name in names:
        raise ConfigError(
            f"[points] key = {key.name!r} is also the name of a column of the result; accepted: a "
            "key column with another name"
        )


def rejected_schema(key: pa.Field | None) -> pa.Schema:
    """Return the columns of `rejected.parquet`."""
    return _records_schema(
        key,
        [
            pa.field("integral", pa.string()),
            pa.field("reason", pa.string(), nullable=False),
        ],
    )


def cross_check_schema(key: pa.Field | None) -> pa.Schema:
    """Return the columns of `cross_check.parquet`."""
    return _records_schema(
        key,
        [
            pa.field("integral", pa.string(), nullable=False),
            pa.field("order", pa.int16(), nullable=False),
            pa.field("re", pa.float64(), nullable=False),
            pa.field("im", pa.float64(), nullable=False),
            pa.field("quadrature_re", pa.float64()),
            pa.field("quadrature_im", pa.float64()),
            pa.field("difference", pa.float64()),
            pa.field("quadrature_bound", pa.float64()),
            pa.field("agreed_digits", pa.int16()),
            pa.field("agrees", pa.bool_()),
            pa.field("arithmetic", pa.string(), nullable=False),
            pa.field("status", pa.string(), nullable=False),
            pa.field("note", pa.string()),
        ],
    )


def _records_schema(key: pa.Field | None, fields: list[pa.Field]) -> pa.Schema:
    row = pa.field("row", pa.int64(), nullable=False)
    if key is None:
        return pa.schema([row, *fields])
    refuse_clash(key, ["row", *(f.name for f in fields)])
    return pa.schema([key_field(key), row, *fields])


def records_table(
    schema: pa.Schema, keys: pa.Array, positions: Sequence[int], columns: dict[str, list[Any]]
) -> pa.Table:
    """Build a table of rejected rows or cross-checks.

    Parameters
    ----------
    schema
        From `rejected_schema` or `cross_check_schema`.
    keys
        The keys of all rows of the chunk.
    positions
        For each record, the position of its row in the chunk.
    columns
        All columns except the key.
    """
    arrays = []
    for f in schema:
        if f.name in columns:
            arrays.append(pa.array(columns[f.name], type=f.type))
        else:
            arrays.append(keys.take(pa.array(positions, type=pa.int64())))
    return pa.Table.from_arrays(arrays, schema=schema)


def write_parquet(path: Path, table: pa.Table) -> str:
    """Write a table in one step and return the SHA-256 of the file.

    The bytes depend on the table alone.
    """
    with replacing(path) as temporary:
        pq.write_table(table, temporary, compression="zstd")
        return file_sha256(temporary)


def merge_parquet(path: Path, schema: pa.Schema, parts: Iterable[Path]) -> None:
    """Concatenate Parquet files in one step, with bounded memory."""
    with (
        replacing(path) as temporary,
        pq.ParquetWriter(temporary, schema, compression="zstd") as writer,
    ):
        pending: list[pa.Table] = []
        rows = 0
        for part in parts:
            with pq.ParquetFile(part) as file:  # not a dataset: paths have no meaning here
                for batch in file.iter_batches(ROWS_PER_GROUP):
                    pending.append(pa.Table.from_batches([batch]).cast(schema))
                    rows += batch.num_rows
            if rows >= ROWS_PER_GROUP:
                writer.write_table(pa.concat_tables(pending))
                pending, rows = [], 0
        rest = pa.concat_tables(pending) if pending else schema.empty_table()
        if rest.num_rows:
            writer.write_table(rest)


def check_csv_key(key: pa.Field | None) -> None:
    """Raise `ConfigError` if the key column has no representation in CSV."""
    if key is not None and (pa.types.is_nested(key.type) or pa.types.is_binary(key.type)):
        raise ConfigError(
            f"[points] key = {key.name!r} has type {key.type}, which CSV cannot hold; accepted "
            "with formats = ['csv']: a key of numbers, text or times"
        )


def write_csv(path: Path, schema: pa.Schema, parts: Iterable[Path]) -> None:
    """Write the table parts as one CSV file in one step, with bounded memory."""
    with replacing(path) as temporary, pa.csv.CSVWriter(temporary, schema) as writer:
        for part in parts:
            with pq.ParquetFile(part) as file:
                for batch in file.iter_batches():
                    writer.write_batch(batch)
