"""Relaunches in the compile: what joins items, in which units, and how decisions are followed."""

import json
from decimal import Decimal
from pathlib import Path
from typing import Any

import polars as pl
import pytest

from tests.stages.small import feed, line, put, sections, write_plan
from tillwright.errors import CallError
from tillwright.stages.compiling import Compiled, Request, carry_out
from tillwright.stages.deciding import decide, decisions_of
from tillwright.store.decisions import Decision, now, read_decisions, write_decisions
from tillwright.store.workspace import Workspace

ASSIGNMENT = "item,ea\nOLD,M\nNEW,M\nNEWEST,M\nSTAYS,M\nOTHER,M\n"
MASTER = {
    "feed": "shop",
    "file": "items.csv",
    "columns": {"item": "code", "description": "text", "brand": "make", "size": "pack"},
    "attributes": ["kind"],
}
ITEMS = (
    "code,text,make,pack,kind\n"
    "OLD,Galdera oat flakes,Galdera,500 g,oats\n"
    "NEW,Galdera oat flakes new,Galdera,450 g,oats\n"
    "NEWEST,Galdera oat flakes,Galdera,400 g,oats\n"
    "STAYS,Ombrel rye bread,Ombrel,1 kg,bread\n"
    "OTHER,Ombrel wheat bread,Ombrel,,bread\n"
)


def days(first: int, last: int) -> list[str]:
    return [f"2024-{month:02d}-05" for month in range(first, last + 1)]


def sold(item: str, first: int, last: int, price: str = "4.00", quantity: str = "10") -> list[dict[str, Any]]:
    turnover = str(Decimal(price) * Decimal(quantity))
    return [line(item=item, day=day, quantity=quantity, turnover=turnover) for day in days(first, last)]


def rows() -> list[dict[str, Any]]:
    """An item that is relaunched twice with less in the pack at its old price, and two that stay."""
    relaunched = [*sold("OLD", 1, 3), *sold("NEW", 4, 6), *sold("NEWEST", 7, 8)]
    return [*relaunched, *sold("STAYS", 1, 8, "2.00"), *sold("OTHER", 1, 8, "3.00")]


def compiled(folder: Path, **changes: Any) -> Compiled:
    put(folder / "in/a.csv", rows())
    put(folder / "items.csv", ITEMS)
    put(folder / "assignment.csv", ASSIGNMENT)
    plan = sections(feed(), item_master=[MASTER], screening={"extreme": "off"}, **changes)
    return carry_out(Request(write_plan(folder, plan)))


def table(made: Compiled, name: str) -> pl.DataFrame:
    return made.context.workspace.read(name)


def products(made: Compiled) -> dict[str, tuple[str, float]]:
    listed = table(made, "products").select("item", "product", "units_per_item").iter_rows()
    return {item: (product, units) for item, product, units in listed}


def decision(old: str, new: str, verdict: Any = "accepted", why: str = "seen") -> Decision:
    return Decision("shop", old, new, verdict, "desk", why, now())


def test_without_the_section_nothing_is_proposed_or_joined(tmp_path: Path) -> None:
    made = compiled(tmp_path)
    assert table(made, "successions").is_empty()
    assert products(made) == {item: (f"shop/{item}", 1.0) for item in ("OLD", "NEW", "NEWEST", "STAYS", "OTHER")}


def test_a_line_of_relaunches_is_one_product_in_units_of_its_first_pack(tmp_path: Path) -> None:
    made = compiled(tmp_path, successions={})
    joined = products(made)
    assert {item: joined[item][0] for item in ("OLD", "NEW", "NEWEST")} == dict.fromkeys(
        ("OLD", "NEW", "NEWEST"), "shop/OLD"
    )
    assert [joined[item][1] for item in ("OLD", "NEW", "NEWEST")] == pytest.approx([1.0, 0.9, 0.8])
    assert joined["STAYS"] == ("shop/STAYS", 1.0)
    # Less in the pack at the same price is a price rise: 4.00 for 450 g is 4.444 for 500 g.
    panel = table(made, "panel").filter(pl.col("product") == "shop/OLD").sort("period")
    assert panel["price"].to_list() == pytest.approx([4.0] * 3 + [4.0 / 0.9] * 3 + [5.0] * 2)
    assert panel["quantity"].to_list() == [Decimal(10)] * 3 + [Decimal(9)] * 3 + [Decimal(8)] * 2


def test_every_pair_keeps_its_evidence_and_who_decided(tmp_path: Path) -> None:
    made = compiled(tmp_path, successions={})
    found = {(row["old_item"], row["new_item"]): row for row in table(made, "successions").to_dicts()}
    assert set(found) == {("OLD", "NEW"), ("NEW", "NEWEST")}
    first = found["OLD", "NEW"]
    assert (first["ea"], first["status"], first["decided_by"], first["kind"]) == (
        "M",
        "accepted",
        "rule",
        "smaller pack",
    )
    assert (first["size_ratio"], first["price_ratio"], first["gap"]) == (pytest.approx(0.9), pytest.approx(1.0), 1)
    assert first["unit_price_ratio"] == pytest.approx(1 / 0.9)


def test_below_accept_a_pair_is_asked_about_and_joins_nothing(tmp_path: Path) -> None:
    made = compiled(tmp_path, successions={"accept": 1.0, "ask": 0.5})
    assert set(table(made, "successions")["status"]) == {"asked"}
    assert products(made)["NEW"] == ("shop/NEW", 1.0)


def test_the_last_decision_on_a_pair_is_followed_and_none_is_lost(tmp_path: Path) -> None:
    made = compiled(tmp_path, successions={})
    workspace = made.context.workspace
    decide(workspace, [decision("OLD", "NEW", "declined", "another recipe")])
    made = compiled(tmp_path, successions={})
    found = {(row["old_item"], row["new_item"]): row for row in table(made, "successions").to_dicts()}
    assert (found["OLD", "NEW"]["status"], found["OLD", "NEW"]["why"]) == ("declined", "another recipe")
    product, units = products(made)["NEWEST"]
    assert product == "shop/NEW"
    assert units == pytest.approx(400 / 450)
    decide(workspace, [decision("OLD", "NEW")])
    assert products(compiled(tmp_path, successions={}))["NEWEST"][0] == "shop/OLD"
    assert [one.verdict for one in decisions_of(workspace)] == ["declined", "accepted"]


def test_a_persons_pair_displaces_what_the_rule_would_accept(tmp_path: Path) -> None:
    made = compiled(tmp_path, successions={})
    decide(made.context.workspace, [decision("OLD", "NEWEST")])
    made = compiled(tmp_path, successions={})
    status = {(row["old_item"], row["new_item"]): row["status"] for row in table(made, "successions").to_dicts()}
    assert status == {("OLD", "NEWEST"): "accepted", ("OLD", "NEW"): "displaced", ("NEW", "NEWEST"): "displaced"}
    product, units = products(made)["NEWEST"]
    assert product == "shop/OLD"
    assert units == pytest.approx(0.8)
    assert products(made)["NEW"] == ("shop/NEW", 1.0)


def test_a_decision_recompiles_only_what_depends_on_it(tmp_path: Path) -> None:
    made = compiled(tmp_path, successions={})
    again = compiled(tmp_path, successions={})
    assert all(step.unchanged for step in again.steps)
    decide(made.context.workspace, [decision("OLD", "NEW", "declined")])
    steps = {step.name: step.unchanged for step in compiled(tmp_path, successions={}).steps}
    assert not steps["successions"]
    assert not steps["products"]
    assert steps["items"]
    assert steps["deliveries"]
    # One more word on a pair that the products do not follow changes the table of pairs and no more.
    decide(made.context.workspace, [decision("OLD", "NEW", "declined", "once more")])
    steps = {step.name: step.unchanged for step in compiled(tmp_path, successions={}).steps}
    assert not steps["successions"]
    assert steps["panel"]
    assert steps["aggregation"]


@pytest.mark.parametrize(
    ("decisions", "told"),
    [
        ([decision("OLD", "GONE")], "no item 'GONE'"),
        ([decision("OLD", "OLD")], "itself"),
        ([decision("OLD", "NEW"), decision("OLD", "NEWEST")], "would be continued by both"),
        ([decision("OLD", "NEWEST"), decision("NEW", "NEWEST")], "the continuation of both"),
    ],
)
def test_a_decision_that_cannot_stand_is_refused_whole(tmp_path: Path, decisions: list[Decision], told: str) -> None:
    workspace = compiled(tmp_path, successions={}).context.workspace
    with pytest.raises(CallError, match=told):
        decide(workspace, decisions)
    assert decisions_of(workspace) == []


def test_deciding_needs_a_compile(tmp_path: Path) -> None:
    with pytest.raises(CallError, match="compile the plan first"):
        decisions_of(Workspace(tmp_path))


def test_decisions_go_to_a_file_and_back(tmp_path: Path) -> None:
    taken = [decision("OLD", "NEW"), decision("NEW", "NEWEST", "declined", 'a "different" oat, truly')]
    write_decisions(taken, tmp_path / "decisions.csv")
    assert read_decisions(tmp_path / "decisions.csv") == taken


@pytest.mark.parametrize(
    ("text", "told"),
    [
        ("feed,old_item\na,b\n", "no column new_item"),
        ("feed,old_item,new_item,verdict,by,why\nshop,OLD,NEW,maybe,desk,x\n", "Line 2 .*'maybe'"),
        ("feed,old_item,new_item,verdict,by,why\nshop,OLD,NEW,accepted,,x\n", "Line 2 .*nothing in by"),
        ("feed,old_item,new_item,verdict,by,why,at\nshop,OLD,NEW,accepted,desk,x,soon\n", "Line 2 .*'soon'"),
    ],
)
def test_a_file_of_decisions_that_does_not_fit_is_refused_by_line(tmp_path: Path, text: str, told: str) -> None:
    put(tmp_path / "decisions.csv", text)
    with pytest.raises(CallError, match=told):
        read_decisions(tmp_path / "decisions.csv")


def test_products_by_attributes_of_columns_and_of_the_master(tmp_path: Path) -> None:
    made = compiled(tmp_path, products={"by": ["brand", "kind"]})
    assert {item: product for item, (product, _) in products(made).items()} == {
        **dict.fromkeys(("OLD", "NEW", "NEWEST"), "shop/Galdera/oats"),
        **dict.fromkeys(("STAYS", "OTHER"), "shop/Ombrel/bread"),
    }
    panel = table(made, "panel").filter(pl.col("product") == "shop/Ombrel/bread")
    assert panel["price"].to_list() == pytest.approx([2.5] * 8)


def test_an_item_that_lacks_an_attribute_stands_alone(tmp_path: Path) -> None:
    made = compiled(tmp_path, products={"by": ["brand", "size"]})
    assert products(made)["OTHER"] == ("shop/OTHER", 1.0)
    assert products(made)["STAYS"] == ("shop/Ombrel/1 kg", 1.0)


def test_unit_pricing_counts_contents(tmp_path: Path) -> None:
    made = compiled(tmp_path, products={"unit_pricing": True, "override": [{"heading": "M", "by": ["brand"]}]})
    assert products(made)["NEW"] == ("shop/Galdera by g", 450.0)
    assert products(made)["OTHER"] == ("shop/OTHER", 1.0)
    panel = table(made, "panel").filter(pl.col("product") == "shop/Galdera by g").sort("period")
    assert panel["price"].to_list() == pytest.approx([4 / 500] * 3 + [4 / 450] * 3 + [4 / 400] * 2)


def test_codes_of_restricted_circulation_are_joined_by_their_item_part(tmp_path: Path) -> None:
    # GS1: prefixes 20-29 are for restricted circulation; here five digits tell the item and five the price.
    codes = ("2112345001999", "2112345002507")
    lines = [row | {"item": code} for code, row in zip(codes * 4, sold("x", 1, 8), strict=True)]
    put(tmp_path / "in/a.csv", lines)
    put(tmp_path / "assignment.csv", f"item,ea\n{codes[0]},M\n{codes[1]},M\n")
    section = feed(item_part=r"21(?P<item>\d{5})\d{5}\d")
    made = carry_out(Request(write_plan(tmp_path, sections(section, screening={"extreme": "off"}))))
    assert {product for product, _ in products(made).values()} == {"shop/12345"}


def test_sizes_are_read_into_items(tmp_path: Path) -> None:
    items = {row["item"]: row for row in table(compiled(tmp_path), "items").to_dicts()}
    assert (items["STAYS"]["size_amount"], items["STAYS"]["size_measure"]) == (1000.0, "g")
    assert items["OTHER"]["size_amount"] is None
    assert json.loads(items["OLD"]["attributes"]) == {"kind": "oats"}


def test_a_pair_without_a_lead_over_its_rival_is_asked_about(tmp_path: Path) -> None:
    # Two new items of the same words, size and price arrive when one leaves: nothing tells which continues it.
    lines = [*sold("OLD", 1, 3), *sold("NEW", 4, 8), *sold("TWIN", 4, 8), *sold("STAYS", 1, 8, "2.00")]
    put(tmp_path / "in/a.csv", lines)
    twins = "".join(f"{code},Galdera oat flakes,Galdera,500 g,oats\n" for code in ("OLD", "NEW", "TWIN"))
    put(tmp_path / "items.csv", "code,text,make,pack,kind\n" + twins + "STAYS,Ombrel rye bread,Ombrel,1 kg,bread\n")
    put(tmp_path / "assignment.csv", ASSIGNMENT + "TWIN,M\n")
    plan = sections(feed(), item_master=[MASTER], screening={"extreme": "off"}, successions={})
    (row,) = table(carry_out(Request(write_plan(tmp_path, plan))), "successions").to_dicts()
    assert (row["status"], row["decided_by"]) == ("asked", None)
    assert row["score"] >= 0.9
    assert row["score"] - row["runner_up"] < 0.2


def test_a_description_that_many_items_share_identifies_none(tmp_path: Path) -> None:
    codes = [f"I{number}" for number in range(13)]
    lines = [row for number, code in enumerate(codes) for row in sold(code, 1 + 4 * (number % 2), 4 + 4 * (number % 2))]
    put(tmp_path / "in/a.csv", lines)
    rest = "".join(f"{code},Galdera oat flakes,Galdera,500 g,oats\n" for code in codes)
    put(tmp_path / "items.csv", "code,text,make,pack,kind\n" + rest)
    put(tmp_path / "assignment.csv", "item,ea\n" + "".join(f"{code},M\n" for code in codes))
    plan = sections(feed(), item_master=[MASTER], screening={"extreme": "off"}, successions={})
    assert table(carry_out(Request(write_plan(tmp_path, plan))), "successions").is_empty()
