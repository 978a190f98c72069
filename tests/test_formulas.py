"""Printed closed forms against the engine, and their special values against published ones."""

from __future__ import annotations

import random
import re
import subprocess
import sys
from dataclasses import dataclass
from fractions import Fraction
from itertools import pairwise

import mpmath
import pytest
import sympy

import loopint
from loopint.cli import main
from loopint.formulas import special
from loopint.formulas.formula import FORMS, Formula
from loopint.formulas.functions import NielsenS, clausen2, log_sine
from loopint.integrals.reduction import Kinematics
from tests.reference import to_mp

DIGITS = 30
EXTRA = 12  # guard digits of the evaluation, for cancellations in large reductions
SPECIAL = [
    Kinematics.BOTH_MASSLESS,
    Kinematics.ZERO_MOMENTUM,
    Kinematics.ZERO_MOMENTUM_EQUAL_MASS,
    Kinematics.ZERO_MOMENTUM_ONE_MASSLESS,
    Kinematics.THRESHOLD,
    Kinematics.PSEUDOTHRESHOLD,
    Kinematics.ON_SHELL,
]
GENERIC = [Kinematics.GENERAL, Kinematics.EQUAL_MASS, Kinematics.ONE_MASSLESS]
WORST: dict[str, object] = {"forms": 0, "values": 0, "deviation": mpmath.mpf(0)}


@dataclass(frozen=True)
class Sample:
    """Values of the symbols of a formula, and the same point for the engine."""

    values: dict[str, Fraction]
    point: tuple[Fraction, ...]


def between(rng: random.Random, low: Fraction, high: Fraction) -> Fraction:
    """A rational number strictly between two others."""
    return low + (high - low) * Fraction(rng.randint(1, 999), 1000)


def samples(kinematics: str, rng: random.Random) -> list[Sample]:
    """One point in every interval of p^2 that the formula distinguishes."""
    m1, m2 = (between(rng, Fraction(1, 5), Fraction(3)) for _ in range(2))
    m2 += m1 if abs(m1 - m2) < Fraction(1, 20) else 0
    a, b, mu = m1**2, m2**2, between(rng, Fraction(1, 5), Fraction(4))
    low, high = (m1 - m2) ** 2, (m1 + m2) ** 2

    def of(point: tuple[Fraction, ...], **values: Fraction) -> Sample:
        return Sample({**values, "mu_squared": mu}, point)

    def momenta(*ends: Fraction) -> list[Fraction]:
        inside = [between(rng, x, y) for x, y in pairwise(ends)]
        return [-between(rng, Fraction(0), 5 * ends[-1]), *inside, ends[-1] * (1 + m1)]

    zero = Fraction(0)
    match kinematics:
        case "general":
            chosen = momenta(zero, low, high)
            return [of((p, a, b), p_squared=p, m1_squared=a, m2_squared=b) for p in chosen]
        case "equal_mass":
            return [of((p, a, a), p_squared=p, m_squared=a) for p in momenta(zero, 4 * a)]
        case "one_massless":
            return [of((p, zero, a), p_squared=p, m_squared=a) for p in momenta(zero, a)]
        case "both_massless":
            return [of((p, zero, zero), p_squared=p) for p in (-a, b)]
        case "zero_momentum":
            return [of((zero, a, b), m1_squared=a, m2_squared=b)]
        case "zero_momentum_equal_mass":
            return [of((zero, a, a), m_squared=a)]
        case "zero_momentum_one_massless":
            return [of((zero, zero, a), m_squared=a)]
        case "threshold":
            return [of((high, a, b), m1_squared=a, m2_squared=b)]
        case "pseudothreshold":
            return [of((low, a, b), m1_squared=a, m2_squared=b)]
        case "on_shell":
            return [of((a, zero, a), m_squared=a)]
        case "tadpole":
            return [of((a,), m_squared=a)]
    raise AssertionError(kinematics)


def engine(formula: Formula, sample: Sample, orders: tuple[int, int]) -> loopint.LaurentSeries:
    """Evaluate the integral of a formula with proven digits."""
    keywords = {
        "dimension": formula.dimension,
        "orders": orders,
        "digits": DIGITS + EXTRA,
        "mu_squared": sample.values["mu_squared"],
        "propagator_sign": str(formula.propagator_sign),
        "measure": str(formula.measure),
    }
    if formula.family == "tadpole":
        return loopint.tadpole(*sample.point, formula.powers[0], **keywords)
    if formula.family == "propagator":
        return loopint.propagator(*sample.point, formula.powers, **keywords)
    return loopint.bubble(*sample.point, formula.powers, **keywords)


def deviation(value: object, reference: mpmath.mpc) -> mpmath.mpf:
    """The relative deviation; absolute where the reference is exactly zero."""
    return abs(value - reference) / (abs(reference) or 1)


def run_module(text: str) -> dict[str, object]:
    """Run a printed module as it stands."""
    namespace: dict[str, object] = {"__name__": "printed"}
    exec(compile(text, "printed", "exec"), namespace)
    return namespace


def check_formula(formula: Formula, seed: str, *, lambdified: bool = True) -> None:
    """Compare the printed Python module and the lambdified expressions with the engine."""
    rng = random.Random(seed)
    kinematics = "tadpole" if formula.family == "tadpole" else formula.kinematics
    module = run_module(formula.as_python())
    names = [str(s) for s in formula.symbols]
    functions = {}
    if lambdified:
        functions = {
            order: sympy.lambdify(formula.symbols, value, "mpmath")
            for order, value in formula.coefficients.items()
        }
    WORST["forms"] += 1
    for sample in samples(kinematics, rng):
        with mpmath.workdps(DIGITS + EXTRA):
            reference = engine(formula, sample, formula.orders)
            arguments = [to_mp(sample.values[name]) for name in names]
            for order, printed in module["COEFFICIENTS"].items():
                values = [printed(*arguments)]
                if functions:
                    values.append(functions[order](*arguments))
                for value in values:
                    worst = deviation(value, reference[order])
                    WORST["values"] += 1
                    WORST["deviation"] = max(WORST["deviation"], worst)
                    assert worst < mpmath.mpf(10) ** -DIGITS, (sample, order, value)


def check_closed_form(formula: Formula, seed: str) -> None:
    """Sum the engine's Laurent series at a small eps and compare with the closed form."""
    rng = random.Random(seed)
    kinematics = "tadpole" if formula.family == "tadpole" else formula.kinematics
    closed = run_module(formula.as_python())["closed_form"]
    arguments = (sympy.Symbol("eps"), *formula.symbols)
    expression = sympy.lambdify(arguments, formula.closed_form, "mpmath")
    names = [str(s) for s in formula.symbols]
    for sample in samples(kinematics, rng):
        with mpmath.workdps(DIGITS + EXTRA):
            series = engine(formula, sample, (-3, 9))
            eps = mpmath.mpf(10) ** -4
            reference = mpmath.fsum(series[k] * eps**k for k in series)
            arguments = [to_mp(sample.values[name]) for name in names]
            for function in (closed, expression):
                value = function(eps, *arguments)
                # 10 orders at eps = 10^-4, times the growth of the coefficients
                assert deviation(value, reference) < mpmath.mpf(10) ** -25, (sample, value)


@pytest.fixture(scope="module", autouse=True)
def _print_worst():
    yield
    print(
        f"\n{WORST['forms']} printed forms, {WORST['values']} values, worst relative deviation "
        f"{mpmath.nstr(WORST['deviation'], 2)}"
    )


@pytest.mark.parametrize("dimension", [2, 3, 4, 5, 6])
@pytest.mark.parametrize("kinematics", [*GENERIC, *SPECIAL])
def test_unit_powers(kinematics, dimension):
    formula = loopint.formula("bubble", kinematics=kinematics, dimension=dimension, orders=(-2, 2))
    check_formula(formula, f"unit {kinematics} {dimension}")


@pytest.mark.parametrize("kinematics", [*GENERIC, *SPECIAL])
@pytest.mark.parametrize(
    ("powers", "dimension"),
    [((2, 1), 4), ((1, 2), 3), ((2, 2), 4), ((1, 3), 5), ((3, 1), 6), ((2, -1), 4), ((-2, 3), 7)],
)
def test_other_integer_powers(kinematics, powers, dimension):
    formula = loopint.formula("bubble", powers, kinematics=kinematics, dimension=dimension)
    check_formula(formula, f"{kinematics} {powers} {dimension}", lambdified=False)


@pytest.mark.parametrize("kinematics", SPECIAL)
@pytest.mark.parametrize(
    ("powers", "dimension"),
    [((1, 1), 1), ((1, 1), 8), ((2, 2), 7), ((1, 3), 10), ((2, 1), 2), ((3, -2), 8)],
)
def test_degenerate_kinematics_any_power_and_dimension(kinematics, powers, dimension):
    formula = loopint.formula(
        "bubble", powers, kinematics=kinematics, dimension=dimension, orders=(-2, 3)
    )
    check_formula(formula, f"{kinematics} {powers} {dimension}", lambdified=False)


@pytest.mark.parametrize("dimension", [1, 2, 3, 4, 7, 12])
@pytest.mark.parametrize("power", [-1, 0, 1, 2, 5])
def test_tadpole(power, dimension):
    formula = loopint.formula("tadpole", power, dimension=dimension, orders=(-2, 5))
    check_formula(formula, f"tadpole {power} {dimension}")


@pytest.mark.parametrize("measure", ["plain", "gamma", "r_gamma", "two_pi"])
@pytest.mark.parametrize("propagator_sign", ["minkowski", "euclidean"])
@pytest.mark.parametrize(
    ("kinematics", "powers", "dimension"),
    [
        ("equal_mass", (2, 1), 4),
        ("one_massless", (1, 2), 3),
        ("on_shell", (1, 2), 5),
        ("both_massless", (1, 1), 4),
    ],
)
def test_conventions(kinematics, powers, dimension, measure, propagator_sign):
    formula = loopint.formula(
        "bubble",
        powers,
        kinematics=kinematics,
        dimension=dimension,
        measure=measure,
        propagator_sign=propagator_sign,
        orders=(-2, 1),
    )
    check_formula(formula, f"{kinematics} {measure} {propagator_sign}", lambdified=False)
    check_closed_form(formula, f"closed {kinematics} {measure} {propagator_sign}")


@pytest.mark.parametrize("dimension", [3, 4])
@pytest.mark.parametrize("kinematics", [*GENERIC, *SPECIAL])
def test_closed_forms(kinematics, dimension):
    check_closed_form(
        loopint.formula("bubble", kinematics=kinematics, dimension=dimension), f"closed {dimension}"
    )


EPSILON_POWERS = [((1, 1), 1), ((1, "1/2"), (2, -2)), (2, (1, "-1/3")), ((1, 2), (1, 1))]
ONE_SCALE = [
    Kinematics.BOTH_MASSLESS,
    Kinematics.ON_SHELL,
    Kinematics.ZERO_MOMENTUM_EQUAL_MASS,
    Kinematics.ZERO_MOMENTUM_ONE_MASSLESS,
]


@pytest.mark.parametrize("kinematics", ONE_SCALE)
@pytest.mark.parametrize("powers", EPSILON_POWERS)
@pytest.mark.parametrize("dimension", [3, 4, 6])
def test_powers_that_depend_on_epsilon(kinematics, powers, dimension):
    for sign, measure in (("minkowski", "msbar"), ("euclidean", "r_gamma")):
        formula = loopint.formula(
            "propagator",
            powers,
            kinematics=kinematics,
            dimension=dimension,
            orders=(-2, 3),
            propagator_sign=sign,
            measure=measure,
        )
        check_formula(formula, f"{kinematics} {powers} {dimension}")
        check_closed_form(formula, f"closed {kinematics} {powers} {dimension}")


@pytest.mark.parametrize("kinematics", [Kinematics.ONE_MASSLESS, Kinematics.ZERO_MOMENTUM])
@pytest.mark.parametrize(
    ("powers", "dimension"),
    [
        *((p, d) for p in EPSILON_POWERS for d in (3, 4)),
        (((1, "1/2"), (2, -1)), 3),  # a - b does not depend on eps
        (((1, "1/2"), (2, -1)), 6),
    ],
)
def test_gauss_functions_of_powers_that_depend_on_epsilon(kinematics, powers, dimension):
    formula = loopint.formula("propagator", powers, kinematics=kinematics, dimension=dimension)
    assert formula.coefficients == {}
    assert "loopint.propagator evaluates them" in formula.as_text()
    check_closed_form(formula, f"gauss {kinematics} {powers} {dimension}")


def test_propagators_with_integer_powers_are_bubbles():
    assert loopint.formula("propagator", (2, (1, 0))) == loopint.formula("bubble", (2, 1))


def test_lerch_form_of_a_power_that_depends_on_epsilon():
    """2F1(1, b; b+1; z): powers 3/2 - eps - ... make N - d/2 = 1 with the massless power b."""
    formula = loopint.formula(
        "propagator", ((1, -1), (2, 0)), kinematics="one_massless", dimension=4
    )
    assert formula.closed_form.has(sympy.lerchphi)
    check_closed_form(formula, "lerch")


@pytest.mark.parametrize("kinematics", ["general", "equal_mass", "threshold", "pseudothreshold"])
def test_propagators_without_closed_form_are_refused(kinematics):
    with pytest.raises(loopint.UnsupportedIntegralError, match="no closed form"):
        loopint.formula("propagator", ((1, 1), 1), kinematics=kinematics)
    with pytest.raises(loopint.UnsupportedIntegralError, match="above threshold"):
        loopint.formula("propagator", ((1, "-1/2"), (1, -1)), kinematics="one_massless")


@pytest.mark.parametrize("kinematics", GENERIC)
@pytest.mark.parametrize("dimension", [3, 4])
def test_higher_orders(kinematics, dimension):
    formula = loopint.formula("bubble", kinematics=kinematics, dimension=dimension, orders=(3, 4))
    check_formula(formula, f"higher {kinematics} {dimension}", lambdified=False)


@pytest.mark.parametrize(
    ("kinematics", "dimension"), [("general", 4), ("equal_mass", 3), ("on_shell", 4)]
)
def test_python_output_runs_as_printed(kinematics, dimension):
    formula = loopint.formula("bubble", kinematics=kinematics, dimension=dimension)
    sample = samples(kinematics, random.Random(kinematics))[-1]
    arguments = ", ".join(
        f"mpmath.mpf({value.numerator})/{value.denominator}"
        for value in (sample.values[str(s)] for s in formula.symbols)
    )
    program = formula.as_python() + (
        f"\nmpmath.mp.dps = 40\nvalue = mpmath.mpmathify(COEFFICIENTS[2]({arguments}))\n"
        "print(mpmath.nstr(value.real, 36), mpmath.nstr(value.imag, 36))\n"
    )
    run = subprocess.run(
        [sys.executable, "-I", "-W", "error", "-c", program],
        capture_output=True,
        text=True,
        check=True,
    )
    with mpmath.workdps(40):
        value = mpmath.mpc(*run.stdout.split())
        assert deviation(value, engine(formula, sample, (2, 2))[2]) < mpmath.mpf(10) ** -DIGITS


@pytest.mark.parametrize("kinematics", [*GENERIC, *SPECIAL])
def test_sympy_output_rebuilds_the_expressions(kinematics):
    formula = loopint.formula("bubble", kinematics=kinematics)
    module = run_module(formula.as_sympy())
    point = {"p_squared": "-1.7", "m1_squared": "0.9", "m2_squared": "0.4", "m_squared": "1.3"}
    values = {symbol: sympy.Rational(point.get(str(symbol), "0.8")) for symbol in formula.symbols}
    assert set(module["coefficients"]) == set(formula.coefficients)
    for order, rebuilt in module["coefficients"].items():
        # sympy may distribute rational factors when it rebuilds a product: compare the values
        difference = (rebuilt - formula.coefficients[order]).subs(values).evalf(30, chop=True)
        assert abs(difference) < 1e-25
    symbols = formula.closed_form.free_symbols
    assert module["closed_form"].free_symbols == symbols


def test_text_reads_as_a_textbook():
    text = loopint.formula("bubble", kinematics="equal_mass").as_text()
    assert "beta = sqrt(1 - 4*m^2/p^2)" in text
    assert "for 0 < p^2 < 4*m^2" in text
    assert "eps^0: 2 - L1*beta - l" in text
    assert "B = N(eps) (mu^2)^eps Int d^dq/(i pi^(d/2))" in text
    assert "hep-ph/9910224" in text
    assert "p^2 + i0" in text
    assert "_squared" not in text
    assert max(map(len, text.splitlines())) <= 100


def test_latex_is_balanced():
    for kinematics in Kinematics:
        for dimension in (3, 4):
            latex = loopint.formula("bubble", kinematics=kinematics, dimension=dimension).as_latex()
            assert latex.startswith("\\begin{align*}")
            assert latex.count("{") == latex.count("}")
            assert latex.count("\\left") == latex.count("\\right")
            assert "squared" not in latex
            assert not re.search(r"\^\{2\}\^", latex)


def test_formula_is_shown_in_notebooks():
    formula = loopint.formula("tadpole")
    assert formula._repr_latex_() == formula.as_latex()
    assert str(formula) == formula.as_text()


def test_lerch_function_appears_where_the_parameters_reduce():
    """2F1(1/2, 1; 3/2; z) = Phi(z, 1, 1/2)/2 (DLMF 15.2.1 and 25.14.1)."""
    for kinematics, scale in (("one_massless", 1), ("equal_mass", 4)):
        formula = loopint.formula("bubble", kinematics=kinematics, dimension=3)
        assert formula.coefficients[0].has(sympy.lerchphi)
        assert "Phi(" in formula.as_text()
        for z in (-7.5, -0.25, 0.5):
            phi = mpmath.lerchphi(z, 1, mpmath.mpf(1) / 2)
            assert mpmath.almosteq(mpmath.hyp2f1(0.5, 1, 1.5, z), phi / 2)
        assert scale


def test_clausen_special_values():
    """Cl_2(pi/2) is Catalan's constant, and Cl_2(2pi/3) = 2/3 Cl_2(pi/3) (Lewin 1981, ch. 4)."""
    assert clausen2(sympy.pi / 2) == sympy.S.Catalan
    with mpmath.workdps(40):
        assert mpmath.almosteq(special.clausen2(mpmath.pi / 2), mpmath.catalan)
        third = special.clausen2(mpmath.pi / 3)
        assert mpmath.almosteq(special.clausen2(2 * mpmath.pi / 3), 2 * third / 3)
        # the maximum of Cl_2, from memory: 1.0149416064...
        assert mpmath.nstr(third, 11) == "1.0149416064"


def test_catalan_constant_in_a_bubble():
    """Equal masses at p^2 = 2 m^2: the angles are pi/4, and the order eps holds Catalan's constant.

    With beta = 1: B_1 = 4 + pi^2/12 - (2 L1 + L2), L1 = pi/2, L2 = 2 G - (pi/2) log(2), m = mu = 1.
    """
    found = loopint.formula("bubble", kinematics="equal_mass").coefficients[1]
    value = found.subs({"p_squared": 2, "m_squared": 1, "mu_squared": 1})
    assert value.has(sympy.S.Catalan)
    expected = 4 + sympy.pi**2 / 12 - sympy.pi - 2 * sympy.S.Catalan + sympy.pi / 2 * sympy.log(2)
    assert abs((value - expected).evalf(40)) < 1e-35
    assert abs(loopint.bubble(2, 1, 1, orders=(1, 1))[1] - mpmath.mpmathify(expected.evalf(40))) < (
        1e-28
    )


def test_log_sine_special_values():
    """Ls_3(pi) = -pi^3/12, Ls_3(2 pi) = -pi^3/6, Ls_4(pi) = 3/2 pi zeta(3) (Lewin 1981, ch. 7)."""
    with mpmath.workdps(35):
        pi = mpmath.pi
        tiny = mpmath.mpf(10) ** -31
        assert abs(special.log_sine(3, pi) + pi**3 / 12) < tiny
        assert abs(special.log_sine(3, 2 * pi) + pi**3 / 6) < tiny
        assert abs(special.log_sine(4, pi) - 3 * pi * mpmath.zeta(3) / 2) < tiny
    assert log_sine(1, sympy.Symbol("x")) == -sympy.Symbol("x")


def test_polylogarithm_special_values():
    """Li_2(1/2) = pi^2/12 - log(2)^2/2 (DLMF 25.12.6); S_12(1) = zeta(3), S_12(-1) = zeta(3)/8.

    The last two: Kölbig, SIAM J. Math. Anal. 17 (1986) 1232, with
    S_{1,2}(1/2) = zeta(3)/8 - log(2)^3/6.
    """
    assert NielsenS(1, 1, sympy.Symbol("z")) == sympy.polylog(2, sympy.Symbol("z"))
    assert NielsenS(1, 2, 1) == sympy.zeta(3)
    assert NielsenS(1, 2, 0) == 0
    with mpmath.workdps(35):
        half, zeta3, log2 = mpmath.mpf(1) / 2, mpmath.zeta(3), mpmath.log(2)
        s = special.nielsen_polylogarithm
        assert mpmath.almosteq(s(1, 1, half), mpmath.pi**2 / 12 - log2**2 / 2)
        assert mpmath.almosteq(s(1, 2, 1), zeta3)
        assert mpmath.almosteq(s(1, 2, -1), zeta3 / 8)
        assert mpmath.almosteq(s(1, 2, half), zeta3 / 8 - log2**3 / 6)
        # DLMF 25.12.7 at a negative argument: Li_2(z) + Li_2(z/(z-1)) = -log(1-z)^2/2
        z = mpmath.mpf(-3)
        assert mpmath.almosteq(s(1, 1, z) + s(1, 1, z / (z - 1)), -(mpmath.log(1 - z) ** 2) / 2)


def test_nielsen_polylogarithm_against_polylogarithms():
    """S_12(z) by Li_3(1-z) (Kölbig 1986), 0 < z < 1, and its derivative."""
    z = sympy.Symbol("z")
    assert NielsenS(2, 2, z).diff(z) == NielsenS(1, 2, z) / z
    with mpmath.workdps(35):
        for x in (mpmath.mpf("0.1"), mpmath.mpf("0.93")):
            y = 1 - x
            expected = (
                -mpmath.polylog(3, y)
                + mpmath.zeta(3)
                + mpmath.log(y) * mpmath.polylog(2, y)
                + mpmath.log(x) * mpmath.log(y) ** 2 / 2
            )
            assert mpmath.almosteq(special.nielsen_polylogarithm(1, 2, x), expected)
        numeric = NielsenS(1, 2, sympy.Rational(-5, 2)).evalf(30)
        assert mpmath.almosteq(
            mpmath.mpmathify(numeric), special.nielsen_polylogarithm(1, 2, -2.5), rel_eps=1e-28
        )


def test_finite_part_of_the_equal_mass_bubble():
    """2 - log(m^2/mu^2) - beta log((beta+1)/(beta-1)), p^2 < 0 ('t Hooft, Veltman 1979)."""
    value = loopint.formula("bubble", kinematics="equal_mass").coefficients[0]
    found = value.subs({"p_squared": -5, "m_squared": 2, "mu_squared": 3})
    beta = sympy.sqrt(1 + sympy.Rational(8, 5))
    expected = 2 - sympy.log(sympy.Rational(2, 3)) - beta * sympy.log((beta + 1) / (beta - 1))
    assert abs((found - expected).evalf(40)) < 1e-35


def test_massless_formula_agrees_with_the_textbook():
    """1/eps + 2 - log(-p^2/mu^2), and the zeta values of the next orders by Gamma functions."""
    formula = loopint.formula("bubble", kinematics="both_massless")
    p2, mu2 = sympy.symbols("p_squared mu_squared")
    spacelike = {k: v.subs(p2, -1).subs(mu2, 1) for k, v in formula.coefficients.items()}
    assert spacelike[-1] == 1
    assert spacelike[0] == 2
    assert sympy.expand(spacelike[1] - (4 - sympy.pi**2 / 12)) == 0
    assert sympy.expand(spacelike[2] - (8 - sympy.pi**2 / 6 - 7 * sympy.zeta(3) / 3)) == 0


def test_unitarity_of_the_printed_imaginary_part():
    """Im B_0 = pi sqrt(lambda)/p^2 above threshold (Cutkosky; common practice, no source)."""
    found = loopint.formula("bubble").coefficients[0]
    value = found.subs({"p_squared": 9, "m1_squared": 1, "m2_squared": 2, "mu_squared": 1})
    assert abs(sympy.im(value.evalf(40)) - (sympy.pi * sympy.sqrt(28) / 9).evalf(40)) < 1e-35


def test_a_point_outside_the_domain_is_refused():
    module = run_module(loopint.formula("bubble", kinematics="equal_mass").as_python())
    with pytest.raises(ValueError, match="outside the domain"):
        module["COEFFICIENTS"][0](4, 1, 1)


@pytest.mark.parametrize(
    ("keywords", "message"),
    [
        ({"family": "triangle"}, "accepted: tadpole, bubble, propagator"),
        ({"family": "bubble", "kinematics": "equal"}, "accepted: general, equal_mass"),
        ({"family": "tadpole", "kinematics": "equal_mass"}, "accepted: general"),
        ({"family": "bubble", "orders": (-1, 9)}, "highest <= 8"),
        ({"family": "bubble", "orders": (2, 1)}, "upside down"),
        ({"family": "bubble", "powers": (1,)}, "accepted for a bubble"),
        ({"family": "bubble", "dimension": 13}, "from 1 to 12"),
        ({"family": "bubble", "measure": "ms"}, "accepted: msbar"),
    ],
)
def test_refused_requests(keywords, message):
    with pytest.raises(loopint.LoopintError, match=re.escape(message)):
        loopint.formula(**keywords)


@pytest.mark.parametrize("form", FORMS)
def test_command_prints_the_formula(form, monkeypatch, capsys):
    arguments = ["formula", "bubble", "--kinematics", "on_shell", "--powers", "1,2"]
    monkeypatch.setattr(sys, "argv", ["loopint", *arguments, "--orders=-2,1", "--format", form])
    with pytest.raises(SystemExit) as caught:
        main()
    assert not caught.value.code
    expected = loopint.formula("bubble", (1, 2), kinematics="on_shell", orders=(-2, 1))
    assert capsys.readouterr().out == expected.printed(form)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["bubble", "--format", "word"], "accepted: text, latex, python, sympy"),
        (["bubble", "--powers", "1,x"], "accepted: integers separated by commas"),
        (["bubble", "--orders", "1"], "accepted: lowest,highest"),
        (["box"], "accepted: tadpole, bubble, propagator"),
    ],
)
def test_command_refuses_in_one_sentence(arguments, message, monkeypatch, capsys):
    monkeypatch.setattr(sys, "argv", ["loopint", "formula", *arguments])
    with pytest.raises(SystemExit) as caught:
        main()
    out, err = capsys.readouterr()
    assert caught.value.code == 2
    assert out == ""
    assert len(err.splitlines()) == 1
    assert message in err


def test_sympy_is_not_imported_with_the_package():
    program = "import sys, loopint; sys.exit('sympy' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", program], check=False).returncode == 0
