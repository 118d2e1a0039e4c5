"""Jackknife errors against the loop formula, textbook errors of means and ratios, and a simulation.

Efron and Tibshirani (1993), chapter 11, for the jackknife; Cochran (1977), section 6.3, for the ratio.
"""

import math

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.kernels import twins
from tests.kernels.panels import Array, random_panel
from tests.kernels.variants import FORMS, ONTO, SPLICES
from tillwright.kernels.jackknife import standard_errors
from tillwright.kernels.methods import make_index, make_indexes
from tillwright.kernels.recipes import Recipe

ROUNDING = 1e-12
"""Sums of a few hundred terms below 10."""
SOLVED = 1e-9
"""Least squares and fixed points, solved twice from different starts."""
LINEARISED = 0.02
"""Jackknife and linearised error of a ratio differ by terms in 1/n: far below this for n = 2000."""
SIMULATED = 0.15
"""300 seeds give the spread of the index to about 4 % (1/√600)."""

ROLLING = (
    "geks-jevons",
    "geks-fisher",
    "geks-tornqvist",
    "geks-walsh",
    "tpd-unweighted",
    "geary-khamis",
)
AS_IF_NEVER_SOLD = [
    *(Recipe(name, form=form) for name in twins.FORMULAS for form in FORMS),
    *(
        Recipe(name, form=form, weight_periods=(0, 2))
        for name in ("lowe", "young", "geometric-young")
        for form in FORMS
    ),
    *(Recipe(name) for name in (*ROLLING, "similarity")),
    Recipe("similarity", window=3),
    *(Recipe(name, window=3, splice=splice, onto=onto) for name in ROLLING for splice in SPLICES for onto in ONTO),
    *(Recipe(name, window=4, splice="link-month") for name in ROLLING),
    *(Recipe(name, window="expanding", splice="link-month") for name in ROLLING),
]


def called(recipe: Recipe) -> str:
    return f"{recipe.method}-{recipe.form}-{recipe.window}-{recipe.splice}-{recipe.onto}"


def error_by_loop(values: list[float]) -> float:
    """√((G − 1)/G · Σ (θ − mean θ)²)."""
    count = len(values)
    mean = math.fsum(values) / count
    return math.sqrt((count - 1) / count * math.fsum((value - mean) ** 2 for value in values))


def each_alone(products: int) -> NDArray[np.int64]:
    """Segments of one product each."""
    return np.arange(products)


def in_groups(panel_products: int) -> NDArray[np.int64]:
    """Three segments of unequal width."""
    return np.array([0, 1, max(2, panel_products // 2)])


def without(values: Array, segments: NDArray[np.int64], left_out: int) -> Array:
    """The same array with one segment not sold."""
    stops = [*segments[1:].tolist(), values.shape[1]]
    kept = values.copy()
    kept[:, segments[left_out] : stops[left_out]] = np.nan
    return kept


def whole_panels() -> list[tuple[Array, Array]]:
    """Panels that hang together whichever group is left out: complete, and with products that come and go."""
    found = [random_panel(seed) for seed in (0, 7, 14)]
    whole = [(panel.prices, panel.quantities) for panel in found]
    prices, quantities = np.hstack([whole[1][0]] * 2), np.hstack([whole[1][1]] * 2)
    prices[:, prices.shape[1] // 2 :] *= 1 + 0.1 * np.sin(np.arange(len(prices)))[:, None]
    gone = np.random.default_rng(5).random(prices.shape) < 0.2
    prices[gone] = quantities[gone] = np.nan
    return [*whole, (prices, quantities)]


@pytest.mark.parametrize("shape", [(2,), (7,), (5, 4), (3, 2, 6)])
def test_standard_errors_are_the_loop_formula(shape: tuple[int, ...]) -> None:
    replicates = np.random.default_rng(len(shape)).normal(1, 0.2, shape)
    found = np.asarray(standard_errors(replicates))
    assert found.shape == shape[1:]
    for place in np.ndindex(shape[1:]):
        column = [float(replicates[(g, *place)]) for g in range(shape[0])]
        assert found[place] == pytest.approx(error_by_loop(column), abs=ROUNDING)


def test_replicates_that_agree_have_no_error() -> None:
    assert np.abs(standard_errors(np.full((6, 3), 1.25))).max() <= ROUNDING


@pytest.mark.parametrize("products", [2, 5, 40])
def test_log_jevons_has_the_textbook_error_of_a_mean(products: int) -> None:
    # Efron & Tibshirani (1993), chapter 11: the delete-one jackknife of a mean is s/√n exactly.
    rng = np.random.default_rng(products)
    prices = np.exp(rng.normal(1, 0.5, (2, products)))
    segments = each_alone(products)
    replicates = make_indexes(prices, np.ones_like(prices), [Recipe("jevons")], segments=segments, leave_out=True)
    assert replicates.shape == (1, products, 2)
    logs = np.log(prices[1] / prices[0])
    found = standard_errors(np.log(replicates[0, :, 1]))
    assert float(found) == pytest.approx(logs.std(ddof=1) / math.sqrt(products), rel=1e-10)


def test_carli_has_the_textbook_error_of_a_mean() -> None:
    rng = np.random.default_rng(11)
    prices = np.exp(rng.normal(1, 0.5, (2, 30)))
    replicates = make_indexes(prices, np.ones_like(prices), [Recipe("carli")], segments=each_alone(30), leave_out=True)
    relatives = prices[1] / prices[0]
    found = standard_errors(replicates[0, :, 1])
    assert float(found) == pytest.approx(relatives.std(ddof=1) / math.sqrt(30), rel=1e-10)


def test_laspeyres_has_about_the_linearised_error_of_a_ratio() -> None:
    # Cochran (1977), section 6.3, without finite population correction: √(n/(n−1) Σ (y − R x)²) / Σ x.
    rng = np.random.default_rng(3)
    count = 2000
    prices = np.exp(rng.normal(1, 0.3, (2, count)))
    quantities = np.exp(rng.normal(2, 0.5, (2, count)))
    replicates = make_indexes(prices, quantities, [Recipe("laspeyres")], segments=each_alone(count), leave_out=True)
    above, below = prices[1] * quantities[0], prices[0] * quantities[0]
    residual = above - above.sum() / below.sum() * below
    linearised = math.sqrt(count / (count - 1) * (residual**2).sum()) / below.sum()
    assert float(standard_errors(replicates[0, :, 1])) == pytest.approx(linearised, rel=LINEARISED)


@pytest.mark.parametrize("recipe", AS_IF_NEVER_SOLD, ids=called)
def test_a_replicate_is_the_index_of_a_panel_in_which_the_group_is_never_sold(recipe: Recipe) -> None:
    for prices, quantities in whole_panels():
        segments, years = in_groups(prices.shape[1]), np.arange(len(prices)) // 3
        (found,) = make_indexes(prices, quantities, [recipe], segments=segments, leave_out=True, years=years)
        assert found.shape == (len(segments), len(prices))
        for group in range(len(segments)):
            kept, units = without(prices, segments, group), without(quantities, segments, group)
            expected = make_index(kept, units, recipe, years=years)
            np.testing.assert_allclose(found[group], expected, rtol=SOLVED, err_msg=f"group {group}")


def test_a_replicate_starts_at_1_in_its_own_first_priced_period() -> None:
    prices = np.array([[1.0, np.nan, np.nan], [1.1, 2.0, 3.0], [1.2, 2.4, 3.0]])
    (found,) = make_indexes(prices, np.ones_like(prices), [Recipe("jevons")], segments=each_alone(3), leave_out=True)
    np.testing.assert_allclose(found[0], [np.nan, 1.0, math.sqrt(1.2)], rtol=ROUNDING)


def dummy_by_least_squares(prices: Array, weights: Array) -> list[float]:
    """Log levels of the weighted regression of ln p on period and product dummies, 0 in the first period."""
    rows, values = [], []
    for t, i in zip(*np.nonzero(np.isfinite(prices)), strict=True):
        row = np.zeros(sum(prices.shape))
        row[t], row[len(prices) + i] = 1.0, 1.0
        root = math.sqrt(weights[t, i])
        rows.append(root * row)
        values.append(root * math.log(prices[t, i]))
    design = np.delete(np.array(rows), 0, axis=1)
    fitted = np.linalg.lstsq(design, np.array(values), rcond=None)[0]
    return [0.0, *fitted[: len(prices) - 1].tolist()]


@pytest.mark.parametrize("onto", ONTO)
@pytest.mark.parametrize("splice", SPLICES)
@pytest.mark.parametrize("window", [3, 99])
def test_time_product_dummy_replicates_keep_the_weights_of_the_full_panel(window: int, splice: str, onto: str) -> None:
    for prices, quantities in whole_panels():
        segments = in_groups(prices.shape[1])
        width = min(window, len(prices))
        recipe = Recipe("tpd", window=window, splice=splice, onto=onto)  # type: ignore[arg-type]
        (found,) = make_indexes(prices, quantities, [recipe], segments=segments, leave_out=True)
        shares = prices * quantities / np.nansum(prices * quantities, axis=1, keepdims=True)
        for group in range(len(segments)):
            kept = without(prices, segments, group)
            levels = [
                dummy_by_least_squares(kept[k : k + width], shares[k : k + width])
                for k in range(len(prices) - width + 1)
            ]
            expected = twins.splice_levels(levels, splice, onto)
            np.testing.assert_allclose(found[group], expected, rtol=SOLVED, err_msg=f"group {group}")


def test_many_recipes_at_once_are_each_of_them_alone() -> None:
    prices, quantities = whole_panels()[-1]
    segments, years = in_groups(prices.shape[1]), np.arange(len(prices)) // 3
    recipes = [*AS_IF_NEVER_SOLD[::5], Recipe("tpd"), Recipe("tpd", window=4)]
    for leave_out in (False, True):
        settings = {"segments": segments, "leave_out": leave_out, "years": years}
        if not leave_out:
            settings["segments"] = np.array([0, prices.shape[1] // 2])
        together = make_indexes(prices, quantities, recipes, **settings)  # type: ignore[arg-type]
        for recipe, found in zip(recipes, together, strict=True):
            (alone,) = make_indexes(prices, quantities, [recipe], **settings)  # type: ignore[arg-type]
            np.testing.assert_allclose(found, alone, rtol=SOLVED, err_msg=called(recipe))


def test_the_error_of_log_tornqvist_is_the_spread_of_the_index_over_samples() -> None:
    errors, logs = [], []
    products = 60
    for seed in range(300):
        rng = np.random.default_rng(seed)
        prices = np.exp(rng.normal(1, 0.5, products) + np.array([[0.0], [0.02]]) + rng.normal(0, 0.1, (2, products)))
        quantities = np.exp(rng.normal(2, 0.6, products) + rng.normal(0, 0.2, (2, products)))
        recipe = Recipe("tornqvist")
        (replicates,) = make_indexes(prices, quantities, [recipe], segments=each_alone(products), leave_out=True)
        errors.append(float(standard_errors(np.log(replicates[:, 1]))))
        logs.append(math.log(make_index(prices, quantities, recipe)[1]))
    assert np.mean(errors) == pytest.approx(np.std(logs, ddof=1), rel=SIMULATED)
