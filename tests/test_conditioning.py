"""Bounds of doubles for arguments that were rounded, against balls at the exact arguments."""

from __future__ import annotations

import numpy as np
import pytest
from flint import acb, fmpq

from loopint.arrays.bubble import bubble_doubles
from loopint.arrays.evaluate import Tolerance
from loopint.arrays.rounding import UNIT
from loopint.arrays.tadpole import tadpole_doubles
from loopint.core.conventions import Conventions
from loopint.core.kinematics import OnePoint, TwoPoint
from loopint.core.numbers import ExactComplex
from loopint.core.precision import working_precision
from loopint.integrals.registry import Evaluator, Integral

POINTS = 60
LARGE = 2.0**22  # units of UNIT: moves more than all rounding
INTEGRALS = [
    ((1, 1), (), (-1, 2)),
    ((1, 1), (), (-1, 0)),
    ((2, 1), (), (0, 2)),
    ((1, 2), (), (0, 2)),
    ((1, 1), ("p_squared",), (0, 2)),
]


def kinematics(kind: str, source: np.random.Generator) -> tuple[np.ndarray, ...]:
    """Return p^2 and squared masses of one kind."""
    m1, m2 = (10 ** source.uniform(-2, 1, POINTS) for _ in range(2))
    threshold = (np.sqrt(m1) + np.sqrt(m2)) ** 2
    if kind == "anywhere":
        p = source.uniform(-3, 5, POINTS) * threshold
    elif kind == "near":
        signs = source.choice([-1, 1], (2, POINTS))
        special = (np.sqrt(m1) + signs[0] * np.sqrt(m2)) ** 2
        p = special * (1 + signs[1] * 10 ** source.uniform(-4, -1, POINTS))
    elif kind == "hierarchical":
        m1 = m2 * 10 ** source.uniform(-12, -3, POINTS)
        p = m2 * (1 + source.choice([-1, 1], POINTS) * 10 ** source.uniform(-1, 1, POINTS))
    elif kind == "massless":
        m1 = np.zeros(POINTS)
        m2 = np.where(source.random(POINTS) < 0.2, 0.0, m2)
        p = source.uniform(-3, 5, POINTS) * np.where(m2 == 0, 1.0, m2)
    else:
        p = source.uniform(-1, 4, POINTS) * threshold
        narrow = 10 ** source.uniform(-5, 1, (2, POINTS))
        stable = source.random((2, POINTS)) < 0.3
        widths = np.where(stable, 0.0, narrow)
        return p, m1 * (1 - 1j * widths[0]), m2 * (1 - 1j * widths[1])
    return p, m1, m2


def exact(number: float, shift: fmpq) -> fmpq:
    return fmpq(*float(number).as_integer_ratio()) * (1 + shift)


def exact_mass(number: complex, shifts: tuple[fmpq, fmpq]) -> ExactComplex:
    return ExactComplex(exact(number.real, shifts[0]), exact(number.imag, shifts[1]))


def moved(source: np.random.Generator) -> fmpq:
    """Return a relative error of LARGE units, or less."""
    part = int(source.choice([-1, 1])) if source.random() < 0.7 else 0
    return fmpq(part * int(LARGE), 2**53)


@pytest.mark.parametrize("kind", ["anywhere", "near", "hierarchical", "massless", "complex"])
@pytest.mark.parametrize("asked", INTEGRALS, ids=lambda asked: f"{asked[0]}{asked[1]}{asked[2]}")
def test_bounds_hold_for_moved_arguments(kind: str, asked: tuple) -> None:
    source = np.random.default_rng(5)
    powers, derivatives, orders = asked
    integral = Integral.parse("bubble", powers, 4, orders, derivatives)
    conventions = Conventions.parse("plain", "minkowski", "7/3")
    points = kinematics(kind, source)
    error = np.full(POINTS, LARGE)
    tolerance = Tolerance(1e-9, of_series=False)
    with np.errstate(all="ignore"):
        arrays = bubble_doubles(integral, conventions, points, tolerance, error)
    evaluator = Evaluator(integral, conventions, digits=30)
    checked = 0
    sharpest: float = 0.0
    for i in range(POINTS):
        bounds = [arrays.bounds[k][i] for k in arrays.bounds]
        if not np.isfinite(bounds).all():
            continue
        point = TwoPoint(
            exact(points[0][i], moved(source)),
            exact_mass(complex(points[1][i]), (moved(source), moved(source))),
            exact_mass(complex(points[2][i]), (moved(source), moved(source))),
        )
        series = evaluator(point).series
        with working_precision(200):
            for k, values in arrays.values.items():
                value = complex(values[i])
                gap = abs(acb(series[k]) - acb(value.real, value.imag))
                allowed = float(arrays.bounds[k][i])
                assert float(gap.upper()) <= allowed, (k, [a[i] for a in points])
                checked += 1
                if k > orders[0]:
                    sharpest = max(sharpest, float(gap.upper()) / allowed)
    print(f"{kind} {asked}: {checked} coefficients, error/bound up to {sharpest:.2g}")
    if kind != "massless" or powers != (2, 1):  # infrared divergent
        assert checked > POINTS
        assert sharpest > 1e-4


@pytest.mark.parametrize("power", [1, 2, 3])
@pytest.mark.parametrize("dimension", [3, 4])
def test_tadpoles_with_moved_masses(power: int, dimension: int) -> None:
    source = np.random.default_rng(3)
    integral = Integral.parse("tadpole", power, dimension, (-1, 2), ())
    conventions = Conventions()
    m = 10 ** source.uniform(-3, 3, POINTS) * (1 - 1j * np.where(np.arange(POINTS) % 2, 0.3, 0.0))
    tolerance = Tolerance(1e-9, of_series=False)
    arrays = tadpole_doubles(integral, conventions, m, tolerance, np.full(POINTS, LARGE))
    evaluator = Evaluator(integral, conventions, digits=30)
    worst = 0.0
    for i in range(POINTS):
        shift = moved(source)
        series = evaluator(OnePoint(exact_mass(complex(m[i]), (shift, shift)))).series
        with working_precision(200):
            for k, values in arrays.values.items():
                value = complex(values[i])
                gap = float(abs(acb(series[k]) - acb(value.real, value.imag)).upper())
                assert gap <= arrays.bounds[k][i]
                if gap:
                    worst = max(worst, gap / arrays.bounds[k][i])
    assert worst > 0.3


def test_no_error_costs_nothing() -> None:
    source = np.random.default_rng(8)
    integral = Integral.parse("bubble", (1, 1), 4, (-1, 1), ())
    points = kinematics("anywhere", source)
    tolerance = Tolerance(1e-12, of_series=False)
    plain = bubble_doubles(integral, Conventions(), points, tolerance)
    same = bubble_doubles(integral, Conventions(), points, tolerance, np.zeros(POINTS))
    one = bubble_doubles(integral, Conventions(), points, tolerance, np.ones(POINTS))
    for k in (0, 1):
        assert (plain.bounds[k] == same.bounds[k]).all()
        assert (plain.bounds[k] + UNIT * 0.1 < one.bounds[k]).all()
