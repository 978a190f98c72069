"""The commands as a user meets them: output, exit codes, and every mistake in one sentence."""

from __future__ import annotations

import json
import os
import re
import resource
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import mpmath
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from loopint.cli import main
from loopint.pipeline import cross_check
from tests.pipeline_files import hear_interrupts, points_table, write_run

Command = Callable[..., tuple[int, str, str]]


@pytest.fixture
def loopint(monkeypatch, capsys) -> Command:
    """Run the command line in this process; returns exit code, stdout and stderr."""

    def command(*arguments: object) -> tuple[int, str, str]:
        monkeypatch.setattr(sys, "argv", ["loopint", *map(str, arguments)])
        with pytest.raises(SystemExit) as caught:
            main()
        out, err = capsys.readouterr()
        assert "Traceback" not in out + err
        return int(caught.value.code or 0), out, err

    return command


def one_sentence(err: str) -> str:
    """The message, after checking that it is the only line."""
    lines = err.splitlines()
    assert len(lines) == 1, err
    assert lines[0].startswith("loopint: ")
    return lines[0]


def test_run_prints_the_account(loopint, tmp_path):
    config = write_run(tmp_path, points_table(12), fraction='"all"')
    code, out, err = loopint("run", config)
    assert (code, err) == (0, "")
    assert "12 rows in, 12 in the table, 0 rejected" in out
    assert "cross-check: 84 coefficients, 0 disagree, 0 inconclusive" in out
    code, out, err = loopint("run", config)
    assert code == 0
    assert "12 rows were finished before" in out
    code, out, err = loopint("run", config, "--overwrite", "--workers", "2")
    assert code == 0
    assert "with 2 worker(s)" in out
    assert "finished before" not in out


def test_json_and_quiet(loopint, tmp_path):
    config = write_run(tmp_path, points_table(12, s={3: float("nan")}))
    code, out, err = loopint("validate", config, "--json")
    assert (code, json.loads(out)["rows_rejected"], err) == (3, 1, "")
    code, out, err = loopint("validate", config, "--quiet")
    assert (code, out) == (3, "")
    assert "column s is nan" in one_sentence(err)
    code, out, err = loopint("run", config, "--json")
    assert (code, err) == (3, "")
    summary = json.loads(out)
    assert (summary["rows_in"], summary["rows_rejected"]) == (12, 1)
    assert Path(summary["report"]).name == "report.html"
    code, out, err = loopint("run", config, "--quiet")
    assert (code, out) == (3, "")
    assert "1 row(s) rejected" in one_sentence(err)


def test_a_misspelt_command_is_answered(loopint):
    code, _out, err = loopint("compair", "x")
    assert code == 2
    assert "Did you mean 'compare'?" in err


def test_rejected_rows_give_exit_code_3_and_one_line(loopint, tmp_path):
    config = write_run(tmp_path, points_table(12, s={3: float("nan")}))
    code, out, err = loopint("run", config)
    assert code == 3
    assert "12 rows in, 11 in the table, 1 rejected" in out
    assert one_sentence(err).startswith("loopint: 1 row(s) rejected; the reasons are in ")
    code, out, err = loopint("validate", config)
    assert code == 3
    assert one_sentence(err) == (
        "loopint: row 3 (key p3): integral mixed: column s is nan; accepted: a finite number"
    )


def test_validate_counts_regions_and_estimates(loopint, tmp_path):
    config = write_run(tmp_path, points_table(40))
    code, out, err = loopint("validate", config)
    assert (code, err) == (0, "")
    assert "40 rows: 40 can be evaluated (280 lines in the table), 0 will be rejected" in out
    assert re.search(r"mixed +complex_mass +40", out)
    assert re.search(r"estimated time: .* with 1 worker\(s\): [0-9.]+ ms per row", out)
    assert not (tmp_path / "out").exists()


def test_disagreement_is_named_on_stderr(loopint, tmp_path, monkeypatch):
    integrate = cross_check.integrate_feynman

    def shifted(point, *arguments, **options):
        moved = point.scaled(3) if hasattr(point, "p_squared") else point
        return integrate(moved, *arguments, **options)

    monkeypatch.setattr(cross_check, "integrate_feynman", shifted)
    code, out, err = loopint("run", write_run(tmp_path, points_table(2), fraction='"all"'))
    assert code == 3
    assert "6 disagree" in out
    message = one_sentence(err)
    assert "6 coefficient(s) fail the cross-check: row 0 integral mixed order 0, " in message
    assert message.endswith("cross_check.parquet")


def edit(old: str, new: str) -> Callable[[Path], None]:
    def apply(config: Path) -> None:
        text = config.read_text()
        assert old in text
        config.write_text(text.replace(old, new))

    return apply


def replace_points(write: Callable[[Path], object]) -> Callable[[Path], None]:
    def apply(config: Path) -> None:
        points = config.parent / "points.parquet"
        points.unlink()
        write(points)

    return apply


def set_column(name: str, values: pa.Array) -> Callable[[Path], None]:
    table = points_table(len(values))
    index = table.column_names.index(name)
    return replace_points(lambda path: pq.write_table(table.set_column(index, name, values), path))


NOTHING = replace_points(lambda path: None)
UNUSABLE = {
    "missing points": (NOTHING, ["points.parquet does not exist", "accepted: a Parquet file"]),
    "points are not Parquet": (
        replace_points(lambda path: path.write_text("s,m\n1,2\n")),
        ["points.parquet is not a readable Parquet file", "accepted: Parquet"],
    ),
    "missing column": (
        edit('p_squared = "s"', 'p_squared = "m_alder2"'),
        ["run.toml", "p_squared", "m_alder2", "did you mean m_alder?"],
    ),
    "column of another type": (
        set_column("s", pa.array([1, 2], pa.timestamp("us"))),
        ["p_squared", "column s", "timestamp[us]", "accepted: integer, float, decimal or string"],
    ),
    "missing key column": (edit('key = "point"', 'key = "pint"'), ["pint", "did you mean point?"]),
    "key named like a column": (
        edit('key = "point"', 'key = "order"'), ["order", "accepted"],
    ),
    "unknown key": (
        edit("chunk_rows", "chunk_row"), ["[execution] chunk_row is unknown", "chunk_rows?"],
    ),
    "orders upside down": (edit("[-1, 1]", "[1, -1]"), ["orders = [1, -1]", "lowest <= highest"]),
    "digits too low": (edit("digits = 16", "digits = 3"), ["digits = 3", "from 5 to 2000"]),
    "digits too high": (edit("digits = 16", "digits = 2001"), ["digits = 2001", "from 5 to 2000"]),
    "division by zero": (
        edit('p_squared = "s"', 'p_squared = "1/(2 - 2)"'), ["p_squared", "division by zero"],
    ),
    "not an expression": (
        edit('p_squared = "s"', 'p_squared = "__import__(1)"'), ["p_squared", "accepted"],
    ),
    "fixed negative mass": (
        edit('m_squared = "m_alder**2"', "m_squared = -1"),
        ["m_squared = -1", "accepted: real m^2"],
    ),
    "fixed mu^2": (
        edit("[accuracy]", "[conventions]\nmu_squared = 0\n[accuracy]"),
        ["mu_squared = 0 is not positive", "accepted: > 0"],
    ),
    "unknown measure": (
        edit("[accuracy]", '[conventions]\nmeasure = "ms"\n[accuracy]'), ['"ms"', "msbar"],
    ),
    "no integral": (
        lambda config: config.write_text(
            re.sub(r"(?s)\[\[integral.*(?=\[acc)", "", config.read_text())
        ),
        ["[[integral]] is missing"],
    ),
    "not TOML": (lambda config: config.write_text("points = ["), ["run.toml is not valid TOML"]),
    "no config": (lambda config: config.unlink(), ["run.toml does not exist"]),
    "output is a file": (
        lambda config: (config.parent / "out").write_text("x"),
        ["is a file", "accepted: a directory"],
    ),
}  # fmt: skip


@pytest.mark.parametrize(
    ("command", "mistake"),
    [("run", mistake) for mistake in UNUSABLE]
    + [("validate", mistake) for mistake in UNUSABLE if not mistake.startswith("output")],
)
def test_unusable_input_gives_exit_code_2_and_one_sentence(loopint, tmp_path, mistake, command):
    config = write_run(tmp_path, points_table(2))
    apply, parts = UNUSABLE[mistake]
    apply(config)
    code, out, err = loopint(command, config)
    message = one_sentence(err)
    assert (code, out) == (2, "")
    for part in parts:
        assert part in message
    assert not (tmp_path / "out").is_dir()


def test_different_plan_is_exit_code_2_and_names_the_option(loopint, tmp_path):
    table = points_table(2)
    assert loopint("run", write_run(tmp_path, table))[0] == 0
    other = write_run(tmp_path, table, digits=30)
    code, _, err = loopint("run", other)
    assert code == 2
    assert "--overwrite" in one_sentence(err)
    assert loopint("run", other, "--overwrite")[0] == 0


def test_unwritable_directory(loopint, tmp_path):
    (tmp_path / "file").write_text("")
    code, _, err = loopint("run", write_run(tmp_path, points_table(2), out="file/out"))
    assert code == 2
    assert "file/out" in one_sentence(err)
    assert "Not a directory" in err


def test_full_disk(tmp_path):
    """A limit on the size of a file stands in for a full disk."""
    config = write_run(tmp_path, points_table(300), chunk_rows=300, digits=200)
    done = subprocess.run(
        [sys.executable, "-m", "loopint.cli", "run", str(config)],
        capture_output=True,
        text=True,
        check=False,
        preexec_fn=lambda: resource.setrlimit(resource.RLIMIT_FSIZE, (20_000, 20_000)),
    )
    assert done.returncode == 2
    assert "Traceback" not in done.stderr
    assert "File too large" in one_sentence(done.stderr)
    assert not list((tmp_path / "out" / "table").iterdir())
    done = subprocess.run(
        [sys.executable, "-m", "loopint.cli", "run", str(config)], check=False, capture_output=True
    )
    assert done.returncode == 0


def test_interrupted_run_says_how_to_continue(tmp_path):
    config = write_run(tmp_path, points_table(8000), workers=2, chunk_rows=10)
    process = subprocess.Popen(
        [sys.executable, "-m", "loopint.cli", "run", str(config)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
        preexec_fn=hear_interrupts,  # noqa: PLW1509
    )
    deadline = time.monotonic() + 60
    while not list((tmp_path / "out" / ".work").glob("chunk-*.json")):
        assert process.poll() is None
        assert time.monotonic() < deadline
        time.sleep(0.01)
    os.killpg(process.pid, signal.SIGINT)  # as a terminal does: the workers get it too
    out, err = process.communicate(timeout=60)
    assert process.returncode == 130
    assert one_sentence(err) == "loopint: interrupted; the same command continues"
    assert out == ""


def test_point_prints_proven_digits(loopint):
    """B0(4; 1, 1) = 1/eps + 2 with mu = 1: the threshold value of any QFT textbook."""
    code, out, err = loopint(
        "point", "bubble", "--p-squared", "4", "--m1-squared", "1", "--m2", "1",
        "--orders", "-1,0", "--digits", "25", "--cross-check",
    )  # fmt: skip
    assert (code, err) == (0, "")
    assert "region threshold" in out
    assert re.search(r"eps\^0 +2\.0 +0 ", out)
    assert out.count("cross-check eps^") == 2
    assert "disagrees" not in out


@pytest.mark.parametrize("digits", [6, 40, 300])
def test_point_json_holds_its_bounds(loopint, digits):
    """Against the closed form B0(s<0; 0, m), Denner arXiv:0709.1075 (4.23), from memory."""
    code, out, _ = loopint(
        "point", "bubble", "--p-squared", "-1/3", "--m1-squared=0", "--m2-squared", "0.7",
        "--orders=-1,0", "--digits", digits, "--json",
    )  # fmt: skip
    assert code == 0
    found = json.loads(out)
    assert found["region"] == "spacelike"
    assert [c["order"] for c in found["coefficients"]] == [-1, 0]
    finite = found["coefficients"][1]
    with mpmath.workdps(digits + 30):
        s, m2 = -mpmath.mpf(1) / 3, mpmath.mpf(7) / 10
        expected = 2 - mpmath.log(m2) + (m2 - s) / s * mpmath.log(1 - s / m2)
        error = abs(mpmath.mpf(finite["re"]) - expected)
        assert error <= mpmath.mpf(finite["bound"]) <= mpmath.mpf(10) ** -digits * abs(expected)
    assert finite["im"] == "0"
    assert finite["digits"] >= digits


def test_point_accepts_numbers_that_start_with_a_dash(loopint):
    spaced = loopint("point", "bubble", "--p-squared", "-1", "--m1", "1", "--m2", "2",
                     "--orders", "-1,2", "--json")  # fmt: skip
    joined = loopint("point", "bubble", "--p-squared=-1", "--m1", "1", "--m2", "2",
                     "--orders=-1,2", "--json")  # fmt: skip
    assert spaced == joined
    assert spaced[0] == 0
    assert len(json.loads(spaced[1])["coefficients"]) == 4


def test_point_width_is_the_complex_squared_mass(loopint):
    common = ("point", "bubble", "--p-squared", "3", "--m2", "0", "--json")
    by_width = json.loads(loopint(*common, "--m1", "1.5", "--width1", "0.1")[1])
    by_square = json.loads(loopint(*common, "--m1-squared", "2.25,-0.15")[1])
    assert by_width["coefficients"] == by_square["coefficients"]
    assert by_width["region"] == "complex_mass"


def test_point_below_digits_is_exit_code_3(loopint):
    code, out, err = loopint(
        "point", "bubble", "--p-squared", "3", "--m1", "1", "--m2", "0.4",
        "--digits", "100", "--max-precision-bits", "64",
    )  # fmt: skip
    assert code == 3
    assert "status below_digits" in out
    assert "accepted: a larger --max-precision-bits" in one_sentence(err)


BUBBLE = ("bubble", "--p-squared", "1", "--m1", "1", "--m2", "1")
BAD_POINTS = {
    "unknown family": (("buble",), ["did you mean bubble?", "tadpole"]),
    "missing mass": (("bubble", "--p-squared", "1", "--m1", "1"), ["--m2-squared, or --m2"]),
    "missing momentum": (("bubble", "--m1", "1", "--m2", "1"), ["--p-squared is missing"]),
    "mass twice": ((*BUBBLE, "--m1-squared", "1"), ["--m1-squared and --m1 are both given"]),
    "width without mass": (
        ("bubble", "--p-squared", "1", "--m1-squared", "1", "--width1", "1", "--m2", "1"),
        ["--m1-squared and --width1 are both given"],
    ),
    "foreign option": (("tadpole", "--m1", "1"), ["--m1 does not belong to a tadpole"]),
    "not a number": (("tadpole", "--m", "one"), ["--m 'one' is not a number", "accepted"]),
    "not finite": (("tadpole", "--m", "nan"), ["--m 'nan' is not a number", "accepted"]),
    "negative": (("tadpole", "--m-squared", "-1"), ["--m-squared = -1 is negative"]),
    "growing": (("tadpole", "--m-squared", "1,1"), ["--m-squared has Im = 1 > 0"]),
    "three parts": (("tadpole", "--m-squared", "1,1,1"), ["3 parts", "accepted: re,im"]),
    "orders": ((*BUBBLE, "--orders", "2"), ["--orders '2'", "such as -1,2"]),
    "orders upside down": ((*BUBBLE, "--orders", "2,1"), ["upside down"]),
    "powers": ((*BUBBLE, "--powers", "1"), ["powers", "2 integer(s)"]),
    "powers not integers": ((*BUBBLE, "--powers", "1,x"), ["--powers '1,x'", "integers"]),
    "dimension": ((*BUBBLE, "--dimension", "13"), ["dimension = 13", "from 1 to 12"]),
    "digits": ((*BUBBLE, "--digits", "4"), ["digits = 4", "from 5 to 2000"]),
    "mu": ((*BUBBLE, "--mu-squared", "0"), ["mu_squared = 0 is not positive"]),
    "measure": ((*BUBBLE, "--measure", "ms"), ["measure = 'ms'", "msbar"]),
    "sign": ((*BUBBLE, "--propagator-sign", "+"), ["propagator_sign", "euclidean"]),
    "snap": ((*BUBBLE, "--snap-tolerance", "2"), ["--snap-tolerance 2", "below 1"]),
    "bits": ((*BUBBLE, "--max-precision-bits", "10"), ["--max-precision-bits 10", "from 64"]),
}


@pytest.mark.parametrize("mistake", BAD_POINTS)
def test_bad_point_is_exit_code_2_and_one_sentence(loopint, mistake):
    arguments, parts = BAD_POINTS[mistake]
    code, out, err = loopint("point", *arguments)
    assert (code, out) == (2, "")
    for part in parts:
        assert part in one_sentence(err)


@pytest.mark.parametrize(
    ("arguments", "part"),
    [
        (("rn",), "Did you mean 'run'?"),
        (("run",), "CONFIG"),
        (("run", "x.toml", "--worker", "2"), "--workers"),
        (("run", "x.toml", "--workers", "0"), "--workers"),
        (("point", "tadpole", "--m", "1", "--digits", "many"), "--digits"),
    ],
)
def test_usage_mistakes_are_exit_code_2(loopint, arguments, part):
    code, out, err = loopint(*arguments)
    assert (code, out) == (2, "")
    assert part in err


@pytest.mark.parametrize("arguments", [(), ("run",), ("validate",), ("point",)])
def test_help(loopint, arguments):
    code, out, _ = loopint(*arguments, "--help")
    assert code == 0
    assert "Usage: loopint" in out
    assert "Example" in out or not arguments


def test_version_and_quick_start(loopint):
    code, out, _ = loopint("--version")
    assert code == 0
    assert re.fullmatch(r"loopint \d+\.\d+\.\d+\n", out)
    heavy = "{'pyarrow', 'pandas', 'pydantic', 'rich.table'}"
    script = f"import sys, loopint.cli; print(sorted({heavy} & set(sys.modules)))"
    shown = subprocess.check_output([sys.executable, "-c", script], text=True)
    assert shown.strip() == "[]"
