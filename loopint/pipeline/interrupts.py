"""Ctrl-C: it belongs to the process that drives the run, and none is lost."""

from __future__ import annotations

import signal
import threading
from contextlib import contextmanager
from multiprocessing import resource_tracker
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator
    from types import FrameType


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


@contextmanager
def interrupts_remembered() -> Iterator[Callable[[], None]]:
    """Give a function that raises `KeyboardInterrupt` if one was raised in the block before.

    Python drops the exception where it is raised in a finalizer or in the callback of a weak
    reference; called now and then the function raises it again.
    """
    if (
        threading.current_thread() is not threading.main_thread()
        or signal.getsignal(signal.SIGINT) is not signal.default_int_handler
    ):
        yield lambda: None
        return
    seen = threading.Event()

    def note(number: int, frame: FrameType | None) -> None:
        seen.set()
        signal.default_int_handler(number, frame)

    def again() -> None:
        if seen.is_set():
            raise KeyboardInterrupt

    signal.signal(signal.SIGINT, note)
    try:
        yield again
    finally:
        signal.signal(signal.SIGINT, signal.default_int_handler)
