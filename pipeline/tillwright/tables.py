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
            "first_period": pl.Date,
            "last_period": pl.Date,
            "lines": pl.Int64,
            "turnover": EXACT,
        },
    ),
    Table(
        "products",
        2,
        "the product and elementary aggregate of every item; ea is null where nothing assigns it",
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
        "the panel with a verdict (kept, excluded) and a reason on every row",
        ("ea", "stratum", "product", "period"),
        {
            **_PANEL,
            "verdict": pl.String,
            "reason": pl.String,
        },
    ),
    Table(
        "ea_indexes",
        5,
        "index of each elementary aggregate (first priced period = 100) with its churn; shares 0 to 1",
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
