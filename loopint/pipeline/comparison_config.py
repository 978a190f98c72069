"""`[[comparison]]`: the user's own formula or numbers for one coefficient."""

from __future__ import annotations

from typing import Self

from pydantic import Field, model_validator

from loopint.core.errors import InputError
from loopint.integrals.proof import MAX_DIGITS
from loopint.pipeline.formula_language import parse_formula
from loopint.pipeline.sections import Section


class ComparisonConfig(Section):
    """`[[comparison]]`: one coefficient of one integral against a formula or a column."""

    name: str = Field(
        pattern=r"^[A-Za-z][A-Za-z0-9_]*$",
        description="a letter followed by letters, digits and underscores",
    )
    integral: str = Field(description="the name of an integral or derivative of this config")
    order: int = Field(default=0, description="an order of that integral")
    expression: str | None = Field(default=None, description="a formula for the coefficient")
    d_dimensional: str | None = Field(
        default=None, description="a formula in eps and the kinematics, exact in d dimensions"
    )
    column: str | None = Field(default=None, description="a column with numbers of your own")
    column_imaginary: str | None = Field(
        default=None, description="with column: a column with their imaginary parts"
    )
    let: dict[str, str] = Field(
        default={}, description='abbreviations, as { l = "log(m1_squared/mu_squared)" }'
    )
    regions: tuple[str, ...] = Field(
        default=(), strict=False, description="an array of regions (left out: all)"
    )
    digits: int | None = Field(
        default=None,
        ge=1,
        le=MAX_DIGITS,
        description="digits that must agree (left out: those of [accuracy], at most 30; for a "
        "column 10)",
    )
    rows: int = Field(
        default=2000, ge=1, le=1_000_000, description="rows that are compared, evenly spread"
    )

    @model_validator(mode="after")
    def _check_source(self) -> Self:
        given = [
            key
            for key in ("expression", "d_dimensional", "column")
            if getattr(self, key) is not None
        ]
        if len(given) != 1:
            found = " and ".join(given) or "nothing"
            raise InputError(
                f"gives {found} to compare with; accepted: one of expression, d_dimensional, column"
            )
        if self.column_imaginary is not None and self.column is None:
            raise InputError("column_imaginary needs column; accepted: both, or neither")
        for text in (*self.let.values(), self.expression, self.d_dimensional):
            if text is not None:
                parse_formula(text)
        return self
