"""Time product dummy and Geary-Khamis against a regression library, their definitions, and closed forms."""

from itertools import pairwise

import numpy as np
import pytest
import statsmodels.api as sm
from hypothesis import given
from numpy.typing import NDArray

from tests.kernels import tolerances
from tests.kernels.panels import PROPERTY, floats, random_panels
from tests.reference.published import dataset
from tillwright.errors import UnconnectedPeriods
from tillwright.kernels import geary_khamis, time_product_dummy
from tillwright.kernels.methods import make_index
from tillwright.kernels.recipes import Recipe
from tillwright.kernels.windows import Windows

Array = NDArray[np.float64]
METHODS = (time_product_dummy.window_levels, geary_khamis.window_levels)
REGRESSION = 1e-9
"""What a regression on some dozen dummies may lose to rounding."""
FIXED_POINT = 1e-13
"""Relative change at which the iteration of the definition is taken to have arrived."""


def whole(prices: Array) -> Windows:
    """One window over all periods."""
    return Windows.rolling(len(prices), len(prices))


def by_regression(prices: Array, quantities: Array) -> Array:
    """Log levels by statsmodels' weighted least squares on a column for every period and product."""
    period, product = np.nonzero(np.isfinite(prices))
    value = prices * quantities
    weight = value[period, product] / np.nansum(value, axis=1)[period]
    columns = np.zeros((len(period), len(prices) + prices.shape[1]))
    columns[np.arange(len(period)), period] = 1.0
    columns[np.arange(len(period)), len(prices) + product] = 1.0
    kept = [n for n in range(columns.shape[1]) if n != 0 and columns[:, n].any()]
    fitted = sm.WLS(np.log(prices[period, product]), columns[:, kept], weights=weight).fit()
    levels: Array = np.concatenate([[0.0], fitted.params[: len(prices) - 1]])
    return levels


def by_iteration(prices: Array, quantities: Array) -> Array:
    """Geary-Khamis by its definition: prices at given levels, levels at given prices, until neither moves."""
    sold = np.isfinite(prices)
    levels = np.ones(len(prices))
    for _ in range(200_000):
        mean = np.nansum(quantities * prices / levels[:, None], axis=0) / np.nansum(quantities, axis=0)
        following = np.nansum(prices * quantities, axis=1) / np.where(sold, quantities * mean, 0.0).sum(axis=1)
        following /= following[0]
        if np.abs(following / levels - 1).max() < FIXED_POINT:
            break
        levels = following
    else:
        pytest.fail("the iteration does not arrive")
    logs: Array = np.log(following)
    return logs


def connected() -> list[tuple[Array, Array]]:
    found = []
    for panel in random_panels():
        there = np.isfinite(panel.prices).any(axis=0)
        prices, quantities = panel.prices[:, there], panel.quantities[:, there]
        if not np.isfinite(prices).any(axis=1).all():
            continue
        sold = np.isfinite(prices).astype(float)
        if np.linalg.matrix_power(sold @ sold.T, len(prices)).all():
            found.append((prices, quantities))
    return found


@pytest.mark.parametrize("number", range(len(connected())))
def test_time_product_dummy_is_the_weighted_regression(number: int) -> None:
    prices, quantities = connected()[number]
    ((levels,),) = time_product_dummy.window_levels(prices, quantities, whole(prices))
    with np.errstate(all="ignore"):
        expected = by_regression(prices, quantities)
    np.testing.assert_allclose(levels, expected, rtol=0, atol=REGRESSION)


@pytest.mark.parametrize("number", range(len(connected())))
def test_geary_khamis_is_where_its_definition_arrives(number: int) -> None:
    prices, quantities = connected()[number]
    ((levels,),) = geary_khamis.window_levels(prices, quantities, whole(prices))
    np.testing.assert_allclose(levels, by_iteration(prices, quantities), rtol=0, atol=1e-9)


def test_two_periods_have_the_closed_forms_of_the_literature() -> None:
    # de Haan & Krsinich (2014): ln P = sum w ln r / sum w, w = s0 s1 / (s0 + s1).
    # Geary-Khamis for two periods: sum p1 h / sum p0 h, h = q0 q1 / (q0 + q1).
    data = dataset("artificial")
    for before, now in pairwise(range(5)):
        prices, quantities = data.prices[[before, now]], data.quantities[[before, now]]
        shares = prices * quantities / (prices * quantities).sum(axis=1, keepdims=True)
        weight = shares[0] * shares[1] / (shares[0] + shares[1])
        ((dummy,),) = time_product_dummy.window_levels(prices, quantities, whole(prices))
        assert dummy[1] == pytest.approx((weight * np.log(prices[1] / prices[0])).sum() / weight.sum(), abs=1e-12)
        harmonic = quantities[0] * quantities[1] / (quantities[0] + quantities[1])
        ((khamis,),) = geary_khamis.window_levels(prices, quantities, whole(prices))
        assert khamis[1] == pytest.approx(np.log((prices[1] @ harmonic) / (prices[0] @ harmonic)), abs=1e-12)


@pytest.mark.parametrize("method", METHODS)
def test_drift_example_ends_at_one(method: object) -> None:
    # Diewert (2021), Tables 1-2: period 4 repeats period 1, and a transitive index returns to 1.
    data = dataset("chaindrift")
    ((levels,),) = method(data.prices, data.quantities, whole(data.prices))  # type: ignore[operator]
    assert abs(np.exp(levels[-1]) - 1) <= tolerances.EXACT


@pytest.mark.parametrize("method", METHODS)
@PROPERTY
@given(factor=floats(0.01, 100.0))
def test_prices_that_move_together_give_their_movement(method: object, factor: float) -> None:
    data = dataset("artificial")
    prices = np.vstack([data.prices[0], data.prices[0] * factor, data.prices[0] * factor**2])
    ((levels,),) = method(prices, data.quantities[:3], whole(prices))  # type: ignore[operator]
    np.testing.assert_allclose(levels, np.log([1.0, factor, factor**2]), rtol=0, atol=1e-10)


@pytest.mark.parametrize("method", METHODS)
@PROPERTY
@given(unit=floats(1e-6, 1e6))
def test_units_of_measure_do_not_matter(method: object, unit: float) -> None:
    data = dataset("artificial")
    units = np.array([unit, 1.0, 1.0, 1.0, 1.0, 1.0])
    ((levels,),) = method(data.prices, data.quantities, whole(data.prices))  # type: ignore[operator]
    ((changed,),) = method(data.prices * units, data.quantities / units, whole(data.prices))  # type: ignore[operator]
    np.testing.assert_allclose(changed, levels, rtol=0, atol=1e-9)


@pytest.mark.parametrize("method", METHODS)
def test_windows_without_a_common_product_are_refused_with_their_periods(method: object) -> None:
    prices = np.array([[1.0, np.nan], [1.1, np.nan], [np.nan, 2.0], [np.nan, 2.1]])
    with pytest.raises(UnconnectedPeriods) as caught:
        method(prices, np.ones_like(prices), whole(prices))  # type: ignore[operator]
    assert caught.value.groups == ((0, 1), (2, 3))


@pytest.mark.parametrize("name", ["tpd", "geary-khamis"])
def test_empty_period_has_no_level_and_the_others_do(name: str) -> None:
    prices = np.array([[1.0, 2.0], [np.nan, np.nan], [1.1, 2.2], [1.2, 2.4]])
    index = make_index(prices, np.ones_like(prices), Recipe(name, window=3))
    np.testing.assert_allclose(index, [1.0, np.nan, 1.1, 1.2], rtol=1e-12)


@pytest.mark.parametrize("name", ["tpd", "geary-khamis"])
def test_extreme_prices_give_finite_levels(name: str) -> None:
    prices = np.array([[1e-12, 1e12, 1.0], [2e-12, 2e12, 2.0], [3e-12, 3e12, 3.0]])
    index = make_index(prices, np.ones_like(prices), Recipe(name))
    np.testing.assert_allclose(index, [1.0, 2.0, 3.0], rtol=1e-9)
