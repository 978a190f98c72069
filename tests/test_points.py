"""Parquet points: what is accepted, exact cells, random access, and damaged input."""

from __future__ import annotations

import hashlib
import pickle
from decimal import Decimal
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from flint import fmpq
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from loopint.core.errors import InputError
from loopint.pipeline import points
from loopint.pipeline.errors import ConfigError
from loopint.pipeline.points import exact_cell, exact_rows, open_points


def write(path: Path, columns: object, **options: object) -> Path:
    table = columns if isinstance(columns, pa.Table) else pa.table(columns)
    pq.write_table(table, path, **options)
    return path


# ---------------------------------------------------------------- opening


def test_one_file(tmp_path: Path) -> None:
    path = write(tmp_path / "points.parquet", {"m": [1.0, 2.0], "label": ["x", "y"]})
    source = open_points(path, "label")
    assert source.files == (path,)
    assert source.row_count == 2
    assert source.schema.names == ["m", "label"]
    assert source.key == "label"
    assert source.hashes() == {path.as_posix(): hashlib.sha256(path.read_bytes()).hexdigest()}


def test_directory_reads_parquet_files_in_name_order_and_ignores_strays(tmp_path: Path) -> None:
    write(tmp_path / "b.parquet", {"n": [3, 4]})
    write(tmp_path / "a.parquet", {"n": [1, 2]})
    write(tmp_path / "C.PARQUET", {"n": [0]})
    write(tmp_path / "empty.parquet", {"n": pa.array([], pa.int64())})
    write(tmp_path / ".hidden.parquet", {"other": [9]})
    (tmp_path / "notes.txt").write_text("not Parquet")
    (tmp_path / "_SUCCESS").touch()
    (tmp_path / "sub.parquet").mkdir()
    write(tmp_path / "sub.parquet" / "deep.parquet", {"n": [9]})
    source = open_points(tmp_path)
    assert [file.name for file in source.files] == [
        "C.PARQUET", "a.parquet", "b.parquet", "empty.parquet",
    ]  # fmt: skip
    assert source.read_rows(0, 100, ["n"]).column("n").to_pylist() == [0, 1, 2, 3, 4]
    assert list(source.hashes()) == [file.as_posix() for file in source.files]


def test_files_may_order_their_columns_differently(tmp_path: Path) -> None:
    schema = pa.schema([pa.field("b", pa.float64(), nullable=False), pa.field("a", pa.int64())])
    write(tmp_path / "1.parquet", {"a": [1], "b": [0.5]})
    write(tmp_path / "2.parquet", pa.table({"b": [0.25], "a": [2]}, schema=schema))
    table = open_points(tmp_path).read_rows(0, 2, ["b", "a"])
    assert table.to_pydict() == {"b": [0.5, 0.25], "a": [1, 2]}


def test_missing_path(tmp_path: Path) -> None:
    with pytest.raises(ConfigError, match=r"none\.parquet does not exist; accepted: a Parquet"):
        open_points(tmp_path / "none.parquet")


@pytest.mark.parametrize("content", [b"", b"m_a,m_b\n1,2\n", b"PAR1" + b"x" * 100 + b"PAR1"])
def test_not_parquet(tmp_path: Path, content: bytes) -> None:
    path = tmp_path / "points.parquet"
    path.write_bytes(content)
    with pytest.raises(
        ConfigError, match=r"points\.parquet is not a readable Parquet file"
    ) as caught:
        open_points(path)
    assert "\n" not in str(caught.value)
    with pytest.raises(ConfigError, match=r"points\.parquet is not a readable Parquet file"):
        open_points(tmp_path)


def test_directory_without_parquet(tmp_path: Path) -> None:
    (tmp_path / "points.csv").write_text("m\n1\n")
    with pytest.raises(ConfigError, match=r"holds no \*\.parquet file; accepted"):
        open_points(tmp_path)


def test_no_rows(tmp_path: Path) -> None:
    path = write(tmp_path / "p.parquet", {"m": pa.array([], pa.float64())})
    with pytest.raises(ConfigError, match="has no rows; accepted: at least one point"):
        open_points(path)


@pytest.mark.parametrize(
    ("second", "message"),
    [
        ({"m": ["1"], "n": [1]}, r"column m has type string in .*2\.parquet but double in .*1\.p"),
        ({"m": [1.0]}, r"2\.parquet lacks column n of .*1\.parquet"),
        ({"m": [1.0], "n": [1], "k": [1]}, r"2\.parquet has column k, unlike .*1\.parquet"),
        ({"m": pa.array([1.0], pa.float32()), "n": [1]}, "column m has type float in"),
    ],
)
def test_mixed_schemas(tmp_path: Path, second: dict[str, object], message: str) -> None:
    write(tmp_path / "1.parquet", {"m": [1.0], "n": [1]})
    write(tmp_path / "2.parquet", second)
    with pytest.raises(ConfigError, match=message + ".*; accepted: the same columns and types"):
        open_points(tmp_path)


def test_repeated_column_name(tmp_path: Path) -> None:
    table = pa.Table.from_arrays([pa.array([1]), pa.array([2])], names=["m", "m"])
    path = write(tmp_path / "p.parquet", table)
    with pytest.raises(ConfigError, match="has two columns named m; accepted: distinct names"):
        open_points(path)


def test_missing_key_names_the_nearest(tmp_path: Path) -> None:
    path = write(tmp_path / "p.parquet", {"point": [1], "mass": [2.0]})
    with pytest.raises(
        ConfigError, match=r'key = "pont": .*did you mean point\? accepted: point, m'
    ):
        open_points(path, "pont")


# ---------------------------------------------------------------- column types


@pytest.mark.parametrize(
    "array",
    [
        pa.array([1], pa.int8()),
        pa.array([1], pa.uint64()),
        pa.array(np.array([1], np.float16)),
        pa.array([1], pa.float32()),
        pa.array([1], pa.float64()),
        pa.array([Decimal(1)], pa.decimal128(5, 2)),
        pa.array([Decimal(1)], pa.decimal256(60, 30)),
        pa.array(["1"], pa.string()),
        pa.array(["1"], pa.large_string()),
        pa.array(["1"]).dictionary_encode(),
    ],
    ids=lambda array: str(array.type)[:20],
)
def test_accepted_types(tmp_path: Path, array: pa.Array) -> None:
    source = open_points(write(tmp_path / "p.parquet", {"m": array}))
    source.check_columns(["m"], "here")
    (row,) = exact_rows(source.read_rows(0, 1, ["m"]), ["m"])
    assert row == {"m": fmpq(1)}


@pytest.mark.parametrize(
    "array",
    [
        pa.array([True]),
        pa.array([None], pa.null()),
        pa.array([b"1"], pa.binary()),
        pa.array([[1.0]], pa.list_(pa.float64())),
        pa.array([{"x": 1}]),
        pa.array([0], pa.timestamp("us")),
        pa.array([0], pa.date32()),
    ],
    ids=lambda array: str(array.type)[:20],
)
def test_refused_types(tmp_path: Path, array: pa.Array) -> None:
    source = open_points(write(tmp_path / "p.parquet", {"m": array, "n": [1]}), "m")
    source.check_columns(["n"], "here")
    with pytest.raises(
        ConfigError,
        match=r"^here: column m of .*p\.parquet has type .*; accepted: integer, float, decimal",
    ):
        source.check_columns(["n", "m"], "here")


def test_missing_column_names_the_nearest(tmp_path: Path) -> None:
    source = open_points(write(tmp_path / "p.parquet", {"m_alder": [1], "m_birch": [1]}))
    with pytest.raises(ConfigError, match=r"^x: column m_alde of .*did you mean m_alder\?"):
        source.check_columns({"m_alde"}, "x")
    with pytest.raises(ConfigError, match=r"did you mean m_alder\?"):
        source.check_columns({"M_ALDER"}, "x")


# ---------------------------------------------------------------- cells


@pytest.mark.parametrize(
    ("cell", "expected"),
    [
        (3, fmpq(3)),
        (-(2**70), fmpq(-(2**70))),
        (0.1, fmpq(*(0.1).as_integer_ratio())),
        (5e-324, fmpq(1, 2**1074)),
        (-0.0, fmpq(0)),
        (Decimal("0.1"), fmpq(1, 10)),
        (Decimal("-1E-30"), fmpq(-1, 10**30)),
        ("0.1", fmpq(1, 10)),
        (" 1/3 ", fmpq(1, 3)),
        ("-2.5e-3", fmpq(-1, 400)),
    ],
)
def test_exact_cells(cell: object, expected: fmpq) -> None:
    assert exact_cell(cell) == expected


@pytest.mark.parametrize(
    ("cell", "message"),
    [
        (None, "null"),
        (float("nan"), "nan"),
        (float("inf"), "inf"),
        (float("-inf"), "-inf"),
        ("nan", "'nan'"),
        ("-Infinity", "'-Infinity'; accepted: a finite number"),
        ("", "''"),
        ("abc", "'abc'"),
        ("1/0", "'1/0'"),
        ("0x10", "'0x10'"),
        ("1e99999", "exponent"),
        ("9" * 30_000, r"999\.\.\.; accepted"),
        (True, "True"),
        (b"1", "b'1'"),
    ],
)
def test_bad_cells(cell: object, message: str) -> None:
    with pytest.raises(InputError, match=message) as caught:
        exact_cell(cell)
    assert len(str(caught.value)) < 250


def test_float32_is_its_exact_binary_value(tmp_path: Path) -> None:
    path = write(tmp_path / "p.parquet", {"m": pa.array([0.1], pa.float32())})
    (row,) = exact_rows(open_points(path).read_rows(0, 1, ["m"]), ["m"])
    assert row["m"] == fmpq(13421773, 2**27)  # IEEE 754 binary32 of 0.1, worked out by hand


def test_rows_keep_bad_cells_apart(tmp_path: Path) -> None:
    path = write(tmp_path / "p.parquet", {"a": [1.0, None, float("nan")], "b": ["1", "x", "2"]})
    rows = list(exact_rows(open_points(path).read_rows(0, 3, ["a", "b"]), ["a", "b"]))
    assert rows[0] == {"a": 1, "b": 1}
    assert isinstance(rows[1]["a"], InputError)
    assert isinstance(rows[1]["b"], InputError)
    assert isinstance(rows[2]["a"], InputError)
    assert rows[2]["b"] == 2


@given(
    st.lists(st.floats(allow_nan=False, allow_infinity=False, width=64), min_size=1, max_size=20)
)
@settings(suppress_health_check=[HealthCheck.function_scoped_fixture], max_examples=25)
def test_floats_survive_the_file(tmp_path: Path, numbers: list[float]) -> None:
    path = write(tmp_path / "p.parquet", {"m": pa.array(numbers, pa.float64())})
    rows = exact_rows(open_points(path).read_rows(0, len(numbers), ["m"]), ["m"])
    assert [row["m"] for row in rows] == [fmpq(*x.as_integer_ratio()) for x in numbers]


# ---------------------------------------------------------------- random access


@pytest.fixture
def many_groups(tmp_path: Path) -> Path:
    """Four files, 90 rows in all, with row groups of 7 rows; one file is empty."""
    start = 0
    for name, count in (("a", 30), ("b", 0), ("c", 1), ("d", 59)):
        labels = [f"k{i % 5}" for i in range(start, start + count)]
        columns = {
            "n": pa.array(range(start, start + count), pa.int64()),
            "s": pa.array(labels, pa.string()).dictionary_encode(),
            "x": pa.array([i / 2 for i in range(start, start + count)], pa.float64()),
        }
        write(tmp_path / f"{name}.parquet", columns, row_group_size=7)
        start += count
    return tmp_path


@given(st.lists(st.tuples(st.integers(0, 95), st.integers(0, 95)), min_size=1, max_size=8))
@settings(suppress_health_check=[HealthCheck.function_scoped_fixture], max_examples=60)
def test_any_order_of_reading(many_groups: Path, ranges: list[tuple[int, int]]) -> None:
    source = open_points(many_groups)
    assert source.row_count == 90
    for start, count in ranges:
        expected = list(range(90))[start : start + count]
        columns = ["x", "n"] if count % 2 else ["n", "s", "n"]
        table = source.read_rows(start, count, columns)
        assert table.column_names == list(dict.fromkeys(columns))
        assert table.column("n").to_pylist() == expected
        if "s" in table.column_names:
            assert table.column("s").to_pylist() == [f"k{i % 5}" for i in expected]


def test_small_batches(many_groups: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(points, "BATCH_ROWS", 3)  # several batches in each row group
    source = open_points(many_groups)
    for start, count in [(0, 10), (10, 10), (5, 2), (80, 20), (29, 3), (88, 1), (88, 1), (40, 30)]:
        found = source.read_rows(start, count, ["n"]).column("n").to_pylist()
        assert found == list(range(90))[start : start + count]


def test_ascending_chunks_decode_every_row_once(
    many_groups: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    opened = []
    original = points._Cursor._open

    def counted(self: object, group: int) -> object:
        opened.append(group)
        return original(self, group)

    monkeypatch.setattr(points._Cursor, "_open", counted)
    source = open_points(many_groups)
    for start in range(0, 90, 4):
        source.read_rows(start, 4, ["n"])
    assert opened == [0, 0, 0]  # once for each file that has rows


def test_pickled_source_reads_the_same(many_groups: Path) -> None:
    source = open_points(many_groups, "s")
    source.read_rows(0, 5, ["n"])  # an open cursor does not travel
    copy = pickle.loads(pickle.dumps(source))
    assert len(pickle.dumps(source)) < 5000
    assert copy.key == "s"
    assert copy.read_rows(28, 5, ["n"]).column("n").to_pylist() == [28, 29, 30, 31, 32]


def test_names_with_dots_are_plain_names(tmp_path: Path) -> None:
    path = write(tmp_path / "p.parquet", {"m": [1], "m.a": [2]})
    table = open_points(path).read_rows(0, 1, ["m"])
    assert table.to_pydict() == {"m": [1]}
    assert open_points(path).read_rows(0, 1, ["m.a"]).to_pydict() == {"m.a": [2]}


@pytest.mark.parametrize("change", ["damage", "remove", "shorten"])
def test_a_file_that_changes_is_reported(tmp_path: Path, change: str) -> None:
    path = tmp_path / "p.parquet"
    numbers = np.random.default_rng(7).random(50_000)
    write(path, {"m": numbers}, compression="zstd", row_group_size=10_000)
    source = open_points(path)
    if change == "damage":
        data = bytearray(path.read_bytes())
        data[1000:200_000] = b"\xff" * 199_000
        path.write_bytes(bytes(data))
    elif change == "remove":
        path.unlink()
    else:
        write(path, {"m": numbers[:20_000]}, row_group_size=4_000)
    with pytest.raises(ConfigError, match=r"p\.parquet .*; accepted: ") as caught:
        source.read_rows(0, 50_000, ["m"])
    assert "\n" not in str(caught.value)
    if change == "remove":
        with pytest.raises(ConfigError, match=r"p\.parquet cannot be read: No such file"):
            source.hashes()
