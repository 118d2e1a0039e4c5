"""Axioms of the bilateral formulas as property tests.

Axioms and counter-examples: CPI Manual (2004), ch. 16 and 20 (tests of index number theory);
Diewert (2021), chain drift paper. Formulas for which an axiom is known to fail are left out of
its list, and the failures that matter in practice have a counter-example of their own.
"""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from tests.kernels import tolerances, twins
from tests.kernels.panels import PROPERTY, floats, panels, powers_of_ten
from tests.kernels.variants import all_but, on_offer
from tests.reference.published import dataset
from tillwright.choices import BILATERAL_FORMULAS
from tillwright.kernels import bilateral

Array = NDArray[np.float64]

REVERSIBLE = on_offer("jevons", "dutot", "cswd", "fisher", "tornqvist", "walsh")
REVERSIBLE += on_offer("marshall-edgeworth", "sato-vartia")
# Pairs in which one formula is the time antithesis of the other.
ANTITHESES = [("carli", "harmonic"), ("laspeyres", "paasche")]
ANTITHESES += [("geometric-laspeyres", "geometric-paasche")]
UNWEIGHTED = on_offer("jevons", "dutot", "carli", "harmonic", "cswd")


def close(found: Array, expected: Array) -> None:
    """Levels equal to a relative AXIOM, NaN in the same places."""
    np.testing.assert_allclose(found, expected, rtol=tolerances.AXIOM, atol=0)


each_formula = pytest.mark.parametrize("formula", BILATERAL_FORMULAS)


@each_formula
@PROPERTY
@given(panel=panels(gaps=True, shape=(3, 4)))
def test_identity(formula: str, panel: tuple[Array, Array]) -> None:
    prices, quantities = panel
    prices = np.where(np.isnan(prices), np.nan, np.linspace(1, 7, prices.shape[1]))
    levels = bilateral.pair_levels(prices, quantities, formula)
    close(levels, np.where(np.isnan(levels), np.nan, 1.0))
    close(np.diagonal(levels), np.where(np.isnan(prices).all(axis=1), np.nan, 1.0))


@each_formula
@PROPERTY
@given(panel=panels(gaps=True, shape=(4, 4)), factors=st.tuples(*[floats(0.01, 100.0)] * 4))
def test_one_common_movement_is_the_index(formula: str, panel: tuple[Array, Array], factors: tuple[float, ...]) -> None:
    prices, quantities = panel
    movement = np.array(factors)
    prices = np.where(np.isnan(prices), np.nan, np.linspace(1, 7, 4) * movement[:, None])
    levels = bilateral.pair_levels(prices, quantities, formula)
    close(levels, np.where(np.isnan(levels), np.nan, movement / movement[:, None]))


@each_formula
@PROPERTY
@given(panel=panels(gaps=True, shape=(3, 4)), factors=st.tuples(*[powers_of_ten(-11, 11)] * 3))
def test_proportionality_in_the_prices_of_each_period(
    formula: str, panel: tuple[Array, Array], factors: tuple[float, ...]
) -> None:
    prices, quantities = panel
    scale = np.array(factors)
    scaled = bilateral.pair_levels(prices * scale[:, None], quantities, formula)
    plain = bilateral.pair_levels(prices, quantities, formula)
    close(scaled, plain * scale / scale[:, None])


@pytest.mark.parametrize("formula", all_but("marshall-edgeworth"))
@PROPERTY
@given(panel=panels(gaps=True, shape=(3, 4)), factors=st.tuples(*[powers_of_ten(-6, 6)] * 3))
def test_invariance_to_the_quantity_scale_of_each_period(
    formula: str, panel: tuple[Array, Array], factors: tuple[float, ...]
) -> None:
    prices, quantities = panel
    scaled = quantities * np.array(factors)[:, None]
    close(
        bilateral.pair_levels(prices, scaled, formula),
        bilateral.pair_levels(prices, quantities, formula),
    )


@pytest.mark.parametrize("formula", all_but("dutot"))
@PROPERTY
@given(panel=panels(gaps=True, shape=(3, 4)), factors=st.tuples(*[powers_of_ten(-6, 6)] * 4))
def test_commensurability(formula: str, panel: tuple[Array, Array], factors: tuple[float, ...]) -> None:
    prices, quantities = panel
    units = np.array(factors)
    close(
        bilateral.pair_levels(prices * units, quantities / units, formula),
        bilateral.pair_levels(prices, quantities, formula),
    )


def test_dutot_depends_on_the_units() -> None:
    prices = np.array([[1.0, 1.0], [1.0, 2.0]])
    quantities = np.ones((2, 2))
    per_kilogram = bilateral.series(prices, quantities, "dutot")[1]
    per_gram = bilateral.series(prices * [1.0, 1000.0], quantities / [1.0, 1000.0], "dutot")[1]
    assert per_kilogram == pytest.approx(1.5, rel=tolerances.EXACT)
    assert per_gram == pytest.approx(2001 / 1001, rel=tolerances.EXACT)


@pytest.mark.parametrize("formula", REVERSIBLE)
@PROPERTY
@given(panel=panels(gaps=True))
def test_time_reversal(formula: str, panel: tuple[Array, Array]) -> None:
    levels = bilateral.pair_levels(*panel, formula)
    close(levels * levels.T, np.where(np.isnan(levels), np.nan, 1.0))


@pytest.mark.parametrize(("formula", "antithesis"), [p for p in ANTITHESES if set(p) <= set(BILATERAL_FORMULAS)])
@PROPERTY
@given(panel=panels(gaps=True))
def test_time_antithesis(formula: str, antithesis: str, panel: tuple[Array, Array]) -> None:
    levels = bilateral.pair_levels(*panel, formula)
    reversed_levels = bilateral.pair_levels(*panel, antithesis).T
    close(levels * reversed_levels, np.where(np.isnan(levels), np.nan, 1.0))


@pytest.mark.parametrize("formula", on_offer("fisher", "sato-vartia"))
@PROPERTY
@given(panel=panels(shape=(2, 4)))
def test_factor_reversal(formula: str, panel: tuple[Array, Array]) -> None:
    prices, quantities = panel
    price = bilateral.series(prices, quantities, formula)[1]
    quantity = bilateral.series(quantities, prices, formula)[1]
    values = (prices * quantities).sum(axis=1)
    close(np.array(price * quantity), np.array(values[1] / values[0]))


@each_formula
@PROPERTY
@given(panel=panels())
def test_mean_value(formula: str, panel: tuple[Array, Array]) -> None:
    prices, _ = panel
    levels = bilateral.pair_levels(*panel, formula)
    relatives = prices[None, :, :] / prices[:, None, :]
    assert (levels >= relatives.min(axis=2) * (1 - tolerances.AXIOM)).all()
    assert (levels <= relatives.max(axis=2) * (1 + tolerances.AXIOM)).all()


@each_formula
@PROPERTY
@given(panel=panels(gaps=True, shape=(3, 5)), order=st.permutations(range(5)))
def test_order_of_products_does_not_matter(formula: str, panel: tuple[Array, Array], order: list[int]) -> None:
    prices, quantities = panel
    close(
        bilateral.pair_levels(prices[:, order], quantities[:, order], formula),
        bilateral.pair_levels(prices, quantities, formula),
    )


@pytest.mark.parametrize("formula", UNWEIGHTED)
@PROPERTY
@given(panel=panels(gaps=True, shape=(3, 4)), other=panels(shape=(3, 4)))
def test_unweighted_formulas_ignore_quantities(
    formula: str, panel: tuple[Array, Array], other: tuple[Array, Array]
) -> None:
    prices, quantities = panel
    changed = np.where(np.isnan(prices), np.nan, other[1])
    close(
        bilateral.pair_levels(prices, changed, formula),
        bilateral.pair_levels(prices, quantities, formula),
    )


@pytest.mark.parametrize("formula", on_offer("jevons", "dutot"))
@PROPERTY
@given(panel=panels())
def test_unweighted_circularity(formula: str, panel: tuple[Array, Array]) -> None:
    close(
        bilateral.series(*panel, formula, form="chained"),
        bilateral.series(*panel, formula, form="direct"),
    )


@pytest.mark.parametrize("formula", on_offer("fisher", "tornqvist", "walsh", "sato-vartia"))
def test_superlative_formulas_are_not_circular(formula: str) -> None:
    # Diewert (2021), Tables 1-2: the sale of product 1 in period 2 bends the chain.
    data = dataset("chaindrift")
    levels = bilateral.pair_levels(data.prices, data.quantities, formula)
    assert abs(levels[0, 1] * levels[1, 2] / levels[0, 2] - 1) > tolerances.FAILS


@each_formula
@PROPERTY
@given(panel=panels(gaps=True, prices=powers_of_ten(-12, 12)))
def test_prices_over_twenty_four_decades(formula: str, panel: tuple[Array, Array]) -> None:
    expected = np.array(twins.pair_levels(*panel, formula))
    found = bilateral.pair_levels(*panel, formula)
    np.testing.assert_allclose(found, expected, rtol=tolerances.TWIN, atol=0)


@each_formula
@pytest.mark.parametrize("scale", [1e-12, 1e-6, 1e6, 1e12])
def test_scale_of_all_prices_does_not_matter(formula: str, scale: float) -> None:
    rng = np.random.default_rng(7)
    prices = rng.uniform(0.5, 2.0, (4, 300))
    quantities = rng.uniform(1.0, 50.0, (4, 300))
    close(
        bilateral.pair_levels(prices * scale, quantities, formula),
        bilateral.pair_levels(prices, quantities, formula),
    )
