"""The time limit: whatever takes too long is named, and the other rows are not affected."""

from __future__ import annotations

import math
import threading
from dataclasses import replace

import numpy as np
import pyarrow.parquet as pq
import pytest

import loopint
from loopint.core.conventions import Conventions
from loopint.core.kinematics import TwoPoint
from loopint.core.numbers import exact_complex, exact_real
from loopint.core.time_limit import TimeLimitError, check_time, time_limit
from loopint.integrals import bubble
from loopint.integrals.registry import FAMILIES
from loopint.pipeline.config import load_config
from loopint.pipeline.run import run_config
from loopint.pipeline.verify import verify_run
from loopint.quadrature import integrate_feynman
from tests.pipeline_files import points_table, write_run

ROWS = 12


def test_the_earlier_end_counts_and_the_limit_ends_with_its_block():
    with time_limit(1000):
        with time_limit(-1), pytest.raises(TimeLimitError):
            check_time()
        check_time()
        with time_limit(None):
            check_time()
    with time_limit(-1), time_limit(1000), pytest.raises(TimeLimitError):
        check_time()
    check_time()


def test_a_limit_is_that_of_its_thread():
    found = []
    with time_limit(-1):
        thread = threading.Thread(target=lambda: found.append(check_time()))
        thread.start()
        thread.join()
    assert found == [None]


@pytest.mark.parametrize(
    "evaluate",
    [
        lambda: loopint.bubble("5", "1", "2", orders=(-1, 30), digits=2000),
        lambda: loopint.bubble("5", "1", "2", (6, 5), dimension=3, digits=1900),
        lambda: loopint.propagator("1/2", "1", 0, [(1, "1/3"), (1, "1/7")], digits=1500),
    ],
)
def test_long_evaluations_are_stopped(evaluate):
    with time_limit(0.05), pytest.raises(TimeLimitError):
        evaluate()


@pytest.mark.parametrize("arithmetic", ["balls", "mpmath"])
def test_quadrature_is_stopped(arithmetic):
    point = TwoPoint(exact_real(5), exact_complex(1), exact_complex(2))
    with time_limit(-1), pytest.raises(TimeLimitError):
        integrate_feynman(
            point, (1, 1), 4, (-1, 1), Conventions(), digits=50, arithmetic=arithmetic
        )


@pytest.mark.parametrize("layout", ["long", "wide"])
@pytest.mark.parametrize("digits", [12, 16, 25])
def test_rows_out_of_time_are_in_the_table_without_numbers(tmp_path, layout, digits):
    config = write_run(tmp_path, points_table(ROWS, s={4: None}), layout=layout, digits=digits)
    config.write_text(
        config.read_text().replace("[cross_check]", "time_limit = 1e-9\n[cross_check]")
    )
    outcome = run_config(load_config(config))
    assert outcome.exit_code == 3
    table = pq.read_table(tmp_path / "out" / "table").to_pandas()
    assert outcome.summary["rows_rejected"] == 1
    timed_out = outcome.summary["results_timed_out"]
    if digits == 12:  # what doubles serve needs no time limit
        assert timed_out < 3 * (ROWS - 1)
    else:
        assert timed_out == 3 * (ROWS - 1)
        assert outcome.summary["results_below_digits"] == 0
        values = table["re"] if layout == "long" else table["mixed_0_re"]
        bounds = table["re_bound"] if layout == "long" else table["mixed_0_re_bound"]
        statuses = table["status"] if layout == "long" else table["mixed_status"]
        assert np.isnan(values).all()
        assert (bounds == math.inf).all()
        assert set(statuses) == {"timed_out"}
        assert outcome.summary["cross_check"]["ok"] == 0
        note = pq.read_table(tmp_path / "out" / "cross_check.parquet")["note"].to_pylist()
        assert set(note) <= {"nothing to compare: the evaluation reached its time limit"}
    assert verify_run(tmp_path / "out").findings == []


def test_one_slow_row_changes_no_other(tmp_path, monkeypatch):
    """A row whose evaluation never ends, but looks at the clock as all do."""
    table = points_table(ROWS)
    reference = write_run(tmp_path, table, fraction='"none"')
    run_config(load_config(reference))
    expected = pq.read_table(tmp_path / "out" / "table").to_pylist()
    original = bubble.series
    slow = exact_real(table["s"][5].as_py())

    def series(point, *arguments):
        while point.p_squared == slow:
            check_time()
        return original(point, *arguments)

    monkeypatch.setitem(FAMILIES, "bubble", replace(FAMILIES["bubble"], series=series))
    limited = write_run(tmp_path, table, out="limited", name="limited.toml", fraction='"none"')
    limited.write_text(
        limited.read_text().replace("[cross_check]", "time_limit = 0.3\n[cross_check]")
    )
    outcome = run_config(load_config(limited))
    found = pq.read_table(tmp_path / "limited" / "table").to_pylist()
    assert outcome.summary["results_timed_out"] == 2
    for one, other in zip(found, expected, strict=True):
        if one["point"] == "p5" and one["integral"] != "loop":
            assert one["status"] == "timed_out"
        else:
            assert one == other
