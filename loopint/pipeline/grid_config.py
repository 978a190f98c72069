"""`[grid]`: axes from which `loopint grid` makes the points."""

from __future__ import annotations

from typing import Annotated, Literal, Self

from pydantic import Field, model_validator

from loopint.core.errors import InputError
from loopint.pipeline.expressions import Expression
from loopint.pipeline.sections import REAL, ReadBy, Section, expression

Exact = Annotated[Expression, ReadBy(expression)]
OptionalExact = Annotated[Expression | None, ReadBy(expression)]
NAME = r"^[A-Za-z][A-Za-z0-9_]*$"
MOST_ROWS = 1_000_000_000


class AxisConfig(Section):
    """`[[grid.axis]]`: the values of one column."""

    name: str = Field(
        pattern=NAME, description="a letter followed by letters, digits and underscores"
    )
    spacing: Literal["linear", "logarithmic", "chebyshev", "clustered", "random", "values"] = Field(
        default="linear",
        description='"linear", "logarithmic", "chebyshev", "clustered", "random" or "values"',
    )
    start: OptionalExact = Field(
        default=None, alias="from", description="a number or arithmetic on constants"
    )
    stop: OptionalExact = Field(
        default=None, alias="to", description="a number or arithmetic on constants"
    )
    count: int | None = Field(
        default=None, ge=1, le=MOST_ROWS, description="a number of values, at least 1"
    )
    around: tuple[str, ...] = Field(
        default=(),
        strict=False,
        description="with clustered: an array of names from [grid.thresholds]",
    )
    closest: OptionalExact = Field(
        default=None, description="with clustered: the smallest relative distance, as 1e-12"
    )
    scale: Literal["linear", "logarithmic"] = Field(
        default="linear", description='with random: "linear" or "logarithmic"'
    )
    values: tuple[Exact, ...] = Field(
        default=(), strict=False, description="with values: an array of numbers"
    )
    type: Literal["float64", "string"] = Field(
        default="float64", description='"float64", or "string" for exact numbers'
    )

    @model_validator(mode="after")
    def _check_keys(self) -> Self:
        given = {
            "from": self.start is not None,
            "to": self.stop is not None,
            "count": self.count is not None,
            "around": bool(self.around),
            "values": bool(self.values),
        }
        needed = {"from", "to", "count"}
        if self.spacing == "values":
            needed = {"values"}
        elif self.spacing == "clustered":
            needed = {"from", "to", "count", "around"}
        for key, is_given in given.items():
            if is_given != (key in needed):
                raise InputError(
                    f'with spacing = "{self.spacing}" has {"no" if not is_given else "a needless"} '
                    f"{key}; accepted: {', '.join(sorted(needed))}"
                )
        return self


class GridConfig(Section):
    """`[grid]`: the points that `loopint grid` writes to the file of `[points]`."""

    mode: Literal["product", "zip"] = Field(
        default="product", description='"product" (every combination) or "zip" (side by side)'
    )
    seed: int = Field(default=1, ge=0, lt=2**63, description="an integer from 0 to 2^63 - 1")
    constants: dict[str, Exact] = Field(default={}, description=f"names with {REAL}")
    thresholds: dict[str, Exact] = Field(default={}, description=f"names with {REAL}")
    axes: tuple[AxisConfig, ...] = Field(
        alias="axis",
        strict=False,
        min_length=1,
        description="one or more sections [[grid.axis]]",
    )

    @model_validator(mode="after")
    def _check_names(self) -> Self:
        names = [axis.name for axis in self.axes] + list(self.constants)
        for name in names:
            if names.count(name) > 1:
                raise InputError(f"{name} is given twice; accepted: a name for each column")
        return self
