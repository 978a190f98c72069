"""A small part of `tests.campaign_all` on every run."""

from __future__ import annotations

from collections import Counter

import pytest

from loopint.core.laurent import BallSeries
from loopint.integrals import registry
from tests.campaign_all import run

SEEDS = range(6, 33)
DIGITS = 40


def test_every_route_agrees() -> None:
    outcomes = [run(seed, 60.0, DIGITS) for seed in SEEDS]
    assert [(o.seed, o.findings) for o in outcomes if o.findings] == []
    tried = Counter(name for o in outcomes for name in o.tried)
    assert {"digits", "symmetry", "scaling", "parts", "dimension", "balls", "doubles"} <= set(tried)
    assert {"conventions", "published", "mpmath", "rows"} <= set(tried)
    assert sum(tried.values()) > 100


def test_a_wrong_number_is_seen(monkeypatch: pytest.MonkeyPatch) -> None:
    """The campaign would not be worth much if it missed one."""
    original = registry.Evaluator._series

    def wrong(self: registry.Evaluator, point: registry.Point) -> BallSeries:
        series = original(self, point)
        return series.scaled(2) if self.digits > DIGITS + 5 else series

    monkeypatch.setattr(registry.Evaluator, "_series", wrong)
    findings = run(16, 60.0, DIGITS).findings | run(19, 60.0, DIGITS).findings
    assert "digits" in findings
