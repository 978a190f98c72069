"""The config of a run: read from TOML, checked, and every mistake explained in one sentence."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from decimal import Decimal
from functools import cached_property
from pathlib import Path
from typing import Annotated, Any, Literal, NamedTuple, Self, TypeVar, cast

from pydantic import BaseModel, Field, PrivateAttr, ValidationError, model_validator

from loopint.core.conventions import Measure, PropagatorSign
from loopint.core.errors import InputError
from loopint.integrals.derivatives import check_derivatives
from loopint.integrals.proof import DEFAULT_MAX_PRECISION_BITS, MAX_DIGITS, MIN_DIGITS
from loopint.integrals.registry import FAMILIES, Integral
from loopint.pipeline.comparison_config import ComparisonConfig
from loopint.pipeline.config_messages import explain, read_toml
from loopint.pipeline.errors import ConfigError
from loopint.pipeline.expressions import Expression, parse_expression
from loopint.pipeline.grid_config import GridConfig
from loopint.pipeline.interpolation_config import InterpolationConfig
from loopint.pipeline.sections import (
    REAL,
    SQUARED,
    ComplexExpression,
    ExactNumber,
    FilePath,
    ReadBy,
    Real,
    Section,
    Squared,
    exact_number,
    expression,
    plain,
    toml_text,
)

__all__ = [
    "AccuracyConfig",
    "AnyConfig",
    "ConfigError",
    "ConventionsConfig",
    "CrossCheckConfig",
    "ExecutionConfig",
    "IntegralConfig",
    "MassKeys",
    "OutputConfig",
    "PointsConfig",
    "RunConfig",
    "config_as_dict",
    "load_config",
]


class PointsConfig(Section):
    """`[points]`: where the kinematic points are."""

    file: FilePath = Field(description="the path of a Parquet file or of a directory of them")
    key: str | None = Field(
        default=None, min_length=1, description="the name of a column carried through to the tables"
    )


class MassKeys(NamedTuple):
    """The keys that give the mass of one line; `imaginary` is the second entry of an array."""

    squared: str
    mass: str
    width: str

    @property
    def imaginary(self) -> str:
        """What the imaginary part of the squared mass is called in messages."""
        return f"Im {self.squared}"


_MASS_KEYS = {
    1: (MassKeys("m_squared", "m", "width"),),
    2: tuple(MassKeys(f"m{i}_squared", f"m{i}", f"width{i}") for i in (1, 2)),
}


class IntegralConfig(Section):
    """`[[integral]]`: one integral, and its kinematics in terms of columns."""

    name: str = Field(
        pattern=r"^[A-Za-z][A-Za-z0-9_]*$",
        description="a letter followed by letters, digits and underscores",
    )
    family: str = Field(description=" or ".join(FAMILIES))
    powers: tuple[int | tuple[int, str], ...] = Field(
        default=(),
        description="an array of integers, one per propagator; for a propagator also [n, a] for "
        "n + a eps",
    )
    dimension: int = Field(default=4, description="an integer from 1 to 12")
    orders: tuple[int, int] = Field(
        default=(-1, 0), description="an array [lowest, highest] of integers"
    )
    derivatives: tuple[tuple[str, ...], ...] = Field(
        default=(),
        description="an array of variables; a higher derivative is an array of its own, as in "
        '["p_squared", ["p_squared", "m1_squared"]]',
    )
    p_squared: Real = Field(default=None, description=REAL)
    m_squared: Squared = Field(default=None, description=SQUARED)
    m: Real = Field(default=None, description=REAL)
    width: Real = Field(default=None, description=REAL)
    m1_squared: Squared = Field(default=None, description=SQUARED)
    m1: Real = Field(default=None, description=REAL)
    width1: Real = Field(default=None, description=REAL)
    m2_squared: Squared = Field(default=None, description=SQUARED)
    m2: Real = Field(default=None, description=REAL)
    width2: Real = Field(default=None, description=REAL)

    @model_validator(mode="before")
    @classmethod
    def _parse_integral(cls, data: object) -> object:
        """Check what depends on the family: powers, dimension, orders, derivatives."""
        if not isinstance(data, Mapping) or not isinstance(data.get("family"), str):
            return data
        if set(data) - set(cls.model_fields):
            return data  # the unknown key is the better message
        given = {key: plain(data.get(key)) for key in ("dimension", "orders")}
        orders = given["orders"] if "orders" in data else (-1, 0)
        if not isinstance(orders, list | tuple):
            raise InputError(
                f"orders = {toml_text(orders)}; accepted: [lowest, highest], as [-1, 2]"
            )
        integral = Integral.parse(
            data["family"],
            data.get("powers"),
            given["dimension"] if "dimension" in data else 4,
            cast("tuple[int, int]", orders),  # checked there
        )
        return {
            **data,
            "powers": integral.plain_powers,
            "dimension": integral.dimension,
            "orders": integral.orders,
            "derivatives": _derivatives(data.get("derivatives", ()), integral),
        }

    @model_validator(mode="after")
    def _check_kinematics(self) -> Self:
        given = [key for key in _KINEMATIC_KEYS if getattr(self, key) is not None]
        accepted = [key for keys in self.mass_keys for key in keys]
        if len(self.mass_keys) == 2:
            accepted.insert(0, "p_squared")
        for key in given:
            if key not in accepted:
                raise InputError(
                    f"{key} does not belong to a {self.family}; accepted: {', '.join(accepted)}"
                )
        if "p_squared" in accepted and self.p_squared is None:
            raise InputError(f"p_squared is missing; accepted: {REAL}")
        for squared, mass, width in self.mass_keys:
            if squared not in given and mass not in given:
                hint = f"{width} needs {mass}" if width in given else "no mass is given"
                raise InputError(f"{hint}; accepted: {squared}, or {mass} with or without {width}")
            for other in (mass, width):
                if squared in given and other in given:
                    raise InputError(
                        f"{squared} and {other} are both given; "
                        f"accepted: {squared}, or {mass} with or without {width}"
                    )
        return self

    @property
    def mass_keys(self) -> tuple[MassKeys, ...]:
        """The keys of each line of this family."""
        return _MASS_KEYS[len(FAMILIES[self.family].default_powers)]

    @cached_property
    def integral(self) -> Integral:
        """Family, powers, dimension and orders as the mathematics takes them."""
        return Integral.parse(self.family, self.powers, self.dimension, self.orders)

    @cached_property
    def results(self) -> dict[str, Integral]:
        """What this section puts into the tables: the integral, then its derivatives, by name.

        The derivative by p^2 and m1^2 of `name` goes by `name_d_p_squared_m1_squared`.
        """
        found = {self.name: self.integral}
        for names in self.derivatives:
            found["_".join((self.name, "d", *names))] = replace(self.integral, derivatives=names)
        return found

    def expressions(self) -> dict[str, Expression]:
        """Return the kinematics by key; an imaginary part goes by `MassKeys.imaginary`."""
        found: dict[str, Expression] = {}
        for key in _KINEMATIC_KEYS:
            value: ComplexExpression | None = getattr(self, key)
            if isinstance(value, tuple):
                found[key], found[f"Im {key}"] = value
            elif value is not None:
                found[key] = value
        return found


def _derivatives(entries: object, integral: Integral) -> tuple[tuple[str, ...], ...]:
    """Return the derivatives of an integral, each in the standard order of its variables."""
    if not isinstance(entries, list | tuple):
        raise InputError(
            f'derivatives = {toml_text(entries)}; accepted: an array, as ["p_squared"]'
        )
    found: list[tuple[str, ...]] = []
    for entry in entries:
        names = check_derivatives(entry, FAMILIES[integral.family].variables)
        if not names:
            raise InputError("derivatives has an empty entry; accepted: one to four variables")
        if names in found:
            raise InputError(
                f"derivatives has {toml_text(entry)} twice; accepted: each derivative once, "
                "whatever the order of its variables"
            )
        found.append(names)
    return tuple(found)


_KINEMATIC_KEYS = ("p_squared", *(key for lines in _MASS_KEYS.values() for k in lines for key in k))


class ConventionsConfig(Section):
    """`[conventions]`: what multiplies the bare integral."""

    mu_squared: Annotated[Expression, ReadBy(expression)] = Field(
        default=parse_expression(1), description=f"{REAL}, positive"
    )
    propagator_sign: PropagatorSign = Field(
        default=PropagatorSign.MINKOWSKI, strict=False, description=" or ".join(PropagatorSign)
    )
    measure: Measure = Field(default=Measure.MSBAR, strict=False, description=", ".join(Measure))


class AccuracyConfig(Section):
    """`[accuracy]`: the digits to be proven."""

    digits: int = Field(
        default=16,
        ge=MIN_DIGITS,
        le=MAX_DIGITS,
        description=f"an integer from {MIN_DIGITS} to {MAX_DIGITS}",
    )
    snap_tolerance: ExactNumber = Field(
        default=Decimal(0),
        ge=0,
        lt=Decimal("0.1"),
        description="a number from 0 to below 0.1 (0: off)",
    )
    max_precision_bits: int = Field(
        default=DEFAULT_MAX_PRECISION_BITS,
        ge=64,
        le=1_000_000,
        description="an integer from 64 to 1000000",
    )
    time_limit: ExactNumber = Field(
        default=Decimal(600),
        ge=0,
        le=10**9,
        description="seconds for each integral of a row and for its cross-check (0: none)",
    )

    @property
    def seconds(self) -> float | None:
        """The time limit, or None without one."""
        return float(self.time_limit) or None


class CrossCheckConfig(Section):
    """`[cross_check]`: how much is integrated again by quadrature."""

    fraction: Annotated[Decimal, Field(ge=0, le=1)] | Literal["all", "none"] = Field(
        default=Decimal("0.01"), description='a number from 0 to 1, "all" or "none"'
    )
    digits: int = Field(default=10, ge=5, le=200, description="an integer from 5 to 200")
    seed: int = Field(default=1, ge=0, lt=2**63, description="an integer from 0 to 2^63 - 1")
    arithmetic: Literal["balls", "mpmath"] = Field(
        default="balls", description='"balls" or "mpmath"'
    )

    @model_validator(mode="before")
    @classmethod
    def _accept_integers(cls, data: object) -> object:
        if isinstance(data, Mapping) and "fraction" in data:
            return {**data, "fraction": exact_number(data["fraction"])}
        return data

    @property
    def share(self) -> Decimal:
        """The fraction as a number: 1 for "all", 0 for "none"."""
        if isinstance(self.fraction, Decimal):
            return self.fraction
        return Decimal(1 if self.fraction == "all" else 0)


class OutputConfig(Section):
    """`[output]`: where the tables go, and how they look."""

    directory: FilePath = Field(description="the path of a directory for this run")
    layout: Literal["long", "wide"] = Field(default="long", description='"long" or "wide"')
    formats: tuple[Literal["parquet", "csv", "npz"], ...] = Field(
        default=("parquet",),
        strict=False,
        min_length=1,
        description='an array of "parquet", "csv", "npz"',
    )


class ExecutionConfig(Section):
    """`[execution]`: how the work is spread; never changes a result."""

    engine: Literal["local", "dask"] = Field(default="local", description='"local" or "dask"')
    scheduler: str | None = Field(
        default=None,
        pattern=r"^(tcp|tls|ws|wss)://\S+$",
        description='with engine = "dask": the address of a scheduler, as "tcp://host:8786"',
    )
    workers: int | None = Field(
        default=None,
        ge=1,
        le=1024,
        description="an integer from 1 to 1024 (left out: the usable cores)",
    )
    chunk_rows: int | None = Field(
        default=None,
        ge=1,
        le=1_000_000,
        description="an integer from 1 to 1000000 (left out: by the number of rows)",
    )

    @model_validator(mode="after")
    def _check_scheduler(self) -> Self:
        if self.scheduler is not None and self.engine != "dask":
            raise InputError(
                f'scheduler = {toml_text(self.scheduler)} needs engine = "dask"; accepted: both, '
                "or no scheduler"
            )
        if self.scheduler is not None and self.workers is not None:
            raise InputError(
                f"workers = {self.workers} cannot be chosen with a scheduler, which has its own; "
                "accepted: one of the two keys"
            )
        return self


class AnyConfig(Section):
    """Everything that a config may hold; each command needs some of it."""

    title: str = Field(default="", description="a line of text")
    points: PointsConfig | None = Field(default=None, description="a section [points]")
    integrals: tuple[IntegralConfig, ...] = Field(
        default=(),
        alias="integral",
        strict=False,
        description="one or more sections [[integral]]",
    )
    conventions: ConventionsConfig = Field(
        default=ConventionsConfig(), description="a section [conventions]"
    )
    accuracy: AccuracyConfig = Field(default=AccuracyConfig(), description="a section [accuracy]")
    cross_check: CrossCheckConfig = Field(
        default=CrossCheckConfig(), description="a section [cross_check]"
    )
    output: OutputConfig | None = Field(default=None, description="a section [output]")
    execution: ExecutionConfig = Field(
        default=ExecutionConfig(), description="a section [execution]"
    )
    grid: GridConfig | None = Field(default=None, description="a section [grid]")
    comparisons: tuple[ComparisonConfig, ...] = Field(
        default=(),
        alias="comparison",
        strict=False,
        description="one or more sections [[comparison]]",
    )
    interpolations: tuple[InterpolationConfig, ...] = Field(
        default=(),
        alias="interpolation",
        strict=False,
        description="one or more sections [[interpolation]]",
    )

    _file: Path | None = PrivateAttr(None)

    @model_validator(mode="after")
    def _check_names(self) -> Self:
        names = [name for integral in self.integrals for name in integral.results]
        for name in names:
            if names.count(name) > 1:
                raise InputError(
                    f'[[integral]] name = "{name}" is given {names.count(name)} times; '
                    "accepted: a different name for each integral and each derivative"
                )
        return self

    @property
    def results(self) -> dict[str, Integral]:
        """All integrals and derivatives of the tables by name, in their order."""
        return {name: one for entry in self.integrals for name, one in entry.results.items()}

    @property
    def where(self) -> str:
        """The start of a message about this config: its file and a colon, if it has one."""
        return f"{self._file}: " if self._file else ""

    def beside(self, path: Path) -> Path:
        """Return a path, from the current directory or else from the directory of the config."""
        beside = path if self._file is None else self._file.parent / path
        return beside if not path.exists() and beside.exists() else path


class EvaluatingConfig(AnyConfig):
    """A config for a command that evaluates integrals and writes a directory."""

    integrals: tuple[IntegralConfig, ...] = Field(
        alias="integral",
        strict=False,
        min_length=1,
        description="one or more sections [[integral]]",
    )
    output: OutputConfig = Field(description="a section [output]")


class RunConfig(EvaluatingConfig):
    """A config for `loopint run`; the columns it names are checked against the points."""

    points: PointsConfig = Field(description="a section [points]")


class GridRunConfig(AnyConfig):
    """A config for `loopint grid`, which writes the file of `[points]`."""

    points: PointsConfig = Field(description="a section [points]")
    grid: GridConfig = Field(description="a section [grid]")


class InterpolationRunConfig(EvaluatingConfig):
    """A config for `loopint interpolate`, whose columns are the variables of the interpolants."""

    interpolations: tuple[InterpolationConfig, ...] = Field(
        alias="interpolation",
        strict=False,
        min_length=1,
        description="one or more sections [[interpolation]]",
    )


AnyKind = TypeVar("AnyKind", bound=AnyConfig)


def load_config(path: Path) -> RunConfig:
    """Read and check the config of a run.

    The path of the points is relative to the current directory or, if nothing is there, to the
    directory of the config.

    Raises
    ------
    ConfigError
        If the file cannot be read, is not TOML, or has an unknown key or an unusable value.
    """
    config = load_config_as(RunConfig, path)
    file = config.beside(config.points.file)
    if file != config.points.file:
        points = config.points.model_copy(update={"file": file})
        config = config.model_copy(update={"points": points})
    return config


def load_config_as(kind: type[AnyKind], path: Path) -> AnyKind:
    """Read and check a config for one command; raises `ConfigError`."""
    raw = read_toml(path)
    try:
        config = kind.model_validate(raw)
    except ValidationError as error:
        raise ConfigError(f"{path}: {explain(error, raw, kind)}") from None
    config._file = path  # set once, by the only function that knows it
    return config


def config_as_dict(config: AnyConfig) -> dict[str, Any]:
    """Return the config as JSON-able data with every default filled in.

    Expressions, decimals and paths are strings; keys that were not given and have no default are
    left out.  Equal configs give equal data.
    """
    plain: dict[str, Any] = _jsonable(config)
    return plain


def _jsonable(value: object) -> Any:  # noqa: ANN401 - JSON
    match value:
        case BaseModel():
            fields = type(value).model_fields
            found = {field.alias or name: getattr(value, name) for name, field in fields.items()}
            return {key: _jsonable(item) for key, item in found.items() if item is not None}
        case Expression():
            return value.text
        case Decimal():
            return format(value.normalize(), "f") if value else "0"
        case Path():
            return value.as_posix()
        case dict():
            return {key: _jsonable(item) for key, item in value.items()}
        case tuple():
            return [_jsonable(item) for item in value]
        case str():
            return str(value)  # also turns the enumerations into plain strings
        case _:
            return value
