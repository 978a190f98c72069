"""Hostile configs, expressions, formulas, manifests and interpolants: one sentence each."""

from __future__ import annotations

import random

import pytest

from loopint.cli import main
from tests.fuzz import TARGETS, attempt, seeds

FOUND = {  # by the guided fuzzer
    "expression": [b"2** `e\na/`", b"`\n`**x", b"(1)**`\r`"],
    "run_directory": [b'{"state": "finished", "config": {"accuracy": {"time_lgmit": "600"}}}'],
}
HOSTILE = [
    b"", b"\x00", b"\xff\xfe[\x00p\x00", b"\xef\xbb\xbf[points]\nfile = 'x'", b"a = " + b"[" * 5000,
    b"[points]\nfile = '" + b"x" * 10**6 + b"'", b"[" + b"a." * 5000 + b"b]", b"a = 1e999999999",
    b"[accuracy]\ndigits = " + b"9" * 5000, b"[accuracy]\nsnap_tolerance = 1e-999999999",
    b"[points]\nfile = 'a'\nfile = 'b'", b"[[integral]]\n" * 3000, b"= = =", b"a = nan",
    b"[accuracy]\ntime_limit = inf", b"[[integral]]\np_squared = '" + b"(" * 1999 + b"'",
    b"[[integral]]\np_squared = '9**9**9'", b"[[integral]]\np_squared = '__import__(\"os\")'",
    b"[conventions]\nmu_squared = {}", b"[execution]\nchunk_rows = -9223372036854775809",
    b"integral = 3", b"[points]\nkey = ['x']", b"date = 2020-01-01T00:00:00Z", b"\xed\xa0\x80 = 1",
]  # fmt: skip


@pytest.mark.parametrize("target", TARGETS)
def test_mutations_of_good_inputs(target):
    """A short deterministic run without guidance; `python -m tests.fuzz` is the long one."""
    source = random.Random(target)
    start = seeds(target)
    for data in FOUND.get(target, []):
        attempt(TARGETS[target], data)
    for _ in range(150 if target in ("expression", "formula") else 40):
        data = bytearray(source.choice(start))
        for _ in range(source.randint(1, 5)):
            place = source.randrange(len(data) + 1)
            match source.randrange(4):
                case 0:
                    del data[place : place + source.randint(1, 8)]
                case 1:
                    data[place:place] = source.randbytes(source.randint(1, 4))
                case 2:
                    data[place:place] = source.choice([b"(", b")", b"**", b"1e99", b"\n", b"'"])
                case 3:
                    other = source.choice(start)
                    cut = source.randrange(len(other))
                    data[place:place] = other[cut : cut + 20]
        attempt(TARGETS[target], bytes(data))


@pytest.mark.parametrize("text", HOSTILE, ids=[str(text[:24]) for text in HOSTILE])
@pytest.mark.parametrize("command", ["run", "validate", "grid", "compare", "interpolate"])
def test_hostile_configs(tmp_path, monkeypatch, capsys, command, text):
    config = tmp_path / "config.toml"
    config.write_bytes(text)
    monkeypatch.setattr("sys.argv", ["loopint", command, str(config)])
    with pytest.raises(SystemExit) as ended:
        main()
    assert ended.value.code == 2
    out, message = capsys.readouterr()
    assert out == ""
    assert message.count("\n") == 1
    assert len(message) < 3000
    assert "Traceback" not in message


@pytest.mark.parametrize(
    "arguments",
    [
        ("bubble", "--p-squared", "9" * 20_000, "--m1", "1", "--m2", "1"),
        ("bubble", "--p-squared", "1e99999", "--m1", "1", "--m2", "1"),
        ("bubble", "--p-squared", "1/0", "--m1", "1", "--m2", "1"),
        ("bubble", "--p-squared", "²", "--m1", "1", "--m2", "1"),
        ("bubble", "--p-squared", "nan", "--m1", "1", "--m2", "1"),
        ("bubble", "--m1", "1", "--m2", "1"),
        ("bubble", "--p-squared", "1", "--m1", "1", "--m2", "1", "--powers", "99,1"),
        ("bubble", "--p-squared", "1", "--m1", "1", "--m2", "1", "--powers", "x"),
        ("bubble", "--p-squared", "1", "--m1", "1", "--m2", "1", "--orders", "0,9999"),
        ("tadpole", "--m-squared", "1,1"),
        ("tadpole", "--m-squared", "1", "--dimension", "0"),
        ("tadpole", "--m-squared", "1", "--digits", "-5"),
        ("triangle", "--m-squared", "1"),
    ],
)
def test_hostile_arguments(monkeypatch, capsys, arguments):
    monkeypatch.setattr("sys.argv", ["loopint", "point", *arguments])
    with pytest.raises(SystemExit) as ended:
        main()
    assert ended.value.code == 2
    out, message = capsys.readouterr()
    assert out == ""
    assert "Traceback" not in message
    assert len(message) < 3000
