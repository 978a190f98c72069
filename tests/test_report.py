"""The page of a run: complete, self-contained, accessible, and honest about what is missing."""

from __future__ import annotations

import json
import re
import shutil
import subprocess
import sys
from html.parser import HTMLParser
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from loopint import cli
from loopint.cli import main
from loopint.pipeline.config import load_config
from loopint.pipeline.run import run_config
from loopint.report import write_report
from loopint.report.errors import ReportError
from loopint.report.records import read_rejections
from loopint.report.run_data import SAMPLED_POINTS, load_run
from loopint.report.scan import Scan
from loopint.report.table import STEPS

CONFIG = """
title = "Alder <script>alert(1)</script> & birch"
[points]
file = "{folder}/points.parquet"
key = "id"
[[integral]]
name = "self_energy"
family = "bubble"
p_squared = "s"
m1_squared = 1
m2_squared = "m"
orders = [-1, 1]
[[integral]]
name = "mass"
family = "tadpole"
m_squared = "m"
[accuracy]
digits = {digits}
[cross_check]
fraction = 0.2
[output]
directory = "{folder}/run"
layout = "{layout}"
"""
CHROMIUM = shutil.which("chromium") or shutil.which("google-chrome")


class Page(HTMLParser):
    """Collects what the tests look at."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.open: list[str] = []
        self.text = ""
        self.feed(text)

    def handle_starttag(self, tag, attrs):
        self.tags.append((tag, dict(attrs)))

    def handle_data(self, data):
        self.text += data

    def all(self, tag: str) -> list[dict[str, str | None]]:
        return [attributes for name, attributes in self.tags if name == tag]

    @classmethod
    def of(cls, run: Path) -> Page:
        return cls(write_report(run).read_text(encoding="utf-8"))


def run_points(folder: Path, columns: dict[str, object], integrals: str, rest: str = "") -> Path:
    """Evaluate points without cross-check; return the directory of the run."""
    pq.write_table(pa.table(columns), folder / "points.parquet")
    path = folder / "run.toml"
    path.write_text(
        f'[points]\nfile = "{folder}/points.parquet"\n{integrals}\n{rest}\n'
        f'[cross_check]\nfraction = "none"\n[output]\ndirectory = "{folder}/run"\n'
    )
    run_config(load_config(path), workers=1, overwrite=True)
    return folder / "run"


def bubble(name: str = "b", **keys: object) -> str:
    lines = {"p_squared": '"s"', "m1_squared": 1, "m2_squared": '"m"', **keys}
    described = "\n".join(f"{key} = {value}" for key, value in lines.items())
    return f'[[integral]]\nname = "{name}"\nfamily = "bubble"\n{described}\n'


def make_run(folder: Path, layout: str = "long", digits: int = 16, rows: int = 60) -> Path:
    ids = [f"<b>{i}</b>" for i in range(rows)]
    s = [float(i) / 4 - 3 for i in range(rows)]
    masses = [2.25] * rows
    if rows > 3:
        masses[1] = -1.0
    pq.write_table(pa.table({"id": ids, "s": s, "m": masses}), folder / "points.parquet")
    path = folder / "run.toml"
    path.write_text(CONFIG.format(folder=folder, layout=layout, digits=digits))
    run_config(load_config(path), workers=1)
    return folder / "run"


@pytest.mark.parametrize("layout", ["long", "wide"])
@pytest.mark.parametrize("digits", [12, 16, 25])
def test_page_tells_what_the_run_did(tmp_path, layout, digits):
    path = write_report(make_run(tmp_path, layout, digits))
    text = path.read_text(encoding="utf-8")
    page = Page(text)
    assert re.search(r"59\s*in the table", page.text)
    for word in ("self_energy", "above_threshold", "Rejected rows", "negative", "exp(γE ε)"):
        assert word in page.text, word
    figures = page.all("svg")
    assert len(figures) == 3  # coefficients, bounds, agreement; the tadpole is constant
    assert all(f["role"] == "img" and f["aria-label"] for f in figures)
    assert page.all("title")  # of the page and of each figure
    assert "ε⁻¹ is 2.25 in every row" in page.text  # the pole of the tadpole is m^2
    assert "pseudothreshold" in page.text
    ids = [attributes["id"] for _, attributes in page.tags if "id" in attributes]
    assert len(ids) == len(set(ids))
    assert all(
        f"#{used}" not in text or used in ids for used in re.findall(r'href="#([^"]+)', text)
    )
    assert ("The decimal strings carry 25 digits" in page.text) == (digits == 25)


def test_page_loads_nothing_and_escapes_everything(tmp_path):
    text = write_report(make_run(tmp_path)).read_text(encoding="utf-8")
    page = Page(text)
    assert "script" not in {tag for tag, _ in page.tags}
    assert "&lt;b&gt;1&lt;/b&gt;" in text  # a rejected key
    assert "<b>1</b>" in page.text
    for tag, attributes in page.tags:
        assert tag not in {"link", "img", "iframe", "object"}
        for name in ("src", "href", "xlink:href"):
            assert not re.match(r"https?:|//", attributes.get(name) or "")
    assert "url(http" not in text
    assert "@import" not in text
    assert page.all("th")
    assert all(a.get("scope") for tag, a in page.tags if tag == "th")


def test_same_files_give_the_same_page(tmp_path):
    run = make_run(tmp_path)
    first = write_report(run).read_bytes()
    assert write_report(run).read_bytes() == first


def test_points_that_have_changed_are_not_used(tmp_path):
    run = make_run(tmp_path)
    pq.write_table(pa.table({"s": [1.0]}), tmp_path / "points.parquet")
    text = write_report(run).read_text(encoding="utf-8")
    assert "has changed" in text
    (tmp_path / "points.parquet").unlink()
    assert "could not be read" in write_report(run).read_text(encoding="utf-8")


def test_without_a_key_rows_are_counted(tmp_path):
    make_run(tmp_path)
    path = tmp_path / "run.toml"
    path.write_text(path.read_text().replace('key = "id"', "").replace("/run", "/other"))
    run_config(load_config(path), workers=1)
    page = Page(write_report(tmp_path / "other").read_text(encoding="utf-8"))
    assert "Least certain coefficients" in page.text


def test_a_page_that_fails_does_not_fail_the_run(tmp_path, monkeypatch, capsys):
    run = make_run(tmp_path)
    monkeypatch.setattr("loopint.report.write_report", lambda _: 1 / 0)
    assert cli._try_report(run) is None
    assert "the run is complete, but report.html is not" in capsys.readouterr().err


def test_one_row_and_no_row(tmp_path):
    run = make_run(tmp_path, rows=1)
    assert "ε⁻¹ is 1 in every row" in Page.of(run).text
    pq.write_table(pa.table({"id": ["a"], "s": [1.0], "m": [-1.0]}), tmp_path / "points.parquet")
    run_config(load_config(tmp_path / "run.toml"), workers=1, overwrite=True)
    page = Page.of(run)
    assert "No row could be evaluated" in page.text
    assert "1 × m2_squared = … is negative; accepted: real m^2 >= 0" in page.text


def test_what_is_no_finished_run_is_refused(tmp_path, capsys, monkeypatch):
    with pytest.raises(ReportError, match=r"manifest.json does not exist"):
        write_report(tmp_path)
    run = make_run(tmp_path)
    manifest = run / "manifest.json"
    content = json.loads(manifest.read_text())
    manifest.write_text(json.dumps({**content, "state": "running"}))
    with pytest.raises(ReportError, match="unfinished"):
        write_report(run)
    manifest.write_text(json.dumps(content))
    next((run / "table").iterdir()).write_bytes(b"PAR1 no")
    with pytest.raises(ReportError, match="cannot be read as a run"):
        write_report(run)
    manifest.write_text("[")
    with pytest.raises(ReportError, match="cannot be read"):
        write_report(run)
    monkeypatch.setattr(sys, "argv", ["loopint", "report", str(tmp_path / "nothing")])
    with pytest.raises(SystemExit) as stop:
        main()
    assert stop.value.code == 2
    assert "accepted: the directory of a finished" in capsys.readouterr().err


def test_failed_cross_checks_are_listed(tmp_path):
    run = make_run(tmp_path)
    path = run / "cross_check.parquet"
    table = pq.read_table(path)
    assert "disagrees" not in Page.of(run).text
    status = ["disagrees", "inconclusive", *table.column("status").to_pylist()[2:]]
    place = table.schema.get_field_index("status")
    pq.write_table(table.set_column(place, table.schema.field(place), [status]), path)
    page = Page.of(run)
    assert re.search(r"disagrees\s*\d", page.text)
    assert re.search(r"inconclusive\s*\d", page.text)


def test_curves_of_few_parameters_and_maps_of_many(tmp_path):
    s, m = np.meshgrid(np.linspace(-5, 20, 21), [0.5, 1.0, 2.0])
    page = Page.of(run_points(tmp_path, {"s": s.ravel(), "m": m.ravel()}, bubble()))
    assert "curves, strong to pale: m = 0.5, 1, 2" in page.text
    s, m = np.meshgrid(np.linspace(-5, 20, 21), np.linspace(0.1, 4, 12))
    for keep in (slice(None), slice(None, None, 2)):  # a full grid, and points of it
        points = {"s": s.ravel()[keep], "m": m.ravel()[keep]}
        page = Page.of(run_points(tmp_path, points, bubble()))
        figure = page.all("svg")[0]
        assert figure["aria-label"] == "maps of the coefficients of b over p_squared = s"
        assert "ε⁰, imaginary part" in page.text
        assert all(image["xlink:href"].startswith("data:image/png") for image in page.all("image"))


def test_more_varying_columns_are_dots_and_named(tmp_path):
    rng = np.random.default_rng(1)
    points = {"s": rng.uniform(-3, 9, 40), "m": rng.uniform(1, 2, 40), "k": rng.uniform(1, 2, 40)}
    page = Page.of(run_points(tmp_path, points, bubble(m1_squared='"k"')))
    assert "every dot is a point; k, m vary too" in page.text
    page = Page.of(run_points(tmp_path, points, bubble(), '[conventions]\nmu_squared = "k"'))
    assert "every dot is a point; k, m vary too" in page.text


def test_a_mass_is_the_abscissa_if_p_squared_is_fixed(tmp_path):
    run = run_points(tmp_path, {"m": np.linspace(1, 2, 9)}, bubble(p_squared=3))
    (scan,) = load_run(run).scans.values()
    assert scan.label == "m2_squared = m"
    assert not scan.parameters
    assert not scan.thresholds
    np.testing.assert_array_equal(scan.abscissa, np.linspace(1, 2, 9))


def test_thresholds_come_from_the_masses(tmp_path):
    masses = 'm1 = 1\nm2 = "m"\n'
    text = bubble().replace('m1_squared = 1\nm2_squared = "m"\n', masses)
    run = run_points(tmp_path, {"s": [1.0, 2.0, 3.0], "m": [0.0, 1.0, 3.0]}, text)
    scan = load_run(run).scans["b"]
    np.testing.assert_array_equal(scan.thresholds["threshold"], [1, 4, 16])
    np.testing.assert_array_equal(scan.thresholds["pseudothreshold"], [np.nan, np.nan, 4])
    width = text.replace("m2 =", "width1 = 0.1\nm2 =")
    run = run_points(tmp_path, {"s": [1.0, 2.0, 3.0], "m": [0.0, 1.0, 3.0]}, width)
    assert not load_run(run).scans["b"].thresholds


def test_curves_are_ordered_by_the_abscissa():
    scan = Scan("x", np.array([3.0, 1.0, 2.0, 0.0]), {"m": np.array([1.0, 1.0, 2.0, 2.0])})
    curves = scan.curves()
    assert curves is not None
    assert [list(places) for places in curves] == [[1, 0], [3, 2]]
    assert scan.parameter_sets(curves) == "m = 1, 2"
    many = Scan("x", np.arange(50.0), {"m": np.arange(50.0)})
    assert many.curves() is None


def test_everything_is_counted_and_a_sample_is_drawn(tmp_path):
    rows = 2 * SAMPLED_POINTS + 10
    points = {"s": np.linspace(-30, 30, rows), "m": np.full(rows, 2.0)}
    run = run_points(tmp_path, points, bubble(orders=[0, 0]), "[execution]\nchunk_rows = 1000")
    data = load_run(run)
    assert data.sampled_rows.size <= SAMPLED_POINTS
    np.testing.assert_array_equal(np.diff(data.sampled_rows), 3)
    coefficient = data.table.coefficients["b"][0]
    assert data.table.bounds.total() + coefficient.exact == rows
    table = pa.concat_tables(map(pq.read_table, sorted((run / "table").iterdir())))
    re = table.column("re").to_numpy()
    np.testing.assert_array_equal(coefficient.values()[0], re[data.sampled_rows])
    bound = np.hypot(table.column("re_bound").to_numpy(), table.column("im_bound").to_numpy())
    relative = bound / np.hypot(re, table.column("im").to_numpy())
    decade = np.count_nonzero((relative > 1e-17) & (relative <= 1e-16))
    assert sum(data.table.bounds[n] for n in range(-17 * STEPS + 1, -16 * STEPS + 1)) == decade
    digits = table.column("digits").to_numpy()
    assert [u.digits for u in data.table.uncertain] == sorted(digits)[:10]
    assert f"{data.sampled_rows.size:,} of {rows:,} rows" in Page.of(run).text


def test_reasons_are_counted_without_their_numbers(tmp_path):
    points = {"s": [1.0] * 80, "m": [1.0] * 10 + [-float(i) for i in range(1, 71)]}
    run = run_points(tmp_path, points, bubble())
    found, accepted = read_rejections(run, 80)
    assert found.reasons == [("m2_squared = … is negative; accepted: real m^2 >= 0", 70)]
    assert list(np.flatnonzero(accepted)) == list(range(10))
    assert "The first 50 of 70" in Page.of(run).text


def test_hundreds_of_integrals_are_listed_and_some_drawn(tmp_path):
    many = "".join(bubble(f"b{n}", m2_squared=n + 1, orders=[0, 0]) for n in range(100))
    page = Page.of(run_points(tmp_path, {"s": [1.0, 2.0, 3.0]}, many))
    assert "88 more integrals are in the table and not drawn" in page.text
    assert "b99" in page.text


def test_numbers_of_any_size_can_be_drawn(tmp_path):
    size = np.logspace(-200, 250, 30)
    tadpole = '[[integral]]\nname = "t"\nfamily = "tadpole"\ndimension = 8\nm_squared = "m"\n'
    points = {"s": np.where(np.arange(30) % 2, size, -size), "m": size}
    page = Page.of(run_points(tmp_path, points, tadpole + bubble(m1_squared='"m"')))
    assert "numbers beyond 10¹⁰⁰ are not drawn" in page.text


def test_the_formula_follows_the_conventions(tmp_path):
    conventions = '[conventions]\nmeasure = "two_pi"\npropagator_sign = "euclidean"'
    page = Page.of(run_points(tmp_path, {"s": [1.0, 2.0], "m": [1.0, 1.0]}, bubble(), conventions))
    assert "∫ ddq/(i (2π)d) [m12 − q² − i0]−n₁" in page.text.replace("m1²", "m12")
    assert "N(ε)" not in page.text
    assert "A(n)" not in page.text


def test_slowest_evaluations_and_sources(tmp_path):
    dotted = bubble(powers=[2, 1]).replace('name = "b"', 'name = "dotted"')
    page = Page.of(run_points(tmp_path, {"s": [1.0, 2.0], "m": [1.0, 1.0]}, bubble()))
    assert "Slowest evaluations" in page.text
    assert "hep-th/9606018" not in page.text
    (tmp_path / "more").mkdir()
    page = Page.of(run_points(tmp_path / "more", {"s": [1.0, 2.0], "m": [1.0, 1.0]}, dotted))
    assert "hep-th/9606018" in page.text  # recurrences for the dot
    assert "Boos" not in page.text


def test_coefficients_that_are_exact_need_no_histogram(tmp_path):
    text = bubble(orders=[-1, -1])  # the pole is 1
    page = Page.of(run_points(tmp_path, {"s": [1.0, 2.0], "m": [1.0, 1.0]}, text))
    assert "All coefficients are exact" in page.text
    assert not page.all("svg")


@pytest.mark.skipif(CHROMIUM is None, reason="needs Chromium")
def test_page_renders_without_console_errors(tmp_path):
    path = write_report(make_run(tmp_path))
    shot = tmp_path / "page.png"
    done = subprocess.run(
        [
            CHROMIUM, "--headless", "--no-sandbox", "--disable-gpu", "--enable-logging=stderr",
            f"--user-data-dir={tmp_path / 'profile'}", "--window-size=390,900",
            f"--screenshot={shot}", path.as_uri(),
        ],
        capture_output=True, text=True, timeout=60, check=False,
    )  # fmt: skip
    assert "CONSOLE" not in done.stderr
    assert shot.stat().st_size > 5000
