"""Builds interpolants whose error is proven over the whole range."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from flint import arb, arb_mat, fmpq

from loopint.core.conventions import Conventions
from loopint.core.errors import InputError
from loopint.core.kinematics import TwoPoint
from loopint.core.laurent import complex_ball
from loopint.core.numbers import ExactComplex, float_with_bound
from loopint.core.precision import working_precision
from loopint.integrals.registry import Evaluator, Integral
from loopint.interpolation.analyticity import (
    GROWTH,
    HIGHEST_ORDER,
    Geometry,
    OneMass,
    Sheets,
    coefficient_bound,
    prefactor_sizes,
    truncation,
)
from loopint.interpolation.chebyshev import (
    BITS,
    NODE_DIGITS,
    SHIFT_ERROR,
    clenshaw_error,
    from_values,
    lebesgue_constant,
    nearby_rational,
    node,
    shortened,
)
from loopint.interpolation.export import write_exports
from loopint.interpolation.files import save_interpolant
from loopint.interpolation.interpolant import Interpolant
from loopint.interpolation.surface import SurfaceInterpolant
from loopint.interpolation.surface_build import SurfaceJob
from loopint.pipeline.errors import ConfigError, unknown_name
from loopint.pipeline.rounded import finite_double

if TYPE_CHECKING:
    from collections.abc import Mapping

    from loopint.interpolation.interpolant import Complex
    from loopint.pipeline.config import IntegralConfig, InterpolationRunConfig, MassKeys
    from loopint.pipeline.expressions import Expression
    from loopint.pipeline.interpolation_config import InterpolationConfig

MOST_PIECES, MOST_DEGREE = 2000, 60
Progress = Callable[[int, int], None]


@dataclass(frozen=True)
class Built:
    """An interpolant and the files it is saved in."""

    interpolant: Interpolant | SurfaceInterpolant
    files: tuple[Path, ...]
    degree: int


def build_interpolants(
    config: InterpolationRunConfig, *, progress: Progress | None = None
) -> list[Built]:
    """Build and save every `[[interpolation]]` of a config.

    Raises
    ------
    ConfigError
        If an interpolation does not fit the config, or is not covered.
    """
    jobs = [_prepare(config, entry) for entry in config.interpolations]
    directory = config.output.directory
    directory.mkdir(parents=True, exist_ok=True)
    built = []
    for number, (job, entry) in enumerate(zip(jobs, config.interpolations, strict=True)):
        interpolant, degree = job.build()
        files = list(save_interpolant(interpolant, directory))
        files += write_exports(interpolant, directory, entry.exports)
        built.append(Built(interpolant, tuple(files), degree))
        if progress is not None:
            progress(number + 1, len(jobs))
    return built


def _prepare(config: InterpolationRunConfig, entry: InterpolationConfig) -> _Job | SurfaceJob:
    """Check one interpolation and resolve its kinematics."""
    where = f'{config.where}[[interpolation]] "{entry.name}"'
    integrals = {one.name: one for one in config.integrals}
    if entry.integral not in integrals:
        raise ConfigError(
            f'{where} integral = "{entry.integral}" {unknown_name(entry.integral, integrals)}'
        )
    integral = integrals[entry.integral]
    if (integral.family, integral.powers, integral.dimension) != ("bubble", (1, 1), 4):
        raise ConfigError(
            f"{where} integral {entry.integral}: no proven interpolation; accepted: a bubble "
            "with powers [1, 1] and dimension 4"
        )
    wrong = [k for k in entry.orders if not -1 <= k <= HIGHEST_ORDER]
    if wrong:
        raise ConfigError(
            f"{where} orders has {wrong[0]}; accepted: -1 and {HIGHEST_ORDER} (higher ones "
            "have a logarithm at threshold)"
        )
    if (entry.mass is None) != (entry.mass_range is None):
        raise ConfigError(f"{where}: mass and mass_range; accepted: both or none of them")
    try:
        return _kinematics(config, entry, integral, where)
    except InputError as error:
        raise ConfigError(f"{where}: {error}") from None


def _kinematics(
    config: InterpolationRunConfig,
    entry: InterpolationConfig,
    integral: IntegralConfig,
    where: str,
) -> _Job | SurfaceJob:
    expressions = integral.expressions()
    known = {name: value.evaluate({}) for name, value in entry.constants.items()}
    variable = expressions["p_squared"].text
    if expressions["p_squared"].columns != {variable}:
        raise InputError(f"p_squared = {variable}; accepted: a column, which is the variable")
    squares = [_squared_mass(keys, expressions, known, entry.mass) for keys in integral.mass_keys]
    ends = _ends(entry.range, known, "range")
    mu_squared = _constant(config.conventions.mu_squared, known, "mu_squared")
    conventions = Conventions.parse(
        config.conventions.measure, config.conventions.propagator_sign, mu_squared
    )
    fixed = [square for square in squares if square is not None]
    if not any(fixed):
        raise InputError("both masses are zero; accepted: at most one massless line")
    if entry.mass is None or entry.mass_range is None:
        return _Job(entry, conventions, *ends, fixed[0], fixed[1], where)
    if len(fixed) != 1:
        raise InputError(
            f"mass = {entry.mass!r}; accepted: the column that is the mass (not its square) of one "
            f"line of {integral.name}"
        )
    line = squares.index(None)
    lowest, highest = _ends(entry.mass_range, known, "mass_range")
    if lowest <= 0:
        raise InputError(f"mass_range starts at {lowest}; accepted: positive masses")
    first, second = ("m1", "m2") if line == 0 else ("m2", "m1")
    text = f"bubble(1, 1), d = 4 - 2 eps, {first} = {entry.mass}, {second}_squared = {fixed[0]}"
    return SurfaceJob(
        entry.name,
        text,
        entry.orders,
        float(entry.error),
        where,
        conventions,
        _as_doubles(ends, f"{where} range"),
        entry.mass,
        _as_doubles((lowest, highest), f"{where} mass_range"),
        fixed[0],
        line,
    )


def _squared_mass(
    keys: MassKeys,
    expressions: Mapping[str, Expression],
    known: Mapping[str, fmpq],
    varying: str | None,
) -> fmpq | None:
    """Return a squared mass, or None if the mass is the variable."""
    if keys.width in expressions or keys.imaginary in expressions:
        raise InputError(f"{keys.squared} is complex; accepted: stable particles")
    squared = keys.squared in expressions
    key = keys.squared if squared else keys.mass
    if not squared and varying is not None and expressions[key].text == varying:
        return None
    mass = _constant(expressions[key], known, key)
    if mass < 0 or (mass == 0 and varying is not None):
        raise InputError(f"{key} = {mass}; accepted: positive masses")
    return mass if squared else mass * mass


def _ends(
    written: tuple[Expression, Expression], known: Mapping[str, fmpq], key: str
) -> tuple[fmpq, fmpq]:
    low, high = (_constant(value, known, key) for value in written)
    if low >= high:
        raise InputError(f"{key} = [{low}, {high}]; accepted: two increasing numbers")
    return low, high


def _as_doubles(ends: tuple[fmpq, fmpq], where: str) -> tuple[float, float]:
    """Return the ends of a range as doubles: a float that a user wrote is itself."""
    return finite_double(ends[0], where), finite_double(ends[1], where)


@dataclass(frozen=True)
class _Job:
    """One interpolation; everything in units of mu^2 but `range` and `scale`."""

    entry: InterpolationConfig
    conventions: Conventions
    low: fmpq
    high: fmpq
    m1: fmpq
    m2: fmpq
    where: str

    @property
    def ends(self) -> tuple[float, float]:
        """The ends of the range as doubles."""
        return _as_doubles((self.low, self.high), f"{self.where} range")

    def build(self) -> tuple[Interpolant, int]:
        """Return the interpolant and the largest degree."""
        mu = self.conventions.mu_squared
        with working_precision(BITS):
            product = arb(self.m1).sqrt() * arb(self.m2).sqrt()
            threshold = arb(self.m1) + arb(self.m2) + 2 * product
            # everything in the bound is in units of mu^2
            size = float((threshold / arb(mu)).mid())
            sheets: Geometry = (
                Sheets(size, float((2 * (product / arb(mu)).sqrt()).mid()))
                if product > 0
                else OneMass(math.sqrt(size))
            )
            unit = float(arb(mu).sqrt().mid())
            pieces = self._pieces(threshold, sheets, unit)
        evaluator = Evaluator(
            Integral.parse("bubble", (1, 1), 4, (-1, HIGHEST_ORDER)),
            self.conventions,
            digits=NODE_DIGITS,
        )
        tolerance = float(self.entry.error)
        chosen = [self._degree(piece, sheets, unit, tolerance / 4) for piece in pieces]
        made: dict[int, list[Complex]] = {k: [] for k in self.entry.orders}
        errors = dict.fromkeys(self.entry.orders, 0.0)
        for piece, n in zip(pieces, chosen, strict=True):
            found = self._interpolate(piece, n, evaluator, threshold)
            for k in self.entry.orders:
                values, node_error = found[k]
                made[k].append(values)
                total = self._truncation(piece, n, sheets, unit) if k >= 0 else 0.0
                total += node_error + _evaluation_error(values, piece)
                errors[k] = max(errors[k], total)
        for k, error in errors.items():
            if error > tolerance:
                raise ConfigError(
                    f"{self.where} error = {self.entry.error} is not reached at order {k} (proven: "
                    f"{error:.1e}); accepted: a larger error"
                )
        length = max(len(values) for one in made.values() for values in one)
        coefficients = {
            k: np.array([np.pad(values, (0, length - len(values))) for values in one])
            for k, one in made.items()
        }
        return self._finished(pieces, threshold, coefficients, errors), length - 1

    def _finished(
        self,
        pieces: list[Piece],
        threshold: arb,
        coefficients: Mapping[int, np.ndarray],
        errors: Mapping[int, float],
    ) -> Interpolant:
        with working_precision(BITS):
            high = float(threshold.mid())
            low = float((threshold - arb(high)).mid())
        powers = "bubble(1, 1), d = 4 - 2 eps"
        edges = [piece.left for piece in pieces] + [pieces[-1].right]
        edges[0], edges[-1] = self.ends
        return Interpolant(
            self.entry.name,
            f"{powers}, m1_squared = {self.m1}, m2_squared = {self.m2}",
            tuple(self.entry.orders),
            (edges[0], edges[-1]),
            dict(errors),
            (high, low),
            np.array(edges),
            np.array([piece.centre for piece in pieces]),
            np.array([piece.half for piece in pieces]),
            dict(coefficients),
            self.conventions.described,
        )

    def _pieces(self, threshold: arb, sheets: Geometry, unit: float) -> list[Piece]:
        """Cut the range so that an acceptable degree reaches the error on every piece."""
        t = float(threshold.mid())
        low, high = self.ends
        pieces: list[Piece] = []
        if low < t:
            start = math.sqrt(t - high) if high < t else 0.0
            pieces += _cut(True, start, math.sqrt(t - low), t, sheets, unit)[::-1]
        if high > t:
            start = math.sqrt(low - t) if low > t else 0.0
            pieces += _cut(False, start, math.sqrt(high - t), t, sheets, unit)
        if len(pieces) > MOST_PIECES:
            raise ConfigError(
                f"{self.where} range needs {len(pieces)} pieces; accepted: a range with up to "
                f"{MOST_PIECES}"
            )
        return pieces

    def _truncation(self, piece: Piece, n: int, sheets: Geometry, unit: float) -> float:
        """Bound |coefficient - interpolant of degree n| on a piece."""
        jump = sheets.jump(piece.stop / unit) if piece.start == 0 else None
        if jump is not None:  # between two values that both are so close to that at threshold
            pole, _ = prefactor_sizes(self.conventions)
            return 2 * GROWTH * pole * jump if n == 1 else math.inf
        modulus = sheets.bound(piece.below, piece.start / unit, piece.radius(sheets, unit))
        return truncation(coefficient_bound(modulus, self.conventions), piece.rho(sheets, unit), n)

    def _degree(self, piece: Piece, sheets: Geometry, unit: float, tolerance: float) -> int:
        """Return the smallest degree whose truncation error is proven to be small enough."""
        n = 1
        while self._truncation(piece, n, sheets, unit) > tolerance:
            n += 1
            if n > MOST_DEGREE:
                raise ConfigError(
                    f"{self.where} error = {self.entry.error} is beyond doubles; accepted: larger"
                )
        return n

    def _interpolate(
        self, piece: Piece, n: int, evaluator: Evaluator, threshold: arb
    ) -> dict[int, tuple[np.ndarray, float]]:
        """Return the rounded Chebyshev coefficients by order, and the error of the nodes."""
        with working_precision(BITS):
            nodes = [_node(piece, j, n, threshold) for j in range(n + 1)]
            masses = ExactComplex(self.m1), ExactComplex(self.m2)
            series = [evaluator(TwoPoint(s, *masses)).series for s in nodes]
            found: dict[int, tuple[np.ndarray, float]] = {}
            for k in self.entry.orders:
                balls = [complex_ball(one[k]) for one in series]
                if all(ball == balls[0] for ball in balls):  # the pole
                    value, bound = float_with_bound(balls[0].real)
                    found[k] = (np.array([value] + [0.0] * n, dtype=np.complex128), bound)
                    continue
                largest = max(float(ball.rad().upper()) for ball in balls)
                parts = arb_mat([[ball.real.mid(), ball.imag.mid()] for ball in balls])
                re, im = from_values(parts).transpose().tolist()
                rounded = [
                    (float_with_bound(a), float_with_bound(b)) for a, b in zip(re, im, strict=True)
                ]
                array = np.array([complex(a[0], b[0]) for a, b in rounded])
                rounding = sum(a[1] + b[1] for a, b in rounded)
                nodes_error = lebesgue_constant(n) * (largest + SHIFT_ERROR)
                kept, dropped = shortened(array[:, np.newaxis], float(self.entry.error) / 8)
                found[k] = kept[:, 0], 1.001 * (nodes_error + rounding) + dropped
        return found


@dataclass(frozen=True)
class Piece:
    """An interval of w = sqrt(|t - s|) on one side of the threshold, in the user's units."""

    below: bool
    start: float
    stop: float
    left: float
    right: float

    @property
    def centre(self) -> float:
        """The middle in w."""
        return (self.start + self.stop) / 2

    @property
    def half(self) -> float:
        """Half the length in w."""
        return (self.stop - self.start) / 2

    def rho(self, sheets: Geometry, unit: float) -> float:
        """Return the parameter of the ellipse that is used."""
        largest = sheets.largest_ellipse(self.below, self.start / unit, self.stop / unit)
        return 0.999 * largest

    def radius(self, sheets: Geometry, unit: float) -> float:
        """Return a bound on |w| in the ellipse, in units of mu."""
        rho = self.rho(sheets, unit)
        return 1.001 * (self.centre + self.half * (rho + 1 / rho) / 2) / unit


def _cut(
    below: bool, start: float, stop: float, t: float, sheets: Geometry, unit: float
) -> list[Piece]:
    """Cut [start, stop] in w into pieces with a roomy ellipse."""
    pieces = []
    at = start
    while at < stop:
        length = sheets.length(below, at / unit) * unit
        end = stop if at + 1.3 * length >= stop else at + length
        near, far = (t - end * end, t - at * at) if below else (t + at * at, t + end * end)
        pieces.append(Piece(below, at, end, near, far))
        at = end
        if len(pieces) > MOST_PIECES:
            break
    return pieces


def _node(piece: Piece, j: int, n: int, threshold: arb) -> fmpq:
    """Return s at a Chebyshev point, as a rational number close to it."""
    w = node(piece.centre, piece.half, j, n)
    return nearby_rational(threshold - w * w if piece.below else threshold + w * w)


def _evaluation_error(c: np.ndarray, piece: Piece) -> float:
    """Bound what `interpolant` loses in doubles; x is within 8 UNIT (1 + |w|/h)."""
    return clenshaw_error(np.abs(c.real) + np.abs(c.imag), 8 * (1 + piece.stop / piece.half))


def _constant(expression: Expression, known: Mapping[str, fmpq], key: str) -> fmpq:
    for name in expression.columns:
        if name not in known:
            raise InputError(
                f"{key} = {expression.text}: {name} has no value; accepted: it in constants"
            )
    return expression.evaluate(known)
