"""What the sections of a config are made of: exact values, expressions, and their base class."""

from __future__ import annotations

import json
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from decimal import Decimal
from pathlib import Path
from typing import Annotated, Any, TypeAlias

from pydantic import BaseModel, BeforeValidator, ConfigDict
from pydantic_core import CoreSchema, core_schema

from loopint.core.errors import InputError
from loopint.pipeline.expressions import Expression, parse_expression


def exact_number(value: object) -> object:
    """Let an integer stand where a decimal is expected; never a boolean or a binary float."""
    return Decimal(value) if isinstance(value, int) and not isinstance(value, bool) else value


def _path(value: object) -> object:
    return Path(value) if isinstance(value, str) and value.strip() else value


def expression(value: object) -> Expression:
    """Read a number, a column or arithmetic on columns; raises `InputError` or `ValueError`."""
    if isinstance(value, Expression):
        return value
    if isinstance(value, str):
        return parse_expression(value)
    if isinstance(value, int) and not isinstance(value, bool):
        return parse_expression(value)
    if isinstance(value, Decimal) and value.is_finite():
        return parse_expression(str(value))
    if isinstance(value, list | tuple):
        raise InputError(f"{toml_text(value)} is complex; accepted: a real number or expression")
    raise ValueError  # the description of the field says what is accepted


def _complex_expression(value: object) -> ComplexExpression:
    if isinstance(value, list | tuple):
        if len(value) != 2:
            raise InputError(f"{toml_text(value)} has {len(value)} entries; accepted: [re, im]")
        return expression(value[0]), expression(value[1])
    return expression(value)


@dataclass(frozen=True)
class ReadBy:
    """Tell pydantic that a function alone reads a field, so that it asks nothing of the type."""

    read: Callable[[object], object]

    def __get_pydantic_core_schema__(self, source: Any, handler: object) -> CoreSchema:  # noqa: ANN401
        return core_schema.no_info_plain_validator_function(self.read)


ComplexExpression: TypeAlias = Expression | tuple[Expression, Expression]
ExactNumber: TypeAlias = Annotated[Decimal, BeforeValidator(exact_number)]
FilePath: TypeAlias = Annotated[Path, BeforeValidator(_path)]
Real: TypeAlias = Annotated[Expression | None, ReadBy(expression)]
Squared: TypeAlias = Annotated[ComplexExpression | None, ReadBy(_complex_expression)]

REAL = "a number, a column, or arithmetic on columns"
SQUARED = f"{REAL}; complex: an array [re, im] of these"


class Section(BaseModel):
    """A part of the config; the description of a field says what it accepts."""

    model_config = ConfigDict(
        frozen=True, extra="forbid", strict=True, arbitrary_types_allowed=True
    )


def plain(value: object) -> object:
    """Return TOML data with floats in place of decimals, for messages that show the value."""
    if isinstance(value, list):
        return [plain(item) for item in value]
    return float(value) if isinstance(value, Decimal) else value


def toml_text(value: object) -> str:
    """Return a value as it would be written in TOML, shortened."""
    text: str
    if isinstance(value, list | tuple):
        text = f"[{', '.join(toml_text(item) for item in value)}]"
    elif isinstance(value, Mapping):
        text = "{...}"
    elif isinstance(value, str):
        text = json.dumps(value, ensure_ascii=False)
    elif isinstance(value, bool):
        text = "true" if value else "false"
    else:
        text = str(value)
    return text if len(text) <= 60 else text[:57] + "..."
