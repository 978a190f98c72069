"""`[grid]`: axes from which `loopint grid` makes the points."""

from __future__ import annotations

from pydantic import Field

from loopint.pipeline.sections import Section


class GridConfig(Section):
    """`[grid]`: axes from which `loopint grid` makes the points."""

    seed: int = Field(default=1, ge=0, lt=2**63, description="an integer from 0 to 2^63 - 1")
