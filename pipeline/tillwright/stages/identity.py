"""Stage 2: which items there are, and which product and elementary aggregate each belongs to."""

from __future__ import annotations

from tillwright.queries import offer, select
from tillwright.stages.context import Context


def identify(context: Context) -> int:
    """Write `items` and `products`; the number of items."""
    workspace, connection = context.workspace, context.connect()
    context.offer_active(connection, "sales", "described")
    offer(connection, "masters", context.references.masters)
    items = select(connection, "items")
    workspace.write("items", items)
    offer(connection, "items", items)
    offer(connection, "assignment", context.references.assignment)
    workspace.write("products", select(connection, "products"))
    return items.height
