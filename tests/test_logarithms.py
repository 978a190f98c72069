"""The finite part by logarithms is the same number as the general formula gives."""

from __future__ import annotations

from fractions import Fraction

import mpmath
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import loopint
from loopint.core.kinematics import TwoPoint
from loopint.core.numbers import ExactComplex, exact_real
from loopint.core.precision import working_precision
from loopint.integrals.logarithms import logarithm_integral

masses = st.fractions(Fraction(1, 50), 50)
momenta = st.fractions(-100, 200).filter(lambda p: p != 0)


def point(p: Fraction, m1: Fraction, m2: Fraction) -> TwoPoint:
    return TwoPoint(exact_real(p), *(ExactComplex(exact_real(m)) for m in (m1, m2)))


@settings(max_examples=150, deadline=None)
@given(p=momenta, m1=masses | st.just(Fraction(0)), m2=masses)
def test_agrees_with_the_gauss_functions(p: Fraction, m1: Fraction, m2: Fraction) -> None:
    """Orders -1..0 take the logarithms, orders -1..1 the Gauss functions."""
    short = loopint.bubble(p, m1, m2, orders=(-1, 0), digits=40)
    long = loopint.bubble(p, m1, m2, orders=(-1, 1), digits=60)
    assert short.status == "ok"
    assert short.region == long.region
    with mpmath.workdps(70):
        assert abs(short[0] - long[0]) <= short.bounds[0] + long.bounds[0]


@pytest.mark.parametrize("m2", ["4", "0"])
@pytest.mark.parametrize("p", ["1e-30", "-1e-12", "1e-5"])
def test_small_momentum_cancels_and_is_left_to_the_general_formula(p: str, m2: str) -> None:
    with working_precision(128):
        assert logarithm_integral(point(Fraction(p), Fraction(1), Fraction(m2))) is None
    series = loopint.bubble(p, 1, m2, orders=(-1, 0), digits=30)
    assert series.precision_bits <= 160


def test_equal_masses_against_the_textbook() -> None:
    """2 - sqrt(1-4/s) log((sqrt(1-4/s)+1)/(sqrt(1-4/s)-1)) at m = mu = 1.

    Peskin, Schroeder, An Introduction to Quantum Field Theory (1995), section 7.5 in closed form;
    from memory.
    """
    with mpmath.workdps(45):
        for s in (-7, Fraction(-1, 3), 5, 300):
            b = mpmath.sqrt(1 - mpmath.mpf(4) / (mpmath.mpf(s.numerator) / s.denominator))
            ratio = (b + 1) / (b - 1)
            logarithm = mpmath.log(abs(ratio)) - (1j * mpmath.pi if s > 4 else 0)
            value = loopint.bubble(s, 1, 1, orders=(-1, 0), digits=40)[0]
            assert abs(value - (2 - b * logarithm)) < mpmath.mpf(10) ** -38
