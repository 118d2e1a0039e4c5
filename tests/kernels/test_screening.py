"""Clearance and small sales against loops written from the rules, worked cases and properties.

The screen on price relatives is tested beside its stage.
"""

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from tests.kernels.panels import PROPERTY, Array, Panel, panels, random_panels
from tillwright.kernels.screening import find_clearance, find_small_sales, last_sold

Flags = NDArray[np.bool_]
NOT = np.nan
PRICE_FALL, QUANTITY_FALL = 0.7, 0.5
EXACT_SCALES = st.integers(-8, 8).map(lambda exponent: 2.0**exponent)
"""Powers of two change no relative, not even by rounding."""

each_panel = pytest.mark.parametrize("panel", [pytest.param(panel, id=panel.name) for panel in random_panels()])


def clearance_loop(prices: Array, quantities: Array, ahead: int, absent: int) -> Flags:
    """Product by product from its first price to its last, remembering the last period that was kept."""
    found = np.zeros(prices.shape, dtype=bool)
    with_sales = [t for t in range(len(prices)) if any(p > 0 for p in prices[t])]
    for i in range(prices.shape[1]):
        periods = [t for t in with_sales if prices[t, i] > 0]
        if not periods or with_sales[-1] - periods[-1] < absent:
            continue
        kept = periods[0]
        for t in periods[1:]:
            cheap = prices[t, i] < PRICE_FALL * prices[kept, i]
            few = quantities[t, i] < QUANTITY_FALL * quantities[kept, i]
            found[t, i] = cheap and few and periods[-1] - t < ahead
            kept = kept if found[t, i] else t
    return found


def column(prices: list[float], quantities: list[float], *, ahead: int = 2, absent: int = 1) -> list[bool]:
    """Verdicts on one product beside another that is always sold."""
    always = np.ones((len(prices), 1))
    panel = np.hstack([np.array(prices)[:, None], always]), np.hstack([np.array(quantities)[:, None], always])
    found = find_clearance(*panel, price_fall=PRICE_FALL, quantity_fall=QUANTITY_FALL, ahead=ahead, absent=absent)
    assert not found[:, 1].any()
    verdicts: list[bool] = found[:, 0].tolist()
    return verdicts


@each_panel
@pytest.mark.parametrize("ahead", [1, 2, 4])
@pytest.mark.parametrize("absent", [1, 2])
def test_clearance_equals_the_loop(panel: Panel, ahead: int, absent: int) -> None:
    expected = clearance_loop(panel.prices, panel.quantities, ahead, absent)
    found = find_clearance(panel.prices, panel.quantities, ahead=ahead, absent=absent)
    assert found.tolist() == expected.tolist()


@pytest.mark.parametrize("ahead", [1, 2, 3])
def test_clearance_equals_the_loop_where_falls_are_many(ahead: int) -> None:
    rng = np.random.default_rng(31)
    prices, quantities = rng.choice([0.5, 1.0, 2.0], (8, 2000)), rng.choice([0.0, 1.0, 4.0], (8, 2000))
    unsold = rng.random(prices.shape) < 0.4
    prices[unsold] = quantities[unsold] = np.nan
    expected = clearance_loop(prices, quantities, ahead, 1)
    assert expected.sum() > 50
    assert find_clearance(prices, quantities, ahead=ahead).tolist() == expected.tolist()


def test_joint_fall_before_a_product_goes_is_clearance() -> None:
    assert column([10, 10, 5, NOT], [20, 20, 4, NOT]) == [False, False, True, False]


def test_fall_of_one_alone_is_not_clearance() -> None:
    assert not any(column([10, 10, 5, NOT], [20, 20, 60, NOT]))
    assert not any(column([10, 10, 10, NOT], [20, 20, 2, NOT]))


def test_month_that_was_cut_short_at_the_usual_price_is_kept() -> None:
    assert not any(column([10, 10, 9.9, NOT], [20, 20, 3, NOT]))


def test_more_periods_at_the_low_price_are_clearance_too() -> None:
    assert column([10, 10, 5, 5, NOT], [20, 20, 4, 3, NOT], ahead=2) == [False, False, True, True, False]


def test_low_price_that_lasts_longer_is_kept() -> None:
    assert not any(column([10, 5, 5, 5, NOT], [20, 4, 4, 4, NOT], ahead=2))
    assert column([10, 5, 5, 5, NOT], [20, 4, 4, 4, NOT], ahead=3) == [False, True, True, True, False]


def test_product_sold_in_the_last_period_has_not_disappeared() -> None:
    assert not any(column([10, 10, 10, 5], [20, 20, 20, 4]))


def test_product_that_comes_back_has_not_disappeared() -> None:
    assert not any(column([10, 5, NOT, 10, 10, NOT], [20, 4, NOT, 20, 20, NOT]))


def test_incomplete_last_period_is_no_disappearance_if_more_absence_is_asked() -> None:
    assert column([10, 10, 5, NOT], [20, 20, 4, NOT], absent=1)[2]
    assert not column([10, 10, 5, NOT], [20, 20, 4, NOT], absent=2)[2]
    assert column([10, 10, 5, NOT, NOT], [20, 20, 4, NOT, NOT], absent=2)[2]


def test_period_in_which_nothing_is_sold_at_the_end_is_no_disappearance() -> None:
    prices, quantities = np.array([[10.0], [5.0], [NOT]]), np.array([[20.0], [2.0], [NOT]])
    assert not find_clearance(prices, quantities).any()


def test_gap_before_the_clearance_is_bridged() -> None:
    assert column([10, NOT, NOT, 5, NOT], [20, NOT, NOT, 4, NOT]) == [False, False, False, True, False]


def test_first_price_is_never_clearance_and_a_quantity_of_zero_gives_no_fall() -> None:
    assert not any(column([NOT, 5, NOT], [NOT, 1, NOT]))
    assert not any(column([10, 5, NOT], [0, 0, NOT]))
    assert column([10, 5, NOT], [1, 0, NOT]) == [False, True, False]


def test_fall_to_a_bound_is_kept() -> None:
    assert not any(column([1.0, PRICE_FALL, NOT], [1.0, 0.1, NOT]))
    assert not any(column([1.0, 0.1, NOT], [1.0, QUANTITY_FALL, NOT]))


@pytest.mark.parametrize("shape", [(0, 0), (0, 3), (3, 0), (3, 2)])
def test_nothing_sold_no_verdicts(shape: tuple[int, int]) -> None:
    nothing = np.full(shape, NOT)
    small = find_small_sales(nothing, nothing)
    for found in (find_clearance(nothing, nothing), small.used, small.small):
        assert found.shape == shape
        assert not found.any()


@PROPERTY
@given(panel=panels(gaps=True, shape=(5, 4)), scales=st.tuples(*[EXACT_SCALES] * 4), order=st.permutations(range(4)))
def test_clearance_knows_no_units_and_no_order(
    panel: tuple[Array, Array], scales: tuple[float, ...], order: list[int]
) -> None:
    prices, quantities = panel
    found = find_clearance(prices, quantities)
    assert (find_clearance(prices * scales, quantities / np.array(scales)) == found).all()
    assert (find_clearance(prices[:, order], quantities[:, order]) == found[:, order]).all()
    assert not found[:, np.isfinite(prices[-1])].any()


def small_sales_loop(prices: Array, quantities: Array, factor: float) -> tuple[Flags, Flags]:
    """Link by link between periods with sales, from the inequality of van der Grient and de Haan (2010)."""
    used, small = np.zeros(prices.shape, dtype=bool), np.zeros(prices.shape, dtype=bool)
    with_sales = [t for t in range(len(prices)) if any(p > 0 for p in prices[t])]
    for s, t in pairwise(with_sales):
        matched = [i for i in range(prices.shape[1]) if prices[s, i] > 0 and prices[t, i] > 0]
        totals = [sum(prices[z, i] * quantities[z, i] for i in matched) for z in (s, t)]
        for i in matched:
            shares = [prices[z, i] * quantities[z, i] / total for z, total in zip((s, t), totals, strict=True)]
            used[t, i] = sum(shares) / 2 > 1 / (len(matched) * factor)
            small[t, i] = not used[t, i]
    return used, small


@each_panel
@pytest.mark.parametrize("factor", [0.8, 1.25, 3.0])
def test_small_sales_equal_the_loop(panel: Panel, factor: float) -> None:
    used, small = small_sales_loop(panel.prices, panel.quantities, factor)
    found = find_small_sales(panel.prices, panel.quantities, factor=factor)
    assert found.used.tolist() == used.tolist()
    assert found.small.tolist() == small.tolist()


def test_small_sales_of_a_worked_link() -> None:
    # Four matched products and λ = 1.25: the bound is 1/(4·1.25) = 20 %. Mean shares of the matched turnover
    # of 100 and 200: 57.5, 21, 19.5 and 2 %. The fifth product, the largest, is new and not matched.
    turnover = np.array([[60.0, 20.0, 18.0, 2.0, NOT], [110.0, 44.0, 42.0, 4.0, 900.0]])
    found = find_small_sales(np.where(np.isnan(turnover), NOT, 1.0), turnover, factor=1.25)
    assert found.used.tolist() == [[False] * 5, [True, True, False, False, False]]
    assert found.small.tolist() == [[False] * 5, [False, False, True, True, False]]


def test_row_that_is_small_in_one_link_may_be_used_in_the_next() -> None:
    turnover = np.array([[90.0, 10.0], [90.0, 10.0], [20.0, 80.0]])
    found = find_small_sales(np.ones_like(turnover), turnover)
    assert found.small[1].tolist() == [False, True]
    assert found.used[2].tolist() == [True, True]


def test_mean_share_on_the_bound_is_small() -> None:
    found = find_small_sales(np.ones((2, 2)), np.ones((2, 2)), factor=1.0)
    assert found.small[1].all()


def test_lone_matched_product_is_used_and_without_turnover_it_is_small() -> None:
    assert find_small_sales(np.ones((2, 1)), np.ones((2, 1))).used.tolist() == [[False], [True]]
    assert find_small_sales(np.ones((2, 1)), np.zeros((2, 1))).small.tolist() == [[False], [True]]


@PROPERTY
@given(panel=panels(gaps=True, shape=(4, 5)), scales=st.tuples(*[EXACT_SCALES] * 4), factor=st.floats(1.01, 5.0))
def test_small_sales_know_no_currency_and_the_factor_only_adds(
    panel: tuple[Array, Array], scales: tuple[float, ...], factor: float
) -> None:
    prices, quantities = panel
    found = find_small_sales(prices, quantities, factor=factor)
    assert (find_small_sales(prices * np.array(scales)[:, None], quantities, factor=factor).used == found.used).all()
    assert (find_small_sales(prices, quantities, factor=2 * factor).used >= found.used).all()
    # The mean of mean shares is 1/n, so with λ > 1 some product is above the bound wherever any is matched.
    assert (found.used.any(axis=1) == (found.used | found.small).any(axis=1)).all()


@each_panel
def test_small_sales_know_no_order(panel: Panel) -> None:
    found = find_small_sales(panel.prices, panel.quantities)
    turned = find_small_sales(panel.prices[:, ::-1], panel.quantities[:, ::-1])
    assert (turned.used[:, ::-1] == found.used).all()
    assert (turned.small[:, ::-1] == found.small).all()


def test_latest_period_sold_of_gaps_and_late_starts() -> None:
    sold = np.array([[True, False], [False, False], [True, True], [False, True]])
    assert last_sold(sold).tolist() == [[0, -1], [0, -1], [2, 2], [2, 3]]
