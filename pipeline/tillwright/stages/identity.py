"""Stage 2: which items there are, and which product and elementary aggregate each belongs to."""

from __future__ import annotations

import polars as pl

from tillwright.queries import offer, select
from tillwright.stages.context import Context
from tillwright.store.references import read_master
from tillwright.tables import TABLES


def identify(context: Context) -> int:
    """Write `items` and `products`; the number of items."""
    workspace, connection = context.workspace, context.connect()
    active = context.active_deliveries()
    offer(connection, "sales", workspace.parts("sales", active))
    described = [path for path in workspace.parts("described", active) if path.exists()]
    offer(connection, "described", described or pl.DataFrame(schema=TABLES["described"].columns))
    offer(connection, "masters", _masters(context))
    items = select(connection, "items")
    workspace.write("items", items)
    offer(connection, "items", items)
    offer(connection, "assignment", context.references.assignment)
    workspace.write("products", select(connection, "products"))
    return items.height


def _masters(context: Context) -> pl.DataFrame:
    columns = ("feed", "item", "description", "brand", "size", "category", "attributes")
    empty = pl.DataFrame(schema=dict.fromkeys(columns, pl.String))
    frames = [read_master(context.plan, master) for master in context.plan.item_master]
    return pl.concat([empty, *frames]).unique(["feed", "item"], keep="last", maintain_order=True)
