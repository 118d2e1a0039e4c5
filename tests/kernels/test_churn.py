"""Counts and turnover shares of matched, entering and exiting products against sets."""

import numpy as np
import pytest

from tests.kernels import tolerances
from tests.kernels.panels import Panel, random_panels
from tillwright.kernels.churn import count_matched, count_products, measure_churn


@pytest.mark.parametrize("panel", [pytest.param(panel, id=panel.name) for panel in random_panels()])
def test_churn_equals_what_sets_of_products_say(panel: Panel) -> None:
    turnover = panel.prices * panel.quantities
    sold = [set(np.flatnonzero(np.isfinite(row)).tolist()) for row in panel.prices]
    churn = measure_churn(panel.prices, turnover)
    for t, now in enumerate(sold):
        assert churn.products[t] == len(now)
        if t == 0:
            assert churn.matched[0] == churn.entering[0] == churn.exiting[0] == 0
            continue
        before = sold[t - 1]
        assert churn.matched[t] == len(now & before)
        assert churn.entering[t] == len(now - before)
        assert churn.exiting[t] == len(before - now)
        value, value_before = sum(turnover[t, i] for i in now), sum(turnover[t - 1, i] for i in before)
        shares = (churn.matched_share[t], churn.entering_share[t], churn.exiting_share[t])
        expected = (
            sum(turnover[t, i] for i in now & before) / value if now else np.nan,
            sum(turnover[t, i] for i in now - before) / value if now else np.nan,
            sum(turnover[t - 1, i] for i in before - now) / value_before if before else np.nan,
        )
        np.testing.assert_allclose(shares, expected, rtol=0, atol=tolerances.EXACT)


@pytest.mark.parametrize("panel", [pytest.param(panel, id=panel.name) for panel in random_panels()])
def test_counts_alone_are_those_of_the_whole_measure(panel: Panel) -> None:
    churn = measure_churn(panel.prices, panel.prices * panel.quantities)
    assert count_products(panel.prices).tolist() == churn.products.tolist()
    assert count_matched(panel.prices).tolist() == churn.matched.tolist()


def test_shares_are_missing_in_the_first_period() -> None:
    churn = measure_churn(np.ones((2, 3)), np.ones((2, 3)))
    assert np.isnan([churn.matched_share[0], churn.entering_share[0], churn.exiting_share[0]]).all()
    assert (churn.matched_share[1], churn.entering_share[1], churn.exiting_share[1]) == (1.0, 0.0, 0.0)
