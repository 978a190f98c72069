"""Reductions against the engine, quadrature and published formulas; relations as identities."""

from __future__ import annotations

import random
from collections.abc import Callable, Mapping
from fractions import Fraction
from functools import lru_cache, partial

import mpmath
import pytest
import sympy
from flint import acb, acb_poly, arb, fmpq, fmpq_poly

import loopint
from loopint.core.conventions import Conventions, PropagatorSign
from loopint.core.kinematics import OnePoint, TwoPoint
from loopint.core.laurent import BallSeries, complex_ball
from loopint.core.numbers import ExactComplex, exact_complex
from loopint.core.precision import working_precision
from loopint.core.rational_functions import RationalFunction, variables
from loopint.integrals.reduction import VARIABLES, Kinematics, Master, Reduction
from loopint.integrals.registry import Integral, evaluate

reduce_bubble = loopint.reduce_bubble
HIGHEST = 1
BITS = 400

Values = Mapping[str, fmpq]


# ---------------------------------------------------------------- evaluating a reduction


def scales(kinematics: Kinematics, values: Values) -> tuple[fmpq, fmpq, fmpq]:
    """Return p^2, m1^2, m2^2 in terms of the variables of the kinematics."""
    names, assign = VARIABLES[kinematics]
    found = assign(*(values[name] for name in names))
    return tuple(fmpq(0) if value is None else value for value in found)


def random_values(source: random.Random, kinematics: Kinematics) -> Values:
    """Draw the variables; p^2 takes either sign, masses are positive and different."""
    values: dict[str, fmpq] = {}
    for name in VARIABLES[kinematics][0]:
        value = fmpq(source.randint(1, 60), source.randint(7, 20))
        while value in values.values():
            value += 1
        values[name] = -value if name == "p_squared" and source.random() < 0.4 else value
    return values


@lru_cache(maxsize=64)
def compiled(coefficient: sympy.Expr, names: tuple[str, ...]) -> tuple[Callable, Callable]:
    """Turn numerator and denominator, with integer coefficients, into functions."""
    # sympy multiplies a number into a sum: d/2 - 1 is not a product
    product = coefficient if coefficient.is_Mul else sympy.together(coefficient)
    symbols = sympy.symbols(("d", *names))
    top, bottom = (
        [(sympy.Poly(factor.as_base_exp()[0], *symbols).terms(), int(factor.as_base_exp()[1]))
         for factor in sympy.Mul.make_args(part)]
        for part in sympy.fraction(product)
    )  # fmt: skip
    return partial(product_of_powers, top), partial(product_of_powers, bottom)


def product_of_powers(factors: list[tuple[list, int]], d: object, *values: object) -> object:
    """Evaluate a product of powers of polynomials in d and the variables."""
    result: object = 1
    for terms, power in factors:
        by_degree: dict[int, object] = {}
        for (degree, *exponents), c in terms:
            term: object = int(c)
            for value, exponent in zip(values, exponents, strict=True):
                term = term * value ** int(exponent)
            by_degree[int(degree)] = by_degree.get(int(degree), 0) + term
        total: object = 0
        for degree, value in by_degree.items():
            total = total + d**degree * value
        result = result * total**power
    return result


def at_dimension(coefficient: sympy.Expr, values: Values, d: object) -> object:
    """Evaluate a coefficient exactly."""
    top, bottom = compiled(coefficient, tuple(values))
    return (fmpq(0) + top(d, *values.values())) / bottom(d, *values.values())


def epsilon_series(
    coefficient: sympy.Expr, values: Values, dimension: int, terms: int
) -> BallSeries:
    """Expand a coefficient in eps, d = dimension - 2 eps, exactly up to the last conversion."""
    d = fmpq_poly([dimension, -2])
    top, bottom = (
        fmpq_poly([0]) + part(d, *values.values()) for part in compiled(coefficient, tuple(values))
    )
    numerator, denominator = top.coeffs(), bottom.coeffs()
    zeros_above = next(i for i, c in enumerate(numerator) if c != 0)
    zeros_below = next(i for i, c in enumerate(denominator) if c != 0)
    a = [*numerator[zeros_above:], *[fmpq(0)] * terms]
    b = [*denominator[zeros_below:], *[fmpq(0)] * terms]
    quotient: list[fmpq] = []
    for n in range(terms):
        rest = a[n] - sum((b[n - j] * quotient[j] for j in range(n)), start=fmpq(0))
        quotient.append(rest / b[0])
    return BallSeries(zeros_above - zeros_below, [arb(c) for c in quotient])


def master_point(
    master: Master, kinematics: Kinematics, point: TwoPoint
) -> tuple[str, OnePoint | TwoPoint]:
    if master.name == "B":
        return "bubble", point
    first = master.name == "A1" or (master.name == "A" and not point.m1_squared.is_zero)
    return "tadpole", OnePoint(point.m1_squared if first else point.m2_squared)


def from_masters(
    reduction: Reduction, values: Values, point: TwoPoint, conventions: Conventions
) -> BallSeries:
    """Evaluate a reduction with the engine's values of its masters."""
    total = BallSeries.zero(HIGHEST)
    for master, coefficient in reduction.coefficients.items():
        series = epsilon_series(coefficient, values, reduction.dimension, 12)
        orders = (-1, HIGHEST - series.lowest)
        family, where = master_point(master, reduction.kinematics, point)
        integral = Integral(family, master.powers, master.dimension, (-1, max(orders[1], -1)))
        value = evaluate(integral, where, conventions, digits=70).series
        # all orders that are not known exactly must be there
        value = BallSeries(-1, [value[k] for k in range(-1, integral.orders[1] + 1)])
        series = BallSeries(series.lowest, series.coefficients[: len(value.coefficients)])
        total = total + series * value
    return total


def verify(
    powers: tuple[int, int],
    dimension: int,
    kinematics: Kinematics,
    values: Values,
    sign: str = "minkowski",
    master_dimension: int | None = None,
) -> int:
    """Compare a reduction with the engine; return the number of nonzero coefficients compared."""
    p, m1, m2 = scales(kinematics, values)
    point = TwoPoint(p, ExactComplex(m1), ExactComplex(m2))
    reduction = reduce_bubble(
        powers,
        dimension,
        kinematics=kinematics,
        master_dimension=master_dimension,
        propagator_sign=sign,
    )
    conventions = Conventions.parse("msbar", sign, 1)
    integral = Integral("bubble", powers, dimension, (-3, HIGHEST))
    direct = evaluate(integral, point, conventions, digits=40)
    assert direct.proven
    with working_precision(BITS):
        total = from_masters(reduction, values, point, conventions)
        assert total.highest == HIGHEST
        compared = 0
        for k in range(-6, HIGHEST + 1):
            ball, other = complex_ball(direct.series[k]), complex_ball(total[k])
            assert ball.overlaps(other), (powers, dimension, kinematics, values, k)
            if ball == 0:
                assert float(other.abs_upper()) < 1e-25
            else:
                assert float(other.rad()) < 1e-25 * float(ball.abs_lower())
                compared += 1
    return compared


# ---------------------------------------------------------------- numerical verification

GRID = [(n1, n2) for n1 in range(-2, 4) for n2 in range(-2, 4)]
LARGE = [(6, 2), (1, 7), (5, 5), (-6, 8), (8, -5), (-1, 6)]


@pytest.mark.parametrize("kinematics", list(Kinematics))
def test_reductions_reproduce_the_integrals(kinematics: Kinematics) -> None:
    """All powers of a grid and some large ones, even and odd dimensions from 1 to 14."""
    source = random.Random(f"grid {kinematics}")
    compared = 0
    for powers in GRID + LARGE:
        for dimension in (source.choice(range(1, 14, 2)), source.choice(range(2, 15, 2))):
            compared += verify(powers, dimension, kinematics, random_values(source, kinematics))
    assert compared > 50


@pytest.mark.parametrize("dimension", range(1, 15))
def test_all_dimensions(dimension: int) -> None:
    source = random.Random(dimension)
    for kinematics in Kinematics:
        verify((2, 3), dimension, kinematics, random_values(source, kinematics))


@pytest.mark.parametrize("kinematics", list(Kinematics))
def test_sign_and_dimension_of_the_masters(kinematics: Kinematics) -> None:
    source = random.Random(f"masters {kinematics}")
    for dimension, master_dimension in ((4, 2), (2, 8), (5, 1), (3, 7), (6, 6)):
        for sign in PropagatorSign:
            values = random_values(source, kinematics)
            verify((2, 1), dimension, kinematics, values, sign, master_dimension)


def test_high_powers_in_general_kinematics() -> None:
    """What comes out of B(8, 8) is about 10^5 characters long, and right."""
    source = random.Random(88)
    assert verify((8, 8), 14, Kinematics.GENERAL, random_values(source, Kinematics.GENERAL)) > 0


def test_complex_masses() -> None:
    """Coefficients are rational, so that they hold for complex masses as well."""
    p = fmpq(7, 2)
    masses = [exact_complex(("1", "-1/5")), exact_complex(("3/2", "-2"))]
    point = TwoPoint(p, *masses)
    names = ("p_squared", "m1_squared", "m2_squared")
    for powers, dimension in (((2, 1), 4), ((3, 2), 6), ((-2, 2), 4), ((1, 1), 8)):
        reduction = reduce_bubble(powers, dimension)
        integral = Integral("bubble", powers, dimension, (-1, HIGHEST))
        direct = evaluate(integral, point, digits=40).series
        with working_precision(BITS):
            numbers = [acb(arb(p)), *(complex_ball(m.ball()) for m in masses)]
            total = BallSeries.zero(HIGHEST)
            for master, coefficient in reduction.coefficients.items():
                top, bottom = (
                    acb_poly([0]) + part(acb_poly([dimension, -2]), *numbers)
                    for part in compiled(coefficient, names)
                )
                quotient = [list(q.coeffs()) + [acb(0)] * 4 for q in (top, bottom)]
                series = BallSeries(0, quotient[0]) * BallSeries(0, quotient[1]).inverse()
                family, where = master_point(master, Kinematics.GENERAL, point)
                one = Integral(family, master.powers, master.dimension, (-1, HIGHEST))
                value = evaluate(one, where, digits=60).series
                value = BallSeries(-1, [value[k] for k in range(-1, HIGHEST + 1)])
                total = total + BallSeries(0, series.coefficients[:3]) * value
            for k in range(-1, HIGHEST + 1):
                assert complex_ball(direct[k]).overlaps(complex_ball(total[k]))
                assert float(complex_ball(total[k]).rad()) < 1e-25


# ---------------------------------------------------------------- independent of the engine


def feynman(n1: int, n2: int, d: mpmath.mpf, p: object, m1: object, m2: object) -> mpmath.mpf:
    """Integrate the Feynman representation in a real number of dimensions, p^2 below threshold."""

    def integrand(x: mpmath.mpf) -> mpmath.mpf:
        q = x * m1 + (1 - x) * m2 - x * (1 - x) * p
        return x ** (n1 - 1) * (1 - x) ** (n2 - 1) * q ** (d / 2 - n1 - n2)

    gamma = mpmath.gamma
    return gamma(n1 + n2 - d / 2) / gamma(n1) / gamma(n2) * mpmath.quad(integrand, [0, 0.5, 1])


def tadpole(d: mpmath.mpf, m: object) -> mpmath.mpf:
    return mpmath.gamma(1 - d / 2) * m ** (d / 2 - 1)


@pytest.mark.parametrize(
    "kinematics",
    [
        Kinematics.GENERAL,
        Kinematics.EQUAL_MASS,
        Kinematics.ZERO_MOMENTUM,
        Kinematics.ZERO_MOMENTUM_EQUAL_MASS,
        Kinematics.PSEUDOTHRESHOLD,
    ],
)
@pytest.mark.parametrize("powers", [(2, 1), (1, 3), (3, 2), (4, 4)])
def test_feynman_representation_in_fractional_dimensions(
    powers: tuple[int, int], kinematics: Kinematics
) -> None:
    """At real d the euclidean integrals are numbers: quadrature by mpmath, no engine involved."""
    numbers = {"p_squared": fmpq(-7, 3), "m1_squared": fmpq(5, 4), "m2_squared": fmpq(2, 3)}
    numbers |= {"m_squared": fmpq(9, 7), "m1": fmpq(5, 3), "m2": fmpq(7, 8)}
    values = {name: numbers[name] for name in VARIABLES[kinematics][0]}
    with mpmath.workdps(40):
        p, m1, m2 = (mpmath.mpf(int(s.p)) / int(s.q) for s in scales(kinematics, values))
        for dimension in (2, 4, 6):
            d = mpmath.mpf(dimension) - mpmath.mpf(37) / 100
            reduction = reduce_bubble(
                powers, dimension, kinematics=kinematics, propagator_sign="euclidean"
            )
            total = mpmath.mpf(0)
            for master, coefficient in reduction.coefficients.items():
                there = d + master.dimension_offset
                value = (
                    feynman(1, 1, there, p, m1, m2)
                    if master.name == "B"
                    else tadpole(there, m2 if master.name == "A2" else m1)
                )
                exact = at_dimension(coefficient, values, fmpq(100 * dimension - 37, 100))
                total += mpmath.mpf(int(exact.p)) / int(exact.q) * value
            direct = feynman(*powers, d, p, m1, m2)
            assert abs(total - direct) < abs(direct) * mpmath.mpf(10) ** -28


def test_threshold_in_many_dimensions() -> None:
    """At threshold Q = p^2 (x-x0)^2, an ordinary integral for d > 2N-1."""
    m1, m2 = fmpq(3, 2), fmpq(2)
    d = fmpq(93, 10)
    with mpmath.workdps(40):
        a, b = mpmath.mpf("1.5"), mpmath.mpf(2)
        real = mpmath.mpf("9.3")
        x0 = b / (a + b)

        def integrand(x: mpmath.mpf) -> mpmath.mpf:
            return x * ((a + b) * abs(x - x0)) ** (real - 6)

        expected = mpmath.gamma(3 - real / 2) * mpmath.quad(integrand, [0, x0, 1])
        reduction = reduce_bubble(
            (2, 1),
            8,
            kinematics="threshold",
            propagator_sign="euclidean",
            master_dimension=8,
        )
        total = mpmath.mpf(0)
        for master, coefficient in reduction.coefficients.items():
            exact = at_dimension(coefficient, {"m1": m1, "m2": m2}, d)
            square = (a if master.name == "A1" else b) ** 2
            total += mpmath.mpf(int(exact.p)) / int(exact.q) * tadpole(real, square)
        assert abs(total - expected) < abs(expected) * mpmath.mpf(10) ** -28


# ---------------------------------------------------------------- published formulas


@pytest.mark.parametrize("powers", [(1, 1), (2, 1), (3, 3), (1, 5)])
@pytest.mark.parametrize("dimension", [2, 4, 7, 10])
def test_massless_function_g(powers: tuple[int, int], dimension: int) -> None:
    """Chetyrkin, Kataev, Tkachov, Nucl. Phys. B174 (1980) 345, in euclidean form.

    B(n1,n2) = (-p^2)^(d/2-N) Gamma(d/2-n1) Gamma(d/2-n2) Gamma(N-d/2)
    / (Gamma(n1) Gamma(n2) Gamma(d-N)).
    """
    reduction = reduce_bubble(
        powers, dimension, kinematics="both_massless", propagator_sign="euclidean"
    )
    (master,) = reduction.masters
    gamma = mpmath.gamma

    def g(n1: int, n2: int, d: mpmath.mpf) -> mpmath.mpf:
        half, total = d / 2, n1 + n2
        top = gamma(half - n1) * gamma(half - n2) * gamma(total - half)
        return top / (gamma(n1) * gamma(n2) * gamma(d - total)) * 3 ** (half - total)

    with mpmath.workdps(40):
        d = mpmath.mpf(dimension) - mpmath.mpf(17) / 50
        exact = at_dimension(
            reduction.coefficients[master], {"p_squared": fmpq(-3)}, fmpq(50 * dimension - 17, 50)
        )
        ratio = g(*powers, d) / g(1, 1, d + master.dimension_offset)
        assert abs(mpmath.mpf(int(exact.p)) / int(exact.q) / ratio - 1) < mpmath.mpf(10) ** -35


@pytest.mark.parametrize("powers", [(1, 1), (2, 1), (1, 3), (4, 2)])
@pytest.mark.parametrize("dimension", [3, 4, 6])
def test_on_shell_integrals(powers: tuple[int, int], dimension: int) -> None:
    """Broadhurst, Gray, Schilcher, Z. Phys. C52 (1991) 111 (from memory); first line massless.

    B(n1,n2) = m^(d-2N) Gamma(N-d/2) Gamma(d-2 n1-n2) / (Gamma(n2) Gamma(d-N)).
    """
    reduction = reduce_bubble(powers, dimension, kinematics="on_shell", propagator_sign="euclidean")
    (master,) = reduction.masters
    n1, n2 = powers
    with mpmath.workdps(40):
        gamma, m = mpmath.gamma, mpmath.mpf(3)
        d = mpmath.mpf(dimension) - mpmath.mpf(17) / 50
        expected = gamma(n1 + n2 - d / 2) * gamma(d - 2 * n1 - n2) / gamma(d - n1 - n2)
        expected *= m ** (d / 2 - n1 - n2) / gamma(n2)
        exact = at_dimension(
            reduction.coefficients[master], {"m_squared": fmpq(3)}, fmpq(50 * dimension - 17, 50)
        )
        value = mpmath.mpf(int(exact.p)) / int(exact.q) * tadpole(d + master.dimension_offset, m)
        assert abs(value / expected - 1) < mpmath.mpf(10) ** -35


def test_bubble_in_six_dimensions() -> None:
    """Bern, Dixon, Kosower, Nucl. Phys. B412 (1994) 751: massless I2 in 6-2 eps (from memory).

    I2 in 6-2 eps is -r_Gamma (-s)^(1-eps)/(2 eps (1-2 eps)(3-2 eps)), and in 4-2 eps it is
    r_Gamma (-s)^(-eps)/(eps (1-2 eps)): their ratio is s/(2 (3-2 eps)).
    """
    d, p = sympy.symbols("d p_squared")
    reduction = reduce_bubble((1, 1), 6, kinematics="both_massless")
    (coefficient,) = reduction.coefficients.values()
    eps = sympy.Symbol("eps")
    ratio = coefficient.subs(d, 6 - 2 * eps) / (p / (2 * (3 - 2 * eps)))
    assert sympy.simplify(ratio) == 1


def test_two_dimensional_equal_mass_bubble() -> None:
    """Tarasov, hep-th/9606018, worked out for equal masses.

    (1) at powers (1,1) and B(2,1) = B(1,2) give (4 m^2 - p^2) B(2,1) = (3-d) B(1,1) + A(2), and
    B^(d-2) = -2 B(2,1), here with d-2 -> d and minkowski sign.
    """
    d, p, m = sympy.symbols("d p_squared m_squared")
    reduction = reduce_bubble((1, 1), 2, kinematics="equal_mass")
    by_name = {master.name: c for master, c in reduction.coefficients.items()}
    assert sympy.simplify(by_name["B"] - 2 * (d - 1) / (p - 4 * m)) == 0
    assert sympy.simplify(by_name["A"] + d / (m * (p - 4 * m))) == 0


def test_momentum_derivative_from_masters() -> None:
    """dB/dp^2 = B(2,2) in 6 dimensions, reduced to masters in 4: two ways to the same number."""
    reduction = reduce_bubble((2, 2), 6)
    p, m1, m2 = fmpq(7), fmpq(1), fmpq(3, 2)
    values = {"p_squared": p, "m1_squared": m1, "m2_squared": m2}
    point = TwoPoint(p, ExactComplex(m1), ExactComplex(m2))
    slope = loopint.bubble("7", 1, "3/2", orders=(-1, HIGHEST), derivatives="p_squared")
    with working_precision(BITS):
        total = from_masters(reduction, values, point, Conventions())
        for k in slope:
            assert complex_ball(slope.balls[k]).overlaps(complex_ball(total[k]))


# ---------------------------------------------------------------- relations as identities


def collect(
    terms: list[tuple[fmpq, tuple[int, int]]],
    dimension: int,
    kinematics: Kinematics,
    values: Values,
    d: fmpq,
) -> dict[str, fmpq]:
    """Sum the coefficients of each master in a relation between euclidean integrals."""
    total: dict[str, fmpq] = {}
    for weight, powers in terms:
        if weight == 0:
            continue
        reduction = reduce_bubble(
            powers, dimension, kinematics=kinematics, propagator_sign="euclidean"
        )
        for master, coefficient in reduction.coefficients.items():
            value = weight * at_dimension(coefficient, values, d)
            total[master.name] = total.get(master.name, fmpq(0)) + value
    return total


RELATION_POWERS = [(1, 1), (2, 3), (3, 1), (1, -2), (-1, 2), (-3, 1), (0, 2), (4, 2)]


@pytest.mark.parametrize("kinematics", list(Kinematics))
@pytest.mark.parametrize("powers", RELATION_POWERS)
def test_integration_by_parts(powers: tuple[int, int], kinematics: Kinematics) -> None:
    """Chetyrkin, Tkachov, Nucl. Phys. B192 (1981) 159: d/dq.q and d/dq.(q+p), and d/dq.p."""
    source = random.Random(f"{powers} {kinematics}")
    n1, n2 = powers
    for dimension in (4, 7):
        values = random_values(source, kinematics)
        p, m1, m2 = scales(kinematics, values)
        c = m1 + m2 - p
        d = fmpq(source.randint(100, 900), 97)
        by_q = [
            (d - 2 * n1 - n2, (n1, n2)),
            (2 * n1 * m1, (n1 + 1, n2)),
            (n2 * c, (n1, n2 + 1)),
            (fmpq(-n2), (n1 - 1, n2 + 1)),
        ]
        by_q_plus_p = [
            (d - 2 * n2 - n1, (n1, n2)),
            (2 * n2 * m2, (n1, n2 + 1)),
            (n1 * c, (n1 + 1, n2)),
            (fmpq(-n1), (n1 + 1, n2 - 1)),
        ]
        for relation in (by_q, by_q_plus_p):
            total = collect(relation, dimension, kinematics, values, d)
            assert all(value == 0 for value in total.values()), total


@pytest.mark.parametrize("kinematics", list(Kinematics))
@pytest.mark.parametrize("powers", RELATION_POWERS)
def test_dimensional_recurrence(powers: tuple[int, int], kinematics: Kinematics) -> None:
    """Tarasov, hep-th/9606018: B^(d-2) = (n1 1+ + n2 2+) B^(d), euclidean sign."""
    source = random.Random(f"{powers} {kinematics} d")
    n1, n2 = powers
    for dimension in (1, 4, 8):
        values = random_values(source, kinematics)
        d = fmpq(source.randint(100, 900), 97)
        above = [(fmpq(n1), (n1 + 1, n2)), (fmpq(n2), (n1, n2 + 1))]
        total = collect(above, dimension + 2, kinematics, values, d + 2)
        below = collect([(fmpq(-1), powers)], dimension, kinematics, values, d)
        for name in {*total, *below}:
            assert total.get(name, fmpq(0)) + below.get(name, fmpq(0)) == 0


# ---------------------------------------------------------------- what a user sees


@pytest.mark.parametrize(
    ("kinematics", "names"),
    [
        ("general", ["A1", "A2", "B"]),
        ("equal_mass", ["A", "B"]),
        ("one_massless", ["A", "B"]),
        ("both_massless", ["B"]),
        ("zero_momentum", ["A1", "A2"]),
        ("zero_momentum_equal_mass", ["A"]),
        ("zero_momentum_one_massless", ["A"]),
        ("threshold", ["A1", "A2"]),
        ("pseudothreshold", ["A1", "A2"]),
        ("on_shell", ["A"]),
    ],
)
def test_masters_of_each_kinematics(kinematics: str, names: list[str]) -> None:
    reduction = reduce_bubble((2, 2), 2, kinematics=kinematics)
    assert [master.name for master in reduction.masters] == names
    assert {(m.dimension, m.dimension_offset) for m in reduction.masters} == {(4, 2)}
    variables_used = set().union(*(c.free_symbols for c in reduction.coefficients.values()))
    allowed = {sympy.Symbol(name) for name in ("d", *VARIABLES[Kinematics(kinematics)][0])}
    assert variables_used <= allowed


def test_results_are_remembered() -> None:
    assert reduce_bubble((3, 2)) is reduce_bubble([3, 2], 4, master_dimension=4)


def test_representation() -> None:
    reduction = reduce_bubble((2, 1), kinematics="equal_mass")
    assert repr(reduction).splitlines() == [
        "B^(d)(2, 1), d = 4 - 2 eps, kinematics equal_mass, propagator_sign minkowski",
        "  = A^(d)(1) * [ (d - 2)/(2*m_squared*(-4*m_squared + p_squared)) ]",
        "  + B^(d)(1, 1) * [ (3 - d)/(-4*m_squared + p_squared) ]",
    ]
    assert repr(reduce_bubble((0, -1))).endswith("\n  = 0")
    assert reduce_bubble((0, -1)).masters == ()
    assert reduce_bubble((0, -1)).as_latex() == "B^{(d)}(0, -1) = 0"
    latex = reduce_bubble((1, 2), 2, kinematics="threshold").as_latex()
    assert r"A_1^{(d+2)}(1)" in latex
    assert "m_{1}" in latex
    assert "squared" not in reduce_bubble((2, 1)).as_latex()


@pytest.mark.parametrize(
    ("arguments", "options", "words"),
    [
        (((1, 1), 0), {}, "dimension = 0; accepted: an integer from 1 to 20"),
        (((1, 1), 4), {"kinematics": "heavy"}, "kinematics = 'heavy' is unknown; accepted: gen"),
        (((1, 1), 4), {"master_dimension": 3}, "two even or two odd"),
        (((1, 1), 4), {"master_dimension": 21}, "master_dimension = 21; accepted"),
        (((1, 1), 4), {"propagator_sign": "odd"}, "propagator_sign = 'odd' is unknown"),
        (((1,), 4), {}, r"powers = \(1,\); accepted: two integers"),
        (((1, 1.5), 4), {}, "accepted: two integers"),
        (((1, True), 4), {}, "accepted: two integers"),
    ],
)
def test_unusable_arguments(arguments: tuple, options: dict, words: str) -> None:
    with pytest.raises(loopint.InputError, match=words):
        reduce_bubble(*arguments, **options)


def test_powers_beyond_the_limit() -> None:
    with pytest.raises(loopint.UnsupportedIntegralError, match="integers from -12 to 12"):
        reduce_bubble((13, 1))


# ---------------------------------------------------------------- rational functions


def test_rational_functions_agree_with_exact_fractions() -> None:
    """Random expressions, evaluated: as fields do, and always in lowest terms."""
    source = random.Random(5)
    x, y = variables(("x", "y"))
    a, b = Fraction(7, 3), Fraction(-2, 5)

    def number(f: RationalFunction) -> Fraction:
        top, bottom = (
            sum(int(c) * a ** int(i[0]) * b ** int(i[1]) for i, c in part.to_dict().items())
            for part in (f.numerator, f.denominator)
        )
        return Fraction(top) / Fraction(bottom)

    pool = [(x, a), (y, b)]
    for _ in range(300):
        (f, u), (g, v) = source.choice(pool), source.choice(pool)
        n = source.choice([-3, -1, 2, 5])
        for h, w in [
            (f + g, u + v), (f - g, u - v), (f * g, u * v), (n * f, n * u), (n - f, n - u),
            (f + n, u + n), (f / n, u / n),
            *([(f / g, u / v), (n / g, n / v)] if v and not g.is_zero else []),
        ]:  # fmt: skip
            assert number(h) == w
            assert h.numerator.gcd(h.denominator) == 1
            assert h.denominator.leading_coefficient() > 0
            if len(str(h)) < 200:
                pool.append((h, w))
    with pytest.raises(ZeroDivisionError):
        1 / (x - x)
