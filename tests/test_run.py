"""Whole runs on small files: layouts, resuming, determinism, rejected rows, cross-check."""

from __future__ import annotations

import json
import operator
import os
import signal
import subprocess
import sys
import time
from collections import Counter
from functools import partial
from pathlib import Path

import mpmath
import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.csv
import pyarrow.parquet as pq
import pytest

from loopint.core.errors import UnsupportedIntegralError
from loopint.pipeline import cross_check as cross_check_module
from loopint.pipeline import evaluate as evaluate_module
from loopint.pipeline.config import load_config
from loopint.pipeline.cross_check import cross_check, sample
from loopint.pipeline.engines import EngineError, run_tasks
from loopint.pipeline.errors import ConfigError
from loopint.pipeline.estimate import survey_config
from loopint.pipeline.run import run_config
from loopint.pipeline.tables import write_integral
from tests.pipeline_files import file_contents, points_table, write_run
from tests.test_tables import bubble

ROWS = 21


def run(config: Path, **options):
    return run_config(load_config(config), **options)


@pytest.fixture(scope="module")
def reference(tmp_path_factory) -> tuple[Path, dict[str, bytes]]:
    """A finished run in one process, without interruption."""
    directory = tmp_path_factory.mktemp("reference")
    config = write_run(directory, points_table(ROWS), formats='["parquet", "csv"]')
    outcome = run(config)
    assert outcome.exit_code == 0
    return directory, file_contents(directory / "out")


def test_long_table_holds_every_row_integral_and_order(reference):
    directory, _ = reference
    table = pd.read_parquet(directory / "out" / "table")
    assert len(table) == ROWS * (3 + 2 + 2)
    assert list(table["point"].unique()) == [f"p{i}" for i in range(ROWS)]
    assert list(table["integral"].unique()) == ["mixed", "equal", "loop"]
    assert set(table["status"]) == {"ok"}
    assert table["digits"].dropna().min() >= 16
    csv = pa.csv.read_csv(directory / "out" / "table.csv").to_pandas()
    pd.testing.assert_frame_equal(
        csv, table, check_dtype=False, rtol=0, atol=0, check_column_type=False
    )


def test_numbers_agree_with_the_textbook_tadpole_and_with_unitarity(reference):
    """A(1) = m^2 (1/eps + 1 - log m^2) and Im B0 = pi sqrt(lambda)/p^2 (any QFT textbook)."""
    directory, _ = reference
    table = pd.read_parquet(directory / "out" / "table").set_index(["point", "integral", "order"])
    points = pd.read_parquet(directory / "points.parquet").set_index("point")
    above = 0
    for key, row in points.iterrows():
        mass = mpmath.mpf(row["m_alder"])
        m_squared, s = mass**2, mpmath.mpf(row["s"])
        expected = m_squared * (1 - mpmath.log(m_squared))
        got = table.loc[(key, "loop", 0)]
        assert abs(got["re"] - expected) <= 4e-16 * (abs(m_squared) + abs(expected))
        cut = table.loc[(key, "equal", 0)]["im"]
        if s > 4 * m_squared:
            above += 1
            assert cut == pytest.approx(float(mpmath.pi * mpmath.sqrt(1 - 4 * m_squared / s)))
        else:
            assert cut == 0.0
    assert 0 < above < ROWS


def test_summary_and_manifest(reference):
    directory, contents = reference
    summary = json.loads((directory / "out" / "summary.json").read_text())
    assert summary["rows_in"] == summary["rows_in_table"] + summary["rows_rejected"] == ROWS
    seconds = [found["seconds"] for found in summary["slowest"]]
    assert len(seconds) == 5
    assert seconds == sorted(seconds, reverse=True)
    assert all(0 <= found["row"] < ROWS for found in summary["slowest"])
    for entry in summary["integrals"].values():
        assert sum(n for by in entry["regions"].values() for n in by.values()) == ROWS
    checks = pq.read_table(directory / "out" / "cross_check.parquet")
    assert summary["cross_check"]["coefficients"] == checks.num_rows > 0
    assert summary["cross_check"]["disagrees"] == 0
    assert checks.column("agrees").to_pylist() == [True] * checks.num_rows
    manifest = json.loads((directory / "out" / "manifest.json").read_text())
    assert manifest["state"] == "finished"
    assert [part["lines"] for part in manifest["table"]] == [56, 56, 35]
    assert sum(part["source_rows"] for part in manifest["table"]) == ROWS
    assert {"loopint", "python", "python-flint", "FLINT", "pyarrow"} <= set(manifest["versions"])
    assert not [name for name in contents if name.endswith(".tmp")]


def test_workers_do_not_change_a_byte(reference, tmp_path):
    _, expected = reference
    config = write_run(tmp_path, points_table(ROWS), workers=2, formats='["parquet", "csv"]')
    seen: list[tuple[int, int]] = []
    run(config, progress=lambda done, total: seen.append((done, total)))
    assert file_contents(tmp_path / "out") == expected
    assert seen[0] == (0, ROWS)
    assert seen[-1] == (ROWS, ROWS)
    assert seen == sorted(seen)


def test_lost_and_damaged_files_are_computed_again(reference, tmp_path):
    _, expected = reference
    config = write_run(tmp_path, points_table(ROWS), formats='["parquet", "csv"]')
    run(config)
    out = tmp_path / "out"
    (out / "table" / "part-00000.parquet").unlink()
    (out / "table" / "part-00001.parquet").write_bytes(b"damaged")
    (out / "table" / ".part-00002.parquet.tmp").write_bytes(b"left behind")
    (out / "cross_check.parquet").unlink()
    outcome = run(config)
    assert outcome.summary["rows_resumed"] == 5
    assert file_contents(out) == expected
    checked = next((out / ".work").glob("cross_check-*.parquet"))
    checked.write_bytes(checked.read_bytes()[:-1])
    assert run(config).summary["rows_resumed"] in (16, 13)
    again = run(config)
    assert again.summary["rows_resumed"] == ROWS
    assert again.summary["rows_per_second"] is None
    assert file_contents(out) == expected


def test_killed_run_continues_to_the_same_bytes(tmp_path):
    rows = 400
    config = write_run(tmp_path, points_table(rows), workers=2, chunk_rows=4)
    command = [sys.executable, "-m", "loopint.cli", "run", str(config)]
    process = subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
    out = tmp_path / "out"
    deadline = time.monotonic() + 60
    while len(list((out / ".work").glob("chunk-*.json"))) < 5:
        assert process.poll() is None
        assert time.monotonic() < deadline
        time.sleep(0.01)
    process.send_signal(signal.SIGKILL)
    process.wait()
    assert not (out / "summary.json").exists()
    assert json.loads((out / "manifest.json").read_text())["state"] == "running"
    time.sleep(1)  # the workers notice that their parent is gone
    finished = len(list((out / ".work").glob("chunk-*.json")))
    time.sleep(0.5)
    assert len(list((out / ".work").glob("chunk-*.json"))) == finished < rows / 4
    outcome = run(config)
    assert outcome.summary["rows_resumed"] >= 5 * 4
    fresh = write_run(tmp_path, points_table(rows), out="fresh", name="fresh.toml", chunk_rows=4)
    run(fresh)
    assert file_contents(out) == file_contents(tmp_path / "fresh")


def test_different_plan_is_refused_unless_overwritten(tmp_path):
    table = points_table(4)
    run(write_run(tmp_path, table))
    other = write_run(tmp_path, table, digits=20)
    with pytest.raises(ConfigError, match=r"different config, input or version.*--overwrite"):
        run(other)
    mine = tmp_path / "out" / "notes.txt"
    mine.write_text("kept")
    outcome = run(other, overwrite=True)
    assert outcome.summary["rows_resumed"] == 0
    assert "re_decimal" in pq.read_schema(tmp_path / "out" / "table" / "part-00000.parquet").names
    assert mine.read_text() == "kept"


def test_changed_points_are_a_different_plan(tmp_path):
    config = write_run(tmp_path, points_table(4))
    run(config)
    pq.write_table(points_table(4, s={2: 1.25}), tmp_path / "points.parquet")
    with pytest.raises(ConfigError, match="--overwrite"):
        run(config)


def test_workers_title_and_formats_are_not_part_of_the_plan(tmp_path):
    config = write_run(tmp_path, points_table(4))
    run(config)
    config.write_text(
        config.read_text()
        .replace("two fields", "renamed")
        .replace('["parquet"]', '["csv"]')
        .replace("workers = 1", "workers = 2")
    )
    assert run(config).summary["rows_resumed"] == 4
    assert (tmp_path / "out" / "table.csv").exists()


def test_directory_with_foreign_files_is_left_alone(tmp_path):
    config = write_run(tmp_path, points_table(4))
    (tmp_path / "out" / "table").mkdir(parents=True)
    precious = tmp_path / "out" / "table" / "precious.parquet"
    precious.write_text("mine")
    for overwrite in (False, True):
        with pytest.raises(ConfigError, match="no loopint run wrote"):
            run(config, overwrite=overwrite)
    assert precious.read_text() == "mine"


def test_two_runs_cannot_share_a_directory(tmp_path):
    config = load_config(write_run(tmp_path, points_table(30), chunk_rows=30))
    inner: list[str] = []

    def start_again(done: int, total: int) -> None:
        with pytest.raises(ConfigError, match="another run") as caught:
            run_config(config)
        inner.append(str(caught.value))

    run_config(config, progress=start_again)
    assert len(inner) == 2


BAD_ROWS = {
    "s": {1: float("nan"), 2: float("inf"), 3: None},
    "m_alder": {4: -0.5},
}


def test_bad_rows_are_rejected_with_their_reason_and_none_is_lost(tmp_path):
    config = write_run(tmp_path, points_table(ROWS, **BAD_ROWS))
    outcome = run(config)
    assert outcome.exit_code == 3
    assert outcome.summary["rows_rejected"] == 4
    rejected = pq.read_table(tmp_path / "out" / "rejected.parquet").to_pylist()
    assert [(r["point"], r["row"], r["integral"], r["reason"]) for r in rejected] == [
        ("p1", 1, "mixed", "column s is nan; accepted: a finite number"),
        ("p2", 2, "mixed", "column s is inf; accepted: a finite number"),
        ("p3", 3, "mixed", "column s is null; accepted: a finite number"),
        ("p4", 4, "mixed", "m1 = -1/2 is negative; accepted: >= 0"),
    ]
    kept = pq.read_table(tmp_path / "out" / "table").column("point").to_pylist()
    assert Counter(kept) == {f"p{i}": 7 for i in range(ROWS) if i not in {1, 2, 3, 4}}


@pytest.mark.parametrize(
    ("replace", "by", "cell", "reason"),
    [
        ('p_squared = "s"', 'p_squared = "1/(s - s)"', 1.0, "division by zero"),
        ('m_squared = "m_alder**2"', 'm_squared = "s"', -0.25, "m_squared = -1/4 is negative"),
        ('m_squared = "m_alder**2"', 'm_squared = ["1", "s"]', 0.5, "Im"),
        ("[accuracy]", '[conventions]\nmu_squared = "s"\n[accuracy]', 0.0, "not positive"),
    ],
)
def test_unusable_kinematics_reject_the_row(tmp_path, replace, by, cell, reason):
    config = write_run(tmp_path, points_table(3, s={0: cell, 1: cell, 2: cell}))
    config.write_text(config.read_text().replace(replace, by))
    outcome = run(config)
    assert outcome.exit_code == 3
    assert outcome.summary["rows_rejected"] == 3
    found = pq.read_table(tmp_path / "out" / "rejected.parquet").column("reason").to_pylist()
    assert all(reason in text for text in found), found
    assert pq.read_table(tmp_path / "out" / "table").num_rows == 0


def test_a_defect_in_one_row_does_not_end_the_run(tmp_path, monkeypatch):
    calls = []

    class Defective(evaluate_module.Evaluator):
        def __call__(self, *arguments):
            calls.append(arguments)
            if len(calls) == 2:
                raise ZeroDivisionError("for the test")
            return super().__call__(*arguments)

    monkeypatch.setattr(evaluate_module, "Evaluator", Defective)
    outcome = run(write_run(tmp_path, points_table(4)))
    assert outcome.summary["rows_rejected"] == 1
    reason = pq.read_table(tmp_path / "out" / "rejected.parquet").column("reason")[0].as_py()
    assert reason == "unexpected ZeroDivisionError: for the test (a defect; please report it)"


def test_below_digits_is_a_status_and_exit_code_3(tmp_path):
    config = write_run(tmp_path, points_table(3), digits=60)
    text = config.read_text().replace("digits = 60", "digits = 60\nmax_precision_bits = 64")
    config.write_text(text)
    outcome = run(config)
    assert outcome.exit_code == 3
    assert outcome.summary["rows_rejected"] == 0
    assert outcome.summary["results_below_digits"] > 0
    table = pd.read_parquet(tmp_path / "out" / "table")
    below = table[table["status"] == "below_digits"]
    assert below["digits"].min() < 60
    assert outcome.summary["worst_digits"] == table["digits"].min()


def test_wide_table_equals_the_long_one(reference, tmp_path):
    directory, _ = reference
    run(write_run(tmp_path, points_table(ROWS), layout="wide", key=""))
    wide = pd.read_parquet(tmp_path / "out" / "table")
    assert list(wide["row"]) == list(range(ROWS))
    table = pd.read_parquet(directory / "out" / "table").set_index(["point", "integral", "order"])
    for row in range(ROWS):
        for name, order, tag in (("mixed", 1, "1"), ("equal", 0, "0"), ("loop", -1, "m1")):
            line = table.loc[(f"p{row}", name, order)]
            for part in ("re", "im", "re_bound", "im_bound"):
                assert wide.loc[row, f"{name}_{tag}_{part}"] == line[part]
            assert wide.loc[row, f"{name}_region"] == line["region"]


@pytest.mark.parametrize(
    "keys",
    [
        pa.array([5, 5, None], pa.int32()),
        pa.array(["a", "b", "a"]).dictionary_encode(),
        pa.array([b"x", b"y", b"z"]),
        pa.array([[1], [2, 3], []], pa.list_(pa.int64())),
    ],
)
def test_the_key_keeps_its_type(tmp_path, keys):
    table = points_table(3).set_column(0, "point", keys)
    config = write_run(tmp_path, table, fraction='"all"', chunk_rows=2)
    run(config)
    found = pq.read_table(tmp_path / "out" / "cross_check.parquet")
    assert found.schema.field("point").type == keys.type
    part = pq.read_table(tmp_path / "out" / "table" / "part-00000.parquet")
    assert part.schema.field("point").type == keys.type
    assert part.column("point").to_pylist() == [x for x in keys.to_pylist()[:2] for _ in range(7)]


def test_sampling_depends_on_row_seed_and_name_alone(tmp_path):
    config = write_run(tmp_path, points_table(ROWS), fraction="0.3", chunk_rows=5)
    run(config)
    found = pq.read_table(tmp_path / "out" / "cross_check.parquet").to_pylist()
    chosen = {(r["row"], r["integral"]) for r in found}
    names = ("mixed", "equal", "loop")
    assert chosen == sampled(1, names)
    assert 0 < len(chosen) < 3 * ROWS
    assert sampled(2, names) != chosen


def sampled(seed: int, names: tuple[str, ...]) -> set[tuple[int, str]]:
    """The rows and integrals that the sample takes when each row is asked for alone."""
    return {(r, n) for r in range(ROWS) for n in names if sample(seed, n, r, 1, "0.3")[0]}


@pytest.mark.parametrize(("fraction", "checked"), [('"all"', 3 * 3), ('"none"', 0)])
def test_all_or_none(tmp_path, fraction, checked):
    outcome = run(write_run(tmp_path, points_table(3), fraction=fraction))
    found = pq.read_table(tmp_path / "out" / "cross_check.parquet").to_pylist()
    assert len({(r["row"], r["integral"]) for r in found}) == checked
    assert outcome.summary["cross_check"]["ok"] == len(found)


@pytest.mark.parametrize("arithmetic", ["balls", "mpmath"])
def test_a_wrong_number_fails_the_cross_check(arithmetic):
    good = bubble()
    table = write_integral(good, 16)
    found = cross_check(good, table, digits=10, arithmetic=arithmetic)
    assert [check.status for check in found] == ["ok"] * 3
    assert all(check.agreed_digits is None or check.agreed_digits >= 10 for check in found)
    wrong = bubble(p="5.0000001")
    object.__setattr__(wrong, "request", good.request)
    found = cross_check(wrong, write_integral(wrong, 16), digits=10, arithmetic=arithmetic)
    assert [check.status for check in found] == ["ok", "disagrees", "disagrees"]
    assert [check.agrees for check in found] == [True, False, False]
    assert 6 <= found[1].agreed_digits <= 8


def test_a_wrongly_rounded_number_fails_the_cross_check():
    good, other = bubble(), bubble(p="5.1")
    found = cross_check(good, write_integral(other, 16), digits=10, arithmetic="balls")
    assert [check.status for check in found] == ["ok", "disagrees", "disagrees"]


def test_failing_quadrature_is_inconclusive_and_says_why(monkeypatch):
    def unsupported(*arguments, **options):
        raise UnsupportedIntegralError("no convergent integral")

    monkeypatch.setattr(cross_check_module, "integrate_feynman", unsupported)
    good = bubble()
    found = cross_check(good, write_integral(good, 16), digits=10, arithmetic="balls")
    assert {(c.status, c.agrees, c.note) for c in found} == {
        ("inconclusive", None, "no convergent integral")
    }
    assert found[1].re == write_integral(good, 16).numbers[1].re


def test_disagreement_sets_exit_code_3_and_is_named(tmp_path, monkeypatch):
    integrate = cross_check_module.integrate_feynman

    def shifted(point, powers, dimension, orders, conventions, **options):
        moved = point.scaled(2) if len(powers) == 2 else point
        return integrate(moved, powers, dimension, orders, conventions, **options)

    monkeypatch.setattr(cross_check_module, "integrate_feynman", shifted)
    outcome = run(write_run(tmp_path, points_table(2), fraction='"all"'))
    assert outcome.exit_code == 3
    checks = outcome.summary["cross_check"]
    assert checks["disagrees"] == 6
    assert checks["disagreements"][0] == {"row": 0, "integral": "mixed", "order": 0}


def test_survey_agrees_with_the_run(reference):
    directory, _ = reference
    survey = survey_config(load_config(directory / "run.toml"))
    summary = json.loads((directory / "out" / "summary.json").read_text())
    assert survey.exit_code == 0
    assert survey.table_lines == summary["table_lines"]
    for name, entry in summary["integrals"].items():
        assert survey.regions[name] == {r: sum(by.values()) for r, by in entry["regions"].items()}
    assert 0 < survey.seconds < 60
    assert survey.check_seconds > 0


def test_survey_names_the_rows_that_will_be_rejected(tmp_path):
    config = write_run(tmp_path, points_table(ROWS, **BAD_ROWS))
    survey = survey_config(load_config(config))
    assert (survey.rows, survey.rows_rejected, survey.exit_code) == (ROWS, 4, 3)
    assert [(r.key, r.row) for r in survey.rejections] == [(f"p{i}", i) for i in (1, 2, 3, 4)]
    assert not (tmp_path / "out").exists()


# What worker processes import must not live in the tests.
DOUBLE = partial(partial, operator.mul, 2)


@pytest.mark.parametrize("workers", [1, 2])
def test_engine_yields_every_result_and_passes_errors_on(workers):
    assert sorted(run_tasks(DOUBLE, range(20), workers)) == list(range(0, 40, 2))
    with pytest.raises(TypeError, match="unsupported operand"):
        list(run_tasks(DOUBLE, [1, None, 2], workers))


def test_dead_worker_is_one_clear_error():
    with pytest.raises(EngineError, match="worker process died"):
        list(run_tasks(partial(partial, os._exit), range(8), 2))


@pytest.mark.parametrize("layout", ["long", "wide"])
def test_npz_holds_the_table(tmp_path, layout):
    formats = '["parquet", "npz"]'
    config = write_run(tmp_path, points_table(30), layout=layout, formats=formats)
    outcome = run_config(load_config(config))
    table = pq.read_table(outcome.directory / "table")
    first = (outcome.directory / "table.npz").read_bytes()
    with np.load(outcome.directory / "table.npz", allow_pickle=False) as arrays:
        assert set(arrays) == {*table.column_names, "loopint"}
        for name in table.column_names:
            expected = table.column(name).to_pandas().to_numpy()
            if arrays[name].dtype.kind == "f":
                assert np.array_equal(arrays[name], expected.astype(float), equal_nan=True)
            else:
                assert arrays[name].tolist() == expected.tolist()
        assert json.loads(str(arrays["loopint"]))["conventions"]["measure"] == "msbar"
    run_config(load_config(config), overwrite=True)
    assert (outcome.directory / "table.npz").read_bytes() == first
