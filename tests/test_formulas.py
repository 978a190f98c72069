"""Printed closed forms against the engine, and their special values against published ones."""

from __future__ import annotations

import random
import re
import subprocess
import sys

import mpmath
import pytest
import sympy

import loopint
from loopint.cli import main
from loopint.formulas import special
from loopint.formulas.formula import FORMS
from loopint.formulas.functions import NielsenS, clausen2, log_sine
from loopint.integrals.reduction import Kinematics
from tests.formula_checks import (
    check_closed_form,
    check_formula,
    check_printed_program,
    counted,
    run_module,
    samples,
)

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


@pytest.fixture(scope="module", autouse=True)
def _count():
    yield from counted()


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
    check_printed_program(formula.as_python(), formula, sample)


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
