"""A small part of the campaign on every run; `pytest -m campaign` takes more of it."""

from __future__ import annotations

import pytest

from tests.campaign import compare, points


@pytest.mark.parametrize("point", points(25, 36, seed=7))
def test_no_bound_is_missed(point: object) -> None:
    """mpmath's integrator against the closed form, 20 digits, orders -1..3."""
    result = compare(point, 20)
    assert result.misses == ()
    assert result.status == "ok"
    assert result.agreed_digits > 19


@pytest.mark.campaign
@pytest.mark.parametrize("point", points(300, 300, seed=8))
def test_no_bound_is_missed_long(point: object) -> None:
    result = compare(point, 40)
    assert result.misses == ()
    assert result.status == "ok"
