"""A run that is killed, robbed of a worker, of its disk or of its input: nothing wrong survives."""

from __future__ import annotations

import json
import os
import random
import resource
import shutil
import signal
import subprocess
import sys
import time
from functools import partial
from pathlib import Path

import psutil
import pyarrow.parquet as pq
import pytest

from loopint.pipeline.chunks import ChunkEvaluator
from loopint.pipeline.config import load_config
from loopint.pipeline.errors import ConfigError
from loopint.pipeline.points import open_points
from loopint.pipeline.run import run_config
from loopint.pipeline.run_directory import RunDirectory, file_sha256
from tests.pipeline_files import file_contents, hear_interrupts, points_table, write_run

ROWS, CHUNK = 240, 4
FORMATS = '["parquet", "csv"]'


def write(directory: Path, **options) -> Path:
    options = {"chunk_rows": CHUNK, "formats": FORMATS} | options
    return write_run(directory, points_table(ROWS), **options)


def start(config: Path, *options: str, **process) -> subprocess.Popen:
    command = [sys.executable, "-m", "loopint.cli", "run", str(config), *options]
    return subprocess.Popen(
        command, stdout=subprocess.DEVNULL, stderr=subprocess.PIPE, text=True, **process
    )


def refused(process: subprocess.Popen) -> str:
    """The one sentence of a run that ends with exit code 2."""
    _, message = process.communicate(timeout=60)
    assert process.returncode == 2, message
    (line,) = message.splitlines()
    return line


def records(out: Path) -> int:
    return len(list((out / ".work").glob("chunk-*.json")))


def wait_for_records(process: subprocess.Popen, out: Path, count: int) -> None:
    deadline = time.monotonic() + 60
    while records(out) < count and process.poll() is None:
        assert time.monotonic() < deadline
        time.sleep(0.002)


def check_every_file_is_whole(out: Path) -> None:
    """What stands under its final name was written to the end, however the run was killed."""
    for path in [*out.glob("*.json"), *(out / ".work").glob("chunk-*.json")]:
        json.loads(path.read_text())
    for path in [*out.glob("*.parquet"), *out.glob("*/[!.]*.parquet")]:
        pq.read_table(path, partitioning=None)
    for path in (out / ".work").glob("chunk-*.json"):
        record = json.loads(path.read_text())
        part = RunDirectory(out).part(record["index"])
        assert file_sha256(part) == record["table_sha256"]


@pytest.fixture(scope="module")
def expected(tmp_path_factory) -> dict[str, bytes]:
    """The files of a run that nothing disturbs."""
    directory = tmp_path_factory.mktemp("reference")
    run_config(load_config(write(directory)))
    return file_contents(directory / "out")


def test_killed_again_and_again_at_random_moments(expected, tmp_path):
    """Six kills with both engines and one or two workers, then the run is left to finish."""
    moments = random.Random(20)
    config, out = write(tmp_path), tmp_path / "out"
    on_dask = write(tmp_path, name="dask.toml", workers=2)
    on_dask.write_text(on_dask.read_text().replace("[execution]", '[execution]\nengine = "dask"'))
    kept = []
    for turn in range(6):
        chosen = on_dask if turn == 3 else config
        options = ["--workers", "2"] if turn in (1, 3) else []
        process = start(chosen, *options)
        wait_for_records(process, out, records(out) + moments.randrange(1, 9))
        time.sleep(moments.uniform(0, 0.05))
        process.kill()
        process.communicate()
        check_every_file_is_whole(out)
        assert not (out / "summary.json").exists()
        kept.append(records(out))
    assert 0 < kept[0] < kept[-1] < ROWS / CHUNK
    assert kept == sorted(kept)
    outcome = run_config(load_config(config))
    assert kept[-1] * CHUNK <= outcome.summary["rows_resumed"] < ROWS
    assert file_contents(out) == expected
    assert not list(out.rglob(".*.tmp"))


def test_killed_while_the_closing_files_are_written(expected, tmp_path, monkeypatch):
    """Stopped before each rename of the last phase in turn."""
    config, out = write(tmp_path), tmp_path / "out"
    settings = load_config(config)
    run_config(settings)
    replace = os.replace
    for name in ("rejected.parquet", "cross_check.parquet", "table.csv", "summary.json"):
        for path in out.iterdir():
            if path.is_file() and path.name != "manifest.json":
                path.unlink()

        def stop(source: Path, target: Path, name: str = name) -> None:
            if target.name == name:
                raise SystemExit(9)
            replace(source, target)

        with monkeypatch.context() as patched:
            patched.setattr(os, "replace", stop)
            with pytest.raises(SystemExit):
                run_config(settings)
        check_every_file_is_whole(out)
        assert not (out / "summary.json").exists()
        assert run_config(settings).summary["rows_resumed"] == ROWS
        assert file_contents(out) == expected


def test_a_worker_that_is_killed_ends_the_run_with_one_sentence(expected, tmp_path):
    config, out = write(tmp_path, workers=2), tmp_path / "out"
    process = start(config)
    wait_for_records(process, out, 3)
    workers = [
        child
        for child in psutil.Process(process.pid).children()
        if "spawn_main" in " ".join(child.cmdline())
    ]
    assert len(workers) == 2
    workers[0].kill()
    line = refused(process)
    assert line.startswith("loopint: a worker process died, possibly for lack of memory;")
    assert line.endswith("the same command continues from them")
    assert not psutil.wait_procs(workers, timeout=10)[1]
    check_every_file_is_whole(out)
    assert 12 <= run_config(load_config(config)).summary["rows_resumed"] < ROWS
    assert file_contents(out) == expected


def test_orphaned_writers_of_another_plan_stop(tmp_path):
    """A worker of a cluster may outlive its driver; it must not write into the next run."""
    config = load_config(write(tmp_path))
    seen = []

    def replace_plan(done: int, total: int) -> None:
        manifest = tmp_path / "out" / "manifest.json"
        if done == CHUNK:
            seen.append(done)
            manifest.write_text(json.dumps({"plan_hash": "another"}))

    with pytest.raises(Exception, match="is not the directory of this run"):
        run_config(config, progress=replace_plan)
    assert seen == [CHUNK]
    assert records(tmp_path / "out") == 1


def test_two_writers_of_one_chunk_do_not_meet(expected, tmp_path):
    """Chunks of a killed run may still be under way when the run is continued."""
    config = load_config(write(tmp_path))
    evaluators: list[ChunkEvaluator] = []

    def write_the_next_chunks_too(done: int, total: int) -> None:
        plan = RunDirectory(config.output.directory).plan_hash()
        if not evaluators:
            source = open_points(config.points.file, config.points.key)
            evaluators.append(ChunkEvaluator(config, source, plan))
        if done < total:
            evaluators[0](done // CHUNK)

    run_config(config, progress=write_the_next_chunks_too)
    assert file_contents(tmp_path / "out") == expected


def test_points_that_change_during_the_run_end_it(expected, tmp_path):
    config, out, points = write(tmp_path), tmp_path / "out", tmp_path / "points.parquet"
    settings, original = load_config(config), points.read_bytes()

    def change(done: int, total: int) -> None:
        if done == 20:
            pq.write_table(points_table(ROWS, s={239: 1.25}), points)

    with pytest.raises(ConfigError, match=r"points\.parquet has changed since it was opened; acc"):
        run_config(settings, progress=change)
    assert not (out / "summary.json").exists()
    with pytest.raises(ConfigError, match=r"a different config, input or version; .*--overwrite"):
        run_config(settings)
    points.write_bytes(original)
    assert run_config(settings).summary["rows_resumed"] == 20
    assert file_contents(out) == expected


@pytest.mark.parametrize(
    ("workers", "largest", "file"),
    [(1, 9_000, "part-00000.parquet"), (2, 9_000, "part-0000"), (1, 30_000, "table.csv")],
)
def test_a_full_disk_is_one_sentence_and_the_run_continues(tmp_path, workers, largest, file):
    """A limit on the size of a file takes the place of the full disk."""
    table = points_table(120)
    config = write_run(tmp_path, table, chunk_rows=60, workers=workers, formats=FORMATS)
    limit = partial(resource.setrlimit, resource.RLIMIT_FSIZE, (largest, resource.RLIM_INFINITY))
    line = refused(start(config, preexec_fn=limit))
    out = tmp_path / "out"
    if file.startswith("part"):
        assert "/out/table/part-0000" in line
    else:
        assert f"/out/{file} cannot be written" in line
    assert line.endswith(
        "cannot be written: File too large; what is finished is kept, and the same command "
        "continues from it"
    )
    assert not (out / file).exists()
    assert not (out / "summary.json").exists()
    assert not list(out.rglob(".*.tmp"))
    check_every_file_is_whole(out)
    kept = records(out) * 60
    assert kept == (0 if file.startswith("part") else 120)
    outcome = run_config(load_config(config))
    assert outcome.summary["rows_resumed"] == kept
    fresh = write_run(tmp_path, table, out="fresh", name="f.toml", chunk_rows=60, formats=FORMATS)
    run_config(load_config(fresh))
    assert file_contents(out) == file_contents(tmp_path / "fresh")


def test_a_directory_that_cannot_be_written(tmp_path):
    inside_a_file = write(tmp_path, out="points.parquet/out")
    with pytest.raises(ConfigError, match=r"points\.parquet/out' cannot be written: Not a directo"):
        run_config(load_config(inside_a_file))
    if os.geteuid() == 0:
        return  # root may write everywhere
    locked = tmp_path / "locked"
    locked.mkdir(mode=0o500)
    with pytest.raises(ConfigError, match=r"locked/out' cannot be written: Permission denied; acc"):
        run_config(load_config(write(tmp_path, out="locked/out", name="locked.toml")))


def test_a_table_directory_that_vanishes_is_one_sentence(tmp_path):
    config = load_config(write(tmp_path))

    def remove(done: int, total: int) -> None:
        if done == CHUNK:
            shutil.rmtree(tmp_path / "out" / "table")

    with pytest.raises(Exception, match=r"part-00001\.parquet cannot be written: No such file"):
        run_config(config, progress=remove)
    assert run_config(config).summary["rows_resumed"] == 0


class Finalized:
    """What an interrupt can meet: a finalizer, whose exceptions Python drops."""

    def __del__(self):
        signal.raise_signal(signal.SIGINT)


@pytest.mark.filterwarnings("ignore::pytest.PytestUnraisableExceptionWarning")
def test_an_interrupt_that_python_drops_is_noticed(expected, tmp_path):
    config = load_config(write(tmp_path))
    hear_interrupts()

    def progress(done: int, _: int) -> None:
        if done == 3 * CHUNK:
            Finalized()

    with pytest.raises(KeyboardInterrupt):
        run_config(config, progress=progress)
    assert records(tmp_path / "out") == 4
    assert signal.getsignal(signal.SIGINT) is signal.default_int_handler
    assert run_config(config).summary["rows_resumed"] == 4 * CHUNK
    assert file_contents(tmp_path / "out") == expected


def test_what_a_replaced_worker_left_half_written_is_removed(expected, tmp_path):
    config, out = load_config(write(tmp_path)), tmp_path / "out"

    def progress(done: int, _: int) -> None:
        if done == 3 * CHUNK:
            (out / "table" / ".part-00001.parquet.0badc0de.tmp").write_bytes(b"PAR1")

    run_config(config, progress=progress)
    assert file_contents(out) == expected
    assert not list(out.rglob(".*.tmp"))
