"""`[[interpolation]]`: coefficients to be interpolated over a range."""

from __future__ import annotations

from pydantic import Field

from loopint.pipeline.sections import Section


class InterpolationConfig(Section):
    """`[[interpolation]]`: coefficients to be interpolated over a range."""

    name: str = Field(
        pattern=r"^[A-Za-z][A-Za-z0-9_]*$",
        description="a letter followed by letters, digits and underscores",
    )
    integral: str = Field(description="the name of an integral or derivative of this config")
