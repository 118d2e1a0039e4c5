"""Axioms of the multilateral and the base-weighted methods, and counter-examples where one is known to fail.

Axioms: CPI Manual (2004), ch. 16; Balk (1996) and Diewert (1999) for more than two periods. The
methods are held over one window; an axiom that a method does not satisfy is left out of its list.
"""

import math
from typing import Literal

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from tests.kernels import tolerances, twins, twins_windows
from tests.kernels.panels import PROPERTY, floats, panels, powers_of_ten
from tillwright.kernels.methods import make_index
from tillwright.kernels.recipes import Recipe

Array = NDArray[np.float64]
Sold = tuple[Array, Array]
Base = Literal["lowe", "young", "geometric-young"]

GEKS_METHODS = ("geks-jevons", "geks-fisher", "geks-tornqvist", "geks-walsh")
TRANSITIVE = (*GEKS_METHODS, "tpd", "tpd-unweighted", "geary-khamis")
ALL = (*TRANSITIVE, "similarity")
UNWEIGHTED = ("geks-jevons", "tpd-unweighted")
SCALE_FREE = tuple(method for method in ALL if method != "geary-khamis")
BASE_WEIGHTED: tuple[Base, ...] = ("lowe", "young", "geometric-young")

each_method = pytest.mark.parametrize("method", ALL)
each_transitive = pytest.mark.parametrize("method", TRANSITIVE)
each_base_weighted = pytest.mark.parametrize("formula", BASE_WEIGHTED)


def close(found: Array, expected: Array | float) -> None:
    """Levels equal to a relative AXIOM."""
    np.testing.assert_allclose(found, expected, rtol=tolerances.AXIOM, atol=0)


def index(panel: Sold, method: str) -> Array:
    """The index over one window."""
    return make_index(*panel, Recipe(method))


def base_weighted(panel: Sold, formula: Base, weight_period: int, form: Literal["chained", "direct"]) -> Array:
    """The index with the weights of one period."""
    return make_index(*panel, Recipe(formula, form=form, weight_periods=(weight_period,)))


@st.composite
def linked_panels(draw: st.DrawFn) -> Sold:
    """Five periods and products with gaps; product k is sold in periods k and k + 1."""
    prices, quantities = draw(panels(shape=(5, 5)))
    sold = draw(st.lists(st.booleans(), min_size=25, max_size=25).map(lambda x: np.array(x).reshape(5, 5)))
    sold |= np.eye(5, dtype=bool) | np.eye(5, k=-1, dtype=bool)
    return np.where(sold, prices, math.nan), np.where(sold, quantities, math.nan)


# Axioms over one window


@each_method
@PROPERTY
@given(panel=linked_panels())
def test_constant_prices_give_one(method: str, panel: Sold) -> None:
    prices = np.where(np.isnan(panel[0]), math.nan, np.linspace(1, 7, 5))
    close(index((prices, panel[1]), method), 1.0)


@each_method
@PROPERTY
@given(panel=linked_panels(), again=st.integers(0, 4))
def test_period_that_repeats_an_earlier_one_has_its_level(method: str, panel: Sold, again: int) -> None:
    repeated = np.vstack([panel[0], panel[0][again]]), np.vstack([panel[1], panel[1][again]])
    found = index(repeated, method)
    close(found[-1], found[again])


@pytest.mark.parametrize("method", UNWEIGHTED)
@PROPERTY
@given(panel=panels(shape=(4, 3)), quantities=panels(shape=(5, 3)))
def test_equal_prices_of_a_complete_panel_have_equal_levels_whatever_is_bought(
    method: str, panel: Sold, quantities: Sold
) -> None:
    found = index((np.vstack([panel[0], panel[0][:1]]), quantities[1]), method)
    close(found[-1], 1.0)


@each_method
@PROPERTY
@given(panel=linked_panels(), factors=st.tuples(*[powers_of_ten(-11, 11)] * 5))
def test_one_common_movement_is_the_index(method: str, panel: Sold, factors: tuple[float, ...]) -> None:
    movement = np.array(factors)
    prices = np.where(np.isnan(panel[0]), math.nan, np.linspace(1, 7, 5) * movement[:, None])
    close(index((prices, panel[1]), method), movement / movement[0])


@each_method
@PROPERTY
@given(panel=linked_panels(), factors=st.tuples(*[powers_of_ten(-11, 11)] * 5))
def test_proportionality_in_the_prices_of_each_period(method: str, panel: Sold, factors: tuple[float, ...]) -> None:
    scale = np.array(factors)
    scaled = index((panel[0] * scale[:, None], panel[1]), method)
    close(scaled, index(panel, method) * scale / scale[0])


@pytest.mark.parametrize("method", SCALE_FREE)
@PROPERTY
@given(panel=linked_panels(), factors=st.tuples(*[powers_of_ten(-6, 6)] * 5))
def test_invariance_to_the_quantity_scale_of_each_period(method: str, panel: Sold, factors: tuple[float, ...]) -> None:
    scaled = panel[0], panel[1] * np.array(factors)[:, None]
    close(index(scaled, method), index(panel, method))


@each_method
@PROPERTY
@given(panel=linked_panels(), factors=st.tuples(*[powers_of_ten(-6, 6)] * 5))
def test_commensurability(method: str, panel: Sold, factors: tuple[float, ...]) -> None:
    units = np.array(factors)
    close(index((panel[0] * units, panel[1] / units), method), index(panel, method))


@each_method
@PROPERTY
@given(panel=linked_panels(), order=st.permutations(range(5)))
def test_order_of_products_does_not_matter(method: str, panel: Sold, order: list[int]) -> None:
    close(index((panel[0][:, order], panel[1][:, order]), method), index(panel, method))


@each_transitive
@PROPERTY
@given(panel=linked_panels(), order=st.permutations(range(5)))
def test_levels_do_not_depend_on_the_first_period(method: str, panel: Sold, order: list[int]) -> None:
    expected = index(panel, method)[order]
    close(index((panel[0][order], panel[1][order]), method), expected / expected[0])


@each_transitive
@PROPERTY
@given(panel=linked_panels())
def test_time_reversal(method: str, panel: Sold) -> None:
    backwards = index((panel[0][::-1], panel[1][::-1]), method)
    close(backwards[-1] * index(panel, method)[-1], 1.0)


@each_method
@PROPERTY
@given(panel=panels(shape=(2, 4)))
def test_two_periods_stay_between_the_smallest_and_the_largest_relative(method: str, panel: Sold) -> None:
    relatives = panel[0][1] / panel[0][0]
    found = index(panel, method)[1]
    assert relatives.min() * (1 - tolerances.AXIOM) <= found <= relatives.max() * (1 + tolerances.AXIOM)


@PROPERTY
@given(panel=linked_panels())
def test_geary_khamis_is_additive(panel: Sold) -> None:
    # At the reference prices v the quantities of every period are worth its turnover at its level.
    prices, quantities = panel
    levels = index(panel, "geary-khamis")
    worth = np.nansum(prices * quantities / levels[:, None], axis=0) / np.nansum(quantities, axis=0)
    value = np.nansum(prices * quantities, axis=1)
    close(levels * np.nansum(worth * quantities, axis=1) / value, 1.0)


@PROPERTY
@given(panel=panels(shape=(5, 4)), other=panels(shape=(5, 4)))
def test_unweighted_methods_ignore_quantities(panel: Sold, other: Sold) -> None:
    for method in UNWEIGHTED:
        close(index((panel[0], other[1]), method), index(panel, method))


@PROPERTY
@given(panel=panels(shape=(5, 4)), unit=floats(0.5, 2.0))
def test_similarity_links_proportional_prices_however_far_apart(panel: Sold, unit: float) -> None:
    prices, quantities = panel
    found = index((np.vstack([prices, prices[0] * unit]), np.vstack([quantities, quantities[-1]])), "similarity")
    close(found[-1], unit)


# Base-weighted formulas


@pytest.mark.parametrize("formula", ["lowe", "geometric-young"])
@PROPERTY
@given(panel=panels(shape=(5, 4)), weight_period=st.integers(0, 4))
def test_fixed_weights_are_circular_on_complete_panels(formula: Base, panel: Sold, weight_period: int) -> None:
    chained = base_weighted(panel, formula, weight_period, "chained")
    close(chained, base_weighted(panel, formula, weight_period, "direct"))


@each_base_weighted
@PROPERTY
@given(panel=panels(shape=(4, 4)), factors=st.tuples(*[powers_of_ten(-6, 6)] * 4), weight_period=st.integers(0, 3))
def test_commensurability_of_base_weighted_formulas(
    formula: Base, panel: Sold, factors: tuple[float, ...], weight_period: int
) -> None:
    units = np.array(factors)
    changed = panel[0] * units, panel[1] / units
    for form in ("chained", "direct"):
        close(base_weighted(changed, formula, weight_period, form), base_weighted(panel, formula, weight_period, form))


@each_base_weighted
@PROPERTY
@given(panel=panels(shape=(4, 4)), factors=st.tuples(*[powers_of_ten(-6, 6)] * 4))
def test_one_common_movement_is_the_base_weighted_index(formula: Base, panel: Sold, factors: tuple[float, ...]) -> None:
    movement = np.array(factors)
    moved = np.linspace(1, 7, 4) * movement[:, None], panel[1]
    for form in ("chained", "direct"):
        close(base_weighted(moved, formula, 2, form), movement / movement[0])


@PROPERTY
@given(panel=panels(shape=(2, 4)))
def test_weights_of_the_first_period_are_laspeyres(panel: Sold) -> None:
    laspeyres = make_index(*panel, Recipe("laspeyres"))
    close(base_weighted(panel, "lowe", 0, "direct"), laspeyres)
    close(base_weighted(panel, "young", 0, "direct"), laspeyres)
    close(base_weighted(panel, "geometric-young", 0, "direct"), make_index(*panel, Recipe("geometric-laspeyres")))
    close(base_weighted(panel, "lowe", 1, "direct"), make_index(*panel, Recipe("paasche")))


@PROPERTY
@given(panel=panels(shape=(2, 4)))
def test_young_there_and_back_is_never_below_one(panel: Sold) -> None:
    # CPI Manual (2004), ch. 15: an arithmetic mean against the harmonic mean with the same weights.
    prices, quantities = panel
    there_and_back = np.vstack([prices, prices[:1]]), np.vstack([quantities, quantities[:1]])
    assert base_weighted(there_and_back, "young", 0, "chained")[-1] >= 1 - tolerances.AXIOM


# Counter-examples


def test_young_fails_time_reversal() -> None:
    prices = np.array([[1.0, 1.0], [2.0, 0.5], [1.0, 1.0]])
    found = base_weighted((prices, np.ones((3, 2))), "young", 0, "chained")
    np.testing.assert_allclose(found, [1.0, 1.25, 1.25**2], rtol=tolerances.EXACT)
    assert found[-1] - 1 > tolerances.FAILS


@each_base_weighted
def test_chained_base_weights_drift_when_products_are_missing_for_a_while(formula: Base) -> None:
    # Product 2 misses its own return: the last period repeats the first, the chain does not.
    prices = np.array([[1.0, 1.0], [2.0, 1.0], [2.0, math.nan], [1.0, 1.0]])
    panel = prices, np.where(np.isnan(prices), math.nan, 1.0)
    last = base_weighted(panel, formula, 0, "chained")[-1]
    assert last == pytest.approx({"lowe": 0.75, "young": 0.75, "geometric-young": math.sqrt(0.5)}[formula])
    assert abs(last - 1) > tolerances.FAILS
    assert base_weighted(panel, formula, 0, "direct")[-1] == pytest.approx(1.0, rel=tolerances.EXACT)


def test_unweighted_dummies_follow_an_item_of_tiny_turnover() -> None:
    prices = np.array([[1.0, 1.0, 1.0], [1.0, 1.0, 8.0]])
    quantities = np.array([[1e6, 1e6, 1e-3], [1e6, 1e6, 1e-3]])
    unweighted = index((prices, quantities), "tpd-unweighted")[1]
    assert unweighted == pytest.approx(2.0, rel=tolerances.EXACT)
    assert abs(unweighted - 1) > tolerances.FAILS
    assert index((prices, quantities), "tpd")[1] == pytest.approx(1.0, abs=1e-7)


def test_geary_khamis_depends_on_the_quantity_scale_of_a_period() -> None:
    # Diewert (1999): a large country dominates the reference prices.
    prices = np.array([[1.0, 1.0], [1.0, 3.0], [2.0, 1.0]])
    quantities = np.array([[1.0, 1.0], [3.0, 1.0], [1.0, 4.0]])
    plain = index((prices, quantities), "geary-khamis")
    larger = index((prices, quantities * np.array([[1.0], [1000.0], [1.0]])), "geary-khamis")
    assert abs(larger[2] / plain[2] - 1) > tolerances.FAILS


def test_geks_and_dummies_fail_the_strict_identity_of_prices_alone() -> None:
    # Equal prices, other quantities: only a period that repeats both has the same level for sure.
    prices = np.array([[1.0, 1.0], [2.0, 0.5], [1.0, 1.0]])
    quantities = np.array([[9.0, 1.0], [1.0, 1.0], [1.0, 9.0]])
    for method in ("geks-fisher", "geks-tornqvist", "geks-walsh", "tpd", "geary-khamis"):
        assert abs(index((prices, quantities), method)[2] - 1) > tolerances.FAILS, method


def reversal_of_similarity(panel: Sold) -> tuple[float, float]:
    """Last level forwards, and the inverse of the last level of the reversed panel, by the twin."""
    forwards = twins_windows.similarity(*panel)[-1]
    return forwards, 1 / twins_windows.similarity(panel[0][::-1], panel[1][::-1])[-1]


def test_similarity_fails_time_reversal() -> None:
    rng = np.random.default_rng(11)
    prices, quantities = np.exp(rng.normal(0, 0.5, (4, 3))), np.exp(rng.normal(0, 0.5, (4, 3)))
    forwards = index((prices, quantities), "similarity")[-1]
    backwards = 1 / index((prices[::-1], quantities[::-1]), "similarity")[-1]
    np.testing.assert_allclose(
        (forwards, backwards), reversal_of_similarity((prices, quantities)), rtol=tolerances.TWIN
    )
    assert abs(forwards / backwards - 1) > tolerances.FAILS


def test_sato_vartia_fails_monotonicity() -> None:
    # Reinsdorf and Dorfman (1999): a price rises and the index falls.
    quantities = np.array([[0.6, 4.4], [40.0, 0.03]])
    prices = np.array([[1.0, 1.0], [0.03, 80.0]])
    dearer = np.array([[1.0, 1.0], [0.3, 80.0]])
    before, after = (make_index(p, quantities, Recipe("sato-vartia"))[1] for p in (prices, dearer))
    for p, found in ((prices, before), (dearer, after)):
        assert found == pytest.approx(twins.sato_vartia(twins.matches(p, quantities, 0, 1)), rel=tolerances.TWIN)
    assert before / after - 1 > tolerances.FAILS


SALE = np.array([[1.0, 1.0], [0.5, 1.0], [1.0, 1.0], [0.8, 1.2], [1.0, 1.0]])
STOCKED_UP = np.array([[10.0, 10.0], [200.0, 5.0], [1.0, 10.0], [8.0, 10.0], [10.0, 10.0]])
GAPS = np.array([[1.0, 1.0, 1.0], [2.0, 1.0, 3.0], [2.0, math.nan, 5.0], [2.0, 1.0, math.nan], [1.0, 1.0, 1.0]])


@each_transitive
def test_rolling_windows_fail_the_identity_of_periods_in_different_windows(method: str) -> None:
    # The last period repeats the first. Without weights it takes a product that goes and comes back.
    panel = (GAPS, np.where(np.isnan(GAPS), math.nan, 1.0)) if method in UNWEIGHTED else (SALE, STOCKED_UP)
    rolling = make_index(*panel, Recipe(method, window=3, splice="movement"))
    expected = twins_windows.series(*panel, method, window=3, splice="movement")
    np.testing.assert_allclose(rolling, expected, rtol=tolerances.TWIN)
    assert abs(rolling[-1] - 1) > tolerances.FAILS
    close(index(panel, method)[-1], 1.0)
