"""Printed closed forms of propagators with powers n + a eps against the engine."""

from __future__ import annotations

import random
import sys
from fractions import Fraction
from itertools import product

import mpmath
import pytest
import sympy
from flint import fmpq

import loopint
from loopint.cli import main
from loopint.core.epsilon_linear import EpsilonLinear
from loopint.formulas import iterated, special
from loopint.formulas.functions import NielsenS
from loopint.formulas.gauss_series import gauss_expansion
from loopint.integrals.reduction import Kinematics
from tests.formula_checks import (
    check_closed_form,
    check_formula,
    check_printed_program,
    counted,
    deviation,
    run_module,
    samples,
)
from tests.reference import to_mp

POWERS = [((1, 1), 1), ((1, "1/2"), (2, -2)), (2, (1, "-1/3")), ((1, 2), (1, 1))]
ONE_SCALE = [
    Kinematics.BOTH_MASSLESS,
    Kinematics.ON_SHELL,
    Kinematics.ZERO_MOMENTUM_EQUAL_MASS,
    Kinematics.ZERO_MOMENTUM_ONE_MASSLESS,
]
TWO_SCALES = [Kinematics.ONE_MASSLESS, Kinematics.ZERO_MOMENTUM]


@pytest.fixture(scope="module", autouse=True)
def _count():
    yield from counted()


@pytest.mark.parametrize("kinematics", ONE_SCALE)
@pytest.mark.parametrize("powers", POWERS)
@pytest.mark.parametrize("dimension", [3, 4, 6])
def test_one_product_of_gamma_functions(kinematics, powers, dimension):
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


@pytest.mark.parametrize("kinematics", TWO_SCALES)
@pytest.mark.parametrize(
    ("powers", "dimension"),
    [
        *product(POWERS, (2, 4)),
        (((0, 1), 1), 4),  # a massless loop on the massless line
        ((2, (0, 1)), 4),
        (((2, 1), 1), 4),  # infrared pole
        (((-1, 2), 3), 4),
        (((2, "2/3"), (3, 1)), 8),
        (((1, "1/2"), (2, -1)), 6),
    ],
)
def test_two_scales_in_even_dimensions(kinematics, powers, dimension):
    for sign, measure in (("minkowski", "msbar"), ("euclidean", "gamma")):
        try:
            formula = loopint.formula(
                "propagator",
                powers,
                kinematics=kinematics,
                dimension=dimension,
                orders=(-2, 2),
                propagator_sign=sign,
                measure=measure,
            )
        except loopint.UnregulatedError:
            assert (kinematics, dimension) == ("one_massless", 2)  # an integer massless power
            point = samples(kinematics, random.Random(1))[0].point
            with pytest.raises(loopint.UnregulatedError):
                loopint.propagator(*point, powers, dimension=dimension)
            return
        check_formula(formula, f"{kinematics} {powers} {dimension}", lambdified=sign == "minkowski")
        check_closed_form(formula, f"closed {kinematics} {powers} {dimension}")


@pytest.mark.parametrize("kinematics", TWO_SCALES)
@pytest.mark.parametrize("seed", range(12))
def test_random_powers(kinematics, seed):
    """Through eps^2 for any powers that the engine evaluates."""
    rng = random.Random(f"{kinematics} {seed}")

    def power() -> tuple[int, str]:
        return rng.randint(-1, 4), str(Fraction(rng.randint(-4, 4), rng.randint(1, 3)))

    dimension = rng.choice((2, 4, 6, 8))
    powers = (power(), power())
    orders = (-3, 2)
    try:
        formula = loopint.formula(
            "propagator", powers, kinematics=kinematics, dimension=dimension, orders=orders
        )
    except loopint.UnregulatedError:
        point = samples(kinematics, rng)[0].point
        with pytest.raises(loopint.UnregulatedError):
            loopint.propagator(*point, powers, dimension=dimension, orders=orders)
        return
    check_formula(formula, f"random {kinematics} {seed}", lambdified=False)


@pytest.mark.parametrize("kinematics", TWO_SCALES)
@pytest.mark.parametrize(
    ("powers", "highest"), [(((1, 1), 1), 3), ((1, (1, 1)), 7), (((1, -2), (2, 3)), 3)]
)
def test_highest_order(kinematics, powers, highest):
    """Coefficients go as far as Nielsen polylogarithms do; an integer power goes further."""
    orders = (highest, highest)
    formula = loopint.formula("propagator", powers, kinematics=kinematics, orders=orders)
    check_formula(formula, f"highest {powers}", lambdified=False)


def test_refused_order_names_the_highest():
    with pytest.raises(loopint.UnsupportedIntegralError, match="accepted: highest <= 3"):
        loopint.formula("propagator", ((1, 1), 1), kinematics="one_massless", orders=(-1, 4))


@pytest.mark.parametrize("kinematics", TWO_SCALES)
@pytest.mark.parametrize("powers", [*POWERS, ((1, "1/2"), (2, -1))])
def test_two_scales_in_odd_dimensions(kinematics, powers):
    formula = loopint.formula("propagator", powers, kinematics=kinematics, dimension=3)
    assert formula.coefficients == {}
    assert "loopint.propagator evaluates them" in formula.as_text()
    check_closed_form(formula, f"gauss {kinematics} {powers}")


def test_propagators_with_integer_powers_are_bubbles():
    assert loopint.formula("propagator", (2, (1, 0))) == loopint.formula("bubble", (2, 1))


def test_lerch_form_of_a_power_that_depends_on_epsilon():
    """2F1(1, b; b+1; z): N - d/2 = 1 and the massless power is b = 1 - eps."""
    formula = loopint.formula(
        "propagator", ((1, -1), (2, 0)), kinematics="one_massless", dimension=4
    )
    assert formula.closed_form.has(sympy.lerchphi)
    assert "Lerch" in formula.as_text()
    check_closed_form(formula, "lerch")
    check_formula(formula, "lerch")


@pytest.mark.parametrize("n", [0, 1])
def test_powers_whose_sum_is_an_integer_below_one(n):
    """2F1(a, b; c; z)/Gamma(c) at c = 0, -1: the radial integral in d = 1 - 2 eps, by mpmath.

    For n = 1 the integrand grows: the derivative by m1^2 of Int k^(d-1) (k^2+m1^2)^(1-e)
    (k^2+m2^2)^e is the integral of the powers e, -e times 1-e.
    """
    e = Fraction(2, 3)
    with mpmath.workdps(40):
        eps = mpmath.mpf("0.15")
        d, rate = 1 - 2 * eps, to_mp(e) * eps
        m1, m2 = mpmath.mpf("1.3"), mpmath.mpf("0.4")

        def value(first: mpmath.mpf) -> mpmath.mpf:
            formula = loopint.formula(
                "propagator",
                ((-n, str(e)), (0, str(-e))),
                kinematics="zero_momentum",
                dimension=1,
                propagator_sign="euclidean",
                measure="plain",
            )
            return run_module(formula.as_python())["closed_form"](eps, first, m2, 1)

        def integrand(k: mpmath.mpf) -> mpmath.mpf:  # less its limit: scaleless
            return k ** (d - 1) * mpmath.expm1(rate * mpmath.log((k**2 + m2) / (k**2 + m1)))

        radial = mpmath.quad(integrand, [0, 0.1, 1, 10, mpmath.inf])
        expected = 2 * radial / mpmath.gamma(d / 2)
        found = value(m1)
        if n == 1:
            found = mpmath.diff(value, m1, h=mpmath.mpf(10) ** -12) / (1 - rate)
        assert deviation(found, expected) < mpmath.mpf(10) ** -12


@pytest.mark.parametrize("kinematics", ["general", "equal_mass", "threshold", "pseudothreshold"])
def test_propagators_without_closed_form_are_refused(kinematics):
    with pytest.raises(loopint.UnsupportedIntegralError, match=r"no closed form.*quadrature"):
        loopint.formula("propagator", ((1, 1), 1), kinematics=kinematics)


def test_degenerate_closed_form_is_refused():
    with pytest.raises(loopint.UnsupportedIntegralError, match="above threshold"):
        loopint.formula("propagator", ((1, "-1/2"), (1, -1)), kinematics="one_massless")


@pytest.mark.parametrize("kinematics", [*TWO_SCALES, *ONE_SCALE])
def test_other_printed_forms(kinematics):
    formula = loopint.formula("propagator", ((1, "1/2"), (1, 1)), kinematics=kinematics)
    text, latex = formula.as_text(), formula.as_latex()
    assert max(map(len, text.splitlines())) <= 100
    assert "_squared" not in text
    assert latex.count("{") == latex.count("}")
    assert "squared" not in latex
    sample = samples(kinematics, random.Random(kinematics))[-1]
    values = {s: sympy.Rational(str(sample.values[str(s)])) for s in formula.symbols}
    module = run_module(formula.as_sympy())
    assert set(module["coefficients"]) == set(formula.coefficients)
    for order, rebuilt in module["coefficients"].items():
        difference = (rebuilt - formula.coefficients[order]).subs(values).evalf(30, chop=True)
        assert abs(difference) < 1e-25


def test_command_prints_coefficients_that_run(monkeypatch, capsys):
    arguments = ["formula", "propagator", "--powers", "1:1,1", "--kinematics", "one_massless"]
    monkeypatch.setattr(sys, "argv", ["loopint", *arguments, "--format", "python"])
    with pytest.raises(SystemExit) as caught:
        main()
    assert not caught.value.code
    formula = loopint.formula("propagator", ((1, 1), 1), kinematics="one_massless")
    sample = samples("one_massless", random.Random(5))[-1]
    check_printed_program(capsys.readouterr().out, formula, sample)


# The mathematics below the formulas ---------------------------------------------------------------


def test_values_of_nielsen_polylogarithms_at_one():
    """S_{1,2}(1) = zeta(3), S_{2,2}(1) = pi^4/360 (Kölbig, SIAM J. Math. Anal. 17 (1986) 1232)."""
    assert iterated.nielsen_at_one(1, 2) == sympy.zeta(3)
    assert iterated.nielsen_at_one(2, 2) == sympy.pi**4 / 360
    with mpmath.workdps(30):
        for n, p in product((1, 2, 3), (1, 2, 3)):
            value = mpmath.mpmathify(iterated.nielsen_at_one(n, p).evalf(30))
            assert mpmath.almosteq(value, special.nielsen_polylogarithm(n, p, 1), 1e-25)


def test_dilogarithm_beyond_one():
    """Li2(z) + Li2(1/z) = -pi^2/6 - log(-z)^2/2 (DLMF 25.12.4), log(-z - i0) = log(z) - i pi."""
    z, logarithm = sympy.symbols("z l")
    found = iterated.beyond_one(1, 1, logarithm, sympy.log(1 - 1 / z), 1 / z)
    expected = -sympy.polylog(2, 1 / z) - sympy.pi**2 / 6
    expected -= (logarithm - sympy.I * sympy.pi) ** 2 / 2
    assert sympy.expand(found - expected) == 0


def test_nielsen_polylogarithms_beyond_one():
    """On the path of integration 1 - z t has a negative imaginary part: z + i0."""
    z = Fraction(17, 10)
    for n, p in ((1, 2), (2, 2), (1, 3), (3, 2), (2, 4)):
        with mpmath.workdps(25):
            x = to_mp(z)
            weight = mpmath.factorial(n - 1) * mpmath.factorial(p) * (-1) ** (n + p - 1)
            integral = mpmath.quad(
                lambda t, n=n, p=p, x=x: mpmath.log(t) ** (n - 1) * mpmath.log(1 - x * t) ** p / t,
                [0, 0.5 + 0.3j, 1],
            )
            s = sympy.Rational(17, 10)
            arguments = (sympy.log(s), sympy.log(1 - 1 / s), 1 / s)
            value = mpmath.mpmathify(iterated.beyond_one(n, p, *arguments).evalf(25))
            assert mpmath.almosteq(value, integral / weight, 1e-20)


def test_words_are_polynomials_in_lyndon_words():
    """The words of three letters at z = 1/3, against nested integrals by mpmath."""
    with mpmath.workdps(15):
        z = mpmath.mpf(1) / 3

        def function(word: str) -> sympy.Expr:
            if word == "1":
                return -sympy.log(sympy.Rational(2, 3))
            return NielsenS(word.count("0"), word.count("1"), sympy.Rational(1, 3))

        def direct(word: str, x: mpmath.mpf) -> mpmath.mpf:
            if word == "1":
                return -mpmath.log1p(-x)
            divide = (lambda t: t) if word[0] == "0" else (lambda t: 1 - t)
            return mpmath.quad(lambda t: direct(word[1:], t) / divide(t), [0, x])

        for letters in product("01", repeat=2):
            word = "".join(letters) + "1"
            polynomial = iterated.lyndon_polynomial({word: fmpq(1)})
            assert iterated.is_covered(polynomial)
            value = mpmath.mpmathify(iterated.written(polynomial, function).evalf(15))
            assert mpmath.almosteq(value, direct(word, z), 1e-11)


@pytest.mark.parametrize("seed", range(25))
def test_series_of_gauss_functions(seed):
    """The sum of the series at a small eps against mpmath's 2F1."""
    rng = random.Random(f"gauss {seed}")

    def parameter(low: int, high: int) -> EpsilonLinear:
        rate = fmpq(rng.randint(-3, 3), rng.randint(1, 2))
        return EpsilonLinear.of(rng.randint(low, high), rate)

    a, b, c = parameter(-2, 4), parameter(-2, 4), parameter(-1, 5)
    if c.is_pole_of_gamma:
        c = c + 3
    z = sympy.Rational(rng.randint(-300, 95), 100)

    def function(word: str) -> sympy.Expr:
        if word == "1":
            return -sympy.log(1 - z)
        return NielsenS(word.count("0"), word.count("1"), z)

    series = gauss_expansion(a, b, c, 5, z, function)
    assert len(series.terms) >= 4
    with mpmath.workdps(50):
        eps = mpmath.mpf(10) ** -8
        total = mpmath.fsum(
            mpmath.mpmathify(term.evalf(50)) * eps ** (series.lowest + k)
            for k, term in enumerate(series.terms)
        )
        numbers = [
            to_mp(Fraction(int(x.constant.p), int(x.constant.q)))
            + eps * to_mp(Fraction(int(x.rate.p), int(x.rate.q)))
            for x in (a, b, c)
        ]
        reference = mpmath.hyp2f1(*numbers, mpmath.mpf(int(z.p)) / int(z.q))
        # the first order left out, and the growth of the coefficients (c0 <= 0: less one order)
        assert deviation(total, reference) < mpmath.mpf(10) ** (4 - 8 * len(series.terms))
