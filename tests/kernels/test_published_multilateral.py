"""Multilateral and base-weighted kernels against published figures and statements of the literature.

Printed figures are in tests/reference with their sources. A statement without a printed figure has its source beside
the check; all are from memory, definition recomputed. "CPI Manual" is the manual of 2004.
"""

from collections.abc import Callable
from itertools import pairwise
from typing import Literal

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.kernels import tolerances
from tests.kernels.variants import FORMS, ONTO, VARIANTS, Form, Onto, Splice
from tests.reference.published import Case, cases, dataset
from tillwright.kernels import bilateral
from tillwright.kernels.methods import make_index, make_indexes
from tillwright.kernels.recipes import Recipe

Array = NDArray[np.float64]

GEKS = ("geks-jevons", "geks-fisher", "geks-tornqvist", "geks-walsh")
WINDOWED = (*GEKS, "tpd", "tpd-unweighted", "geary-khamis")
METHODS = (*WINDOWED, "similarity")
YEARS = np.array([0, 1, 1, 1, 1, 2, 2, 2, 2, 3, 3, 3, 3])
"""A first link period and three years of four periods; link periods 0, 4, 8 and 12."""
LINKS = [0, 4, 8, 12]
LINK_MONTH_WINDOWS: tuple[int | Literal["expanding"], ...] = (5, "expanding")
APPROXIMATION = 6.0
"""A difference of third order falls to an eighth when its argument is halved; 6 leaves room for the fourth order."""

each_method = pytest.mark.parametrize("method", METHODS)
each_windowed = pytest.mark.parametrize("method", WINDOWED)


def published(identity: str) -> Case:
    """The one case of this id."""
    (case,) = [case for case in cases(identity) if case.id == identity]
    print(case.citation)
    return case


def matches(found: Array, case: Case) -> None:
    """Equal to the printed figures."""
    np.testing.assert_allclose(found, case.expected, rtol=0, atol=case.tolerance, err_msg=case.citation)


def close(found: Array, expected: Array, tolerance: float = tolerances.EXACT) -> None:
    """Equal to rounding."""
    np.testing.assert_allclose(found, expected, rtol=tolerance, atol=0)


def artificial(recipe: Recipe) -> Array:
    """The recipe on the artificial data set of the CPI Manual, ch. 19."""
    data = dataset("artificial")
    return make_index(data.prices, data.quantities, recipe)


def link(prices: Array, quantities: Array, method: str, weight_periods: tuple[int, ...] = ()) -> float:
    """The last of two periods on the first."""
    recipe = Recipe(method, form="direct", weight_periods=weight_periods)
    return float(make_index(prices, quantities, recipe)[1])


def shares(prices: Array, quantities: Array) -> Array:
    """Expenditure shares of each period."""
    spent = prices * quantities
    found: Array = spent / np.nansum(spent, axis=1, keepdims=True)
    return found


def churning() -> tuple[Array, Array]:
    """Thirteen periods of ten products, of which six come or go; the other four keep every window connected."""
    rng = np.random.default_rng(7)
    noise = rng.normal(0, 0.2, (13, 10))
    prices, quantities = np.exp(noise + rng.normal(1, 1, 10)), np.exp(3 - 2 * noise + rng.normal(0, 0.5, (13, 10)))
    clock = np.arange(13)[:, None]
    sold = (clock >= [0, 0, 0, 0, 3, 6, 9, 0, 0, 2]) & (clock <= [12, 12, 12, 12, 12, 12, 12, 3, 7, 10])
    return np.where(sold, prices, np.nan), np.where(sold, quantities, np.nan)


# Diewert (2021), chain drift paper, Tables 1-2: period 4 repeats period 1.
def test_every_multilateral_method_ends_at_one_in_the_chain_drift_example() -> None:
    data = dataset("chaindrift")
    found = make_indexes(data.prices, data.quantities, [Recipe(method) for method in METHODS])
    assert found.shape == (len(METHODS), 1, 4)
    np.testing.assert_allclose(found[:, 0, -1], 1.0, rtol=0, atol=tolerances.EXACT)


# Diewert (2021), chain drift paper: predicted-share similarity linking passes the strong identity test, equal prices
# give equal levels whatever the quantities, and prices in proportion give their proportion; GEKS does not. In his
# example periods 3 and 1 have equal prices, so the linked index is the printed fixed-base Fisher index.
def test_similarity_linking_passes_the_strong_identity_test() -> None:
    data = dataset("chaindrift")
    linked = make_index(data.prices, data.quantities, Recipe("similarity"))
    matches(linked, published("chaindrift_fisher_fb"))
    assert abs(linked[2] - 1) <= tolerances.EXACT
    assert abs(make_index(data.prices, data.quantities, Recipe("geks-fisher"))[2] - 1) > tolerances.FAILS
    same = dataset("artificial")
    prices, quantities = np.vstack([same.prices, 1.7 * same.prices[1]]), same.quantities[[0, 1, 2, 3, 4, 3]]
    found = make_index(prices, quantities, Recipe("similarity"))
    assert found[5] == pytest.approx(1.7 * found[1], rel=tolerances.EXACT)


# Ivancic, Diewert & Fox (2011): with a window of two periods GEKS is the chained bilateral index, so whatever the
# splice it comes to the printed chained figures; likewise similarity linking on the period before (Fisher) and the
# unweighted time product dummy (Jevons; de Haan & Krsinich 2014).
@pytest.mark.parametrize(("splice", "onto"), VARIANTS)
@pytest.mark.parametrize(
    ("method", "identity"),
    [
        ("geks-fisher", "artificial_chained_fisher"),
        ("geks-tornqvist", "artificial_chained_tornqvist"),
        ("geks-jevons", "artificial_chained_jevons"),
        ("tpd-unweighted", "artificial_chained_jevons"),
        ("similarity", "artificial_chained_fisher"),
        ("geks-fisher", "chaindrift_fisher_ch"),
        ("similarity", "chaindrift_fisher_ch"),
    ],
)
def test_windows_of_two_periods_chain(method: str, identity: str, splice: Splice, onto: Onto) -> None:
    case = published(identity)
    data = dataset(identity.split("_", maxsplit=1)[0])
    recipe = Recipe(method, window=2, splice=splice, onto=onto)
    matches(make_index(data.prices, data.quantities, recipe), case)


# On a complete panel Jevons is transitive, so that GEKS-Jevons is Jevons, and so is the unweighted time product dummy
# (de Haan & Krsinich 2014): the printed figures come out of every window and splice.
@pytest.mark.parametrize("method", ["geks-jevons", "tpd-unweighted"])
@pytest.mark.parametrize("window", [None, 2, 3, 4])
def test_unweighted_methods_on_a_complete_panel_are_jevons(method: str, window: int | None) -> None:
    for splice, onto in VARIANTS:
        found = artificial(Recipe(method, window=window, splice=splice, onto=onto))
        matches(found, published("artificial_fixedbase_jevons"))


# Inklaar & Diewert (2016): on a complete panel ln P_t = sum over n of (s_tn + mean s_n)/2 (ln p_tn - mean ln p_n).
def test_ccdi_has_its_level_form_on_the_artificial_data() -> None:
    data = dataset("artificial")
    share, logs = shares(data.prices, data.quantities), np.log(data.prices)
    level = ((share + share.mean(axis=0)) / 2 * (logs - logs.mean(axis=0))).sum(axis=1)
    close(artificial(Recipe("geks-tornqvist")), np.exp(level - level[0]))


# Diewert (2013), World Bank, ch. 5: volumes of three countries; GEKS is the geometric mean of the three Fisher stars.
@pytest.mark.parametrize(("method", "name"), [("fisher", "fisher"), ("geks-fisher", "geks"), ("geary-khamis", "gk")])
def test_volumes_of_three_countries(method: str, name: str) -> None:
    case = published(f"places_{name}")
    prices, quantities = np.array(case.inputs["prices"]), np.array(case.inputs["quantities"])
    spent = (prices * quantities).sum(axis=1)
    matches(spent / spent[0] / make_index(prices, quantities, Recipe(method, form="direct")), case)
    stars = bilateral.pair_levels(prices, quantities, "fisher")
    mean = np.exp(np.log(stars / stars[:, :1]).mean(axis=0))
    close(make_index(prices, quantities, Recipe("geks-fisher")), mean)


def two_periods(method: str, prices: Array, quantities: Array) -> float:
    """The closed form for two periods; products sold in one of them count in the shares of tpd alone."""
    share = shares(prices, quantities)
    both = np.isfinite(prices).all(axis=0)
    (p0, p1), (q0, q1), (s0, s1) = prices[:, both], quantities[:, both], share[:, both]
    weight, harmonic = s0 * s1 / (s0 + s1), q0 * q1 / (q0 + q1)
    relatives = np.log(p1 / p0)
    if method == "tpd":
        return float(np.exp((weight * relatives).sum() / weight.sum()))
    if method == "geary-khamis":
        return float((p1 @ harmonic) / (p0 @ harmonic))
    formula = {"tpd-unweighted": "jevons", "similarity": "fisher"}.get(method, method.removeprefix("geks-"))
    return float(bilateral.series(prices, quantities, formula, form="direct")[1])


# GEKS is its bilateral formula (definition); tpd and tpd-unweighted: de Haan & Krsinich (2014); Geary-Khamis: Chessa
# (2016), Lamboray (2017); similarity linking is Fisher (definition).
@each_method
@pytest.mark.parametrize("gaps", [False, True])
def test_two_periods_have_the_closed_forms_of_the_literature(method: str, *, gaps: bool) -> None:
    data = dataset("artificial")
    for before, now in pairwise(range(5)):
        prices, quantities = data.prices[[before, now]].copy(), data.quantities[[before, now]].copy()
        if gaps:
            prices[[0, 1], [0, 5]] = quantities[[0, 1], [0, 5]] = np.nan
        found = make_index(prices, quantities, Recipe(method))[1]
        assert found == pytest.approx(two_periods(method, prices, quantities), rel=tolerances.EXACT)


# Chessa (2016): with an expanding window the index of a year's last period is that of one window over the whole year,
# so within the year there is no chain drift. Lamboray (2017): the moving window linked on the same period has by then
# grown to the same window. Neither revises what was published.
@each_windowed
def test_link_month_indexes_are_those_of_whole_years(method: str) -> None:
    prices, quantities = churning()
    expanding = make_index(prices, quantities, Recipe(method, window="expanding", splice="link-month"), years=YEARS)
    moving = make_index(prices, quantities, Recipe(method, window=5, splice="link-month"), years=YEARS)
    for start, end in pairwise(LINKS):
        year = slice(start, end + 1)
        whole = make_index(prices[year], quantities[year], Recipe(method))
        assert expanding[end] / expanding[start] == pytest.approx(whole[-1], rel=tolerances.AXIOM)
    close(moving[LINKS], expanding[LINKS], tolerances.AXIOM)


@each_windowed
@pytest.mark.parametrize("window", LINK_MONTH_WINDOWS)
def test_link_month_indexes_are_never_revised(method: str, window: int | Literal["expanding"]) -> None:
    prices, quantities = churning()
    recipe = Recipe(method, window=window, splice="link-month")
    full = make_index(prices, quantities, recipe, years=YEARS)
    for known in (6, 9, 11):
        short = make_index(prices[:known], quantities[:known], recipe, years=YEARS[:known])
        close(short, full[:known], tolerances.AXIOM)


# Movement splice: Ivancic, Diewert & Fox (2011); window: Krsinich (2016); half: de Haan (2015); mean: Diewert & Fox
# (2017). Eurostat, Guide on multilateral methods (2022): at the first splice the published series is the first window
# itself, so that linking onto the published and onto the recalculated series coincide.
@each_windowed
@pytest.mark.parametrize(
    ("splice", "linked_on"), [("movement", [6]), ("window", [1]), ("half", [4]), ("mean", [1, 2, 3, 4, 5, 6])]
)
def test_first_splice_follows_its_definition_onto_either_series(
    method: str, splice: Splice, linked_on: list[int]
) -> None:
    prices, quantities = (values[:8] for values in churning())
    first = make_index(prices[:7], quantities[:7], Recipe(method))
    second = np.append(np.nan, make_index(prices[1:], quantities[1:], Recipe(method)))
    last = np.exp(np.log(first[linked_on] * second[7] / second[linked_on]).mean())
    for onto in ONTO:
        found = make_index(prices, quantities, Recipe(method, window=7, splice=splice, onto=onto))
        close(found, np.append(first, last), tolerances.AXIOM)


Economy = tuple[Array, Array, Array]
"""Prices, quantities and the true level of prices."""


def levels(rng: np.random.Generator) -> Array:
    """A price level for each of the thirteen periods, 1 in the first."""
    drawn = np.exp(rng.normal(0, 0.3, 13))
    return np.asarray(drawn / drawn[0])


def quadratic(rng: np.random.Generator) -> Economy:
    """Aggregator sqrt(q'Aq), prices in proportion to its gradient."""
    a, quantities = rng.uniform(0.1, 1, (5, 5)), np.exp(rng.normal(1, 0.5, (13, 5)))
    a, level = a + a.T, levels(rng)
    return (
        level[:, None] * (quantities @ a) / np.sqrt((quantities @ a * quantities).sum(axis=1))[:, None],
        quantities,
        level,
    )


def square_roots(rng: np.random.Generator) -> Economy:
    """Aggregator sum of a_ij sqrt(q_i q_j), prices in proportion to its gradient."""
    a, quantities = rng.uniform(0.1, 1, (5, 5)), np.exp(rng.normal(1, 0.5, (13, 5)))
    roots, level = np.sqrt(quantities), levels(rng)
    return level[:, None] * (roots @ (a + a.T)) / roots, quantities, level


def constant_elasticity(rng: np.random.Generator) -> Economy:
    """Demand of a unit cost function with elasticity of substitution 2.5."""
    prices, taste, scale = (
        np.exp(rng.normal(0, 0.4, (13, 5))),
        rng.uniform(0.5, 2, 5),
        np.exp(rng.normal(0, 1, (13, 1))),
    )
    cost = (taste * prices**-1.5).sum(axis=1) ** (1 / -1.5)
    return prices, scale * taste * prices**-2.5, cost / cost[0]


def fixed_shares(rng: np.random.Generator) -> Economy:
    """Cobb-Douglas demand."""
    prices, share, scale = (
        np.exp(rng.normal(0, 0.4, (13, 5))),
        rng.dirichlet(np.ones(5)),
        np.exp(rng.normal(0, 1, (13, 1))),
    )
    return prices, scale * share / prices, np.exp((np.log(prices) - np.log(prices[0])) @ share)


def fixed_basket(rng: np.random.Generator) -> Economy:
    """Leontief demand: quantities in the same proportions in every period."""
    prices, basket, scale = np.exp(rng.normal(0, 0.4, (13, 5))), rng.uniform(1, 9, 5), np.exp(rng.normal(0, 1, (13, 1)))
    return prices, scale * basket, prices @ basket / (prices[0] @ basket)


# Fisher is exact for the homogeneous quadratic (Konüs & Byushgens 1926; Diewert 1976), Walsh for the quadratic mean of
# order 1 (Diewert 1976), Sato-Vartia for constant elasticity of substitution (Sato 1976), and all four for a fixed
# basket or fixed shares as listed; Geary-Khamis for Leontief (Diewert 1999).
EXACT_FOR: list[tuple[Callable[[np.random.Generator], Economy], tuple[str, ...], tuple[str, ...]]] = [
    (quadratic, ("fisher",), ("geks-fisher", "similarity")),
    (square_roots, ("walsh",), ("geks-walsh",)),
    (constant_elasticity, ("sato-vartia",), ()),
    (fixed_shares, ("tornqvist", "sato-vartia", "geometric-laspeyres", "geometric-paasche"), ("geks-tornqvist", "tpd")),
    (
        fixed_basket,
        ("fisher", "walsh", "laspeyres", "paasche"),
        ("geks-fisher", "geks-walsh", "geary-khamis", "similarity"),
    ),
]


# Where an index is exact all windows agree on their overlap, so every window and splice onto either series gives it:
# recalculated splices coincide (Eurostat, Guide on multilateral methods, 2022).
@pytest.mark.parametrize("exact", EXACT_FOR, ids=[economy.__name__ for economy, *_ in EXACT_FOR])
def test_exact_indexes_find_the_true_level_in_every_form_window_and_splice(
    exact: tuple[Callable[[np.random.Generator], Economy], tuple[str, ...], tuple[str, ...]],
) -> None:
    economy, formulas, methods = exact
    prices, quantities, level = economy(np.random.default_rng(3))
    recipes = [Recipe(formula, form=form) for formula in formulas for form in ("chained", "direct")]
    for method in methods:
        recipes += [Recipe(method), Recipe(method, window=4)]
        if method in WINDOWED:
            recipes += [Recipe(method, window=window, splice="link-month") for window in LINK_MONTH_WINDOWS]
            recipes += [Recipe(method, window=4, splice=splice, onto=onto) for splice, onto in VARIANTS]
    found = make_indexes(prices, quantities, recipes, years=YEARS)
    for recipe, index in zip(recipes, found[:, 0], strict=True):
        np.testing.assert_allclose(index, level, rtol=tolerances.AXIOM, err_msg=str(recipe))


# CPI Manual, ch. 1 and 15: with the weights of the price reference period Lowe and Young are Laspeyres, geometric Young
# is geometric Laspeyres; here against its printed fixed-base figures of ch. 19.
@pytest.mark.parametrize(
    ("method", "formula"),
    [("lowe", "laspeyres"), ("young", "laspeyres"), ("geometric-young", "geo_laspeyres")],
)
def test_base_weights_of_the_first_period_give_the_laspeyres_kind(method: str, formula: str) -> None:
    found = artificial(Recipe(method, form="direct", weight_periods=(0,)))
    matches(found, published(f"artificial_fixedbase_{formula}"))


# The same: with the weights of the current period Lowe is Paasche; Young is Palgrave and geometric Young is geometric
# Paasche by their definitions.
@pytest.mark.parametrize(
    ("method", "formula"),
    [("lowe", "paasche"), ("young", "palgrave"), ("geometric-young", "geo_paasche")],
)
def test_weights_of_the_current_period_give_the_paasche_kind(method: str, formula: str) -> None:
    found = [artificial(Recipe(method, form="direct", weight_periods=(t,)))[t] for t in range(5)]
    matches(np.array(found), published(f"artificial_fixedbase_{formula}"))


# CPI Manual, ch. 15 (definition): Marshall-Edgeworth has the basket q0 + q1.
def test_lowe_with_the_quantities_of_both_periods_is_marshall_edgeworth() -> None:
    found = [artificial(Recipe("lowe", form="direct", weight_periods=(0, t)))[t] for t in range(1, 5)]
    close(np.array(found), artificial(Recipe("marshall-edgeworth", form="direct"))[1:])


# CPI Manual, ch. 15: Lowe is transitive (and geometric Young, its weights being fixed); Young is not.
@pytest.mark.parametrize("weight_periods", [(0,), (2,), (1, 3)])
def test_lowe_and_geometric_young_are_transitive_and_young_is_not(weight_periods: tuple[int, ...]) -> None:
    def both(method: str) -> tuple[Array, Array]:
        chained, direct = (artificial(Recipe(method, form, weight_periods=weight_periods)) for form in FORMS)
        return chained, direct

    for method in ("lowe", "geometric-young"):
        close(*both(method))
    chained, direct = both("young")
    assert np.abs(chained / direct - 1).max() > tolerances.FAILS


# CPI Manual, ch. 16: the time antithesis of Palgrave is the harmonic Laspeyres index, 1 / sum of s0 (p0/p1); so is that
# of Young with the weights of the first period. The printed harmonic figures thus test both, run backwards.
@pytest.mark.parametrize("linking", ["fixedbase", "chained"])
@pytest.mark.parametrize(("method", "weight_periods"), [("palgrave", ()), ("young", (1,))])
def test_palgrave_and_young_backwards_are_harmonic_laspeyres(
    method: str, weight_periods: tuple[int, ...], linking: str
) -> None:
    data = dataset("artificial")

    def harmonic(base: int, now: int) -> float:
        rows = [now, base]
        return 1 / link(data.prices[rows], data.quantities[rows], method, weight_periods)

    if linking == "fixedbase":
        found = np.array([1.0, *(harmonic(0, t) for t in range(1, 5))])
    else:
        found = np.cumprod([1.0, *(harmonic(t - 1, t) for t in range(1, 5))])
    matches(found, published(f"artificial_{linking}_harm_laspeyres"))


# von Bortkiewicz (1923), CPI Manual, appendix 15.1: P_P/P_L - 1 is the base-weighted covariance of price and quantity
# relatives over P_L Q_L. Appendix 15.2: with quantities of another period in place of the current, Lowe/Laspeyres - 1.
@pytest.mark.parametrize("weight_period", [1, 2, 3, 4])
def test_gap_between_lowe_and_laspeyres_is_the_covariance_of_bortkiewicz(weight_period: int) -> None:
    data = dataset("artificial")
    share = shares(data.prices, data.quantities)[0]
    for now in range(1, 5):
        relatives = data.prices[now] / data.prices[0]
        volumes = data.quantities[weight_period] / data.quantities[0]
        p, q = share @ relatives, share @ volumes
        gap = share @ ((relatives - p) * (volumes - q)) / (p * q)
        lowe = artificial(Recipe("lowe", form="direct", weight_periods=(weight_period,)))[now]
        assert lowe / artificial(Recipe("laspeyres", form="direct"))[now] - 1 == pytest.approx(
            gap, rel=tolerances.AXIOM
        )
        if weight_period == now:
            assert lowe == pytest.approx(artificial(Recipe("paasche", form="direct"))[now], rel=tolerances.EXACT)


# CPI Manual, ch. 15, 16, 20 (definitions): geometric means of two formulas, in each link and so in the chain.
@pytest.mark.parametrize("form", FORMS)
@pytest.mark.parametrize(
    ("mean", "one", "other"),
    [
        ("tornqvist", "geometric-laspeyres", "geometric-paasche"),
        ("fisher", "laspeyres", "paasche"),
        ("cswd", "carli", "harmonic"),
    ],
)
def test_formulas_that_are_geometric_means_of_two(mean: str, one: str, other: str, form: Form) -> None:
    two = artificial(Recipe(one, form)) * artificial(Recipe(other, form))
    close(artificial(Recipe(mean, form)), np.sqrt(two))


# CPI Manual, ch. 19 and 20 (Schlömilch's inequality): arithmetic above geometric above harmonic mean of relatives with
# the same weights; Paasche is the harmonic mean with those of the current period.
@pytest.mark.parametrize(
    "descending",
    [
        ("palgrave", "geometric-paasche", "paasche"),
        ("laspeyres", "geometric-laspeyres"),
        ("carli", "jevons", "harmonic"),
    ],
)
def test_means_of_price_relatives_are_ordered(descending: tuple[str, ...]) -> None:
    for above, below in pairwise(descending):
        ratio = artificial(Recipe(above, "direct")) / artificial(Recipe(below, "direct"))
        assert (ratio[1:] > 1 + tolerances.FAILS).all()


# Fisher (1922); Sato (1976), Vartia (1976): price index times quantity index is the ratio of expenditures.
@pytest.mark.parametrize("method", ["fisher", "sato-vartia"])
def test_fisher_and_sato_vartia_pass_factor_reversal(method: str) -> None:
    data = dataset("artificial")
    recipe = Recipe(method, form="direct")
    spent = (data.prices * data.quantities).sum(axis=1)
    volume = make_index(data.quantities, data.prices, recipe)
    close(artificial(recipe) * volume, spent / spent[0])


# Diewert (1978): superlative indexes agree to the second order around equal prices and quantities, and so do those he
# calls pseudo-superlative, Sato-Vartia and Marshall-Edgeworth. Laspeyres does not.
@pytest.mark.parametrize("method", ["tornqvist", "walsh", "sato-vartia", "marshall-edgeworth"])
def test_superlative_indexes_agree_to_the_second_order(method: str) -> None:
    rng = np.random.default_rng(5)
    start, move = np.exp(rng.normal(0, 0.5, (2, 6))), rng.normal(0, 1, (2, 6))

    def apart(formula: str, size: float) -> float:
        prices, quantities = (np.vstack([a, a * np.exp(size * m)]) for a, m in zip(start, move, strict=True))
        return abs(float(np.log(link(prices, quantities, formula) / link(prices, quantities, "fisher"))))

    assert apart(method, 0.04) / apart(method, 0.02) > APPROXIMATION
    assert apart("laspeyres", 0.04) / apart("laspeyres", 0.02) < APPROXIMATION


# Side by side, each segment is a panel of its own; the chain drift example has no fifth period.
def test_segments_give_the_published_figures_each() -> None:
    left, right = dataset("artificial"), dataset("chaindrift")
    none = np.full((1, 2), np.nan)
    prices = np.hstack([left.prices, np.vstack([right.prices, none])])
    quantities = np.hstack([left.quantities, np.vstack([right.quantities, none])])
    recipes = [Recipe("fisher"), Recipe("geks-fisher", window=2), Recipe("lowe", "direct", weight_periods=(0,))]
    found = make_indexes(prices, quantities, recipes, segments=np.array([0, 6]))
    assert np.isnan(found[:, 1, 4]).all()
    for index in found[:2]:
        matches(index[0], published("artificial_chained_fisher"))
        matches(index[1, :4], published("chaindrift_fisher_ch"))
    matches(found[2, 0], published("artificial_fixedbase_laspeyres"))
    matches(found[2, 1, :4], published("chaindrift_laspeyres_fb"))
