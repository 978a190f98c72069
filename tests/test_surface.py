"""Interpolants in p^2 and one mass: the proven error holds everywhere, files and exports."""

from __future__ import annotations

import json
import math
import shutil
import subprocess
from fractions import Fraction
from pathlib import Path

import mpmath
import numpy as np
import pytest

import loopint
from loopint.cli import main
from loopint.interpolation.build import build_interpolants
from loopint.interpolation.interpolant import InterpolantError
from loopint.interpolation.surface import threshold_distance
from loopint.interpolation.surface_bound import Ellipse, largest_modulus
from loopint.pipeline.config import ConfigError, InterpolationRunConfig, load_config_as

CONFIG = """
[[integral]]
name = "loop"
family = "bubble"
p_squared = "s"
{masses}
[conventions]
mu_squared = "{mu}"
measure = "{measure}"
[output]
directory = "{folder}"
[[interpolation]]
name = "made"
integral = "loop"
orders = [-1, 0]
range = {range}
mass = "{mass}"
mass_range = {mass_range}
constants = {{ b = "{b}" }}
{more}
"""
SETTINGS = {
    "masses": 'm1 = "a"\nm2 = "b"',
    "mu": "1",
    "measure": "msbar",
    "range": "[-3, 12]",
    "mass": "a",
    "mass_range": '["0.8", "1.5"]',
    "b": "0.7",
    "more": "",
}


def build(folder: Path, **changes: str):
    path = folder / "config.toml"
    path.write_text(CONFIG.format(folder=folder, **{**SETTINGS, **changes}))
    return build_interpolants(load_config_as(InterpolationRunConfig, path))[0]


@pytest.fixture(scope="module")
def saved(tmp_path_factory):
    """The folder of the first case, with its exports."""
    folder = tmp_path_factory.mktemp("surface")
    build(folder, more='exports = ["c", "text"]')
    return folder


@pytest.fixture(scope="module")
def surface(saved):
    return loopint.load_interpolant(saved / "made.json")


def points(made, other: float, count: int) -> tuple[np.ndarray, np.ndarray]:
    """Random ones, and the special curves and corners to the last bit and around it."""
    rng = np.random.default_rng(11)
    low, high = made.range
    m = rng.uniform(*made.mass_range, count)
    m[: count // 8] = rng.choice(made.mass_edges, count // 8)
    s = rng.uniform(low, high, count)
    near = rng.choice([-1, 1], count) * 10.0 ** rng.uniform(-17, -1, count)
    curves = [(m + other) ** 2, (m - other) ** 2, np.zeros(count), m**2, s, s]
    s = np.choose(rng.integers(0, len(curves), count), curves) + near * (rng.random(count) < 0.8)
    corners = np.array([(a, b) for a in made.range for b in made.mass_range])
    s, m = np.append(np.clip(s, low, high), corners[:, 0]), np.append(m, corners[:, 1])
    return s, m


CASES = [
    {},
    {"range": "[4, 30]", "measure": "plain"},
    {"range": "[-9, 1]", "mu": "100"},
    {"mass_range": '["0.05", "0.3"]', "b": "2", "range": "[0, 9]"},
    {"masses": 'm1_squared = "b"\nm2 = "a"', "b": "2", "mu": "1/7"},
    {"mass_range": '["1.2", "1.2000001"]', "range": '["3.60", "3.62"]'},
]


@pytest.mark.parametrize("case", CASES, ids=[str(case) for case in CASES])
def test_the_error_is_below_its_bound_everywhere(tmp_path, case):
    made = build(tmp_path, **case).interpolant
    settings = {**SETTINGS, **case}
    exchanged = "m1_squared" in settings["masses"]
    fixed = Fraction(settings["b"]) if exchanged else Fraction(settings["b"]) ** 2
    s, m = points(made, math.sqrt(fixed), 120)
    value = made(0, s, m)
    assert np.all(np.abs(made(-1, s, m) - 1) <= made.error_bounds[-1])
    for p, mass, found in zip(s.tolist(), m.tolist(), value, strict=True):
        squares = [Fraction(mass) ** 2, fixed]
        true = loopint.bubble(
            p,
            *(squares[::-1] if exchanged else squares),
            orders=(0, 0),
            digits=20,
            mu_squared=settings["mu"],
            measure=settings["measure"],
        )[0]
        assert abs(true - mpmath.mpmathify(complex(found))) <= made.error_bounds[0]
    assert made.error_bounds[0] <= 1e-11


def closed_form(v: mpmath.mpc, m: mpmath.mpc, other: float) -> mpmath.mpc:
    z = v / (2 * mpmath.sqrt(m * other))
    bracket = (m**2 - other**2) * mpmath.log(m / other)
    bracket += 4 * mpmath.sqrt(m * other) * v * mpmath.sqrt(1 - z * z) * mpmath.acos(z)
    return mpmath.log(m * other) - 2 + bracket / ((m + other) ** 2 - v * v)


def test_the_closed_form_is_the_integral_for_complex_masses_too():
    """Against mpmath's quadrature of log Q, whose argument stays off the cut at these points."""
    for v, m in [(0.5 + 0.1j, 1.2), (1.3 - 0.4j, 1.0 + 0.2j), (2.5 + 1j, 0.8 - 0.1j)]:
        v, m = mpmath.mpc(v), mpmath.mpc(m)  # noqa: PLW2901
        s = (m + 0.7) ** 2 - v * v
        direct = mpmath.quad(
            lambda x, s=s, m=m: mpmath.log(x * m**2 + (1 - x) * 0.49 - x * (1 - x) * s), [0, 0.5, 1]
        )
        assert abs(direct - closed_form(v, m, 0.7)) < 1e-9


@pytest.mark.parametrize("below", [True, False])
def test_the_bound_holds_inside_the_ellipses(below):
    variable, mass = Ellipse(0.6, 0.5, 2.5), Ellipse(1.2, 0.3, 2.5)
    bound = largest_modulus(variable, mass, 0.7, below)
    rng = np.random.default_rng(3)
    largest = 0.0
    for turns in rng.uniform(0, 2, (400, 2)).tolist():
        v, m = (
            one.centre + one.half * (one.rho * e + 1 / (one.rho * e)) / 2
            for one, e in zip((variable, mass), map(mpmath.expjpi, turns), strict=True)
        )
        largest = max(largest, abs(closed_form(v if below else -1j * v, m, 0.7)))
    assert largest < bound < 100 * largest


def test_no_bound_where_there_is_a_singularity():
    """v = -(m + M) is a pole of the second sheet: 1.9 is inside, and on a boundary."""
    assert largest_modulus(Ellipse(-1.9, 0.1, 2.0), Ellipse(1.2, 0.1, 2.0), 0.7, True) == math.inf


def test_distance_from_threshold_is_nearly_exact():
    """Against Fractions, where m + M, its square and the difference all round."""
    rng = np.random.default_rng(5)
    m, high = rng.uniform(0.1, 9, 500), 1.1
    low = 3e-17
    s = (m + high) ** 2 * (1 + rng.choice([0, 1e-16, -1e-16, 3e-12, 1.0], 500))
    found = threshold_distance(s, m, (high, low))
    for p, mass, distance in zip(s.tolist(), m.tolist(), found.tolist(), strict=True):
        t = (Fraction(mass) + Fraction(high) + Fraction(low)) ** 2
        true = t - Fraction(p)
        bound = 3 * Fraction(2) ** -53 * abs(true) + 20 * Fraction(2) ** -106 * t
        assert abs(Fraction(distance) - true) <= bound


def test_saved_and_loaded_again(tmp_path):
    made = build(tmp_path).interpolant
    loaded = loopint.load_interpolant(tmp_path / "made.json")
    assert isinstance(loaded, loopint.SurfaceInterpolant)
    s, m = points(made, 0.7, 500)
    for order in (-1, 0):
        assert np.array_equal(made(order, s, m), loaded(order, s, m))
    assert repr(made) == repr(loaded)
    assert "m2_squared = 49/100" in loaded._repr_html_()
    content = json.loads((tmp_path / "made.json").read_text())
    assert content["variables"] == ["p_squared", "a"]
    assert content["conventions"]["measure"] == "msbar"


def test_gradients_are_the_derivatives(surface):
    made = surface
    s, m = np.array([-2.0, 0.0, 1.0, 3.0, 9.0]), np.array([0.9, 1.0, 1.1, 1.2, 1.4])
    step = 1e-5
    by_s, by_m = made.gradient(0, s, m)
    assert by_s == pytest.approx((made(0, s + step, m) - made(0, s - step, m)) / (2 * step), 1e-7)
    assert by_m == pytest.approx((made(0, s, m + step) - made(0, s, m - step)) / (2 * step), 1e-7)


def test_points_outside_and_shapes(surface):
    made = surface
    assert made(0, [[1.0, 2.0]], [[0.9], [1.2], [1.4]]).shape == (3, 2)
    assert made(0, 1.0, 0.9).shape == ()
    assert made(0, [], []).shape == (0,)
    assert np.isnan(made(0, [1.0, 99.0, np.nan], 1.0, outside="nan")).tolist() == [
        False,
        True,
        True,
    ]
    for arguments, sentence in [
        ((0, 99.0, 1.0), r"p_squared = 99.0 is outside"),
        ((0, 1.0, 9.0), r"a = 9.0 is outside"),
        ((3, 1.0, 1.0), "order 3 is not in"),
        ((0, [1.0, 2.0], [1.0, 1.1, 1.2]), "do not fit"),
    ]:
        with pytest.raises(InterpolantError, match=sentence):
            made(*arguments)


UNUSABLE = [
    ({"mass": "zz"}, "a has no value"),
    ({"mass_range": "[0, 1]"}, "accepted: positive masses"),
    ({"mass_range": "[2, 1]"}, "two increasing numbers"),
    ({"masses": 'm1_squared = "a"\nm2 = "b"'}, "a has no value"),
    ({"more": "error = 1e-18"}, "error"),
    ({"mass_range": '["1e-9", "1e9"]'}, "pieces"),
]


@pytest.mark.parametrize(("changes", "sentence"), UNUSABLE, ids=[s for _, s in UNUSABLE])
def test_unusable_surfaces(tmp_path, changes, sentence):
    with pytest.raises(ConfigError) as refused:
        build(tmp_path, **changes)
    assert sentence in str(refused.value)


def test_mass_and_its_range_belong_together(saved, tmp_path):
    path = tmp_path / "config.toml"
    path.write_text((saved / "config.toml").read_text().replace('mass = "a"', ""))
    with pytest.raises(ConfigError, match="both or none"):
        build_interpolants(load_config_as(InterpolationRunConfig, path))


PROGRAM = """
#include <stdio.h>
#include "made.h"
int main(void)
{
    double s, m, v[6];
    while (scanf("%lf %lf", &s, &m) == 2) {
        if (made_value(0, s, m, v, v + 1, v + 2, v + 3, v + 4, v + 5)) printf("outside\\n");
        else printf("%.17g %.17g %.17g %.17g %.17g %.17g\\n", v[0], v[1], v[2], v[3], v[4], v[5]);
    }
    return made_value(7, 1.0, 1.0, v, v + 1, v + 2, v + 3, v + 4, v + 5) == 1 ? 0 : 1;
}
"""


@pytest.mark.parametrize(("compiler", "standard"), [("cc", "c99"), ("c++", "c++11")])
def test_header_compiles_and_gives_the_same(saved, surface, tmp_path, compiler, standard):
    if shutil.which(compiler) is None:
        pytest.skip(f"needs {compiler}")
    made = surface
    source = tmp_path / ("main.c" if standard == "c99" else "main.cpp")
    source.write_text(PROGRAM)
    binary = tmp_path / "main"
    subprocess.run(
        [compiler, f"-std={standard}", "-O2", "-Wall", "-Wextra", "-Werror", "-pedantic",
         f"-I{saved}", str(source), "-o", str(binary), "-lm"],
        check=True, capture_output=True, text=True,
    )  # fmt: skip
    s, m = points(made, 0.7, 200)
    text = "\n".join(f"{p!r} {mass!r}" for p, mass in zip(s.tolist(), m.tolist(), strict=True))
    text += "\n13 1\n1 2\n"
    done = subprocess.run([str(binary)], input=text, capture_output=True, text=True, check=True)
    *lines, first, second = done.stdout.splitlines()
    assert first == second == "outside"
    found = np.array([[float(x) for x in line.split()] for line in lines])
    assert np.abs(found[:, 0] + 1j * found[:, 1] - made(0, s, m)).max() < 1e-14
    away = np.abs(s - (m + 0.7) ** 2) > 1e-6
    for column, slope in zip((2, 4), made.gradient(0, s, m), strict=True):
        gap = np.abs(found[:, column] + 1j * found[:, column + 1] - slope)[away]
        assert np.all(gap < 1e-11 * np.abs(slope)[away].max())
    rows = np.loadtxt(saved / "made.txt")
    chosen = rows[(rows[:, 0] == 0) & (rows[:, 1] == -1)]
    assert np.array_equal(chosen[:, 8], made.below.coefficients[0].real.ravel())


def test_the_command_names_both_ranges(saved, monkeypatch, capsys):
    monkeypatch.setattr("sys.argv", ["loopint", "interpolate", str(saved / "config.toml")])
    with pytest.raises(SystemExit) as ended:
        main()
    assert ended.value.code == 0
    assert "p^2 from -3 to 12, a from 0.8 to 1.5" in " ".join(capsys.readouterr().out.split())
