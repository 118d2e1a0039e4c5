"""Unit values from several deliveries, strata and months: price = Σ turnover / Σ quantity (CPI Manual 2020, ch. 10)."""

from decimal import Decimal
from pathlib import Path
from typing import Any

import polars as pl
import pytest

from tests.stages.small import COLUMNS, feed, line, put, sections, write_plan
from tillwright.errors import CallError, DataError
from tillwright.stages.compiling import Request, carry_out

PRICE = 1e-12
"""One division of two decimals in float64."""


def panel_of(folder: Path, plan: dict[str, Any], through: str | None = None) -> pl.DataFrame:
    compiled = carry_out(Request(write_plan(folder, plan), through=through))
    return compiled.context.workspace.read("panel")


def test_deliveries_outlets_and_returns_of_a_month_make_one_unit_value(tmp_path: Path) -> None:
    put(tmp_path / "in/a.csv", [line(day="2024-01-05"), line(day="2024-01-06", outlet="2", turnover="2.50")])
    put(tmp_path / "in/b.csv", [line(day="2024-01-30", quantity="-1", turnover="-1.40"), line(day="2024-02-05")])
    rows = panel_of(tmp_path, sections()).select("product", "price", "quantity", "turnover", "lines").rows()
    assert rows == [
        ("shop/A", pytest.approx(4.10 / 3, rel=PRICE), Decimal(3), Decimal("4.10"), 3),
        ("shop/A", pytest.approx(1.5, rel=PRICE), Decimal(2), Decimal(3), 1),
    ]


def test_superseded_and_repeated_deliveries_make_no_price(tmp_path: Path) -> None:
    put(tmp_path / "in/a.csv", [line(turnover="100")])
    put(tmp_path / "in/late/a.csv", [line(turnover="4")])
    put(tmp_path / "in/late/again.csv", [line(turnover="4")])
    assert panel_of(tmp_path, sections())["price"].to_list() == [2.0]


def test_month_that_returns_use_up_keeps_its_row_without_a_price(tmp_path: Path) -> None:
    lines = [line(day="2024-01-05"), line(day="2024-02-05"), line(day="2024-02-06", quantity="-2", turnover="-3.00")]
    put(tmp_path / "in/a.csv", lines)
    panel = panel_of(tmp_path, sections())
    assert panel["price"].to_list() == [1.5, None]
    assert panel["lines"].to_list() == [1, 2]


def test_same_code_in_two_feeds_is_two_products(tmp_path: Path) -> None:
    put(tmp_path / "one/a.csv", [line()])
    put(tmp_path / "two/a.csv", [line(turnover="4.00")])
    feeds = [feed(name="one", files="one/*"), feed(name="two", files="two/*")]
    panel = panel_of(tmp_path, sections(*feeds))
    assert panel.select("product", "price").rows() == [("one/A", 1.5), ("two/A", 2.0)]


def test_strata_are_kept_apart_and_a_blank_one_is_kept(tmp_path: Path) -> None:
    regions = ["north", "south", "", "north"]
    put(tmp_path / "in/a.csv", [line(turnover=str(n), place=place) for n, place in enumerate(regions, start=1)])
    plan = sections(feed(columns=COLUMNS | {"region": "place"}))
    plan["classification"] |= {"stratum": ["feed", "region"]}
    panel = panel_of(tmp_path, plan)
    assert panel.select("stratum", "price").rows() == [("shop / ", 1.5), ("shop / north", 1.25), ("shop / south", 1.0)]


def test_panel_runs_from_the_start_of_the_plan_through_the_month_asked_for(tmp_path: Path) -> None:
    put(tmp_path / "in/a.csv", [line(day=f"{month}-05") for month in ("2023-12", "2024-01", "2024-02", "2024-03")])
    periods = panel_of(tmp_path, sections(), through="2024-02")["period"].cast(pl.String)
    assert periods.to_list() == ["2024-01-01", "2024-02-01"]
    assert panel_of(tmp_path, sections())["period"].len() == 3


def test_days_that_the_month_rule_leaves_out_make_no_price(tmp_path: Path) -> None:
    """1 March 2024 is a Friday: the first whole week starts on the 4th."""
    put(tmp_path / "in/a.csv", [line(day="2024-03-01", turnover="100"), line(day="2024-03-04")])
    scope = {"title": "W", "currency": "crown", "start": "2024-03", "month_rule": "whole-weeks"}
    assert panel_of(tmp_path, sections(plan=scope))["price"].to_list() == [1.5]


@pytest.mark.parametrize("through", ["2024", "2024-13", "2023-12", "2024-W03"])
def test_month_that_cannot_be_compiled_through_is_a_wrong_call(tmp_path: Path, through: str) -> None:
    put(tmp_path / "in/a.csv", [line()])
    with pytest.raises(CallError, match=through):
        panel_of(tmp_path, sections(), through=through)
    assert not (tmp_path / "work").exists()


@pytest.mark.parametrize("bad", [{"item": "unassigned"}, {"day": "2023-12-05"}, {"quantity": "0"}])
def test_nothing_to_compile_is_told_with_what_to_compare(tmp_path: Path, bad: dict[str, str]) -> None:
    put(tmp_path / "in/a.csv", [line(**bad)])
    with pytest.raises(DataError, match=r"plan\.start"):
        panel_of(tmp_path, sections())
