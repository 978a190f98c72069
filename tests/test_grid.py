"""`loopint grid`: exact points from axes."""

from __future__ import annotations

from fractions import Fraction
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow.parquet as pq
import pytest

from loopint.pipeline.config import ConfigError, GridRunConfig, load_config_as
from loopint.pipeline.grid import picture, write_grid

HEAD = """
[points]
file = "{folder}/points.parquet"
[grid]
seed = 5
mode = "{mode}"
constants = {{ m = "1.1", n = "0.7", sum = "m + n" }}
thresholds = {{ high = "sum**2", low = "(m - n)**2" }}
"""


def make(folder: Path, axes: str, mode: str = "product", overwrite: bool = False):
    path = folder / "grid.toml"
    path.write_text(HEAD.format(folder=folder, mode=mode) + axes)
    return write_grid(load_config_as(GridRunConfig, path), overwrite=overwrite)


def axis(**keys: object) -> str:
    lines = []
    for key, value in keys.items():
        shown = repr(value).replace("'", '"')
        lines.append(f"{key.rstrip('_')} = {shown}")
    return "[[grid.axis]]\n" + "\n".join(lines) + "\n"


def test_linear_steps_are_exact_where_asked(tmp_path):
    grid = make(tmp_path, axis(name="s", from_="0.1", to="0.7", count=7, type="string"))
    table = pd.read_parquet(grid.path)
    assert [Fraction(text) for text in table["s"]] == [Fraction(i, 10) for i in range(1, 8)]
    assert table["point"].tolist() == list(range(1, 8))
    assert set(table["sum"]) == {"9/5"}


def test_product_and_zip(tmp_path):
    axes = axis(name="s", spacing="values", values=[1, 2]) + axis(
        name="t", spacing="values", values=["1/2", 3]
    )
    product = pd.read_parquet(make(tmp_path, axes).path)
    assert list(zip(product["s"], product["t"], strict=True)) == [
        (1, 0.5), (1, 3), (2, 0.5), (2, 3),
    ]  # fmt: skip
    zipped = pd.read_parquet(make(tmp_path, axes, "zip", overwrite=True).path)
    assert list(zip(zipped["s"], zipped["t"], strict=True)) == [(1, 0.5), (2, 3)]
    with pytest.raises(ConfigError, match="axes of 2, 3 values"):
        make(tmp_path, axes.replace('["1/2", 3]', "[1, 2, 3]"), "zip")


def test_clustered_points_approach_and_hit_the_thresholds(tmp_path):
    around = axis(
        name="s", spacing="clustered", from_=-2, to=9, count=200, around=["high", "low"],
        closest="1e-14", type="string",
    )  # fmt: skip
    values = [Fraction(text) for text in pd.read_parquet(make(tmp_path, around).path)["s"]]
    assert values == sorted(set(values))
    for place in (Fraction(324, 100), Fraction(16, 100)):
        assert place in values
        for side in (-1, 1):
            gaps = sorted(side * (v - place) for v in values if side * (v - place) > 0)
            assert gaps[0] < place * Fraction(11, 10**15)
            assert sum(gap < Fraction(1, 1000) for gap in gaps) > 10


@pytest.mark.parametrize("spacing", ["logarithmic", "chebyshev", "random"])
def test_other_spacings(tmp_path, spacing):
    grid = make(tmp_path, axis(name="s", spacing=spacing, from_="n", to=100, count=50))
    values = pd.read_parquet(grid.path)["s"].to_numpy()
    assert ((values > 0.6999999) & (values < 100.0000001)).all()
    if spacing == "logarithmic":
        assert np.allclose(np.diff(np.log(values)), np.log(100 / 0.7) / 49)
    if spacing == "chebyshev":
        nodes = (2 * values - 100.7) / 99.3
        expected = np.cos((2 * np.arange(50)[::-1] + 1) * np.pi / 100)
        assert np.allclose(nodes, expected)
    first = grid.path.read_bytes()
    assert make(tmp_path, axis(name="s", spacing=spacing, from_="n", to=100, count=50))
    assert grid.path.read_bytes() == first


def test_a_file_that_is_something_else_is_kept(tmp_path):
    axes = axis(name="s", from_=0, to=1, count=3)
    path = make(tmp_path, axes).path
    make(tmp_path, axes)  # the same grid
    with pytest.raises(ConfigError, match="does not hold this grid"):
        make(tmp_path, axes.replace("count = 3", "count = 4"))
    assert pq.read_metadata(path).num_rows == 3
    make(tmp_path, axes.replace("count = 3", "count = 4"), overwrite=True)
    assert pq.read_metadata(path).num_rows == 4


UNUSABLE = [
    (axis(name="s", from_=2, to=1, count=3), "from < to"),
    (axis(name="s", from_=0, to=1), "no count"),
    (axis(name="s", from_=0, to=1, count=3, values=[1]), "needless values"),
    (axis(name="s", spacing="logarithmic", from_=0, to=1, count=3), "no logarithm"),
    (axis(name="s", from_="k", to=1, count=3), "k is unknown"),
    (axis(name="m", from_=0, to=1, count=3), "given twice"),
    (axis(name="point", from_=0, to=1, count=3), "is a column and the key"),
    (axis(name="s", spacing="cluster", from_=0, to=1, count=3), "accepted:"),
    (
        axis(name="s", spacing="clustered", from_=0, to=1, count=9, around=["hig"]),
        "did you mean high?",
    ),
    (axis(name="s", nmae="s", from_=0, to=1, count=3), "did you mean name?"),
    ("", "axis"),
]


@pytest.mark.parametrize(("axes", "sentence"), UNUSABLE, ids=[s for _, s in UNUSABLE])
def test_unusable_grids(tmp_path, axes, sentence):
    with pytest.raises(ConfigError) as refused:
        make(tmp_path, axes)
    assert sentence in str(refused.value)
    assert not (tmp_path / "points.parquet").exists()


def test_many_rows_are_written_in_pieces(tmp_path):
    axes = axis(name="s", from_=0, to=1, count=700) + axis(name="t", from_=0, to=1, count=700)
    grid = make(tmp_path, axes)
    metadata = pq.read_metadata(grid.path)
    assert metadata.num_rows == grid.rows == 490_000
    assert metadata.num_row_groups == 3


def test_picture_marks_the_thresholds(tmp_path):
    grid = make(
        tmp_path,
        axis(name="s", spacing="clustered", from_=0, to=10, count=100, around=["high"]),
    )
    bars, ruler, legend = picture(grid.axes[0], grid.thresholds, 50)
    assert len(bars) == 50
    assert ruler.index("|") == 0  # low = 0.16
    assert ruler[16] == "|"  # high = 3.24
    assert legend == "| low = 0.16, | high = 3.24"
    assert bars[16] == "@"
