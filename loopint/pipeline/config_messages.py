"""Reads TOML, and turns what pydantic finds wrong with a config into one plain sentence."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from decimal import Decimal, InvalidOperation
from pathlib import Path
from typing import Any, get_args

from pydantic import ValidationError
from pydantic.fields import FieldInfo

from loopint.pipeline.errors import ConfigError, unknown_name
from loopint.pipeline.sections import Section, toml_text


def read_toml(path: Path) -> dict[str, Any]:
    """Read a TOML file, with decimals for its numbers; raises `ConfigError`."""
    accepted = "accepted: a TOML file"
    try:
        text = path.read_bytes().decode("utf-8-sig")
    except FileNotFoundError:
        raise ConfigError(f"{path} does not exist; {accepted}") from None
    except IsADirectoryError:
        raise ConfigError(f"{path} is a directory; {accepted}") from None
    except UnicodeDecodeError:
        raise ConfigError(f"{path} is not text in UTF-8; {accepted}") from None
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or error
        raise ConfigError(f"{path} cannot be read: {reason}; {accepted}") from None
    try:
        return tomllib.loads(text, parse_float=Decimal)
    except InvalidOperation:
        raise ConfigError(
            f"{path} has a number whose exponent is too large; accepted: up to 10^10000"
        ) from None
    except (ValueError, RecursionError) as error:
        reason = str(error).partition(";")[0]
        raise ConfigError(f"{path} is not valid TOML: {reason}; {accepted}") from None


def explain(error: ValidationError, raw: Mapping[str, Any], root: type[Section]) -> str:
    """Turn the most telling of pydantic's errors about `raw` into one plain sentence."""
    errors = error.errors(include_url=False)
    # a misspelt key explains why the right one is missing
    first = min(errors, key=lambda found: found["type"] != "extra_forbidden")
    message = str(first["ctx"]["error"]) if first["type"] == "value_error" else ""
    place, loc = _descend(_Place(root, raw), first["loc"])
    if not loc:
        if message:
            return f"{place.label}{message}"
        return f"{place.label}= {toml_text(place.data)}; {place.keys}"
    key = str(loc[0])
    section, is_array = _section_of(place.fields.get(key))
    if section is not None and first["type"] != "extra_forbidden":
        inner = place.inside(key, section, is_array)
        if len(loc) == 1 and message:  # keys that do not fit together
            return f"{inner.label}{message}"
        return _section_sentence(place, key, inner, first["type"])
    if first["type"] == "extra_forbidden":
        return f"{place.label}{key} {unknown_name(key, place.fields)}"
    accepted = f"accepted: {place.fields[key].description}"
    if first["type"] == "missing":
        return f"{place.label}{key} is missing; {accepted}"
    if message:
        return f"{place.label}{key}: {message}"
    return f"{place.label}{key} = {toml_text(place.data[key])}; {accepted}"


@dataclass(frozen=True)
class _Place:
    """A section of a config while an error is looked for in it.

    Attributes
    ----------
    path
        The dotted name of the section; empty for the whole file.
    entry
        What marks this entry of an array of sections: its name, or its number.
    """

    model: type[Section]
    data: Any
    path: str = ""
    is_array: bool = False
    entry: str = ""

    @property
    def fields(self) -> dict[str, FieldInfo]:
        """The fields by the names that users write."""
        found = self.model.model_fields.items()
        return {field.alias or name: field for name, field in found}

    @property
    def brackets(self) -> str:
        """The section as its heading in the file."""
        return f"[[{self.path}]]" if self.is_array else f"[{self.path}]"

    @property
    def label(self) -> str:
        """The start of a message."""
        return f"{self.brackets} {self.entry}" if self.path else ""

    @property
    def keys(self) -> str:
        """The end of a message about the section as a whole."""
        return f"accepted: {self.brackets} with the keys {', '.join(self.fields)}"

    def inside(self, key: str, section: type[Section], is_array: bool) -> _Place:
        """Return the place of a section under `key`, or of the whole array of them."""
        data = self.data.get(key) if isinstance(self.data, Mapping) else None
        return _Place(section, data, f"{self.path}.{key}" if self.path else key, is_array)

    def numbered(self, index: int) -> _Place:
        """Return the place of one entry of an array."""
        data = self.data[index]
        name = data.get("name") if isinstance(data, Mapping) else None
        entry = f"{toml_text(name)} " if isinstance(name, str) else f"number {index + 1} "
        return _Place(self.model, data, self.path, self.is_array, entry)


def _descend(place: _Place, loc: tuple[int | str, ...]) -> tuple[_Place, tuple[int | str, ...]]:
    """Follow the location of an error into the innermost section that holds it."""
    while loc:
        section, is_array = _section_of(place.fields.get(str(loc[0])))
        inner_loc = loc[2:] if is_array else loc[1:]
        if section is None or len(loc) < 2 or (is_array and not isinstance(loc[1], int)):
            break
        place = place.inside(str(loc[0]), section, is_array)
        if is_array:
            place = place.numbered(int(loc[1]))
        loc = inner_loc
    return place, loc


def _section_of(field: FieldInfo | None) -> tuple[type[Section] | None, bool]:
    """Return the kind of section a field holds, and whether it is an array of them."""
    if field is None:
        return None, False
    for kind in (field.annotation, *get_args(field.annotation)):
        if isinstance(kind, type) and issubclass(kind, Section):
            return kind, field.annotation is not kind and type(None) not in get_args(
                field.annotation
            )
    return None, False


def _section_sentence(outer: _Place, key: str, inner: _Place, kind: str) -> str:
    """Explain what is wrong with a section as a whole."""
    if kind == "missing" or inner.data == []:
        return f"{inner.brackets} is missing; {inner.keys}"
    name = f"{outer.path}.{key}" if outer.path else key
    if isinstance(inner.data, Mapping):
        return f"[{name}] is written with single brackets; {inner.keys}"
    return f"{name} = {toml_text(inner.data)} is not a section; {inner.keys}"
