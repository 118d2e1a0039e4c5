"""Changes and contributions as they are defined; over trees and links they are tested with aggregation."""

import numpy as np
import pytest

from tests.kernels import tolerances
from tests.reference.published import cases
from tillwright.kernels.contributions import measure_contributions, percent_change


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
