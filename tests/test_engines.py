"""Engines: the same bytes from every one, lost workers, clusters that do not fit, flat memory."""

from __future__ import annotations

import json
import operator
import os
import pickle
import signal
import subprocess
import sys
import threading
import time
import tracemalloc
from functools import partial
from pathlib import Path

import numpy as np
import psutil
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from loopint.pipeline import dask_engine
from loopint.pipeline.account import Account
from loopint.pipeline.chunks import ChunkEvaluator, default_chunk_rows, open_run
from loopint.pipeline.config import load_config
from loopint.pipeline.engines import EngineError, choose_engine
from loopint.pipeline.errors import ConfigError
from loopint.pipeline.points import open_points
from loopint.pipeline.run import run_config
from loopint.pipeline.run_directory import MAX_PARTS, ChunkRecord, OutputError
from tests.pipeline_files import file_contents, points_table, write_run

ROWS = 40
DOUBLE = partial(partial, operator.mul, 2)  # what workers import must not live in the tests


def with_dask(config: Path, scheduler: str | None = None) -> Path:
    """Let a config use Dask, on a cluster of its own or on a running one."""
    text = config.read_text().replace("[execution]", '[execution]\nengine = "dask"')
    if scheduler:
        text = text.replace("workers = 1", f'scheduler = "{scheduler}"')
    config.write_text(text)
    return config


@pytest.fixture(scope="module")
def expected(tmp_path_factory) -> dict[str, bytes]:
    """The files of a run in one process."""
    directory = tmp_path_factory.mktemp("reference")
    run_config(load_config(write_run(directory, points_table(ROWS), formats='["csv"]')))
    return file_contents(directory / "out")


class RunningCluster:
    """A scheduler and workers started from the command line, in a directory of their own."""

    def __init__(self, directory: Path) -> None:
        self.directory = directory
        self.file = directory / "scheduler.json"
        self.processes: list[subprocess.Popen] = []
        self.start("dask_scheduler", "--port", "0", "--host", "127.0.0.1", "--no-dashboard")
        deadline = time.monotonic() + 60
        while not (self.file.exists() and self.file.read_text().endswith("}")):
            assert time.monotonic() < deadline
            time.sleep(0.05)
        self.address = json.loads(self.file.read_text())["address"]

    def start(self, command: str, *options: str) -> subprocess.Popen:
        line = (sys.executable, "-m", f"distributed.cli.{command}", *options)
        if command == "dask_worker":
            line += ("--no-dashboard", "--local-directory", str(self.directory))
        process = subprocess.Popen(
            (*line, "--scheduler-file", str(self.file)),
            cwd=self.directory,
            env=os.environ | {"PYTHONPATH": str(Path(dask_engine.__file__).parents[2])},
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
        )
        self.processes.append(process)
        return process

    def worker(self, threads: int = 1) -> subprocess.Popen:
        return self.start("dask_worker", "--nthreads", str(threads), "--no-nanny")

    def stop(self) -> None:
        for process in reversed(self.processes):
            process.kill()
            process.wait()


@pytest.fixture
def cluster(tmp_path_factory):
    found = RunningCluster(tmp_path_factory.mktemp("cluster"))
    yield found
    found.stop()


def test_a_cluster_of_its_own_gives_the_same_bytes(expected, tmp_path):
    config = with_dask(write_run(tmp_path, points_table(ROWS), workers=2, formats='["csv"]'))
    outcome = run_config(load_config(config))
    assert (outcome.summary["engine"], outcome.summary["workers"]) == ("dask", 2)
    assert file_contents(tmp_path / "out") == expected
    again = run_config(load_config(config))  # nothing is left to do: no cluster is started
    assert again.summary["rows_resumed"] == ROWS
    assert again.summary["elapsed_seconds"] < outcome.summary["elapsed_seconds"]


def test_a_running_cluster_gives_the_same_bytes_though_a_worker_dies(
    expected, tmp_path, monkeypatch, cluster
):
    """The workers live in another directory and the paths of the run are relative."""
    monkeypatch.chdir(tmp_path)
    config = write_run(Path(), points_table(ROWS), formats='["csv"]')
    settings = load_config(with_dask(config, cluster.address))
    assert not settings.output.directory.is_absolute()
    victim = cluster.worker()
    killed = []

    def kill_at_first_chunk(done: int, total: int) -> None:
        if 0 < done < total and not killed:
            killed.append(done)
            victim.send_signal(signal.SIGKILL)
            victim.wait()
            cluster.worker()

    outcome = run_config(settings, progress=kill_at_first_chunk)
    assert killed == [8]
    assert outcome.summary["rows_in_table"] == ROWS
    assert outcome.summary["workers"] is None
    assert file_contents(tmp_path / "out") == expected


def test_a_worker_that_dies_on_every_attempt_is_one_clear_error():
    engine = choose_engine("dask", 2)
    with pytest.raises(EngineError, match="lost its worker process several times"):
        list(engine(partial(partial, os._exit), range(2)))
    assert not [child for child in psutil.Process().children() if "spawn" in str(child.cmdline())]


def test_the_engine_passes_errors_on_and_keeps_few_tasks_outstanding(cluster):
    seen = []

    class Tasks(list):
        def __iter__(self):
            for task in super().__iter__():
                seen.append(task)
                yield task

    cluster.worker()
    engine = choose_engine("dask", 1, cluster.address)
    results = engine(DOUBLE, Tasks(range(100)))
    found = [next(results) for _ in range(10)]
    assert len(seen) <= 10 + dask_engine.TASKS_PER_WORKER
    assert sorted([*found, *results]) == list(range(0, 200, 2))
    with pytest.raises(TypeError, match="unsupported operand"):
        list(engine(DOUBLE, [1, None, 2]))


def test_workers_with_threads_are_refused(cluster):
    cluster.worker(threads=2)
    engine = choose_engine("dask", 1, cluster.address)
    with pytest.raises(EngineError, match=r"has 2 threads; accepted: .*--nthreads 1"):
        list(engine(DOUBLE, range(3)))


def test_a_scheduler_without_workers_or_lost_is_one_clear_error(monkeypatch, cluster):
    monkeypatch.setattr(dask_engine, "CONNECT_SECONDS", 1)
    engine = choose_engine("dask", 1, cluster.address)
    with pytest.raises(EngineError, match="has no workers; accepted: at least one"):
        list(engine(DOUBLE, range(3)))
    cluster.worker()
    monkeypatch.setattr(dask_engine, "CONNECT_SECONDS", 30)
    results = engine(partial(partial, time.sleep), [0, *[60] * 6])
    assert next(results) is None
    cluster.processes[0].kill()
    with pytest.raises(EngineError, match=r"connection to the scheduler tcp://.* was lost"):
        next(results)


def test_an_address_where_nothing_listens(monkeypatch):
    monkeypatch.setattr(dask_engine, "CONNECT_SECONDS", 1)
    engine = choose_engine("dask", 1, "tcp://127.0.0.1:9")
    with pytest.raises(EngineError, match=r"scheduler = 'tcp://127.0.0.1:9' cannot be reached"):
        list(engine(DOUBLE, range(3)))


def test_other_versions_on_a_worker_are_refused():
    versions = dask_engine.decisive_versions()
    task = pickle.dumps(DOUBLE)
    assert dask_engine._do(versions, task, 4) == 8
    with pytest.raises(EngineError, match=r"has pyarrow .*; accepted: 1\.0, as the process"):
        dask_engine._do(versions | {"pyarrow": "1.0"}, task, 4)


def test_without_dask_the_message_says_what_to_install(tmp_path, monkeypatch):
    monkeypatch.setitem(sys.modules, "distributed", None)
    config = with_dask(write_run(tmp_path, points_table(4)))
    with pytest.raises(ConfigError, match=r"accepted: pip install 'loopint\[dask\]'"):
        run_config(load_config(config))
    assert not (tmp_path / "out").exists()


def test_a_directory_that_a_worker_does_not_share_is_one_clear_error(tmp_path):
    config = load_config(write_run(tmp_path, points_table(4)))
    source = open_points(config.points.file, "point")
    with pytest.raises(OutputError, match=r"out is not the directory of this run for a worker"):
        ChunkEvaluator(config, source, "0" * 64)(0)


def test_workers_and_a_scheduler_exclude_each_other(tmp_path):
    config = with_dask(write_run(tmp_path, points_table(4)), "tcp://127.0.0.1:9")
    with pytest.raises(ConfigError, match=r"workers = 2 cannot be chosen with .*scheduler"):
        run_config(load_config(config), workers=2)


def test_chunks_have_a_sensible_default_size(tmp_path):
    assert default_chunk_rows(10**8, 16) == 8000
    assert default_chunk_rows(10**7, 500) == 1000
    assert -(-(10**10) // default_chunk_rows(10**10, 16)) <= MAX_PARTS
    config = write_run(tmp_path, points_table(600))
    config.write_text(config.read_text().replace("chunk_rows = 8", ""))
    opened = open_run(load_config(config))
    assert [opened.chunk_bounds(i) for i in range(opened.chunk_count)] == [
        (0, 250), (250, 250), (500, 100),
    ]  # fmt: skip


def test_more_parts_than_their_names_can_sort_are_refused(tmp_path):
    table = pa.table(
        {name: np.ones(MAX_PARTS + 1) for name in ("point", "s", "m_alder", "m_cedar")}
    )
    config = write_run(tmp_path, table, chunk_rows=1)
    with pytest.raises(ConfigError, match=r"chunk_rows = 1 makes more than 100000 files"):
        run_config(load_config(config))


def record(index: int) -> ChunkRecord:
    regions = {f"region_{i}": {"ok": index} for i in range(8)}
    wrong = [(10 * index + i // 2, "loop", i % 2) for i in range(20)]
    return ChunkRecord(
        index, 10, 10, 0, 10, "0" * 64, counts={"loop": regions}, worst_digits={"loop": 17},
        checks={"loop": {"disagrees": 20}}, worst_agreement={"loop": 3}, disagreements=wrong,
    )  # fmt: skip


def test_the_account_does_not_depend_on_the_order_and_stays_small():
    account = Account(["loop"])
    order = np.random.default_rng(5).permutation(2000).tolist()
    tracemalloc.start()
    for index in order:
        account.add(record(index))
    size, _ = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    assert size < 2000 * 2000
    summary = account.summary(20_000)
    assert summary["integrals"]["loop"]["regions"]["region_3"] == {"ok": 1999 * 1000}
    assert [found["row"] for found in summary["cross_check"]["disagreements"]] == [
        i // 2 for i in range(20)
    ]
    assert summary["cross_check"]["disagrees"] == 40_000
    assert [one.index for one in account.records()] == list(range(2000))


def rss() -> int:
    return psutil.Process().memory_info().rss


def test_reading_and_merging_take_the_same_memory_for_ten_times_the_rows(tmp_path):
    """A source of 32 MB in one row group; parts of 24 MB together; each in its own process."""
    peaks = {}
    for rows in (200_000, 2_000_000):
        directory = tmp_path / str(rows)
        directory.mkdir()
        source = np.random.default_rng(3)
        table = pa.table({name: source.uniform(size=rows) for name in ("s", "m")})
        pq.write_table(table, directory / "points.parquet", row_group_size=rows)
        done = subprocess.run(
            [sys.executable, "-c", STREAM, str(directory)],
            check=True, capture_output=True, text=True,
        )  # fmt: skip
        start, end = map(int, done.stdout.split())
        peaks[rows] = end - start
    assert peaks[2_000_000] < peaks[200_000] + 40 * 2**20, peaks


STREAM = """
import resource, sys
from pathlib import Path
import pyarrow as pa
from loopint.pipeline.points import open_points
from loopint.pipeline.tables import merge_parquet, write_csv, write_parquet
pa.array([0.0])
peak = lambda: 1024 * resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
start = peak()
directory = Path(sys.argv[1])
source = open_points(directory / "points.parquet")
source.hashes()
parts = []
for first in range(0, source.row_count, 8000):
    parts.append(directory / f"part-{first}.parquet")
    write_parquet(parts[-1], source.read_rows(first, 8000, ["s", "m"]))
merge_parquet(directory / "merged.parquet", source.schema, parts)
write_csv(directory / "merged.csv", source.schema, parts)
assert open_points(directory / "merged.parquet").row_count == source.row_count
print(start, peak())
"""


def test_memory_of_a_long_run_is_flat(tmp_path):
    """200 chunks in one process: from chunk 50 on nothing accumulates."""
    config = write_run(tmp_path, points_table(400), chunk_rows=2, fraction='"none"')
    sizes = []

    def measure(done: int, total: int) -> None:
        if done in (100, 400):
            sizes.append((tracemalloc.get_traced_memory()[0], rss()))

    tracemalloc.start()
    run_config(load_config(config), progress=measure)
    tracemalloc.stop()
    (python, whole), (python_end, whole_end) = sizes
    assert python_end - python < 150 * 3000  # 150 slim records and no more
    assert whole_end - whole < 20 * 2**20


def test_precision_is_safe_with_threads_in_a_worker(monkeypatch):
    """A worker that joins late with several threads still does one task at a time."""
    busy, most = [], []

    def task(_: int) -> None:
        busy.append(1)
        most.append(len(busy))
        time.sleep(0.01)
        busy.pop()

    monkeypatch.setattr(dask_engine, "_made", lambda pickled: task)
    versions = dask_engine.decisive_versions()
    threads = [threading.Thread(target=dask_engine._do, args=(versions, b"", i)) for i in range(8)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert most == [1] * 8
