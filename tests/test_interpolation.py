"""Interpolants: the proven error holds everywhere, files, exports and the example fit."""

from __future__ import annotations

import importlib.util
import json
import shutil
import subprocess
import sys
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest

import loopint
from loopint.cli import main
from loopint.core.conventions import Conventions
from loopint.interpolation.analyticity import Sheets, coefficient_bound
from loopint.interpolation.build import build_interpolants
from loopint.interpolation.files import load_interpolant
from loopint.interpolation.interpolant import InterpolantError
from loopint.pipeline.config import ConfigError, InterpolationRunConfig, load_config_as

ROOT = Path(__file__).parents[1]
CONFIG = """
[[integral]]
name = "loop"
family = "bubble"
p_squared = "s"
m1 = "a"
m2_squared = "b"
[[integral]]
name = "dotted"
family = "bubble"
powers = [2, 1]
p_squared = "s"
m1 = 1
m2 = 2
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
constants = {{ a = "{a}", b = "{b}" }}
{more}
"""


def build(folder: Path, **changes: str):
    settings = {"mu": "1", "measure": "msbar", "range": "[-20, 60]", "a": "1.2", "b": "4"}
    settings |= {"more": "", **changes}
    path = folder / "config.toml"
    path.write_text(CONFIG.format(folder=folder, **settings))
    return build_interpolants(load_config_as(InterpolationRunConfig, path))[0]


CASES = [
    {},
    {"range": "[-100, 3]"},
    {"range": "[11, 300]"},
    {"range": "[10.2, 10.3]"},
    {"a": "0.1", "b": "9", "range": "[0, 30]"},
    {"a": "0.001", "b": "1", "range": "[-2, 3]"},
    {"mu": "100", "range": "[-5, 40]"},
    {"measure": "plain"},
    {"b": "0", "range": "[-20, 30]"},
    {"a": "0", "range": "[3.9, 4.1]", "measure": "plain"},
    {"b": "0", "range": "[1.5, 1.6]", "mu": "50"},
    {"b": "0", "range": "[-1e6, 1]"},
    {"a": "0.001", "b": "0", "range": "[-3, 7]"},
    {"measure": "two_pi", "mu": "1/7"},
]


@pytest.mark.parametrize("case", CASES, ids=[str(case) for case in CASES])
def test_the_error_is_below_its_bound_everywhere(tmp_path, case):
    made = build(tmp_path, **case).interpolant
    settings = {"mu": "1", "measure": "msbar", "a": "1.2", "b": "4", **case}
    threshold = (float(settings["a"]) + float(settings["b"]) ** 0.5) ** 2
    low, high = made.range
    points = np.concatenate(
        [
            np.random.default_rng(4).uniform(low, high, 60),
            made.edges,
            threshold
            + np.array(
                [0, 1e-15, -1e-15, 1e-19, -1e-19, 1e-18, 1e-12, -1e-12, 1e-6, -1e-6, 0.01, -0.01]
            ),
        ]
    )
    points = points[(points >= low) & (points <= high)]
    for order in (-1, 0):
        values = made(order, points)
        for s, value in zip(points.tolist(), values, strict=True):
            true = loopint.bubble(
                s,
                str(Fraction(settings["a"]) ** 2),
                settings["b"],
                orders=(order, order),
                digits=20,
                mu_squared=settings["mu"],
                measure=settings["measure"],
            )
            assert abs(complex(true[order]) - value) <= made.error_bounds[order] + 1e-17
    assert made.error_bounds[0] <= 1e-11


def test_the_bound_on_both_sheets_holds_on_the_first():
    """|B| on the cut, from both sides, is below the bound that the proof uses."""
    sheets = Sheets(9.0, 2 * np.sqrt(2.0))
    for s in (-50.0, -1.0, 0.1, 5.0, 8.99, 9.01, 40.0):
        value = abs(complex(loopint.bubble(s, 1, 4, orders=(0, 0))[0]))
        assert value < coefficient_bound(
            sheets.bound(True, 0.0, np.sqrt(abs(9 - s)) + 0.1), Conventions()
        )


def test_saved_and_loaded_again(tmp_path):
    made = build(tmp_path)
    loaded = loopint.load_interpolant(tmp_path / "made.json")
    s = np.linspace(-20, 60, 7).reshape(7, 1)
    assert np.array_equal(loaded(0, s), made.interpolant(0, s))
    assert loaded(0, s).shape == (7, 1)
    assert loaded(0, 3.0).shape == ()
    assert loaded.conventions["mu_squared"] == "1"
    assert "pieces" in repr(loaded)
    assert "<table>" in loaded._repr_html_()
    first = [file.read_bytes() for file in made.files]
    assert [file.read_bytes() for file in build(tmp_path).files] == first


def test_gradient_is_the_derivative(tmp_path):
    made = build(tmp_path).interpolant
    s = np.array([-15.0, 0.0, 9.0, 10.4, 12.0, 50.0])
    slopes = made.gradient(0, s)
    for point, slope in zip(s.tolist(), slopes, strict=True):
        true = loopint.bubble(point, "1.44", 4, orders=(0, 0), derivatives="p_squared")[0]
        assert abs(complex(true) - slope) < 1e-8 * abs(slope)
    assert np.all(made.gradient(-1, s) == 0)


def test_outside_the_range(tmp_path):
    made = build(tmp_path).interpolant
    with pytest.raises(InterpolantError, match=r"p_squared = 61.0 is outside .* accepted: -20"):
        made(0, [1.0, 61.0])
    with pytest.raises(InterpolantError, match="order 2 is not"):
        made(2, 1.0)
    values = made(0, [1.0, 61.0, np.nan], outside="nan")
    assert np.isnan(values).tolist() == [False, True, True]


def test_the_ends_are_the_numbers_that_were_written(tmp_path):
    for text in ("0.1", "0.7", "1/3", "2.3", "-0.3"):
        end = float(Fraction(text))
        made = build(tmp_path, range=f'["{text}", 60]').interpolant
        assert made.range[0] == end
        made(0, end)
        made = build(tmp_path, range=f'[-20, "{text}"]').interpolant
        assert made.range[1] == end
        made(0, end)


def test_damaged_files_are_refused(tmp_path):
    build(tmp_path)
    path = tmp_path / "made.json"
    content = json.loads(path.read_text())
    (tmp_path / "made.parquet").write_bytes(b"PAR1")
    with pytest.raises(InterpolantError, match="does not belong"):
        load_interpolant(path)
    path.write_text(json.dumps({**content, "format": 9}))
    with pytest.raises(InterpolantError, match="format 9"):
        load_interpolant(path)
    path.write_text("{")
    with pytest.raises(InterpolantError, match="cannot be loaded"):
        load_interpolant(path)
    with pytest.raises(InterpolantError, match="does not exist"):
        load_interpolant(tmp_path / "other.json")


UNUSABLE = [
    ({"range": "[3, 1]"}, "two increasing numbers"),
    ({"range": '[0, "1e400"]'}, "range holds a number beyond the range of float64"),
    ({"a": "0", "b": "0"}, "both masses are zero"),
    ({"a": "-1"}, "accepted: positive masses"),
    ({"more": "error = 1e-18"}, "is not reached"),
    ({"more": "ordres = [0]"}, "did you mean orders?"),
]


@pytest.mark.parametrize(("changes", "sentence"), UNUSABLE, ids=[s for _, s in UNUSABLE])
def test_unusable_interpolations(tmp_path, changes, sentence):
    with pytest.raises(ConfigError) as refused:
        build(tmp_path, **changes)
    assert sentence in str(refused.value)


@pytest.mark.parametrize(
    ("old", "new", "sentence"),
    [
        ('integral = "loop"', 'integral = "dotted"', "no proven interpolation"),
        ('integral = "loop"', 'integral = "lop"', "did you mean loop?"),
        ("orders = [-1, 0]", "orders = [1]", "orders has 1; accepted: -1 and 0"),
        ('m1 = "a"', 'm1 = "a"\nwidth1 = 1', "is complex"),
        ('m1 = "a"', 'm1 = "c"', "c has no value"),
        ('p_squared = "s"\nm1 = "a"', 'p_squared = "2*s"\nm1 = "a"', "which is the variable"),
    ],
)
def test_what_is_not_covered_is_refused(tmp_path, old, new, sentence):
    build(tmp_path)
    path = tmp_path / "config.toml"
    path.write_text(path.read_text().replace(old, new))
    with pytest.raises(ConfigError) as refused:
        build_interpolants(load_config_as(InterpolationRunConfig, path))
    assert sentence in str(refused.value)


PROGRAM = """
#include <stdio.h>
#include "made.h"
int main(void)
{
    double s, re, im, re_slope, im_slope;
    while (scanf("%lf", &s) == 1) {
        if (made_value(0, s, &re, &im, &re_slope, &im_slope)) printf("outside\\n");
        else printf("%.17g %.17g %.17g %.17g\\n", re, im, re_slope, im_slope);
    }
    return made_value(7, 1.0, &re, &im, &re_slope, &im_slope) == 1 ? 0 : 1;
}
"""


@pytest.mark.parametrize(("compiler", "standard"), [("cc", "c99"), ("c++", "c++11")])
def test_header_compiles_and_gives_the_same(tmp_path, compiler, standard):
    if shutil.which(compiler) is None:
        pytest.skip(f"needs {compiler}")
    made = build(tmp_path, more='exports = ["c", "text"]').interpolant
    source = tmp_path / ("main.c" if standard == "c99" else "main.cpp")
    source.write_text(PROGRAM)
    binary = tmp_path / "main"
    subprocess.run(
        [compiler, f"-std={standard}", "-O2", "-Wall", "-Wextra", "-Werror", "-pedantic",
         str(source), "-o", str(binary), "-lm"],
        check=True, capture_output=True, text=True,
    )  # fmt: skip
    points = np.linspace(-20, 60, 101)
    text = "\n".join(repr(float(s)) for s in [*points, 61.0])
    done = subprocess.run([str(binary)], input=text, capture_output=True, text=True, check=True)
    *lines, outside = done.stdout.splitlines()
    assert outside == "outside"
    found = np.array([[float(x) for x in line.split()] for line in lines])
    value, slope = made(0, points), made.gradient(0, points)
    assert np.abs(found[:, 0] + 1j * found[:, 1] - value).max() < 1e-14
    assert np.abs(found[:, 2] + 1j * found[:, 3] - slope).max() < 1e-11


def test_text_table_holds_the_coefficients(tmp_path):
    made = build(tmp_path, more='exports = ["text"]').interpolant
    rows = np.loadtxt(tmp_path / "made.txt")
    chosen = rows[rows[:, 0] == 0]
    assert np.array_equal(chosen[:, 6], made.coefficients[0].real.ravel())
    assert np.array_equal(chosen[:, 7], made.coefficients[0].imag.ravel())


def test_the_example_fit_recovers_its_parameters(tmp_path, monkeypatch, capsys):
    pytest.importorskip("iminuit")
    monkeypatch.chdir(tmp_path)
    config = str(ROOT / "configs" / "interpolate.toml")
    monkeypatch.setattr(sys, "argv", ["loopint", "interpolate", config])
    try:
        main()
    except SystemExit as stop:
        assert not stop.code  # noqa: PT017
    assert "everywhere (proven)" in capsys.readouterr().out
    spec = importlib.util.spec_from_file_location("fit", ROOT / "configs" / "fit_line_shape.py")
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    result = module.fit()
    assert result.valid
    assert result.ngrad > 0
    for name, true in (("mass", module.TRUE_MASS), ("coupling", module.TRUE_COUPLING)):
        assert abs(result.values[name] - true) < 3 * result.errors[name]
