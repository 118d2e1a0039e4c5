"""Edges of the kernels' contract: empty panels and periods, lone products, broken chains."""

import math

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.kernels import tolerances
from tests.kernels.variants import FORMS, VARIANTS, Onto, Splice, rolling_geks
from tillwright.choices import BILATERAL_FORMULAS
from tillwright.errors import UnconnectedPeriods
from tillwright.kernels import bilateral, splicing

Array = NDArray[np.float64]
NAN = math.nan

each_formula = pytest.mark.parametrize("formula", BILATERAL_FORMULAS)
each_splice = pytest.mark.parametrize(("splice", "onto"), VARIANTS)


def ones_like(prices: Array) -> Array:
    """Quantity one wherever there is a price."""
    return np.where(np.isnan(prices), np.nan, 1.0)


@each_formula
@pytest.mark.parametrize("shape", [(1, 1), (3, 2), (3, 0)])
def test_nothing_sold_gives_no_numbers(formula: str, shape: tuple[int, int]) -> None:
    prices = np.full(shape, np.nan)
    levels = bilateral.pair_levels(prices, prices, formula)
    assert levels.shape == (shape[0], shape[0])
    assert np.isnan(levels).all()
    for form in FORMS:
        series = bilateral.series(prices, prices, formula, form=form)
        assert series.shape == (shape[0],)
        assert np.isnan(series).all()


@each_formula
def test_one_period_is_one(formula: str) -> None:
    prices = np.array([[2.0, np.nan, 5.0]])
    assert bilateral.pair_levels(prices, ones_like(prices), formula).tolist() == [[1.0]]
    assert bilateral.series(prices, ones_like(prices), formula).tolist() == [1.0]


@each_formula
def test_diagonal_is_one_when_priced_and_missing_when_empty(formula: str) -> None:
    prices = np.array([[3.0, NAN], [NAN, NAN], [NAN, 7.0], [1.0, 4.0]])
    diagonal = np.diagonal(bilateral.pair_levels(prices, ones_like(prices), formula))
    np.testing.assert_allclose(diagonal, [1.0, NAN, 1.0, 1.0], rtol=tolerances.EXACT)


@each_formula
def test_chain_steps_over_an_empty_period(formula: str) -> None:
    prices = np.array([[NAN], [2.0], [NAN], [3.0], [6.0]])
    for form in FORMS:
        found = bilateral.series(prices, ones_like(prices), formula, form=form)
        np.testing.assert_allclose(found, [NAN, 1.0, NAN, 1.5, 3.0], rtol=tolerances.EXACT)


@each_formula
def test_broken_chain_stays_missing_and_direct_comes_back(formula: str) -> None:
    prices = np.array([[2.0, NAN], [4.0, NAN], [NAN, 1.0], [3.0, 2.0]])
    chained = bilateral.series(prices, ones_like(prices), formula, form="chained")
    direct = bilateral.series(prices, ones_like(prices), formula, form="direct")
    np.testing.assert_allclose(chained, [1.0, 2.0, NAN, NAN], rtol=tolerances.EXACT)
    np.testing.assert_allclose(direct, [1.0, 2.0, NAN, 1.5], rtol=tolerances.EXACT)


@each_formula
def test_inputs_are_left_alone(formula: str) -> None:
    prices = np.array([[2.0, NAN, 1.0], [4.0, 3.0, 1.0]])
    quantities = np.array([[1.0, NAN, 6.0], [2.0, 5.0, 1.0]])
    before = prices.copy(), quantities.copy()
    bilateral.pair_levels(prices, quantities, formula)
    bilateral.series(prices, quantities, formula)
    np.testing.assert_array_equal(prices, before[0])
    np.testing.assert_array_equal(quantities, before[1])


@each_formula
def test_unmatched_products_do_not_matter(formula: str) -> None:
    prices = np.array([[2.0, 1.0, 9.0, NAN], [3.0, 4.0, NAN, 5.0]])
    quantities = np.array([[7.0, 1.0, 1e6, NAN], [2.0, 5.0, NAN, 1e6]])
    np.testing.assert_allclose(
        bilateral.pair_levels(prices, quantities, formula),
        bilateral.pair_levels(prices[:, :2], quantities[:, :2], formula),
        rtol=tolerances.EXACT,
    )


def test_geks_rows_start_at_zero_in_the_first_priced_period() -> None:
    prices = np.array([[NAN], [NAN], [2.0], [4.0], [NAN], [8.0]])
    log_pairs = np.log(bilateral.pair_levels(prices, ones_like(prices), "jevons"))
    two = math.log(2)
    expected = [
        [NAN, NAN, 0.0, two],
        [NAN, 0.0, two, NAN],
        [0.0, two, NAN, 2 * two],
    ]
    found = rolling_geks(log_pairs, 4)
    np.testing.assert_allclose(found, expected, rtol=0, atol=tolerances.EXACT)


def test_geks_window_without_products_is_missing() -> None:
    log_pairs = np.full((4, 4), np.nan)
    log_pairs[3, 3] = 0.0
    np.testing.assert_array_equal(rolling_geks(log_pairs, 3), [[NAN, NAN, NAN], [NAN, NAN, 0.0]])


@pytest.mark.parametrize("window", [4, 5, 99])
def test_geks_window_longer_than_the_panel_is_the_panel(window: int) -> None:
    prices = np.array([[1.0], [2.0], [4.0], [3.0]])
    log_pairs = np.log(bilateral.pair_levels(prices, ones_like(prices), "fisher"))
    found = rolling_geks(log_pairs, window)
    assert found.shape == (1, 4)
    np.testing.assert_allclose(np.exp(found[0]), [1, 2, 4, 3], rtol=tolerances.EXACT)


def test_unconnected_window_names_the_periods_on_each_side() -> None:
    prices = np.array([[1.0, NAN], [2.0, NAN], [NAN, NAN], [NAN, 1.0], [NAN, 2.0]])
    log_pairs = np.log(bilateral.pair_levels(prices, ones_like(prices), "jevons"))
    with pytest.raises(UnconnectedPeriods) as raised:
        rolling_geks(log_pairs, 5)
    assert raised.value.groups == ((0, 1), (3, 4))


def test_interleaved_groups_are_told_apart() -> None:
    prices = np.array([[1.0, NAN, NAN], [NAN, 1.0, NAN], [2.0, NAN, NAN], [NAN, 2.0, 5.0]])
    log_pairs = np.log(bilateral.pair_levels(prices, ones_like(prices), "jevons"))
    with pytest.raises(UnconnectedPeriods) as raised:
        rolling_geks(log_pairs, 4)
    assert raised.value.groups == ((0, 2), (1, 3))


def test_connection_through_a_third_period_is_enough() -> None:
    prices = np.array([[1.0, NAN], [NAN, 3.0], [2.0, 4.0]])
    log_pairs = np.log(bilateral.pair_levels(prices, ones_like(prices), "jevons"))
    expected = np.log([[1.0, 2 * 3 / 4, 2.0]])
    found = rolling_geks(log_pairs, 3)
    np.testing.assert_allclose(found, expected, rtol=0, atol=tolerances.EXACT)


@each_splice
def test_first_window_is_published_as_it_stands(splice: Splice, onto: Onto) -> None:
    levels = np.array([[0.0, 0.2, -0.1, 0.3]])
    found = splicing.splice(levels, splice=splice, onto=onto)
    np.testing.assert_allclose(found, np.exp(levels[0]), rtol=tolerances.EXACT)


@each_splice
def test_published_figures_never_change_when_a_window_is_added(splice: Splice, onto: Onto) -> None:
    levels = np.random.default_rng(5).normal(0, 0.2, (6, 5))
    levels -= levels[:, :1]
    longest = splicing.splice(levels, splice=splice, onto=onto)
    for windows in range(1, 6):
        shorter = splicing.splice(levels[:windows], splice=splice, onto=onto)
        np.testing.assert_array_equal(shorter, longest[: len(shorter)])


@each_splice
@pytest.mark.parametrize("empty", [0, 1, 3, 4, 6, 7])
def test_empty_periods_never_turn_into_wrong_numbers(splice: Splice, onto: Onto, empty: int) -> None:
    # The definitions do not say how to link on a period without products. Whatever the choice,
    # windows that agree can only give their common level or nothing, and the empty period nothing.
    width = 4
    level = np.array([0.0, 0.1, 0.3, -0.2, 0.4, 0.5, 0.2, 0.7])
    level[empty] = np.nan
    rows = []
    for start in range(len(level) - width + 1):
        row = level[start : start + width]
        rows.append(row - row[~np.isnan(row)][0])
    found = splicing.splice(np.array(rows), splice=splice, onto=onto)
    first = level[~np.isnan(level)][0]
    assert np.isnan(found[empty])
    given = ~np.isnan(found)
    assert given[:width].sum() == (~np.isnan(level[:width])).sum()
    np.testing.assert_allclose(found[given], np.exp(level - first)[given], rtol=tolerances.EXACT)
