"""`[[comparison]]`: the user's own formula for one coefficient."""

from __future__ import annotations

from pydantic import Field

from loopint.pipeline.sections import Section


class ComparisonConfig(Section):
    """`[[comparison]]`: the user's own formula for one coefficient."""

    name: str = Field(
        pattern=r"^[A-Za-z][A-Za-z0-9_]*$",
        description="a letter followed by letters, digits and underscores",
    )
    integral: str = Field(description="the name of an integral or derivative of this config")
    order: int = Field(default=0, description="an order of that integral")
