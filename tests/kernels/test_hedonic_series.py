"""Hedonic series: a true model that every window and splice finds, splices by hand, and what thin periods leave."""

import itertools
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.kernels import tolerances
from tillwright.errors import CallError, TooFewObservations
from tillwright.kernels.attributes import Design
from tillwright.kernels.hedonic import impute_pairs, time_dummy
from tillwright.kernels.hedonic_series import Regressing, make_series
from tillwright.kernels.recipes import Recipe
from tillwright.kernels.splicing import splice as join

Array = NDArray[np.float64]
PERIODS, PRODUCTS = 9, 90
NAMES = ("size", "power")
BETA = np.array([0.03, 0.4])
TREND = np.array([0.0, 0.02, 0.01, 0.05, 0.04, 0.09, 0.07, 0.12, 0.15])
METHODS = ("time-dummy", "geks-imputation")
YEARS = np.repeat([2023, 2024, 2025], 3)
RECIPES = [
    {"window": None},
    *(
        {"window": 4, "splice": name, "onto": onto}
        for name in ("movement", "window", "half", "mean")
        for onto in ("published", "recalculated")
    ),
    {"window": 5, "splice": "link-month"},
    {"window": "expanding", "splice": "link-month"},
]


def goods(seed: int = 0, *, noise: float = 0.0, lives: int = 1) -> tuple[Array, Array, Design]:
    """Products that live for some periods, priced by their attributes and the trend but for noise."""
    rng = np.random.default_rng(seed)
    columns = np.column_stack([rng.uniform(10, 90, PRODUCTS), rng.normal(0, 1, PRODUCTS)])
    starts = np.arange(PRODUCTS) % PERIODS
    clock = np.arange(PERIODS)[:, None]
    sold = (clock >= starts) & (clock < starts + lives)
    logs = 1 + TREND[:, None] + columns @ BETA + noise * rng.normal(0, 1, sold.shape)
    quantities = rng.uniform(1, 9, sold.shape)
    return np.where(sold, np.exp(logs), np.nan), np.where(sold, quantities, np.nan), Design(columns, NAMES)


def series(data: tuple[Array, Array, Design], method: str, /, *, least: int = 1, **settings: Any) -> Any:
    regressions = settings.pop("regressions", "period")
    return make_series(*data, Recipe(method, **settings), Regressing(regressions, least=least), years=YEARS)


@pytest.mark.parametrize("settings", RECIPES, ids=str)
@pytest.mark.parametrize("method", METHODS)
def test_every_window_and_splice_finds_a_true_trend_without_any_match(method: str, settings: dict[str, Any]) -> None:
    # No product is sold twice, and prices are exactly those of the model: log price = trend + attributes · β.
    made = series(goods(), method, **settings)
    np.testing.assert_allclose(made.index, np.exp(TREND), rtol=tolerances.AXIOM)
    assert made.problems == ()


@pytest.mark.parametrize("form", ["chained", "direct"])
@pytest.mark.parametrize("regressions", ["period", "pooled"])
def test_imputation_finds_it_without_windows(form: str, regressions: str) -> None:
    made = series(goods(), "imputation", form=form, regressions=regressions)
    np.testing.assert_allclose(made.index, np.exp(TREND), rtol=tolerances.AXIOM)


@pytest.mark.parametrize("onto", ["published", "recalculated"])
@pytest.mark.parametrize("splice", ["movement", "window", "half", "mean"])
def test_time_dummies_of_windows_are_spliced(splice: Any, onto: Any) -> None:
    prices, quantities, design = goods(1, noise=0.2, lives=4)
    made = series((prices, quantities, design), "time-dummy", window=5, splice=splice, onto=onto)
    windows = [slice(start, start + 5) for start in range(PERIODS - 4)]
    fits = [time_dummy(prices[cut], quantities[cut], design.columns, NAMES, least=1) for cut in windows]
    expected = join(np.log([fit.index for fit in fits]), splice=splice, onto=onto)
    np.testing.assert_allclose(made.index, expected, rtol=tolerances.TWIN)
    assert made.spans == tuple((cut.start, cut.stop) for cut in windows)


@pytest.mark.parametrize("splice", ["movement", "window", "half", "mean"])
def test_geks_of_windows_is_the_mean_over_links_within_each(splice: Any) -> None:
    # Every pair is there, so that GEKS is the geometric mean of P(0,l)·P(l,t) (Ivancic, Diewert & Fox 2011).
    prices, quantities, design = goods(2, noise=0.2, lives=5)
    pairs = impute_pairs(prices, quantities, design.columns, NAMES, least=1).log_pairs
    levels = [
        (pairs[start, start : start + 4, None] + pairs[start : start + 4, start : start + 4]).mean(axis=0)
        for start in range(PERIODS - 3)
    ]
    made = series((prices, quantities, design), "geks-imputation", window=4, splice=splice)
    expected = join(np.array(levels), splice=splice, onto="published")
    np.testing.assert_allclose(made.index, expected, rtol=tolerances.TWIN)
    assert made.spans == tuple((period, period + 1) for period in range(PERIODS))


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("settings", RECIPES[1:], ids=str)
def test_further_periods_leave_what_was_spliced_as_it_is(method: str, settings: dict[str, Any]) -> None:
    prices, quantities, design = goods(3, noise=0.2, lives=4)
    made = [
        make_series(
            prices[:end], quantities[:end], design, Recipe(method, **settings), Regressing(least=1), years=YEARS[:end]
        ).index
        for end in range(6, PERIODS + 1)
    ]
    for before, after in itertools.pairwise(made):
        np.testing.assert_allclose(after[: len(before)], before, rtol=tolerances.TWIN)


def test_a_pooled_regression_revises_what_was_spliced() -> None:
    prices, quantities, design = goods(3, noise=0.2, lives=4)
    recipe, regressing = Recipe("geks-imputation", window=4), Regressing("pooled", least=1)
    short = make_series(prices[:8], quantities[:8], design, recipe, regressing).index
    long = make_series(prices, quantities, design, recipe, regressing).index
    assert np.abs(long[1:8] / short[1:8] - 1).max() > tolerances.FAILS / 10


def test_a_thin_period_has_no_level_as_if_nothing_had_been_sold() -> None:
    prices, quantities, design = goods(4, noise=0.2, lives=4)
    thin = prices.copy()
    thin[5, np.flatnonzero(np.isfinite(prices[5]))[4:]] = np.nan
    absent = prices.copy()
    absent[5] = np.nan
    for settings in ({"window": None}, {"window": 4, "splice": "mean"}):
        made = series((thin, quantities, design), "geks-imputation", least=6, **settings)
        alone = series((absent, quantities, design), "geks-imputation", least=6, **settings)
        np.testing.assert_array_equal(made.index, alone.index)
        assert np.isnan(made.index).tolist() == [period == 5 for period in range(PERIODS)]
        assert [problem.period for problem in made.problems] == [5]
        assert 5 not in [start for start, _ in made.spans]


def test_a_window_with_too_few_prices_is_passed_over() -> None:
    prices, quantities, design = goods(4, noise=0.2)
    few = prices.copy()
    few[6:] = np.where(np.cumsum(np.isfinite(prices[6:]), axis=1) <= 4, prices[6:], np.nan)
    made = series((few, quantities, design), "time-dummy", window=3, splice="movement", least=15)
    assert np.isnan(made.index).tolist() == [period == 8 for period in range(PERIODS)]
    assert [problem.observations for problem in made.problems] == [12]


@pytest.mark.parametrize("method", [*METHODS, "imputation"])
@pytest.mark.parametrize("regressions", ["period", "pooled"])
def test_nothing_can_be_made_of_too_few_prices(method: str, regressions: Any) -> None:
    made = series(goods(), method, regressions=regressions, least=1000)
    assert np.isnan(made.index).all()
    assert made.regressions == made.spans == ()
    assert all(isinstance(problem, TooFewObservations) for problem in made.problems)
    assert len(made.problems) == (PERIODS if method != "time-dummy" and regressions == "period" else 1)


@pytest.mark.parametrize("method", METHODS)
def test_windows_that_miss_the_link_month_are_refused(method: str) -> None:
    with pytest.raises(CallError, match="does not reach the link month"):
        series(goods(), method, window=3, splice="link-month")
