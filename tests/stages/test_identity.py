"""Items, products and unassigned sales from deliveries, masters and assignment; the plan's words are the source."""

from decimal import Decimal
from pathlib import Path
from typing import Any

import polars as pl
import pytest

from tests.stages.small import ASSIGNMENT, COLUMNS, feed, line, put, sections, write_plan
from tillwright.errors import PlanError
from tillwright.stages.compiling import Compiled, Request, carry_out

MASTER = {"feed": "shop", "file": "items.csv", "columns": {"item": "code", "description": "text"}}


def compile_plan(folder: Path, rows: list[dict[str, Any]], *, assignment: str = ASSIGNMENT, **changes: Any) -> Compiled:
    put(folder / "in/a.csv", rows)
    put(folder / "assignment.csv", assignment)
    plan = sections(changes.pop("feed", feed()), screening={"extreme": "off"}, **changes)
    return carry_out(Request(write_plan(folder, plan)))


def read(compiled: Compiled, table: str) -> pl.DataFrame:
    return compiled.context.workspace.read(table)


def two_periods(**changes: Any) -> list[dict[str, Any]]:
    """Lines of item B in two months, so that there is something to compile, then the line asked for."""
    return [line(item="B", day="2024-01-05"), line(item="B", day="2024-02-05"), line(**changes)]


def test_unassigned_items_are_accepted_and_kept_with_their_turnover(tmp_path: Path) -> None:
    compiled = compile_plan(tmp_path, two_periods(item="nobody's", turnover="7.65"))
    items = read(compiled, "items").join(read(compiled, "products"), on=["feed", "item"])
    unassigned = items.filter(pl.col("ea").is_null())
    assert unassigned.select("item", "lines", "turnover").rows() == [("nobody's", 1, Decimal("7.65"))]
    assert "shop/nobody's" not in read(compiled, "panel")["product"].to_list()


def test_lines_describe_items_and_the_master_goes_before(tmp_path: Path) -> None:
    put(tmp_path / "items.csv", "code,text,fat,more\nA,Whole milk,3.5,x\nZ,Never sold,,\n")
    lines = [row | {"words": "MLK", "group": "dairy"} for row in [*two_periods(), line()]]
    section = feed(columns=COLUMNS | {"description": "words", "category": "group"})
    compiled = compile_plan(tmp_path, lines, feed=section, item_master=[MASTER | {"attributes": ["fat"]}])
    items = {row["item"]: row for row in read(compiled, "items").to_dicts()}
    assert set(items) == {"A", "B"}
    assert items["A"]["description"] == "Whole milk"
    assert items["A"]["category"] == "dairy"
    assert items["A"]["attributes"] == '{"fat":"3.5"}'
    assert items["B"]["description"] == "MLK"
    assert items["B"]["attributes"] is None


def test_category_of_the_master_assigns_items(tmp_path: Path) -> None:
    put(tmp_path / "items.csv", "code,group\nA,dairy\nB,drinks\n")
    master = MASTER | {"columns": {"item": "code", "category": "group"}}
    compiled = compile_plan(
        tmp_path, two_periods(), assignment="feed,category,ea\n,dairy,M\nshop,drinks,S\n", item_master=[master]
    )
    assert dict(read(compiled, "products").select("item", "ea").rows()) == {"A": "M", "B": "S"}


def test_life_of_an_item_runs_from_its_first_to_its_last_sale(tmp_path: Path) -> None:
    compiled = compile_plan(tmp_path, [line(day=day) for day in ("2024-04-05", "2024-02-05", "2024-03-05")])
    (item,) = read(compiled, "items").to_dicts()
    assert (str(item["first_period"]), str(item["last_period"]), item["lines"]) == ("2024-02-01", "2024-04-01", 3)


@pytest.mark.parametrize(
    ("master", "text", "problem"),
    [
        (MASTER, "code,other\nA,x\n", "text"),
        (MASTER | {"attributes": ["fat"]}, "code,text\nA,x\n", "fat"),
        (MASTER, "code,text\nA,x\nA,y\n", "repeat"),
    ],
)
def test_master_that_does_not_fit_is_told_before_any_data_are_read(
    tmp_path: Path, master: dict[str, Any], text: str, problem: str
) -> None:
    put(tmp_path / "items.csv", text)
    with pytest.raises(PlanError, match=problem):
        compile_plan(tmp_path, two_periods(), item_master=[master])
    assert not (tmp_path / "work").exists()
