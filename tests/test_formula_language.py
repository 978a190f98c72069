"""The language of a user's formula: values against mpmath, sides of cuts, hostile texts."""

from __future__ import annotations

import time

import mpmath
import pytest
from flint import acb, arb, fmpq
from hypothesis import given, settings
from hypothesis import strategies as st

from loopint.core.errors import InputError
from loopint.core.precision import working_precision
from loopint.pipeline.formula_language import Cuts, of, parse_formula


def evaluate(text: str, **names: object) -> tuple[acb, Cuts]:
    cuts = Cuts()
    with working_precision(160):
        values = {name: of(fmpq(*value)) for name, value in names.items()}
        return parse_formula(text).evaluate(values, cuts), cuts


def to_mpmath(value: acb) -> mpmath.mpc:
    return mpmath.mpc(value.real.str(40, radius=False), value.imag.str(40, radius=False))


@pytest.mark.parametrize(
    ("text", "reference"),
    [
        ("log(2) + 3*sqrt(5)", lambda: mpmath.log(2) + 3 * mpmath.sqrt(5)),
        ("Li2(1/3)", lambda: mpmath.polylog(2, mpmath.mpf(1) / 3)),
        ("Li2(-7)", lambda: mpmath.polylog(2, -7)),
        ("Li3(1/2)", lambda: mpmath.polylog(3, mpmath.mpf("0.5"))),
        ("polylog(4, 0.9)", lambda: mpmath.polylog(4, mpmath.mpf("0.9"))),
        ("clausen2(pi/2)", lambda: mpmath.catalan),  # DLMF 25.12.9
        ("zeta(3)", lambda: mpmath.zeta(3)),
        ("gamma(1/3)", lambda: mpmath.gamma(mpmath.mpf(1) / 3)),
        ("atan(3) + asin(1/4) + acos(1/4)", lambda: mpmath.atan(3) + mpmath.pi / 2),
        ("atanh(1/2)", lambda: mpmath.atanh(mpmath.mpf("0.5"))),
        ("hyp2f1(1, 1/2, 3/2, -3)", lambda: mpmath.hyp2f1(1, 0.5, 1.5, -3)),
        ("lerch_phi(1/3, 2, 1/2)", lambda: mpmath.lerchphi(mpmath.mpf(1) / 3, 2, 0.5)),
        ("lerch_phi(-3, 1, 1/2)", lambda: mpmath.lerchphi(-3, 1, 0.5)),
        ("exp(I*pi/3)", lambda: mpmath.expjpi(mpmath.mpf(1) / 3)),
        ("2**0.5 - 2**-3", lambda: mpmath.sqrt(2) - mpmath.mpf(1) / 8),
        ("kallen(2, 3, 5)", lambda: mpmath.mpf(-24)),
        ("theta(3)*7 + theta(-3)", lambda: mpmath.mpf(7)),
        ("euler_gamma", lambda: +mpmath.euler),
        ("re(log(-2)) + im(sqrt(-9)) + abs(3 - 4*i)", lambda: mpmath.log(2) + 8),
        ("conjugate(1 + 2*I)", lambda: mpmath.mpc(1, -2)),
    ],
)
def test_values(text, reference):
    with mpmath.workdps(40):
        value, _ = evaluate(text)
        assert abs(to_mpmath(value) - reference()) < mpmath.mpf(10) ** -35


@pytest.mark.parametrize(
    ("text", "imaginary"),
    [
        ("log(-2 + i0)", "pi"),
        ("log(-2 - i0)", "-pi"),
        ("log(-(2 + i0))", "-pi"),
        ("log(1/(-2 + i0))", "-pi"),
        ("log((-2 - i0)**2*(-1))", "-pi"),  # (-2-i0)^2 = 4 + i0
        ("log(-x - i0)", "-pi"),
        ("2*sqrt(-1 - i0)", "-2"),
        ("Li2(2 + i0)", "pi*log(2)"),
        ("Li2(2 - i0)", "-pi*log(2)"),
        ("polylog(3, 2 + i0)", "pi*log(2)**2/2"),
        ("atanh(2 + i0)", "pi/2"),
        ("atanh(2 - i0)", "-pi/2"),
        ("2*hyp2f1(1, 1/2, 3/2, 4 + i0)", "pi/2"),  # atanh(2 + i0)/2, DLMF 15.4.2
        ("log(Li2(3 + i0 - 4) - 1)", "pi"),
    ],
)
def test_i0_decides_the_side(text, imaginary):
    value, cuts = evaluate(text, x=(2, 1))
    expected, _ = evaluate(imaginary)
    assert abs(value.imag - expected.real) < arb(10) ** -35
    assert cuts.undecided == 0


def test_without_i0_the_principal_value_is_taken_and_counted():
    for text, sign in (("log(-2)", 1), ("sqrt(-2)", 1), ("Li2(2)", -1), ("hyp2f1(1,1,2,3)", -1)):
        value, cuts = evaluate(text)
        assert cuts.undecided == 1
        assert (value.imag > 0) == (sign > 0)
        if text == "Li2(2)":
            assert mpmath.polylog(2, 2).imag < 0  # mpmath's choice too


HOSTILE = [
    "__import__('os').system('true')", "x.y", "x[0]", "[1, 2]", "lambda: 1", "1 if x else 2",
    "'text'", "x < 1", "f(x)", "log(1, 2)", "log(x=1)", "log(*x)", "x := 1", "{1}", "x # y", "",
    "(" * 500 + "1" + ")" * 500, "-" * 500 + "1", "1+" * 30000 + "1",
    "log(" * 400 + "1" + ")" * 400,
    "1e99999999", "True", "None", "0x", "x @ y", "x // y", "x % y", "~x", "x and y", "f'{x}'",
]  # fmt: skip


@pytest.mark.parametrize("text", HOSTILE, ids=[text[:20] for text in HOSTILE])
def test_nothing_but_formulas_is_accepted(text):
    started = time.perf_counter()
    with pytest.raises(InputError) as refused:
        parse_formula(text)
    assert len(str(refused.value)) < 700
    assert time.perf_counter() - started < 5


@pytest.mark.parametrize("text", ["1/0", "log(0)", "gamma(-2)", "zeta(1)", "0**-1", "1/(2-2)"])
def test_poles_are_named(text):
    with pytest.raises(InputError, match="divides by zero or has a pole"):
        evaluate(text)


@pytest.mark.parametrize("text", ["9**9**9", "exp(exp(exp(9)))", "(10**1000)**1000"])
def test_huge_numbers_end_quickly(text):
    started = time.perf_counter()
    evaluate(text)
    assert time.perf_counter() - started < 5


numbers = st.fractions(-20, 20, max_denominator=50)


@settings(max_examples=100, deadline=None)
@given(x=numbers, y=numbers.filter(bool))
def test_arithmetic_is_that_of_mpmath(x, y):
    text = "log(x**2 + 1)/y - exp(x/10)*(y - 3)**2 + sqrt(x - 21) + (x + 20.5)**(1/3)"
    value, _ = evaluate(text, x=x.as_integer_ratio(), y=y.as_integer_ratio())
    with mpmath.workdps(40):
        a, b = (mpmath.mpf(v.numerator) / v.denominator for v in (x, y))
        expected = mpmath.log(a**2 + 1) / b - mpmath.exp(a / 10) * (b - 3) ** 2
        expected += mpmath.sqrt(a - 21) + (a + mpmath.mpf("20.5")) ** (mpmath.mpf(1) / 3)
        assert abs(to_mpmath(value) - expected) < mpmath.mpf(10) ** -33


@settings(max_examples=300, deadline=None)
@given(st.text(max_size=40))
def test_any_text_is_a_formula_or_a_sentence(text):
    sentence = "accepted"
    try:
        parse_formula(text)
    except InputError as error:
        sentence = str(error)
    assert "accepted" in sentence or "nested" in sentence
