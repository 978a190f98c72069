"""`loopint validate RUN`: an untouched run passes, and everything that is touched is named."""

from __future__ import annotations

import json
import shutil
from pathlib import Path

import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq
import pytest

from loopint.cli import main
from loopint.pipeline.config import load_config
from loopint.pipeline.errors import ConfigError
from loopint.pipeline.run import run_config
from loopint.pipeline.run_directory import file_sha256
from loopint.pipeline.verify import verify_run
from tests.pipeline_files import points_table, write_run

ROWS = 40
BAD = {"s": {3: None, 17: float("nan")}, "m_alder": {9: -1.0, 39: None}}


def finished(directory: Path, **options) -> Path:
    config = write_run(directory, points_table(ROWS, **BAD), **options)
    run_config(load_config(config))
    return directory / "out"


@pytest.fixture(scope="module")
def original(tmp_path_factory) -> Path:
    return finished(tmp_path_factory.mktemp("original"), formats='["parquet", "csv"]')


@pytest.fixture
def run(original, tmp_path) -> Path:
    return Path(shutil.copytree(original, tmp_path / "run"))


def forge(run: Path, file: str, sha256: str) -> None:
    """Write the hash of a changed file into the manifest."""
    path = run / "manifest.json"
    manifest = json.loads(path.read_text())
    for entry in manifest["table"]:
        if entry["file"] == file:
            entry["sha256"] = sha256
    if file in manifest["files"]:
        manifest["files"][file] = sha256
    path.write_text(json.dumps(manifest))


@pytest.mark.parametrize("layout", ["long", "wide"])
@pytest.mark.parametrize("digits", [12, 16, 25])
def test_an_untouched_run_passes(tmp_path, layout, digits):
    run = finished(tmp_path, layout=layout, digits=digits)
    found = verify_run(run, rows=ROWS)
    assert (found.findings, found.notes, found.exit_code) == ([], [], 0)
    assert found.files == 5 + 3
    assert found.rows == found.evaluated == ROWS
    assert found.coefficients == found.confirmed == (ROWS - 4) * (3 + 2 + 2)


def test_few_rows_are_drawn_by_the_seed(original):
    assert verify_run(original, rows=0).evaluated == 0
    assert verify_run(original, rows=5, seed=2).evaluated == 5


def test_changed_missing_and_foreign_files_are_named(run):
    (run / "table.csv").write_text("changed")
    (run / "table" / "part-00001.parquet").unlink()
    (run / "table" / "part-99999.parquet").write_bytes(b"PAR1")
    found = verify_run(run)
    assert found.exit_code == 3
    assert found.findings == [
        "table/part-00001.parquet is missing",
        "table.csv has been changed: its SHA-256 is not the manifest's",
        "table/part-99999.parquet is not a file of this run",
    ]


@pytest.mark.parametrize(
    ("column", "sentence"),
    [("re", "order 0: the true value is out of its bounds"), ("region", "region elsewhere")],
)
def test_a_forged_value_is_found_by_evaluation(run, column, sentence):
    part = run / "table" / "part-00002.parquet"
    table = pq.read_table(part)
    place = table.schema.get_field_index(column)
    wrong = pc.add(table["re"], 1e-13) if column == "re" else pa.array(["elsewhere"] * len(table))
    pq.write_table(table.set_column(place, table.schema.field(column), wrong), part)
    forge(run, "table/part-00002.parquet", file_sha256(part))
    found = verify_run(run, rows=ROWS)
    assert any("row 16 integral mixed" in one and sentence in one for one in found.findings)
    assert all("row 17 " not in one for one in found.findings)  # a rejected one


def test_lost_and_invented_rejections_are_found(run):
    path = run / "rejected.parquet"
    table = pq.read_table(path)
    rows = table["row"].to_pylist()
    assert rows == [3, 9, 17, 39]
    place = table.schema.get_field_index("row")
    moved = table.set_column(place, table.schema.field("row"), pa.array([3, 10, 17, 39]))
    pq.write_table(moved, path)
    forge(run, "rejected.parquet", file_sha256(path))
    findings = verify_run(run, rows=ROWS).findings
    assert any("row 9 should have been rejected" in one for one in findings)
    assert "row 10 is rejected, but can be evaluated" in findings
    pq.write_table(table.slice(1), path)
    forge(run, "rejected.parquet", file_sha256(path))
    assert verify_run(run).findings == ["rows of rejected.parquet: 3, expected 4"]


def test_other_conventions_in_a_part_are_found(run):
    part = run / "table" / "part-00000.parquet"
    table = pq.read_table(part)
    content = json.loads(table.schema.metadata[b"loopint"])
    content["conventions"]["measure"] = "plain"
    pq.write_table(table.replace_schema_metadata({"loopint": json.dumps(content)}), part)
    forge(run, "table/part-00000.parquet", file_sha256(part))
    assert verify_run(run).findings == [
        "table/part-00000.parquet carries other conventions than the manifest"
    ]


def test_points_that_are_gone_or_changed(tmp_path):
    run = finished(tmp_path)
    points = tmp_path / "points.parquet"
    table = pq.read_table(points)
    pq.write_table(table.slice(0, ROWS - 1), points)
    assert verify_run(run).findings == [
        "the points are not those of the run: their SHA-256 differs"
    ]
    points.unlink()
    found = verify_run(run)
    assert (found.findings, found.evaluated, found.files) == ([], 0, 8)
    assert "no row is evaluated again" in found.notes[0]


def test_another_version_is_noted(run):
    path = run / "manifest.json"
    manifest = json.loads(path.read_text())
    manifest["versions"]["mpmath"] = "0.1"
    path.write_text(json.dumps(manifest))
    found = verify_run(run)
    assert (found.findings, found.notes) == ([], ["written with another version of mpmath"])


def test_what_is_not_a_finished_run_is_one_sentence(run, tmp_path):
    path = run / "manifest.json"
    manifest = json.loads(path.read_text())
    for content, sentence in [
        (json.dumps({**manifest, "state": "running"}), "holds an unfinished run"),
        ("[]", "cannot be read as a manifest"),
        ("{", "cannot be read as a manifest"),
        (json.dumps({"state": "finished"}), "is not a manifest of this version"),
    ]:
        path.write_text(content)
        with pytest.raises(ConfigError, match=sentence):
            verify_run(run)
    with pytest.raises(ConfigError, match="does not exist"):
        verify_run(tmp_path)


def test_the_command(run, monkeypatch, capsys):
    def command(*options: str) -> tuple[object, str, str]:
        monkeypatch.setattr("sys.argv", ["loopint", "validate", str(run), *options])
        with pytest.raises(SystemExit) as ended:
            main()
        captured = capsys.readouterr()
        return ended.value.code, captured.out, captured.err

    code, out, err = command("--rows", "7")
    assert (code, err) == (0, "")
    assert "40 rows; 7 evaluated again" in out
    (run / "rejected.parquet").write_bytes(b"")
    code, out, err = command("--json")
    assert code == 3
    assert json.loads(out)["findings"] == [
        "rejected.parquet has been changed: its SHA-256 is not the manifest's"
    ]
    code, out, err = command("--quiet")
    assert (code, out) == (3, "")
    assert "rejected.parquet has been changed" in err
