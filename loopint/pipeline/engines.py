"""Where tasks run: in this process, on a pool of worker processes, or on a Dask cluster."""

from __future__ import annotations

import multiprocessing
import os
import signal
import threading
from concurrent.futures import FIRST_COMPLETED, Future, ProcessPoolExecutor, wait
from concurrent.futures.process import BrokenProcessPool
from functools import partial
from itertools import islice
from multiprocessing import connection
from typing import TYPE_CHECKING, Any, TypeAlias, TypeVar

from loopint.pipeline.errors import EngineError
from loopint.pipeline.interrupts import interrupts_held
from loopint.pipeline.startup import leave_out_pandas

if TYPE_CHECKING:
    from collections.abc import Callable, Generator, Iterator, Sequence

Task = TypeVar("Task")
Result = TypeVar("Result")


Engine: TypeAlias = (
    "Callable[[Callable[[], Callable[[Any], Any]], Sequence[Any]], Generator[Any, None, None]]"
)
"""Takes `make` and `tasks` and yields results; see `run_tasks`."""


def choose_engine(name: str, workers: int, scheduler: str | None = None) -> Engine:
    """Return the engine of that name.

    Parameters
    ----------
    name
        "local" or "dask".
    workers
        Number of worker processes; with a scheduler it has its own.
    scheduler
        Address of a running Dask scheduler.

    Raises
    ------
    ConfigError
        If Dask is not installed.
    """
    if name == "dask":
        from loopint.pipeline import dask_engine  # noqa: PLC0415 - optional

        dask_engine.require_dask()
        return partial(dask_engine.run_tasks_on_dask, workers=workers, scheduler=scheduler)
    return partial(run_tasks, workers=workers)


def usable_cores() -> int:
    """Return the number of cores this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return max(1, len(os.sched_getaffinity(0)))
    return os.cpu_count() or 1  # pragma: no cover - not on Linux


def run_tasks(
    make: Callable[[], Callable[[Task], Result]], tasks: Sequence[Task], workers: int
) -> Generator[Result, None, None]:
    """Yield the result of every task, in the order in which they finish.

    Parameters
    ----------
    make
        Called once in each process; returns the function that does a task.  Must be picklable,
        like the tasks and results, if there is more than one worker.
    tasks
        What to do.
    workers
        Number of processes.  One worker, or one task, runs in this process.

    Raises
    ------
    EngineError
        If a worker process dies.
    """
    if workers <= 1 or len(tasks) <= 1:
        function = make()
        for task in tasks:
            yield function(task)
        return
    others = set(multiprocessing.active_children())
    pool = ProcessPoolExecutor(
        min(workers, len(tasks)),
        mp_context=multiprocessing.get_context("spawn"),
        initializer=_start_worker,
        initargs=(make,),
    )
    try:
        yield from _results(pool, iter(tasks), 2 * workers)
    except BrokenProcessPool:
        raise EngineError(
            "a worker process died, possibly for lack of memory; the finished chunks are kept and "
            "the same command continues from them"
        ) from None
    except BaseException:  # also Ctrl-C: do not wait for the chunks under way
        for process in set(multiprocessing.active_children()) - others:
            process.terminate()
        raise
    finally:
        pool.shutdown(wait=True, cancel_futures=True)


def _results(pool: ProcessPoolExecutor, tasks: Iterator[Any], window: int) -> Iterator[Any]:
    """Keep `window` tasks submitted and yield results as they come."""
    running: set[Future[Any]] = set()
    while True:
        for task in islice(tasks, window - len(running)):
            with interrupts_held():  # a new worker inherits this: Ctrl-C is for the parent
                running.add(pool.submit(_do, task))
        if not running:
            return
        done, running = wait(running, return_when=FIRST_COMPLETED)
        for future in done:
            yield future.result()


_function: Callable[[Any], Any] | None = None


def _start_worker(make: Callable[[], Callable[[Any], Any]]) -> None:
    global _function  # noqa: PLW0603 - one function per worker process, set once
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # also where it could not be held
    threading.Thread(target=_die_with_parent, daemon=True).start()
    leave_out_pandas()
    _function = make()


def _die_with_parent() -> None:
    parent = multiprocessing.parent_process()
    if parent is not None:
        connection.wait([parent.sentinel])
        os._exit(1)


def _do(task: Any) -> Any:  # noqa: ANN401 - whatever the function takes and gives
    assert _function is not None
    return _function(task)
