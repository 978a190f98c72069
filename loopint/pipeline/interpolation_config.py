"""`[[interpolation]]`: coefficients to be interpolated over a range of p^2, or p^2 and a mass."""

from __future__ import annotations

from decimal import Decimal
from typing import Annotated, Literal

from pydantic import Field

from loopint.pipeline.expressions import Expression
from loopint.pipeline.sections import ExactNumber, ReadBy, Section, expression

Exact = Annotated[Expression, ReadBy(expression)]


class InterpolationConfig(Section):
    """`[[interpolation]]`: one integral over a range of the column that is its p^2."""

    name: str = Field(
        pattern=r"^[A-Za-z][A-Za-z0-9_]*$",
        description="a letter followed by letters, digits and underscores",
    )
    integral: str = Field(description="the name of an integral of this config")
    orders: tuple[int, ...] = Field(
        default=(0,), strict=False, min_length=1, description="an array of orders"
    )
    range: tuple[Exact, Exact] = Field(
        strict=False, description="an array of two numbers, the ends of the range of p^2"
    )
    mass: str | None = Field(
        default=None,
        description="the column that is the mass of one line and a second variable",
    )
    mass_range: tuple[Exact, Exact] | None = Field(
        default=None,
        strict=False,
        description="an array of two positive numbers, the ends of the range of mass",
    )
    constants: dict[str, Exact] = Field(
        default={}, description="values of the other columns, as { m_alder = 1.2 }"
    )
    error: ExactNumber = Field(
        default=Decimal("1e-11"),
        gt=0,
        lt=1,
        description="the largest error, in units of the coefficients; a number below 1",
    )
    exports: tuple[Literal["c", "text"], ...] = Field(
        default=(), strict=False, description='an array of "c", "text" or both'
    )
