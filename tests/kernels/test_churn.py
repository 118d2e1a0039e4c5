"""Counts, turnover and lives of matched, entering and exiting products against sets."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from tests.kernels import tolerances
from tests.kernels.panels import PROPERTY, Array, Panel, floats, panels, random_panels
from tillwright.kernels.churn import (
    count_matched,
    count_products,
    measure_churn,
    measure_flows,
    measure_lives,
    share_known,
    share_matched,
)

NOT = np.nan
each_panel = pytest.mark.parametrize("panel", [pytest.param(panel, id=panel.name) for panel in random_panels()])


def baskets(prices: Array) -> list[set[int]]:
    """The products sold in each period."""
    return [set(np.flatnonzero(row > 0).tolist()) for row in prices]


def link_periods(periods: int) -> NDArray[np.intp]:
    """Link periods of years of three periods; the first has none before it."""
    return np.array([-1 if t == 0 else (t - 1) // 3 * 3 for t in range(periods)])


def chains_of(products: int) -> NDArray[np.int64]:
    """Columns in chains of two or three, codes in no order."""
    return np.array([-5 * (i % (products // 2 + 1)) for i in range(products)], dtype=np.int64)


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


@each_panel
@pytest.mark.parametrize("linked", [False, True])
def test_flows_equal_what_sets_of_products_say(panel: Panel, linked: bool) -> None:
    turnover, sold = panel.prices * panel.quantities, baskets(panel.prices)
    against = link_periods(len(sold)) if linked else None
    flows = measure_flows(panel.prices, turnover, against=against)
    for t, now in enumerate(sold):
        s = t - 1 if against is None else int(against[t])
        counts = (flows.continuing[t], flows.entering[t], flows.exiting[t])
        values = (flows.continuing_turnover[t], flows.entering_turnover[t], flows.exiting_turnover[t])
        if s < 0:
            assert not any(counts)
            assert not any(values)
            continue
        groups = (now & sold[s], now - sold[s], sold[s] - now)
        assert counts == tuple(len(group) for group in groups)
        expected = [sum(turnover[z, i] for i in group) for z, group in zip((t, t, s), groups, strict=True)]
        np.testing.assert_allclose(values, expected, rtol=tolerances.EXACT)


@each_panel
def test_flows_and_shares_agree_with_the_measure_against_the_period_before(panel: Panel) -> None:
    turnover = panel.prices * panel.quantities
    churn, flows = measure_churn(panel.prices, turnover), measure_flows(panel.prices, turnover)
    assert flows.continuing.tolist() == churn.matched.tolist()
    assert flows.entering.tolist() == churn.entering.tolist()
    assert flows.exiting.tolist() == churn.exiting.tolist()
    shares = share_matched(panel.prices, turnover)
    np.testing.assert_allclose(shares, churn.matched_share, rtol=0, atol=tolerances.EXACT)


@each_panel
@pytest.mark.parametrize("linked", [False, True])
@pytest.mark.parametrize("chained", [False, True])
def test_matched_and_known_shares_equal_what_sets_of_chains_say(panel: Panel, linked: bool, chained: bool) -> None:
    turnover, sold = panel.prices * panel.quantities, baskets(panel.prices)
    against = link_periods(len(sold)) if linked else None
    chains = chains_of(panel.prices.shape[1]) if chained else None
    codes = list(range(panel.prices.shape[1])) if chains is None else chains.tolist()
    matched = share_matched(panel.prices, turnover, against=against, chains=chains)
    known = share_known(panel.prices, turnover, chains=chains)
    for t, now in enumerate(sold):
        total = sum(turnover[t, i] for i in now)
        s = t - 1 if against is None else int(against[t])
        for share, earlier in ((matched[t], sold[s : s + 1] if s >= 0 else []), (known[t], sold[:t])):
            seen = {codes[i] for basket in earlier for i in basket}
            expected = sum(turnover[t, i] for i in now if codes[i] in seen) / total if now and earlier else NOT
            np.testing.assert_allclose(share, expected, rtol=0, atol=tolerances.EXACT)


def test_relaunch_is_matched_through_its_chain_and_not_by_itself() -> None:
    # The relaunch of the second period carries 30 of 40; the one of the third follows a period late.
    turnover = np.array([[30.0, NOT, 10.0, 5.0], [NOT, 30.0, 10.0, NOT], [NOT, 24.0, NOT, NOT], [8.0, NOT, NOT, 8.0]])
    chains = np.array([3, 3, 1, 0])
    np.testing.assert_allclose(share_matched(turnover, turnover), [NOT, 0.25, 1.0, 0.0])
    np.testing.assert_allclose(share_matched(turnover, turnover, chains=chains), [NOT, 1.0, 1.0, 0.5])
    np.testing.assert_allclose(share_known(turnover, turnover, chains=chains), [NOT, 1.0, 1.0, 1.0])
    against = np.array([-1, 0, 0, 0])
    np.testing.assert_allclose(share_matched(turnover, turnover, against=against), [NOT, 0.25, 0.0, 1.0])


@PROPERTY
@given(panel=panels(gaps=True, shape=(4, 5)), scale=floats(0.01, 100.0), order=st.permutations(range(5)))
def test_joining_columns_only_adds_to_what_is_matched_and_order_does_not_matter(
    panel: tuple[Array, Array], scale: float, order: list[int]
) -> None:
    prices, quantities = panel
    turnover, chains = prices * quantities, chains_of(5)
    alone, joined = share_matched(prices, turnover), share_matched(prices, turnover, chains=chains)
    live = np.isfinite(alone)
    assert (live == np.isfinite(joined)).all()
    assert (joined[live] >= alone[live] - tolerances.EXACT).all()
    assert (share_known(prices, turnover)[live] >= alone[live] - tolerances.EXACT).all()
    turned = share_matched(prices[:, order] * scale, turnover[:, order] * scale, chains=chains[order])
    np.testing.assert_allclose(turned, joined, rtol=0, atol=tolerances.EXACT)


def test_turnover_of_zero_has_no_share() -> None:
    assert np.isnan(share_matched(np.ones((2, 1)), np.zeros((2, 1)))).all()
    assert np.isnan(share_known(np.ones((2, 1)), np.zeros((2, 1)))).all()


@each_panel
def test_lives_equal_what_sets_of_products_say(panel: Panel) -> None:
    sold = baskets(panel.prices)
    with_sales = [t for t, basket in enumerate(sold) if basket]
    lives = measure_lives(panel.prices)
    for i in range(panel.prices.shape[1]):
        periods = [t for t in with_sales if i in sold[t]]
        found = (lives.first[i], lives.last[i], lives.length[i], lives.sold[i])
        if not periods:
            assert found == (-1, -1, 0, 0)
            assert not lives.begins[i] | lives.ends[i]
            continue
        assert found == (periods[0], periods[-1], periods[-1] - periods[0] + 1, len(periods))
        assert lives.begins[i] == (periods[0] > with_sales[0])
        assert lives.ends[i] == (periods[-1] < with_sales[-1])
        assert lives.complete[i] == (with_sales[0] < periods[0] and periods[-1] < with_sales[-1])


def test_lives_of_each_kind() -> None:
    # Always sold; seen to begin; seen to end; complete with a gap; sold once; never sold. The last period is empty.
    sold = np.array(
        [
            [1, 0, 1, 0, 0, 0],
            [1, 0, 1, 1, 0, 0],
            [1, 1, 0, 0, 1, 0],
            [1, 1, 0, 1, 0, 0],
            [1, 1, 0, 0, 0, 0],
            [0, 0, 0, 0, 0, 0],
        ]
    )
    lives = measure_lives(np.where(sold == 1, 2.5, NOT))
    assert lives.length.tolist() == [5, 3, 2, 3, 1, 0]
    assert lives.sold.tolist() == [5, 3, 2, 2, 1, 0]
    assert lives.begins.tolist() == [False, True, False, True, True, False]
    assert lives.ends.tolist() == [False, False, True, True, True, False]
    assert lives.complete.tolist() == [False, False, False, True, True, False]


@pytest.mark.parametrize("shape", [(1, 0), (3, 0), (2, 3)])
def test_nothing_sold_no_flows_shares_or_lives(shape: tuple[int, int]) -> None:
    nothing = np.full(shape, NOT)
    flows, lives = measure_flows(nothing, nothing), measure_lives(nothing)
    assert not (flows.continuing | flows.entering | flows.exiting).any()
    assert np.isnan(share_matched(nothing, nothing, chains=np.arange(shape[1]))).all()
    assert (lives.first == -1).all()
    assert not lives.complete.any()
