"""Coverage-guided fuzzing of everything that reads what a user wrote.

    pip install atheris
    python -m tests.fuzz TARGET [--seconds 300] [--corpus DIRECTORY]

Targets: expression, formula, config, points, run_directory, interpolant.  Acceptable is
success or a `LoopintError` in one sentence; anything else, and an input that takes longer than ten
seconds or 2 GiB, is reported by the fuzzer with the bytes that caused it.
`tests/test_attack_texts.py` keeps the inputs that once failed, and a short unguided run.
"""

from __future__ import annotations

import argparse
import contextlib
import hashlib
import importlib
import json
import shutil
import sys
import tempfile
from collections.abc import Callable
from pathlib import Path

from flint import fmpq

THIRD = fmpq(1, 3)
SECONDS_EACH, MEGABYTES = 10, 2048
MODULES = (
    "loopint.interpolation.files",
    "loopint.pipeline.compare",
    "loopint.pipeline.run",
    "loopint.pipeline.verify",
)


def expression(data: bytes) -> None:
    from loopint.pipeline.expressions import parse_expression

    parsed = parse_expression(data.decode("utf-8", "replace"))
    parsed.evaluate(dict.fromkeys(parsed.columns, THIRD))


def formula(data: bytes) -> None:
    from loopint.core.precision import working_precision
    from loopint.pipeline.formula_language import Cuts, of, parse_formula

    parsed = parse_formula(data.decode("utf-8", "replace"))
    with working_precision(128):
        parsed.evaluate({name: of(THIRD) for name in parsed.names}, Cuts())


def config(data: bytes) -> None:
    from loopint.core.errors import LoopintError
    from loopint.pipeline.config import (
        GridRunConfig,
        InterpolationRunConfig,
        RunConfig,
        load_config_as,
    )

    path = FOLDER / "config.toml"
    path.write_bytes(data)
    for kind in (RunConfig, GridRunConfig, InterpolationRunConfig):
        try:
            load_config_as(kind, path)
        except LoopintError as error:
            one_sentence(error)


def points(data: bytes) -> None:
    from loopint.pipeline.points import exact_rows, open_points

    path = FOLDER / "points.parquet"
    path.write_bytes(data)
    source = open_points(path, None)
    names = source.schema.names[:3]
    list(exact_rows(source.read_rows(0, min(source.row_count, 5), names), names))


def run_directory(data: bytes) -> None:
    from loopint.pipeline.verify import verify_run

    folder = FOLDER / "run"
    if not folder.exists():
        _make_run(folder)
    (folder / "manifest.json").write_bytes(data)
    verify_run(folder, rows=1)


def interpolant(data: bytes) -> None:
    import loopint
    from loopint import load_interpolant

    path = FOLDER / "interpolants" / "made.json"
    with contextlib.suppress(ValueError, TypeError, KeyError, OSError):  # let it past the hash
        content = json.loads(data)
        table = (path.parent / content["table"]).read_bytes()
        data = json.dumps(content | {"table_sha256": hashlib.sha256(table).hexdigest()}).encode()
    path.write_bytes(data)
    made = load_interpolant(path)
    made(made.orders[0], *([0.5] if isinstance(made, loopint.Interpolant) else [0.5, 1.0]))


def _make_run(folder: Path) -> None:
    from loopint.pipeline.config import load_config
    from loopint.pipeline.run import run_config
    from tests.pipeline_files import points_table, write_run

    source = FOLDER / "source"
    source.mkdir(exist_ok=True)
    config = write_run(source, points_table(5), out=str(folder))
    run_config(load_config(config), overwrite=True)


TARGETS: dict[str, Callable[[bytes], None]] = {
    "expression": expression,
    "formula": formula,
    "config": config,
    "points": points,
    "run_directory": run_directory,
    "interpolant": interpolant,
}
FOLDER = Path(tempfile.mkdtemp(prefix="loopint-fuzz-"))


def one_sentence(error: Exception) -> None:
    """A message is one line and not a dump."""
    text = str(error)
    assert text.strip(), "no message"
    assert "\n" not in text.strip(), f"more than a line: {text!r}"
    assert len(text) < 3000, f"a long message: {text[:200]!r}"


def attempt(target: Callable[[bytes], None], data: bytes) -> None:
    """Run a target once; raise what no user may see."""
    from loopint.core.errors import LoopintError

    try:
        target(data)
    except LoopintError as error:
        one_sentence(error)


def seeds(name: str) -> list[bytes]:
    """Return inputs that are all right, from which the fuzzer starts."""
    root = Path(__file__).parents[1]
    if name == "config":
        return [path.read_bytes() for path in sorted((root / "configs").glob("*.toml"))]
    if name == "points":
        return [(root / "configs" / "quickstart.parquet").read_bytes()[-4000:], _small_parquet()]
    if name == "run_directory":
        shutil.rmtree(FOLDER / "run", ignore_errors=True)
        _make_run(FOLDER / "run")
        return [(FOLDER / "run" / "manifest.json").read_bytes()]
    if name == "interpolant":
        return _make_interpolants()
    texts = {
        "expression": ["(m_a + m_b)**2/3 - 1e-3", "`odd name` * -2.5", "((1))", "2**-64"],
        "formula": [
            "log(-x - i0)/2 + polylog(2, x) * hyp2f1(1, 2, 3, x)",
            "Li2(1 - x) + Li3(x)**2 - clausen2(pi/3) + zeta(3) * gamma(x) * euler_gamma",
            "lerch_phi(x, 2, 1/2) + sqrt(kallen(x, 1, 2)) - conjugate(exp(I*x)) + theta(x)",
        ],
    }
    return [text.encode() for text in texts[name]]


def _make_interpolants() -> list[bytes]:
    from loopint.interpolation.build import build_interpolants
    from loopint.pipeline.config import InterpolationRunConfig, load_config_as

    text = (Path(__file__).parents[1] / "configs" / "interpolate.toml").read_text()
    path = FOLDER / "interpolate.toml"
    path.write_text(text.replace("runs/interpolate", str(FOLDER / "interpolants")))
    made = build_interpolants(load_config_as(InterpolationRunConfig, path))
    return [one.files[0].read_bytes() for one in made]


def _small_parquet() -> bytes:
    import pyarrow as pa
    import pyarrow.parquet as pq

    sink = pa.BufferOutputStream()
    columns = {"s": [1.0, None], "a": ["1/3", "x"], "b": [[1], [2]]}
    pq.write_table(pa.table(columns), sink)
    return sink.getvalue().to_pybytes()


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("target", choices=TARGETS)
    parser.add_argument("--seconds", type=int, default=300)
    parser.add_argument("--corpus", type=Path)
    options = parser.parse_args()
    import atheris  # not a dependency

    with atheris.instrument_imports(include=["loopint"]):
        for name in MODULES:
            importlib.import_module(name)
    corpus = options.corpus or FOLDER / "corpus"
    corpus.mkdir(parents=True, exist_ok=True)
    for number, seed in enumerate(seeds(options.target)):
        (corpus / f"seed-{number}").write_bytes(seed)
    target = TARGETS[options.target]
    flags = [
        sys.argv[0],
        str(corpus),
        f"-max_total_time={options.seconds}",
        f"-timeout={SECONDS_EACH}",
        f"-rss_limit_mb={MEGABYTES}",
        "-max_len=20000",
        "-print_final_stats=1",
        f"-artifact_prefix={options.corpus or FOLDER}/",
    ]
    atheris.Setup(flags, lambda data: attempt(target, data))
    try:
        atheris.Fuzz()
    finally:
        shutil.rmtree(FOLDER, ignore_errors=True)


if __name__ == "__main__":
    main()
