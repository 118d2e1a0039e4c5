"""MARS against a loop, weighted least squares of statsmodels, and what its definition says of extreme groupings.

Chessa (2019), MARS: a method for defining products and linking barcodes of item relaunches (from memory).
"""

import numpy as np
import pytest
import statsmodels.api as sm
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from tests.kernels import tolerances
from tests.kernels.panels import PROPERTY, Array, Panel, floats, panels, random_panels
from tillwright.kernels.mars import Mars, score, scores

NOT = np.nan
each_panel = pytest.mark.parametrize("panel", [pytest.param(panel, id=panel.name) for panel in random_panels()])


def near(found: Array, expected: Array | float) -> None:
    np.testing.assert_allclose(found, expected, rtol=0, atol=tolerances.TWIN)


def candidates(items: int, seed: int) -> NDArray[np.int64]:
    """Every item a product, all one product, and three random groupings."""
    rng = np.random.default_rng(seed)
    chance = [rng.integers(-3, 3, items) for _ in range(3)]
    return np.array([np.arange(items), np.full(items, 7), *chance], dtype=np.int64)


def unit_value(sales: list[tuple[float, float]]) -> float:
    return sum(p * q for p, q in sales) / sum(q for _, q in sales)


def loop(panel: tuple[Array, Array], group: NDArray[np.int64], base: int, current: int) -> tuple[float, float]:
    """Match and homogeneity from the sums in the definition; NaN without sales, homogeneity 1 without spread."""
    products: list[dict[int, list[tuple[float, float]]]] = [{}, {}]
    for side, t in enumerate((base, current)):
        for i, code in enumerate(group.tolist()):
            if panel[0][t, i] > 0 and panel[1][t, i] > 0:
                products[side].setdefault(code, []).append((panel[0][t, i], panel[1][t, i]))
    before, now = products
    items = [sale for sales in now.values() for sale in sales]
    if not items:
        return NOT, NOT
    total, mean = sum(q for _, q in items), unit_value(items)
    match = sum(q for code, sales in now.items() if code in before for _, q in sales) / total
    within = sum(q * (p - mean) ** 2 for p, q in items)
    between = sum(sum(q for _, q in sales) * (unit_value(sales) - mean) ** 2 for sales in now.values())
    return match, between / within if len(items) > 1 else 1.0


@each_panel
@pytest.mark.parametrize("base", [0, 2])
def test_scores_equal_the_loop(panel: Panel, base: int) -> None:
    groups = candidates(panel.prices.shape[1], base)
    found = scores(panel.prices, panel.quantities, groups, base)
    for g, group in enumerate(groups):
        for t in range(len(panel.prices)):
            match, homogeneity = loop((panel.prices, panel.quantities), group, base, t)
            near(np.array([found.match[g, t], found.homogeneity[g, t]]), np.array([match, homogeneity]))
            near(found.score[g, t], match * homogeneity)


@each_panel
def test_homogeneity_is_the_r_squared_of_weighted_least_squares_on_products(panel: Panel) -> None:
    groups = candidates(panel.prices.shape[1], 5)
    found = scores(panel.prices, panel.quantities, groups, 0).homogeneity
    for g, group in enumerate(groups[1:], start=1):
        for t in range(len(panel.prices)):
            sold = np.isfinite(panel.prices[t])
            design = (group[sold][:, None] == np.unique(group[sold])).astype(np.float64)
            # Without a spread, or with as many products as items, least squares has nothing to explain or to spare.
            if sold.sum() <= design.shape[1]:
                continue
            fit = sm.WLS(panel.prices[t, sold], design, weights=panel.quantities[t, sold]).fit()
            near(found[g, t], fit.rsquared)


def test_worked_example() -> None:
    # Items at 1, 3 and 8 with quantities 3, 1 and 4: unit value 38/8 = 4.75 and spread
    # 3·3.75² + 1.75² + 4·3.25² = 87.5. The first two are one product with unit value 1.5 and quantity 4:
    # 4·3.25² + 4·3.25² = 84.5 lies between. Item 3 is new, so half the quantity is matched.
    prices, quantities = np.array([[2.0, NOT, NOT], [1.0, 3.0, 8.0]]), np.array([[5.0, NOT, NOT], [3.0, 1.0, 4.0]])
    found = score(prices, quantities, np.array([10, 10, 20]), 0, 1)
    near(found.homogeneity, 84.5 / 87.5)
    near(found.match, 0.5)
    near(found.score, 0.5 * 84.5 / 87.5)


def test_relaunched_item_is_matched_only_by_the_grouping_that_joins_it() -> None:
    prices = np.array([[2.0, NOT, 5.0], [NOT, 2.1, 5.0]])
    quantities = np.array([[10.0, NOT, 10.0], [NOT, 12.0, 8.0]])
    found = score(prices, quantities, np.array([[0, 1, 2], [0, 0, 1], [0, 0, 0]]), 0, 1)
    near(found.match, np.array([0.4, 1.0, 1.0]))
    near(found.score, np.array([0.4, 1.0, 0.0]))


@PROPERTY
@given(panel=panels(gaps=True, shape=(3, 5)))
def test_items_as_products_explain_all_and_one_product_matches_all(panel: tuple[Array, Array]) -> None:
    prices, quantities = panel
    found = scores(prices, quantities, np.array([np.arange(5), np.zeros(5, dtype=int)]), 0)
    sold = np.isfinite(prices)
    live = np.isfinite(prices).sum(axis=1) > 0
    near(found.homogeneity[0, live], 1.0)
    near(found.match[1, live], 1.0 if live[0] else 0.0)
    differ = np.array([len(set(row[here].tolist())) > 1 for row, here in zip(prices, sold, strict=True)])
    spread = np.array([np.ptp(row[here]) if here.any() else 0.0 for row, here in zip(prices, sold, strict=True)])
    near(found.homogeneity[1, differ & (spread > tolerances.FAILS)], 0.0)
    near(found.homogeneity[1, live & ~differ], 1.0)
    assert np.isnan(found.score[:, ~live]).all()


@PROPERTY
@given(panel=panels(gaps=True, shape=(3, 6)), fine=st.lists(st.integers(0, 4), min_size=6, max_size=6))
def test_joining_products_raises_the_match_and_lowers_homogeneity(panel: tuple[Array, Array], fine: list[int]) -> None:
    prices, quantities = panel
    codes = np.array(fine)
    found = scores(prices, quantities, np.array([codes, codes // 2]), 0)
    live = np.isfinite(found.score[0])
    assert (found.match[1, live] >= found.match[0, live] - tolerances.TWIN).all()
    assert (found.homogeneity[1, live] <= found.homogeneity[0, live] + tolerances.TWIN).all()


def parts(mars: Mars) -> Array:
    return np.array([mars.match, mars.homogeneity, mars.score])


@each_panel
@PROPERTY
@given(scale=floats(0.01, 100.0), seed=st.integers(0, 99))
def test_scores_know_no_units_no_order_and_no_names_of_products(panel: Panel, scale: float, seed: int) -> None:
    groups = candidates(panel.prices.shape[1], seed)
    order = np.random.default_rng(seed).permutation(panel.prices.shape[1])
    found = parts(scores(panel.prices, panel.quantities, groups, 0))
    near(parts(scores(panel.prices * scale, panel.quantities / scale, groups, 0)), found)
    near(parts(scores(panel.prices[:, order], panel.quantities[:, order], groups[:, order], 0)), found)
    near(parts(scores(panel.prices, panel.quantities, 5 - 3 * groups, 0)), found)


@each_panel
def test_one_grouping_or_one_period_is_that_of_many(panel: Panel) -> None:
    groups = candidates(panel.prices.shape[1], 1)
    many = parts(scores(panel.prices, panel.quantities, groups, 1))
    near(parts(scores(panel.prices, panel.quantities, groups[2], 1)), many[:, 2])
    near(parts(score(panel.prices, panel.quantities, groups, 1, 3)), many[:, :, 3])
    cube = parts(scores(panel.prices, panel.quantities, groups[:4].reshape(2, 2, -1), 1))
    near(cube, many[:, :4].reshape(3, 2, 2, -1))


def test_quantity_of_zero_is_no_sale() -> None:
    prices, groups = np.array([[1.0, 2.0], [1.0, 2.0]]), np.array([0, 1])
    near(score(prices, np.array([[0.0, 3.0], [1.0, 3.0]]), groups, 0, 1).match, 0.75)
    assert np.isnan(score(prices, np.array([[1.0, 3.0], [0.0, 0.0]]), groups, 0, 1).score)


def test_base_without_sales_matches_nothing() -> None:
    prices = np.array([[NOT, NOT], [1.0, 2.0]])
    found = scores(prices, prices, np.array([0, 0]), 0)
    assert np.isnan(found.match[0])
    near(np.array([found.match[1], found.score[1]]), 0.0)


def test_equal_prices_are_homogeneous_in_every_grouping_despite_rounding() -> None:
    levels = np.repeat([[0.1], [1e6 / 3]], 7, axis=1)
    prices = np.where(np.arange(7) % 2 == 0, levels, np.nextafter(levels, np.inf))
    quantities = np.linspace(0.3, 17.7, 14).reshape(2, 7)
    near(scores(prices, quantities, candidates(7, 0), 0).homogeneity, 1.0)


def test_panel_without_items_has_no_scores() -> None:
    found = scores(np.empty((3, 0)), np.empty((3, 0)), np.empty((2, 0), dtype=np.int64), 0)
    assert found.score.shape == (2, 3)
    assert np.isnan(parts(found)).all()
