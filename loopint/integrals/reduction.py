"""Reduction of two-point integrals to masters by exact relations between them.

Euclidean sign, D1 = m1^2 - q^2, D2 = m2^2 - (q+p)^2, c = m1^2 + m2^2 - p^2, lambda = c^2 - 4 m1^2 m2^2,
and B(n1, n2) in d dimensions.  The integral of a total derivative vanishes in dimensional
regularisation (Chetyrkin, Tkachov, Nucl. Phys. B192 (1981) 159); with d/dq.q it reads

    (d - 2 n1 - n2) B(n1, n2) + 2 n1 m1^2 B(n1+1, n2) + n2 c B(n1, n2+1) - n2 B(n1-1, n2+1) = 0,   (1)

and (2) is (1) with the lines exchanged.  Dimensions are connected by (Tarasov, hep-th/9606018)

    B^(d-2)(n1, n2) = n1 B^(d)(n1+1, n2) + n2 B^(d)(n1, n2+1).                                      (3)

What lowers n1 + n2 is decided by the kinematics alone:

=========================  =========================================================================
lambda != 0                (1) and (2) solved for B(n1+1, n2) and B(n1, n2+1); ends in B(1, 1)
lambda = 0, c != 0         (1) and (2) are dependent on their highest terms: what is left over lowers
                           B(n, 1), and (1) leads there; ends in tadpoles
lambda = 0, c = 0          on shell with a massless line: (1) ends in tadpoles
p^2 = 0, m1 = m2           D1 = D2: B(n1, n2) = A(n1+n2)
=========================  =========================================================================

At p^2 = 0 with different masses B(1, 1) is itself a difference of two tadpoles.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from enum import StrEnum
from functools import cached_property, lru_cache
from math import comb
from types import MappingProxyType
from typing import TYPE_CHECKING, TypeAlias

from loopint.core.conventions import PropagatorSign
from loopint.core.errors import InputError, UnsupportedIntegralError
from loopint.core.rational_functions import RationalFunction, variables

if TYPE_CHECKING:
    import sympy
    from flint import fmpz_mpoly

MAX_POWER = 12
MAX_DIMENSION = 20
TADPOLE_1, TADPOLE_2, BUBBLE = range(3)
Combination: TypeAlias = "dict[int, RationalFunction]"  # coefficients of the three masters


class Kinematics(StrEnum):
    """Two-point kinematics with a reduction of their own.

    ==========================  ==========================================  ====================
    name                        meaning                                     variables
    ==========================  ==========================================  ====================
    general                     nothing special                             p_squared, m1_squared,
                                                                            m2_squared
    equal_mass                  m1 = m2 = m                                 p_squared, m_squared
    one_massless                m1 = 0, m2 = m                              p_squared, m_squared
    both_massless               m1 = m2 = 0                                 p_squared
    zero_momentum               p^2 = 0, m1 != m2                           m1_squared, m2_squared
    zero_momentum_equal_mass    p^2 = 0, m1 = m2 = m                        m_squared
    zero_momentum_one_massless  p^2 = 0, m1 = 0, m2 = m                     m_squared
    threshold                   p^2 = (m1 + m2)^2, both massive             m1, m2
    pseudothreshold             p^2 = (m1 - m2)^2, both massive, m1 != m2   m1, m2
    on_shell                    m1 = 0, p^2 = m2^2 = m^2                    m_squared
    ==========================  ==========================================  ====================
    """

    GENERAL = "general"
    EQUAL_MASS = "equal_mass"
    ONE_MASSLESS = "one_massless"
    BOTH_MASSLESS = "both_massless"
    ZERO_MOMENTUM = "zero_momentum"
    ZERO_MOMENTUM_EQUAL_MASS = "zero_momentum_equal_mass"
    ZERO_MOMENTUM_ONE_MASSLESS = "zero_momentum_one_massless"
    THRESHOLD = "threshold"
    PSEUDOTHRESHOLD = "pseudothreshold"
    ON_SHELL = "on_shell"


@dataclass(frozen=True, slots=True)
class Master:
    """One of the integrals that a reduction ends in, all powers 1.

    Attributes
    ----------
    name
        "A1", "A2" (tadpoles of the first and the second mass), "A" (where there is only one mass)
        or "B".
    powers
        (1,) or (1, 1).
    mass
        The variable that holds the squared mass of a tadpole, or m where the variables are the
        masses themselves; None for B.
    dimension
        Its d0.
    dimension_offset
        Its dimension minus d, the dimension of the integral that is reduced.
    """

    name: str
    powers: tuple[int, ...]
    mass: str | None
    dimension: int
    dimension_offset: int

    def __str__(self) -> str:
        shift = f"{self.dimension_offset:+d}" if self.dimension_offset else ""
        arguments = ", ".join(map(str, self.powers))
        return f"{self.name}^(d{shift})({arguments})"


@dataclass(frozen=True)
class Reduction:
    """B(n1, n2) = sum of coefficient * master, exactly, for every d.

    `coefficients[master]` is a sympy expression, rational in the variables of the kinematics and in
    d = dimension - 2 eps; `masters` lists only what contributes, and is empty for an integral that
    vanishes.  All integrals have the measure Int d^dq/(i pi^(d/2)) of their own dimension, times
    the same N(eps) (mu^2)^eps.  With measure = "two_pi" each coefficient gets a further factor
    (4 pi)^(dimension_offset/2).
    """

    powers: tuple[int, int]
    dimension: int
    kinematics: Kinematics
    propagator_sign: PropagatorSign
    coefficients: Mapping[Master, sympy.Expr] = field(hash=False)

    @property
    def masters(self) -> tuple[Master, ...]:
        """The masters that contribute."""
        return tuple(self.coefficients)

    @property
    def name(self) -> str:
        """The integral that is reduced."""
        return f"B^(d)({self.powers[0]}, {self.powers[1]})"

    def __repr__(self) -> str:
        lines = [
            f"{self.name}, d = {self.dimension} - 2 eps, kinematics {self.kinematics}, "
            f"propagator_sign {self.propagator_sign}"
        ]
        for master, coefficient in self.coefficients.items():
            lines.append(f"  {'+' if len(lines) > 1 else '='} {master} * [ {coefficient} ]")
        return "\n".join(lines if self.coefficients else [*lines, "  = 0"])

    def as_latex(self) -> str:
        r"""Return the reduction as a LaTeX equation; momenta and masses are written p and m.

        Examples
        --------
        >>> reduce_bubble((2, 1), kinematics="on_shell").as_latex()
        'B^{(d)}(2, 1) = \\frac{d - 2}{4 m^{4} \\left(d - 5\\right)}\\, A^{(d)}(1)'
        """
        import sympy  # noqa: PLC0415 - slow to import, and needed only for expressions

        plain = {
            sympy.Symbol(f"{stem}_squared"): sympy.Symbol(
                stem.replace("m1", "m_1").replace("m2", "m_2")
            )
            ** 2
            for stem in ("p", "m", "m1", "m2")
        }
        plain |= {sympy.Symbol(f"m{i}"): sympy.Symbol(f"m_{i}") for i in (1, 2)}
        terms = [
            rf"{sympy.latex(c.subs(plain))}\, {_latex_name(master)}"
            for master, c in self.coefficients.items()
        ]
        left = f"B^{{(d)}}({self.powers[0]}, {self.powers[1]})"
        return f"{left} = {' + '.join(terms) if terms else '0'}"


def reduce_bubble(
    powers: tuple[int, int],
    dimension: int = 4,
    *,
    kinematics: str = "general",
    master_dimension: int | None = None,
    propagator_sign: str = "minkowski",
) -> Reduction:
    """Write B(n1, n2) as a combination of tadpoles A(1) and the bubble B(1, 1), exactly.

    Parameters
    ----------
    powers
        Integers from -12 to 12.
    dimension
        d0, an integer from 1 to 20.  The symbol `d` in the coefficients is d0 - 2 eps.
    kinematics
        A name of `Kinematics`.  Special kinematics have fewer masters: at threshold, at
        pseudothreshold, on shell and at p^2 = 0 there are only tadpoles, without masses only B(1, 1).
    master_dimension
        The d0 of all masters, of the same parity as `dimension`; by default 4 for even and 3 for
        odd dimensions.
    propagator_sign
        "minkowski" or "euclidean", as for `loopint.bubble`.

    Returns
    -------
    Reduction
        With `masters` and `coefficients`.

    Raises
    ------
    InputError
        For an argument outside the ranges above.
    UnsupportedIntegralError
        For powers beyond +-12.

    Notes
    -----
    A coefficient can have a pole at eps = 0; then the masters are needed to a higher order.  In the
    degenerate kinematics the value is the one of dimensional regularisation exactly there.

    Examples
    --------
    The derivative of a massless bubble with respect to p^2, from its dimension:

    >>> reduce_bubble((2, 2), 6, kinematics="both_massless")
    B^(d)(2, 2), d = 6 - 2 eps, kinematics both_massless, propagator_sign minkowski
      = B^(d-2)(1, 1) * [ (d - 6)/(2*p_squared) ]
    >>> reduction = reduce_bubble((1, 1), kinematics="threshold")
    >>> [str(master) for master in reduction.masters]
    ['A1^(d)(1)', 'A2^(d)(1)']
    >>> reduction.coefficients[reduction.masters[0]]
    (d - 2)/(2*m1*(d - 3)*(m1 + m2))
    """
    chosen = _check_kinematics(kinematics)
    sign = _check_sign(propagator_sign)
    n1, n2 = _check_powers(powers)
    _check_dimension("dimension", dimension)
    if master_dimension is None:
        master_dimension = 3 if dimension % 2 else 4
    _check_dimension("master_dimension", master_dimension)
    if (dimension - master_dimension) % 2:
        raise InputError(
            f"master_dimension = {master_dimension} with dimension = {dimension}; accepted: two "
            "even or two odd dimensions"
        )
    return _reduce(n1, n2, dimension, chosen, master_dimension, sign)


def _check_kinematics(kinematics: str) -> Kinematics:
    try:
        return Kinematics(kinematics)
    except ValueError:
        raise InputError(
            f"kinematics = {kinematics!r} is unknown; accepted: {', '.join(Kinematics)}"
        ) from None


def _check_sign(propagator_sign: str) -> PropagatorSign:
    try:
        return PropagatorSign(propagator_sign)
    except ValueError:
        raise InputError(
            f"propagator_sign = {propagator_sign!r} is unknown; "
            f"accepted: {', '.join(PropagatorSign)}"
        ) from None


def _check_powers(powers: object) -> tuple[int, int]:
    if (
        not isinstance(powers, tuple | list)
        or len(powers) != 2
        or any(isinstance(n, bool) or not isinstance(n, int) for n in powers)
    ):
        raise InputError(f"powers = {powers!r}; accepted: two integers, such as (2, 1)")
    if any(abs(n) > MAX_POWER for n in powers):
        raise UnsupportedIntegralError(
            f"powers = {powers!r}; accepted: integers from -{MAX_POWER} to {MAX_POWER}"
        )
    return powers[0], powers[1]


def _check_dimension(name: str, dimension: object) -> None:
    if (
        isinstance(dimension, bool)
        or not isinstance(dimension, int)
        or not 1 <= dimension <= MAX_DIMENSION
    ):
        raise InputError(f"{name} = {dimension!r}; accepted: an integer from 1 to {MAX_DIMENSION}")


@lru_cache(maxsize=512)
def _reduce(
    n1: int,
    n2: int,
    dimension: int,
    kinematics: Kinematics,
    master_dimension: int,
    sign: PropagatorSign,
) -> Reduction:
    steps = (dimension - master_dimension) // 2
    if steps >= 0:
        found = _raised(kinematics, _relations(kinematics, 0).bubble(n1, n2), steps)
    else:
        found = _lowered(_relations(kinematics, -2 * steps), n1, n2, -steps)
    coefficients = {}
    for index, value in sorted(found.items()):
        if value.is_zero:
            continue
        master = _master(kinematics, index, master_dimension, -2 * steps)
        flips = (n1 + n2 - len(master.powers)) % 2 and sign is PropagatorSign.MINKOWSKI
        coefficients[master] = _expression(-value if flips else value)
    return Reduction((n1, n2), dimension, kinematics, sign, MappingProxyType(coefficients))


def _lowered(relations: _Relations, n1: int, n2: int, steps: int) -> Combination:
    """Reduce an integral in D - 2 steps to masters in D, by (3)."""
    total: Combination = {}
    for i in range(steps + 1):
        j = steps - i
        weight = comb(steps, i) * _rising(n1, i) * _rising(n2, j)
        if weight:
            total = _sum(total, relations.bubble(n1 + i, n2 + j), weight)
    return total


def _raised(kinematics: Kinematics, found: Combination, steps: int) -> Combination:
    """Replace masters in d by masters in d - 2 steps, by (3) solved for the higher dimension."""
    for step in range(steps):
        relations = _relations(kinematics, -2 * step)
        d, total = relations.d, {}  # type: RationalFunction, Combination
        remaining = dict(found)
        if BUBBLE in found:
            # B^(d-2)(1,1) = e B^(d)(1,1) + tadpoles
            lower = _sum(relations.bubble(2, 1), relations.bubble(1, 2))
            weight = remaining.pop(BUBBLE) / lower.pop(BUBBLE)
            total = {BUBBLE: weight}
            remaining = _sum(remaining, lower, -weight)
        for index, value in remaining.items():
            # A^(d-2)(1) = A^(d)(2) = (2-d)/(2 m^2) A^(d)(1)
            total[index] = value * 2 * relations.masses[index] / (2 - d)
        found = total
    return found


def _rising(n: int, steps: int) -> int:
    product = 1
    for j in range(steps):
        product *= n + j
    return product


def _sum(a: Combination, b: Combination, weight: RationalFunction | int = 1) -> Combination:
    """Return a + weight * b."""
    total = dict(a)
    for index, value in b.items():
        term = value * weight
        total[index] = total[index] + term if index in total else term
    return total


class _Relations:
    """All integrals at one kinematics in d + offset dimensions, as combinations of masters there.

    Attributes
    ----------
    d
        d + offset.
    p, masses
        p^2, and (m1^2, m2^2).
    """

    def __init__(self, kinematics: Kinematics, offset: int) -> None:
        names, assign = _VARIABLES[kinematics]
        first, *others = variables(("d", *names))
        zero = first - first
        self.d = first + offset
        self.zero, self.one = zero, zero + 1
        self.p, m1, m2 = assign(zero, *others)
        self.masses = (m1, m2)
        self._known: dict[tuple[int, int], Combination] = {}

    @cached_property
    def c(self) -> RationalFunction:
        """m1^2 + m2^2 - p^2."""
        return self.masses[0] + self.masses[1] - self.p

    @cached_property
    def kallen(self) -> RationalFunction:
        """lambda."""
        return self.c * self.c - 4 * self.masses[0] * self.masses[1]

    @cached_property
    def equal(self) -> bool:
        """Whether the two propagators are the same."""
        return self.p.is_zero and self.masses[0] == self.masses[1]

    def tadpole(self, line: int, n: int) -> Combination:
        """Return A(n) of line 0 or 1: A(n) = A(1) prod_(0<k<n) (k - d/2)/(k m^2)."""
        m = self.masses[line]
        if n <= 0 or m.is_zero:
            return {}
        value = self.one
        for k in range(1, n):
            value = value * (2 * k - self.d) / (2 * k * m)
        return {TADPOLE_1 if self.masses[0] == m else TADPOLE_2: value}

    def bubble(self, n1: int, n2: int) -> Combination:
        """Return B(n1, n2)."""
        key = (n1, n2)
        if key not in self._known:
            self._known[key] = self._find(n1, n2)
        return self._known[key]

    def _find(self, n1: int, n2: int) -> Combination:
        if self.equal:
            return self.tadpole(1, n1 + n2)
        if n1 <= 0 or n2 <= 0:
            return self._numerator(n1, n2)
        if self.kallen.is_zero:
            return self._on_shell(n1, n2) if self.c.is_zero else self._degenerate(n1, n2)
        if (n1, n2) == (1, 1):
            return self._first_bubble()
        return self._lowered(0, n1, n2) if n1 > 1 else self._lowered(1, n2, n1)

    def _ordered(self, line: int, n: int, other: int) -> Combination:
        """Return the bubble with power n on `line` and `other` on the other line."""
        return self.bubble(n, other) if line == 0 else self.bubble(other, n)

    def _numerator(self, n1: int, n2: int) -> Combination:
        """Return a bubble in which one power is j = 0, -1, -2, ...; the other is n.

        (1) lowers n to 1; there (1) and (2) together lower j.
        """
        line, n, j = (0, n1, -n2) if n1 > 0 else (1, n2, -n1)
        if n <= 0 or self.masses[line].is_zero:
            return {}
        if j == 0:
            return self.tadpole(line, n)
        m, other, c, d = self.masses[line], self.masses[1 - line], self.c, self.d
        B = lambda n, j: self._ordered(line, n, -j)
        if n > 1:
            total = _sum({}, B(n - 1, j), 2 * (n - 1) + -j - d)
            total = _sum(total, B(n - 1, j - 1), j * c)
            total = _sum(total, B(n - 2, j - 1), self.one * -j)
            return (
                _sum({}, total, 1 / (2 * (n - 1) * m))
                if False
                else _sum({}, total, self.one / (2 * (n - 1) * m))
            )
        # B(2, -j) by (2) at (1, 1-j), then B(1, -j) by (1)
        second = _sum({}, B(1, j - 1), d + (2 * j - 3))
        second = _sum(second, B(1, j - 2), 2 * (1 - j) * other) if j > 1 else second
        second = _sum(second, B(2, j - 1), c)
        total = _sum({}, B(1, j - 1), j * c)
        total = _sum(total, second, -2 * m)
        return _sum({}, total, self.one / (d - 2 + j))

    def _first_bubble(self) -> Combination:
        if not self.p.is_zero:
            return {BUBBLE: self.one}
        # 1/(D1 D2) = (1/D1 - 1/D2)/(D2 - D1), D2 - D1 = m2^2 - m1^2
        weight = self.one / (self.masses[1] - self.masses[0])
        return _sum(_sum({}, self.tadpole(0, 1), weight), self.tadpole(1, 1), -weight)

    def _lowered(self, line: int, n: int, k: int) -> Combination:
        """Return the bubble with n >= 2 on `line`, k >= 1 on the other, if lambda != 0.

        (1) and (2) at (n-1, k), solved for the first line.
        """
        i, other, c = n - 1, self.masses[1 - line], self.c
        here = self._ordered(line, i, k)
        total = _sum({}, here, 2 * other * (2 * i + k - self.d) - c * (2 * k + i - self.d))
        total = _sum(total, self._ordered(line, i - 1, k + 1), 2 * k * other)
        total = _sum(total, self._ordered(line, i + 1, k - 1), -i * c)
        return _sum({}, total, self.one / (-i * self.kallen))

    def _degenerate(self, n: int, k: int) -> Combination:
        """Return B(n, k) for lambda = 0 and c != 0.

        If k > 1, by (1) at (n, k-1).  Else by 2 m2^2 (1) - c (2) at (n, 1), in which the highest
        terms cancel, and with B(n-1, 2) from (1) at (n-1, 1):

            (2 m2^2 - c)(d-2n-1) B(n,1) = -c n A(n+1)
                + (2 m2^2/c) [ (2n-1-d) B(n-1,1) + B(n-2,2) ].

        For n = 1 the bracket is c A2(2), by (1) at (0, 1).
        """
        (m1, m2), c, d = self.masses, self.c, self.d
        if k > 1:
            i = k - 1
            total = _sum({}, self.bubble(n, i), 2 * n + i - d)
            total = _sum(total, self.bubble(n + 1, i), -2 * n * m1)
            total = _sum(total, self.bubble(n - 1, k), i)
            return _sum({}, total, self.one / (i * c))
        total = _sum({}, self.tadpole(0, n + 1), -n * c)
        if n == 1:
            total = _sum(total, self.tadpole(1, 2), 2 * m2)
        else:
            bracket = _sum({}, self.bubble(n - 1, 1), 2 * n - 1 - d)
            bracket = _sum(bracket, self.bubble(n - 2, 2))
            total = _sum(total, bracket, 2 * m2 / c)
        return _sum({}, total, self.one / ((2 * m2 - c) * (d - (2 * n + 1))))

    def _on_shell(self, n: int, k: int) -> Combination:
        """Return B(n, k) for m1 = 0 and p^2 = m2^2: (d-2n-k) B(n,k) = k B(n-1,k+1)."""
        return _sum({}, self.bubble(n - 1, k + 1), k * self.one / (self.d - (2 * n + k)))


@lru_cache(maxsize=64)
def _relations(kinematics: Kinematics, offset: int) -> _Relations:
    return _Relations(kinematics, offset)
