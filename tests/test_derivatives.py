"""Derivatives against numerical differentiation, published slopes, and through the pipeline."""

from __future__ import annotations

import json
from collections.abc import Callable
from fractions import Fraction
from pathlib import Path

import mpmath
import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

import loopint
from loopint.cli import app
from loopint.core.conventions import Measure
from loopint.integrals.derivatives import TWO_POINT_VARIABLES, check_derivatives, derivative_term
from loopint.pipeline.config import load_config
from loopint.pipeline.errors import ConfigError
from loopint.pipeline.run import run_config
from loopint.pipeline.single import evaluate_point
from tests.reference import to_mp

DIGITS = 25
P, M1, M2 = TWO_POINT_VARIABLES


def value(
    k: int, variables: list[object], family: Callable = loopint.bubble, **options: object
) -> mpmath.mpc:
    """Evaluate at the working precision of mpmath, which the differentiation raises."""
    digits = mpmath.mp.dps + 8
    series = family(*variables, orders=(k, k), digits=digits, **options)
    assert series.status == "ok"
    return series[k]


def numerical(
    point: tuple[object, ...], derivative: tuple[str, ...], order: int, **options: object
) -> mpmath.mpc:
    """Differentiate the order-th Laurent coefficient numerically."""
    counts = [derivative.count(name) for name in TWO_POINT_VARIABLES]
    moved = [i for i, n in enumerate(counts) if n]

    def function(*arguments: mpmath.mpf) -> mpmath.mpc:
        variables = list(point)
        for i, argument in zip(moved, arguments, strict=True):
            original = variables[i]
            if isinstance(original, tuple):  # only the real part moves: B is analytic
                variables[i] = (argument, to_mp(Fraction(original[1])))
            else:
                variables[i] = argument
        return value(order, variables, **options)

    centre = [to_mp(Fraction(v[0] if isinstance(v, tuple) else v)) for v in point]
    steps = tuple(counts[i] for i in moved)
    start = tuple(centre[i] for i in moved)
    if len(moved) == 1:
        return mpmath.diff(function, start[0], steps[0])
    return mpmath.diff(function, start, steps)


def compare(
    point: tuple[object, ...],
    derivative: tuple[str, ...],
    orders: tuple[int, int] = (-1, 1),
    **options: object,
) -> None:
    exact = loopint.bubble(*point, orders=orders, derivatives=derivative, digits=50, **options)
    assert exact.status == "ok"
    with mpmath.workdps(60):
        largest = max(abs(exact[k]) for k in exact)
        for k in exact:
            expected = numerical(point, derivative, k, **options)
            scale = max(abs(expected), largest * mpmath.mpf(10) ** -10)
            assert abs(exact[k] - expected) <= scale * mpmath.mpf(10) ** -DIGITS, (derivative, k)


POINTS = {
    "spacelike": ("-3/2", "1", "2"),
    "spacelike_equal": ("-3/2", "4/5", "4/5"),
    "zero_momentum": ("0", "1", "3"),
    "zero_momentum_equal": ("0", "1", "1"),
    "below_pseudothreshold": ("1/10", "1", "4"),
    "pseudothreshold": ("1", "1", "4"),
    "below_threshold": ("5", "1", "4"),
    "above_threshold": ("12", "1", "4"),
    "complex_mass": ("5", ("1", "-1/5"), "2"),
    "complex_masses": ("7", ("1", "-1/5"), ("2", "-3")),
}
FIRST = [(P,), (M1,), (M2,)]
SECOND = [(P, P), (P, M1), (P, M2), (M1, M1), (M1, M2), (M2, M2)]


@pytest.mark.parametrize("derivative", FIRST)
@pytest.mark.parametrize("region", POINTS)
def test_first_derivatives_in_all_regions(region: str, derivative: tuple[str, ...]) -> None:
    compare(POINTS[region], derivative)


@pytest.mark.parametrize("derivative", SECOND)
@pytest.mark.parametrize(
    "region", ["spacelike", "zero_momentum_equal", "pseudothreshold", "above_threshold"]
)
def test_second_derivatives(region: str, derivative: tuple[str, ...]) -> None:
    compare(POINTS[region], derivative, (0, 0))


@pytest.mark.parametrize("derivative", [(M2,), (P,), (P, M2)])
@pytest.mark.parametrize("p_squared", ["-2", "0", "1/2", "3"])
def test_one_massless_line(p_squared: str, derivative: tuple[str, ...]) -> None:
    compare((p_squared, "0", "1"), derivative, (-1, 0))


@pytest.mark.parametrize("p_squared", ["-2", "3"])
def test_both_massless(p_squared: str) -> None:
    compare((p_squared, "0", "0"), (P,))
    compare((p_squared, "0", "0"), (P, P))


@pytest.mark.parametrize("dimension", [1, 2, 3, 5, 6, 12])
@pytest.mark.parametrize("powers", [(1, 1), (2, 1), (1, 3), (-1, 2), (2, -2), (1, 0)])
def test_powers_and_dimensions(powers: tuple[int, int], dimension: int) -> None:
    for derivative in ((P,), (M1,), (M1, M2)):
        compare(("-3", "1", "2"), derivative, (-1, 0), powers=powers, dimension=dimension)


@pytest.mark.parametrize("propagator_sign", ["minkowski", "euclidean"])
@pytest.mark.parametrize("measure", list(Measure))
def test_conventions(measure: str, propagator_sign: str) -> None:
    """The factors of measure, sign and mu^2 belong to the integral that is differentiated."""
    options = {
        "measure": measure,
        "propagator_sign": propagator_sign,
        "mu_squared": "7/3",
        "powers": (1, 2),
        "dimension": 5,
    }
    for derivative in ((P,), (M1,)):
        compare(("9", "1", "2"), derivative, (-1, 1), **options)
    compare(("9", "1", "2"), (P, M2), (0, 0), **options)


def test_third_and_fourth_derivative() -> None:
    for derivative in ((P, P, M1), (P, P, P, P), (M1, M1, M2, M2)):
        compare(("-3", "1", "2"), derivative, (0, 0))


@pytest.mark.parametrize(
    ("point", "derivative"),
    [
        (("-3", "0", "0"), (P, P)),
        (("2", "0", "3"), (P,)),
        (("2", "0", "3"), (P, M2)),
        (("5", "0", "3"), (M2,)),
    ],
)
@pytest.mark.parametrize("propagator_sign", ["minkowski", "euclidean"])
def test_powers_that_depend_on_epsilon(
    point: tuple[str, str, str], derivative: tuple[str, ...], propagator_sign: str
) -> None:
    """The integers of the relations become n + a eps, which mixes the orders."""
    options = {
        "powers": ((1, "1/2"), (1, 2)),
        "propagator_sign": propagator_sign,
        "mu_squared": 3,
        "measure": "two_pi",
    }
    exact = loopint.propagator(*point, orders=(-2, 0), derivatives=derivative, **options)
    with mpmath.workdps(25):
        for k in exact:
            expected = numerical(point, derivative, k, family=loopint.propagator, **options)
            assert abs(exact[k] - expected) < 1e-20 * (1 + abs(expected)), k


def test_cross_check_of_powers_that_depend_on_epsilon() -> None:
    """The quadrature starts at a lower order than asked for, as the factors raise the orders."""
    kinematics = {"p_squared": "1/2", "m1_squared": "0", "m2_squared": "3"}
    result = evaluate_point(
        "propagator",
        kinematics,
        powers="1:1/2,1:2",
        orders="0,1",
        derivatives=(P, M2),
        measure="two_pi",
        max_precision_bits=2000,
        check=True,
    )
    assert [check.status for check in result.checks] == ["ok", "ok"]


@pytest.mark.parametrize("m_squared", ["2", ("1", "-1/3")])
@pytest.mark.parametrize("steps", [1, 2])
@pytest.mark.parametrize("propagator_sign", ["minkowski", "euclidean"])
def test_tadpole(m_squared: object, steps: int, propagator_sign: str) -> None:
    exact = loopint.tadpole(
        m_squared,
        2,
        dimension=6,
        digits=40,
        derivatives=("m_squared",) * steps,
        propagator_sign=propagator_sign,
    )
    re, im = m_squared if isinstance(m_squared, tuple) else (m_squared, "0")
    with mpmath.workdps(50):
        for k in exact:

            def function(x: mpmath.mpf, k: int = k) -> mpmath.mpc:
                return loopint.tadpole(
                    (x, to_mp(Fraction(im))),
                    2,
                    dimension=6,
                    orders=(k, k),
                    digits=mpmath.mp.dps + 8,
                    propagator_sign=propagator_sign,
                )[k]

            expected = mpmath.diff(function, to_mp(Fraction(re)), steps)
            assert abs(exact[k] - expected) < mpmath.mpf(10) ** -DIGITS * (1 + abs(expected))


# ------------------------------------------------------------------------- published values


def test_slope_of_the_loop_function_at_zero_momentum() -> None:
    """Gasser, Leutwyler, Nucl. Phys. B250 (1985) 465, appendix A (from memory).

    J'(0) = 1/(32 pi^2) [ Sigma/Delta^2 + 2 M^2 m^2/Delta^3 log(m^2/M^2) ], Sigma = M^2 + m^2,
    Delta = M^2 - m^2, and J'(0) = 1/(96 pi^2 M^2) for equal masses; J has 1/(16 pi^2), and the
    factor of the measure `two_pi` is the one of d0 = 4.
    """
    options = {"orders": (-1, 0), "measure": "two_pi", "derivatives": P}
    with mpmath.workdps(40):
        equal = loopint.bubble(0, 3, 3, **options)
        assert equal[-1] == 0
        assert abs(equal[0] - 1 / (96 * mpmath.pi**2 * 3)) < 1e-30
        a, b = mpmath.mpf(5), mpmath.mpf(2)
        total, gap = a + b, a - b
        expected = total / gap**2 + 2 * a * b / gap**3 * mpmath.log(b / a)
        different = loopint.bubble(0, 5, 2, **options)
        assert abs(different[0] - expected / (32 * mpmath.pi**2)) < 1e-30


def test_slope_on_shell_has_the_infrared_pole() -> None:
    """Wave-function renormalisation by a massless particle.

    dB0/dp^2 (m^2; 0, m) = -1/m^2 [1 + log(photon mass^2/m^2)/2] (Denner, arXiv:0709.1075, from
    memory), with log(photon mass^2) -> 1/eps + log mu^2 in dimensional regularisation.
    """
    series = loopint.bubble(3, 0, 3, orders=(-2, 0), derivatives=P, mu_squared=7)
    assert series.region == "on_shell_isolated"
    assert series[-2] == 0
    with mpmath.workdps(40):
        assert abs(series[-1] + mpmath.mpf(1) / 6) < 1e-30
        expected = -(1 + mpmath.log(mpmath.mpf(7) / 3) / 2) / 3
        assert abs(series[0] - expected) < 1e-30


def test_slope_of_the_imaginary_part() -> None:
    """Im B0 = pi sqrt(lambda)/p^2 above threshold (Cutkosky 1960); its slope at equal masses."""
    series = loopint.bubble(9, 1, 1, orders=(0, 0), derivatives=P)
    with mpmath.workdps(40):
        beta = mpmath.sqrt(mpmath.mpf(5) / 9)
        assert abs(series[0].imag - mpmath.pi * 2 / (81 * beta)) < 1e-30


def test_homogeneity() -> None:
    """Euler's theorem: scaling all of p^2, m1^2, m2^2 is scaling mu^2 the other way.

    (p^2 d/dp^2 + m1^2 d/dm1^2 + m2^2 d/dm2^2) B = (d/2 - n1 - n2) B with d = d0 - 2 eps.
    """
    point, powers = ("11/2", ("1", "-1/7"), "2"), (2, 1)
    options = {"powers": powers, "dimension": 6, "orders": (-1, 2), "digits": 40}
    series = loopint.bubble(*point, **options)
    with mpmath.workdps(50):
        scales = [mpmath.mpf("5.5"), mpmath.mpc(1, -mpmath.mpf(1) / 7), mpmath.mpf(2)]
        slopes = [loopint.bubble(*point, **options, derivatives=name) for name in (P, M1, M2)]
        for k in series:
            left = mpmath.fsum(s * slope[k] for s, slope in zip(scales, slopes, strict=True))
            right = -(series[k - 1] if k > -1 else 0)
            assert abs(left - right) < mpmath.mpf(10) ** -36


# ------------------------------------------------------------------------------- no limit


@pytest.mark.parametrize(
    ("point", "options", "region"),
    [
        ((4, 1, 1), {"derivatives": P}, "threshold_isolated"),
        ((4, 1, 1), {"derivatives": P, "dimension": 6}, "threshold"),
        ((4, 1, 1), {"derivatives": (P, P), "dimension": 6}, "threshold_isolated"),
        ((0, 1, 1), {"derivatives": P}, "zero_momentum"),
        ((1, 1, 4), {"derivatives": (P, M1)}, "pseudothreshold"),
        ((4, 0, 4), {"derivatives": P}, "on_shell_isolated"),
        ((4, 0, 4), {"derivatives": P, "dimension": 6}, "on_shell"),
        ((9, 0, 4), {"derivatives": M1}, "above_threshold_isolated"),
        ((9, 0, 4), {"derivatives": M2}, "above_threshold"),
        ((9, 0, 4), {"derivatives": M1, "dimension": 6}, "above_threshold"),
        ((0, 0, 0), {"derivatives": P}, "scaleless"),
    ],
)
def test_region_says_where_there_is_no_limit(point, options, region) -> None:
    assert loopint.bubble(*point, **options).region == region


def test_region_of_a_massless_tadpole() -> None:
    """A ~ m^(d0-2): the first derivative has no limit at m = 0 in d0 = 4, and has one in 6."""
    assert loopint.tadpole(0, derivatives="m_squared").region == "scaleless_isolated"
    assert loopint.tadpole(0, derivatives="m_squared", dimension=6).region == "scaleless"


@pytest.mark.parametrize(
    ("at", "near", "options"),
    [
        (("4", "1", "1"), ("4.{}1", "1", "1"), {"derivatives": P, "dimension": 6}),
        (("9", "0", "4"), ("9", "0.{}1", "4"), {"derivatives": M1, "dimension": 6}),
        (("4", "0", "4"), ("4.{}1", "0", "4"), {"derivatives": P, "dimension": 6}),
        (("1", "1", "4"), ("1.{}1", "1", "4"), {"derivatives": (P, M1)}),
    ],
)
def test_where_the_region_does_not_say_isolated_there_is_a_limit(at, near, options) -> None:
    exact = loopint.bubble(*at, orders=(-1, 0), **options)
    close = loopint.bubble(*(x.format("0" * 40) for x in near), orders=(-1, 0), **options)
    for k in exact:
        assert abs(exact[k] - close[k]) < 1e-17


def test_snapped_points_are_differentiated_where_they_were_moved() -> None:
    exact = loopint.bubble(1, 1, 4, derivatives=P)
    moved = loopint.bubble("1.0000000001", 1, 4, derivatives=P, snap_tolerance="1e-6")
    assert moved.region == "pseudothreshold_snapped"
    assert all(abs(exact[k] - moved[k]) < 1e-28 for k in exact)


def test_what_does_not_depend_on_the_variable_is_exactly_zero() -> None:
    for options in ({"powers": (0, 2), "derivatives": M1}, {"powers": (0, 2), "derivatives": P}):
        series = loopint.bubble(5, 1, 2, **options)
        assert series.method == "exact"
        assert all(series[k] == 0 and series.bounds[k] == 0 for k in series)


def test_the_empty_derivative_is_the_integral() -> None:
    a, b = loopint.bubble(5, 1, 2), loopint.bubble(5, 1, 2, derivatives=())
    assert a == b
    assert derivative_term((1, 1), 4, ()).coefficient == 1


@pytest.mark.parametrize(
    ("names", "words"),
    [
        (
            "m_squared",
            "'m_squared' is unknown; accepted: up to 4 names out of p_squared, m1_squared",
        ),
        ((P, "mu"), "'mu' is unknown"),
        ((P,) * 5, "accepted: up to 4 names"),
        (3, "derivatives = 3; accepted"),
        ((P, 1), "1 is unknown"),
    ],
)
def test_unusable_derivatives(names: object, words: str) -> None:
    with pytest.raises(loopint.InputError, match=words):
        check_derivatives(names, TWO_POINT_VARIABLES)
    with pytest.raises(loopint.InputError, match=words):
        loopint.bubble(5, 1, 2, derivatives=names)


# ------------------------------------------------------------------------------- pipeline

CONFIG = """
[points]
file = "{points}"
key = "point"
[[integral]]
name = "mixed"
family = "bubble"
orders = [-1, 1]
p_squared = "s"
m1 = "m_alder"
m2 = "m_cedar"
width2 = "0.01"
derivatives = {derivatives}
[[integral]]
name = "{other}"
family = "tadpole"
m = "m_alder"
derivatives = ["m_squared"]
[conventions]
measure = "two_pi"
propagator_sign = "euclidean"
mu_squared = 2
[cross_check]
fraction = "all"
arithmetic = "{arithmetic}"
[output]
directory = "{out}"
layout = "{layout}"
[execution]
workers = 1
"""
S = [-2.5, 1.0, 3.0, 9.0]
ALDER = [0.5, 1.0, 0.75, 1.25]
CEDAR = [1.5, 1.0, 0.25, 1.0]


def config(
    directory: Path,
    derivatives: str = '["p_squared", ["m2_squared", "p_squared"]]',
    other: str = "loop",
    layout: str = "long",
    arithmetic: str = "balls",
) -> Path:
    points = directory / "points.parquet"
    table = pa.table({"point": list("abcd"), "s": S, "m_alder": ALDER, "m_cedar": CEDAR})
    pq.write_table(table, points)
    path = directory / "run.toml"
    path.write_text(
        CONFIG.format(
            points=points.as_posix(),
            out=(directory / "out").as_posix(),
            derivatives=derivatives,
            other=other,
            layout=layout,
            arithmetic=arithmetic,
        )
    )
    return path


NAMES = {
    "mixed": (),
    "mixed_d_p_squared": (P,),
    "mixed_d_p_squared_m2_squared": (P, M2),
}


@pytest.mark.parametrize("arithmetic", ["balls", "mpmath"])
def test_run_writes_and_checks_derivatives(tmp_path: Path, arithmetic: str) -> None:
    outcome = run_config(load_config(config(tmp_path, arithmetic=arithmetic)))
    assert outcome.exit_code == 0
    table = pd.read_parquet(tmp_path / "out" / "table")
    assert list(table["integral"].unique()) == [*NAMES, "loop", "loop_d_m_squared"]
    options = {"measure": "two_pi", "propagator_sign": "euclidean", "mu_squared": 2}
    for i, key in enumerate("abcd"):
        alder, cedar = Fraction(ALDER[i]), Fraction(CEDAR[i])
        for name, derivatives in NAMES.items():
            series = loopint.bubble(
                S[i],
                alder**2,
                (cedar**2, -cedar / 100),
                orders=(-1, 1),
                derivatives=derivatives,
                **options,
            )
            rows = table[(table["point"] == key) & (table["integral"] == name)]
            assert list(rows["order"]) == [-1, 0, 1]
            for row in rows.itertuples():
                assert complex(row.re, row.im) == complex(series[row.order])
        slope = loopint.tadpole(alder**2, orders=(-1, 0), derivatives="m_squared", **options)
        rows = table[(table["point"] == key) & (table["integral"] == "loop_d_m_squared")]
        assert list(rows["re"]) == [float(slope[-1].real), float(slope[0].real)]
    checks = pd.read_parquet(tmp_path / "out" / "cross_check.parquet")
    assert set(checks["status"]) == {"ok"}
    assert set(checks["integral"]) == {*NAMES, "loop", "loop_d_m_squared"}
    assert set(outcome.summary["integrals"]) == {*NAMES, "loop", "loop_d_m_squared"}
    manifest = json.loads((tmp_path / "out" / "manifest.json").read_text())
    assert manifest["config"]["integral"][0]["derivatives"] == [[P], [P, M2]]


def test_wide_layout_has_columns_for_derivatives(tmp_path: Path) -> None:
    run_config(load_config(config(tmp_path, layout="wide")))
    table = pd.read_parquet(tmp_path / "out" / "table")
    assert np.all(np.isfinite(table["mixed_d_p_squared_0_re"]))
    assert np.all(table["mixed_d_p_squared_m1_re"] == 0)
    assert np.all(table["loop_d_m_squared_0_im"] == 0)


def test_a_derivative_without_quadrature_is_no_failure(tmp_path: Path) -> None:
    """In d0 = 12 the second derivative is an integral in 16 dimensions."""
    path = config(tmp_path, derivatives='[["p_squared", "p_squared"]]')
    path.write_text(path.read_text().replace("orders = [-1, 1]", "dimension = 12"))
    outcome = run_config(load_config(path))
    assert outcome.exit_code == 0
    assert outcome.summary["cross_check"]["disagrees"] == 0
    name = "mixed_d_p_squared_p_squared"
    assert outcome.summary["integrals"][name]["below_digits"] == 0


@pytest.mark.parametrize(
    ("derivatives", "other", "words"),
    [
        ('"p_squared"', "loop", 'derivatives = "p_squared"; accepted: an array'),
        (
            '["m_squared"]',
            "loop",
            "'m_squared' is unknown; accepted: up to 4 names out of p_squared",
        ),
        ("[[]]", "loop", "an empty entry"),
        (
            '[["p_squared", "m1_squared"], ["m1_squared", "p_squared"]]',
            "loop",
            r'derivatives has \["m1_squared", "p_squared"\] twice',
        ),
        ('["p_squared"]', "mixed_d_p_squared", 'name = "mixed_d_p_squared" is given 2 times'),
    ],
)
def test_unusable_configs(tmp_path: Path, derivatives: str, other: str, words: str) -> None:
    with pytest.raises(ConfigError, match=words):
        load_config(config(tmp_path, derivatives, other))


def test_point_command(capsys: pytest.CaptureFixture[str]) -> None:
    arguments = ["point", "bubble", "--p-squared", "5", "--m1", "1", "--m2", "1/2"]
    arguments += ["--derivative", M1, "--derivative", P, "--cross-check", "--json"]
    with pytest.raises(SystemExit) as exit_info:
        app(arguments)
    assert exit_info.value.code == 0
    found = json.loads(capsys.readouterr().out)
    assert found["derivatives"] == [P, M1]
    assert {check["status"] for check in found["cross_check"]} == {"ok"}
    series = loopint.bubble(5, 1, "1/4", orders=(0, 0), derivatives=(P, M1))
    with mpmath.workdps(40):
        assert abs(mpmath.mpf(found["coefficients"][1]["re"]) - series[0].real) < 1e-30
