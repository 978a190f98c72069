"""The error of this package."""

from loopint.core.errors import LoopintError


class ReportError(LoopintError):
    """A directory of which no page can be made."""
