"""Hedonic regressions against a regression library; imputation against loops, Törnqvist, GEKS and a true model."""

import itertools
import math
from dataclasses import dataclass
from typing import Any

import numpy as np
import pytest
import statsmodels.api as sm
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from tests.kernels import tolerances
from tests.kernels.panels import PROPERTY
from tests.kernels.variants import rolling_geks
from tillwright.errors import TooFewObservations
from tillwright.kernels import bilateral
from tillwright.kernels.hedonic import Errors, Hedonic, double_imputation_tornqvist, impute_pairs, time_dummy
from tillwright.kernels.methods import make_index
from tillwright.kernels.recipes import Recipe

Array = NDArray[np.float64]
REGRESSION = 1e-9
"""What a regression on some dozen columns may lose to rounding."""
NAMES = ("size", "power", "oak", "ash")
BETA = np.array([0.03, 0.4, -0.2, 0.5])


@dataclass(frozen=True, slots=True)
class Goods:
    """Prices and quantities (T, N) of products that come and go, and their attributes (N, 4)."""

    prices: Array
    quantities: Array
    design: Array

    @property
    def data(self) -> tuple[Array, Array, Array, tuple[str, ...]]:
        """The arguments of a kernel."""
        return self.prices, self.quantities, self.design, NAMES


def goods(seed: int = 0, *, periods: int = 6, products: int = 60, noise: float = 0.2, matched: bool = False) -> Goods:
    """Products of which each lives for some periods, priced by their attributes but for noise."""
    rng = np.random.default_rng(seed)
    wood = rng.integers(0, 3, products)
    design = np.column_stack([rng.uniform(10, 90, products), rng.normal(0, 1, products), wood == 1, wood == 2])
    starts, lives = rng.integers(-2, periods - 1, products), rng.integers(1, periods, products)
    clock = np.arange(periods)[:, None]
    sold = np.ones((periods, products), dtype=bool) if matched else (clock >= starts) & (clock < starts + lives)
    logs = 1 + 0.07 * clock + design @ BETA + noise * rng.normal(0, 1, sold.shape)
    quantities = np.exp(rng.normal(3, 0.8, sold.shape) - 0.3 * logs)
    return Goods(np.where(sold, np.exp(logs), np.nan), np.where(sold, quantities, np.nan), design)


def with_flaws(seed: int) -> Goods:
    """The same with an empty period, a price without quantity and two products without all attributes."""
    made = goods(seed)
    made.prices[2] = made.quantities[2] = np.nan
    first = np.flatnonzero(np.isfinite(made.prices[3]))[0]
    made.quantities[3, first] = 0.0
    made.design[[7, 9], [0, 1]] = np.nan
    return made


def regress(one: Goods, *, weighted: bool, errors: Errors = "classical") -> tuple[Any, NDArray[Any], NDArray[Any]]:
    """The fit of the library on period dummies less the first, and attributes; rows and columns of its prices."""
    usable = np.isfinite(one.prices) & np.isfinite(one.design).all(axis=1)
    if weighted:
        usable &= one.quantities > 0
    row, column = np.nonzero(usable)
    values = np.where(usable, one.prices * one.quantities, 0.0)
    weight = (values / np.maximum(values.sum(axis=1, keepdims=True), 1e-300))[row, column]
    dummies = np.eye(len(one.prices))[row][:, np.unique(row)[1:]]
    right = np.column_stack([np.ones(len(row)), dummies, one.design[column]])
    left = np.log(one.prices[row, column])
    with np.errstate(all="ignore"):
        model = sm.WLS(left, right, weights=weight) if weighted else sm.OLS(left, right)
        return model.fit(cov_type="nonrobust" if errors == "classical" else "HC1"), row, column


def close(found: NDArray[Any], expected: NDArray[Any]) -> None:
    np.testing.assert_allclose(found, expected, rtol=REGRESSION, atol=REGRESSION)


def fitted(one: Goods, *, weighted: bool, errors: Errors = "classical", least: int = 20) -> Hedonic:
    return time_dummy(one.prices, one.quantities if weighted else None, one.design, NAMES, errors=errors, least=least)


@pytest.mark.parametrize("seed", range(4))
@pytest.mark.parametrize("errors", ["classical", "HC1"])
@pytest.mark.parametrize("weighted", [False, True])
def test_time_dummy_is_the_regression_of_a_library(weighted: bool, errors: Errors, seed: int) -> None:
    one = with_flaws(seed)
    expected, row, column = regress(one, weighted=weighted, errors=errors)
    found = fitted(one, weighted=weighted, errors=errors)
    periods = len(np.unique(row))
    close(found.coefficients, expected.params[periods:])
    close(found.standard_errors, expected.bse[periods:])
    assert found.adjusted_r2 == pytest.approx(expected.rsquared_adj, rel=REGRESSION)
    priced = np.unique(row)
    levels, level_errors = np.full((2, len(one.prices)), np.nan)
    levels[priced] = [0.0, *expected.params[1:periods]]
    level_errors[priced] = [0.0, *expected.bse[1:periods]]
    close(found.index, np.exp(levels))
    close(found.level_errors, level_errors)
    assert found.degrees_of_freedom == expected.df_resid
    assert found.observations.tolist() == np.bincount(row, minlength=len(one.prices)).tolist()
    assert found.left_out == np.isfinite(one.prices).sum() - len(row) > 0
    close(found.residuals[row, column], expected.resid)
    if errors == "classical":
        with np.errstate(all="ignore"):
            whitened = sm.OLS(expected.model.wendog, expected.model.wexog).fit()
            standardized = whitened.get_influence().resid_studentized_internal
        close(found.standardized[row, column], standardized)
        assert np.isfinite(found.standardized).sum() == len(row)


def test_a_single_period_is_a_cross_section() -> None:
    one = goods()
    alone = Goods(one.prices[3:4], one.quantities[3:4], one.design)
    expected, _, _ = regress(alone, weighted=True)
    found = fitted(alone, weighted=True)
    np.testing.assert_allclose(found.coefficients, expected.params[1:], rtol=REGRESSION)
    np.testing.assert_allclose(found.standard_errors, expected.bse[1:], rtol=REGRESSION)
    assert found.index.tolist() == [1.0]


@pytest.mark.parametrize("weighted", [False, True])
def test_product_dummies_for_attributes_give_the_time_product_dummy(weighted: bool) -> None:
    # de Haan and Krsinich (2014): the time product dummy is the time dummy with every product its own attribute.
    one = goods(2, products=15)
    sold = np.isfinite(one.prices).any(axis=0)
    prices, quantities = one.prices[:, sold], one.quantities[:, sold]
    names = [f"product {number}" for number in range(sold.sum())]
    found = time_dummy(prices, quantities if weighted else None, np.eye(sold.sum()), names)
    expected = make_index(prices, quantities, Recipe("tpd" if weighted else "tpd-unweighted"))
    np.testing.assert_allclose(found.index, expected, rtol=REGRESSION)
    assert found.dropped == (names[-1],)
    once = np.isfinite(prices).sum(axis=0) == 1
    assert once.any()
    assert np.isnan(found.standardized[:, once]).all()
    assert np.isfinite(found.standardized[:, ~once]).sum() == np.isfinite(prices[:, ~once]).sum()


def test_unweighted_time_dummy_of_matched_products_is_jevons() -> None:
    # With the same products in every period the mean attributes do not move (de Haan 2010).
    one = goods(3, matched=True)
    found = fitted(one, weighted=False)
    expected = np.exp(np.log(one.prices / one.prices[0]).mean(axis=1))
    np.testing.assert_allclose(found.index, expected, rtol=REGRESSION)


@pytest.mark.parametrize("weighted", [False, True])
def test_columns_that_say_nothing_new_are_dropped_by_name_and_change_nothing(weighted: bool) -> None:
    one = goods(4)
    size, power, oak, ash = one.design.T
    elm = 1 - oak - ash
    doubled = np.column_stack([np.full(len(size), 5.0), size, power, 2 * size - 7, oak, ash, elm, size - 3 * power])
    names = ("wheels", "size", "power", "stretched", "oak", "ash", "elm", "mixture")
    found = time_dummy(one.prices, one.quantities if weighted else None, doubled, names)
    plain = fitted(one, weighted=weighted)
    assert found.names == NAMES
    assert found.dropped == ("wheels", "stretched", "elm", "mixture")
    for name in ("index", "level_errors", "coefficients", "standard_errors", "predicted", "standardized"):
        np.testing.assert_allclose(getattr(found, name), getattr(plain, name), rtol=REGRESSION, atol=REGRESSION)
    assert found.degrees_of_freedom == plain.degrees_of_freedom


def test_of_two_columns_alike_the_first_is_kept() -> None:
    one = goods(4)
    twice = one.design[:, [1, 0, 1]]
    assert time_dummy(one.prices, None, twice, ("first", "size", "second")).dropped == ("second",)
    nearly = twice + np.outer(np.random.default_rng(0).normal(0, 1e-5, len(twice)), [0, 0, 1])
    assert time_dummy(one.prices, None, nearly, ("first", "size", "second")).dropped == ()


def test_too_few_observations_are_refused_with_their_number() -> None:
    one = goods(5)
    count = int(np.isfinite(one.prices).sum())
    assert fitted(one, weighted=True, least=count).observations.sum() == count
    with pytest.raises(TooFewObservations, match=f"{count} prices") as raised:
        fitted(one, weighted=True, least=count + 1)
    problem = raised.value
    assert (problem.observations, problem.parameters, problem.least, problem.period) == (count, 10, count + 1, None)
    assert str(count + 1) in str(problem)


def test_as_many_prices_as_parameters_are_refused_and_one_more_is_not() -> None:
    one = goods(6, matched=True)
    exact = Goods(one.prices[:1, :5], one.quantities[:1, :5], one.design[[0, 1, 2, 3, 4]])
    columns = np.random.default_rng(1).normal(0, 1, (6, 4))
    with pytest.raises(TooFewObservations):
        time_dummy(exact.prices, None, columns[:5], NAMES, least=1)
    assert time_dummy(one.prices[:1, :6], None, columns, NAMES, least=1).degrees_of_freedom == 1


def test_a_cross_section_with_too_few_prices_is_refused_with_its_period() -> None:
    one = goods(5)
    one.prices[4, np.flatnonzero(np.isfinite(one.prices[4]))[6:]] = np.nan
    with pytest.raises(TooFewObservations) as raised:
        impute_pairs(*one.data, least=7)
    assert (raised.value.period, raised.value.observations) == (4, 6)
    impute_pairs(*one.data, least=6)
    labels = ["a", "b", "c", "d", "e", "f"]
    named = raised.value.labelled(labels, "shelf oak")
    assert named.period == "e"
    assert "for shelf oak in period e" in str(named)


def test_nothing_priced_is_refused() -> None:
    with pytest.raises(TooFewObservations):
        time_dummy(np.full((3, 2), np.nan), None, np.ones((2, 1)), ("size",), least=0)
    with pytest.raises(TooFewObservations):
        impute_pairs(np.ones((3, 2)), np.zeros((3, 2)), np.ones((2, 1)), ("size",), least=0)


def test_prices_that_the_model_fits_exactly_have_no_outliers_and_no_floating_point_errors() -> None:
    one = goods(7, noise=0.0)
    found = fitted(one, weighted=True)
    np.testing.assert_allclose(found.coefficients, BETA, rtol=REGRESSION)
    assert found.adjusted_r2 == 1.0
    assert np.isnan(found.standardized).all()
    np.testing.assert_array_equal(found.standard_errors, 0.0)
    same = time_dummy(np.full((2, 30), 3.0), None, one.design[:30], NAMES)
    assert math.isnan(same.adjusted_r2)
    np.testing.assert_allclose(same.index, 1.0, rtol=REGRESSION)


def test_a_lone_price_of_its_period_has_no_standardized_residual() -> None:
    one = goods(8)
    one.prices[5, np.flatnonzero(np.isfinite(one.prices[5]))[1:]] = np.nan
    found = fitted(one, weighted=False)
    at = int(np.flatnonzero(np.isfinite(one.prices[5]))[0])
    assert np.isnan(found.standardized[5, at])
    assert found.residuals[5, at] == pytest.approx(0.0, abs=REGRESSION)


def imputed_by_loops(one: Goods, base: int, current: int, *, weighted: bool, pooled: bool) -> float:
    """Log double-imputation Törnqvist, product by product, with predictions of the library."""

    def predictor(rows: list[int]) -> tuple[Array, Array]:
        fit, row, _ = regress(Goods(one.prices[rows], one.quantities[rows], one.design), weighted=weighted)
        periods = len(np.unique(row))
        return np.array([fit.params[0], *(fit.params[0] + fit.params[1:periods])]), fit.params[periods:]

    sides = (base, current)
    if pooled:
        constants, slopes = predictor(list(range(len(one.prices))))
        lines = [(constants[side], slopes) for side in sides]
    else:
        lines = [(constants[0], slopes) for constants, slopes in (predictor([side]) for side in sides)]
    values = [np.nan_to_num(one.prices[side] * one.quantities[side]) for side in sides]
    changes: dict[int, float] = {}
    for i in range(one.prices.shape[1]):
        prices = [one.prices[side, i] for side in sides]
        if all(math.isfinite(price) for price in prices):
            changes[i] = math.log(prices[1] / prices[0])
        elif any(math.isfinite(price) for price in prices) and np.isfinite(one.design[i]).all():
            before, after = (constant + one.design[i] @ slopes for constant, slopes in lines)
            changes[i] = after - before
    totals = [sum(value[i] for i in changes) for value in values]
    return math.fsum(
        0.5 * sum(value[i] / total for value, total in zip(values, totals, strict=True)) * change
        for i, change in changes.items()
    )


@pytest.mark.parametrize("weighted", [False, True])
@pytest.mark.parametrize("regressions", ["period", "pooled"])
@pytest.mark.parametrize("unknown", [[], [7, 9]])
def test_double_imputation_is_what_loops_say(unknown: list[int], regressions: Any, weighted: bool) -> None:
    # A product without attributes counts where it is matched and is left out where it is not.
    one = goods(9)
    assert not unknown or (np.isfinite(one.prices[:, unknown]).sum() > 2)
    one.design[unknown] = np.nan
    found = impute_pairs(*one.data, regressions=regressions, weighted=weighted, least=1)
    assert len(found.regressions) == (6 if regressions == "period" else 1)
    for base, current in itertools.product(range(6), repeat=2):
        expected = imputed_by_loops(one, base, current, weighted=weighted, pooled=regressions == "pooled")
        assert found.log_pairs[base, current] == pytest.approx(expected, abs=REGRESSION)
        if regressions == "period":
            single = double_imputation_tornqvist(*one.data, base, current, weighted=weighted, least=1)
            assert math.log(single) == pytest.approx(expected, abs=REGRESSION)


def test_imputation_differs_from_matching_when_products_come_and_go() -> None:
    one = goods(9)
    matched = bilateral.log_pair_levels(one.prices, one.quantities, "tornqvist")
    assert np.nanmax(np.abs(impute_pairs(*one.data, least=1).log_pairs - matched)) > tolerances.FAILS


@pytest.mark.parametrize("regressions", ["period", "pooled"])
def test_with_every_product_matched_imputation_is_tornqvist_and_its_geks(regressions: Any) -> None:
    one = goods(10, matched=True)
    found = impute_pairs(*one.data, regressions=regressions).log_pairs
    expected = bilateral.log_pair_levels(one.prices, one.quantities, "tornqvist")
    np.testing.assert_allclose(found, expected, rtol=0, atol=tolerances.EXACT)
    geks = make_index(one.prices, one.quantities, Recipe("geks-tornqvist"))
    np.testing.assert_allclose(np.exp(rolling_geks(found, 6)[0]), geks, rtol=tolerances.EXACT)


def test_pairs_reverse_in_time_exactly() -> None:
    found = impute_pairs(*with_flaws(1).data, least=1).log_pairs
    np.testing.assert_array_equal(found, -found.T)
    empty = np.arange(6) == 2
    assert np.isnan(found[empty]).all()
    assert np.isfinite(found[np.ix_(~empty, ~empty)]).all()


@pytest.mark.parametrize("regressions", ["period", "pooled"])
def test_prices_by_attributes_alone_give_the_true_index_without_any_match(regressions: Any) -> None:
    # Every product is sold once, so matching has nothing to say; the model says e^0.07 a period.
    one = goods(11, periods=4, products=120, noise=0.0, matched=True)
    once = np.arange(120) % 4 == np.arange(4)[:, None]
    alone = Goods(np.where(once, one.prices, np.nan), np.where(once, one.quantities, np.nan), one.design)
    found = impute_pairs(*alone.data, regressions=regressions)
    np.testing.assert_allclose(rolling_geks(found.log_pairs, 4)[0], 0.07 * np.arange(4), atol=REGRESSION)
    np.testing.assert_allclose(np.log(fitted(alone, weighted=True).index), 0.07 * np.arange(4), atol=REGRESSION)
    assert np.isnan(bilateral.log_pair_levels(alone.prices, alone.quantities, "tornqvist")[0, 1])


def test_a_product_unlike_any_of_the_other_period_is_left_out_of_the_pair() -> None:
    # Only the newcomer is made of glass, so the first period cannot price glass.
    one = goods(12, periods=2, matched=True)
    one.prices[1, :10] = np.nan
    one.prices[0, 10] = np.nan
    glass = np.eye(60)[:, 10:11]
    design = np.hstack([one.design, glass])
    found = impute_pairs(one.prices, one.quantities, design, (*NAMES, "glass"))
    before, after = found.regressions
    assert (before.dropped, after.dropped) == (("glass",), ())
    assert np.flatnonzero(np.isnan(before.predicted[0])).tolist() == [10]
    assert np.isfinite(after.predicted).all()
    without = np.delete(np.arange(60), 10)
    expected = impute_pairs(one.prices[:, without], one.quantities[:, without], one.design[without], NAMES)
    np.testing.assert_allclose(found.log_pairs, expected.log_pairs, rtol=0, atol=REGRESSION)


def test_an_attribute_that_only_time_tells_apart_predicts_no_product_in_another_time() -> None:
    # The model year moves with the period, so what it is worth cannot be told from the passing of time.
    one = goods(13, periods=3, matched=True)
    once = np.arange(60) % 3 == np.arange(3)[:, None]
    design = np.column_stack([one.design, 2001.0 + np.arange(60) % 3])
    found = time_dummy(np.where(once, one.prices, np.nan), None, design, (*NAMES, "year"))
    assert found.dropped == ("year",)
    np.testing.assert_array_equal(np.isfinite(found.predicted), once)


SEEDS = st.integers(0, 10_000)


@PROPERTY
@given(SEEDS, st.floats(1e-6, 1e6), st.floats(-1e3, 1e3))
def test_units_of_an_attribute_and_the_order_of_products_do_not_matter(seed: int, factor: float, shift: float) -> None:
    one = goods(seed)
    order = np.random.default_rng(seed).permutation(60)
    other = one.design[order].copy()
    other[:, 0] = factor * (other[:, 0] + shift)
    turned = (one.prices[:, order], one.quantities[:, order], other, NAMES)
    plain, changed = time_dummy(*one.data), time_dummy(*turned)
    np.testing.assert_allclose(changed.index, plain.index, rtol=tolerances.AXIOM)
    np.testing.assert_allclose(changed.level_errors, plain.level_errors, rtol=tolerances.AXIOM, atol=tolerances.AXIOM)
    assert changed.coefficients[0] * factor == pytest.approx(plain.coefficients[0], rel=1e-6)
    pairs = [impute_pairs(*data, least=1).log_pairs for data in (one.data, turned)]
    np.testing.assert_allclose(pairs[1], pairs[0], rtol=0, atol=tolerances.AXIOM)


@PROPERTY
@given(SEEDS, st.floats(0.01, 100.0), st.integers(1, 5))
def test_all_prices_of_a_period_times_a_factor_multiply_its_index(seed: int, factor: float, period: int) -> None:
    one = goods(seed)
    scaled = one.prices.copy()
    scaled[period] *= factor
    moved = np.where(np.arange(6) == period, math.log(factor), 0.0)
    changed = (scaled, *one.data[1:])
    np.testing.assert_allclose(
        np.log(time_dummy(*changed).index), np.log(time_dummy(*one.data).index) + moved, rtol=0, atol=tolerances.AXIOM
    )
    pairs = [impute_pairs(*data, least=1).log_pairs for data in (one.data, changed)]
    np.testing.assert_allclose(pairs[1], pairs[0] + moved - moved[:, None], rtol=0, atol=tolerances.AXIOM)


def test_inputs_are_left_alone() -> None:
    one = with_flaws(14)
    before = [part.copy() for part in (one.prices, one.quantities, one.design)]
    impute_pairs(*one.data, least=1)
    time_dummy(*one.data)
    for part, copy in zip((one.prices, one.quantities, one.design), before, strict=True):
        np.testing.assert_array_equal(part, copy)
