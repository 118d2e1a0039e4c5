"""Clearance, small sales and imputation in the table: every screen hits the rows that it should, and no other.

The panels are made by hand and worked out beside them; the limits of clearance are common practice, small sales after
van der Grient & de Haan (2010), imputation after the CPI Manual (2020), ch. 6.
"""

from collections.abc import Sequence
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
import polars as pl
import pytest

from tests.stages.sold import JEVONS, Floats, Months, compile_sold, levels, random_months, reasons, sold
from tillwright.report.summary import summarise_compile
from tillwright.stages.screening import KEY, screen_panel
from tillwright.tables import TABLES

STEADY: Months = [(10.0, 100.0)] * 6
CLEARANCE: dict[str, Any] = {"clearance": {}}
# Figures of order 100 that one compile makes with rows more than the other.
SAME_FIGURE = 1e-9


def test_sale_before_a_product_goes_is_clearance(tmp_path: Path) -> None:
    usual, low = (10.0, 100.0), (6.0, 40.0)
    milk: dict[str, Months] = {
        "STAYS": STEADY,
        "CLEARED": [usual, usual, low, (6.0, 30.0), None, None],
        "LAST": [usual, usual, usual, usual, low, None],
        "PROMOTED": [usual, usual, low, usual, usual, None],
        "STILL": [usual, usual, usual, usual, low, low],
        "POPULAR": [usual, usual, usual, (6.0, 100.0), None, None],
        "SHORT": [usual, usual, usual, (9.0, 10.0), None, None],
        "LONG": [usual, low, low, low, None, None],
        "ONCE": [low, None, None, None, None, None],
    }
    found = reasons(compile_sold(tmp_path, milk, screening=CLEARANCE))
    assert found == {"CLEARED": {3: "clearance", 4: "clearance"}, "LAST": {5: "clearance"}}


def test_product_that_is_back_was_not_sold_off(tmp_path: Path) -> None:
    seasonal: Months = [(10.0, 100.0), (10.0, 100.0), (6.0, 40.0), None, None]
    milk: dict[str, Months] = {"STAYS": STEADY, "SEASONAL": seasonal}
    assert reasons(compile_sold(tmp_path / "gone", milk, screening=CLEARANCE)) == {"SEASONAL": {3: "clearance"}}
    back = milk | {"SEASONAL": [*seasonal, (10.0, 100.0)]}
    assert not reasons(compile_sold(tmp_path / "back", back, screening=CLEARANCE))


def test_clearance_takes_its_limits_from_the_plan(tmp_path: Path) -> None:
    milk: dict[str, Months] = {"STAYS": STEADY, "GOES": [*STEADY[:3], (8.0, 70.0), (8.0, 60.0), None]}
    limits = {"price_fall": 0.85, "quantity_fall": 0.8, "ahead": 1}
    assert not reasons(compile_sold(tmp_path / "usual", milk, screening=CLEARANCE))
    wide = limits | {"ahead": 2}
    assert reasons(compile_sold(tmp_path / "wide", milk, screening={"clearance": wide})) == {
        "GOES": {4: "clearance", 5: "clearance"}
    }
    # The one month that is looked at is measured against the low price before it.
    assert not reasons(compile_sold(tmp_path / "late", milk, screening={"clearance": limits}))


def test_products_of_an_aggregate_that_all_end_have_not_gone(tmp_path: Path) -> None:
    # A feed that is late must not have its promotions set aside.
    milk: dict[str, Months] = {"A": STEADY, "B": STEADY}
    drinks: dict[str, Months] = {"Y": [*STEADY[:2], (5.0, 20.0)], "Z": STEADY[:3]}
    compiled = compile_sold(tmp_path, milk, drinks, screening=CLEARANCE)
    assert not reasons(compiled, ea="M")
    assert not reasons(compiled, ea="S")


def test_row_carries_the_first_reason(tmp_path: Path) -> None:
    # The fall to a fifth is an extreme relative; the same price a month later is not, but it is clearance.
    gone: Months = [(10.0, 100.0), (10.0, 100.0), (2.0, 40.0), (2.0, 30.0), None, None]
    milk: dict[str, Months] = {"STAYS": STEADY, "GOES": gone}
    found = reasons(compile_sold(tmp_path, milk, screening=CLEARANCE))
    assert found == {"GOES": {3: "extreme-relative", 4: "clearance"}}
    assert reasons(compile_sold(tmp_path / "off", milk, screening=CLEARANCE | {"extreme": "off"})) == {
        "GOES": {3: "clearance", 4: "clearance"}
    }


def test_product_is_not_gone_because_its_last_price_is_wrong(tmp_path: Path) -> None:
    milk: dict[str, Months] = {"STAYS": STEADY, "WRONG": [*STEADY[:4], (6.0, 40.0), (1000.0, 40.0)]}
    assert reasons(compile_sold(tmp_path, milk, screening=CLEARANCE)) == {"WRONG": {6: "extreme-relative"}}


def test_usual_price_after_a_wrong_one_is_not_clearance(tmp_path: Path) -> None:
    milk: dict[str, Months] = {"STAYS": STEADY, "WRONG": [*STEADY[:3], (1000.0, 100.0), (10.0, 40.0), None]}
    assert reasons(compile_sold(tmp_path, milk, screening=CLEARANCE)) == {"WRONG": {4: "extreme-relative"}}


# Three products, λ = 1.25: one is used if its mean share of turnover in the two months is above 1/3.75. SMALL has
# 2 per cent of it, and 60 in the month of its promotion.
SMALL: Months = [(1.0, 4.0), (1.1, 4.0), (1.2, 4.0), (0.6, 500.0), (1.3, 4.0), (1.4, 4.0), (1.5, 4.0)]
LARGE: Months = [(10.0, 10.0), (10.5, 10.0), (11.0, 10.0), (10.0, 10.0), (9.0, 10.0), (10.0, 10.0), (12.0, 10.0)]
OTHER: Months = [(20.0, 5.0), (20.0, 5.0), (21.0, 5.0), (22.0, 5.0), (22.0, 5.0), (23.0, 5.0), (24.0, 5.0)]
SMALL_ON: dict[str, Any] = {"screening": {"small": {}}, "index": JEVONS}


def test_price_is_set_aside_for_small_sales_if_no_link_uses_it(tmp_path: Path) -> None:
    compiled = compile_sold(tmp_path, {"SMALL": SMALL, "LARGE": LARGE, "OTHER": OTHER}, **SMALL_ON)
    # March and May sell little too, but the links into and out of April need them.
    aside = dict.fromkeys((1, 2, 6, 7), "small-sales")
    assert reasons(compiled) == {"SMALL": aside}
    screened = compiled.context.workspace.read("screened").filter(ea="M", linked=False)
    assert [(product, period.month) for product, period in screened.select("product", "period").iter_rows()] == [
        ("shop/SMALL", month) for month in (2, 3, 6, 7)
    ]


def test_product_without_a_neighbour_in_time_is_not_judged(tmp_path: Path) -> None:
    milk: dict[str, Months] = {"LARGE": LARGE, "OTHER": OTHER, "ONCE": [None, (1.0, 1.0), None, (1.0, 1.0)]}
    assert not reasons(compile_sold(tmp_path, milk, **SMALL_ON))


def filtered_jevons(products: Sequence[Months], factor: float) -> Floats:
    """Link by link from the definition: the products used are those whose mean share exceeds 1/(n·λ)."""
    index = [100.0]
    for before, now in pairwise(range(len(products[0]))):
        pairs = [(a, b) for months in products if (a := months[before]) is not None and (b := months[now]) is not None]
        base, current = sum(p * q for (p, q), _ in pairs), sum(p * q for _, (p, q) in pairs)
        used = [
            (a, b) for a, b in pairs if (a[0] * a[1] / base + b[0] * b[1] / current) / 2 > 1 / (len(pairs) * factor)
        ]
        index.append(index[-1] * float(np.prod([b[0] / a[0] for a, b in used]) ** (1 / len(used))))
    return np.array(index)


@pytest.mark.parametrize("factor", [1.1, 1.25, 2.0])
def test_chained_jevons_is_made_of_the_links_of_the_published_filter(tmp_path: Path, factor: float) -> None:
    rng = np.random.default_rng(20100510)
    products = [[*STEADY, *STEADY], *(random_months(rng, 12) for _ in range(40))]
    milk = {f"P{number:02d}": months for number, months in enumerate(products)}
    compiled = compile_sold(tmp_path, milk, screening={"extreme": "off", "small": {"factor": factor}}, index=JEVONS)
    # Unit values are turnover over quantity, both to four places.
    np.testing.assert_allclose(levels(compiled), filtered_jevons(products, factor), rtol=1e-6)
    kept = compiled.context.workspace.read("screened").filter(ea="M")
    assert kept.filter(verdict="excluded").height > 0
    assert kept.filter(verdict="kept", linked=False).height > 0


def test_chain_over_the_promotion_of_a_small_product_does_not_drift(tmp_path: Path) -> None:
    # Every price is back where it was, and so must be the index.
    small: Months = [(1.0, 4.0), (1.0, 4.0), (0.6, 500.0), (1.0, 4.0), (1.0, 4.0), (1.0, 4.0)]
    other: Months = [(20.0, 5.0)] * 6
    compiled = compile_sold(tmp_path, {"SMALL": small, "LARGE": [(10.0, 10.0)] * 6, "OTHER": other}, **SMALL_ON)
    found = levels(compiled)
    assert found[2] < 100.0 - 1.0
    np.testing.assert_allclose(found[[1, 3, 4, 5]], 100.0, rtol=0, atol=SAME_FIGURE)


GAP: dict[str, Months] = {
    "GONE": [(10.0, 5.0), (12.0, 5.0), None, None, None, None],
    "BACK": [(20.0, 5.0), None, (30.0, 5.0), (30.0, 5.0), (30.0, 5.0), (30.0, 5.0)],
    "STAYS": [(4.0, 5.0), (5.0, 5.0), (5.0, 5.0), (6.0, 5.0), (6.0, 5.0), (6.0, 5.0)],
}


def imputed_prices(folder: Path, milk: dict[str, Months], **changes: Any) -> dict[tuple[str, int], float]:
    compiled = compile_sold(folder, milk, **changes)
    rows = compiled.context.workspace.read("screened").filter(verdict="imputed")
    assert set(rows["reason"]) <= {"class-mean"}
    assert set(rows["ea"]) <= {"M"}
    return {
        (product.removeprefix("shop/"), period.month): price
        for product, period, price in rows.select("product", "period", "price").iter_rows()
    }


def test_missing_prices_move_with_the_products_that_are_matched(tmp_path: Path) -> None:
    found = imputed_prices(tmp_path, GAP, screening={"imputation": {"limit": 2}}, index=JEVONS)
    # February: GONE rose by 1.2, STAYS by 1.25. March: STAYS alone stood still. April: BACK 1, STAYS 1.2.
    expected = {("BACK", 2): 20.0 * (1.2 * 1.25) ** 0.5, ("GONE", 3): 12.0, ("GONE", 4): 12.0 * 1.2**0.5}
    assert found.keys() == expected.keys()
    for cell, price in expected.items():
        assert found[cell] == pytest.approx(price, rel=1e-12)


def test_long_run_moves_the_first_price(tmp_path: Path) -> None:
    screening = {"imputation": {"run": "long", "limit": 1}}
    found = imputed_prices(tmp_path, GAP, screening=screening, index=JEVONS | {"form": "direct"})
    # Since January BACK rose by 1.5 until March, STAYS by 1.25.
    assert found[("GONE", 3)] == pytest.approx(10.0 * (1.5 * 1.25) ** 0.5, rel=1e-12)


def test_prices_are_imputed_by_the_formula_of_their_aggregate(tmp_path: Path) -> None:
    found = imputed_prices(tmp_path, GAP, screening={"imputation": {"limit": 1}}, index={"method": "dutot"})
    assert found[("BACK", 2)] == pytest.approx(20.0 * 17.0 / 14.0, rel=1e-12)


def test_aggregates_of_other_methods_have_no_imputed_prices(tmp_path: Path) -> None:
    override = [{"heading": "S", "method": "jevons"}]
    compiled = compile_sold(
        tmp_path,
        GAP,
        {f"{item} 2": months for item, months in GAP.items()},
        screening={"imputation": {}},
        index={"override": override},
    )
    screened = compiled.context.workspace.read("screened").filter(verdict="imputed")
    assert set(screened["ea"]) == {"S"}
    indexes = compiled.context.workspace.read("ea_indexes")
    assert indexes.filter(ea="M")["imputed"].to_list() == [0] * 6
    assert indexes.filter(ea="S").sort("period")["imputed"].to_list() == [0, 1, 1, 1, 1, 0]


def test_price_that_was_set_aside_is_not_replaced(tmp_path: Path) -> None:
    wrong: Months = [(10.0, 5.0), (10.0, 5.0), (999.0, 5.0), None, (10.0, 5.0), (10.0, 5.0)]
    found = imputed_prices(tmp_path, {"WRONG": wrong, "STAYS": STEADY}, screening={"imputation": {}}, index=JEVONS)
    assert found == {("WRONG", 4): pytest.approx(10.0, rel=1e-12)}


def lives(seed: int) -> dict[str, Months]:
    """Products that come once and go once, one of which lasts."""
    rng = np.random.default_rng(seed)
    return {"STAYS": LARGE} | {f"P{n:02d}": random_months(rng, 7, comes_back=False) for n in range(20)}


@pytest.mark.parametrize(
    ("method", "run", "form", "small"),
    [
        *((method, "short", "chained", "off") for method in ("jevons", "dutot", "carli")),
        *((method, "long", "direct", "off") for method in ("jevons", "dutot", "carli")),
        ("jevons", "short", "chained", {"factor": 1.25}),
    ],
)
def test_imputation_by_the_same_formula_leaves_the_index_unchanged(
    tmp_path: Path, method: str, run: str, form: str, small: Any
) -> None:
    # CPI Manual (2020), ch. 6: missing prices moved by the class mean do not move the class.
    index = {"method": method, "form": form}
    without, with_imputed = (
        compile_sold(tmp_path / name, lives(6), screening={"small": small, "imputation": imputation}, index=index)
        for name, imputation in (("off", "off"), ("on", {"run": run}))
    )
    np.testing.assert_allclose(levels(with_imputed), levels(without), rtol=0, atol=SAME_FIGURE)
    first, second = (one.context.workspace.read("ea_indexes") for one in (without, with_imputed))
    assert second.filter(ea="M")["imputed"].sum() > 0
    counted = ["turnover", "products", "matched", "entering", "exiting", "matched_share", "entering_share"]
    assert first.select(counted).equals(second.select(counted))


def everything(folder: Path) -> Any:
    rng = np.random.default_rng(4)
    milk = {"STAYS": LARGE} | {f"P{number:02d}": random_months(rng, 7) for number in range(30)}
    screening: dict[str, Any] = {"clearance": {}, "small": {}, "imputation": {}}
    return compile_sold(folder, milk, screening=screening, index=JEVONS)


def test_table_is_the_panel_with_imputed_rows_that_sold_nothing(tmp_path: Path) -> None:
    compiled = everything(tmp_path)
    workspace = compiled.context.workspace
    panel, screened = workspace.read("panel"), workspace.read("screened")
    assert set(screened.filter(verdict="excluded")["reason"]) == {"extreme-relative", "clearance", "small-sales"}
    observed = screened.filter(pl.col("verdict") != "imputed")
    assert observed.select(panel.columns).equals(panel)
    imputed = screened.filter(verdict="imputed")
    assert imputed.height == summarise_compile(compiled.context, compiled.steps).imputed > 0
    assert imputed.select(pl.sum("quantity", "turnover", "lines")).row(0) == (0, 0, 0)
    assert imputed["price"].is_between(0, 1e4, closed="none").all()
    verdicts = screened.select(kept=pl.col("verdict") == "kept", silent=pl.col("reason") == "")
    assert (verdicts["kept"] == verdicts["silent"]).all()


def test_rows_come_in_order_of_the_key_and_as_declared(tmp_path: Path) -> None:
    context = everything(tmp_path).context
    found = screen_panel(context, context.workspace.read("panel"), context.plan.screening)
    assert found.schema == TABLES["screened"].columns
    assert found.select(KEY).equals(found.select(KEY).sort(KEY))
    assert found.equals(context.workspace.read("screened"))
    assert len(sold(LARGE)) == found.filter(product="shop/STAYS").height
