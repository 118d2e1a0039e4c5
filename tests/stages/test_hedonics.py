"""Aggregates that a plan adjusts for quality: the same as the function on the same rows, and what goes wrong."""

import json
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import polars as pl
import pytest

import tillwright as tw
from tests.stages.plans import problems
from tests.stages.small import Table, feed, line, put, sections, write_plan
from tillwright.panels import to_arrays
from tillwright.stages.compiling import Compiled, Request, carry_out
from tillwright.stages.hedonics import find_adjustments

SAME = 1e-12
"""The same kernels on the same rows, columns of the design in the same order."""
SPLICED = 1e-9
"""The same windows, put together by hand."""
MONTHS = 8
FAT, ORGANIC = 0.02, 0.3
HEADINGS = "heading,parent,label\n0,,All items\nF,0,Food\nM,F,Milk\nS,F,Soft drinks\n"
WEIGHTS = "year,heading,weight\n2024,M,60\n2024,S,40\n"
MASTER = {
    "feed": "shop",
    "file": "items.csv",
    "columns": {"item": "code", "brand": "make", "size": "pack", "category": "group"},
    "attributes": ["fat", "organic"],
}
MILK: Table = {"numeric": ["fat"], "logs": ["size"], "categorical": ["organic"]}


@dataclass(frozen=True, slots=True)
class Item:
    """An item, its attributes and the months in which it is sold."""

    code: str
    group: str
    fat: str
    organic: str
    grams: int
    first: int
    last: int


def items(seed: int = 5, milk: int = 60) -> list[Item]:
    """Milk that comes and goes, a few without fat told; and five soft drinks."""
    rng = np.random.default_rng(seed)
    made = []
    for number in range(milk + 5):
        first = int(rng.integers(-3, MONTHS - 1))
        fat = "" if number % 20 == 7 else str(round(float(rng.uniform(0, 40)), 1))
        organic, grams = ("yes", "no")[number % 3 == 0], int(rng.choice([250, 500, 1000]))
        last = min(first + int(rng.integers(2, 7)), MONTHS - 1)
        if number < milk:
            made.append(Item(f"M{number}", "milk", fat, organic, grams, max(first, 0), last))
        else:
            made.append(Item(f"S{number}", "soft", "", "no", 500, 0, MONTHS - 1))
    return made


def lines(listed: list[Item], seed: int = 6) -> list[Table]:
    rng = np.random.default_rng(seed)
    rows = []
    for item in listed:
        quality = (
            0.5
            + FAT * (float(item.fat) if item.fat.replace(".", "").isdigit() else 10.0)
            + ORGANIC * (item.organic == "yes")
            + np.log(item.grams / 500)
        )
        for month in range(item.first, item.last + 1):
            price, quantity = float(np.exp(quality + 0.01 * month + rng.normal(0, 0.1))), int(rng.integers(5, 50))
            day, turnover = f"2024-{month + 1:02d}-05", f"{price * quantity:.2f}"
            rows.append(line(item=item.code, day=day, quantity=str(quantity), turnover=turnover))
    return rows


def lay(folder: Path, listed: list[Item] | None = None) -> None:
    """The deliveries and small files of the plan."""
    listed = listed or items()
    put(folder / "in/a.csv", lines(listed))
    table = [(item.code, "Ombrel", f"{item.grams} g", item.group, item.fat, item.organic) for item in listed]
    rows = "".join(",".join(row) + "\n" for row in table)
    put(folder / "items.csv", "code,make,pack,group,fat,organic\n" + rows)
    put(folder / "headings.csv", HEADINGS)
    put(folder / "weights.csv", WEIGHTS)
    put(folder / "assignment.csv", "category,ea\nmilk,M\nsoft,S\n")


def plan(*hedonic: Table, **changes: Any) -> Table:
    return sections(feed(), item_master=[MASTER], hedonic=list(hedonic), **changes)


def compiled(folder: Path, *hedonic: Table, through: str | None = None, **changes: Any) -> Compiled:
    return carry_out(Request(write_plan(folder, plan(*hedonic, **changes)), through=through))


def table(made: Compiled, name: str) -> pl.DataFrame:
    return made.context.workspace.read(name)


def levels(made: Compiled, ea: str = "M") -> list[float | None]:
    return table(made, "ea_indexes").filter(pl.col("ea") == ea).sort("period")["level"].to_list()


def rows_of(made: Compiled, ea: str = "M") -> pl.DataFrame:
    """The kept rows of an aggregate with the attributes of the items, read from the item master by other means."""
    kept = table(made, "screened").filter(pl.col("verdict") == "kept", pl.col("ea") == ea)
    known = [
        {
            "product": f"shop/{row['item']}",
            "fat": float(json.loads(row["attributes"])["fat"] or "nan"),
            "organic": json.loads(row["attributes"])["organic"],
            "size": float(row["size"].removesuffix(" g")),
        }
        for row in table(made, "items").to_dicts()
    ]
    return kept.join(pl.DataFrame(known), on="product").select(
        "period", "product", "price", "quantity", "fat", "organic", "size"
    )


@pytest.mark.parametrize(
    "settings",
    [
        {"method": "geks-imputation"},
        {"method": "geks-imputation", "regressions": "pooled", "weighted": False},
        {"method": "time-dummy", "missing": "leave-out"},
        {"method": "time-dummy", "weighted": False, "least": 5},
    ],
    ids=str,
)
def test_compiled_index_is_that_of_the_function_on_the_same_rows(tmp_path: Path, settings: dict[str, Any]) -> None:
    lay(tmp_path)
    made = compiled(tmp_path, {"heading": "M", "least": 5, **MILK, **settings})
    expected = tw.hedonic(rows_of(made), **MILK, **{"least": 5, **settings})
    assert levels(made) == pytest.approx(expected.indexes["index"].to_list(), rel=SAME)
    assert table(made, "failures").is_empty()
    one = table(made, "hedonic_fit")
    for name in ("observations", "left_out", "unpredicted", "parameters", "degrees_of_freedom", "dropped"):
        assert one[name].to_list() == expected.fit[name].to_list()
    assert one["adjusted_r2"].to_list() == pytest.approx(expected.fit["adjusted_r2"].to_list(), rel=SPLICED)
    assert one["left_out"].sum() > 0
    by = ["period", "name"] if "period" in expected.coefficients.columns else ["name"]
    found = table(made, "hedonic_coefficients").sort(by)
    told = expected.coefficients.sort(by)
    assert found["name"].to_list() == told["name"].to_list()
    for name in ("coefficient", "standard_error", "t"):
        assert found[name].to_list() == pytest.approx(told[name].to_list(), rel=SPLICED)


def test_the_method_is_named_and_other_aggregates_are_compiled_as_before(tmp_path: Path) -> None:
    lay(tmp_path)
    plain = levels(compiled(tmp_path), "S")
    made = compiled(tmp_path, {"heading": "M", "least": 5, **MILK})
    assert levels(made, "S") == plain
    methods = dict(table(made, "ea_indexes").select("ea", "method").unique().iter_rows())
    assert methods == {
        "M": "hedonic geks-imputation, window 25, mean splice onto published",
        "S": "geks-tornqvist, window 25, mean splice onto published",
    }
    assert set(table(made, "hedonic_fit")["ea"]) == set(table(made, "hedonic_coefficients")["ea"]) == {"M"}
    top = table(made, "headings").filter(pl.col("heading") == "0").sort("period")["index"]
    parts = np.array([levels(made), levels(made, "S")], dtype=np.float64)
    assert top.to_list() == pytest.approx((np.array([60, 40]) @ parts / 100).tolist(), rel=SPLICED)


def test_without_the_section_the_tables_are_empty(tmp_path: Path) -> None:
    lay(tmp_path)
    made = compiled(tmp_path)
    assert table(made, "hedonic_fit").is_empty()
    assert table(made, "hedonic_coefficients").is_empty()


@pytest.mark.parametrize("method", ["time-dummy", "geks-imputation"])
def test_windows_and_splices_are_those_of_the_index_whatever_its_method(tmp_path: Path, method: Any) -> None:
    # Movement splice (Ivancic, Diewert & Fox 2011): what the window that ends in t says of t against t − 1.
    lay(tmp_path)
    index = {"method": "jevons", "window": 5, "splice": "movement"}
    made = compiled(tmp_path, {"heading": "M", "method": method, "least": 5, **MILK}, index=index)
    rows = rows_of(made)
    months = rows["period"].unique().sort().to_list()
    expected: list[float] = []
    for end in range(5, MONTHS + 1):
        window = rows.filter(pl.col("period").is_in(months[end - 5 : end]))
        part = tw.hedonic(window, method, least=5, **MILK).indexes["index"].to_list()
        expected = part if end == 5 else [*expected, expected[-1] * part[-1] / part[-2]]
    assert levels(made) == pytest.approx(expected, rel=SPLICED)
    spans = table(made, "hedonic_fit")["period"].to_list()
    assert spans == (months if method == "geks-imputation" else months[4:])


def test_further_months_do_not_change_what_was_spliced(tmp_path: Path) -> None:
    lay(tmp_path)
    index = {"window": 4, "splice": "half"}
    for method in ("time-dummy", "geks-imputation"):
        choice = {"heading": "M", "method": method, "least": 5, **MILK}
        early = levels(compiled(tmp_path, choice, through="2024-06", index=index))
        assert levels(compiled(tmp_path, choice, index=index))[:6] == pytest.approx(early, rel=SPLICED)


def test_a_heading_speaks_for_what_is_below_it_and_the_nearest_wins(tmp_path: Path) -> None:
    lay(tmp_path)
    far = {"heading": "F", "method": "time-dummy", "categorical": ["brand"], "least": 2}
    made = compiled(tmp_path, far, {"heading": "M", "least": 5, **MILK})
    methods = dict(table(made, "ea_indexes").select("ea", "method").unique().iter_rows())
    assert methods["S"].startswith("hedonic time-dummy")
    assert methods["M"].startswith("hedonic geks-imputation")


def test_an_aggregate_that_fails_is_told_and_the_others_go_on(tmp_path: Path) -> None:
    lay(tmp_path)
    made = compiled(tmp_path, {"heading": "F", "least": 6, **MILK})
    failed = table(made, "failures")
    assert failed["ea"].to_list() == ["S"]
    assert failed["message"][0].startswith("No hedonic regression can be made for S in period 2024-01")
    assert failed["message"][0].endswith(f" {MONTHS - 1} more of its periods or windows fail likewise.")
    assert levels(made, "S") == []
    assert None not in levels(made)
    top = table(made, "headings").filter(pl.col("heading") == "0").sort("period")["index"]
    assert top.to_list() == pytest.approx(levels(made), rel=SPLICED)


def test_a_thin_month_is_blank_and_told(tmp_path: Path) -> None:
    lay(tmp_path)
    made = compiled(tmp_path, {"heading": "M", "least": 5, **MILK})
    priced = table(made, "hedonic_fit")["observations"].to_list()
    least = min(priced) + 1
    thin = [month for month, count in enumerate(priced) if count < least]
    assert 0 < len(thin) < MONTHS
    blank = compiled(tmp_path, {"heading": "M", **MILK, "least": least})
    assert [month for month, level in enumerate(levels(blank)) if level is None] == thin
    assert table(blank, "failures")["message"][0].count(f"in period 2024-{thin[0] + 1:02d}") == 1
    expected = tw.hedonic(rows_of(blank), "geks-imputation", thin="blank", least=least, **MILK).indexes["index"]
    found = pl.Series(levels(blank))
    assert found.is_null().equals(expected.is_null())
    assert found.drop_nulls().to_list() == pytest.approx(expected.drop_nulls().to_list(), rel=SAME)


def test_attributes_are_those_of_the_latest_item_and_sizes_those_priced(tmp_path: Path) -> None:
    old = Item("M0", "milk", "3.5", "no", 500, 0, 3)
    new = Item("M1", "milk", "1.5", "yes", 400, 3, 5)
    lay(tmp_path, [old, new, Item("M2", "milk", "n/a", "no", 250, 0, 7), *items()[-5:]])
    made = compiled(tmp_path, {"heading": "M", "least": 5, "numeric": ["fat", "size"], "categorical": ["organic"]})
    # As an accepted succession leaves it: the new pack is 0.8 of the old one, whose product it continues.
    joined = pl.col("item").is_in(["M0", "M1"])
    products = table(made, "products").with_columns(
        pl.when(joined).then(pl.lit("shop/M0")).otherwise("product").alias("product"),
        pl.when(pl.col("item") == "M1").then(0.8).otherwise("units_per_item").alias("units_per_item"),
    )
    made.context.workspace.write("products", products)
    kept = table(made, "screened").filter(pl.col("product") != "shop/M1")
    arrays = to_arrays(
        kept,
        by=("ea", "stratum"),
        product="product",
        period="period",
        price="price",
        value="quantity",
        periods=made.context.periods()["period"],
    )
    milk, soft = find_adjustments(made.context, arrays)
    assert soft is None
    assert milk is not None
    assert milk.design.names == ("fat", "size", "organic=yes")
    # "n/a" is no number, so that product is left out.
    np.testing.assert_allclose(milk.design.columns, [[1.5, 500.0, 1.0], [np.nan] * 3])


def test_only_what_it_rests_on_compiles_it_again(tmp_path: Path) -> None:
    lay(tmp_path)
    choice = {"heading": "M", "least": 5, **MILK}
    compiled(tmp_path, choice)
    assert all(step.unchanged for step in compiled(tmp_path, choice).steps)
    path = tmp_path / "items.csv"
    text = path.read_text(encoding="utf-8")
    path.write_text(text.replace(",yes\n", ",no\n", 4), encoding="utf-8")
    again = {step.name: step.unchanged for step in compiled(tmp_path, choice).steps}
    assert not again["indexes"]
    compiled(tmp_path)
    path.write_text(text, encoding="utf-8")
    assert {step.name: step.unchanged for step in compiled(tmp_path).steps}["indexes"]


def test_prices_imputed_for_elementary_formulas_are_none_of_it(tmp_path: Path) -> None:
    lay(tmp_path)
    choice = {"heading": "M", "weighted": False, "regressions": "pooled", "least": 5, **MILK}
    plain = levels(compiled(tmp_path, choice, index={"method": "jevons"}))
    made = compiled(
        tmp_path, choice, index={"method": "jevons"}, screening={"imputation": {"run": "short", "limit": 3}}
    )
    assert levels(made) == plain
    assert "imputed" not in table(made, "screened").filter(pl.col("ea") == "M")["verdict"].to_list()


@pytest.mark.parametrize(
    ("key", "changes"),
    [
        ("hedonic.0", {"numeric": [], "logs": [], "categorical": []}),
        ("hedonic.0", {"categorical": ["fat"]}),
        ("hedonic.0.numeric", {"numeric": ["sugar"]}),
        ("hedonic.0.numeric", {"numeric": ["brand"]}),
        ("hedonic.0.logs", {"logs": ["category"]}),
        ("hedonic.0.categorical", {"categorical": ["colour"]}),
        ("hedonic.0.heading", {"heading": "X"}),
        ("hedonic.0.heading", {"heading": None}),
        ("hedonic.0.method", {"method": "imputation"}),
        ("hedonic.0.least", {"least": 0}),
        ("hedonic.0.window", {"window": 13}),
    ],
)
def test_what_makes_no_sense_is_a_problem_of_the_plan(tmp_path: Path, key: str, changes: Table) -> None:
    lay(tmp_path)
    choice = {name: value for name, value in {"heading": "M", **MILK, **changes}.items() if value is not None}
    assert key in problems(tmp_path, plan(choice))


def test_a_heading_has_one_choice_and_windows_must_fit(tmp_path: Path) -> None:
    lay(tmp_path)
    choice = {"heading": "M", **MILK}
    assert "hedonic.1.heading" in problems(tmp_path, plan(choice, choice))
    index = {"method": "jevons", "window": "expanding", "splice": "mean"}
    assert "index.splice" in problems(tmp_path, plan(choice, index=index))
    assert "index.splice" not in problems(tmp_path, plan({"heading": "X", **MILK}, index={"method": "jevons"}))
