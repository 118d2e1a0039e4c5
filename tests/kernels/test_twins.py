"""Kernels against the loop twins on seeded random panels with churn, gaps and lone products."""

import math
from collections import Counter
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.kernels import tolerances, twins
from tests.kernels.panels import Panel, random_panels
from tests.kernels.variants import GEKS_FORMULAS, VARIANTS, Onto, Splice, rolling_geks
from tillwright.choices import BILATERAL_FORMULAS
from tillwright.errors import UnconnectedPeriods
from tillwright.kernels import bilateral, splicing

Array = NDArray[np.float64]
PANELS = random_panels()


def connected(panel: Panel, window: int) -> bool:
    """Whether every rolling window of the panel hangs together."""
    pairs = twins.pair_levels(panel.prices, panel.quantities, "jevons")
    return not twins.unconnected_groups(pairs, window)


def named(panels: list[Panel]) -> list[Any]:
    """Parameters with the panels' names as ids."""
    return [pytest.param(panel, id=panel.name) for panel in panels]


SPAN_WINDOW = 4
CONNECTED = [p for p in PANELS if connected(p, SPAN_WINDOW)]
# Linking on a period without products is not settled by the definitions: see test_contract.
NEVER_EMPTY = [p for p in PANELS if len(twins.priced_periods(p.prices)) == len(p.prices)]

each_panel = pytest.mark.parametrize("panel", named(PANELS))
each_formula = pytest.mark.parametrize("formula", BILATERAL_FORMULAS)
each_reversible = pytest.mark.parametrize("formula", GEKS_FORMULAS)


def same_levels(found: Array, expected: Array) -> None:
    """Levels equal to a relative TWIN, NaN in the same places."""
    np.testing.assert_allclose(found, expected, rtol=tolerances.TWIN, atol=0)


def same_logs(found: Array, expected: Array) -> None:
    """Log levels equal to TWIN, NaN in the same places."""
    np.testing.assert_allclose(found, expected, rtol=0, atol=tolerances.TWIN)


def twin_pairs(panel: Panel, formula: str) -> twins.Levels:
    """The twin's matrix of pairs."""
    return twins.pair_levels(panel.prices, panel.quantities, formula)


@each_formula
@each_panel
def test_pair_levels(panel: Panel, formula: str) -> None:
    found = bilateral.pair_levels(panel.prices, panel.quantities, formula)
    assert found.dtype == np.float64
    same_levels(found, np.array(twin_pairs(panel, formula)))


@pytest.mark.parametrize("span", [0, 1, 3, 99])
@each_formula
@each_panel
def test_pair_levels_within_a_span(panel: Panel, formula: str, span: int) -> None:
    found = bilateral.pair_levels(panel.prices, panel.quantities, formula, span=span)
    same_levels(found, np.array(twins.pair_levels(panel.prices, panel.quantities, formula, span)))


@each_formula
@each_panel
def test_series_direct(panel: Panel, formula: str) -> None:
    found = bilateral.series(panel.prices, panel.quantities, formula, form="direct")
    same_levels(found, np.array(twins.direct(panel.prices, panel.quantities, formula)))


@each_formula
@each_panel
def test_series_chained(panel: Panel, formula: str) -> None:
    found = bilateral.series(panel.prices, panel.quantities, formula, form="chained")
    expected = np.array(twins.chained(panel.prices, panel.quantities, formula))
    same_levels(found, expected)
    same_levels(bilateral.series(panel.prices, panel.quantities, formula), expected)


@each_reversible
@each_panel
def test_geks_of_rolling_windows(panel: Panel, formula: str) -> None:
    pairs = twin_pairs(panel, formula)
    log_pairs = np.log(np.array(pairs))
    for window in range(3, len(pairs) + 2):
        groups = twins.unconnected_groups(pairs, window)
        if groups:
            with pytest.raises(UnconnectedPeriods) as raised:
                rolling_geks(log_pairs, window)
            assert raised.value.groups == groups
        else:
            expected = np.array(twins.window_levels(pairs, window))
            same_logs(rolling_geks(log_pairs, window), expected)


@each_reversible
@pytest.mark.parametrize("panel", named(CONNECTED))
def test_geks_needs_only_pairs_inside_the_window(panel: Panel, formula: str) -> None:
    expected = np.array(twins.window_levels(twin_pairs(panel, formula), SPAN_WINDOW))
    pairs = bilateral.pair_levels(panel.prices, panel.quantities, formula, span=SPAN_WINDOW - 1)
    same_logs(rolling_geks(np.log(pairs), SPAN_WINDOW), expected)


@pytest.mark.parametrize(("splice", "onto"), VARIANTS)
@pytest.mark.parametrize("panel", named(NEVER_EMPTY))
def test_splicing_of_rolling_geks(panel: Panel, splice: Splice, onto: Onto) -> None:
    pairs = twin_pairs(panel, "tornqvist")
    for window in (w for w in range(3, len(pairs) + 2) if connected(panel, w)):
        levels = twins.window_levels(pairs, window)
        expected = np.array(twins.splice_levels(levels, splice, onto))
        same_levels(splicing.splice(np.array(levels), splice=splice, onto=onto), expected)
        found_pairs = bilateral.pair_levels(panel.prices, panel.quantities, "tornqvist")
        found_levels = rolling_geks(np.log(found_pairs), window)
        same_levels(splicing.splice(found_levels, splice=splice, onto=onto), expected)


@pytest.mark.parametrize(("splice", "onto"), VARIANTS)
@pytest.mark.parametrize("window", range(2, 9))
def test_splicing_of_windows_that_disagree(window: int, splice: Splice, onto: Onto) -> None:
    rng = np.random.default_rng(window)
    levels = rng.normal(0, 0.3, (7, window))
    levels -= levels[:, :1]
    expected = np.array(twins.splice_levels(levels.tolist(), splice, onto))
    found = splicing.splice(levels, splice=splice, onto=onto)
    assert found.shape == (7 + window - 1,)
    same_levels(found, expected)


def test_geks_twin_by_definition_and_by_least_squares_agree() -> None:
    for panel in (p for p in PANELS if p.name.endswith("complete")):
        pairs = twin_pairs(panel, "fisher")
        periods = list(range(len(pairs)))
        by_definition = twins.geks_complete(pairs, periods)
        same_logs(np.array(twins.geks_least_squares(pairs, periods)), np.array(by_definition))


def complete(pairs: twins.Levels, start: int, window: int) -> bool:
    """Whether every pair of priced periods in the window exists."""
    inside = range(start, start + window)
    priced = [t for t in inside if not math.isnan(pairs[t][t])]
    return not any(math.isnan(pairs[s][t]) for s in priced for t in priced)


def test_the_panels_hold_every_situation() -> None:
    seen: Counter[str] = Counter()
    for panel in PANELS:
        pairs = twin_pairs(panel, "jevons")
        seen["empty period"] += panel not in NEVER_EMPTY
        seen["lone product"] += any((~np.isnan(row)).sum() == 1 for row in panel.prices)
        for window in range(3, len(pairs) + 1):
            if not connected(panel, window):
                seen["unconnected"] += 1
                continue
            for start in range(len(pairs) - window + 1):
                seen["complete" if complete(pairs, start, window) else "incomplete"] += 1
    assert seen["empty period"] >= 3
    assert seen["lone product"] >= 3
    assert seen["unconnected"] >= 10
    assert seen["complete"] >= 50
    assert seen["incomplete"] >= 50
