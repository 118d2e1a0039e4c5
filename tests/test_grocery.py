"""Open grocery data as real input; expected figures are those of issue 2, by an independent loop implementation."""

from datetime import date
from decimal import Decimal

import numpy as np
import polars as pl
import pytest

import tillwright as tw
from tests.grocery.builder import data_folder, slug
from tillwright.stages.compiling import Compiled

# The issue gives its figures to six decimals and asks for agreement to 1e-6.
GIVEN_DIGITS = 1e-6
# Sums of up to some thousand products in another order.
SAME_FIGURE = 1e-9
# Twenty amounts in the file are left-overs of binary subtraction, 5e-17 to 2e-15, where 0 is meant.
RESIDUE = 1e-9
DECEMBER = date(2017, 12, 1)
MILK, DRINKS = slug("FLUID MILK PRODUCTS"), slug("SOFT DRINKS")


@pytest.fixture(scope="module")
def lines() -> pl.DataFrame:
    columns = ["product_id", "quantity", "sales_value", "transaction_timestamp"]
    local = pl.col("transaction_timestamp").dt.replace_time_zone("UTC").dt.convert_time_zone("America/New_York")
    categories = pl.read_parquet(data_folder() / "products.parquet", columns=["product_id", "product_category"])
    return (
        pl.read_parquet(data_folder() / "transactions.parquet", columns=columns)
        .with_columns(local.dt.strftime("%Y-%m").alias("month"))
        .join(categories, on="product_id", how="left")
    )


def test_every_line_is_accepted_or_refused(grocery: Compiled) -> None:
    (delivery,) = grocery.context.workspace.read("deliveries").iter_rows(named=True)
    assert delivery["lines_received"] == 1_469_307
    assert delivery["lines_refused"] == 11_275
    assert delivery["lines_accepted"] == 1_469_307 - 11_275
    assert delivery["turnover_received"] == delivery["turnover_accepted"] + delivery["turnover_refused"]


def test_refused_lines_break_the_rules_that_they_are_said_to_break(grocery: Compiled) -> None:
    # The issue counts 49 with no positive quantity only, 2 406 with no positive turnover only and 8 820 with
    # neither, comparing binary floats with 0. Twenty of the 49 carry a turnover of 5e-17 to 2e-15; read as exact
    # decimals these are 0, so that 29 and 8 840 come out here. The total is the same.
    workspace = grocery.context.workspace
    refused = pl.read_parquet(workspace.parts("refused", grocery.context.active_deliveries()))
    counted = {(rule, also): count for rule, also, count in refused.group_by("rule", "also").len().iter_rows()}
    assert counted == {
        ("quantity-not-positive", ""): 49 - 20,
        ("turnover-not-positive", ""): 2_406,
        ("quantity-not-positive", "turnover-not-positive"): 8_820 + 20,
    }


def test_the_difference_to_the_issue_is_twenty_float_residues(lines: pl.DataFrame) -> None:
    no_units = pl.col("quantity") <= 0
    only = lines.filter(no_units, pl.col("sales_value") > 0)
    residues = only.filter(pl.col("sales_value") < RESIDUE)["sales_value"]
    assert (only.height, len(residues)) == (49, 20)
    assert lines.filter(no_units, pl.col("sales_value") <= 0).height == 8_820
    assert lines.filter(~no_units, pl.col("sales_value") <= 0).height == 2_406


def test_lines_without_a_category_are_accepted_and_counted_as_unassigned(grocery: Compiled) -> None:
    workspace = grocery.context.workspace
    unassigned = workspace.read("products").filter(pl.col("ea").is_null())
    left = workspace.read("items").join(unassigned, on=["feed", "item"], how="semi")
    assert left["lines"].sum() == 2_190
    assert left["turnover"].sum() == Decimal("7656.36")


def test_the_panel_has_the_unit_values_of_local_months(grocery: Compiled, lines: pl.DataFrame) -> None:
    panel = grocery.context.workspace.read("panel")
    assert panel.height == 285_790
    assert panel["price"].null_count() == 0
    good = lines.filter(
        pl.col("quantity") > 0, pl.col("sales_value") > RESIDUE, pl.col("product_category").is_not_null()
    )
    expected = good.group_by("product_id", "month").agg(
        (pl.col("sales_value").sum() / pl.col("quantity").sum()).alias("expected")
    )
    items = grocery.context.workspace.read("products").select(
        "product", pl.col("item").cast(pl.Int64).alias("product_id")
    )
    found = panel.with_columns(pl.col("period").dt.strftime("%Y-%m").alias("month")).join(items, on="product")
    both = found.join(expected, on=["product_id", "month"], how="full")
    assert both.height == 285_790
    assert both.select((pl.col("price") / pl.col("expected") - 1).abs().max()).item() <= SAME_FIGURE


@pytest.mark.parametrize(("aggregate", "expected"), [(MILK, 98.362642), (DRINKS, 100.757383)])
def test_geks_tornqvist_ends_at_the_independent_figure(grocery: Compiled, aggregate: str, expected: float) -> None:
    series = grocery.context.workspace.read("ea_indexes").filter(pl.col("ea") == aggregate)
    assert series["level"][0] == 100.0
    assert series["level"].len() == 12
    assert series.filter(pl.col("period") == DECEMBER)["level"].item() == pytest.approx(expected, abs=GIVEN_DIGITS)


@pytest.mark.parametrize(("aggregate", "expected"), [(MILK, 98.765934), (DRINKS, 102.473103)])
def test_chained_jevons_ends_at_the_independent_figure(grocery: Compiled, aggregate: str, expected: float) -> None:
    panel = grocery.context.workspace.read("panel").filter(pl.col("ea") == aggregate)
    index = tw.bilateral(panel, "jevons", form="chained")
    assert index["index"][0] == 100.0
    assert index["index"][-1] == pytest.approx(expected, abs=GIVEN_DIGITS)


def test_functions_for_researchers_give_the_compiled_figures(grocery: Compiled) -> None:
    workspace = grocery.context.workspace
    panel = workspace.read("panel").filter(pl.col("ea").is_in([MILK, DRINKS]))
    index = tw.multilateral(panel, "geks-tornqvist", window=12, by="ea").sort("ea", "period")
    compiled = workspace.read("ea_indexes").filter(pl.col("ea").is_in([MILK, DRINKS])).sort("ea", "period")
    assert index["ea", "period"].equals(compiled["ea", "period"])
    np.testing.assert_allclose(index["index"].to_numpy(), compiled["level"].to_numpy(), rtol=SAME_FIGURE)
    assert index["matched"].to_list() == compiled["matched"].to_list()


def test_aggregates_without_an_index_are_told_and_the_others_are_made(grocery: Compiled) -> None:
    workspace = grocery.context.workspace
    failures, indexes = workspace.read("failures"), workspace.read("ea_indexes")
    gaps = set(indexes.filter(pl.col("level").is_null())["ea"])
    assert gaps
    assert set(failures["ea"]) == gaps | (set(workspace.read("panel")["ea"]) - set(indexes["ea"]))
    assert failures.filter(pl.col("message").str.contains("no product in common|no level in")).height == failures.height


def test_headings_add_up_over_all_categories(grocery: Compiled) -> None:
    headings = grocery.context.workspace.read("headings")
    weights = headings.filter(pl.col("parent") != "").group_by("period").agg(pl.col("weight").sum())
    np.testing.assert_allclose(weights["weight"].to_numpy(), 1.0, rtol=SAME_FIGURE)
    top = headings.filter(pl.col("parent") == "").sort("period")
    assert top["index"][0] == 100.0
    assert top["index"].null_count() == 0
