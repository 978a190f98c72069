"""Bookkeeping of orders in Laurent series."""

from __future__ import annotations

import pytest
from flint import arb

import loopint
from loopint.core.errors import InputError, LostOrderError
from loopint.core.laurent import BallSeries, check_orders


def coefficients(series: BallSeries) -> dict[int, float]:
    return {k: float(series[k].mid()) for k in range(series.lowest, series.highest + 1)}


def test_product_keeps_only_known_orders() -> None:
    a = BallSeries(-1, [arb(1), arb(2), arb(3)])  # known through eps^1
    b = BallSeries(0, [arb(1), arb(1)])  # known through eps^1
    product = a * b
    assert (product.lowest, product.highest) == (-1, 0)
    assert coefficients(product) == {-1: 1.0, 0: 3.0}
    with pytest.raises(LostOrderError):
        product[1]


def test_sum_is_known_to_the_smaller_order() -> None:
    total = BallSeries(-2, [arb(1)] * 3) + BallSeries(0, [arb(1)] * 5)
    assert (total.lowest, total.highest) == (-2, 0)


def test_division_by_a_series_with_vanishing_leading_coefficients_loses_orders() -> None:
    series = BallSeries(0, [arb(0), arb(2), arb(1), arb(5)])  # 2 eps + eps^2 + 5 eps^3
    inverse = series.inverse()
    assert (inverse.lowest, inverse.highest) == (-1, 1)
    one = series * inverse
    assert coefficients(one) == {-1: 0.0, 0: 1.0, 1: 0.0}


def test_inverse_of_an_uncertain_leading_coefficient_is_refused() -> None:
    with pytest.raises(ZeroDivisionError):
        BallSeries(0, [arb(0, 1), arb(1)]).inverse()
    with pytest.raises(ZeroDivisionError):
        BallSeries(0, [arb(0), arb(0)]).inverse()


def test_orders_below_the_lowest_are_exact_zeros() -> None:
    assert BallSeries(1, [arb(3)])[-5] == 0


@pytest.mark.parametrize("orders", [(2, -1), (0,), (0.5, 1), (-1, 61), (True, 1), None, "ab"])
def test_bad_order_ranges(orders: object) -> None:
    with pytest.raises(InputError):
        check_orders(orders)


def test_notebook_representations() -> None:
    series = loopint.bubble(5, 1, 1, orders=(-2, 0), digits=12)
    html = series._repr_html_()
    assert "region above_threshold" in html
    assert "i</td>" in html
    assert html.count("<tr>") == 4
    latex = series._repr_latex_()
    assert latex.startswith("$")
    assert "varepsilon^{-1}" in latex
    assert "varepsilon^{-2}" not in latex  # exactly zero
    assert "O(\\varepsilon^{1})" in latex
