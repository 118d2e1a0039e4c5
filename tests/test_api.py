"""`tillwright.bilateral` and `tillwright.multilateral`: the contract of DESIGN section 6."""

import subprocess
import sys
from datetime import date, datetime
from typing import Any

import numpy as np
import pandas as pd
import polars as pl
import pytest

import tillwright as tw
from tests.reference.published import cases, dataset
from tillwright.choices import BILATERAL_FORMULAS, FORMS, MULTILATERAL_METHODS, ONTO, SPLICES
from tillwright.errors import BadPanel, CallError, MissingColumns, UnconnectedPeriods

# The order of rows may change the order of sums, no more.
ORDER = 1e-12
# A few products, by hand.
BY_HAND = 1e-12
MONTHS = ["2023-11", "2023-12", "2024-01", "2024-02"]
OUTPUT = ["period", "index", "products", "matched"]


def panel(periods: list[Any] | None = None) -> pl.DataFrame:
    """Three products over four periods; the third enters in the second period."""
    labels = MONTHS if periods is None else periods
    prices: dict[str, list[float | None]] = {
        "a": [1.0, 1.1, 1.2, 1.1],
        "b": [2.0, 2.0, 1.8, 2.2],
        "c": [None, 4.0, 4.4, 4.2],
    }
    quantities: dict[str, list[int | None]] = {"a": [10, 9, 8, 9], "b": [5, 6, 7, 4], "c": [None, 2, 2, 3]}
    return pl.DataFrame(
        {
            "period": [label for label in labels for _ in "abc"],
            "product": ["a", "b", "c"] * 4,
            "price": [prices[i][t] for t in range(4) for i in "abc"],
            "quantity": [quantities[i][t] for t in range(4) for i in "abc"],
        }
    )


def two_groups() -> pl.DataFrame:
    """The panel twice; the second group starts a period later."""
    late = panel().filter(pl.col("period") != MONTHS[0])
    return pl.concat([panel().with_columns(pl.lit("tea").alias("ea")), late.with_columns(pl.lit("milk").alias("ea"))])


def close(found: pl.DataFrame, expected: pl.DataFrame, tolerance: float) -> None:
    assert found.drop("index").equals(expected.drop("index"))
    np.testing.assert_allclose(found["index"].to_numpy(), expected["index"].to_numpy(), rtol=tolerance)


def test_columns_are_period_index_products_and_matched() -> None:
    index = tw.bilateral(panel(), "jevons")
    assert index.columns == OUTPUT
    assert index["period"].to_list() == MONTHS
    assert index["products"].to_list() == [2, 3, 3, 3]
    assert index["matched"].to_list() == [0, 2, 3, 3]
    assert index["index"][0] == 100.0


def test_chained_jevons_by_hand_is_the_default_form() -> None:
    index = tw.bilateral(panel(), "jevons")["index"]
    second = 100 * (1.1 / 1.0 * 2.0 / 2.0) ** (1 / 2)
    third = second * (1.2 / 1.1 * 1.8 / 2.0 * 4.4 / 4.0) ** (1 / 3)
    assert index[1] == pytest.approx(second, rel=BY_HAND)
    assert index[2] == pytest.approx(third, rel=BY_HAND)
    assert index.to_list() == tw.bilateral(panel(), "jevons", form="chained")["index"].to_list()


def test_direct_form_compares_with_the_first_period() -> None:
    index = tw.bilateral(panel(), "dutot", form="direct")["index"]
    assert index[3] == pytest.approx(100 * (1.1 + 2.2) / (1.0 + 2.0), rel=BY_HAND)


def test_defaults_of_multilateral_are_one_window_mean_and_published() -> None:
    default = tw.multilateral(panel(), "geks-tornqvist")
    assert default.equals(tw.multilateral(panel(), "geks-tornqvist", window=4))
    assert default.equals(tw.multilateral(panel(), "geks-tornqvist", window=99))
    short = tw.multilateral(panel(), "geks-tornqvist", window=2)
    assert short.equals(tw.multilateral(panel(), "geks-tornqvist", window=2, splice="mean", onto="published"))


# Diewert, chain drift paper, Tables 1-2 (from memory, arithmetic confirmed): the fourth period repeats the first.
def test_published_chain_drift_example_comes_out_of_frames() -> None:
    data = dataset("chaindrift")
    rows = [
        {"period": t, "product": i, "price": data.prices[t, i], "quantity": data.quantities[t, i]}
        for t in range(4)
        for i in range(2)
    ]
    frame = pl.DataFrame(rows)
    (chained,) = cases("chaindrift_fisher_ch")
    found = tw.bilateral(frame, "fisher", form="chained")["index"].to_numpy() / 100
    np.testing.assert_allclose(found, chained.expected, rtol=0, atol=chained.tolerance)
    for method in MULTILATERAL_METHODS:
        assert tw.multilateral(frame, method)["index"][-1] == pytest.approx(100.0, rel=1e-12)


@pytest.mark.parametrize(
    "labels",
    [
        pytest.param([date(2023, 11, 1), date(2023, 12, 1), date(2024, 1, 1), date(2024, 2, 1)], id="date"),
        pytest.param([datetime(2023, month, 1, 12) for month in (1, 2, 3, 10)], id="stamp"),
        pytest.param(MONTHS, id="text"),
        pytest.param(["2023-W51", "2023-W52", "2024-W01", "2024-W02"], id="week"),
        pytest.param([202311, 202312, 202401, 202402], id="integer"),
        pytest.param([-1, 9, 10, 11], id="integers of one and two digits"),
    ],
)
def test_periods_come_back_as_they_were_given(labels: list[Any]) -> None:
    frame = panel(labels)
    index = tw.multilateral(frame, "geks-tornqvist")
    assert index["period"].to_list() == labels
    assert index.schema["period"] == frame.schema["period"]
    np.testing.assert_array_equal(
        index["index"].to_numpy(), tw.multilateral(panel(), "geks-tornqvist")["index"].to_numpy()
    )


@pytest.mark.parametrize(
    "labels", [["Nov 2023", "Dec 2023", "Jan 2024", "Feb 2024"], ["2023-8", "2023-9", "2023-10", "2023-11"]]
)
def test_text_that_does_not_sort_as_time_is_refused(labels: list[str]) -> None:
    # DESIGN section 6: a period is a date, YYYY-MM or an integer. Sorted as text these run backwards.
    with pytest.raises((BadPanel, CallError), match="period"):
        tw.bilateral(panel(labels), "jevons")


@pytest.mark.parametrize("by", ["ea", ["ea"], ("ea", "kind")])
def test_by_gives_one_series_for_each_group(by: Any) -> None:
    frame = two_groups().with_columns((pl.col("ea") == "tea").cast(pl.Int8).alias("kind"))
    index = tw.multilateral(frame, "geks-fisher", by=by)
    groups = [by] if isinstance(by, str) else list(by)
    assert index.columns == [*groups, *OUTPUT]
    assert index.schema["ea"] == pl.String
    alone = tw.multilateral(panel(), "geks-fisher")
    assert index.filter(pl.col("ea") == "tea").select(OUTPUT).equals(alone)


def test_a_group_that_starts_later_starts_at_100() -> None:
    index = tw.bilateral(two_groups(), "tornqvist", by="ea").filter(pl.col("ea") == "milk")
    assert index["period"].to_list() == MONTHS[1:]
    assert index["index"][0] == 100.0
    assert index["matched"].to_list() == [0, 3, 3]


def test_a_period_without_products_inside_a_group_has_no_index_and_is_stepped_over() -> None:
    holed = panel().filter(pl.col("period") != MONTHS[2]).with_columns(pl.lit("milk").alias("ea"))
    frame = pl.concat([panel().with_columns(pl.lit("tea").alias("ea")), holed])
    index = tw.bilateral(frame, "jevons", by="ea").filter(pl.col("ea") == "milk")
    assert index["period"].to_list() == MONTHS
    assert index["products"].to_list() == [2, 3, 0, 3]
    assert index["index"].is_null().to_list() == [False, False, True, False]


@pytest.mark.parametrize("method", [*BILATERAL_FORMULAS, *MULTILATERAL_METHODS])
def test_a_null_or_nan_price_means_not_sold(method: str) -> None:
    call = tw.bilateral if method in BILATERAL_FORMULAS else tw.multilateral
    dropped = panel().filter(pl.col("price").is_not_null())
    as_nan = panel().with_columns(pl.col("price").fill_null(float("nan")))
    assert call(panel(), method).equals(call(dropped, method))
    assert call(as_nan, method).equals(call(dropped, method))


@pytest.mark.parametrize("method", [*BILATERAL_FORMULAS, *MULTILATERAL_METHODS])
def test_the_order_of_rows_does_not_matter(method: str) -> None:
    call = tw.bilateral if method in BILATERAL_FORMULAS else tw.multilateral
    expected = call(two_groups(), method, by="ea")
    for seed in range(3):
        close(call(two_groups().sample(fraction=1, shuffle=True, seed=seed), method, by="ea"), expected, ORDER)


def test_polars_pandas_and_arrow_frames_give_the_same() -> None:
    frame = two_groups()
    expected = tw.multilateral(frame, "geks-tornqvist", window=3, by="ea")
    others = [
        frame.to_pandas(),
        frame.to_pandas().set_index(pd.Index(range(100, 100 + frame.height))),
        frame.to_pandas().astype({"product": "category"}),
        frame.to_arrow(),
        frame.lazy(),
    ]
    for other in others:
        index = tw.multilateral(other, "geks-tornqvist", window=3, by="ea")
        assert isinstance(index, pl.DataFrame)
        assert index.equals(expected)


def test_pandas_dates_and_integers_come_back_as_given() -> None:
    days = [date(2023, 11, 1), date(2023, 12, 1), date(2024, 1, 1), date(2024, 2, 1)]
    stamps = tw.bilateral(panel(days).to_pandas().assign(period=lambda f: pd.to_datetime(f["period"])), "jevons")
    assert [stamp.date() for stamp in stamps["period"]] == days
    assert tw.bilateral(panel([1, 2, 3, 4]).to_pandas(), "jevons")["period"].to_list() == [1, 2, 3, 4]


def test_columns_may_have_other_names_and_types() -> None:
    renamed = panel().select(
        pl.col("period").alias("month"),
        pl.col("product").alias("gtin"),
        pl.col("price").cast(pl.Decimal(18, 4)).alias("unit_value"),
        pl.col("quantity").cast(pl.Float32).alias("units"),
    )
    names = {"period": "month", "product": "gtin", "price": "unit_value", "quantity": "units"}
    found = tw.multilateral(renamed, "geks-fisher", **names)  # type: ignore[arg-type]
    close(found.rename({"month": "period"}), tw.multilateral(panel(), "geks-fisher"), ORDER)


def test_formulas_of_prices_alone_need_no_quantity() -> None:
    assert tw.bilateral(panel().drop("quantity"), "jevons").equals(tw.bilateral(panel(), "jevons"))
    with pytest.raises(MissingColumns, match="'quantity'"):
        tw.bilateral(panel().drop("quantity"), "fisher")


def test_the_callers_frame_is_left_as_it_was() -> None:
    frame = two_groups()
    before = frame.clone()
    tw.multilateral(frame, "geks-tornqvist", by="ea")
    assert frame.equals(before)


def test_import_loads_neither_prefect_nor_duckdb() -> None:
    code = "import sys, tillwright; print([m for m in ('prefect', 'duckdb') if m in sys.modules])"
    loaded = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert loaded.stdout.strip() == "[]"


@pytest.mark.parametrize("name", ["formula", "form", "method", "splice", "onto"])
def test_an_unknown_choice_is_told_with_those_allowed(name: str) -> None:
    allowed = {
        "formula": BILATERAL_FORMULAS,
        "form": FORMS,
        "method": MULTILATERAL_METHODS,
        "splice": SPLICES,
        "onto": ONTO,
    }
    calls: dict[str, Any] = {
        "formula": lambda: tw.bilateral(panel(), "nonesuch"),
        "form": lambda: tw.bilateral(panel(), "jevons", form="nonesuch"),  # type: ignore[arg-type]
        "method": lambda: tw.multilateral(panel(), "nonesuch"),
        "splice": lambda: tw.multilateral(panel(), "geks-fisher", splice="nonesuch"),  # type: ignore[arg-type]
        "onto": lambda: tw.multilateral(panel(), "geks-fisher", onto="nonesuch"),  # type: ignore[arg-type]
    }
    with pytest.raises(CallError, match="nonesuch") as told:
        calls[name]()
    assert all(choice in str(told.value) for choice in allowed[name])


@pytest.mark.parametrize("window", [1, 0, -3])
def test_a_window_below_two_periods_is_refused(window: int) -> None:
    with pytest.raises(CallError, match="window"):
        tw.multilateral(panel(), "geks-fisher", window=window)


@pytest.mark.parametrize("by", ["product", "period", "price", ["ea", "ea"]])
def test_a_column_with_two_parts_to_play_is_refused(by: Any) -> None:
    with pytest.raises(CallError):
        tw.bilateral(two_groups(), "jevons", by=by)


@pytest.mark.parametrize("name", ["index", "products", "matched"])
def test_a_by_column_named_like_a_column_of_the_result_is_refused(name: str) -> None:
    with pytest.raises(CallError, match=name):
        tw.bilateral(two_groups().rename({"ea": name}), "jevons", by=name)


@pytest.mark.parametrize("frame", ["a panel", 7, None, [1, 2]])
def test_what_is_not_a_frame_is_refused(frame: Any) -> None:
    with pytest.raises(CallError):
        tw.bilateral(frame, "jevons")


def test_unconnected_periods_are_named_with_their_group() -> None:
    apart = panel().with_columns(
        pl.when(pl.col("period") < "2024").then("product").otherwise(pl.col("product") + "2").alias("product"),
        pl.lit("milk").alias("ea"),
    )
    with pytest.raises(UnconnectedPeriods) as told:
        tw.multilateral(apart, "geks-tornqvist", by="ea")
    assert told.value.groups == (("2023-11", "2023-12"), ("2024-01", "2024-02"))
    assert all(part in str(told.value) for part in ("ea milk", *MONTHS))
    chained = tw.bilateral(apart, "jevons", by="ea")["index"]
    assert chained.is_null().to_list() == [False, False, True, True]
