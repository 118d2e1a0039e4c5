"""Many indexes in one call: lists of methods, forms, windows and splices; link months, weight periods, jackknife."""

import itertools
import math
from collections.abc import Callable
from datetime import date
from typing import Any

import numpy as np
import polars as pl
import pytest
from numpy.typing import NDArray

import tillwright as tw
from tillwright.choices import BILATERAL_FORMULAS, FORMS, METHODS, MULTILATERAL_METHODS, ONTO, SPLICES
from tillwright.errors import BadPanel, CallError, MissingColumns, UnconnectedPeriods
from tillwright.kernels.methods import make_index
from tillwright.kernels.recipes import Recipe

SAME = 1e-10
"""One call or many: sums in another order, fixed points from another start."""
BY_HAND = 1e-12
"""A few products and periods."""
MONTHS = [f"{2023 + (m - 1) // 12}-{(m - 1) % 12 + 1:02d}" for m in range(10, 20)]
OUTPUT = ["period", "index", "products", "matched"]
SETTINGS = ("method", "form", "window", "splice", "onto")
PRODUCTS = [f"p{number}" for number in range(6)]
BASE_WEIGHTED = ("lowe", "young", "geometric-young")
Array = NDArray[np.float64]


def arrays(seed: int = 1, periods: int = len(MONTHS)) -> tuple[Array, Array]:
    """Prices and quantities of six products, the second entering late, the third leaving early."""
    rng = np.random.default_rng(seed)
    size = (periods, len(PRODUCTS))
    noise = rng.normal(0, 0.15, size)
    prices = np.exp(rng.normal(1, 0.5, len(PRODUCTS)) + noise + 0.01 * np.arange(periods)[:, None])
    quantities = np.exp(rng.normal(3, 0.5, len(PRODUCTS)) - 2 * noise)
    for gone in (np.s_[:2, 1], np.s_[5:, 2]):
        prices[gone] = quantities[gone] = np.nan
    return prices, quantities


def frame_of(prices: Array, quantities: Array, labels: list[Any]) -> pl.DataFrame:
    rows = [
        {"period": labels[t], "product": PRODUCTS[i], "price": prices[t, i], "quantity": quantities[t, i]}
        for t, i in zip(*np.nonzero(np.isfinite(prices)), strict=True)
    ]
    return pl.DataFrame(rows)


def panel(seed: int = 1, labels: list[Any] | None = None) -> pl.DataFrame:
    used = MONTHS if labels is None else labels
    return frame_of(*arrays(seed, len(used)), used)


def groups_of_different_length() -> pl.DataFrame:
    """Three groups: all months, all but the first three, all but the last four."""
    kept = {"tea": MONTHS, "milk": MONTHS[3:], "soap": MONTHS[:-4]}
    parts = [
        panel(seed).filter(pl.col("period").is_in(months)).with_columns(pl.lit(name).alias("ea"))
        for seed, (name, months) in enumerate(kept.items(), start=4)
    ]
    return pl.concat(parts).sample(fraction=1.0, shuffle=True, seed=1)


def same(found: pl.DataFrame, expected: pl.DataFrame, tolerance: float = SAME) -> None:
    numbers = [name for name, kind in expected.schema.items() if kind.is_float()]
    assert found.drop(numbers).equals(expected.drop(numbers))
    for name in numbers:
        np.testing.assert_allclose(found[name].to_numpy(), expected[name].to_numpy(), rtol=tolerance, atol=1e-12)


def picked(found: pl.DataFrame, **wanted: Any) -> pl.DataFrame:
    """The rows of one combination, without the columns that name it."""
    chosen = found
    for name, value in wanted.items():
        text = pl.col(name).cast(pl.String)
        chosen = chosen.filter(text.is_null() if value is None else text == str(value))
    return chosen.drop([name for name in SETTINGS if name in found.columns])


def combinations(found: pl.DataFrame) -> list[tuple[Any, ...]]:
    given = [name for name in SETTINGS if name in found.columns]
    return found.select(pl.col(given).cast(pl.String)).unique(maintain_order=True).rows()


def level_error(replicates: Array) -> Array:
    """Delete-a-group jackknife, as in test_jackknife."""
    count = len(replicates)
    spread: Array = np.sqrt((count - 1) / count * ((replicates - replicates.mean(axis=0)) ** 2).sum(axis=0))
    return spread


# Lists.


def test_a_single_value_adds_no_column() -> None:
    assert tw.bilateral(panel(), "fisher", form="direct").columns == OUTPUT
    assert tw.multilateral(panel(), "tpd", window=3, splice="half", onto="recalculated").columns == OUTPUT
    assert tw.indexes(panel(), "fisher").columns == OUTPUT
    assert tw.indexes(panel(), "geks-fisher", window=3).columns == OUTPUT


@pytest.mark.parametrize(
    ("settings", "columns"),
    [
        ({"form": ["direct"]}, ["form"]),
        ({"window": [3]}, ["window"]),
        ({"splice": ["mean", "half"], "window": 3}, ["splice"]),
        ({"onto": ["published"], "window": 3}, ["onto"]),
        ({"onto": ["published"], "window": [3, 4], "form": list(FORMS)}, ["form", "window", "onto"]),
    ],
)
@pytest.mark.parametrize("several", [False, True])
def test_a_list_adds_its_column_in_a_fixed_order(settings: dict[str, Any], columns: list[str], several: bool) -> None:
    method: Any = ["fisher", "geks-fisher"] if several else "geks-fisher"
    found = tw.indexes(panel(), method, **settings)
    assert found.columns == [*(["method"] if several else []), *columns, *OUTPUT]


def test_a_list_of_one_is_the_single_call_with_a_column() -> None:
    found = tw.bilateral(panel(), ["fisher"])
    assert found["method"].unique().to_list() == ["fisher"]
    same(found.drop("method"), tw.bilateral(panel(), "fisher"))


def test_by_columns_come_before_those_of_the_lists() -> None:
    found = tw.indexes(groups_of_different_length(), ["fisher", "tpd"], by="ea", window=[3, 4])
    assert found.columns == ["ea", "method", "window", *OUTPUT]


def test_bilateral_takes_every_formula_in_every_form() -> None:
    free: Any = [name for name in BILATERAL_FORMULAS if name not in BASE_WEIGHTED]
    found = tw.bilateral(panel(), free, form=list(FORMS))
    assert sorted(combinations(found)) == sorted(itertools.product(free, FORMS))
    for formula, form in itertools.product(free, FORMS):
        same(picked(found, method=formula, form=form), tw.bilateral(panel(), formula, form=form))


def test_multilateral_takes_every_method_window_and_splice_once() -> None:
    methods: Any = [name for name in MULTILATERAL_METHODS if name != "similarity"]
    splices: Any = [name for name in SPLICES if name != "link-month"]
    found = tw.multilateral(panel(), methods, window=[3, 5], splice=splices, onto=list(ONTO))
    expected = list(itertools.product(methods, ("3", "5"), splices, ONTO))
    assert sorted(combinations(found)) == sorted(expected)
    assert found.height == len(expected) * len(MONTHS)
    for method, window, splice, onto in expected:
        alone = tw.multilateral(panel(), method, window=int(window), splice=splice, onto=onto)
        same(picked(found, method=method, window=window, splice=splice, onto=onto), alone)


def test_an_argument_that_does_not_apply_is_null_and_its_combination_comes_once() -> None:
    found = tw.indexes(
        panel(),
        ["fisher", "similarity", "geks-fisher"],
        form=list(FORMS),
        window=[3, 5],
        splice=["mean", "movement"],
        onto=list(ONTO),
    )
    spliced = list(itertools.product(["3", "5"], ["mean", "movement"], ONTO))
    expected = [
        *(("fisher", form, None, None, None) for form in FORMS),
        *(("similarity", None, window, None, None) for window in ("3", "5")),
        *(("geks-fisher", None, *settings) for settings in spliced),
    ]
    assert sorted(combinations(found), key=str) == sorted(expected, key=str)
    assert found.height == len(expected) * len(MONTHS)
    same(picked(found, method="fisher", form="direct"), tw.bilateral(panel(), "fisher", form="direct"))
    same(picked(found, method="similarity", window=5), tw.multilateral(panel(), "similarity", window=5))


def test_one_window_has_no_splice() -> None:
    found = tw.multilateral(panel(), "tpd", window=[None, 3], splice=["mean", "half"], onto=list(ONTO))
    expected = [("all", None, None), *itertools.product(["3"], ["mean", "half"], ONTO)]
    assert sorted(combinations(found), key=str) == sorted(expected, key=str)
    same(picked(found, window="all"), tw.multilateral(panel(), "tpd", window="all"))
    same(tw.multilateral(panel(), "tpd", window="all"), tw.multilateral(panel(), "tpd"))


def test_the_link_month_splice_has_nothing_to_be_linked_onto() -> None:
    found = tw.multilateral(panel(), "tpd", window=8, splice=["mean", "link-month"], onto=list(ONTO))
    expected = [("mean", onto) for onto in ONTO] + [("link-month", None)]
    assert sorted(combinations(found), key=str) == sorted(expected, key=str)
    alone = tw.multilateral(panel(), "tpd", window=8, splice="link-month")
    same(picked(found, splice="link-month"), alone)


@pytest.mark.parametrize("method", dict.fromkeys((*METHODS, *BASE_WEIGHTED)))
def test_indexes_gives_what_the_call_of_its_kind_gives(method: str) -> None:
    bilateral = method in (*BILATERAL_FORMULAS, *BASE_WEIGHTED)
    call: Callable[..., pl.DataFrame] = tw.bilateral if bilateral else tw.multilateral
    weights: dict[str, Any] = {"weight_period": MONTHS[:2]} if method in BASE_WEIGHTED else {}
    same(tw.indexes(panel(), method, **weights), call(panel(), method, **weights))


@pytest.mark.parametrize("settings", [{}, {"window": 3}, {"window": 4, "splice": "window", "onto": "recalculated"}])
def test_groups_of_different_length_are_each_as_if_alone(settings: dict[str, Any]) -> None:
    methods = ["jevons", "fisher", "similarity", "geks-tornqvist", "tpd", "geary-khamis"]
    frame = groups_of_different_length()
    found = tw.indexes(frame, methods, by="ea", **settings)
    for ea in ("tea", "milk", "soap"):
        alone = tw.indexes(frame.filter(pl.col("ea") == ea).drop("ea"), methods, **settings)
        same(found.filter(pl.col("ea") == ea).drop("ea"), alone)


def test_link_months_of_groups_of_different_length_are_each_as_if_alone() -> None:
    frame = groups_of_different_length()
    settings: dict[str, Any] = {"window": "expanding", "splice": "link-month", "link_month": 2}
    found = tw.multilateral(frame, ["tpd", "geks-fisher"], by="ea", **settings)
    for ea in ("tea", "milk", "soap"):
        alone = tw.multilateral(frame.filter(pl.col("ea") == ea), ["tpd", "geks-fisher"], **settings)
        same(found.filter(pl.col("ea") == ea).drop("ea"), alone)


# Weight periods.


def lowe_by_hand(labels: list[str]) -> list[float]:
    prices, quantities = arrays()
    rows = [MONTHS.index(label) for label in labels]
    weight = np.nansum(quantities[rows], axis=0)
    levels = []
    for t in range(len(MONTHS)):
        both = np.isfinite(prices[0]) & np.isfinite(prices[t])
        levels.append(100 * float(prices[t, both] @ weight[both]) / float(prices[0, both] @ weight[both]))
    return levels


@pytest.mark.parametrize("labels", [MONTHS[:1], MONTHS[2:3], MONTHS[1:4]])
def test_weight_periods_are_added_up(labels: list[str]) -> None:
    found = tw.bilateral(panel(), "lowe", form="direct", weight_period=labels)
    np.testing.assert_allclose(found["index"].to_numpy(), lowe_by_hand(labels), rtol=BY_HAND)
    assert found.columns == OUTPUT


def test_one_weight_period_needs_no_list() -> None:
    one = tw.bilateral(panel(), "young", weight_period=MONTHS[2])
    assert one.equals(tw.bilateral(panel(), "young", weight_period=[MONTHS[2]]))


def test_weights_of_the_first_period_make_lowe_and_young_the_direct_laspeyres() -> None:
    # CPI Manual (2004), chapter 15: with weights of the price reference period both are Laspeyres.
    found = tw.bilateral(panel(), ["lowe", "young", "laspeyres"], form="direct", weight_period=MONTHS[0])
    laspeyres = picked(found, method="laspeyres")["index"].to_numpy()
    for formula in ("lowe", "young"):
        index = picked(found, method=formula)["index"].to_numpy()
        np.testing.assert_allclose(index, laspeyres, rtol=BY_HAND)


@pytest.mark.parametrize("formula", ["lowe", "young", "geometric-young"])
def test_an_unknown_weight_period_is_refused_by_name(formula: str) -> None:
    with pytest.raises(CallError, match="weight_period") as told:
        tw.bilateral(panel(), formula, weight_period="1999-01")
    assert "1999-01" in str(told.value)


@pytest.mark.parametrize("weight_period", [None, []])
@pytest.mark.parametrize("formula", ["lowe", "young", "geometric-young"])
def test_a_formula_with_weights_of_its_own_asks_for_their_period(formula: str, weight_period: Any) -> None:
    with pytest.raises(CallError, match="weight_period"):
        tw.bilateral(panel(), formula, weight_period=weight_period)


# Link months.


@pytest.mark.parametrize("labels", ["text", "integer", "date"])
@pytest.mark.parametrize("link_month", [12, 2])
@pytest.mark.parametrize("window", ["expanding", 8])
def test_a_year_runs_up_to_its_link_month(window: int | str, link_month: int, labels: str) -> None:
    made: dict[str, list[Any]] = {
        "text": list(MONTHS),
        "integer": [int(label.replace("-", "")) for label in MONTHS],
        "date": [date(int(label[:4]), int(label[5:]), 1) for label in MONTHS],
    }
    frame = panel(labels=made[labels])
    # MONTHS begin with October 2023: the year after a link month has the next number.
    years = np.array([int(label[:4]) + (int(label[5:]) > link_month) for label in MONTHS])
    for method in ("geks-tornqvist", "tpd", "geary-khamis"):
        asked: dict[str, Any] = {"window": window, "splice": "link-month", "link_month": link_month}
        found = tw.multilateral(frame, method, **asked)
        expected = make_index(*arrays(), Recipe(method, window=window, splice="link-month"), years=years)  # type: ignore[arg-type]
        assert found["period"].to_list() == made[labels]
        np.testing.assert_allclose(found["index"].to_numpy(), 100 * expected, rtol=SAME)


def test_december_is_the_link_month_unless_another_is_named() -> None:
    asked: dict[str, Any] = {"window": "expanding", "splice": "link-month"}
    december = tw.multilateral(panel(), "tpd", **asked, link_month=12)
    assert tw.multilateral(panel(), "tpd", **asked).equals(december)


def test_integers_that_are_no_months_have_no_link_month() -> None:
    frame = panel(labels=list(range(1, 11)))
    assert tw.multilateral(frame, "tpd", window=4)["period"].to_list() == list(range(1, 11))
    for window in ("expanding", 8):
        with pytest.raises(CallError, match=r"link|YYYYMM|month"):
            tw.multilateral(frame, "tpd", window=window, splice="link-month")


def test_a_window_that_does_not_reach_its_link_month_is_refused() -> None:
    with pytest.raises(CallError, match="window"):
        tw.multilateral(panel(), "tpd", window=3, splice="link-month", link_month=12)


# Jackknife.


def test_groups_add_errors_and_changes_to_the_same_index() -> None:
    found = tw.indexes(panel(), ["fisher", "tpd"], groups=3)
    assert set(found.columns) == {"method", *OUTPUT, "standard_error", "change", "change_error", "groups"}
    assert found["groups"].unique().to_list() == [3]
    same(found.select("method", *OUTPUT), tw.indexes(panel(), ["fisher", "tpd"]))
    for method in ("fisher", "tpd"):
        index = picked(found, method=method)
        levels = index["index"].to_numpy()
        assert index["change"][0] is None
        np.testing.assert_allclose(index["change"][1:].to_numpy(), 100 * (levels[1:] / levels[:-1] - 1), rtol=1e-9)
        assert index["standard_error"][0] == pytest.approx(0.0, abs=BY_HAND)
        assert (index["standard_error"][1:].to_numpy() > 0).all()


@pytest.mark.parametrize("method", ["jevons", "tornqvist", "geks-fisher", "geary-khamis"])
def test_one_product_for_each_group_is_the_delete_one_jackknife(method: str) -> None:
    found = tw.indexes(panel(), method, groups=len(PRODUCTS))
    left_out = [tw.indexes(panel().filter(pl.col("product") != product), method) for product in PRODUCTS]
    replicates = np.array([one["index"].to_numpy() for one in left_out])
    np.testing.assert_allclose(found["standard_error"].to_numpy(), level_error(replicates), rtol=1e-8, atol=1e-9)
    changes = level_error(100 * (replicates[:, 1:] / replicates[:, :-1] - 1))
    np.testing.assert_allclose(found["change_error"][1:].to_numpy(), changes, rtol=1e-8, atol=1e-9)
    assert found["change_error"][0] is None


def outlets() -> pl.DataFrame:
    shops = [panel(seed).with_columns(pl.lit(f"shop {seed}").alias("outlet")) for seed in (1, 2, 3, 4)]
    return pl.concat(shops)


@pytest.mark.parametrize("method", ["jevons", "fisher", "geks-tornqvist"])
def test_over_leaves_out_its_values_and_makes_them_part_of_the_product(method: str) -> None:
    found = tw.indexes(outlets(), method, groups=4, over="outlet")
    joined = outlets().with_columns(pl.col("product") + " " + pl.col("outlet"))
    same(found.select(OUTPUT), tw.indexes(joined, method))
    left_out = [tw.indexes(joined.filter(pl.col("outlet") != f"shop {seed}"), method) for seed in (1, 2, 3, 4)]
    replicates = np.array([one["index"].to_numpy() for one in left_out])
    np.testing.assert_allclose(found["standard_error"].to_numpy(), level_error(replicates), rtol=1e-8, atol=1e-9)


def test_errors_of_each_group_are_as_if_alone() -> None:
    frame = groups_of_different_length()
    found = tw.indexes(frame, ["fisher", "geks-fisher"], by="ea", groups=len(PRODUCTS))
    for ea in ("tea", "milk", "soap"):
        alone = tw.indexes(frame.filter(pl.col("ea") == ea), ["fisher", "geks-fisher"], groups=len(PRODUCTS))
        same(found.filter(pl.col("ea") == ea).drop("ea"), alone)


def test_the_order_of_rows_does_not_matter_to_the_errors() -> None:
    expected = tw.indexes(panel(), "fisher", groups=3)
    same(tw.indexes(panel().sample(fraction=1.0, shuffle=True, seed=2), "fisher", groups=3), expected)


# Bad arguments.


@pytest.mark.parametrize(
    ("name", "settings", "allowed"),
    [
        ("method", {"method": "nonesuch"}, METHODS),
        ("method", {"method": ["fisher", "nonesuch"]}, METHODS),
        ("form", {"form": "nonesuch"}, FORMS),
        ("form", {"form": ["direct", "nonesuch"]}, FORMS),
        ("window", {"window": "nonesuch"}, ("expanding", "2")),
        ("window", {"window": 1}, ("2",)),
        ("window", {"window": [3, 0]}, ("2",)),
        ("window", {"window": 2.5}, ("expanding", "2")),
        ("splice", {"splice": "nonesuch", "window": 3}, (*SPLICES, "link-month")),
        ("splice", {"splice": ["mean", "nonesuch"], "window": 3}, SPLICES),
        ("onto", {"onto": "nonesuch", "window": 3}, ONTO),
        ("onto", {"onto": ["published", "nonesuch"], "window": 3}, ONTO),
        ("link_month", {"link_month": 0, "window": 8, "splice": "link-month"}, ("1", "12")),
        ("link_month", {"link_month": 13, "window": 8, "splice": "link-month"}, ("1", "12")),
        ("link_month", {"link_month": 2.5, "window": 8, "splice": "link-month"}, ("1", "12")),
        ("link_month", {"link_month": "December", "window": 8, "splice": "link-month"}, ("1", "12")),
        ("link_month", {"link_month": None, "window": 8, "splice": "link-month"}, ("1", "12")),
        ("groups", {"groups": 1}, ("2",)),
        ("groups", {"groups": -4}, ("2",)),
        ("groups", {"groups": 2.5}, ("2",)),
        ("groups", {"groups": "three"}, ("2",)),
    ],
)
def test_a_bad_argument_is_named_with_what_is_allowed(
    name: str, settings: dict[str, Any], allowed: tuple[str, ...]
) -> None:
    method = settings.get("method", ["fisher", "geks-fisher"])
    others = {key: value for key, value in settings.items() if key != "method"}
    with pytest.raises(CallError, match=name) as told:
        tw.indexes(panel(), method, **others)
    assert all(choice in str(told.value) for choice in allowed)


@pytest.mark.parametrize("name", ["method", "form", "window", "splice", "onto"])
def test_an_empty_list_is_refused_by_name(name: str) -> None:
    settings: dict[str, Any] = {"method": ["geks-fisher"], "window": 3, name: []}
    with pytest.raises(CallError, match=name):
        tw.indexes(panel(), settings.pop("method"), **settings)


def test_methods_of_the_other_kind_are_refused() -> None:
    with pytest.raises(CallError, match="geks-fisher") as told:
        tw.bilateral(panel(), ["fisher", "geks-fisher"])
    assert all(formula in str(told.value) for formula in BILATERAL_FORMULAS)
    with pytest.raises(CallError, match="fisher") as told:
        tw.multilateral(panel(), ["geks-fisher", "fisher"])
    assert all(method in str(told.value) for method in MULTILATERAL_METHODS)


def test_expanding_windows_are_linked_by_no_other_splice() -> None:
    with pytest.raises(CallError, match="link-month"):
        tw.multilateral(panel(), "tpd", window="expanding", splice="movement")


def test_a_column_to_leave_out_over_must_be_there() -> None:
    with pytest.raises(MissingColumns, match="outlet"):
        tw.indexes(panel(), "fisher", groups=3, over="outlet")


def test_without_over_a_product_sold_twice_in_a_period_is_a_bad_panel() -> None:
    with pytest.raises(BadPanel):
        tw.indexes(outlets(), "fisher", groups=3)


def test_lists_may_be_tuples() -> None:
    listed = tw.indexes(panel(), ["fisher", "tpd"], form=["direct"])
    assert tw.indexes(panel(), ("fisher", "tpd"), form=("direct",)).equals(listed)


def test_a_group_error_is_finite_wherever_there_is_an_index() -> None:
    found = tw.indexes(panel(), ["jevons", "similarity", "geks-walsh"], groups=2)
    assert all(math.isfinite(error) for error in found["standard_error"])


def test_errors_are_made_of_the_replicates() -> None:
    asked: dict[str, Any] = {"groups": 3, "window": 4, "by": "ea"}
    made = tw.replicates(groups_of_different_length(), ["fisher", "tpd"], **asked)
    assert made.columns == ["ea", "method", "without", "period", "index"]
    assert sorted(made["without"].unique()) == [1, 2, 3]
    errors = tw.indexes(groups_of_different_length(), ["fisher", "tpd"], **asked)
    for (ea, method, period), rows in made.group_by("ea", "method", "period"):
        cell = (pl.col("ea") == ea) & (pl.col("method") == method) & (pl.col("period") == period)
        expected = errors.filter(cell)["standard_error"].item()
        if expected is None:
            assert rows["index"].null_count() > 0
        else:
            assert level_error(rows["index"].to_numpy()) == pytest.approx(expected, rel=1e-8, abs=1e-9)


def test_a_replicate_without_the_first_period_gives_no_error() -> None:
    # Only p0 is sold at first; without it a series would start, and be 100, a month later.
    rows = [(MONTHS[t], f"p{i}", (1.0 + i) * 2.0**t, 1.0 + i) for t in range(5) for i in range(6) if t > 0 or i == 0]
    frame = pl.DataFrame(rows, schema=["period", "product", "price", "quantity"], orient="row")
    for method in ("fisher", "geks-fisher", "tpd", "geary-khamis", "similarity"):
        found = tw.indexes(frame, method, groups=6)
        assert found["index"].to_list() == pytest.approx([100.0 * 2**t for t in range(5)])
        assert found["standard_error"].null_count() == 5


def test_an_empty_link_month_gives_way_to_the_period_before() -> None:
    december = "2023-12"
    frame = panel(2)
    holed = frame.filter(pl.col("period") != december)
    both = pl.concat([frame.with_columns(ea=pl.lit("tea")), holed.with_columns(ea=pl.lit("milk"))])
    asked: dict[str, Any] = {"window": "expanding", "splice": "link-month"}
    for method in ("tpd", "geks-fisher"):
        found = tw.multilateral(both, method, by="ea", **asked).filter(pl.col("ea") == "milk")
        assert found.filter(pl.col("index").is_null())["period"].to_list() == [december]
        alone = tw.multilateral(holed, method, **asked)
        known = found.filter(pl.col("index").is_not_null())
        np.testing.assert_allclose(known["index"].to_numpy(), alone["index"].to_numpy(), rtol=SAME)


def test_weights_of_a_period_that_a_group_lacks_give_it_no_index() -> None:
    for month in (MONTHS[0], MONTHS[-1]):
        found = tw.indexes(groups_of_different_length(), "lowe", weight_period=month, by="ea", groups=3)
        lacking = "milk" if month == MONTHS[0] else "soap"
        assert found.filter(pl.col("ea") == lacking)["index"].null_count() > 0
        assert found.filter(pl.col("ea") == "tea")["index"].null_count() == 0


def broken() -> pl.DataFrame:
    """Two groups; in the first nothing of the last two months was sold before, as in the second."""
    prices, quantities = np.full((6, 4), np.nan), np.full((6, 4), np.nan)
    prices[:4, :2] = prices[4:, 2:] = 1.0
    prices *= 1 + 0.1 * np.arange(6)[:, None]
    quantities[np.isfinite(prices)] = 3.0
    parts = [frame_of(prices, quantities, MONTHS[:6]).with_columns(ea=pl.lit(name)) for name in ("milk", "soap")]
    return pl.concat([*parts, panel(3, MONTHS[:6]).with_columns(ea=pl.lit("tea"))])


@pytest.mark.parametrize("method", ["geks-fisher", "tpd", "geary-khamis", "similarity"])
def test_a_window_that_falls_apart_is_refused_or_passed_over(method: str) -> None:
    with pytest.raises(UnconnectedPeriods, match=r"of ea milk.*1 more group.*blank") as told:
        tw.multilateral(broken(), method, window=3, by="ea")
    assert told.value.groups[-1][0] == MONTHS[4]
    found = tw.multilateral(broken(), method, window=3, by="ea", unconnected="blank")
    milk = found.filter(pl.col("ea") == "milk")
    np.testing.assert_allclose(milk["index"][:4].to_numpy(), [100, 110, 120, 130], rtol=1e-12)
    assert milk["index"][4] is None
    assert found.filter(pl.col("ea") == "tea")["index"].null_count() == 0


def test_over_needs_groups() -> None:
    with pytest.raises(CallError, match=r"over.*groups"):
        tw.indexes(outlets(), "fisher", over="outlet")


def test_an_expanding_window_without_its_splice_is_refused_beside_others() -> None:
    with pytest.raises(CallError, match="link-month"):
        tw.multilateral(panel(), "tpd", window=["expanding", 5])


@pytest.mark.parametrize("labels", [["2024-03", "2024-Q2"], ["2024-W13", "20240401"], ["2024-W54", "2024-W55"]])
def test_labels_that_do_not_sort_as_time_are_refused(labels: list[str]) -> None:
    rows = [(label, "p", 1.0, 1.0) for label in labels]
    frame = pl.DataFrame(rows, schema=["period", "product", "price", "quantity"], orient="row")
    with pytest.raises(BadPanel, match="sort as time"):
        tw.bilateral(frame, "fisher")


@pytest.mark.parametrize("frame", [None, "panel.parquet", 3, pl.Series("price", [1.0]), {"a": [1, 2], "b": [1]}])
def test_what_is_no_frame_is_refused(frame: Any) -> None:
    with pytest.raises(CallError, match="The panel is a"):
        tw.bilateral(frame, "fisher")


def test_arrays_of_numpy_and_pandas_are_lists() -> None:
    asked: Any = np.array(["fisher", "jevons"])
    same(tw.bilateral(panel(), asked), tw.bilateral(panel(), ["fisher", "jevons"]))
    windows: Any = np.array([3, 4])
    same(tw.multilateral(panel(), "tpd", window=windows), tw.multilateral(panel(), "tpd", window=[3, 4]))


def test_many_groups_are_compiled_in_parts_with_the_same_result(monkeypatch: pytest.MonkeyPatch) -> None:
    methods = ["geks-fisher", "tpd", "fisher", "similarity"]
    expected = tw.indexes(groups_of_different_length(), methods, window=4, by="ea")
    monkeypatch.setattr("tillwright.kernels.methods.HELD", 1)
    same(tw.indexes(groups_of_different_length(), methods, window=4, by="ea"), expected)
