"""What a user is told when a config, an input file or an argument cannot be used."""

from __future__ import annotations

import difflib
from typing import TYPE_CHECKING

from loopint.core.errors import LoopintError

if TYPE_CHECKING:
    from collections.abc import Iterable


class ConfigError(LoopintError):
    """Nothing can be run: one sentence names the file, key or column, and what is accepted."""


class EngineError(LoopintError):
    """The worker processes failed, not the calculation."""


def unknown_name(name: str, known: Iterable[str]) -> str:
    """Return the end of a sentence about an unknown name: the nearest known one, then all.

    Examples
    --------
    >>> unknown_name("digit", ["digits", "seed"])
    'is unknown; did you mean digits? accepted: digits, seed'
    >>> unknown_name("x", ["digits", "seed"])
    'is unknown; accepted: digits, seed'
    """
    names = list(known)
    near = difflib.get_close_matches(name, names, n=1)
    if not near:  # difflib tells upper case from lower case
        folded = {candidate.casefold(): candidate for candidate in reversed(names)}
        near = [folded[match] for match in difflib.get_close_matches(name.casefold(), folded, n=1)]
    hint = f"did you mean {near[0]}? " if near else ""
    shown = names if len(names) <= 30 else [*names[:30], "..."]
    return f"is unknown; {hint}accepted: {', '.join(shown)}"
