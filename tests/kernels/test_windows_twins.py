"""Kernels against the loop twins: base-weighted formulas, similarity linking, every window, every splice."""

import functools
import itertools
import math
from collections.abc import Callable
from typing import Any, Literal, TypeVar

import numpy as np
import pytest
import statsmodels.api as sm
from numpy.typing import NDArray

from tests.kernels import tolerances, twins, twins_windows
from tests.kernels.panels import Panel, random_panel, random_panels
from tests.kernels.variants import FORMS, ONTO, VARIANTS, Form
from tillwright.choices import BILATERAL_FORMULAS
from tillwright.errors import CallError, UnconnectedPeriods
from tillwright.kernels.methods import make_index, make_indexes
from tillwright.kernels.recipes import Recipe

Array = NDArray[np.float64]
T = TypeVar("T")
Base = Literal["lowe", "young", "geometric-young"]

GEKS_METHODS = ("geks-jevons", "geks-fisher", "geks-tornqvist", "geks-walsh")
WINDOWED = (*GEKS_METHODS, "tpd", "tpd-unweighted", "geary-khamis")
BASE_WEIGHTED: tuple[Base, ...] = ("lowe", "young", "geometric-young")
REGRESSION = 1e-9
"""What a regression on some dozen dummies may lose to rounding."""

PANELS = random_panels()
# Linking on a period without products is not settled by the definitions: see test_contract.
NEVER_EMPTY = [p for p in PANELS if len(twins.priced_periods(p.prices)) == len(p.prices)]
# Both start with a year of their own, the second with a year that position 0 closes.
CALENDARS: tuple[Callable[[int], int], ...] = (lambda t: t // 4, lambda t: (t + 3) // 4)


def named(panels: list[Panel]) -> list[Any]:
    """Parameters with the panels' names as ids."""
    return [pytest.param(panel, id=panel.name) for panel in panels]


each_panel = pytest.mark.parametrize("panel", named(PANELS))
each_panel_never_empty = pytest.mark.parametrize("panel", named(NEVER_EMPTY))
each_windowed = pytest.mark.parametrize("method", WINDOWED)
each_calendar = pytest.mark.parametrize("calendar", CALENDARS)
each_form = pytest.mark.parametrize("form", FORMS)
each_base_weighted = pytest.mark.parametrize("formula", BASE_WEIGHTED)


def same_levels(found: Array, expected: list[float]) -> None:
    """Levels equal to a relative TWIN, NaN in the same places."""
    np.testing.assert_allclose(found, np.array(expected), rtol=tolerances.TWIN, atol=0)


def years_of(panel: Panel, calendar: Callable[[int], int]) -> list[int]:
    """The link year of each period."""
    return [calendar(t) for t in range(len(panel.prices))]


def outcome(twin: Callable[[], list[T]]) -> tuple[tuple[tuple[int, ...], ...], list[T]]:
    """The groups that a twin refuses, none if it does not, and what it gives."""
    try:
        return (), twin()
    except twins.TwinUnconnectedError as apart:
        return tuple(tuple(group) for group in apart.groups), []


def compare(panel: Panel, recipe: Recipe, twin: Callable[[], list[float]], years: list[int] | None = None) -> bool:
    """Hold a kernel against its twin, or both refuse the same groups; whether there was an index."""
    numbers = None if years is None else np.array(years)
    groups, expected = outcome(twin)
    if groups:
        with pytest.raises(UnconnectedPeriods) as refused:
            make_index(panel.prices, panel.quantities, recipe, years=numbers)
        if recipe.method != "similarity":
            assert refused.value.groups == groups
        return False
    same_levels(make_index(panel.prices, panel.quantities, recipe, years=numbers), expected)
    return True


# The twins themselves, by hand


TWO = np.array([[1.0, 2.0], [3.0, 2.5]]), np.array([[4.0, 1.0], [2.0, 3.0]])


def test_twin_of_base_weighted_formulas_by_hand() -> None:
    prices = np.array([[1.0, 2.0, math.nan], [2.0, 2.0, 9.0], [3.0, math.nan, 9.0]])
    quantities = np.array([[4.0, 3.0, math.nan], [1.0, 1.0, 0.0], [1.0, math.nan, 0.0]])
    both = (0, 1)  # quantities 5 and 4, turnover 4 + 2 = 6 and 6 + 2 = 8; product 3 weighs nothing
    chained = {f: twins_windows.base_weighted(prices, quantities, f, both, "chained") for f in BASE_WEIGHTED}
    assert chained["lowe"] == pytest.approx([1, 18 / 13, 18 / 13 * 1.5])
    assert chained["young"] == pytest.approx([1, (6 * 2 + 8) / 14, (6 * 2 + 8) / 14 * 1.5])
    assert chained["geometric-young"] == pytest.approx([1, 2 ** (6 / 14), 2 ** (6 / 14) * 1.5])
    direct = {f: twins_windows.base_weighted(prices, quantities, f, both, "direct") for f in BASE_WEIGHTED}
    assert all(direct[f][2] == pytest.approx(3.0) for f in BASE_WEIGHTED)
    assert direct["lowe"][1] == pytest.approx(18 / 13)


def test_twin_of_two_periods_has_the_closed_forms() -> None:
    # de Haan and Krsinich (2014); Geary-Khamis of two periods, Σp1 h/Σp0 h, h = q0 q1/(q0 + q1).
    prices, quantities = TWO
    s0, s1 = np.array([4 / 6, 2 / 6]), np.array([6 / 13.5, 7.5 / 13.5])
    weight = s0 * s1 / (s0 + s1)
    ratios = np.log(prices[1] / prices[0])
    logs = {m: twins_windows.window_logs(prices, quantities, m, (0, 1))[1] for m in WINDOWED}
    assert logs["tpd"] == pytest.approx((weight * ratios).sum() / weight.sum(), abs=1e-13)
    assert logs["tpd-unweighted"] == pytest.approx(ratios.mean(), abs=1e-13)
    half = np.array([8 / 6, 3 / 4])
    assert logs["geary-khamis"] == pytest.approx(math.log((prices[1] @ half) / (prices[0] @ half)), abs=1e-13)
    assert logs["geks-fisher"] == pytest.approx(math.log(math.sqrt(14.5 / 6 * 13.5 / 8)), abs=1e-13)


def test_twin_of_similarity_by_hand() -> None:
    # Period 2 repeats the prices of period 0 doubled: its shares are predicted without error.
    prices = np.array([[1.0, 2.0], [3.0, 2.0], [2.0, 4.0]])
    quantities = np.array([[1.0, 1.0], [1.0, 2.0], [5.0, 1.0]])
    first = (1 / 3 - 3 / 5) ** 2 + (2 / 3 - 2 / 5) ** 2  # quantities of period 0 at prices of 1: 3, 2
    second = (3 / 7 - 1 / 5) ** 2 + (4 / 7 - 4 / 5) ** 2  # quantities of period 1 at prices of 0: 1, 4
    assert twins_windows.dissimilarity(prices, quantities, 0, 1) == pytest.approx(first + second)
    assert twins_windows.dissimilarity(prices, quantities, 0, 2) == pytest.approx(0, abs=1e-30)
    fisher = math.sqrt(5 / 3 * 7 / 5)
    assert twins_windows.similarity(prices, quantities) == pytest.approx([1, fisher, 2])
    onward = math.sqrt((2 + 8) / (3 + 4) * (10 + 4) / (15 + 2))
    assert twins_windows.similarity(prices, quantities, 2) == pytest.approx([1, fisher, fisher * onward])


def test_twin_of_similarity_counts_products_without_a_partner_and_prefers_the_latest() -> None:
    prices = np.array([[1.0, 1.0, math.nan], [1.0, math.nan, math.nan], [2.0, math.nan, 1.0]])
    quantities = np.array([[3.0, 1.0, math.nan], [1.0, math.nan, math.nan], [1.0, math.nan, 2.0]])
    # Shares 3/4, 1/4 against a prediction of 1 for the only common product, and 1/2, 1/2 likewise.
    expected = (1 / 4) ** 2 + (1 / 4) ** 2 + (1 / 2) ** 2 + (1 / 2) ** 2
    assert twins_windows.dissimilarity(prices, quantities, 0, 2) == pytest.approx(expected)
    assert twins_windows.dissimilarity(prices, quantities, 1, 2) == pytest.approx(2 * (1 / 2) ** 2)
    same = np.ones((3, 2))
    assert twins_windows.most_similar(same, same, [0, 1], 2) == 1


def test_twin_of_link_periods_by_hand() -> None:
    years = [2020, 2021, 2021, 2021, 2022, 2022]
    assert [twins_windows.link_period(years, t) for t in range(6)] == [0, 0, 0, 0, 3, 3]
    levels = [[0.0, 0.1, 0.2, 0.3], [0.0, 0.2, 0.4, 0.6], [0.0, 0.0, 0.5, 0.4]]
    index = twins_windows.link_on_month(levels, [0, 1, 1, 1, 2, 2])
    # 4 links on 3, the third of its window (0.4); 5 links on 3, the second of its window (0.0).
    assert np.log(index) == pytest.approx([0.0, 0.1, 0.2, 0.3, 0.3 + 0.2, 0.3 + 0.4])
    with pytest.raises(twins_windows.LinkOutsideWindowError):
        twins_windows.link_on_month(levels, [0] * 6)


@each_windowed
def test_twin_of_expanding_windows_takes_each_window_by_itself(method: str) -> None:
    panel = random_panel(0)
    years = [0, 1, 1, 2, 2, 2, 2, 2, 2][: len(panel.prices)]
    found = twins_windows.expanding(panel.prices, panel.quantities, method, years)
    logs = [twins_windows.window_logs(panel.prices, panel.quantities, method, w) for w in ((0, 1), (0, 1, 2), (2, 3))]
    expected = [0.0, logs[0][1], logs[1][2], logs[1][2] + logs[2][1]]
    assert np.log(found[:4]) == pytest.approx(expected, abs=1e-13)


@each_windowed
def test_twin_of_prices_that_move_together(method: str) -> None:
    factors = np.array([1.0, 3.0, 0.5, 2.0])
    prices = np.array([1.0, 20.0, 7.0]) * factors[:, None]
    quantities = random_panel(0).quantities[:4, :3]
    for window, splice in ((None, "mean"), (3, "half"), (3, "window")):
        found = twins_windows.series(prices, quantities, method, window=window, splice=splice)
        assert found == pytest.approx(factors, rel=1e-12)


# Base-weighted formulas


def weight_choices(panel: Panel) -> list[tuple[int, ...]]:
    """The first and the last priced period, two in the middle, and all periods."""
    priced = twins.priced_periods(panel.prices)
    return [(priced[0],), (priced[-1],), (priced[1], priced[3]), tuple(range(len(panel.prices)))]


@each_form
@each_base_weighted
@each_panel
def test_base_weighted_formulas(panel: Panel, formula: Base, form: Form) -> None:
    for weight_periods in weight_choices(panel):
        recipe = Recipe(formula, form=form, weight_periods=weight_periods)
        expected = twins_windows.base_weighted(panel.prices, panel.quantities, formula, weight_periods, form)
        same_levels(make_index(panel.prices, panel.quantities, recipe), expected)


# Multilateral methods


@each_windowed
@each_panel
def test_one_window(panel: Panel, method: str) -> None:
    compare(panel, Recipe(method), lambda: twins_windows.series(panel.prices, panel.quantities, method))


@functools.cache
def rolling_logs(name: str, method: str, window: int) -> tuple[tuple[tuple[int, ...], ...], twins.Levels]:
    """The groups that the twin refuses, and its log levels of each rolling window."""
    panel = next(panel for panel in PANELS if panel.name == name)
    return outcome(lambda: twins_windows.rolling_logs(panel.prices, panel.quantities, method, window))


@each_windowed
@each_panel_never_empty
def test_rolling_windows_and_every_splice(panel: Panel, method: str) -> None:
    for window in range(2, len(panel.prices) + 2):
        groups, levels = rolling_logs(panel.name, method, window)
        if groups:
            with pytest.raises(UnconnectedPeriods) as refused:
                make_index(panel.prices, panel.quantities, Recipe(method, window=window))
            assert refused.value.groups == groups
            continue
        for splice, onto in VARIANTS:
            recipe = Recipe(method, window=window, splice=splice, onto=onto)
            found = make_index(panel.prices, panel.quantities, recipe)
            same_levels(found, twins.splice_levels(levels, splice, onto))


@each_calendar
@each_windowed
@each_panel_never_empty
def test_rolling_windows_linked_on_the_link_month(panel: Panel, method: str, calendar: Callable[[int], int]) -> None:
    years = years_of(panel, calendar)
    for window in range(3, len(panel.prices) + 2):
        recipe = Recipe(method, window=window, splice="link-month")
        outside = any(twins_windows.link_period(years, t) <= t - window for t in range(window, len(years)))
        if outside:
            with pytest.raises((CallError, UnconnectedPeriods)):
                make_index(panel.prices, panel.quantities, recipe, years=np.array(years))
            continue

        groups, levels = rolling_logs(panel.name, method, window)
        if groups:
            with pytest.raises(UnconnectedPeriods) as refused:
                make_index(panel.prices, panel.quantities, recipe, years=np.array(years))
            assert refused.value.groups == groups
            continue
        found = make_index(panel.prices, panel.quantities, recipe, years=np.array(years))
        same_levels(found, twins_windows.link_on_month(levels, years))


@each_windowed
def test_link_month_outside_the_window_is_refused(method: str) -> None:
    panel = random_panel(0)
    years = np.zeros(len(panel.prices), dtype=np.int64)
    with pytest.raises(CallError):
        make_index(panel.prices, panel.quantities, Recipe(method, window=3, splice="link-month"), years=years)
    wide = Recipe(method, window=len(years), splice="link-month")
    expected = twins_windows.series(panel.prices, panel.quantities, method)
    same_levels(make_index(panel.prices, panel.quantities, wide, years=years), expected)


@each_calendar
@each_windowed
@each_panel_never_empty
def test_expanding_windows(panel: Panel, method: str, calendar: Callable[[int], int]) -> None:
    years = years_of(panel, calendar)
    recipe = Recipe(method, window="expanding", splice="link-month")
    compare(panel, recipe, lambda: twins_windows.expanding(panel.prices, panel.quantities, method, years), years)


@each_panel
def test_similarity_linking(panel: Panel) -> None:
    for window in (None, *range(2, len(panel.prices) + 2)):
        recipe = Recipe("similarity", window=window)
        compare(panel, recipe, functools.partial(twins_windows.similarity, panel.prices, panel.quantities, window))


@pytest.mark.parametrize(("nearer", "linked_on"), [(0.0, 2), (1e-14, 2), (-1e-14, 2), (1e-8, 0), (-1e-8, 2)])
def test_similarity_links_on_the_latest_of_those_that_tie(nearer: float, linked_on: int) -> None:
    # Periods 0 and 2 mirror each other in the two products, period 3 is its own mirror image, and
    # period 1 is farther from it; period 2 is linked on period 1, so that the two ways differ.
    prices = np.array([[1.0, 2.0 - nearer], [2.5, 1.0], [2.0, 1.0], [1.5, 1.5]])
    quantities = np.array([[3.0, 1.0], [2.0, 5.0], [1.0, 3.0], [1.0, 1.0]])
    found = make_index(prices, quantities, Recipe("similarity"))
    to_last = [twins.fisher(twins.matches(prices, quantities, s, 3)) for s in range(3)]
    assert found[3] == pytest.approx(found[linked_on] * to_last[linked_on], rel=tolerances.TWIN)
    assert abs(found[0] * to_last[0] / (found[2] * to_last[2]) - 1) > tolerances.FAILS
    same_levels(found, twins_windows.similarity(prices, quantities))


def test_similarity_ignores_splice_and_onto() -> None:
    panel = random_panel(0)
    expected = make_index(panel.prices, panel.quantities, Recipe("similarity", window=3))
    for splice, onto in VARIANTS:
        found = make_index(panel.prices, panel.quantities, Recipe("similarity", window=3, splice=splice, onto=onto))
        np.testing.assert_array_equal(found, expected)


@each_panel
def test_unweighted_time_product_dummy_needs_no_quantities(panel: Panel) -> None:
    recipe = Recipe("tpd-unweighted")

    def twin() -> list[float]:
        return twins_windows.series(panel.prices, panel.quantities, "tpd-unweighted")

    if compare(panel, recipe, twin):
        same_levels(make_index(panel.prices, None, recipe), twin())


@pytest.mark.parametrize("method", [*WINDOWED, "similarity"])
def test_periods_without_a_common_product_are_refused(method: str) -> None:
    prices = np.array([[1.0, math.nan], [1.1, math.nan], [math.nan, 2.0], [math.nan, 2.1]])
    quantities = np.where(np.isnan(prices), math.nan, 1.0)
    for window in (None, 3):
        with pytest.raises(twins.TwinUnconnectedError):
            twins_windows.series(prices, quantities, method, window=window)
        with pytest.raises(UnconnectedPeriods):
            make_index(prices, quantities, Recipe(method, window=window))


def test_similarity_does_not_wait_for_a_later_bridge() -> None:
    # Period 2 joins periods 0 and 1, but period 1 has no earlier period to be linked on.
    prices = np.array([[1.0, math.nan], [math.nan, 2.0], [1.0, 2.0]])
    with pytest.raises(UnconnectedPeriods):
        make_index(prices, np.where(np.isnan(prices), math.nan, 1.0), Recipe("similarity"))


# Quantities of zero


def settled(panel: Panel) -> bool:
    """Whether every period buys something, and every two with products in common buy one of them in both."""
    for s, t in itertools.combinations(range(len(panel.prices)), 2):
        m = twins.matches(panel.prices, panel.quantities, s, t)
        if m and not any(x.q0 > 0 and x.q1 > 0 for x in m):
            return False
    return bool((np.nan_to_num(panel.quantities).sum(axis=1) > 0).all())


def with_zeros(seed: int) -> Panel:
    """A random panel, some of its quantities zero; every second one has a product that is never bought."""
    panel = random_panel(seed)
    rng = np.random.default_rng(1000 + seed)
    quantities = panel.quantities.copy()
    quantities[(rng.random(quantities.shape) < 0.12) & ~np.isnan(quantities)] = 0.0
    if seed % 2 == 0:
        quantities[:, 0] = np.where(np.isnan(quantities[:, 0]), math.nan, 0.0)
    return Panel(f"{panel.name}-zeros", panel.prices, quantities)


ZEROS = [
    panel
    for panel in map(with_zeros, range(70))
    if len(twins.priced_periods(panel.prices)) == len(panel.prices) and (panel.quantities == 0).any() and settled(panel)
][:12]


def test_there_are_panels_with_zero_quantities() -> None:
    assert len(ZEROS) == 12
    assert {panel.name.split("-", 1)[1] for panel in ZEROS} >= {"complete-zeros", "gaps-zeros"}
    assert any((np.nan_to_num(panel.quantities).sum(axis=0) == 0).any() for panel in ZEROS)


@each_form
@pytest.mark.parametrize("formula", BILATERAL_FORMULAS)
@pytest.mark.parametrize("panel", named(ZEROS))
def test_zero_quantities_in_bilateral_formulas(
    panel: Panel, formula: str, form: Form, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setitem(twins.FORMULAS, "sato-vartia", twins_windows.sato_vartia)
    twin = twins.direct if form == "direct" else twins.chained
    expected = twin(panel.prices, panel.quantities, formula)
    same_levels(make_index(panel.prices, panel.quantities, Recipe(formula, form=form)), expected)


@each_form
@each_base_weighted
@pytest.mark.parametrize("panel", named(ZEROS))
def test_zero_quantities_in_base_weighted_formulas(panel: Panel, formula: Base, form: Form) -> None:
    for weight_periods in weight_choices(panel):
        expected = twins_windows.base_weighted(panel.prices, panel.quantities, formula, weight_periods, form)
        recipe = Recipe(formula, form=form, weight_periods=weight_periods)
        same_levels(make_index(panel.prices, panel.quantities, recipe), expected)


@pytest.mark.parametrize("onto", ONTO)
@pytest.mark.parametrize("method", [*WINDOWED, "similarity"])
@pytest.mark.parametrize("panel", named(ZEROS))
def test_zero_quantities_in_multilateral_methods(
    panel: Panel, method: str, onto: Literal["published", "recalculated"]
) -> None:
    for window in (None, 3, 5):
        twin = functools.partial(
            twins_windows.series, panel.prices, panel.quantities, method, window=window, splice="half", onto=onto
        )
        compare(panel, Recipe(method, window=window, splice="half", onto=onto), twin)


# Many recipes, many segments, replicates


def well_connected(seed: int, products: int = 14, periods: int = 8) -> Panel:
    """A panel of which any few products may go."""
    rng = np.random.default_rng(seed)
    sold = rng.random((periods, products)) < 0.8
    noise = rng.normal(0, 0.3, sold.shape)
    prices = np.where(sold, np.exp(rng.normal(1, 1, products) + noise), math.nan)
    quantities = np.where(
        sold, np.exp(rng.normal(3, 1, products) - 2 * noise + rng.normal(0, 0.2, sold.shape)), math.nan
    )
    return Panel(f"well-connected-{seed}", prices, quantities)


CUTS = (0, 1, 4, 9)
YEARS = [0, 1, 1, 1, 1, 2, 2, 2]


def recipes() -> list[Recipe]:
    """At least one of every kind."""
    found = [Recipe(formula, form=form) for formula in BILATERAL_FORMULAS for form in FORMS]
    found += [Recipe(f, form=form, weight_periods=(0, 2)) for f in BASE_WEIGHTED for form in FORMS]
    for method in WINDOWED:
        found += [Recipe(method), Recipe(method, window=5, splice="link-month")]
        found += [Recipe(method, window="expanding", splice="link-month")]
        found += [Recipe(method, window=4, splice=splice, onto=onto) for splice, onto in VARIANTS]
    return [*found, Recipe("similarity"), Recipe("similarity", window=3)]


def side_by_side() -> tuple[Array, Array, list[int]]:
    """Four panels next to each other, one without products at both ends, one of a single product."""
    parts = [well_connected(seed, products) for seed, products in ((1, 9), (2, 6), (3, 12))]
    parts[1].prices[[0, -1]] = math.nan
    parts[1].quantities[[0, -1]] = math.nan
    lone = np.linspace(1.0, 2.0, len(YEARS))[:, None]
    prices = np.hstack([*(part.prices for part in parts), lone])
    quantities = np.hstack([*(part.quantities for part in parts), lone])
    return prices, quantities, [0, 9, 15, 27]


def test_several_recipes_and_segments_are_the_indexes_one_by_one() -> None:
    prices, quantities, starts = side_by_side()
    asked, years = recipes(), np.array(YEARS)
    found = make_indexes(prices, quantities, asked, segments=np.array(starts), years=years)
    assert found.shape == (len(asked), len(starts), len(prices))
    for b, (start, stop) in enumerate(itertools.pairwise([*starts, prices.shape[1]])):
        for r, recipe in enumerate(asked):
            alone = make_index(prices[:, start:stop], quantities[:, start:stop], recipe, years=years)
            np.testing.assert_allclose(found[r, b], alone, rtol=tolerances.TWIN, atol=0, err_msg=f"{recipe} {b}")


@each_windowed
def test_several_segments_are_their_twins(method: str) -> None:
    prices, quantities, starts = side_by_side()
    kinds = [Recipe(method, window=4, splice=splice, onto=onto) for splice, onto in VARIANTS]
    found = make_indexes(prices, quantities, kinds, segments=np.array(starts))
    for b in (0, 2, 3):
        part = slice(starts[b], [*starts, prices.shape[1]][b + 1])
        for r, recipe in enumerate(kinds):
            expected = twins_windows.series(
                prices[:, part], quantities[:, part], method, window=4, splice=recipe.splice, onto=recipe.onto
            )
            same_levels(found[r, b], expected)


def test_no_segments_are_one_segment() -> None:
    panel = well_connected(1)
    asked, years = recipes(), np.array(YEARS)
    found = make_indexes(panel.prices, panel.quantities, asked, years=years)
    assert found.shape == (len(asked), 1, len(panel.prices))
    for r, recipe in enumerate(asked):
        alone = make_index(panel.prices, panel.quantities, recipe, years=years)
        np.testing.assert_allclose(found[r, 0], alone, rtol=tolerances.TWIN, atol=0, err_msg=str(recipe))


def test_one_unconnected_segment_is_refused() -> None:
    prices, quantities, starts = side_by_side()
    prices[:4, 27] = math.nan
    quantities[:4, 27] = math.nan
    two = np.hstack([prices, np.where(np.arange(len(prices)) < 4, 1.0, math.nan)[:, None]])
    sold = np.hstack([quantities, np.where(np.arange(len(prices)) < 4, 1.0, math.nan)[:, None]])
    for method in WINDOWED:
        with pytest.raises(UnconnectedPeriods):
            make_indexes(two, sold, [Recipe(method)], segments=np.array(starts))


def test_left_out_segments_are_the_panel_without_their_columns() -> None:
    panel = well_connected(4)
    asked, years = [recipe for recipe in recipes() if recipe.method != "tpd"], np.array(YEARS)
    found = make_indexes(panel.prices, panel.quantities, asked, segments=np.array(CUTS), leave_out=True, years=years)
    assert found.shape == (len(asked), len(CUTS), len(panel.prices))
    for b, less in enumerate(twins_windows.left_out(panel.prices, CUTS)):
        fewer = np.where(np.isnan(less), math.nan, panel.quantities)
        for r, recipe in enumerate(asked):
            alone = make_index(less, fewer, recipe, years=years)
            np.testing.assert_allclose(found[r, b], alone, rtol=tolerances.TWIN, atol=0, err_msg=f"{recipe} {b}")


@pytest.mark.parametrize("seed", [4, 5])
@pytest.mark.parametrize("method", [*WINDOWED, "similarity"])
def test_replicates(method: str, seed: int) -> None:
    panel = well_connected(seed)
    asked = [recipe for recipe in recipes() if recipe.method == method]
    found = make_indexes(
        panel.prices, panel.quantities, asked, segments=np.array(CUTS), leave_out=True, years=np.array(YEARS)
    )
    for r, recipe in enumerate(asked):
        expected = twins_windows.replicates(
            panel.prices,
            panel.quantities,
            method,
            CUTS,
            window=recipe.window,
            splice=recipe.splice,
            onto=recipe.onto,
            years=YEARS,
        )
        np.testing.assert_allclose(found[r], expected, rtol=tolerances.TWIN, atol=0, err_msg=str(recipe))


@each_form
@each_base_weighted
def test_replicates_of_base_weighted_formulas(formula: Base, form: Form) -> None:
    panel = well_connected(4)
    recipe = Recipe(formula, form=form, weight_periods=(0, 2))
    found = make_indexes(panel.prices, panel.quantities, [recipe], segments=np.array(CUTS), leave_out=True)
    for b, less in enumerate(twins_windows.left_out(panel.prices, CUTS)):
        same_levels(found[0, b], twins_windows.base_weighted(less, panel.quantities, formula, (0, 2), form))


@pytest.mark.parametrize("seed", range(4, 8))
def test_replicates_of_the_time_product_dummy_are_regressions_with_the_weights_of_the_full_panel(seed: int) -> None:
    panel = well_connected(seed)
    shares = twins_windows.expenditure_shares(panel.prices, panel.quantities)
    periods = len(panel.prices)
    found = make_indexes(panel.prices, panel.quantities, [Recipe("tpd")], segments=np.array(CUTS), leave_out=True)
    for b, less in enumerate(twins_windows.left_out(panel.prices, CUTS)):
        period, product = np.nonzero(~np.isnan(less))
        dummies = np.hstack([np.eye(periods)[period], np.eye(less.shape[1])[product]])[:, 1:]
        with np.errstate(all="ignore"):
            fit = sm.WLS(
                np.log(less[period, product]), dummies[:, dummies.any(axis=0)], weights=shares[period, product]
            ).fit()
        np.testing.assert_allclose(np.log(found[0, b, 1:]), fit.params[: periods - 1], rtol=0, atol=REGRESSION)


@pytest.mark.parametrize("method", [*WINDOWED, "similarity", "fisher"])
def test_period_that_only_the_left_out_columns_have_is_without_a_level(method: str) -> None:
    panel = well_connected(6)
    panel.prices[3, 1:] = math.nan
    panel.prices[:, 0] = np.linspace(1.0, 2.0, len(panel.prices))
    quantities = np.where(np.isnan(panel.prices), math.nan, np.nan_to_num(panel.quantities, nan=3.0))
    found = make_indexes(panel.prices, quantities, [Recipe(method)], segments=np.array(CUTS), leave_out=True)
    assert np.isnan(found[0, 0]).tolist() == [t == 3 for t in range(len(panel.prices))]
    assert np.isfinite(found[0, 1:]).all()
