"""The bridge from frames to arrays, and what it refuses."""

import numpy as np
import polars as pl
import pytest

from tillwright.errors import BadPanel, MissingColumns
from tillwright.panels import PanelArrays, to_arrays


def arrays(frame: pl.DataFrame, *, by: tuple[str, ...] = ("ea",), value: str | None = "quantity") -> PanelArrays:
    return to_arrays(frame, by=by, product="product", period="period", price="price", value=value)


def random_frame(seed: int) -> pl.DataFrame:
    """Groups of different sizes over seven periods, in random order, some rows unpriced."""
    rng = np.random.default_rng(seed)
    rows = [
        {
            "ea": f"ea{group}",
            "product": f"p{product}",
            "period": period,
            "price": None if rng.random() < 0.1 else float(rng.uniform(1, 9)),
            "quantity": int(rng.integers(1, 50)),
        }
        for group in range(4)
        for product in range(int(rng.integers(1, 6)))
        for period in range(7)
        if rng.random() < 0.6
    ]
    return pl.DataFrame(rows).sample(fraction=1, shuffle=True, seed=seed)


@pytest.mark.parametrize("seed", range(5))
def test_every_priced_row_stands_in_its_cell_and_nothing_else_does(seed: int) -> None:
    frame = random_frame(seed)
    coded = arrays(frame)
    priced = frame.filter(pl.col("price").is_not_null())
    assert coded.periods.to_list() == sorted(set(priced["period"]))
    assert coded.keys["ea"].to_list() == sorted(set(priced["ea"]))
    for block in coded:
        own = priced.filter(pl.col("ea") == block.key[0])
        names = sorted(set(own["product"]))
        prices = np.full((len(coded.periods), len(names)), np.nan)
        quantities = np.full_like(prices, np.nan)
        for product, period, price, quantity in own.select("product", "period", "price", "quantity").iter_rows():
            cell = coded.periods.to_list().index(period), names.index(product)
            prices[cell], quantities[cell] = price, quantity
        assert block.values is not None
        np.testing.assert_array_equal(block.prices, prices)
        np.testing.assert_array_equal(block.values, quantities)


def test_arrays_do_not_depend_on_the_order_of_rows() -> None:
    frame = random_frame(1)
    one, other = arrays(frame), arrays(frame.reverse())
    np.testing.assert_array_equal(one.prices, other.prices)
    assert one.keys.equals(other.keys)


def test_without_by_there_is_one_block() -> None:
    frame = random_frame(2).filter(pl.col("ea") == "ea0")
    (block,) = arrays(frame, by=())
    assert block.key == ()
    np.testing.assert_array_equal(block.prices, next(iter(arrays(frame))).prices)


def test_given_periods_decide_the_rows_and_keep_others_out() -> None:
    frame = pl.DataFrame({"product": ["a"] * 3, "period": [1, 2, 3], "price": [1.0, 2.0, 3.0]})
    periods = pl.Series("period", [2, 3, 4])
    (block,) = to_arrays(frame, by=(), product="product", period="period", price="price", value=None, periods=periods)
    np.testing.assert_array_equal(block.prices, [[2.0], [3.0], [np.nan]])
    assert block.values is None


def test_the_same_product_in_two_groups_is_two_columns() -> None:
    frame = pl.DataFrame({"ea": ["x", "y"], "product": ["a", "a"], "period": [1, 1], "price": [1.0, 2.0]})
    assert [block.prices.tolist() for block in arrays(frame, value=None)] == [[[1.0]], [[2.0]]]


def test_a_price_without_a_sale_stays() -> None:
    (block,) = arrays(pl.DataFrame({**GOOD, "quantity": [1.0, 0.0, 1.0]}))
    assert block.values is not None
    np.testing.assert_array_equal(block.values, [[1.0, 0.0], [1.0, np.nan]])


GOOD = {
    "ea": ["x"] * 3,
    "product": ["a", "b", "a"],
    "period": [1, 1, 2],
    "price": [1.0, 2.0, 3.0],
    "quantity": [1.0] * 3,
}


@pytest.mark.parametrize(
    ("column", "values", "told"),
    [
        ("price", [1.0, -2.0, 3.0], "'price' .*1 of 3.*product b"),
        ("price", [1.0, 0.0, 3.0], "'price'"),
        ("price", [1.0, float("inf"), 3.0], "'price'"),
        ("price", ["1", "2", "3"], "'price'.*not numbers"),
        ("price", ["1.00", "n/a", "3"], "'price'.*not numbers"),
        ("price", [True, True, True], "'price'.*not numbers"),
        ("quantity", [1.0, -1.0, 1.0], "'quantity'"),
        ("quantity", [1.0, None, 1.0], "'quantity'"),
        ("quantity", [1.0, float("nan"), 1.0], "'quantity'"),
        ("product", ["a", None, "a"], "'product'"),
        ("period", [1, None, 2], "'period'"),
        ("ea", ["x", None, "x"], "'ea'"),
        ("product", ["a", "a", "a"], "more than once in a period.*product a"),
    ],
)
def test_a_panel_that_no_index_can_be_made_of_is_refused(column: str, values: list[object], told: str) -> None:
    frame = pl.DataFrame(GOOD).with_columns(pl.Series(column, values, strict=False))
    with pytest.raises(BadPanel, match=told):
        arrays(frame)


def test_figures_of_rows_that_are_not_sold_are_not_looked_at() -> None:
    frame = pl.DataFrame({**GOOD, "price": [1.0, None, 3.0], "quantity": [1.0, -5.0, 1.0], "product": ["a", None, "a"]})
    (block,) = arrays(frame)
    np.testing.assert_array_equal(block.prices, [[1.0], [3.0]])


def test_missing_columns_are_named_together_with_those_present() -> None:
    with pytest.raises(MissingColumns) as told:
        arrays(pl.DataFrame({"product": ["a"], "cost": [1.0]}))
    assert told.value.missing == ("ea", "period", "price", "quantity")
    assert told.value.present == ("product", "cost")
    assert "'cost'" in str(told.value)


def test_an_empty_panel_has_no_groups() -> None:
    empty = arrays(pl.DataFrame(GOOD).clear())
    assert list(empty) == []
    assert empty.cuts == []
