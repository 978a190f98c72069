"""The errors a user can meet, each one sentence that says what would be accepted."""

from __future__ import annotations


class LoopintError(Exception):
    """Base class of every error this package raises on purpose."""


class InputError(LoopintError, ValueError):
    """A number or argument that cannot be used; the message says what would be accepted."""


class UnsupportedIntegralError(LoopintError, ValueError):
    """The family exists, but not with these powers or this dimension."""


class UnregulatedError(LoopintError, ValueError):
    """Dimensional regularisation leaves a singularity at every eps: there is no Laurent series."""


class LostOrderError(LoopintError, IndexError):
    """An order above the truncation of a series was asked for."""


class MorePrecisionNeeded(Exception):  # noqa: N818 - a signal inside the precision loop, not an error
    """A sign or a comparison is undecided at the working precision."""
