"""Price levels of places: two places by the bilateral formula, many by least squares, any place as base."""

import itertools
from typing import Any

import numpy as np
import polars as pl
import pytest
import statsmodels.api as sm
from numpy.typing import NDArray

import tillwright as tw
from tests.kernels import twins
from tillwright.errors import BadPanel, CallError, DataError, MissingColumns, UnconnectedPlaces

BY_HAND = 1e-12
"""A few products and two places."""
REGRESSION = 1e-9
"""What a regression on some dozen dummies may lose to rounding."""
REBASED = 1e-10
"""Two runs that differ in a factor."""
PLACES = ("coast", "delta", "hills", "islands", "plains")
PRODUCTS = tuple(f"p{number}" for number in range(8))
EVERY_PAIR = ("geks-jevons", "geks-fisher", "geks-tornqvist", "geks-walsh")
TRANSITIVE = (*EVERY_PAIR, "tpd", "tpd-unweighted", "geary-khamis")
Array = NDArray[np.float64]


def arrays(places: int = len(PLACES), *, gaps: bool = True) -> tuple[Array, Array]:
    """Prices and quantities (places, products); with gaps no product is sold everywhere, but every pair shares some."""
    rng = np.random.default_rng(12)
    size = (places, len(PRODUCTS))
    noise = rng.normal(0, 0.2, size)
    prices = np.exp(rng.normal(1, 0.6, len(PRODUCTS)) + noise + rng.normal(0, 0.2, places)[:, None])
    quantities = np.exp(rng.normal(3, 0.5, len(PRODUCTS)) - noise)
    if gaps:
        for product in range(len(PRODUCTS)):
            prices[product % places, product] = quantities[product % places, product] = np.nan
    return prices, quantities


def frame_of(prices: Array, quantities: Array) -> pl.DataFrame:
    rows = [
        {"region": PLACES[r], "product": PRODUCTS[i], "price": prices[r, i], "quantity": quantities[r, i]}
        for r, i in zip(*np.nonzero(np.isfinite(prices)), strict=True)
    ]
    return pl.DataFrame(rows).sample(fraction=1.0, shuffle=True, seed=3)


def regions() -> pl.DataFrame:
    return frame_of(*arrays())


def two_places() -> pl.DataFrame:
    return regions().filter(pl.col("region").is_in(PLACES[:2]))


def place_levels(frame: pl.DataFrame, method: Any, **settings: Any) -> pl.DataFrame:
    """The levels of regions, unless another column is named."""
    return tw.place_levels(frame, method, **{"place": "region", **settings})


def level(found: pl.DataFrame) -> dict[str, float]:
    return dict(found.sort("region").select("region", "level").iter_rows())


def level_error(replicates: Array) -> Array:
    """Delete-a-group jackknife, as in test_jackknife."""
    count = len(replicates)
    spread: Array = np.sqrt((count - 1) / count * ((replicates - replicates.mean(axis=0)) ** 2).sum(axis=0))
    return spread


def test_columns_are_place_level_products_and_shared() -> None:
    found = place_levels(regions(), "geks-fisher", base="coast")
    assert found.columns == ["region", "level", "products", "shared"]
    assert sorted(found["region"]) == list(PLACES)
    assert level(found)["coast"] == 100.0


def test_the_place_column_is_region_unless_another_is_named() -> None:
    call: Any = tw.place_levels
    assert call(regions(), "geks-fisher").equals(place_levels(regions(), "geks-fisher"))


def test_a_list_of_methods_adds_its_column() -> None:
    found = place_levels(regions(), list(TRANSITIVE))
    assert found.columns == ["method", "region", "level", "products", "shared"]
    assert found.height == len(TRANSITIVE) * len(PLACES)
    for method in TRANSITIVE:
        alone = place_levels(regions(), method)
        of_many = found.filter(pl.col("method") == method).drop("method")
        assert of_many.drop("level").equals(alone.drop("level"))
        np.testing.assert_allclose(of_many["level"].to_numpy(), alone["level"].to_numpy(), rtol=REBASED)


def test_products_and_those_shared_with_another_place_are_counted() -> None:
    own = pl.DataFrame({"region": ["coast"], "product": ["lobster"], "price": [9.0], "quantity": [2.0]})
    found = place_levels(pl.concat([regions(), own]), "geks-fisher").sort("region")
    prices, _ = arrays()
    sold = np.isfinite(prices).sum(axis=1)
    assert found["products"].to_list() == [sold[0] + 1, *sold[1:]]
    assert found["shared"].to_list() == sold.tolist()


@pytest.mark.parametrize("method", EVERY_PAIR)
def test_two_places_are_compared_by_the_bilateral_formula(method: str) -> None:
    prices, quantities = arrays()
    expected = twins.FORMULAS[method.removeprefix("geks-")](twins.matches(prices, quantities, 0, 1))
    found = level(place_levels(two_places(), method, base="coast"))
    assert found["delta"] == pytest.approx(100 * expected, rel=BY_HAND)


def test_two_places_have_the_closed_forms_of_the_literature() -> None:
    # Rao (1990) for the weighted product dummy: ln P = Σ w ln r / Σ w, w = s0 s1 / (s0 + s1), over a common list.
    # Geary-Khamis for two: Σ p1 h / Σ p0 h, h = q0 q1 / (q0 + q1).
    prices, quantities = arrays(2, gaps=False)
    value = prices * quantities
    s0, s1 = value / value.sum(axis=1, keepdims=True)
    weight = s0 * s1 / (s0 + s1)
    dummy = np.exp((weight * np.log(prices[1] / prices[0])).sum() / weight.sum())
    harmonic = quantities[0] * quantities[1] / quantities.sum(axis=0)
    khamis = (prices[1] @ harmonic) / (prices[0] @ harmonic)
    jevons = np.exp(np.log(prices[1] / prices[0]).mean())
    for method, expected in (("tpd", dummy), ("geary-khamis", khamis), ("tpd-unweighted", jevons)):
        found = level(place_levels(frame_of(prices, quantities), method, base="coast"))
        assert found["delta"] == pytest.approx(100 * expected, rel=REGRESSION)


@pytest.mark.parametrize("method", TRANSITIVE)
def test_another_base_rescales_and_no_more(method: str) -> None:
    plain = level(place_levels(regions(), method))
    for base in PLACES:
        found = level(place_levels(regions(), method, base=base))
        assert found[base] == 100.0
        for place in PLACES:
            assert found[place] == pytest.approx(100 * plain[place] / plain[base], rel=REBASED)


@pytest.mark.parametrize("method", TRANSITIVE)
def test_without_base_the_geometric_mean_of_the_places_is_100(method: str) -> None:
    found = place_levels(regions(), method)["level"].to_numpy()
    assert np.exp(np.log(found).mean()) == pytest.approx(100.0, rel=BY_HAND)


@pytest.mark.parametrize("method", TRANSITIVE)
def test_the_names_of_the_places_do_not_matter(method: str) -> None:
    renamed = dict(zip(PLACES, reversed(PLACES), strict=True))
    found = level(place_levels(regions().with_columns(pl.col("region").replace(renamed)), method))
    for place, expected in level(place_levels(regions(), method)).items():
        assert found[renamed[place]] == pytest.approx(expected, rel=REBASED)


def by_regression(prices: Array, weights: Array) -> Array:
    """Log levels by weighted least squares on a dummy for every place and product, with mean 0."""
    place, product = np.nonzero(np.isfinite(prices))
    columns = np.zeros((len(place), sum(prices.shape)))
    columns[np.arange(len(place)), place] = 1.0
    columns[np.arange(len(place)), len(prices) + product] = 1.0
    fitted = sm.WLS(np.log(prices[place, product]), columns[:, 1:], weights=weights[place, product]).fit()
    levels: Array = np.concatenate([[0.0], fitted.params[: len(prices) - 1]])
    levels -= levels.mean()
    return levels


def test_product_dummy_without_weights_is_the_regression_of_summers() -> None:
    # Summers (1973): log prices on dummies of places and products, ordinary least squares.
    prices, _ = arrays()
    found = level(place_levels(regions(), "tpd-unweighted"))
    expected = 100 * np.exp(by_regression(prices, np.ones_like(prices)))
    np.testing.assert_allclose([found[place] for place in PLACES], expected, rtol=REGRESSION)


def test_weighted_product_dummy_is_the_regression_with_shares_of_each_place() -> None:
    prices, quantities = arrays()
    found = level(place_levels(regions(), "tpd"))
    value = prices * quantities
    expected = 100 * np.exp(by_regression(prices, value / np.nansum(value, axis=1, keepdims=True)))
    np.testing.assert_allclose([found[place] for place in PLACES], expected, rtol=REGRESSION)


def test_methods_on_prices_alone_need_no_quantity() -> None:
    for method in ("tpd-unweighted", "geks-jevons"):
        assert level(place_levels(regions().drop("quantity"), method)) == pytest.approx(
            level(place_levels(regions(), method)), rel=BY_HAND
        )
    with pytest.raises(MissingColumns, match="'quantity'"):
        place_levels(regions().drop("quantity"), "geks-fisher")


def test_geks_is_the_geometric_mean_of_the_ways_over_all_places() -> None:
    # Èltetö and Köves (1964), Szulc (1964).
    prices, quantities = arrays()
    found = level(place_levels(regions(), "geks-fisher"))
    pairs = twins.pair_levels(prices, quantities, "fisher")
    for a, b in itertools.permutations(range(len(PLACES)), 2):
        ways = np.prod([pairs[a][c] * pairs[c][b] for c in range(len(PLACES))]) ** (1 / len(PLACES))
        assert found[PLACES[b]] / found[PLACES[a]] == pytest.approx(ways, rel=REGRESSION)


def two_periods() -> pl.DataFrame:
    later = regions().filter(pl.col("region") != "islands").with_columns(pl.col("price") * pl.col("quantity").sqrt())
    frames = [regions().with_columns(period=pl.lit("2024-01")), later.with_columns(period=pl.lit("2024-02"))]
    return pl.concat(frames)


@pytest.mark.parametrize("base", [None, "hills"])
@pytest.mark.parametrize("method", ["geks-fisher", "tpd"])
def test_levels_of_each_period_are_as_if_alone(method: str, base: str | None) -> None:
    found = place_levels(two_periods(), method, by="period", base=base)
    assert found.columns[:2] == ["period", "region"]
    for period, places in (("2024-01", 5), ("2024-02", 4)):
        alone = level(place_levels(two_periods().filter(pl.col("period") == period), method, base=base))
        assert len(alone) == places
        assert level(found.filter(pl.col("period") == period)) == pytest.approx(alone, rel=REBASED)


def test_a_product_with_two_prices_in_a_place_is_a_bad_panel() -> None:
    with pytest.raises(BadPanel):
        place_levels(two_periods(), "geks-fisher")


def test_the_place_column_may_have_another_name() -> None:
    found = place_levels(regions().rename({"region": "shop"}), "tpd", place="shop")
    assert found.columns == ["shop", "level", "products", "shared"]
    assert level(found.rename({"shop": "region"})) == pytest.approx(level(place_levels(regions(), "tpd")))


def test_the_order_of_rows_does_not_matter() -> None:
    again = place_levels(regions().sample(fraction=1.0, shuffle=True, seed=8), "geks-walsh")
    assert level(again) == pytest.approx(level(place_levels(regions(), "geks-walsh")), rel=BY_HAND)


@pytest.mark.parametrize("base", [None, "coast"])
@pytest.mark.parametrize("method", ["geks-fisher", "geary-khamis"])
def test_one_product_for_each_group_is_the_delete_one_jackknife(method: str, base: str | None) -> None:
    found = place_levels(regions(), method, groups=len(PRODUCTS), base=base).sort("region")
    left_out = [place_levels(regions().filter(pl.col("product") != product), method, base=base) for product in PRODUCTS]
    replicates = np.array([one.sort("region")["level"].to_numpy() for one in left_out])
    np.testing.assert_allclose(found["standard_error"].to_numpy(), level_error(replicates), rtol=1e-8, atol=1e-9)
    assert level(found) == pytest.approx(level(place_levels(regions(), method, base=base)), rel=REBASED)


def test_an_unknown_base_is_refused_with_the_places_there_are() -> None:
    with pytest.raises(CallError, match="base") as told:
        place_levels(regions(), "geks-fisher", base="moon")
    assert all(place in str(told.value) for place in ("moon", *PLACES))


def test_an_unknown_method_is_refused_with_those_allowed() -> None:
    with pytest.raises(CallError, match="nonesuch") as told:
        place_levels(regions(), "nonesuch")
    assert all(method in str(told.value) for method in TRANSITIVE)


def test_a_place_column_that_is_not_there_is_named() -> None:
    with pytest.raises(MissingColumns, match="'shop'"):
        place_levels(regions(), "geks-fisher", place="shop")


@pytest.mark.parametrize("groups", [1, 0, -2])
def test_fewer_than_two_groups_are_refused(groups: int) -> None:
    with pytest.raises(CallError, match="groups"):
        place_levels(regions(), "geks-fisher", groups=groups)


@pytest.mark.parametrize("settings", [{}, {"by": "period"}])
@pytest.mark.parametrize("method", TRANSITIVE)
def test_a_place_that_shares_no_product_is_named(method: str, settings: dict[str, Any]) -> None:
    own = pl.col("region") == "islands"
    apart = regions().with_columns(
        pl.when(own).then(pl.col("product") + " of the islands").otherwise("product").alias("product"),
        pl.lit("2024-01").alias("period"),
    )
    with pytest.raises(DataError) as told:
        place_levels(apart, method, **settings)
    assert "islands" in str(told.value)
    assert "2024-01" in str(told.value) or not settings
    # A statistician who compares regions has no windows or periods to change.
    assert "window" not in str(told.value)


def test_a_base_of_several_places_has_the_mean_100() -> None:
    found = place_levels(regions(), "geks-fisher", base=["coast", "hills"])
    logs = [np.log(level(found)[name] / 100) for name in ("coast", "hills")]
    assert sum(logs) == pytest.approx(0.0, abs=1e-12)


def test_places_that_share_nothing_can_be_left_blank() -> None:
    apart = pl.DataFrame(
        {
            "month": ["1", "1", "2", "2"],
            "region": ["a", "b"] * 2,
            "product": ["x", "y", "x", "x"],
            "price": [1.0, 2.0, 1.0, 2.0],
            "quantity": [1.0] * 4,
        }
    )
    with pytest.raises(UnconnectedPlaces, match=r"for month 1"):
        tw.place_levels(apart, "tpd", by="month")
    found = tw.place_levels(apart, "tpd", by="month", unconnected="blank")
    assert found.filter(pl.col("month") == "1")["level"].null_count() == 2
    later = dict(found.filter(pl.col("month") == "2").select("region", "level").iter_rows())
    assert later["b"] / later["a"] == pytest.approx(2.0)


def test_a_place_that_is_alone_has_no_level() -> None:
    alone = pl.DataFrame({"region": ["a"], "product": ["x"], "price": [1.0], "quantity": [1.0]})
    found = tw.place_levels(alone, "tpd")
    assert found.select("level", "products", "shared").rows() == [(None, 1, 0)]


def test_a_place_that_sells_nothing_leaves_the_others_their_levels() -> None:
    quiet = pl.DataFrame(
        {
            "region": ["a", "b", "c"] * 2,
            "product": ["x"] * 3 + ["y"] * 3,
            "price": [1.0, 2.0, 9.0, 1.0, 2.0, 9.0],
            "quantity": [1.0, 1.0, 0.0] * 2,
        }
    )
    for method in ("geks-fisher", "tpd", "geary-khamis"):
        levels = level(tw.place_levels(quiet, method))
        assert levels["c"] is None
        assert levels["b"] / levels["a"] == pytest.approx(2.0)
