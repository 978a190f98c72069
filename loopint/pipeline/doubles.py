"""Whole columns in doubles with proven bounds: what a run does where up to 15 digits are asked.

A row of an integral is done here if its region is certain, and generic or p^2 = 0, and if every
bound, with what the rounding of its kinematics costs, is within 10^-digits of its coefficient;
every other row is evaluated on its own in ball arithmetic, which also finds the reason if it has to
be rejected.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from loopint.arrays.bubble import bubble_doubles, recipe
from loopint.arrays.evaluate import BLOCK, Arrays, Tolerance
from loopint.arrays.points import real_points
from loopint.arrays.result import invalid_mass
from loopint.arrays.rounding import UNIT
from loopint.arrays.tadpole import tadpole_doubles
from loopint.core.kinematics import Region
from loopint.core.lazy import lazy
from loopint.pipeline.cells import rounded_column
from loopint.pipeline.rounded import Rounded
from loopint.pipeline.tables import IntegralColumns, Written, WrittenIntegral

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from loopint.arrays.rounding import Number, Real
    from loopint.pipeline.plan import IntegralPlan

Mask = NDArray[np.bool_]

MOST_DIGITS = 15
MARGIN = 1.1  # as in `tables.proven_digits`
DOUBLE_BITS = 53
METHOD = "double"
SAFE_SCALE = 2.0**400  # squares of squared masses are in range
REGIONS = (
    Region.SCALELESS,
    Region.MASSIVE,
    Region.ZERO_MOMENTUM,
    Region.SPACELIKE,
    Region.BELOW_PSEUDOTHRESHOLD,
    Region.BELOW_THRESHOLD,
    Region.ABOVE_THRESHOLD,
    Region.COMPLEX_MASS,
)
CODE = {region: code for code, region in enumerate(REGIONS)}
UNDECIDED = -1


def serves(plan: IntegralPlan, digits: int) -> bool:
    """Whether rows of an integral can be done in doubles."""
    if digits > MOST_DIGITS or plan.snaps:
        return False
    if not plan.has_fixed_conventions and plan.integral.mass_dimension.q != 1:
        return False  # roots of mu^2
    if plan.integral.family == "bubble":
        return recipe(plan.integral, plan.fixed_conventions) is not None
    return plan.integral.family == "tadpole"


@dataclass
class DoubleResults:
    """One integral in the rows of a chunk, as far as doubles go.

    Attributes
    ----------
    done
        The rows that are.
    values, bounds
        By order, for all rows.
    regions
        Codes of `REGIONS`.
    real
        The rows that are done and whose imaginary parts vanish exactly.
    """

    name: str
    orders: tuple[int, int]
    done: Mask
    values: Mapping[int, NDArray[np.complex128]]
    bounds: Mapping[int, Real]
    regions: NDArray[np.int8]
    real: Mask

    @lazy
    def digits(self) -> dict[int, tuple[NDArray[np.int16], Mask]]:
        """By order: proven digits as in `tables.proven_digits`, and where the value is exact."""
        return {order: self._digits(order) for order in self.values}

    def _digits(self, order: int) -> tuple[NDArray[np.int16], Mask]:
        bound, size = self.bounds[order], np.abs(self.values[order])
        with np.errstate(all="ignore"):
            found = np.floor(-np.log10(MARGIN * bound / size) - 1e-9)
        exact = bound == 0
        found = np.where(exact | ~np.isfinite(found), 0.0, found)
        return np.clip(found, 0, 2**15 - 1).astype(np.int16), exact

    def written(self, row: int) -> WrittenIntegral:
        """Return a row that is done as it stands in the table."""
        real = bool(self.real[row])
        numbers = []
        for order in range(self.orders[0], self.orders[1] + 1):
            value, bound = self.values[order][row], float(self.bounds[order][row])
            digits, exact = self.digits[order]
            numbers.append(
                Written(
                    float(value.real),
                    float(value.imag),
                    bound,
                    0.0 if real else bound,
                    None,
                    None,
                    None if exact[row] else int(digits[row]),
                )
            )
        region = str(REGIONS[self.regions[row]])
        return WrittenIntegral(
            self.name, self.orders[0], tuple(numbers), region, METHOD, "ok", DOUBLE_BITS
        )

    def columns(
        self, others: Mapping[int, WrittenIntegral], accepted: NDArray[np.intp]
    ) -> IntegralColumns:
        """Return the accepted rows, with `others` for the rows that are not done."""
        columns = IntegralColumns(self.name, self.orders)
        places = np.array(sorted(others), dtype=np.intp)
        rest = [others[int(place)] for place in places]
        for index, order in enumerate(columns.orders):
            value, bound = self.values[order], self.bounds[order]
            digits, exact = (column.copy() for column in self.digits[order])
            found: dict[str, NDArray[Any]] = {
                "re": value.real.copy(),
                "im": value.imag.copy(),
                "re_bound": bound.copy(),
                "im_bound": np.where(self.real, 0.0, bound),
            }
            for name, column in found.items():
                column[places] = [getattr(one.numbers[index], name) for one in rest]
                columns.numbers[name][index] = column[accepted]
            proven = [one.numbers[index].digits for one in rest]
            digits[places] = [0 if n is None else n for n in proven]
            exact[places] = [n is None for n in proven]
            columns.numbers["digits"][index] = pa.array(digits[accepted], mask=exact[accepted])
        regions = _Names([str(region) for region in REGIONS], self.regions)
        columns.region = regions.with_others(places, [one.region for one in rest], accepted)
        nil = np.zeros(self.done.size, dtype=np.int8)
        methods, statuses = _Names([METHOD], nil), _Names(["ok"], nil)
        columns.method = methods.with_others(places, [one.method for one in rest], accepted)
        columns.status = statuses.with_others(places, [one.status for one in rest], accepted)
        columns.precision_bits = max([DOUBLE_BITS, *(one.precision_bits for one in rest)])
        return columns


@dataclass
class _Names:
    """A column of strings as codes."""

    names: list[str]
    codes: NDArray[np.int8]

    def with_others(
        self, places: NDArray[np.intp], names: Sequence[str], accepted: NDArray[np.intp]
    ) -> pa.Array:
        """Replace some rows, keep the accepted ones, and return strings."""
        known = list(self.names)
        for name in names:
            if name not in known:
                known.append(name)
        codes = self.codes.copy()
        codes[places] = [known.index(name) for name in names]
        indices = pa.array(codes[accepted].astype(np.int8))
        return pa.DictionaryArray.from_arrays(indices, pa.array(known)).cast(pa.string())


def nothing_done(plan: IntegralPlan, rows: int) -> DoubleResults:
    """Return the results of an integral that doubles do not serve."""
    orders = plan.integral.orders
    span = range(orders[0], orders[1] + 1)
    return DoubleResults(
        plan.name,
        orders,
        np.zeros(rows, dtype=bool),
        {k: np.zeros(rows, dtype=np.complex128) for k in span},
        {k: np.zeros(rows) for k in span},
        np.zeros(rows, dtype=np.int8),
        np.zeros(rows, dtype=bool),
    )


def evaluate_doubles(plan: IntegralPlan, table: pa.Table, rows: int, digits: int) -> DoubleResults:
    """Evaluate an integral that doubles serve in all rows of a block.

    Parameters
    ----------
    plan
        The integral; see `serves`.
    table
        The columns it needs, as they were read.
    rows
        The number of rows, for a table without columns.
    digits
        The digits asked for.
    """
    found = _kinematics(plan, table, rows)
    regions, usable = found.regions, found.usable
    if plan.integral.derivatives:
        for mass in found.masses:
            usable = usable & (mass != 0)  # such a point may be isolated
    tolerance = Tolerance(10.0**-digits / (1.01 * MARGIN), of_series=False)
    p, masses, error, conventions = found.p, found.masses, found.error, plan.fixed_conventions
    if found.mu_squared is not None:
        p, masses, error = found.in_units_of_mu()
    safe = [np.where(usable, mass, 1.0) for mass in masses]
    error_or_none = np.where(usable, error, 0.0) if error.any() else None
    if p is None:
        arrays = tadpole_doubles(plan.integral, conventions, safe[0], tolerance, error_or_none)
    else:
        arrays = bubble_doubles(
            plan.integral,
            conventions,
            (np.where(usable, p, 0.0), safe[0], safe[1]),
            tolerance,
            error_or_none,
        )
    if found.mu_squared is not None:
        _times_power(arrays, found.mu_squared, int(plan.integral.mass_dimension.p), tolerance)
    done = usable & ~arrays.missing
    real = done & (regions != CODE[Region.ABOVE_THRESHOLD])
    for mass in masses:
        real &= np.imag(mass) == 0
    return DoubleResults(
        plan.name, plan.integral.orders, done, arrays.values, arrays.bounds, regions, real
    )


def certain_regions(
    plan: IntegralPlan, table: pa.Table, rows: int
) -> tuple[NDArray[np.int8], Mask]:
    """Return codes of `REGIONS`, and in which rows they and the validity of the row are certain."""
    found = _kinematics(plan, table, rows)
    return found.regions, found.usable


@dataclass
class _Kinematics:
    """p^2 (None for a tadpole), squared masses and mu^2 (None if fixed) of all rows.

    Attributes
    ----------
    error
        Largest relative error of p^2 and the squared masses, in units of UNIT.
    regions
        Codes of `REGIONS`.
    usable
        The rows where everything is valid and the region is certain.
    """

    p: Real | None
    masses: list[Number]
    mu_squared: Rounded | None
    error: Real
    regions: NDArray[np.int8]
    usable: Mask

    def in_units_of_mu(self) -> tuple[Real | None, list[Number], Real]:
        """Return p^2, squared masses and their relative errors divided by mu^2."""
        assert self.mu_squared is not None
        scale = self.mu_squared.value
        worst = self.error + self.mu_squared.error + 1.0
        exact = (self.error + self.mu_squared.error == 0) & (np.frexp(scale)[0] == 0.5)
        with np.errstate(all="ignore"):
            masses = [
                mass.real / scale + 1j * (mass.imag / scale)
                if np.iscomplexobj(mass)
                else mass / scale
                for mass in self.masses
            ]
            p = None if self.p is None else self.p / scale
        return p, masses, np.where(exact, 0.0, worst * (1.0 + 2.0**-20))


def _times_power(arrays: Arrays, mu_squared: Rounded, power: int, tolerance: Tolerance) -> None:
    """Multiply by (mu^2)^power."""
    if power == 0:
        return
    factor = mu_squared**power
    scale = np.abs(factor.value)
    with np.errstate(all="ignore"):
        for order, value in arrays.values.items():
            value.real *= factor.value
            value.imag *= factor.value
            arrays.bounds[order] *= scale * (1.0 + 2.0**-40)
        arrays.missing[:] |= ~((scale > 1 / SAFE_SCALE) & (scale < SAFE_SCALE))
        more = {k: (factor.error + 2.0) * np.abs(v) for k, v in arrays.values.items()}
        arrays.widen(np.arange(scale.size), more, tolerance)


def _kinematics(plan: IntegralPlan, table: pa.Table, rows: int) -> _Kinematics:
    columns = {name: rounded_column(table.column(name)) for name in plan.columns}
    p_squared, lines = plan.over(columns, rows)
    error = np.zeros(rows)
    if p_squared is not None:
        error = np.maximum(error, p_squared.error)
    masses: list[Number] = []
    for re, im in lines:
        error = np.maximum(error, re.error)
        if im is None:
            masses.append(re.value)
            continue
        error = np.maximum(error, im.error)
        masses.append(re.value + 1j * im.value if im.value.any() else re.value)
    usable = np.isfinite(error)
    mu_squared = None
    if not plan.has_fixed_conventions:
        mu_squared = plan.mu_squared_over(columns, rows)
        value = mu_squared.value
        usable &= np.isfinite(mu_squared.error) & (value > 1 / SAFE_SCALE) & (value < SAFE_SCALE)
    for mass in masses:
        usable &= ~invalid_mass(mass)
    p = None if p_squared is None else p_squared.value
    regions = _regions(p, masses, error)
    usable &= regions != UNDECIDED
    return _Kinematics(p, masses, mu_squared, error, regions, usable)


def _regions(p: Real | None, masses: Sequence[Number], error: Real) -> NDArray[np.int8]:
    """Return codes of `REGIONS`, `UNDECIDED` on and near every special point but p^2 = 0."""
    if p is None:
        return _one_point_regions(masses[0])
    found = np.empty(p.size, dtype=np.int8)
    for start in range(0, p.size, BLOCK):
        block = slice(start, start + BLOCK)
        with np.errstate(all="ignore"):
            found[block] = _two_point_regions(
                p[block], masses[0][block], masses[1][block], error[block]
            )
    return found


def _one_point_regions(m: Number) -> NDArray[np.int8]:
    found = np.full(m.size, CODE[Region.MASSIVE], dtype=np.int8)
    if np.iscomplexobj(m):
        found[m.imag != 0] = CODE[Region.COMPLEX_MASS]
    found[m == 0] = CODE[Region.SCALELESS]
    return found


def _two_point_regions(p: Real, m1: Number, m2: Number, error: Real) -> NDArray[np.int8]:
    """Return codes of regions.

    Relative errors delta of the arguments move lambda = S^2 - 4 m1^2 m2^2 by at most
    delta (2 |S| M + 8 m1^2 m2^2) + delta^2 (M^2 + 4 m1^2 m2^2), M = |p^2| + m1^2 + m2^2: where
    lambda > 0 withstands that, the sign of S does too.
    """
    a, b = np.real(m1), np.real(m2)
    nil = np.zeros_like(p)
    point = real_points(p, a, b, nil, nil)
    positive = point.kallen > 0
    beyond = point.excess > 0
    found = np.where(
        positive,
        np.where(beyond, CODE[Region.ABOVE_THRESHOLD], CODE[Region.BELOW_PSEUDOTHRESHOLD]),
        CODE[Region.BELOW_THRESHOLD],
    ).astype(np.int8)
    massless = (a == 0) | (b == 0)
    found[massless & ~beyond] = CODE[Region.BELOW_THRESHOLD]
    delta, largest, product = error * UNIT, point.largest, a * b
    moved = delta * (2.0 * np.abs(point.excess) * largest + 8.0 * product)
    moved += 2.0 * (delta * largest) ** 2
    certain = (point.kallen_error != 0) & np.isfinite(point.kallen_error)
    certain &= (np.abs(point.kallen) > 2.0 * moved) & (largest < SAFE_SCALE)
    certain &= largest > 1 / SAFE_SCALE
    found[~certain] = UNDECIDED
    found[p < 0] = CODE[Region.SPACELIKE]
    if np.iscomplexobj(m1) or np.iscomplexobj(m2):
        found[(np.imag(m1) != 0) | (np.imag(m2) != 0)] = CODE[Region.COMPLEX_MASS]
    scale = (m1 != 0) | (m2 != 0)
    found[p == 0] = np.where(scale, CODE[Region.ZERO_MOMENTUM], CODE[Region.SCALELESS])[p == 0]
    return found
