"""Ctrl-C while worker processes start: it belongs to the process that drives the run."""

from __future__ import annotations

import signal
from contextlib import contextmanager
from multiprocessing import resource_tracker
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Iterator


@contextmanager
def interrupts_held() -> Iterator[None]:
    """Deliver Ctrl-C only after the block, where the system can do that.

    Processes and threads that start inside the block inherit this for good.
    """
    if not hasattr(signal, "pthread_sigmask"):  # pragma: no cover - Windows
        yield
        return
    resource_tracker.ensure_running()  # where it starts it lets the signal through again
    before = signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT})
    try:
        yield
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, before)
