"""How printed closed forms are compared with the engine."""

from __future__ import annotations

import random
import subprocess
import sys
from collections.abc import Iterator
from dataclasses import dataclass
from fractions import Fraction
from itertools import pairwise

import mpmath
import sympy

import loopint
from loopint.formulas.formula import Formula
from tests.reference import to_mp

DIGITS = 30
EXTRA = 12  # guard digits of the evaluation, for cancellations in large reductions


@dataclass
class Tally:
    """What a test module compared, and the worst relative deviation."""

    forms: int = 0
    values: int = 0
    deviation: object = 0

    def __str__(self) -> str:
        return (
            f"{self.forms} printed forms, {self.values} values, worst relative deviation "
            f"{mpmath.nstr(self.deviation, 2)}"
        )


TALLY = Tally()


def counted() -> Iterator[None]:
    """Start counting, and print the figures of a module at its end."""
    TALLY.forms = TALLY.values = TALLY.deviation = 0
    yield
    print(f"\n{TALLY}")


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
    TALLY.forms += 1
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
                    TALLY.values += 1
                    TALLY.deviation = max(TALLY.deviation, worst)
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


def check_printed_program(text: str, formula: Formula, sample: Sample) -> None:
    """Run a printed Python module in a process of its own and compare its eps^2 coefficient."""
    listed = ", ".join(
        f"mpmath.mpf({value.numerator})/{value.denominator}"
        for value in (sample.values[str(s)] for s in formula.symbols)
    )
    program = text + (
        f"\nmpmath.mp.dps = 40\nvalue = mpmath.mpmathify(COEFFICIENTS[2]({listed}))\n"
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
