"""Churn and lives against counts by hand, sets of what was sold, and what must hold on the sample."""

import itertools
from collections import defaultdict
from decimal import Decimal
from pathlib import Path
from typing import Any

import numpy as np
import polars as pl
import pytest

from tests.stages.small import COLUMNS, Row, feed, line, put, sections, write_plan
from tests.stages.test_successions import compiled as compiled_relaunches
from tillwright.stages.compiling import Compiled, Request, carry_out

SHARE = 1e-12
"""Sums of some hundred figures in float64, in another order."""
WEIGHTS = "year,heading,weight\n2023,M,60\n2023,S,40\n2024,M,60\n2024,S,40\n"


def sale(item: str, month: int, turnover: float | str, **more: Any) -> Row:
    return line(item=item, day=f"2024-{month:02d}-05", quantity="1", turnover=str(turnover), **more)


def compile_rows(folder: Path, rows: list[Row], *, link_month: int = 12, **changes: Any) -> Compiled:
    put(folder / "in/a.csv", rows)
    put(
        folder / "assignment.csv",
        "item,ea\n" + "".join(f"{item},M\n" for item in sorted({row["item"] for row in rows})),
    )
    put(folder / "weights.csv", WEIGHTS)
    plan = sections(changes.pop("feed", feed()), screening={"extreme": "off"}, **changes)
    plan["weights"] |= {"link_month": link_month}
    return carry_out(Request(write_plan(folder, plan)))


def read(made: Compiled, table: str) -> pl.DataFrame:
    return made.context.workspace.read(table)


def by_hand() -> list[Row]:
    """A always, B leaves after February, C enters in March, D in February and April."""
    sold = {"A": (1, 2, 3, 4, 5), "B": (1, 2), "C": (3, 4, 5), "D": (2, 4)}
    turnover = {"A": 10, "B": 5, "C": 6, "D": 4}
    return [sale(item, month, turnover[item]) for item, months in sold.items() for month in months]


def test_flows_and_shares_counted_by_hand(tmp_path: Path) -> None:
    churn = read(compile_rows(tmp_path, by_hand(), link_month=2), "churn")
    expected = {
        "products": [2, 3, 2, 3, 2],
        "continuing": [None, 2, 1, 2, 2],
        "entering": [None, 1, 1, 1, 0],
        "exiting": [None, 0, 2, 0, 1],
        "continuing_turnover": [None, 15.0, 10.0, 16.0, 16.0],
        "entering_turnover": [None, 4.0, 6.0, 4.0, 0.0],
        "exiting_turnover": [None, 0.0, 9.0, 0.0, 4.0],
        "matched_by_item": [None, 15 / 19, 10 / 16, 16 / 20, 1.0],
        "matched_by_product": [None, 15 / 19, 10 / 16, 16 / 20, 1.0],
        # Against February, the link month.
        "linked_by_item": [None, None, 10 / 16, 14 / 20, 10 / 16],
        "linked_by_product": [None, None, 10 / 16, 14 / 20, 10 / 16],
    }
    assert {name: churn[name].to_list() for name in expected} == expected
    assert set(churn["ea"]) == {"M"}


def test_lives_counted_by_hand(tmp_path: Path) -> None:
    lives = read(compile_rows(tmp_path, by_hand()), "lives")
    found = {row["product"].removeprefix("shop/"): row for row in lives.to_dicts()}
    months = {item: (row["first_period"].month, row["last_period"].month) for item, row in found.items()}
    assert months == {"A": (1, 5), "B": (1, 2), "C": (3, 5), "D": (2, 4)}
    lengths = {item: (row["length"], row["periods_sold"]) for item, row in found.items()}
    assert lengths == {"A": (5, 5), "B": (2, 2), "C": (3, 3), "D": (3, 2)}
    seen = {item: (row["begins"], row["ends"], row["complete"]) for item, row in found.items()}
    assert seen == {
        "A": (False, False, False),
        "B": (False, True, False),
        "C": (True, False, False),
        "D": (True, True, True),
    }


def test_a_life_is_censored_by_what_is_known_of_its_own_feed(tmp_path: Path) -> None:
    put(tmp_path / "late/a.csv", [sale("X", month, 3) for month in (2, 3, 4)])
    put(tmp_path / "assignment.csv", "item,ea\nA,M\nX,M\n")
    put(tmp_path / "in/a.csv", [sale("A", month, 10) for month in range(1, 6)])
    feeds = [feed(), feed(name="late", files="late/*")]
    made = carry_out(Request(write_plan(tmp_path, sections(*feeds, screening={"extreme": "off"}))))
    (row,) = read(made, "lives").filter(pl.col("product") == "late/X").to_dicts()
    assert (row["length"], row["begins"], row["ends"]) == (3, False, False)


def test_a_relaunch_is_matched_by_product_and_not_by_item(tmp_path: Path) -> None:
    # OLD gives way to NEW in April and NEW to NEWEST in July, 40.00 a month each, beside 20.00 and 30.00 that stay.
    churn = read(compiled_relaunches(tmp_path, successions={}), "churn")
    alone = [None, 1.0, 1.0, 50 / 90, 1.0, 1.0, 50 / 90, 1.0]
    assert churn["matched_by_item"].to_list() == alone
    assert churn["matched_by_product"].to_list() == [None, *[1.0] * 7]
    assert churn["entering"].to_list() == [None, *[0] * 7]
    lives = {
        row["product"]: row["length"] for row in read(compiled_relaunches(tmp_path, successions={}), "lives").to_dicts()
    }
    assert lives == {"shop/OLD": 8, "shop/OTHER": 8, "shop/STAYS": 8}


def test_what_returns_use_up_is_not_sold(tmp_path: Path) -> None:
    returned = line(item="B", day="2024-02-06", quantity="-1", turnover="-5")
    churn = read(compile_rows(tmp_path, [*by_hand(), returned]), "churn")
    assert churn["products"].to_list() == [2, 2, 2, 3, 2]
    assert churn["exiting"].to_list() == [None, 1, 1, 0, 1]
    assert churn["matched_by_item"].to_list() == [None, 10 / 14, 10 / 16, 16 / 20, 1.0]


def test_strata_have_churn_of_their_own_and_lives_run_over_all(tmp_path: Path) -> None:
    rows = [sale("A", month, 2, place="north" if month < 3 else "south") for month in range(1, 5)]
    rows += [sale("B", month, 2, place=place) for month in range(1, 5) for place in ("north", "south")]
    made = compile_rows(
        tmp_path,
        rows,
        feed=feed(columns=COLUMNS | {"region": "place"}),
        classification={"headings": "headings.csv", "assignment": "assignment.csv", "stratum": ["region"]},
    )
    churn = read(made, "churn")
    exits = {stratum: churn.filter(pl.col("stratum") == stratum)["exiting"].to_list() for stratum in ("north", "south")}
    assert exits == {"north": [None, 0, 1, 0], "south": [None, 0, 0, 0]}
    assert read(made, "lives")["length"].to_list() == [4, 4]


def test_a_random_market_has_the_churn_that_sets_of_what_was_sold_say(tmp_path: Path) -> None:
    rng = np.random.default_rng(11)
    brands = {f"I{number}": f"B{number % 7}" for number in range(30)}
    sold = {
        (item, month): Decimal(int(rng.integers(100, 9999))) / 100
        for item, month in itertools.product(brands, range(1, 9))
        if rng.random() < 0.4
    }
    put(tmp_path / "items.csv", "code,make\n" + "".join(f"{item},{brand}\n" for item, brand in brands.items()))
    master = {"feed": "shop", "file": "items.csv", "columns": {"item": "code", "brand": "make"}}
    rows = [sale(item, month, str(value)) for (item, month), value in sold.items()]
    made = compile_rows(tmp_path, rows, link_month=3, item_master=[master], products={"by": ["brand"]})
    found = read(made, "churn").to_dicts()
    units: dict[str, list[dict[str, float]]] = {}
    for name, unit_of in (("item", {item: item for item in brands}), ("product", brands)):
        months: list[dict[str, float]] = [defaultdict(float) for _ in range(9)]
        for (item, month), value in sold.items():
            months[month][unit_of[item]] += float(value)
        units[name] = months
    for month, row in enumerate(found, start=1):
        now, before = units["product"][month], units["product"][month - 1]
        assert row["products"] == len(now)
        if month > 1:
            went = (row["continuing"], row["entering"], row["exiting"])
            assert went == (
                len(now.keys() & before.keys()),
                len(now.keys() - before.keys()),
                len(before.keys() - now.keys()),
            )
            left = sum(value for unit, value in before.items() if unit not in now)
            assert row["exiting_turnover"] == pytest.approx(left, abs=SHARE * sum(before.values()))
        for name, months in units.items():
            for kind, earlier in (("matched", month - 1 or None), ("linked", 3 if month > 3 else None)):
                expected = None
                if earlier is not None:
                    both = sum(value for unit, value in months[month].items() if unit in months[earlier])
                    expected = pytest.approx(both / sum(months[month].values()), abs=SHARE)
                assert row[f"{kind}_by_{name}"] == expected


def test_the_link_month_reruns_churn_and_not_the_panel(tmp_path: Path) -> None:
    compile_rows(tmp_path, by_hand(), link_month=2)
    steps = {step.name: step.unchanged for step in compile_rows(tmp_path, by_hand(), link_month=3).steps}
    assert steps["panel"]
    assert not steps["churn"]


def test_the_sample_adds_up(sample: Compiled) -> None:
    churn = read(sample, "churn")
    later = churn.filter(pl.col("period") > churn["period"].min())
    assert (later["continuing"] + later["entering"] == later["products"]).all()
    priced = read(sample, "panel").filter(pl.col("price").is_not_null()).group_by("ea", "stratum", "period")
    counted = churn.join(priced.agg(pl.len(), pl.col("turnover").sum()), on=["ea", "stratum", "period"], how="left")
    assert (counted["products"] == counted["len"].fill_null(0)).all()
    counted = counted.filter(pl.col("period") > churn["period"].min())
    np.testing.assert_allclose(
        counted["continuing_turnover"] + counted["entering_turnover"], counted["turnover"].cast(pl.Float64), rtol=SHARE
    )
    shares = [name for name in churn.columns if name.startswith(("matched", "linked"))]
    assert len(shares) == 4
    for name in shares:
        assert churn[name].drop_nulls().is_between(0, 1).all()
        assert churn[name].drop_nulls().len() > 0
    # In the sample's plan an item is a product.
    for kind in ("matched", "linked"):
        assert churn[f"{kind}_by_item"].equals(churn[f"{kind}_by_product"].alias(f"{kind}_by_item"))


def test_lives_of_the_sample_begin_and_end_as_its_items_do(sample: Compiled) -> None:
    items = read(sample, "items").join(read(sample, "products"), on=["feed", "item"])
    lives = read(sample, "lives").join(items, on=["ea", "product"], how="left", suffix="_item")
    assert (lives["first_period"] >= lives["first_period_item"]).all()
    assert (lives["last_period"] <= lives["last_period_item"]).all()
    assert (lives["length"] >= lives["periods_sold"]).all()
    assert (lives["complete"] == (lives["begins"] & lives["ends"])).all()
    assert lives.height == read(sample, "panel").filter(pl.col("price").is_not_null()).n_unique(["ea", "product"])
