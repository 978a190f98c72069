"""A small part of the campaign for doubles; see `tests.campaign_arrays`."""

from __future__ import annotations

import numpy as np
import pytest

from tests.campaign_arrays import ADVERSARIAL, INTEGRALS, RANDOM, check, compare_routes, run, tasks


@pytest.mark.parametrize("name", INTEGRALS)
def test_no_bound_is_violated(name: str) -> None:
    for seed, generate in enumerate(RANDOM + ADVERSARIAL):
        count = check(name, generate(np.random.default_rng(seed), 20))
        assert not count.violations
        assert count.checked > 0
        assert 0 < count.worst < 1


@pytest.mark.parametrize("name", INTEGRALS)
def test_two_routes_agree(name: str) -> None:
    for seed, generate in enumerate(RANDOM + ADVERSARIAL):
        count = compare_routes(name, generate(np.random.default_rng(seed), 3000))
        assert not count.violations
    assert count.checked > 0


def test_a_violation_is_seen(monkeypatch: pytest.MonkeyPatch) -> None:
    """The campaign would not be worth much if it missed one."""
    from loopint.arrays import evaluate  # noqa: PLC0415

    monkeypatch.setattr(evaluate, "SLACK", 1e-4)
    count = check("B(1,1), -1..2", RANDOM[0](np.random.default_rng(1), 20))
    assert "order" in count.violations[0]


def test_chunks_add_up() -> None:
    listed = list(tasks(4000, seed=3))
    for name in INTEGRALS:
        assert sum(task[2] for task in listed if task[0] == name) == 4000
    assert len({task[3] for task in listed}) == len(listed)
    name, kind, count = run((*listed[0][:2], 3, listed[0][3]))
    assert (name, kind, count.points) == ("B(1,1), -1..0", "uniform", 3)
