"""The whole pipeline, Parquet to Parquet: rows per second and memory, by engine and workers.

    python -m tests.benchmarks.pipeline 100000 --digits 12 --json result.json

Each run is `loopint run` in a process of its own; "inside" leaves out the start of the program and
the report.  The last lines are what plain pyarrow takes to read the points and to read and write
the resulting table again, without evaluation, and what the evaluation takes alone.  Memory is the
peak of the largest process, workers included.
"""

from __future__ import annotations

import argparse
import json
import os
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from loopint import bubble_array

CONFIG = """
[points]
file = "{points}"
[[integral]]
name = "self_energy"
family = "bubble"
p_squared = "s"
{masses}
[accuracy]
digits = {digits}
[cross_check]
fraction = {fraction}
[output]
directory = "{out}"
layout = "wide"
[execution]
engine = "{engine}"
workers = {workers}
"""
MASSES = {
    "squared": 'm1_squared = "m1_squared"\nm2_squared = "m2_squared"',
    "masses": 'm1 = "m1"\nm2 = "m2"',  # m^2 is rounded
}
BATCH = 1_000_000


def write_points(path: Path, rows: int) -> None:
    """Write masses between 0.1 and 2 and p^2 on both sides of the threshold."""
    source = np.random.default_rng(7)
    names = ("s", "m1_squared", "m2_squared", "m1", "m2")
    with pq.ParquetWriter(path, pa.schema([(name, pa.float64()) for name in names])) as writer:
        for start in range(0, rows, BATCH):
            count = min(BATCH, rows - start)
            first, second = (source.uniform(0.1, 2, count) for _ in range(2))
            s = source.uniform(-2, 3, count) * (first + second) ** 2
            writer.write_table(pa.table([s, first**2, second**2, first, second], names=names))


def run(
    directory: Path, engine: str, workers: int, digits: int, fraction: str, masses: str
) -> dict:
    """Run once and return seconds, rates and memory."""
    name = f"{engine}-{workers}"
    config = directory / f"{name}.toml"
    out = directory / name
    config.write_text(
        CONFIG.format(
            points=directory / "points.parquet",
            out=out,
            engine=engine,
            workers=workers,
            digits=digits,
            fraction=fraction,
            masses=MASSES[masses],
        )
    )
    environment = {k: v for k, v in os.environ.items() if k != "PYTHONDONTWRITEBYTECODE"}
    started = time.perf_counter()
    process = subprocess.Popen(
        [sys.executable, "-m", "loopint.cli", "run", str(config)],
        stdout=subprocess.DEVNULL,
        env=environment,  # compiled modules are kept, as where the package is installed
    )
    _, status, usage = os.wait4(process.pid, 0)  # with the largest of its workers
    seconds = time.perf_counter() - started
    if status:
        raise SystemExit(f"{name}: exit code {os.waitstatus_to_exitcode(status)}")
    summary = json.loads((out / "summary.json").read_text())
    return {
        "engine": engine,
        "workers": workers,
        "rows": summary["rows_in"],
        "seconds": round(seconds, 2),
        "inside": summary["elapsed_seconds"],
        "rows_per_second": round(summary["rows_in"] / seconds),
        "peak_mib": round(usage.ru_maxrss / 1024),
        "parts": len(list((out / "table").iterdir())),
    }


def plain_pyarrow(directory: Path, table: Path) -> float:
    """Return the seconds that reading the points and copying the result take, in one process."""
    started = time.perf_counter()
    names = ["s", "m1_squared", "m2_squared"]
    for _ in pq.ParquetFile(directory / "points.parquet").iter_batches(columns=names):
        pass
    for part in sorted(table.iterdir()):
        pq.write_table(pq.read_table(part), directory / "copy.parquet", compression="zstd")
    return time.perf_counter() - started


def kernel_alone(directory: Path) -> float:
    """Return the seconds of `bubble_array` over the points, read before."""
    names = ["s", "m1_squared", "m2_squared"]
    table = pq.read_table(directory / "points.parquet", columns=names)
    columns = [c.to_numpy() for c in table.columns]
    started = time.perf_counter()
    bubble_array(*columns, orders=(-1, 0))
    return time.perf_counter() - started


def same_bytes(first: Path, second: Path) -> bool:
    """Whether two runs gave the same table."""
    names = [sorted(path.name for path in one.iterdir()) for one in (first, second)]
    return names[0] == names[1] and all(
        (first / name).read_bytes() == (second / name).read_bytes() for name in names[0]
    )


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("rows", type=int, nargs="?", default=10_000)
    parser.add_argument("--digits", type=int, default=12)
    parser.add_argument("--cross-check", default='"none"', help="fraction, as in a config")
    parser.add_argument("--runs", default="local:1,local:2,dask:1,dask:2", help="engine:workers")
    parser.add_argument("--kinematics", choices=list(MASSES), default="squared")
    parser.add_argument("--json", type=Path, help="write the figures to this file")
    options = parser.parse_args()
    with tempfile.TemporaryDirectory() as name:
        directory = Path(name)
        write_points(directory / "points.parquet", options.rows)
        print(f"{options.rows} rows, {options.digits} digits, wide layout, orders -1..0")
        print("engine  workers  seconds    inside    rows/s  speed-up  peak MiB  same bytes")
        found = []
        for engine, workers in (one.split(":") for one in options.runs.split(",")):
            one = run(
                directory,
                engine,
                int(workers),
                options.digits,
                options.cross_check,
                options.kinematics,
            )
            found.append(one)
            tables = [directory / f"{o['engine']}-{o['workers']}" / "table" for o in found]
            one["speed_up"] = round(found[0]["seconds"] / one["seconds"], 2)
            one["same_bytes"] = same_bytes(tables[0], tables[-1])
            print(
                f"{engine:6}  {workers:>7}  {one['seconds']:7.2f}  {one['inside']:8.2f}"
                f"  {one['rows_per_second']:8}  {one['speed_up']:8}  {one['peak_mib']:8}"
                f"  {one['same_bytes']}",
                flush=True,
            )
        seconds = plain_pyarrow(directory, tables[0])
        kernel = kernel_alone(directory)
        first = found[0]["seconds"]
        print(f"plain pyarrow, reading and writing alone: {seconds:.2f} s")
        print(
            f"bubble_array alone: {kernel:.2f} s; first run / (both) = "
            f"{first / (kernel + seconds):.2f}"
        )
    if options.json:
        result = {"digits": options.digits, "runs": found, "plain_pyarrow_seconds": seconds}
        result["kernel_seconds"] = kernel
        options.json.write_text(json.dumps(result, indent=2) + "\n")


if __name__ == "__main__":
    main()
