"""What each product contributes to a movement, against loops over the definitions and the published formulas.

Ratios of sums are taken apart with the logarithmic mean (Vartia 1976), GEKS, time product dummy and
Geary-Khamis as in Webster and Tarnow-Mordi (2019), similarity linking (Diewert 2021) link by link.
"""

import itertools
import math
from collections.abc import Callable, Iterator, Sequence

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.kernels import twins
from tests.kernels.panels import Array, Panel, random_panel
from tests.kernels.variants import FORMS, ONTO, SPLICES
from tests.reference.published import dataset
from tillwright.errors import UnconnectedPeriods
from tillwright.kernels.methods import make_index
from tillwright.kernels.product_contributions import decompose
from tillwright.kernels.recipes import Recipe

ADDS_UP = 1e-9
"""What the sum over products may miss of the movement: fixed points and least squares are solved to about 1e-12."""
NOTHING = 1e-12
"""A contribution that is 0 on paper: rounding of sums of a few terms below 10."""
SEEN = 1e-6
"""A contribution that is not 0 on paper is far from rounding in these panels."""

ONE_FORMULA = tuple(twins.FORMULAS)
BASE_WEIGHTED = ("lowe", "young", "geometric-young")
GEKS = ("geks-jevons", "geks-fisher", "geks-tornqvist", "geks-walsh")
SPLICED = (*GEKS, "tpd", "tpd-unweighted", "geary-khamis")
MULTILATERAL = (*SPLICED, "similarity")
WITH_UNITS = ("dutot",)
"""Formulas whose index depends on the units in which a product is priced."""

BILATERAL_RECIPES = [
    *(Recipe(name, form=form) for name in ONE_FORMULA for form in FORMS),
    *(Recipe(name, form=form, weight_periods=(0, 1)) for name in BASE_WEIGHTED for form in FORMS),
]
ONE_WINDOW = [Recipe(name) for name in MULTILATERAL]
ROLLING = [Recipe(name, window=3, splice=splice, onto=onto) for name in SPLICED for splice in SPLICES for onto in ONTO]
LINKED = [
    *(Recipe(name, window=4, splice="link-month") for name in SPLICED),
    *(Recipe(name, window="expanding", splice="link-month") for name in SPLICED),
]
RECIPES = [*BILATERAL_RECIPES, *ONE_WINDOW, Recipe("similarity", window=3), *ROLLING, *LINKED]
PANELS = [random_panel(seed) for seed in range(14)]


def called(recipe: Recipe) -> str:
    return f"{recipe.method}-{recipe.form}-{recipe.window}-{recipe.splice}-{recipe.onto}"


def link_years(periods: int) -> NDArray[np.int64]:
    """Years of three periods: the link periods are 2, 5, 8."""
    return np.arange(periods) // 3


def link_period(years: NDArray[np.int64], t: int) -> int:
    earlier = [s for s in range(len(years)) if years[s] < years[t]]
    return earlier[-1] if earlier else 0


def some_moves(periods: int, seed: int) -> list[tuple[int, int]]:
    """From the first to the last period, over the last step, and three moves at random."""
    rng = np.random.default_rng(seed)
    drawn = [tuple(sorted(rng.choice(periods, size=2, replace=False).tolist())) for _ in range(3)]
    return [(0, periods - 1), (periods - 2, periods - 1), *((a, b) for a, b in drawn)]


# Twins: contributions of every product to ln P(s, t), 0 where a product takes no part.


def as_logs(m: twins.Matches, weights: Sequence[float]) -> list[float]:
    return [w * math.log(x.relative) for x, w in zip(m, weights, strict=True)]


def as_ratio(above: Sequence[float], below: Sequence[float]) -> list[float]:
    mean = twins.logarithmic_mean(math.fsum(above), math.fsum(below))
    return [(a - b) / mean for a, b in zip(above, below, strict=True)]


def half_each(one: Sequence[float], other: Sequence[float]) -> list[float]:
    return [(a + b) / 2 for a, b in zip(one, other, strict=True)]


def at_quantities(m: twins.Matches, weights: Sequence[float]) -> list[float]:
    return as_ratio(
        [w * x.p1 for x, w in zip(m, weights, strict=True)], [w * x.p0 for x, w in zip(m, weights, strict=True)]
    )


def at_shares(m: twins.Matches, weights: Sequence[float]) -> list[float]:
    return as_ratio([w * x.relative for x, w in zip(m, weights, strict=True)], weights)


def sato_vartia_weights(m: twins.Matches) -> list[float]:
    """Logarithmic means of the shares, 0 where a share is 0, as parts of their sum."""
    shares = zip(twins.base_shares(m), twins.current_shares(m), strict=True)
    means = [twins.logarithmic_mean(a, b) if a > 0 and b > 0 else 0.0 for a, b in shares]
    return [w / math.fsum(means) for w in means]


def parts_of(formula: str, m: twins.Matches, weights: Sequence[float]) -> list[float]:
    """Contributions of the matched products; `weights` are those of the weight periods."""
    before, now = twins.base_shares(m), twins.current_shares(m)
    q0, q1, ones = [x.q0 for x in m], [x.q1 for x in m], [1.0] * len(m)
    total = math.fsum(weights)
    parts: dict[str, Callable[[], list[float]]] = {
        "jevons": lambda: as_logs(m, [1 / len(m)] * len(m)),
        "dutot": lambda: at_quantities(m, ones),
        "carli": lambda: at_shares(m, ones),
        "harmonic": lambda: as_ratio(ones, [1 / x.relative for x in m]),
        "cswd": lambda: half_each(parts["carli"](), parts["harmonic"]()),
        "laspeyres": lambda: at_quantities(m, q0),
        "paasche": lambda: at_quantities(m, q1),
        "fisher": lambda: half_each(parts["laspeyres"](), parts["paasche"]()),
        "tornqvist": lambda: as_logs(m, half_each(before, now)),
        "walsh": lambda: at_quantities(m, [math.sqrt(x.q0 * x.q1) for x in m]),
        "marshall-edgeworth": lambda: at_quantities(m, [x.q0 + x.q1 for x in m]),
        "geometric-laspeyres": lambda: as_logs(m, before),
        "geometric-paasche": lambda: as_logs(m, now),
        "palgrave": lambda: at_shares(m, now),
        "sato-vartia": lambda: as_logs(m, sato_vartia_weights(m)),
        "lowe": lambda: at_quantities(m, weights),
        "young": lambda: at_shares(m, weights),
        "geometric-young": lambda: as_logs(m, [w / total for w in weights]),
    }
    return parts[formula]()


def sold(prices: Array, t: int) -> list[int]:
    return [i for i in range(prices.shape[1]) if not math.isnan(prices[t, i])]


def base_weight(prices: Array, quantities: Array, recipe: Recipe, i: int) -> float:
    """Quantity (Lowe) or turnover (Young) of a product, summed over the weight periods."""
    there = [b for b in recipe.weight_periods if not math.isnan(prices[b, i])]
    value = 1.0 if recipe.method == "lowe" else None
    return math.fsum((value or prices[b, i]) * quantities[b, i] for b in there)


def between(prices: Array, quantities: Array, recipe: Recipe, formula: str, move: tuple[int, int]) -> Array:
    """Contributions to one bilateral link."""
    s, t = move
    weights = {i: base_weight(prices, quantities, recipe, i) for i in range(prices.shape[1])}
    weighted = recipe.method in BASE_WEIGHTED
    matched = [i for i in sold(prices, s) if i in sold(prices, t) and (weights[i] > 0 or not weighted)]
    parts = np.zeros(prices.shape[1])
    if matched:
        m = twins.matches(prices[:, matched], quantities[:, matched], s, t)
        parts[matched] = parts_of(formula, m, [weights[i] for i in matched])
    return parts


def bilateral_parts(prices: Array, quantities: Array, recipe: Recipe, start: int, end: int) -> Array:
    priced = twins.priced_periods(prices)

    def link(s: int, t: int) -> Array:
        return between(prices, quantities, recipe, recipe.method, (s, t))

    if recipe.form == "direct":
        return link(priced[0], end) - link(priced[0], start)
    steps = itertools.pairwise([t for t in priced if start <= t <= end])
    chain: Array = np.sum([link(s, t) for s, t in steps], axis=0)
    return chain


def geks_parts(prices: Array, quantities: Array, recipe: Recipe, start: int, end: int) -> Array:
    formula = recipe.method.removeprefix("geks-")
    periods = twins.priced_periods(prices)
    paths = [
        between(prices, quantities, recipe, formula, (s, end))
        - between(prices, quantities, recipe, formula, (s, start))
        for s in periods
    ]
    mean: Array = np.sum(paths, axis=0) / len(periods)
    return mean


def dummy_parts(prices: Array, quantities: Array, recipe: Recipe, start: int, end: int) -> Array:
    """s·ln(p/v) at the end less that at the start, v from a regression with no dummy for the start."""
    rows, values, weight_of = [], [], {}
    for t in twins.priced_periods(prices):
        turnover = math.fsum(prices[t, i] * quantities[t, i] for i in sold(prices, t))
        for i in sold(prices, t):
            share = prices[t, i] * quantities[t, i] / turnover
            weight_of[t, i] = share if recipe.method == "tpd" else 1 / len(sold(prices, t))
            root = math.sqrt(share) if recipe.method == "tpd" else 1.0
            row = np.zeros(len(prices) + prices.shape[1])
            row[len(prices) + i] = root
            row[t] = 0.0 if t == start else root
            rows.append(row)
            values.append(root * math.log(prices[t, i]))
    effects = np.linalg.lstsq(np.array(rows), np.array(values), rcond=None)[0][len(prices) :]
    parts = np.zeros(prices.shape[1])
    for sign, t in ((1, end), (-1, start)):
        for i in sold(prices, t):
            parts[i] += sign * weight_of[t, i] * (math.log(prices[t, i]) - effects[i])
    return parts


def khamis_prices(prices: Array, quantities: Array, start: int) -> list[float]:
    """Mean prices v by iteration, the index of `start` being 1."""
    periods, products = twins.priced_periods(prices), range(prices.shape[1])
    sales = {i: [t for t in periods if i in sold(prices, t)] for i in products}
    level = dict.fromkeys(periods, 1.0)
    for _ in range(100_000):
        v = [
            math.fsum(prices[t, i] * quantities[t, i] / level[t] for t in sales[i])
            / math.fsum([*(quantities[t, i] for t in sales[i]), 0.0 if sales[i] else 1.0])
            for i in products
        ]
        new = {
            t: math.fsum(prices[t, i] * quantities[t, i] for i in sold(prices, t))
            / math.fsum(v[i] * quantities[t, i] for i in sold(prices, t))
            for t in periods
        }
        moved = max(abs(new[t] / new[start] / level[t] - 1) for t in periods)
        level = {t: new[t] / new[start] for t in periods}
        if moved < 1e-14:
            return v
    return v


def khamis_parts(prices: Array, quantities: Array, _recipe: Recipe, start: int, end: int) -> Array:
    v = khamis_prices(prices, quantities, start)
    parts = np.zeros(prices.shape[1])
    for sign, t in ((1, end), (-1, start)):
        there = sold(prices, t)
        shares = as_ratio([prices[t, i] * quantities[t, i] for i in there], [v[i] * quantities[t, i] for i in there])
        parts[there] += [sign * share for share in shares]
    return parts


def dissimilarity(prices: Array, quantities: Array, r: int, t: int) -> float:
    """Predicted-share dissimilarity, prices and quantities 0 where a product is not sold."""
    p, q = np.nan_to_num(prices), np.nan_to_num(quantities)
    total = 0.0
    for a, b in ((r, t), (t, r)):
        actual, predicted = math.fsum(p[b] * q[b]), math.fsum(p[a] * q[b])
        total += math.fsum(
            (p[b, i] * q[b, i] / actual - p[a, i] * q[b, i] / predicted) ** 2 for i in range(prices.shape[1])
        )
    return total


def similarity_parts(prices: Array, quantities: Array, recipe: Recipe, start: int, end: int) -> Array:
    """Links of the way from the first period to the end, less those of the way to the start."""
    priced, span = twins.priced_periods(prices), recipe.window or len(prices)
    to: dict[int, Array] = {priced[0]: np.zeros(prices.shape[1])}
    assert isinstance(span, int)
    for t in priced[1:]:
        known = [r for r in priced if t - span < r < t and set(sold(prices, r)) & set(sold(prices, t))]
        distance = {r: dissimilarity(prices, quantities, r, t) for r in known}
        near = max(r for r in known if distance[r] <= min(distance.values()) + 1e-12)
        to[t] = to[near] + between(prices, quantities, recipe, "fisher", (near, t))
    return to[end] - to[start]


def window_of(recipe: Recipe, years: NDArray[np.int64], end: int) -> tuple[int, int]:
    """First period of the window in which a movement to `end` is taken apart, and the period after its last."""
    if recipe.window == "expanding":
        return link_period(years, end), end + 1
    width = len(years) if recipe.window is None else min(recipe.window, len(years))
    first = max(0, end - width + 1)
    return first, first + width


def spliced_parts(prices: Array, quantities: Array, recipe: Recipe, start: int, end: int) -> Array:
    """In the window that ends in `end`; what lies before that window in the same manner."""
    first, stop = window_of(recipe, link_years(len(prices)), end)
    begin = max(first, start)
    inside = {"tpd": dummy_parts, "tpd-unweighted": dummy_parts, "geary-khamis": khamis_parts}
    parts = inside.get(recipe.method, geks_parts)(
        prices[first:stop], quantities[first:stop], recipe, begin - first, end - first
    )
    return parts if begin == start else parts + spliced_parts(prices, quantities, recipe, start, begin)


def parts_by_loops(prices: Array, quantities: Array, recipe: Recipe, start: int, end: int) -> Array:
    if recipe.method == "similarity":
        return similarity_parts(prices, quantities, recipe, start, end)
    parts = spliced_parts if recipe.method in SPLICED else bilateral_parts
    return parts(prices, quantities, recipe, start, end)


def every_pair_matches(prices: Array) -> bool:
    pairs = itertools.combinations(range(len(prices)), 2)
    return all(set(sold(prices, s)) & set(sold(prices, t)) for s, t in pairs)


WHOLE = [panel for panel in PANELS if every_pair_matches(panel.prices)]
ALWAYS_SOLD = [panel for panel in PANELS if len(twins.priced_periods(panel.prices)) == len(panel.prices)]


def moves_with_levels(panels: Sequence[Panel], recipe: Recipe) -> Iterator[tuple[Panel, Array, int, int]]:
    """Panels with their index, and moves between periods that both have a level."""
    for seed, panel in enumerate(panels):
        try:
            index = make_index(panel.prices, panel.quantities, recipe, years=link_years(len(panel.prices)))
        except UnconnectedPeriods:
            continue
        for start, end in some_moves(len(index), seed):
            if np.isfinite(index[[start, end]]).all():
                yield panel, index, start, end


@pytest.mark.parametrize("recipe", RECIPES, ids=called)
def test_products_and_splice_add_up_to_the_movement_of_the_index(recipe: Recipe) -> None:
    moves = list(moves_with_levels(PANELS, recipe))
    assert len(moves) >= 10
    for panel, index, start, end in moves:
        years = link_years(len(panel.prices))
        found = decompose(panel.prices, panel.quantities, recipe, start, end, years=years)
        assert found.products.shape == (panel.prices.shape[1],)
        assert found.change == pytest.approx(math.log(index[end]) - math.log(index[start]), abs=ADDS_UP)
        assert found.products.sum() + found.splice == pytest.approx(found.change, abs=ADDS_UP)


@pytest.mark.parametrize("recipe", RECIPES, ids=called)
def test_parts_are_those_of_the_definition(recipe: Recipe) -> None:
    moves = list(moves_with_levels(WHOLE if recipe.method in GEKS else ALWAYS_SOLD, recipe))
    assert len(moves) >= 10
    for panel, _, start, end in moves:
        years = link_years(len(panel.prices))
        found = decompose(panel.prices, panel.quantities, recipe, start, end, years=years)
        expected = parts_by_loops(panel.prices, panel.quantities, recipe, start, end)
        np.testing.assert_allclose(found.products, expected, rtol=0, atol=ADDS_UP, err_msg=panel.name)


@pytest.mark.parametrize("recipe", RECIPES, ids=called)
def test_parts_add_up_where_a_quantity_is_0_with_a_price(recipe: Recipe) -> None:
    panel = random_panel(7)
    quantities, last = panel.quantities.copy(), len(panel.prices) - 1
    quantities[[0, 3, last, 5], [0, 1, 2, 0]] = 0.0
    years = link_years(len(panel.prices))
    index = make_index(panel.prices, quantities, recipe, years=years)
    for start, end in ((0, 3), (1, last)):
        found = decompose(panel.prices, quantities, recipe, start, end, years=years)
        assert found.change == pytest.approx(math.log(index[end] / index[start]), abs=ADDS_UP)
        assert found.products.sum() + found.splice == pytest.approx(found.change, abs=ADDS_UP)


def test_geks_tornqvist_is_the_published_formula_on_a_complete_panel() -> None:
    # Webster & Tarnow-Mordi (2019): ½ (s_ti + mean s_i) (ln p_ti − mean ln p_i), end less start.
    data = dataset("artificial")
    logs, value = np.log(data.prices), data.prices * data.quantities
    shares = value / value.sum(axis=1, keepdims=True)
    level = 0.5 * (shares + shares.mean(axis=0)) * (logs - logs.mean(axis=0))
    for start, end in itertools.combinations(range(len(logs)), 2):
        found = decompose(data.prices, data.quantities, Recipe("geks-tornqvist"), start, end)
        np.testing.assert_allclose(found.products, level[end] - level[start], rtol=0, atol=NOTHING)


def test_time_product_dummy_over_two_periods_has_a_closed_form() -> None:
    # de Haan & Krsinich (2014) for the index; v as the share-weighted mean of deflated prices
    # (Webster & Tarnow-Mordi 2019).
    data = dataset("artificial")
    for before, now in itertools.pairwise(range(5)):
        prices, quantities = data.prices[[before, now]], data.quantities[[before, now]]
        value, logs = prices * quantities, np.log(prices)
        s0, s1 = value / value.sum(axis=1, keepdims=True)
        weight = s0 * s1 / (s0 + s1)
        movement = (weight * (logs[1] - logs[0])).sum() / weight.sum()
        effect = (s0 * logs[0] + s1 * (logs[1] - movement)) / (s0 + s1)
        found = decompose(prices, quantities, Recipe("tpd"), 0, 1)
        expected = s1 * (logs[1] - effect) - s0 * (logs[0] - effect)
        np.testing.assert_allclose(found.products, expected, rtol=0, atol=ADDS_UP)
        assert found.change == pytest.approx(movement, abs=ADDS_UP)


def test_geary_khamis_over_two_periods_has_a_closed_form() -> None:
    # P = Σ p1 h / Σ p0 h, h = q0 q1 / (q0 + q1); v = (p0 q0 + p1 q1 / P) / (q0 + q1) (CPI Manual 2004, chapter 16).
    data = dataset("artificial")
    for before, now in itertools.pairwise(range(5)):
        (p0, p1), (q0, q1) = data.prices[[before, now]], data.quantities[[before, now]]
        harmonic = q0 * q1 / (q0 + q1)
        level = (p1 @ harmonic) / (p0 @ harmonic)
        v = (p0 * q0 + p1 * q1 / level) / (q0 + q1)
        found = decompose(data.prices[[before, now]], data.quantities[[before, now]], Recipe("geary-khamis"), 0, 1)
        expected = (p1 - v) * q1 * math.log(level) / (p1 @ q1 - v @ q1) - (p0 - v) * q0 / (p0 @ q0)
        np.testing.assert_allclose(found.products, expected, rtol=0, atol=ADDS_UP)


def entering() -> tuple[Array, Array]:
    """Five periods; product 0 enters in the third, product 1 is sold in the second alone, product 2 in 1 and 3."""
    panel = random_panel(7)
    prices, quantities = panel.prices[:5].copy(), panel.quantities[:5].copy()
    prices = np.hstack([prices, prices[:, :3] * np.array([[1.3], [0.8], [1.6], [0.7], [2.1]])])
    quantities = np.hstack([quantities, quantities[:, :3]])
    for product, periods in ((0, (0, 1)), (1, (0, 2, 3, 4)), (2, (0, 2, 4))):
        prices[periods, product] = quantities[periods, product] = np.nan
    # The last period resembles the one before, so that similarity linking links it there.
    prices[4, :2], quantities[4, :2] = prices[3, :2] * 1.02, quantities[3, :2]
    prices[4, 3:], quantities[4, 3:] = prices[3, 3:] * 1.01, quantities[3, 3:]
    return prices, quantities


@pytest.mark.parametrize("recipe", ONE_WINDOW, ids=called)
def test_a_product_that_enters_contributes(recipe: Recipe) -> None:
    assert abs(decompose(*entering(), recipe, 0, 4).products[0]) > SEEN


@pytest.mark.parametrize("recipe", [*BILATERAL_RECIPES, *ONE_WINDOW], ids=called)
def test_a_product_sold_in_neither_period_and_never_matched_contributes_nothing(recipe: Recipe) -> None:
    assert abs(decompose(*entering(), recipe, 0, 4).products[1]) <= NOTHING


@pytest.mark.parametrize(
    "recipe",
    [*(one for one in BILATERAL_RECIPES if one.form == "direct"), *ONE_WINDOW[:-1]],
    ids=called,
)
def test_a_product_sold_in_neither_period_contributes_nothing_without_chaining(recipe: Recipe) -> None:
    assert abs(decompose(*entering(), recipe, 0, 4).products[2]) <= NOTHING


@pytest.mark.parametrize(
    "recipe",
    [*BILATERAL_RECIPES, *ONE_WINDOW, Recipe("similarity", window=3), *ROLLING],
    ids=called,
)
def test_the_splice_is_nothing_within_one_window(recipe: Recipe) -> None:
    panel = random_panel(7)
    last = len(panel.prices) - 1 if recipe.window is None or recipe.method == "similarity" else 2
    for start in range(last):
        assert abs(decompose(panel.prices, panel.quantities, recipe, start, last).splice) <= ADDS_UP


@pytest.mark.parametrize("name", SPLICED)
@pytest.mark.parametrize(
    ("recipe", "back"),
    [
        (Recipe("", window=5, splice="movement", onto="published"), 1),
        (Recipe("", window=5, splice="movement", onto="recalculated"), 1),
        (Recipe("", window=5, splice="window", onto="published"), 4),
        (Recipe("", window=5, splice="half", onto="published"), 2),
        (Recipe("", window=4, splice="link-month"), 2),
        (Recipe("", window="expanding", splice="link-month"), 2),
    ],
    ids=lambda value: called(value) if isinstance(value, Recipe) else str(value),
)
def test_the_splice_is_nothing_from_the_period_linked_on(name: str, recipe: Recipe, back: int) -> None:
    panel, end = random_panel(7), 7
    prices = np.vstack([panel.prices, panel.prices[:3] * 1.1])[: end + 1]
    quantities = np.vstack([panel.quantities, panel.quantities[:3]])[: end + 1]
    named = Recipe(name, window=recipe.window, splice=recipe.splice, onto=recipe.onto)
    found = decompose(prices, quantities, named, end - back, end, years=link_years(len(prices)))
    assert abs(found.splice) <= ADDS_UP
    assert abs(found.change) > SEEN


@pytest.mark.parametrize("recipe", BILATERAL_RECIPES, ids=called)
def test_a_price_that_rests_contributes_nothing_and_others_by_their_sign(recipe: Recipe) -> None:
    for seed in (0, 7):
        panel = random_panel(seed)
        prices = panel.prices.copy()
        prices[1, 0] = prices[0, 0]
        found = decompose(prices, panel.quantities, recipe, 0, 1).products
        assert abs(found[0]) <= NOTHING
        np.testing.assert_array_equal(np.sign(found[1:]), np.sign(prices[1, 1:] - prices[0, 1:]))


@pytest.mark.parametrize("recipe", [recipe for recipe in RECIPES if recipe.method not in WITH_UNITS], ids=called)
def test_parts_do_not_depend_on_the_unit_of_a_product(recipe: Recipe) -> None:
    panel = random_panel(7)
    years, last = link_years(len(panel.prices)), len(panel.prices) - 1
    units = 10.0 ** np.linspace(-3, 3, panel.prices.shape[1])
    found = decompose(panel.prices, panel.quantities, recipe, 1, last, years=years)
    changed = decompose(panel.prices * units, panel.quantities / units, recipe, 1, last, years=years)
    np.testing.assert_allclose(changed.products, found.products, rtol=0, atol=ADDS_UP)
    assert changed.splice == pytest.approx(found.splice, abs=ADDS_UP)
