"""The page of a run: complete, self-contained, accessible, and honest about what is missing."""

from __future__ import annotations

import json
import re
import shutil
import subprocess
import sys
from html.parser import HTMLParser
from pathlib import Path

import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from loopint import cli
from loopint.cli import main
from loopint.pipeline.config import load_config
from loopint.pipeline.run import run_config
from loopint.report import write_report
from loopint.report.run_data import ReportError

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
    for word in ("self_energy", "above_threshold", "Rejected rows", "negative", "exp(γ_E ε)"):
        assert word in page.text, word
    figures = [attributes for tag, attributes in page.tags if tag == "svg"]
    assert len(figures) == 3  # coefficients, bounds, agreement; the tadpole is constant
    assert all(f["role"] == "img" and f["aria-label"] for f in figures)
    assert "the same in every row" in page.text
    assert "dashed: threshold" in page.text


def test_page_loads_nothing_and_escapes_everything(tmp_path):
    text = write_report(make_run(tmp_path)).read_text(encoding="utf-8")
    page = Page(text)
    assert "script" not in {tag for tag, _ in page.tags}
    assert "<b>1" not in text.replace("<b>1,", "").replace("<b>16", "").replace("<b>17", "")
    for tag, attributes in page.tags:
        assert tag not in {"link", "img", "iframe", "object"}
        assert not (attributes.get("src") or "").startswith("http")
    assert "url(http" not in text
    assert "<th" in text
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
    assert "the same in every row" in write_report(run).read_text(encoding="utf-8")
    pq.write_table(pa.table({"id": ["a"], "s": [1.0], "m": [-1.0]}), tmp_path / "points.parquet")
    run_config(load_config(tmp_path / "run.toml"), workers=1, overwrite=True)
    assert "Rejected rows" in write_report(run).read_text(encoding="utf-8")


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
