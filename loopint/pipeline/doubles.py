"""Whole columns in doubles with proven bounds: what a run does where up to 15 digits are asked.

A row of an integral is done here if its kinematics are exactly doubles, its region is generic or
p^2 = 0, and every bound is within 10^-digits of its coefficient; every other row is evaluated on
its own in ball arithmetic, which also finds the reason if it has to be rejected.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from loopint.arrays.bubble import bubble_doubles, recipe
from loopint.arrays.evaluate import BLOCK, Tolerance
from loopint.arrays.points import real_points
from loopint.arrays.result import invalid_mass
from loopint.arrays.tadpole import tadpole_doubles
from loopint.core.kinematics import Region
from loopint.pipeline.exact_doubles import ExactDoubles
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
    if digits > MOST_DIGITS or not plan.has_fixed_conventions or plan.snaps:
        return False
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

    def digits(self, order: int) -> tuple[NDArray[np.int16], Mask]:
        """Return proven digits as in `tables.proven_digits`, and where the value is exact."""
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
            digits, exact = self.digits(order)
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
            digits, exact = self.digits(order)
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
    columns = {name: _doubles(table.column(name)) for name in plan.columns}
    p, masses, usable = _kinematics(plan, columns, rows)
    for mass in masses:
        usable &= ~invalid_mass(mass)
    regions = _regions(p, masses)
    usable &= regions != UNDECIDED
    if plan.integral.derivatives:
        for mass in masses:
            usable &= mass != 0  # such a point may be isolated
    tolerance = Tolerance(10.0**-digits / (1.01 * MARGIN), of_series=False)
    safe = [np.where(usable, mass, 1.0) for mass in masses]
    if p is None:
        arrays = tadpole_doubles(plan.integral, plan.fixed_conventions, safe[0], tolerance)
    else:
        arrays = bubble_doubles(
            plan.integral,
            plan.fixed_conventions,
            (np.where(usable, p, 0.0), safe[0], safe[1]),
            tolerance,
        )
    done = usable & ~arrays.missing
    real = done & (regions != CODE[Region.ABOVE_THRESHOLD])
    for mass in masses:
        real &= np.imag(mass) == 0
    return DoubleResults(
        plan.name, plan.integral.orders, done, arrays.values, arrays.bounds, regions, real
    )


def _doubles(column: pa.ChunkedArray) -> ExactDoubles:
    """Return a column as doubles; what is null or not a double by itself is not exact."""
    kind = column.type
    rows = len(column)
    if pa.types.is_floating(kind) or pa.types.is_integer(kind):
        missing = column.is_null().to_numpy()
        plain = column.fill_null(0).to_numpy()
        values = plain.astype(np.float64)
        exact = ~missing & np.isfinite(values)
        if pa.types.is_integer(kind):
            exact &= np.abs(values) <= 2.0**53
        return ExactDoubles(values, exact)
    return ExactDoubles(np.zeros(rows), np.zeros(rows, dtype=bool))


def _kinematics(
    plan: IntegralPlan, columns: Mapping[str, ExactDoubles], rows: int
) -> tuple[Real | None, list[Number], Mask]:
    """Return p^2, the squared masses, and where they are exact."""
    usable = np.ones(rows, dtype=bool)
    p: Real | None = None
    p_squared, lines = plan.over(columns, rows)
    if p_squared is not None:
        p = p_squared.value
        usable &= p_squared.exact
    masses: list[Number] = []
    for re, im in lines:
        usable &= re.exact
        if im is None:
            masses.append(re.value)
            continue
        usable &= im.exact
        masses.append(re.value + 1j * im.value if im.value.any() else re.value)
    return p, masses, usable


def _regions(p: Real | None, masses: Sequence[Number]) -> NDArray[np.int8]:
    """Return codes of `REGIONS`, `UNDECIDED` on and near every special point but p^2 = 0."""
    if p is None:
        return _one_point_regions(masses[0])
    found = np.empty(p.size, dtype=np.int8)
    for start in range(0, p.size, BLOCK):
        block = slice(start, start + BLOCK)
        with np.errstate(all="ignore"):
            found[block] = _two_point_regions(p[block], masses[0][block], masses[1][block])
    return found


def _one_point_regions(m: Number) -> NDArray[np.int8]:
    found = np.full(m.size, CODE[Region.MASSIVE], dtype=np.int8)
    if np.iscomplexobj(m):
        found[m.imag != 0] = CODE[Region.COMPLEX_MASS]
    found[m == 0] = CODE[Region.SCALELESS]
    return found


def _two_point_regions(p: Real, m1: Number, m2: Number) -> NDArray[np.int8]:
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
    exact_or_close = (point.kallen_error == 0) | ~np.isfinite(point.kallen_error)
    found[exact_or_close | np.isnan(point.kallen)] = UNDECIDED
    found[p < 0] = CODE[Region.SPACELIKE]
    if np.iscomplexobj(m1) or np.iscomplexobj(m2):
        found[(np.imag(m1) != 0) | (np.imag(m2) != 0)] = CODE[Region.COMPLEX_MASS]
    scale = (m1 != 0) | (m2 != 0)
    found[p == 0] = np.where(scale, CODE[Region.ZERO_MOMENTUM], CODE[Region.SCALELESS])[p == 0]
    return found
