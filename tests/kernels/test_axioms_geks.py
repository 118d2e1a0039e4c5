"""Axioms of GEKS: transitivity, base invariance, optimality, and the CCDI level form."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from tests.kernels import tolerances, twins
from tests.kernels.panels import PROPERTY, floats, panels, powers_of_ten
from tests.kernels.variants import GEKS_FORMULAS, rolling_geks
from tillwright.errors import UnconnectedPeriods
from tillwright.kernels import bilateral

Array = NDArray[np.float64]
Sold = tuple[Array, Array]

each_formula = pytest.mark.parametrize("formula", GEKS_FORMULAS)


def close(found: Array, expected: Array) -> None:
    """Log levels equal to AXIOM, NaN in the same places."""
    np.testing.assert_allclose(found, expected, rtol=0, atol=tolerances.AXIOM)


def log_pairs(panel: Sold, formula: str) -> Array:
    """Log levels of all pairs."""
    logs: Array = np.log(bilateral.pair_levels(*panel, formula))
    return logs


def one_window(panel: Sold, formula: str) -> Array:
    """Log GEKS levels with all periods in one window."""
    row: Array = rolling_geks(log_pairs(panel, formula), len(panel[0]))[0]
    return row


def ccdi_level_form(panel: Sold) -> Array:
    """CCDI: ln P_t = Σ ½(s_t + s̄)(ln p_t - mean ln p), against period 0, on a complete panel."""
    prices, quantities = panel
    values = prices * quantities
    shares = values / values.sum(axis=1, keepdims=True)
    logs = np.log(prices)
    level = ((shares + shares.mean(axis=0)) / 2 * (logs - logs.mean(axis=0))).sum(axis=1)
    return np.asarray(level - level[0])


@st.composite
def bridged_panels(draw: st.DrawFn) -> Sold:
    """Panels with gaps, held together by two products that overlap in one period."""
    prices, quantities = draw(panels(gaps=True, shape=(5, 4)))
    keep = draw(st.integers(1, 4))
    for column, rows in ((0, slice(0, keep + 1)), (1, slice(keep, 5))):
        prices[rows, column] = draw(st.lists(floats(0.05, 50.0), min_size=5, max_size=5))[rows]
        quantities[rows, column] = draw(st.lists(floats(0.1, 1000.0), min_size=5, max_size=5))[rows]
    return prices, quantities


@PROPERTY
@given(panel=panels())
def test_geks_tornqvist_is_the_ccdi_level_form(panel: Sold) -> None:
    # Caves, Christensen and Diewert (1982); Inklaar and Diewert (2016).
    close(one_window(panel, "tornqvist"), ccdi_level_form(panel))


@PROPERTY
@given(panel=panels())
def test_geks_tornqvist_twin_is_the_ccdi_level_form(panel: Sold) -> None:
    pairs = twins.pair_levels(*panel, "tornqvist")
    close(np.array(twins.window_levels(pairs, len(pairs))[0]), ccdi_level_form(panel))


@each_formula
@PROPERTY
@given(panel=bridged_panels(), order=st.permutations(range(5)))
def test_levels_do_not_depend_on_the_base_period(formula: str, panel: Sold, order: list[int]) -> None:
    # Transitivity inside a window: the relative of any two periods is the same whatever
    # period comes first.
    shuffled = panel[0][order], panel[1][order]
    expected = one_window(panel, formula)[order]
    close(one_window(shuffled, formula), expected - expected[0])


@each_formula
@PROPERTY
@given(panel=panels(shape=(6, 3)), start=st.integers(0, 3))
def test_chaining_inside_a_window_is_the_direct_comparison(formula: str, panel: Sold, start: int) -> None:
    # Every pair: P(s, t) computed with s as base equals P(0, t)/P(0, s) of the same window.
    logs = log_pairs(panel, formula)[start : start + 3, start : start + 3]
    row = rolling_geks(log_pairs(panel, formula), 3)[start]
    for s in range(3):
        by_definition = (logs[s][:, None] + logs).mean(axis=0)
        close(row - row[s], by_definition)


@each_formula
@PROPERTY
@given(panel=bridged_panels())
def test_normal_equations_hold_over_the_pairs_that_exist(formula: str, panel: Sold) -> None:
    logs = log_pairs(panel, formula)
    level = one_window(panel, formula)
    residuals = level - level[:, None] - logs
    close(np.where(np.isnan(logs), 0.0, residuals).sum(axis=0), np.zeros(len(level)))


@each_formula
@PROPERTY
@given(panel=panels(shape=(4, 4)))
def test_period_that_repeats_the_first_has_its_level(formula: str, panel: Sold) -> None:
    prices, quantities = panel
    again = np.vstack([prices, prices[:1]]), np.vstack([quantities, quantities[:1]])
    close(one_window(again, formula)[-1], np.array(0.0))


@each_formula
@PROPERTY
@given(panel=bridged_panels(), factors=st.tuples(*[powers_of_ten(-11, 11)] * 5))
def test_one_common_movement_is_the_index(formula: str, panel: Sold, factors: tuple[float, ...]) -> None:
    movement = np.array(factors)
    base = np.linspace(0.1, 10, 4)
    prices = np.where(np.isnan(panel[0]), np.nan, base * movement[:, None])
    close(one_window((prices, panel[1]), formula), np.log(movement / movement[0]))


@each_formula
@PROPERTY
@given(panel=bridged_panels(), factors=st.tuples(*[powers_of_ten(-11, 11)] * 5))
def test_scale_of_each_period_goes_into_its_level(formula: str, panel: Sold, factors: tuple[float, ...]) -> None:
    scale = np.array(factors)
    scaled = one_window((panel[0] * scale[:, None], panel[1]), formula)
    close(scaled, one_window(panel, formula) + np.log(scale) - np.log(scale[0]))


@each_formula
@PROPERTY
@given(panel=panels(shape=(2, 4)))
def test_two_periods_are_the_bilateral_index(formula: str, panel: Sold) -> None:
    close(one_window(panel, formula), log_pairs(panel, formula)[0])


@each_formula
@PROPERTY
@given(panel=panels(gaps=True, shape=(5, 3), prices=powers_of_ten(-12, 12)))
def test_incomplete_panels_over_twenty_four_decades(formula: str, panel: Sold) -> None:
    pairs = twins.pair_levels(*panel, formula)
    groups = twins.unconnected_groups(pairs, 3)
    if groups:
        with pytest.raises(UnconnectedPeriods) as raised:
            rolling_geks(np.log(np.array(pairs)), 3)
        assert raised.value.groups == groups
    else:
        found = rolling_geks(np.log(np.array(pairs)), 3)
        close(found, np.array(twins.window_levels(pairs, 3)))
