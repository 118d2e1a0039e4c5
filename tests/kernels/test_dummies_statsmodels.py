"""Unweighted time product dummy against ordinary least squares with dummies of a regression library."""

import numpy as np
import pytest
import statsmodels.api as sm
from numpy.typing import NDArray

from tests.kernels import twins_windows
from tests.kernels.panels import Panel, random_panels
from tillwright.kernels.methods import make_index
from tillwright.kernels.recipes import Recipe

Array = NDArray[np.float64]
REGRESSION = 1e-9
"""What a regression on some dozen dummies may lose to rounding."""


def connected(panel: Panel) -> bool:
    """Whether chains of products join the priced periods."""
    sold = twins_windows.ones_where_sold(panel.prices)
    return len(twins_windows.groups_by_weight(sold, range(len(sold)))) == 1


CONNECTED = [panel for panel in random_panels() if connected(panel)]


def by_regression(prices: Array) -> Array:
    """Levels by ordinary least squares; NaN where nothing is sold."""
    period, product = np.nonzero(~np.isnan(prices))
    dummies = np.hstack([np.eye(len(prices))[period], np.eye(prices.shape[1])[product]])
    there = np.flatnonzero(dummies.any(axis=0))[1:]
    with np.errstate(all="ignore"):
        fit = sm.OLS(np.log(prices[period, product]), dummies[:, there]).fit()
    levels = np.full(len(prices), np.nan)
    levels[period[0]] = 1.0
    priced = there[there < len(prices)]
    levels[priced] = np.exp(fit.params[: len(priced)])
    return levels


@pytest.mark.parametrize("panel", CONNECTED, ids=lambda panel: panel.name)
def test_unweighted_time_product_dummy_is_the_regression(panel: Panel) -> None:
    expected = by_regression(panel.prices)
    for quantities in (panel.quantities, None):
        found = make_index(panel.prices, quantities, Recipe("tpd-unweighted"))
        np.testing.assert_allclose(found, expected, rtol=REGRESSION, atol=0)


@pytest.mark.parametrize("panel", CONNECTED, ids=lambda panel: panel.name)
def test_loop_twin_is_the_regression(panel: Panel) -> None:
    found = twins_windows.series(panel.prices, panel.quantities, "tpd-unweighted")
    np.testing.assert_allclose(found, by_regression(panel.prices), rtol=REGRESSION, atol=0)


def test_complete_panels_give_jevons() -> None:
    # de Haan and Krsinich (2014): without weights and without gaps the dummies are Jevons.
    rng = np.random.default_rng(1)
    prices = np.exp(rng.normal(0, 1, (6, 5)))
    found = make_index(prices, None, Recipe("tpd-unweighted"))
    np.testing.assert_allclose(np.log(found), np.log(prices / prices[0]).mean(axis=1), rtol=0, atol=REGRESSION)
