"""Every table: its columns, types, units, key and grain.

A table is one Parquet file, or a folder with one file per delivery (`by_delivery`). `check` holds a
frame against its declaration before it is written.
"""

from __future__ import annotations

from dataclasses import dataclass
from types import MappingProxyType
from typing import TypeAlias

import polars as pl

from tillwright.errors import BrokenInvariant

EXACT = pl.Decimal(38, 4)
Types: TypeAlias = dict[str, type[pl.DataType] | pl.DataType]


@dataclass(frozen=True, slots=True)
class Table:
    """The declaration of one table; `key` columns identify a row and order the file."""

    name: str
    stage: int
    meaning: str
    key: tuple[str, ...]
    columns: Types
    by_delivery: bool = False


_TOTALS: Types = {
    "lines_received": pl.Int64,
    "lines_accepted": pl.Int64,
    "lines_refused": pl.Int64,
    "turnover_received": EXACT,
    "turnover_accepted": EXACT,
    "turnover_refused": EXACT,
    "first_day": pl.Date,
    "last_day": pl.Date,
}
_PANEL: Types = {
    "ea": pl.String,
    "stratum": pl.String,
    "product": pl.String,
    "period": pl.Date,
    "price": pl.Float64,
    "quantity": EXACT,
    "turnover": EXACT,
    "lines": pl.Int64,
}
_DECLARED = (
    Table(
        "deliveries",
        1,
        "every file received, what became of it, and how its lines add up",
        ("feed", "arrival"),
        {
            "feed": pl.String,
            "arrival": pl.Int64,
            "delivery": pl.String,
            "file": pl.String,
            "status": pl.String,
            "replaced_by": pl.String,
            "sha256": pl.String,
            "bytes": pl.Int64,
            **_TOTALS,
        },
    ),
    Table(
        "totals",
        1,
        "lines and turnover of one delivery: received = accepted + refused; turnover of readable lines",
        ("delivery",),
        {
            "delivery": pl.String,
            **_TOTALS,
        },
        by_delivery=True,
    ),
    Table(
        "sales",
        1,
        "exact sums of accepted lines; `counted` is false on days that the month rule leaves out",
        ("delivery", "period", "counted", "stratum", "item"),
        {
            "delivery": pl.String,
            "feed": pl.String,
            "period": pl.Date,
            "counted": pl.Boolean,
            "stratum": pl.String,
            "item": pl.String,
            "quantity": EXACT,
            "turnover": EXACT,
            "lines": pl.Int64,
        },
        by_delivery=True,
    ),
    Table(
        "refused",
        1,
        "refused lines: the rule, any other rules broken, the detail, and the row as it came",
        ("delivery", "line"),
        {
            "delivery": pl.String,
            "feed": pl.String,
            "line": pl.Int64,
            "rule": pl.String,
            "also": pl.String,
            "detail": pl.String,
            "turnover": EXACT,
            "raw": pl.String,
        },
        by_delivery=True,
    ),
    Table(
        "outlet_days",
        1,
        "lines by outlet and day within the announced period; weekly lines stand on the week's Thursday",
        ("delivery", "outlet", "day"),
        {"delivery": pl.String, "feed": pl.String, "outlet": pl.String, "day": pl.Date, "lines": pl.Int64},
        by_delivery=True,
    ),
    Table(
        "described",
        1,
        "what lines say of their items, where the feed maps such columns",
        ("delivery", "item"),
        {
            "delivery": pl.String,
            "feed": pl.String,
            "item": pl.String,
            "description": pl.String,
            "brand": pl.String,
            "size": pl.String,
            "category": pl.String,
        },
        by_delivery=True,
    ),
    Table(
        "gates",
        1,
        "checks of the active deliveries against the feeds' limits, and the answers given",
        ("gate", "feed", "subject"),
        {
            "gate": pl.String,
            "feed": pl.String,
            "subject": pl.String,
            "measured": pl.Float64,
            "limit": pl.Float64,
            "breached": pl.Boolean,
            "note": pl.String,
            "answered_by": pl.String,
            "answer": pl.String,
        },
    ),
    Table(
        "items",
        2,
        "every item sold in an active delivery, with what is known of it",
        ("feed", "item"),
        {
            "feed": pl.String,
            "item": pl.String,
            "description": pl.String,
            "brand": pl.String,
            "size": pl.String,
            "category": pl.String,
            "attributes": pl.String,
            "size_amount": pl.Float64,
            "size_measure": pl.String,
            "size_packs": pl.Int64,
            "first_period": pl.Date,
            "last_period": pl.Date,
            "lines": pl.Int64,
            "turnover": EXACT,
        },
    ),
    Table(
        "successions",
        2,
        "items that may continue another, the evidence, and what was decided: accepted, asked, declined, displaced",
        ("feed", "old_item", "new_item"),
        {
            "feed": pl.String,
            "ea": pl.String,
            "old_item": pl.String,
            "new_item": pl.String,
            "similarity": pl.Float64,
            "same_brand": pl.Boolean,
            "size_ratio": pl.Float64,
            "price_ratio": pl.Float64,
            "unit_price_ratio": pl.Float64,
            "turnover_ratio": pl.Float64,
            "gap": pl.Int64,
            "score": pl.Float64,
            "runner_up": pl.Float64,
            "kind": pl.String,
            "status": pl.String,
            "decided_by": pl.String,
            "why": pl.String,
            "decided": pl.Datetime("us"),
        },
    ),
    Table(
        "products",
        2,
        "the product and elementary aggregate of every item; ea is null where nothing assigns it; units per item in "
        "grams, millilitres or pieces, or in items of the first of its line",
        ("feed", "item"),
        {
            "feed": pl.String,
            "item": pl.String,
            "product": pl.String,
            "ea": pl.String,
            "units_per_item": pl.Float64,
        },
    ),
    Table(
        "panel",
        3,
        "unit values: price in currency per unit is null where returns leave no positive sales",
        ("ea", "stratum", "product", "period"),
        _PANEL,
    ),
    Table(
        "screened",
        4,
        "the panel with a verdict (kept, excluded) and a reason on every row, and added rows of imputed prices, whose "
        "verdict is imputed and which have no sales; linked is false where a product sells too little in the link that "
        "ends in the period",
        ("ea", "stratum", "product", "period"),
        {
            **_PANEL,
            "verdict": pl.String,
            "reason": pl.String,
            "linked": pl.Boolean,
        },
    ),
    Table(
        "ea_indexes",
        5,
        "index of each elementary aggregate (first priced period = 100) with its churn, shares 0 to 1, and how many "
        "prices of the period are imputed",
        ("ea", "stratum", "period"),
        {
            "ea": pl.String,
            "stratum": pl.String,
            "period": pl.Date,
            "method": pl.String,
            "level": pl.Float64,
            "movement": pl.Float64,
            "turnover": pl.Float64,
            "products": pl.Int64,
            "matched": pl.Int64,
            "entering": pl.Int64,
            "exiting": pl.Int64,
            "matched_share": pl.Float64,
            "entering_share": pl.Float64,
            "exiting_share": pl.Float64,
            "imputed": pl.Int64,
        },
    ),
    Table(
        "screen_effects",
        5,
        "for each screen that is on, the index of each elementary aggregate with all of them and without that one, and "
        "how many rows of the period carry its reason; levels as in ea_indexes",
        ("ea", "stratum", "period", "screen"),
        {
            "ea": pl.String,
            "stratum": pl.String,
            "period": pl.Date,
            "screen": pl.String,
            "level": pl.Float64,
            "level_without": pl.Float64,
            "rows": pl.Int64,
        },
    ),
    Table(
        "failures",
        5,
        "elementary aggregates that have no index, or none in some periods, and why",
        ("ea", "stratum"),
        {
            "ea": pl.String,
            "stratum": pl.String,
            "message": pl.String,
            "answered_by": pl.String,
            "answer": pl.String,
        },
    ),
    Table(
        "hedonic_coefficients",
        5,
        "coefficients of hedonic regressions on log prices; period is the last of those that one is over",
        ("ea", "stratum", "period", "name"),
        {
            "ea": pl.String,
            "stratum": pl.String,
            "period": pl.Date,
            "name": pl.String,
            "coefficient": pl.Float64,
            "standard_error": pl.Float64,
            "t": pl.Float64,
        },
    ),
    Table(
        "hedonic_fit",
        5,
        "hedonic regressions: prices regressed, prices left out, products that cannot be predicted, parameters, fit, "
        "and columns dropped; period is the last of those that one is over",
        ("ea", "stratum", "period"),
        {
            "ea": pl.String,
            "stratum": pl.String,
            "period": pl.Date,
            "observations": pl.Int64,
            "left_out": pl.Int64,
            "unpredicted": pl.Int64,
            "parameters": pl.Int64,
            "degrees_of_freedom": pl.Int64,
            "adjusted_r2": pl.Float64,
            "dropped": pl.List(pl.String),
        },
    ),
    Table(
        "headings",
        6,
        "index of every heading (reference period = 100), weight share, changes in per cent, contributions in "
        "percentage points of the change of all items",
        ("heading", "period"),
        {
            "heading": pl.String,
            "label": pl.String,
            "parent": pl.String,
            "period": pl.Date,
            "index": pl.Float64,
            "weight": pl.Float64,
            "imputed_weight": pl.Float64,
            "change_period": pl.Float64,
            "change_year": pl.Float64,
            "contribution_period": pl.Float64,
            "contribution_year": pl.Float64,
        },
    ),
    Table(
        "churn",
        8,
        "products sold, and how many, with how much turnover in currency, go on from the period before, enter, or left "
        "(turnover of the period before); shares 0 to 1 of the turnover of items, and of products, sold in the period "
        "before (matched) or in the last link month (linked) too; null where there is no such period",
        ("ea", "stratum", "period"),
        {
            "ea": pl.String,
            "stratum": pl.String,
            "period": pl.Date,
            "products": pl.Int64,
            "continuing": pl.Int64,
            "entering": pl.Int64,
            "exiting": pl.Int64,
            "continuing_turnover": pl.Float64,
            "entering_turnover": pl.Float64,
            "exiting_turnover": pl.Float64,
            "matched_by_item": pl.Float64,
            "matched_by_product": pl.Float64,
            "linked_by_item": pl.Float64,
            "linked_by_product": pl.Float64,
        },
    ),
    Table(
        "lives",
        8,
        "periods from each product's first to its last sale (length) and those it is sold in; a life is complete if it "
        "is seen to begin and to end within its feed's first and last sales, or else its length is a lower bound",
        ("ea", "product"),
        {
            "ea": pl.String,
            "product": pl.String,
            "first_period": pl.Date,
            "last_period": pl.Date,
            "length": pl.Int64,
            "periods_sold": pl.Int64,
            "begins": pl.Boolean,
            "ends": pl.Boolean,
            "complete": pl.Boolean,
        },
    ),
    Table(
        "definitions",
        8,
        "how well each candidate definition of products does in a period against its base period: match, homogeneity "
        "(r2) and score = match × r2, each 0 to 1, and the turnover of the items scored",
        ("ea", "definition", "period"),
        {
            "ea": pl.String,
            "definition": pl.String,
            "period": pl.Date,
            "base": pl.Date,
            "match": pl.Float64,
            "r2": pl.Float64,
            "score": pl.Float64,
            "turnover": pl.Float64,
        },
    ),
    Table(
        "definition_scores",
        8,
        "means of `definitions` over all periods, weighted by turnover, how many products a definition makes, and "
        "whether its score is the highest of its elementary aggregate",
        ("ea", "definition"),
        {
            "ea": pl.String,
            "definition": pl.String,
            "products": pl.Int64,
            "match": pl.Float64,
            "r2": pl.Float64,
            "score": pl.Float64,
            "wins": pl.Boolean,
        },
    ),
)

TABLES: MappingProxyType[str, Table] = MappingProxyType({table.name: table for table in _DECLARED})


def conform(name: str, frame: pl.DataFrame) -> pl.DataFrame:
    """The frame with the declared columns, types and order of rows.

    Raises
    ------
    BrokenInvariant : a column is missing or surplus, or the key does not identify rows.
    """
    table = TABLES[name]
    if set(frame.columns) != set(table.columns):
        odd = sorted(set(frame.columns) ^ set(table.columns))
        raise BrokenInvariant(f"columns of {name}", f"missing or undeclared: {', '.join(odd)}")
    typed = frame.select(pl.col(column).cast(kind) for column, kind in table.columns.items()).sort(table.key)
    repeated = typed.height - typed.select(table.key).n_unique()
    if repeated:
        raise BrokenInvariant(f"key of {name}", f"{repeated} rows repeat a value of ({', '.join(table.key)})")
    return typed
