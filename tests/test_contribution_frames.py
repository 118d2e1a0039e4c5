"""`tillwright.contributions`: what each product adds to the change of an index, in percentage points."""

import math
from datetime import date
from typing import Any

import numpy as np
import polars as pl
import pytest
from numpy.typing import NDArray

import tillwright as tw
from tillwright.choices import BILATERAL_FORMULAS, FORMS, METHODS, MULTILATERAL_METHODS, ONTO, SPLICES
from tillwright.errors import CallError, MissingColumns

ADDS_UP = 1e-9
"""What the sum over products may miss, in percentage points."""
BY_HAND = 1e-12
"""A few products and two periods."""
MONTHS = [f"{2023 + (m - 1) // 12}-{(m - 1) % 12 + 1:02d}" for m in range(10, 20)]
FIGURES = ["status", "contribution", "price_start", "price_end", "share_start", "share_end"]
COLUMNS = ["product", *FIGURES]
BASE_WEIGHTED = ("lowe", "young", "geometric-young")
SPLICED = [name for name in MULTILATERAL_METHODS if name != "similarity"]
WINDOWS: list[dict[str, Any]] = [
    *({"window": 4, "splice": splice, "onto": onto} for splice in SPLICES if splice != "link-month" for onto in ONTO),
    {"window": 8, "splice": "link-month", "link_month": 12},
    {"window": "expanding", "splice": "link-month", "link_month": 12},
    {"window": "expanding", "splice": "link-month", "link_month": 2},
]
Array = NDArray[np.float64]


def arrays(seed: int = 1) -> tuple[Array, Array]:
    """Six products: p1 enters in the third month, p2 leaves after the fifth, p3 is sold from the third to the fifth."""
    rng = np.random.default_rng(seed)
    size = (len(MONTHS), 6)
    noise = rng.normal(0, 0.15, size)
    prices = np.exp(rng.normal(1, 0.5, 6) + noise + 0.01 * np.arange(len(MONTHS))[:, None])
    quantities = np.exp(rng.normal(3, 0.5, 6) - 2 * noise)
    for gone in (np.s_[:2, 1], np.s_[5:, 2], np.s_[:2, 3], np.s_[5:, 3]):
        prices[gone] = quantities[gone] = np.nan
    return prices, quantities


def panel(seed: int = 1, labels: list[Any] | None = None) -> pl.DataFrame:
    prices, quantities = arrays(seed)
    named = MONTHS if labels is None else labels
    rows = [
        {"period": named[t], "product": f"p{i}", "price": prices[t, i], "quantity": quantities[t, i]}
        for t, i in zip(*np.nonzero(np.isfinite(prices)), strict=True)
    ]
    return pl.DataFrame(rows).sample(fraction=1.0, shuffle=True, seed=seed)


def two_groups() -> pl.DataFrame:
    """The second group starts two months later."""
    milk = panel(2).filter(pl.col("period") >= MONTHS[2])
    return pl.concat([panel(1).with_columns(ea=pl.lit("tea")), milk.with_columns(ea=pl.lit("milk"))])


def change(index: pl.DataFrame, start: Any, end: Any) -> float:
    level: dict[Any, float] = dict(index.select("period", "index").iter_rows())
    return 100 * (level[end] / level[start] - 1)


def splice_of(found: pl.DataFrame) -> float:
    rows = found.filter(pl.col("status") == "splice")
    assert rows["product"].to_list() == [None]
    return float(rows["contribution"][0])


def statuses(found: pl.DataFrame) -> dict[str, str]:
    return dict(found.filter(pl.col("product").is_not_null()).select("product", "status").iter_rows())


def points(found: pl.DataFrame) -> dict[str, float]:
    return dict(found.filter(pl.col("product").is_not_null()).select("product", "contribution").iter_rows())


def weights_for(method: str) -> dict[str, Any]:
    return {"weight_period": MONTHS[:2]} if method in BASE_WEIGHTED else {}


def test_columns_are_product_status_and_contribution() -> None:
    found = tw.contributions(panel(), "geks-tornqvist", MONTHS[1], MONTHS[-1])
    assert found.columns == COLUMNS
    assert found["contribution"].is_finite().all()
    assert found["product"].is_duplicated().sum() == 0


@pytest.mark.parametrize(("start", "end"), [(0, 9), (1, 6), (8, 9)])
@pytest.mark.parametrize("form", FORMS)
@pytest.mark.parametrize("formula", dict.fromkeys((*BILATERAL_FORMULAS, *BASE_WEIGHTED)))
def test_bilateral_contributions_add_up_to_the_change(formula: str, form: Any, start: int, end: int) -> None:
    settings = {"form": form, **weights_for(formula)}
    found = tw.contributions(panel(), formula, MONTHS[start], MONTHS[end], **settings)
    expected = change(tw.bilateral(panel(), formula, **settings), MONTHS[start], MONTHS[end])
    assert found["contribution"].sum() == pytest.approx(expected, abs=ADDS_UP)
    assert splice_of(found) == 0.0


@pytest.mark.parametrize(("start", "end"), [(0, 9), (2, 7), (8, 9)])
@pytest.mark.parametrize("method", MULTILATERAL_METHODS)
def test_contributions_within_one_window_add_up_and_have_no_splice(method: str, start: int, end: int) -> None:
    found = tw.contributions(panel(), method, MONTHS[start], MONTHS[end])
    expected = change(tw.multilateral(panel(), method), MONTHS[start], MONTHS[end])
    assert found["contribution"].sum() == pytest.approx(expected, abs=ADDS_UP)
    assert splice_of(found) == 0.0


@pytest.mark.parametrize(("start", "end"), [(0, 9), (4, 8), (8, 9)])
@pytest.mark.parametrize("settings", WINDOWS, ids=lambda settings: "-".join(str(value) for value in settings.values()))
@pytest.mark.parametrize("method", SPLICED)
def test_contributions_over_windows_add_up(method: Any, settings: dict[str, Any], start: int, end: int) -> None:
    found = tw.contributions(panel(), method, MONTHS[start], MONTHS[end], **settings)
    expected = change(tw.multilateral(panel(), method, **settings), MONTHS[start], MONTHS[end])
    assert found["contribution"].sum() == pytest.approx(expected, abs=ADDS_UP)
    assert math.isfinite(splice_of(found))


def test_similarity_links_within_a_window_add_up_and_have_no_splice() -> None:
    found = tw.contributions(panel(), "similarity", MONTHS[0], MONTHS[-1], window=4)
    expected = change(tw.multilateral(panel(), "similarity", window=4), MONTHS[0], MONTHS[-1])
    assert found["contribution"].sum() == pytest.approx(expected, abs=ADDS_UP)
    assert splice_of(found) == 0.0


def test_a_window_splice_moves_the_index_beyond_its_last_window() -> None:
    settings: dict[str, Any] = {"window": 4, "splice": "mean"}
    assert abs(splice_of(tw.contributions(panel(), "tpd", MONTHS[0], MONTHS[-1], **settings))) > 1e-6


def test_direct_laspeyres_contributions_are_share_times_change() -> None:
    # CPI Manual (2004), chapter 9: the contribution of a product is its weight times its own change.
    found = points(tw.contributions(panel(), "laspeyres", MONTHS[0], MONTHS[-1], form="direct"))
    prices, quantities = arrays()
    both = np.isfinite(prices[0]) & np.isfinite(prices[-1])
    value = np.where(both, prices[0] * quantities[0], 0.0)
    for i in np.flatnonzero(both):
        expected = 100 * value[i] / value.sum() * (prices[-1, i] / prices[0, i] - 1)
        assert found[f"p{i}"] == pytest.approx(expected, rel=BY_HAND, abs=ADDS_UP)
    assert all(found.get(f"p{i}", 0.0) == 0.0 for i in np.flatnonzero(~both))


def test_an_index_that_ends_where_it_began_has_contributions_that_cancel() -> None:
    rows = [
        ("2024-01", "a", 1.0, 3.0),
        ("2024-01", "b", 2.0, 3.0),
        ("2024-02", "a", 2.0, 3.0),
        ("2024-02", "b", 1.0, 3.0),
    ]
    frame = pl.DataFrame(rows, schema=["period", "product", "price", "quantity"], orient="row")
    found = points(tw.contributions(frame, "fisher", "2024-01", "2024-02"))
    # Equal quantities: Laspeyres and Paasche are both 9/9; each product moves 3 of the 9 of turnover.
    assert found == pytest.approx({"a": 100 / 3, "b": -100 / 3}, abs=ADDS_UP)


@pytest.mark.parametrize("method", ["tornqvist", "tpd", "geary-khamis", "geks-fisher", "similarity"])
def test_status_is_told_by_where_a_product_is_sold(method: str) -> None:
    whole = statuses(tw.contributions(panel(), method, MONTHS[0], MONTHS[-1]))
    assert whole.pop("p3", "neither") == "neither"
    expected = {"p0": "continuing", "p1": "entering", "p2": "exiting", "p4": "continuing", "p5": "continuing"}
    assert whole == expected
    middle = statuses(tw.contributions(panel(), method, MONTHS[2], MONTHS[4]))
    assert middle == dict.fromkeys(("p0", "p1", "p2", "p3", "p4", "p5"), "continuing")


@pytest.mark.parametrize("method", ["tornqvist", "fisher"])
def test_a_product_sold_between_only_contributes_to_a_chain(method: str) -> None:
    found = tw.contributions(panel(), method, MONTHS[0], MONTHS[-1], form="chained")
    assert statuses(found)["p3"] == "neither"
    assert abs(points(found)["p3"]) > 1e-6


@pytest.mark.parametrize("method", ["tpd", "tpd-unweighted", "geary-khamis", "geks-tornqvist"])
def test_products_that_enter_and_leave_contribute_to_a_multilateral_index(method: str) -> None:
    found = points(tw.contributions(panel(), method, MONTHS[0], MONTHS[-1]))
    assert abs(found["p1"]) > 1e-6
    assert abs(found["p2"]) > 1e-6
    assert abs(found.get("p3", 0.0)) <= ADDS_UP


@pytest.mark.parametrize("method", ["fisher", "geks-fisher", "tpd"])
def test_by_adds_up_in_each_group_as_if_alone(method: str) -> None:
    settings: dict[str, Any] = {} if method == "fisher" else {"window": 4}
    found = tw.contributions(two_groups(), method, MONTHS[3], MONTHS[-1], by="ea", **settings)
    assert found.columns == ["ea", *COLUMNS]
    for ea in ("tea", "milk"):
        mine = found.filter(pl.col("ea") == ea).drop("ea")
        frame = two_groups().filter(pl.col("ea") == ea)
        alone = tw.contributions(frame, method, MONTHS[3], MONTHS[-1], **settings)
        assert points(mine) == pytest.approx(points(alone), abs=ADDS_UP)
        assert statuses(mine) == statuses(alone)
        expected = change(tw.indexes(frame, method, **settings), MONTHS[3], MONTHS[-1])
        assert mine["contribution"].sum() == pytest.approx(expected, abs=ADDS_UP)
        assert mine.filter(pl.col("status") == "splice").height == 1


@pytest.mark.parametrize(
    "labels",
    [
        pytest.param([int(label.replace("-", "")) for label in MONTHS], id="integer"),
        pytest.param([date(int(label[:4]), int(label[5:]), 1) for label in MONTHS], id="date"),
    ],
)
def test_labels_may_be_integers_and_dates(labels: list[Any]) -> None:
    settings: dict[str, Any] = {"window": "expanding", "splice": "link-month"}
    found = tw.contributions(panel(labels=labels), "tpd", labels[1], labels[-1], **settings)
    expected = tw.contributions(panel(), "tpd", MONTHS[1], MONTHS[-1], **settings)
    assert points(found) == pytest.approx(points(expected), abs=ADDS_UP)


def test_columns_may_have_other_names() -> None:
    names = {"period": "month", "product": "gtin", "price": "unit_value", "quantity": "units"}
    found = tw.contributions(panel().rename(names), "tpd", MONTHS[0], MONTHS[-1], **names)  # type: ignore[arg-type]
    assert found.columns == ["gtin", *FIGURES]
    assert points(found.rename({"gtin": "product"})) == pytest.approx(
        points(tw.contributions(panel(), "tpd", MONTHS[0], MONTHS[-1])), abs=ADDS_UP
    )


def test_the_order_of_rows_does_not_matter() -> None:
    found = tw.contributions(panel(), "geks-walsh", MONTHS[0], MONTHS[-1])
    again = tw.contributions(panel().sort("product"), "geks-walsh", MONTHS[0], MONTHS[-1])
    assert points(again) == pytest.approx(points(found), abs=ADDS_UP)


@pytest.mark.parametrize(("start", "end", "name"), [("1999-01", MONTHS[-1], "start"), (MONTHS[0], "2099-01", "end")])
def test_an_unknown_period_is_refused_by_name(start: str, end: str, name: str) -> None:
    with pytest.raises(CallError, match=name) as told:
        tw.contributions(panel(), "fisher", start, end)
    assert any(label in str(told.value) for label in ("1999-01", "2099-01"))


@pytest.mark.parametrize(
    ("name", "settings", "allowed"),
    [
        ("method", {"method": "nonesuch"}, METHODS),
        ("form", {"method": "fisher", "form": "nonesuch"}, FORMS),
        ("window", {"method": "tpd", "window": 1}, ("2",)),
        ("splice", {"method": "tpd", "window": 4, "splice": "nonesuch"}, SPLICES),
        ("onto", {"method": "tpd", "window": 4, "onto": "nonesuch"}, ONTO),
        ("weight_period", {"method": "lowe", "weight_period": "1999-01"}, ()),
    ],
)
def test_a_bad_argument_is_named_with_what_is_allowed(
    name: str, settings: dict[str, Any], allowed: tuple[str, ...]
) -> None:
    others = {key: value for key, value in settings.items() if key != "method"}
    with pytest.raises(CallError, match=name) as told:
        tw.contributions(panel(), settings["method"], MONTHS[0], MONTHS[-1], **others)
    assert all(choice in str(told.value) for choice in allowed)


def test_a_missing_quantity_is_told() -> None:
    assert tw.contributions(panel().drop("quantity"), "jevons", MONTHS[0], MONTHS[-1]).columns == COLUMNS
    with pytest.raises(MissingColumns, match="'quantity'"):
        tw.contributions(panel().drop("quantity"), "fisher", MONTHS[0], MONTHS[-1])


def test_prices_and_shares_are_those_of_the_two_periods() -> None:
    found = tw.contributions(panel(), "geks-tornqvist", MONTHS[2], MONTHS[4])
    for month, side in ((MONTHS[2], "start"), (MONTHS[4], "end")):
        sold = panel().filter(pl.col("period") == month).with_columns(value=pl.col("price") * pl.col("quantity"))
        expected = sold.with_columns(pl.col("value") / pl.col("value").sum()).sort("product")
        mine = found.filter(pl.col("product").is_not_null()).sort("product")
        np.testing.assert_allclose(mine[f"price_{side}"].to_numpy(), expected["price"].to_numpy(), rtol=1e-15)
        np.testing.assert_allclose(mine[f"share_{side}"].to_numpy(), expected["value"].to_numpy(), rtol=1e-12)


def test_several_methods_and_windows_stand_side_by_side() -> None:
    asked: dict[str, Any] = {"window": [3, "all"], "splice": "movement"}
    found = tw.contributions(panel(), ["tpd", "geks-fisher"], MONTHS[0], MONTHS[-1], **asked)
    assert found.columns == ["method", "window", *COLUMNS]
    for method in ("tpd", "geks-fisher"):
        for window in (3, "all"):
            alone = tw.contributions(panel(), method, MONTHS[0], MONTHS[-1], window=window, splice="movement")
            mine = found.filter(pl.col("method") == method, pl.col("window") == str(window)).drop("method", "window")
            assert points(mine) == pytest.approx(points(alone), abs=ADDS_UP)


def test_a_group_without_a_level_is_told_and_the_others_go_on() -> None:
    late = two_groups().filter((pl.col("ea") == "tea") | (pl.col("period") > MONTHS[2]))
    found = tw.contributions(late, "tornqvist", MONTHS[0], MONTHS[-1], by="ea")
    milk = found.filter(pl.col("ea") == "milk")
    assert milk.select("status", "contribution").rows() == [("missing", None)]
    expected = change(tw.indexes(late.filter(pl.col("ea") == "tea"), "tornqvist"), MONTHS[0], MONTHS[-1])
    assert found.filter(pl.col("ea") == "tea")["contribution"].sum() == pytest.approx(expected, abs=ADDS_UP)


def test_a_product_column_called_like_a_result_is_refused() -> None:
    with pytest.raises(CallError, match="'status'"):
        tw.contributions(panel().rename({"product": "status"}), "tpd", MONTHS[0], MONTHS[-1], product="status")


def test_a_month_stands_for_the_only_date_in_it() -> None:
    dated = panel().with_columns(pl.col("period").str.to_date("%Y-%m"))
    found = tw.contributions(dated, "tpd", MONTHS[0], MONTHS[-1])
    assert points(found) == pytest.approx(points(tw.contributions(panel(), "tpd", MONTHS[0], MONTHS[-1])), abs=ADDS_UP)
