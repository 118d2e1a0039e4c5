"""A chain whose links leave products out: against whole chains, and against single links of its own."""

import numpy as np
import pytest

from tests.kernels import tolerances
from tests.kernels.panels import Panel, random_panels
from tillwright.choices import BILATERAL_FORMULAS
from tillwright.kernels.bilateral import series
from tillwright.kernels.filtered_chain import chain_links

NOT = np.nan
each_panel = pytest.mark.parametrize("panel", [pytest.param(panel, id=panel.name) for panel in random_panels()])
each_formula = pytest.mark.parametrize("formula", BILATERAL_FORMULAS)


@each_panel
@each_formula
def test_chain_that_leaves_nothing_out_is_the_chained_index(panel: Panel, formula: str) -> None:
    found = chain_links(panel.prices, panel.quantities, formula, np.zeros(panel.prices.shape, dtype=bool))
    np.testing.assert_allclose(found, series(panel.prices, panel.quantities, formula), rtol=tolerances.TWIN, atol=0)


@each_panel
@each_formula
def test_every_link_is_the_index_of_the_products_left(panel: Panel, formula: str) -> None:
    prices, quantities = panel.prices, panel.quantities
    left_out = np.random.default_rng(11).random(prices.shape) < 0.3
    expected, level, before = np.full(len(prices), NOT), 1.0, None
    for t in np.flatnonzero(np.isfinite(prices).any(axis=1)):
        if before is not None:
            rows = np.ix_([before, t], np.isfinite(prices[before]) & np.isfinite(prices[t]) & ~left_out[t])
            link = series(prices[rows], quantities[rows], formula)[1] if rows[1].size else NOT
            level *= link
        expected[t], before = level, t
    found = chain_links(prices, quantities, formula, left_out)
    np.testing.assert_allclose(found, expected, rtol=tolerances.TWIN, atol=0)


def test_link_without_a_product_ends_the_chain() -> None:
    prices = np.array([[1.0, NOT], [2.0, 5.0], [3.0, 6.0]])
    left_out = np.array([[False, False], [True, False], [False, False]])
    found = chain_links(prices, None, "jevons", left_out)
    np.testing.assert_array_equal(found, [1.0, NOT, NOT])


def test_product_left_out_of_one_link_is_in_the_next() -> None:
    prices = np.array([[1.0, 1.0], [4.0, 1.0], [8.0, 2.0]])
    left_out = np.array([[False, False], [True, False], [False, False]])
    np.testing.assert_allclose(chain_links(prices, None, "jevons", left_out), [1.0, 1.0, 2.0], rtol=tolerances.TWIN)


@pytest.mark.parametrize("periods", [0, 1])
def test_panel_without_a_link_is_1_where_it_is_priced(periods: int) -> None:
    prices = np.full((periods, 2), 3.0)
    assert chain_links(prices, None, "jevons", np.zeros(prices.shape, dtype=bool)).tolist() == [1.0] * periods
