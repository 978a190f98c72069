"""Tasks on a Dask cluster: one on this machine, or one that is already running.

The contract is that of `loopint.pipeline.engines.run_tasks`.  Tasks write their own files; only
their small results travel.  The precision of python-flint belongs to a process, so every worker is
a process that does one task at a time.
"""

from __future__ import annotations

import logging
import pickle
import socket
import threading
import uuid
from contextlib import ExitStack, contextmanager
from functools import lru_cache
from itertools import islice
from typing import TYPE_CHECKING, Any, TypeVar

from loopint.pipeline.errors import ConfigError, EngineError
from loopint.pipeline.interrupts import interrupts_held
from loopint.pipeline.manifest import decisive_versions

if TYPE_CHECKING:
    from collections.abc import Callable, Generator, Iterator, Sequence

Task = TypeVar("Task")
Result = TypeVar("Result")

KEPT_BYTES = 2**28  # free memory that a worker of our own keeps
CONNECT_SECONDS = 20  # to reach a scheduler, and for its first worker to appear
TASKS_PER_WORKER = 2  # one under way and one waiting: what is outstanding stays small
CONTINUES = "the finished chunks are kept and the same command continues from them"


def require_dask() -> None:
    """Raise `ConfigError` if Dask is not installed."""
    try:
        import distributed  # noqa: F401, PLC0415 - optional, and slow to import
    except ImportError as error:
        raise ConfigError(
            f'[execution] engine = "dask" needs a package that is not installed ({error}); '
            "accepted: pip install 'loopint[dask]', or engine = \"local\""
        ) from None


def run_tasks_on_dask(
    make: Callable[[], Callable[[Task], Result]],
    tasks: Sequence[Task],
    workers: int,
    scheduler: str | None = None,
) -> Generator[Result, None, None]:
    """Yield the result of every task, in the order in which they finish.

    A task whose worker is lost is given to another one, three times at most.

    Parameters
    ----------
    make
        Called once in each worker; returns the function that does a task.
    tasks
        What to do.
    workers
        Number of processes of a cluster on this machine; ignored with a scheduler.
    scheduler
        Address of a running scheduler whose workers have the same versions installed.

    Raises
    ------
    EngineError
        If the scheduler cannot be reached or is lost, if workers have several threads or other
        versions, or if a task loses its worker again and again.
    """
    from distributed import KilledWorker  # noqa: PLC0415
    from distributed.client import FutureCancelledError  # noqa: PLC0415
    from distributed.comm import CommClosedError  # noqa: PLC0415

    with ExitStack() as stack:
        client = stack.enter_context(_client(min(workers, len(tasks)), scheduler))
        _check_workers(client)
        try:
            yield from _results(client, make, tasks)
        except KilledWorker:
            raise EngineError(
                "a task lost its worker process several times, possibly for lack of memory; "
                f"{CONTINUES}"
            ) from None
        except (FutureCancelledError, CommClosedError):
            raise EngineError(
                f"the connection to the scheduler {client.scheduler.address} was lost; {CONTINUES}"
            ) from None


@contextmanager
def _client(workers: int, scheduler: str | None) -> Iterator[Any]:
    """Connect to a scheduler, or start a cluster for the time of the block."""
    from distributed import Client  # noqa: PLC0415

    if scheduler is None:
        with ExitStack() as stack:
            try:
                with interrupts_held():  # Ctrl-C is for this process, not for the workers
                    cluster = stack.enter_context(_local_cluster(workers))
            except (OSError, RuntimeError) as error:
                raise EngineError(
                    f"no Dask cluster can be started on this machine ({error}); accepted: "
                    'engine = "local"'
                ) from None
            yield stack.enter_context(Client(cluster, set_as_default=False))
        return
    try:
        client = Client(scheduler, set_as_default=False, timeout=CONNECT_SECONDS)
    except (OSError, ValueError) as error:
        raise EngineError(
            f"[execution] scheduler = {scheduler!r} cannot be reached ({error}); accepted: the "
            "address of a running Dask scheduler"
        ) from None
    with client:
        yield client


def _local_cluster(workers: int) -> Any:  # noqa: ANN401 - Dask is optional and has no types
    import dask.config  # noqa: PLC0415
    from distributed import LocalCluster  # noqa: PLC0415

    # Dask's workers give memory back to the system at once, which costs a third of the time
    place = "distributed.nanny.pre-spawn-environ"
    kept = {f"{place}.MALLOC_{what}_THRESHOLD_": KEPT_BYTES for what in ("TRIM", "MMAP")}
    with dask.config.set(kept):
        return LocalCluster(
            n_workers=workers,
            threads_per_worker=1,
            processes=True,
            memory_limit=None,  # like the local engine: nothing waits, nothing is spilled
            dashboard_address="127.0.0.1:0",  # any free port: runs must not be in each other's way
            silence_logs=logging.CRITICAL,
        )


def _check_workers(client: Any) -> None:  # noqa: ANN401
    try:
        client.wait_for_workers(1, timeout=CONNECT_SECONDS)
    except TimeoutError:
        raise EngineError(
            f"the scheduler {client.scheduler.address} has no workers; accepted: at least one, "
            "started with --nthreads 1"
        ) from None
    for address, threads in client.nthreads().items():
        if threads != 1:
            raise EngineError(
                f"the worker {address} has {threads} threads; accepted: workers started with "
                "--nthreads 1, and more of them"
            )


def _results(
    client: Any,  # noqa: ANN401
    make: Callable[[], Callable[[Any], Any]],
    tasks: Sequence[Any],
) -> Iterator[Any]:
    """Keep a few tasks per worker submitted and yield results as they come."""
    from distributed import as_completed  # noqa: PLC0415

    run, versions, pickled = uuid.uuid4().hex, decisive_versions(), pickle.dumps(make)
    waiting = iter(enumerate(tasks))
    running: set[Any] = set()
    done = as_completed(loop=client.loop)

    def submit() -> None:
        window = TASKS_PER_WORKER * max(1, len(client.nthreads()))
        for number, task in islice(waiting, max(0, window - len(running))):
            # a key of its own: a cluster that remembers results must not hand out old ones
            future = client.submit(_do, versions, pickled, task, key=f"loopint-{run}-{number}")
            running.add(future)
            done.add(future)

    try:
        submit()
        while running:
            future = next(done)
            running.discard(future)
            yield future.result()
            submit()
    finally:
        if running:
            client.cancel(list(running), force=True)


_one_at_a_time = threading.Lock()


def _do(versions: dict[str, str], pickled: bytes, task: Any) -> Any:  # noqa: ANN401
    """Do one task, in a worker."""
    found = decisive_versions()
    for name, version in versions.items():
        if found[name] != version:
            raise EngineError(
                f"a worker on {socket.gethostname()} has {name} {found[name]}; accepted: "
                f"{version}, as the process that drives the run"
            )
    with _one_at_a_time:
        return _made(pickled)(task)


@lru_cache(maxsize=1)
def _made(pickled: bytes) -> Callable[[Any], Any]:
    # made by the driver of this run and sent over dask's own connection, never read from a file
    function: Callable[[Any], Any] = pickle.loads(pickled)()
    return function
