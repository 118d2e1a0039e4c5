"""Imputed prices against the published elementary example, a loop, pandas, and what the manuals say of them.

CPI Manual (2004), Table 9.1, is in the reference data; CPI Manual (2020), ch. 6, for the statements.
"""

from typing import get_args

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tests.kernels import tolerances
from tests.kernels.panels import PROPERTY, Array, Panel, floats, panels, random_panels
from tests.reference.published import cases, dataset
from tillwright.kernels.bilateral import series
from tillwright.kernels.imputation import Elementary, Reason, Run, carry_forward, impute_class_mean, overlap_ratio

NOT = np.nan
FORMULAS: tuple[Elementary, ...] = get_args(Elementary)
RUNS: tuple[Run, ...] = get_args(Run)
LIMITS = (None, 0, 1, 2)

each_panel = pytest.mark.parametrize("panel", [pytest.param(panel, id=panel.name) for panel in random_panels()])
each_formula = pytest.mark.parametrize("formula", FORMULAS)


def close(found: Array, expected: Array) -> None:
    np.testing.assert_allclose(found, expected, rtol=tolerances.AXIOM, atol=0)


def movement(base: Array, current: Array, formula: str) -> float:
    """Elementary index over the products with both prices; NaN if there are none."""
    pairs = [(a, b) for a, b in zip(base.tolist(), current.tolist(), strict=True) if a > 0 and b > 0]
    if not pairs:
        return NOT
    if formula == "dutot":
        return float(sum(b for _, b in pairs) / sum(a for a, _ in pairs))
    relatives = np.array([b / a for a, b in pairs])
    return float(relatives.mean() if formula == "carli" else relatives.prod() ** (1 / len(pairs)))


def class_mean_loop(prices: Array, formula: Elementary, run: Run, limit: int | None) -> Array:
    """Product by product and period by period, from the definition in REFERENCE's words: p[s]·I(s→t; matched)."""
    filled = prices.copy()
    for i in range(prices.shape[1]):
        own = None
        for t in range(len(prices)):
            if prices[t, i] > 0:
                own = t
            elif own is not None and (limit is None or t - own <= limit):
                priced = [s for s in range(t) if filled[s, i] > 0]
                start = priced[0] if run == "long" else priced[-1]
                filled[t, i] = filled[start, i] * movement(prices[start], prices[t], formula)
    return filled


@each_formula
@pytest.mark.parametrize(("run", "form"), [("short", "chain"), ("long", "direct")])
def test_product_missing_from_the_start_on_follows_the_published_index(
    formula: Elementary, run: Run, form: str
) -> None:
    (case,) = cases(f"elementary_{formula}_{form}")
    table = dataset("elementary").prices
    seen_once = np.full((len(table), 1), NOT)
    seen_once[0] = 100.0
    filled = impute_class_mean(np.hstack([table, seen_once]), formula, run).prices
    np.testing.assert_allclose(filled[:, -1], case.expected, rtol=0, atol=case.tolerance, err_msg=case.citation)


@each_formula
@pytest.mark.parametrize("item", range(4))
@pytest.mark.parametrize("month", [4, 6])
def test_long_run_gives_back_the_published_price_where_all_moved_alike(
    formula: Elementary, item: int, month: int
) -> None:
    # CPI Manual (2004), Table 9.1, from memory: May's prices are January's, July's are a tenth higher.
    table = dataset("elementary").prices
    prices = table.copy()
    prices[month, item] = NOT
    found = impute_class_mean(prices, formula, "long")
    close(found.prices, table)
    assert np.argwhere(found.imputed).tolist() == [[month, item]]


@each_panel
@each_formula
@pytest.mark.parametrize("run", RUNS)
@pytest.mark.parametrize("limit", LIMITS)
def test_class_mean_equals_the_loop(panel: Panel, formula: Elementary, run: Run, limit: int | None) -> None:
    found = impute_class_mean(panel.prices, formula, run, limit)
    expected = class_mean_loop(panel.prices, formula, run, limit)
    np.testing.assert_allclose(found.prices, expected, rtol=tolerances.TWIN, atol=0)


@st.composite
def lives(draw: st.DrawFn) -> Array:
    """Prices of five products over five periods; each but the first comes once and goes once."""
    prices, _ = draw(panels(shape=(5, 5)))
    for i in range(1, 5):
        start = draw(st.integers(0, 4))
        prices[:start, i] = NOT
        prices[draw(st.integers(start + 1, 5)) :, i] = NOT
    return prices


@each_formula
@PROPERTY
@given(prices=lives())
def test_short_run_leaves_the_chained_index_unchanged(formula: Elementary, prices: Array) -> None:
    filled = impute_class_mean(prices, formula, "short").prices
    close(series(filled, None, formula), series(prices, None, formula))


@each_formula
@PROPERTY
@given(panel=panels(gaps=True, shape=(5, 5)))
def test_long_run_leaves_the_direct_index_unchanged(formula: Elementary, panel: tuple[Array, Array]) -> None:
    prices, _ = panel
    filled = impute_class_mean(prices, formula, "long").prices
    if np.isfinite(prices[0]).any():
        close(series(filled, None, formula, form="direct"), series(prices, None, formula, form="direct"))


def test_imputing_by_another_formula_moves_the_index() -> None:
    prices = np.array([[1.0, 10.0, 4.0], [2.0, 10.0, NOT]])
    filled = impute_class_mean(prices, "jevons").prices
    difference = series(filled, None, "dutot")[1] / series(prices, None, "dutot")[1] - 1
    assert abs(difference) > tolerances.FAILS


@PROPERTY
@given(panel=panels(shape=(4, 3)))
def test_chain_is_right_again_once_the_product_is_back(panel: tuple[Array, Array]) -> None:
    # The price relative from the imputed to the own price makes good what the imputation got wrong.
    whole, _ = panel
    prices = whole.copy()
    prices[1:3, 0] = NOT
    filled = impute_class_mean(prices, "jevons", "short").prices
    close(filled[3], whole[3])
    close(series(filled, None, "jevons")[3], series(whole, None, "jevons", form="direct")[3])


def test_chain_without_imputation_is_not_right_again() -> None:
    prices = np.array([[1.0, 1.0], [NOT, 1.0], [2.0, 1.0]])
    filled = impute_class_mean(prices).prices
    close(filled, np.array([[1.0, 1.0], [1.0, 1.0], [2.0, 1.0]]))
    close(series(filled, None, "jevons"), np.array([1.0, 1.0, np.sqrt(2.0)]))
    close(series(prices, None, "jevons"), np.ones(3))


@pytest.mark.parametrize("formula", ["jevons", "dutot"])
@PROPERTY
@given(panel=panels(shape=(5, 4)))
def test_short_and_long_run_agree_for_transitive_formulas_while_the_others_stay(
    formula: Elementary, panel: tuple[Array, Array]
) -> None:
    prices, _ = panel
    prices[1:, 0] = NOT
    short, long = (impute_class_mean(prices, formula, run).prices for run in RUNS)
    close(short, long)


@each_panel
@pytest.mark.parametrize("run", RUNS)
@pytest.mark.parametrize("limit", LIMITS)
def test_what_is_imputed_does_not_change_when_periods_are_added(panel: Panel, run: Run, limit: int | None) -> None:
    whole = impute_class_mean(panel.prices, "jevons", run, limit)
    for end in range(1, len(panel.prices)):
        part = impute_class_mean(panel.prices[:end], "jevons", run, limit)
        np.testing.assert_allclose(part.prices, whole.prices[:end], rtol=tolerances.TWIN)
        assert (part.reasons == whole.reasons[:end]).all()


@each_panel
@pytest.mark.parametrize("limit", LIMITS)
def test_every_cell_has_its_reason(panel: Panel, limit: int | None) -> None:
    found = impute_class_mean(panel.prices, limit=limit)
    own = np.isfinite(panel.prices)
    assert (found.imputed == (np.isfinite(found.prices) & ~own)).all()
    assert (found.prices[own] == panel.prices[own]).all()
    assert ((found.reasons == Reason.OBSERVED) == own).all()
    assert ((found.reasons == Reason.CLASS_MEAN) == found.imputed).all()
    begun = np.logical_or.accumulate(own, axis=0)
    assert ((found.reasons == Reason.NOT_YET_SOLD) == ~begun).all()
    gap = pd.DataFrame(own.cumsum(axis=0)).apply(lambda ranks: ranks.groupby(ranks).cumcount()).to_numpy()
    beyond = begun & (gap > limit) if limit is not None else np.zeros_like(begun)
    assert ((found.reasons == Reason.BEYOND_LIMIT) == beyond).all()


def test_gap_longer_than_the_limit_ends_the_imputation_until_the_product_is_back() -> None:
    prices = np.array([[4.0, 1.0], [NOT, 2.0], [NOT, 3.0], [7.0, 3.0], [NOT, 6.0]])
    found = impute_class_mean(prices, limit=1)
    close(found.prices[:, 0], np.array([4.0, 8.0, NOT, 7.0, 14.0]))
    reasons = [Reason.OBSERVED, Reason.CLASS_MEAN, Reason.BEYOND_LIMIT, Reason.OBSERVED, Reason.CLASS_MEAN]
    assert found.reasons[:, 0].tolist() == reasons


def test_period_in_which_nothing_is_sold_is_bridged() -> None:
    prices = np.array([[4.0, 1.0], [NOT, NOT], [NOT, 3.0]])
    for run in RUNS:
        found = impute_class_mean(prices, "jevons", run)
        close(found.prices, np.array([[4.0, 1.0], [NOT, NOT], [12.0, 3.0]]))
        assert (found.reasons[1] == Reason.NOTHING_MATCHED).all()


@pytest.mark.parametrize("shape", [(1, 1), (3, 2)])
def test_panel_without_prices_stays_empty(shape: tuple[int, int]) -> None:
    found = impute_class_mean(np.full(shape, NOT))
    assert np.isnan(found.prices).all()
    assert (found.reasons == Reason.NOT_YET_SOLD).all()


def test_given_prices_are_not_written_to() -> None:
    prices = np.array([[4.0, 1.0], [NOT, 2.0]])
    impute_class_mean(prices)
    carry_forward(prices, columns=np.array([0]), limit=1)
    assert np.isnan(prices[1, 0])


@each_formula
@pytest.mark.parametrize("run", RUNS)
@PROPERTY
@given(panel=panels(gaps=True, shape=(4, 4)), scale=floats(0.01, 100.0), order=st.permutations(range(4)))
def test_imputed_prices_follow_the_currency_and_know_no_order(
    formula: Elementary, run: Run, panel: tuple[Array, Array], scale: float, order: list[int]
) -> None:
    prices, _ = panel
    filled = impute_class_mean(prices, formula, run).prices
    close(impute_class_mean(prices * scale, formula, run).prices, filled * scale)
    close(impute_class_mean(prices[:, order], formula, run).prices, filled[:, order])


@each_panel
@pytest.mark.parametrize("limit", [1, 2, 9])
def test_carrying_forward_equals_pandas_in_the_named_columns(panel: Panel, limit: int) -> None:
    columns = np.arange(0, panel.prices.shape[1], 2)
    found = carry_forward(panel.prices, columns=columns, limit=limit)
    expected = panel.prices.copy()
    expected[:, columns] = pd.DataFrame(panel.prices[:, columns]).ffill(limit=limit).to_numpy()
    np.testing.assert_array_equal(found.prices, expected)
    assert (found.imputed == (np.isnan(panel.prices) & np.isfinite(expected))).all()
    assert ((found.reasons == Reason.CARRIED_FORWARD) == found.imputed).all()


def test_products_that_are_not_named_are_not_carried_and_say_so() -> None:
    prices = np.array([[NOT, 2.0, 3.0, NOT], [4.0, NOT, NOT, NOT], [NOT, NOT, NOT, 5.0]])
    found = carry_forward(prices, columns=np.array([0, 2]), limit=1)
    assert found.reasons.tolist() == [
        [Reason.NOT_YET_SOLD, Reason.OBSERVED, Reason.OBSERVED, Reason.NOT_YET_SOLD],
        [Reason.OBSERVED, Reason.NOT_NAMED, Reason.CARRIED_FORWARD, Reason.NOT_YET_SOLD],
        [Reason.CARRIED_FORWARD, Reason.NOT_NAMED, Reason.BEYOND_LIMIT, Reason.OBSERVED],
    ]


def test_overlap_ratio_is_the_price_of_the_new_over_that_of_the_old() -> None:
    prices = np.array([[8.0, NOT], [10.0, 12.0], [NOT, 13.2]])
    assert overlap_ratio(prices, 0, 1, 1) == pytest.approx(1.2)
    periods = np.arange(3)
    found = overlap_ratio(prices, np.zeros(3, dtype=int), np.ones(3, dtype=int), periods)
    close(found, np.array([NOT, 1.2, NOT]))


@PROPERTY
@given(panel=panels(shape=(3, 3)), quality=floats(0.1, 10.0))
def test_overlap_replacement_moves_with_the_old_before_and_the_new_after(
    panel: tuple[Array, Array], quality: float
) -> None:
    prices, _ = panel
    prices[:, 1] *= quality
    continued = np.append(prices[:1, 0] * overlap_ratio(prices, 0, 1, 1), prices[1:, 1])
    close(continued[1:] / continued[:-1], np.array([prices[1, 0] / prices[0, 0], prices[2, 1] / prices[1, 1]]))
