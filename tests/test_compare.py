"""`loopint compare`: right formulas agree, and the mistakes of the trade are named."""

from __future__ import annotations

import json
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from loopint.cli import main
from loopint.pipeline.compare import compare_config
from loopint.pipeline.config import ConfigError, RunConfig, load_config

ROOT = Path(__file__).parents[1]
CONFIG = """
[points]
file = "{folder}/points.parquet"
[[integral]]
name = "loop"
family = "bubble"
powers = {powers}
orders = [-1, 1]
p_squared = "s"
m1_squared = "a"
m2_squared = "b"
derivatives = ["p_squared"]
[[integral]]
name = "mass"
family = "tadpole"
m_squared = "a"
[conventions]
mu_squared = "3/2"
[accuracy]
digits = {digits}
[output]
directory = "{folder}/run"
[[comparison]]
name = "mine"
{comparison}
"""
# 't Hooft, Veltman, Nucl. Phys. B153 (1979) 365, with p^2 + i0
LET = (
    'let = { R = "sqrt(kallen(p_squared + i0, m1_squared, m2_squared))", '
    'c = "m1_squared + m2_squared - p_squared - i0" }'
)
B0 = (
    "2 - log(m1*m2/mu_squared) + (m1_squared - m2_squared)/p_squared*log(m2/m1) "
    "+ R/p_squared*log((c + R)/(2*m1*m2))"
)
LOOP = f'integral = "loop"\n{LET}\nexpression = '


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    s = [-5.0, -0.25, 0.125, 1.5, 3.0, 6.0, 8.5, 9.5, 12.0, 40.0]
    n = len(s)
    points = {"s": s, "a": [1.0] * n, "b": [3.0 + i / 8 for i in range(n)]}
    points["other"] = np.linspace(1, 2, n)
    pq.write_table(pa.table(points), tmp_path / "points.parquet")
    return tmp_path


def compare(folder: Path, comparison: str, powers: str = "[1, 1]", digits: int = 16):
    (outcome,), path = compare_config(configured(folder, comparison, powers, digits))
    assert path == folder / "run" / "comparison.parquet"
    return outcome


def configured(
    folder: Path, comparison: str, powers: str = "[1, 1]", digits: int = 16
) -> RunConfig:
    path = folder / "config.toml"
    path.write_text(
        CONFIG.format(folder=folder, comparison=comparison, powers=powers, digits=digits)
    )
    return load_config(path)


@pytest.mark.parametrize("digits", [12, 16, 40])
def test_the_textbook_agrees_in_every_region(folder, digits):
    outcome = compare(folder, f'{LOOP}"{B0}"', digits=digits)
    assert outcome.agrees
    assert outcome.digits == min(digits, 30)
    assert {one.region for one in outcome.regions()} >= {
        "spacelike", "below_pseudothreshold", "below_threshold", "above_threshold",
    }  # fmt: skip
    assert not outcome.hints
    assert outcome.undecided_cuts == 0


MISTAKES = [
    (B0.replace("R/p", "conjugate(R)/p").replace("c + R", "conjugate(c + R)"), "p^2 - i0"),
    (f"-({B0})", "overall sign"),
    (f"({B0})/2", "a factor 1/2"),
    (f"({B0})*I*pi**2", "a factor i pi^2"),
    (f"({B0})/(16*pi**2)", "16 pi^2"),
    (f"re({B0})", "imaginary part is missing"),
    (B0.replace("/mu_squared", ""), "mu^2 is missing"),
    (f"{B0} - euler_gamma", "the measure is plain"),
    ("1", "it is the coefficient of eps^-1"),
    (f"{B0} + 5/3", "the difference is 5/3"),
    (f"({B0})*1.25", "the ratio is 5/4"),
    (f"{B0} + pi**2/6", "the difference is 1/6 pi^2"),
]


@pytest.mark.parametrize(("text", "named"), MISTAKES, ids=[name for _, name in MISTAKES])
def test_a_mistake_is_named(folder, text, named):
    outcome = compare(folder, f'{LOOP}"{text}"')
    assert not outcome.agrees
    assert any(named in hint.text for hint in outcome.hints), outcome.hints


def test_a_wrong_side_is_wrong_above_threshold_only(folder):
    other_side = LOOP.replace("+ i0", "x i0").replace("- i0", "+ i0").replace("x i0", "- i0")
    outcome = compare(folder, f'{other_side}"{B0}"')
    wrong = {one.region for one in outcome.regions() if one.disagreeing}
    assert wrong == {"above_threshold"}
    assert outcome.hints[0].regions == ("above_threshold",)


def test_other_measures_signs_and_masses_are_named(folder):
    measure = compare(
        folder,
        'integral = "loop"\norder = 1\nd_dimensional = "gamma(1 + eps)"\nregions = ["none"]',
    )
    assert not measure.rows
    swapped = compare(
        folder,
        'integral = "loop"\norder = 0\ncolumn = "other"',
        powers="[2, 1]",
    )
    assert not swapped.agrees


def test_exact_expressions_in_d_dimensions_are_expanded(folder):
    """A(1) = -Gamma(-1+eps) (m^2)^(1-eps) with minkowski sign: orders -1, 0, 1."""
    exact = "-exp(euler_gamma*eps)*gamma(-1 + eps)*m_squared*(m_squared/mu_squared)**(-eps)"
    for order in (-1, 0):
        outcome = compare(
            folder, f'integral = "mass"\norder = {order}\nd_dimensional = "{exact}"', digits=25
        )
        assert outcome.agrees, (order, outcome.disagreeing[:1])
    wrong = compare(
        folder,
        f'integral = "mass"\norder = 0\nd_dimensional = "gamma(1+eps)*({exact})"',
    )
    assert not wrong.agrees


def test_columns_of_numbers_and_derivatives(folder):
    run = compare(folder, f'{LOOP}"{B0}"')
    table = pd.read_parquet(folder / "run" / "comparison.parquet")
    assert table["agrees"].all()
    assert len(table) == len(run.rows) == 10
    points = pd.read_parquet(folder / "points.parquet")
    points["re"], points["im"] = table["proven_re"], table["proven_im"]
    points.to_parquet(folder / "points.parquet")
    numbers = 'integral = "loop"\ncolumn = "re"\ncolumn_imaginary = "im"'
    outcome = compare(folder, numbers)
    assert outcome.agrees
    assert outcome.digits == 10
    assert not compare(folder, 'integral = "loop"\ncolumn = "re"').agrees
    slope = compare(folder, 'integral = "loop_d_p_squared"\nexpression = "0"')
    assert not slope.agrees


UNUSABLE = [
    ('integral = "lop"\nexpression = "1"', "did you mean loop?"),
    ('integral = "loop"\norder = 4\nexpression = "1"', "order = 4 is not computed"),
    ('integral = "loop"', "nothing to compare with"),
    ('integral = "loop"\nexpression = "1"\ncolumn = "s"', "expression and column"),
    ('integral = "loop"\nexpression = "p_square"', "did you mean p_squared?"),
    ('integral = "loop"\nexpression = "os.system"', "is not allowed"),
    ('integral = "loop"\nexpression = "1"\ncolumn_imaginary = "s"', "needs column"),
    ('integral = "loop"\nexpresion = "1"', "did you mean expression?"),
    ('integral = "loop"\ncolumn = "t"', "t is unknown"),
]


@pytest.mark.parametrize(("comparison", "sentence"), UNUSABLE, ids=[s for _, s in UNUSABLE])
def test_unusable_comparisons(folder, comparison, sentence):
    with pytest.raises(ConfigError, match=r"\[\[comparison\]\]") as refused:
        compare_config(configured(folder, comparison))
    assert sentence in str(refused.value)


def test_rows_without_a_value_disagree(folder):
    outcome = compare(folder, 'integral = "loop"\nexpression = "1/(s - 3)"')
    assert [row for row, _ in outcome.failures] == [4]


def test_the_example_names_every_mistake(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    config = str(ROOT / "configs" / "compare.toml")
    codes = []
    for arguments in (["grid", config], ["compare", config, "--json"]):
        monkeypatch.setattr(sys, "argv", ["loopint", *arguments])
        try:
            main()
        except SystemExit as stop:
            codes.append(stop.code)
        out = capsys.readouterr().out
    assert codes == [3] or codes == [None, 3] or codes == [0, 3]
    found = {one["name"]: one for one in json.loads(out)["comparisons"]}
    assert found["textbook"]["agrees"]
    assert found["at_threshold"]["agrees"]
    expected = {
        "wrong_side": "p^2 - i0",
        "dropped_factor": "a factor 1/(16 pi^2)",
        "wrong_measure": "the measure is plain",
    }
    for name, text in expected.items():
        assert text in found[name]["hints"][0]["text"]
    assert found["wrong_side"]["hints"][0]["regions"] == ["above_threshold"]
