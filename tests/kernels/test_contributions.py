"""Changes and contributions as they are defined, and over the trees and links of aggregation."""

import numpy as np
import pytest

from tests.kernels import tolerances
from tests.kernels.test_aggregation import (
    AS_THEY_STAND,
    BASES,
    MISSING,
    below,
    complete_levels,
    make,
    with_own_headings,
)
from tests.reference.published import cases
from tillwright.kernels.chaining import WeightYear, aggregate, update_weights
from tillwright.kernels.contributions import measure_contributions, percent_change

ADDITIVE = 1e-9
"""DESIGN section 3: contributions add up to 1e-9 percentage points before rounding."""


# ONS, Consumer Prices Indices Technical Manual (2019), Table 7; seen in a published page.
def test_percentage_change_of_the_published_example() -> None:
    (case,) = cases("ons_percentage_change")
    index = np.array([case.inputs["previous"], case.inputs["current"]])
    np.testing.assert_allclose(percent_change(index, 1)[1:], case.expected, rtol=0, atol=case.tolerance)


@pytest.mark.parametrize("lag", [1, 2, 3])
def test_change_is_missing_before_there_is_a_period_to_compare_with(lag: int) -> None:
    index = np.array([1.0, 1.1, 1.21])
    change = percent_change(index, lag)
    assert np.isnan(change[: min(lag, 3)]).all()
    assert np.isfinite(change[lag:]).all()
    assert np.isnan(measure_contributions(index[:, None], index, lag)[: min(lag, 3)]).all()


def test_change_does_not_depend_on_the_reference_period() -> None:
    index = np.array([[1.0, 2.0], [1.1, 2.6], [1.3, 1.9]])
    np.testing.assert_allclose(percent_change(87.3 * index, 1), percent_change(index, 1), rtol=tolerances.EXACT)


def test_a_missing_level_makes_its_changes_missing_and_no_others() -> None:
    change = percent_change(np.array([1.0, np.nan, 1.2, 1.5]), 1)
    assert np.isnan(change[[0, 1, 2]]).all()
    assert change[3] == pytest.approx(25.0, rel=tolerances.EXACT)


def test_contributions_of_a_fixed_basket_are_weighted_changes() -> None:
    # Without a link the contribution of i is w_i · [I_i(t) − I_i(t−1)] / I(t−1) (CPI Manual 2004, ch. 9).
    weights, levels = np.array([0.3, 0.7]), np.array([[1.0, 1.0], [1.2, 0.9], [1.1, 1.0]])
    points, total = weights * (levels - levels[0]), levels @ weights
    found = measure_contributions(points, total, 1)
    expected = 100 * weights * np.diff(levels, axis=0) / total[:-1, None]
    np.testing.assert_allclose(found[1:], expected, rtol=tolerances.EXACT)
    np.testing.assert_allclose(found[1:].sum(axis=1), percent_change(total, 1)[1:], rtol=tolerances.EXACT)


@pytest.mark.parametrize("base", BASES)
@pytest.mark.parametrize("missing", MISSING)
@pytest.mark.parametrize("lag", [1, 12])
def test_contributions_add_up_to_the_change_at_every_level(lag: int, missing: str, base: str) -> None:
    made = make(5, missing, base)
    result = with_own_headings(made).result()
    contributions = measure_contributions(result.points, result.index[:, 0], lag)[lag:]
    change = percent_change(result.index[:, 0], lag)[lag:]
    np.testing.assert_allclose(contributions[:, 0], change, rtol=0, atol=ADDITIVE)
    for h in range(made.headings):
        parts = contributions[:, made.headings :][:, below(made, h)].sum(axis=1)
        np.testing.assert_allclose(parts, contributions[:, h], rtol=0, atol=ADDITIVE)


# Ribe (1999): over a link the contribution is a last-year and a this-year term (formulas as in REFERENCE.md); a
# missing component counts with the level it is given.
@pytest.mark.parametrize("base", BASES)
@pytest.mark.parametrize("missing", MISSING)
def test_contributions_over_a_link_equal_the_two_terms_of_ribe(missing: str, base: str) -> None:
    made = make(4, missing, base)
    result, levels = with_own_headings(made).result(), complete_levels(made)
    found = measure_contributions(result.points, result.index[:, 0], 12)[:, made.headings :]
    total, link, link_before = result.index[:, 0], 23, 11
    carried = [update_weights(year.weights, levels, year.link, year.base) for year in made.years[1:]]
    last_year, this_year = (weights / weights.sum() for weights in carried)
    for t in range(24, 36):
        before = t - 12
        last = last_year * (levels[link] - levels[before]) / levels[link_before] * total[link_before] / total[before]
        this = this_year * (levels[t] - levels[link]) / levels[link] * total[link] / total[before]
        np.testing.assert_allclose(found[t], 100 * (last + this), rtol=0, atol=ADDITIVE)


# By the definition of the points, on paper: one component at 1, 2, 3, the last linked on the first.
def test_contributions_add_up_where_the_link_lies_before_the_period_before() -> None:
    years = [WeightYear(0, 0, 1, np.ones(1), AS_THEY_STAND), WeightYear(0, 2, 2, np.ones(1), AS_THEY_STAND)]
    result = aggregate(np.array([[1.0], [2.0], [3.0]]), years, np.array([[0]]), 1)
    found = measure_contributions(result.points, result.index[:, 0], 1)[1:, 0]
    np.testing.assert_allclose(found, [100.0, 50.0], rtol=tolerances.EXACT)
