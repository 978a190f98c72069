"""Reduction of two-point integrals to masters by exact relations between them.

With euclidean sign, D1 = m1^2 - q^2, D2 = m2^2 - (q+p)^2, let c = m1^2 + m2^2 - p^2 and
lambda = c^2 - 4 m1^2 m2^2.  The integral of a total derivative vanishes in dimensional
regularisation (Chetyrkin, Tkachov, Nucl. Phys. B192 (1981) 159); with d/dq.q it reads

    (d - 2 n1 - n2) B(n1, n2) + 2 n1 m1^2 B(n1+1, n2)
        + n2 c B(n1, n2+1) - n2 B(n1-1, n2+1) = 0,                                        (1)

and (2) is (1) with the lines exchanged.  Dimensions are connected by (Tarasov, hep-th/9606018)

    B^(d-2)(n1, n2) = n1 B^(d)(n1+1, n2) + n2 B^(d)(n1, n2+1).                            (3)

What lowers n1 + n2 is decided by the kinematics alone:

====================  ==========================================================================
lambda != 0           (1) and (2) solved for B(n1+1, n2) and B(n1, n2+1); ends in B(1, 1)
lambda = 0, c != 0    the highest terms of (1) and (2) are proportional: the rest lowers B(n, 1),
                      where (1) leads; ends in tadpoles
lambda = 0, c = 0     on shell with a massless line: (1) alone ends in tadpoles
p^2 = 0, m1 = m2      D1 = D2, so B(n1, n2) = A(n1+n2)
====================  ==========================================================================

At p^2 = 0 with different masses B(1, 1) is itself a difference of two tadpoles.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from enum import StrEnum
from functools import lru_cache
from math import comb, prod
from types import MappingProxyType
from typing import TYPE_CHECKING, TypeAlias

from loopint.core.conventions import PropagatorSign
from loopint.core.errors import InputError, UnsupportedIntegralError
from loopint.core.rational_functions import RationalFunction, variables

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping

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
        pseudothreshold, on shell and at p^2 = 0 only tadpoles, without masses only B(1, 1).
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
        found = _to_lower_dimension(kinematics, _relations(kinematics, 0).bubble(n1, n2), steps)
    else:
        found = _in_higher_dimension(_relations(kinematics, -2 * steps), n1, n2, -steps)
    coefficients: dict[Master, sympy.Expr] = {}
    for index, value in sorted(found.items()):
        if value.is_zero:
            continue
        master = _master(kinematics, index, master_dimension, -2 * steps)
        differs = (n1 + n2 - len(master.powers)) % 2 and sign is PropagatorSign.MINKOWSKI
        coefficients[master] = _expression(-value if differs else value)
    return Reduction((n1, n2), dimension, kinematics, sign, MappingProxyType(coefficients))


def _in_higher_dimension(relations: _Relations, n1: int, n2: int, steps: int) -> Combination:
    """Reduce B(n1, n2) in d dimensions to masters in d + 2 steps: (3), `steps` times."""
    terms = []
    for i in range(steps + 1):
        j = steps - i
        weight = comb(steps, i) * _rising(n1, i) * _rising(n2, j)
        if weight:
            terms.append((relations.bubble(n1 + i, n2 + j), weight))
    return _combined(*terms)


def _to_lower_dimension(kinematics: Kinematics, found: Combination, steps: int) -> Combination:
    """Replace masters in d by masters in d - 2 steps: (3) solved for the higher dimension."""
    for step in range(steps):
        relations = _relations(kinematics, -2 * step)
        lowered: Combination = {}
        if BUBBLE in found:
            # B^(d-2)(1,1) = B^(d)(2,1) + B^(d)(1,2) = weight B^(d)(1,1) + tadpoles
            below = _combined((relations.bubble(2, 1), 1), (relations.bubble(1, 2), 1))
            lowered[BUBBLE] = found[BUBBLE] / below[BUBBLE]
            found = _combined((found, 1), (below, -lowered[BUBBLE]))
        for index, value in found.items():
            if index != BUBBLE:  # A^(d-2)(1) = A^(d)(2) = (2-d)/(2 m^2) A^(d)(1)
                lowered[index] = 2 * relations.masses[index] * value / (2 - relations.d)
        found = lowered
    return found


def _rising(n: int, steps: int) -> int:
    """Return n (n+1) ... (n+steps-1)."""
    return prod(range(n, n + steps))


def _combined(*terms: tuple[Combination, RationalFunction | int]) -> Combination:
    """Return the sum of combinations times weights."""
    total: Combination = {}
    for combination, weight in terms:
        for index, value in combination.items():
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
    c, kallen
        As in the module text.
    """

    def __init__(self, kinematics: Kinematics, offset: int) -> None:
        names, assign = VARIABLES[kinematics]
        d, *others = variables(("d", *names))
        zero = d - d
        self.d, self.one = d + offset, zero + 1
        self.p, m1, m2 = (zero if value is None else value for value in assign(*others))
        self.masses = (m1, m2)
        self.c = m1 + m2 - self.p
        self.kallen = self.c * self.c - 4 * m1 * m2
        self._known: dict[tuple[int, int], Combination] = {}

    def tadpole(self, line: int, n: int) -> Combination:
        """Return A(n) of line 0 or 1: A(n) = A(1) prod_(0<k<n) (2k-d)/(2k m^2)."""
        m = self.masses[line]
        if n <= 0 or m.is_zero:
            return {}
        value = self.one
        for k in range(1, n):
            value = value * (2 * k - self.d) / (2 * k * m)
        return {TADPOLE_1 if self.masses[0] == m else TADPOLE_2: value}

    def bubble(self, n1: int, n2: int) -> Combination:
        """Return B(n1, n2)."""
        found = self._known.get((n1, n2))
        if found is None:
            found = self._known[n1, n2] = self._find(n1, n2)
        return found

    def _find(self, n1: int, n2: int) -> Combination:
        if self.p.is_zero and self.masses[0] == self.masses[1]:
            return self.tadpole(1, n1 + n2)
        if n1 <= 0 or n2 <= 0:
            return self._numerator(0, n1, -n2) if n1 > 0 else self._numerator(1, n2, -n1)
        if self.kallen.is_zero:
            return self._on_shell(n1, n2) if self.c.is_zero else self._degenerate(n1, n2)
        if (n1, n2) == (1, 1):
            return self._first_bubble()
        return self._general(0, n1, n2) if n1 > 1 else self._general(1, n2, n1)

    def _on_lines(self, line: int, n: int, other: int) -> Combination:
        """Return the bubble with power n on `line` and `other` on the other line."""
        return self.bubble(n, other) if line == 0 else self.bubble(other, n)

    def _numerator(self, line: int, n: int, j: int) -> Combination:
        """Return the bubble with power n on `line` and a numerator, power -j, on the other."""
        m, other = self.masses[line], self.masses[1 - line]
        if n <= 0 or m.is_zero:
            return {}
        if j == 0:
            return self.tadpole(line, n)
        c, d = self.c, self.d

        def bubble(n: int, j: int) -> Combination:
            return self._on_lines(line, n, -j)

        if n > 1:  # (1) at (n-1, -j)
            i = n - 1
            return _combined(
                (bubble(i, j), (2 * i - j - d) / (2 * i * m)),
                (bubble(i, j - 1), j * c / (2 * i * m)),
                (bubble(i - 1, j - 1), -j / (2 * i * m)),
            )
        # (2) at (1, 1-j) gives B(2, -j), and with it (1) at (1, -j) gives B(1, -j).
        second = [(bubble(1, j - 1), d + (2 * j - 3)), (bubble(2, j - 1), c)]
        if j > 1:
            second.append((bubble(1, j - 2), 2 * (1 - j) * other))
        return _combined(
            (bubble(1, j - 1), j * c / (d + (j - 2))),
            (_combined(*second), -2 * m / (d + (j - 2))),
        )

    def _first_bubble(self) -> Combination:
        """Return B(1, 1), a master unless p^2 = 0."""
        if not self.p.is_zero:
            return {BUBBLE: self.one}
        # 1/(D1 D2) = (1/D1 - 1/D2)/(D2 - D1), D2 - D1 = m2^2 - m1^2
        weight = 1 / (self.masses[1] - self.masses[0])
        return _combined((self.tadpole(0, 1), weight), (self.tadpole(1, 1), -weight))

    def _general(self, line: int, n: int, k: int) -> Combination:
        """Return the bubble with n > 1 on `line`, k >= 1 on the other, for lambda != 0.

        (1) and (2) at (n-1, k), solved for the integral with the higher power on `line`.
        """
        i, other, c, d = n - 1, self.masses[1 - line], self.c, self.d
        scale = 1 / (i * self.kallen)
        here = 2 * other * (d - (2 * i + k)) - c * (d - (2 * k + i))
        return _combined(
            (self._on_lines(line, i, k), here * scale),
            (self._on_lines(line, i - 1, k + 1), -2 * k * other * scale),
            (self._on_lines(line, i + 1, k - 1), i * c * scale),
        )

    def _degenerate(self, n: int, k: int) -> Combination:
        """Return B(n, k) for lambda = 0 and c != 0.

        For k > 1 by (1) at (n, k-1).  For k = 1 the highest terms cancel in 2 m2^2 (1) - c (2) at
        (n, 1); with B(n-1, 2) from (1) at (n-1, 1) this is

            (2 m2^2 - c) (d-2n-1) B(n, 1)
                = -c n A1(n+1) + (2 m2^2/c) [ (2n-1-d) B(n-1, 1) + B(n-2, 2) ],

        where for n = 1 the bracket is c A2(2).
        """
        (m1, m2), c, d = self.masses, self.c, self.d
        if k > 1:
            i = k - 1
            return _combined(
                (self.bubble(n, i), (2 * n + i - d) / (i * c)),
                (self.bubble(n + 1, i), -2 * n * m1 / (i * c)),
                (self.bubble(n - 1, k), 1 / c),
            )
        if n == 1:
            bracket = _combined((self.tadpole(1, 2), c))
        else:
            bracket = _combined((self.bubble(n - 1, 1), 2 * n - 1 - d), (self.bubble(n - 2, 2), 1))
        scale = 1 / ((2 * m2 - c) * (d - (2 * n + 1)))
        return _combined((self.tadpole(0, n + 1), -n * c * scale), (bracket, 2 * m2 / c * scale))

    def _on_shell(self, n: int, k: int) -> Combination:
        """Return B(n, k) for m1 = 0, p^2 = m2^2: (d-2n-k) B(n, k) = k B(n-1, k+1), by (1)."""
        return _combined((self.bubble(n - 1, k + 1), k / (self.d - (2 * n + k))))


@lru_cache(maxsize=64)
def _relations(kinematics: Kinematics, offset: int) -> _Relations:
    return _Relations(kinematics, offset)


def _master(kinematics: Kinematics, index: int, dimension: int, offset: int) -> Master:
    if index == BUBBLE:
        return Master("B", (1, 1), None, dimension, offset)
    names, _ = VARIABLES[kinematics]
    if "m_squared" in names:
        return Master("A", (1,), "m_squared", dimension, offset)
    mass = f"m{index + 1}"
    return Master(
        f"A{index + 1}", (1,), mass if mass in names else f"{mass}_squared", dimension, offset
    )


def _latex_name(master: Master) -> str:
    stem = master.name[0] + (f"_{master.name[1:]}" if master.name[1:] else "")
    shift = f"{master.dimension_offset:+d}" if master.dimension_offset else ""
    return f"{stem}^{{(d{shift})}}({', '.join(map(str, master.powers))})"


def _expression(value: RationalFunction) -> sympy.Expr:
    """Write a rational function as a factorised sympy expression."""
    import sympy  # noqa: PLC0415 - slow to import, and needed only for expressions

    return sympy.Mul(_factorised(value.numerator), 1 / _factorised(value.denominator))


def _factorised(polynomial: fmpz_mpoly) -> sympy.Expr:
    import sympy  # noqa: PLC0415

    symbols = [sympy.Symbol(name) for name in polynomial.context().names()]
    content, factors = polynomial.factor()
    parts = [sympy.Integer(int(content))]
    for factor, power in factors:
        terms = {powers: int(c) for powers, c in factor.to_dict().items()}
        parts.append(sympy.Poly.from_dict(terms, *symbols).as_expr() ** int(power))
    return sympy.Mul(*parts)


Scale: TypeAlias = "RationalFunction | None"  # None: zero
Assignment: TypeAlias = "Callable[..., tuple[Scale, Scale, Scale]]"

# The variables of each kinematics, and p^2, m1^2, m2^2 in terms of them.
VARIABLES: dict[Kinematics, tuple[tuple[str, ...], Assignment]] = {
    Kinematics.GENERAL: (("p_squared", "m1_squared", "m2_squared"), lambda p, x, y: (p, x, y)),
    Kinematics.EQUAL_MASS: (("p_squared", "m_squared"), lambda p, m: (p, m, m)),
    Kinematics.ONE_MASSLESS: (("p_squared", "m_squared"), lambda p, m: (p, None, m)),
    Kinematics.BOTH_MASSLESS: (("p_squared",), lambda p: (p, None, None)),
    Kinematics.ZERO_MOMENTUM: (("m1_squared", "m2_squared"), lambda x, y: (None, x, y)),
    Kinematics.ZERO_MOMENTUM_EQUAL_MASS: (("m_squared",), lambda m: (None, m, m)),
    Kinematics.ZERO_MOMENTUM_ONE_MASSLESS: (("m_squared",), lambda m: (None, None, m)),
    Kinematics.THRESHOLD: (("m1", "m2"), lambda a, b: ((a + b) * (a + b), a * a, b * b)),
    Kinematics.PSEUDOTHRESHOLD: (("m1", "m2"), lambda a, b: ((a - b) * (a - b), a * a, b * b)),
    Kinematics.ON_SHELL: (("m_squared",), lambda m: (m, None, m)),
}
