"""A time limit for one evaluation, checked by the code that is evaluated.

Works in every thread and on every system; what runs between two checks is short.
"""

from __future__ import annotations

import math
import time
from contextlib import contextmanager
from contextvars import ContextVar
from typing import TYPE_CHECKING

from loopint.core.errors import LoopintError

if TYPE_CHECKING:
    from collections.abc import Iterator

_deadline: ContextVar[float] = ContextVar("deadline", default=math.inf)


class TimeLimitError(LoopintError):
    """An evaluation took longer than it was given."""


@contextmanager
def time_limit(seconds: float | None) -> Iterator[None]:
    """Let `check_time` raise inside the block when the seconds are over; None: no limit.

    Of limits inside each other the earlier end counts.

    Examples
    --------
    >>> with time_limit(3600):
    ...     check_time()
    """
    if seconds is None:
        yield
        return
    token = _deadline.set(min(time.monotonic() + seconds, _deadline.get()))
    try:
        yield
    finally:
        _deadline.reset(token)


def check_time() -> None:
    """Raise `TimeLimitError` if the time of the block is over."""
    deadline = _deadline.get()
    if deadline != math.inf and time.monotonic() > deadline:
        raise TimeLimitError("the time limit is over")
