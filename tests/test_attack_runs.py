"""Attacks on a run from outside: signals, a second run, clocks, versions, memory, foreign files."""

from __future__ import annotations

import json
import os
import random
import signal
import subprocess
import sys
import time
from pathlib import Path

import psutil
import pyarrow as pa
import pytest

from loopint.cli import main
from loopint.pipeline import manifest, points
from loopint.pipeline.chunks import ChunkEvaluator
from loopint.pipeline.config import load_config
from loopint.pipeline.errors import ConfigError
from loopint.pipeline.run import run_config
from loopint.pipeline.run_directory import RunDirectory
from loopint.pipeline.verify import verify_run
from tests.pipeline_files import file_contents, hear_interrupts, points_table, write_run

ROWS, CHUNK = 240, 4


def write(directory: Path, **options) -> Path:
    return write_run(directory, points_table(ROWS), **{"chunk_rows": CHUNK, **options})


def start(config: Path, *options: str, **process) -> subprocess.Popen:
    command = [sys.executable, "-m", "loopint.cli", "run", str(config), *options]
    process.setdefault("preexec_fn", hear_interrupts)
    return subprocess.Popen(
        command, stdout=subprocess.DEVNULL, stderr=subprocess.PIPE, text=True, **process
    )


def wait_for_chunks(process: subprocess.Popen, out: Path, count: int) -> None:
    while len(list((out / ".work").glob("chunk-*.json"))) < count:
        assert process.poll() is None
        time.sleep(0.002)


@pytest.fixture(scope="module")
def expected(tmp_path_factory) -> dict[str, bytes]:
    directory = tmp_path_factory.mktemp("reference")
    run_config(load_config(write(directory)))
    return file_contents(directory / "out")


@pytest.mark.parametrize("workers", [1, 2])
def test_terminated_and_interrupted_at_random_moments(expected, tmp_path, workers):
    """SIGTERM and SIGINT in turn; no process is left, and the next run continues."""
    moments = random.Random(workers)
    config, out = write(tmp_path), tmp_path / "out"
    for turn in range(4 // workers):
        process = start(config, "--workers", str(workers))
        wait_for_chunks(process, out, len(list((out / ".work").glob("chunk-*.json"))) + 2)
        time.sleep(moments.uniform(0, 0.03))
        children = psutil.Process(process.pid).children(recursive=True)
        process.send_signal(signal.SIGTERM if turn % 2 else signal.SIGINT)
        _, message = process.communicate(timeout=60)
        if turn % 2:
            assert process.returncode == -signal.SIGTERM
        else:
            assert process.returncode == 130
            assert message == "loopint: interrupted; the same command continues\n"
        assert not psutil.wait_procs(children, timeout=30)[1]
    outcome = run_config(load_config(config))
    assert outcome.summary["rows_resumed"] >= 2 * (4 // workers) * CHUNK
    assert file_contents(out) == expected


def test_a_second_run_is_refused_and_disturbs_nothing(expected, tmp_path):
    config, out = write(tmp_path), tmp_path / "out"
    first = start(config)
    wait_for_chunks(first, out, 1)
    with pytest.raises(ConfigError, match="being written by another run"):
        run_config(load_config(config))
    with pytest.raises(ConfigError, match="being written by another run"):
        run_config(load_config(config), overwrite=True)
    assert first.wait(timeout=60) == 0
    assert file_contents(out) == expected
    first.communicate()


def test_a_lock_does_not_outlive_its_process(expected, tmp_path):
    config, out = write(tmp_path), tmp_path / "out"
    process = start(config)
    wait_for_chunks(process, out, 1)
    process.kill()
    process.communicate()
    assert (out / ".work" / "lock").exists()
    run_config(load_config(config))
    assert file_contents(out) == expected


def interrupted(config: Path, after: int) -> None:
    """Stop a run in this process when so many rows are done."""

    def progress(done: int, _: int) -> None:
        if done >= after:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        run_config(load_config(config), progress=progress)


@pytest.mark.parametrize("shift", [-(10**9), 10**9 // 2])
def test_clocks_that_jump_change_nothing(expected, tmp_path, monkeypatch, shift):
    """What is finished is known by hashes, not by times."""
    config, out = write(tmp_path), tmp_path / "out"
    interrupted(config, ROWS // 2)
    moved = time.time() + shift
    for path in [tmp_path / "points.parquet", *out.rglob("*")]:
        os.utime(path, (moved, moved))
    monkeypatch.setattr(time, "time", lambda: moved - 1)
    outcome = run_config(load_config(config))
    assert outcome.summary["rows_resumed"] >= ROWS // 2
    assert file_contents(out) == expected


def test_another_version_does_not_continue_a_run(expected, tmp_path, monkeypatch):
    config, out = write(tmp_path), tmp_path / "out"
    interrupted(config, ROWS // 2)
    before = manifest.versions()
    with monkeypatch.context() as patch:
        patch.setattr(manifest, "versions", lambda: before | {"loopint": "99.0"})
        with pytest.raises(ConfigError, match=r"different config, input or version.*--overwrite"):
            run_config(load_config(config))
        outcome = run_config(load_config(config), overwrite=True)
        assert outcome.summary["rows_resumed"] == 0
    with pytest.raises(ConfigError, match="different config, input or version"):
        run_config(load_config(config))
    assert run_config(load_config(config), overwrite=True).exit_code == 0
    assert file_contents(out) == expected


def test_damaged_and_foreign_files_in_the_run_directory(expected, tmp_path):
    """Damage is found by the hashes and computed again; what is not ours stays."""
    config, out = write(tmp_path), tmp_path / "out"
    interrupted(config, ROWS // 2)
    directory = RunDirectory(out)
    (out / "notes.txt").write_text("mine")
    directory.part(0).write_bytes(directory.part(1).read_bytes())
    directory.part(2).write_bytes(directory.part(2).read_bytes()[:-1])
    directory.part(3).unlink()
    (out / ".work" / "chunk-00004.json").write_text("{")
    (out / ".work" / "chunk-00005.json").write_text('{"index": 5}')
    outcome = run_config(load_config(config))
    assert ROWS // 2 - 6 * CHUNK <= outcome.summary["rows_resumed"] < ROWS // 2
    assert file_contents(out) == expected
    assert (out / "notes.txt").read_text() == "mine"
    assert verify_run(out, rows=3).findings == []


def test_a_damaged_manifest_is_not_continued(tmp_path):
    config, out = write(tmp_path), tmp_path / "out"
    interrupted(config, ROWS // 2)
    for content in ("", "[]", json.dumps({"plan_hash": 5}), "\x00"):
        (out / "manifest.json").write_text(content)
        with pytest.raises(ConfigError, match=r"--overwrite|which no loopint run wrote"):
            run_config(load_config(config))


def test_arrow_without_memory_is_no_damaged_file(tmp_path, monkeypatch):
    """Arrow's out-of-memory error is also one of its general errors."""
    config = load_config(write(tmp_path))

    def fails(*_: object, **__: object) -> None:
        raise pa.ArrowMemoryError("malloc of size 1 failed")

    monkeypatch.setattr(points.pq.ParquetFile, "iter_batches", fails)
    with pytest.raises(MemoryError):
        run_config(config)


def test_lack_of_memory_is_one_sentence_and_the_run_continues(
    expected, tmp_path, monkeypatch, capsys
):
    config, out = write(tmp_path), tmp_path / "out"
    original = ChunkEvaluator.__call__

    def lacks(self: ChunkEvaluator, index: int) -> object:
        if index == 5:
            raise MemoryError
        return original(self, index)

    with monkeypatch.context() as patch:
        patch.setattr(ChunkEvaluator, "__call__", lacks)
        patch.setattr("sys.argv", ["loopint", "run", str(config)])
        with pytest.raises(SystemExit) as ended:
            main()
    assert ended.value.code == 2
    message = "out of memory; accepted: a smaller [execution] chunk_rows or fewer workers"
    assert capsys.readouterr().err == f"loopint: {message}\n"
    assert run_config(load_config(config)).summary["rows_resumed"] == 5 * CHUNK
    assert file_contents(out) == expected
