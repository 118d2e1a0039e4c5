"""Declared tables: keys, types, and what `conform` refuses."""

from dataclasses import FrozenInstanceError
from decimal import Decimal

import polars as pl
import pytest

from tillwright.errors import BrokenInvariant
from tillwright.tables import EXACT, TABLES, Table, conform

each_table = pytest.mark.parametrize("table", TABLES.values(), ids=lambda table: table.name)
ASSIGNED = {"feed": "shop", "item": "A", "product": "shop/A", "ea": "M", "units_per_item": 1.0}


@each_table
def test_key_is_made_of_columns_without_repetition(table: Table) -> None:
    assert set(table.key) <= set(table.columns)
    assert len(set(table.key)) == len(table.key) > 0


@each_table
def test_every_table_has_a_meaning_and_a_stage(table: Table) -> None:
    assert table.meaning
    assert 1 <= table.stage <= 8


@each_table
def test_tables_kept_by_delivery_say_which(table: Table) -> None:
    assert not table.by_delivery or "delivery" in table.columns


@each_table
def test_money_is_exact_up_to_the_panel(table: Table) -> None:
    money = {
        name: kind
        for name, kind in table.columns.items()
        if name.startswith(("turnover", "quantity")) and "ratio" not in name
    }
    assert table.stage > 4 or all(kind == EXACT for kind in money.values())


def test_catalogue_cannot_be_changed() -> None:
    with pytest.raises(TypeError):
        TABLES["more"] = TABLES["sales"]  # type: ignore[index]
    with pytest.raises(FrozenInstanceError):
        TABLES["sales"].key = ("item",)  # type: ignore[misc]


def test_conforming_frame_has_declared_order_and_types() -> None:
    rows = [ASSIGNED | {"item": "B", "units_per_item": 6}, ASSIGNED | {"units_per_item": 1}]
    frame = conform("products", pl.DataFrame(rows).select(reversed(list(ASSIGNED))))
    assert frame.schema == TABLES["products"].columns
    assert frame["item"].to_list() == ["A", "B"]


@pytest.mark.parametrize("odd", ["ea", "colour"])
def test_missing_and_surplus_columns_are_named(odd: str) -> None:
    frame = pl.DataFrame([ASSIGNED])
    frame = frame.drop(odd) if odd in ASSIGNED else frame.with_columns(pl.lit("red").alias(odd))
    with pytest.raises(BrokenInvariant, match=odd):
        conform("products", frame)


def test_repeated_key_is_a_broken_invariant() -> None:
    with pytest.raises(BrokenInvariant, match=r"key of products.*1 rows repeat a value of \(feed, item\)"):
        conform("products", pl.DataFrame([ASSIGNED, ASSIGNED | {"ea": "S"}]))


def test_null_in_a_key_counts_as_a_value() -> None:
    with pytest.raises(BrokenInvariant):
        conform("products", pl.DataFrame([ASSIGNED | {"item": None}] * 2, schema_overrides={"item": pl.String}))


def test_exact_sums_of_cents_keep_every_digit() -> None:
    frame = pl.DataFrame({name: [None] for name in TABLES["totals"].columns}).with_columns(
        pl.lit("a").alias("delivery"), pl.lit(Decimal("99999999999999999999.0001")).alias("turnover_received")
    )
    assert conform("totals", frame)["turnover_received"][0] == Decimal("99999999999999999999.0001")
