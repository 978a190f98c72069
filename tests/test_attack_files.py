"""Points files as they should not be: refused in one sentence, or a row is; nothing else breaks."""

from __future__ import annotations

import contextlib
import datetime
import decimal
import os
import random
import shutil
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from loopint.cli import main

CONFIG = """
[points]
file = {points!r}
{key}
[[integral]]
name = "loop"
family = "bubble"
p_squared = "s"
m1_squared = "a"
m2_squared = 1
[accuracy]
digits = {digits}
[output]
directory = "{out}"
formats = ["parquet", "csv"]
[execution]
workers = 1
"""
GOOD = pa.table({"s": [1.0, 5.0], "a": [1.0, 2.0]})


@pytest.fixture
def attack(tmp_path, monkeypatch, capsys):
    """Run a points file; return the exit code and what stands on stderr."""

    def run(points: Path, key: str = "", digits: int = 16) -> tuple[int, str]:
        out = tmp_path / "out"
        shutil.rmtree(out, ignore_errors=True)
        config = tmp_path / "config.toml"
        text = CONFIG.format(points=str(points), key=key, out=out, digits=digits)
        config.write_text(text, encoding="utf-8")
        codes = set()
        for command in ("validate", "run"):
            monkeypatch.setattr("sys.argv", ["loopint", command, str(config), "--quiet"])
            with pytest.raises(SystemExit) as ended:
                main()
            codes.add(ended.value.code)
        message = capsys.readouterr().err
        assert len(codes) == 1
        assert "Traceback" not in message
        assert "defect" not in message
        code = codes.pop()
        if code == 2:
            assert len(set(message.strip().splitlines())) == 1, message
            assert not list(out.rglob("*.parquet"))
        else:
            table = pd.read_parquet(out / "table")
            rejected = pd.read_parquet(out / "rejected.parquet")
            assert len(table) == 2 * (2 - len(rejected))
            assert (code == 3) == (len(rejected) > 0)
        return code, message

    return run


def write(folder: Path, table: pa.Table, name: str = "points.parquet", **options) -> Path:
    path = folder / name
    pq.write_table(table, path, **options)
    return path


DAMAGED = {
    "empty": lambda raw: b"",
    "magic alone": lambda raw: b"PAR1",
    "CSV": lambda raw: b"s,a\n1,2\n",
    "truncated": lambda raw: raw[:-20],
    "half": lambda raw: raw[: len(raw) // 2],
    "without head": lambda raw: raw[4:],
    "wrong magic": lambda raw: b"PARX" + raw[4:-4] + b"PARX",
    "huge footer": lambda raw: raw[:-8] + b"\xff\xff\xff\x7fPAR1",
    "zeros": lambda raw: bytes(1000),
    "more at the end": lambda raw: raw + b"junk",
}


@pytest.mark.parametrize("damage", DAMAGED.values(), ids=DAMAGED)
def test_damaged_files(tmp_path, attack, damage):
    path = tmp_path / "points.parquet"
    path.write_bytes(damage(write(tmp_path, GOOD).read_bytes()))
    code, message = attack(path)
    assert code == 2
    assert "accepted:" in message


def test_flipped_bytes(tmp_path, attack):
    """Whatever they hit: other numbers, a rejected row, or one sentence."""
    raw = write(tmp_path, GOOD).read_bytes()
    source = random.Random(3)
    codes = set()
    for _ in range(12):
        damaged = bytearray(raw)
        for _ in range(source.randint(1, 6)):
            damaged[source.randrange(len(raw))] = source.randrange(256)
        path = tmp_path / "points.parquet"
        path.write_bytes(damaged)
        codes.add(attack(path)[0])
    assert codes <= {0, 2, 3}


@pytest.mark.parametrize(
    ("table", "sentence"),
    [
        (GOOD.slice(0, 0), "has no rows"),
        (pa.table({}), "has no rows"),
        (pa.table({"s": [1.0]}), "column a of"),
        (pa.Table.from_arrays([pa.array([1.0])] * 3, names=["s", "a", "a"]), "two columns named a"),
    ],
    ids=["no rows", "no columns", "no mass", "one name twice"],
)
def test_tables_that_cannot_be_points(tmp_path, attack, table, sentence):
    code, message = attack(write(tmp_path, table))
    assert code == 2
    assert sentence in message


COLUMNS = {
    "null": (pa.nulls(2), 2),
    "list": (pa.array([[1.0], [2.0]]), 2),
    "struct": (pa.array([{"x": 1}, {"x": 2}]), 2),
    "map": (pa.array([[("a", 1)], []], pa.map_(pa.string(), pa.int64())), 2),
    "time": (pa.array([datetime.datetime(2020, 1, 1)] * 2), 2),
    "duration": (pa.array([1, 2], pa.duration("s")), 2),
    "bool": (pa.array([True, False]), 2),
    "binary": (pa.array([b"1", b"2"]), 2),
    "dictionary": (pa.array(["1", "2"]).dictionary_encode(), 0),
    "decimal256": (pa.array([decimal.Decimal("1.5")] * 2, pa.decimal256(60, 30)), 0),
    "float16": (pa.array(np.array([1, 2], np.float16)), 0),
    "uint64": (pa.array([2**64 - 1, 1], pa.uint64()), 0),
    "subnormal and huge": (pa.array([5e-324, 1.7e308]), 0),
    "large string": (pa.array(["1/3", "2e-5"], pa.large_string()), 0),
    "words": (pa.array(["one", "2"]), 3),
    "not UTF-8": (pa.array([b"\xe4", b"2"]).view(pa.string()), 3),
    "not UTF-8, dictionary": (  # which some versions of Arrow do not read
        pa.DictionaryArray.from_arrays([0, 1], pa.array([b"\xe4", b"2"]).view(pa.string())),
        (2, 3),
    ),
    "huge exponent": (pa.array(["1e999999", "2"]), 3),
    "huge text": (pa.array(["9" * 200_000, "2"]), 3),
    "superscript": (pa.array(["²", "2"]), 3),
    "1/0": (pa.array(["1/0", "2"]), 3),
    "nan": (pa.array([float("nan"), 2.0]), 3),
}


@pytest.mark.parametrize("digits", [12, 16])
@pytest.mark.parametrize(("column", "expected"), COLUMNS.values(), ids=COLUMNS)
def test_columns_of_every_type(tmp_path, attack, column, expected, digits):
    path = write(tmp_path, pa.table({"s": [1.0, 5.0], "a": column}))
    accepted = expected if isinstance(expected, tuple) else (expected,)
    assert attack(path, digits=digits)[0] in accepted


def test_odd_keys(tmp_path, attack):
    name = 'ключ é\n"\x00'
    path = write(tmp_path, GOOD.append_column(name, pa.array([[1], [2]])))
    code, message = attack(path, 'key = "ключ é\\n\\"\\u0000"')
    assert code == 2
    assert "CSV cannot hold" in message
    path = write(tmp_path, GOOD.append_column(name, pa.array(["x", None])))
    assert attack(path, 'key = "ключ é\\n\\"\\u0000"')[0] == 0
    path = write(tmp_path, GOOD.append_column("integral", pa.array(["x", "y"])))
    assert attack(path, 'key = "integral"')[0] == 2


def test_directories(tmp_path, attack):
    folder = tmp_path / "points with ä space"
    folder.mkdir()
    assert "holds no *.parquet file" in attack(folder)[1]
    write(folder, GOOD, "a.parquet")
    (folder / "notes.txt").write_text("x")
    (folder / "sub.parquet").mkdir()
    (folder / ".hidden.parquet").write_bytes(b"")
    assert attack(folder)[0] == 0
    write(folder, pa.table({"s": ["1"], "a": [1.0]}), "b.parquet")
    assert "has type string in" in attack(folder)[1]
    (folder / "b.parquet").write_bytes(b"no")
    assert "not a readable Parquet file" in attack(folder)[1]


def test_links_pipes_and_other_things(tmp_path, attack):
    good, link = write(tmp_path, GOOD), tmp_path / "link.parquet"
    link.symlink_to(good)
    assert attack(link)[0] == 0
    for target in (tmp_path / "nowhere", link):
        link.unlink()
        link.symlink_to(target)
        assert attack(link)[0] == 2
    os.mkfifo(tmp_path / "pipe.parquet")  # nobody writes: reading it would never end
    assert "no regular file" in attack(tmp_path / "pipe.parquet")[1]
    assert attack(Path("/dev/null"))[0] == 2
    assert attack(Path("x" * 5000))[0] == 2


@pytest.mark.skipif(os.geteuid() == 0, reason="root may read everything")
def test_unreadable_file(tmp_path, attack):
    path = write(tmp_path, GOOD)
    path.chmod(0)
    with contextlib.ExitStack() as stack:
        stack.callback(path.chmod, 0o600)
        assert attack(path)[0] == 2
