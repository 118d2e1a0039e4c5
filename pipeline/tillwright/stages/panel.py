"""Stage 3: unit values per elementary aggregate, stratum, product and period."""

from __future__ import annotations

import polars as pl

from tillwright.errors import DataError
from tillwright.queries import offer, select
from tillwright.stages.context import Context
from tillwright.tables import TABLES


def make_panel(context: Context) -> int:
    """Write `panel`; the number of unit values.

    Raises
    ------
    DataError : no accepted line falls into the periods of the plan and has an elementary aggregate.
    """
    workspace, connection = context.workspace, context.connect()
    periods = context.periods()
    context.offer_active(connection, "sales")
    offer(connection, "products", workspace.read("products"))
    panel = None
    if periods.height:
        panel = select(connection, "panel", first_period=periods["period"][0], last_period=periods["period"][-1])
    if panel is None or panel.height == 0:
        raise DataError(
            f"No accepted sale from {context.plan.plan.start} on has an elementary aggregate, so there is no index to "
            f"make; {_refused(context)}. Compare plan.start with the deliveries' dates, and classification.assignment "
            "with the items."
        )
    workspace.write("panel", panel)
    return panel.height


def _refused(context: Context) -> str:
    """How many lines of active deliveries were refused, and by which rule most of them."""
    parts = context.workspace.parts("refused", context.active_deliveries())
    refused = pl.read_parquet(parts, glob=False) if parts else pl.DataFrame(schema=TABLES["refused"].columns)
    if refused.height == 0:
        return "no line was refused"
    rule, lines = refused.group_by("rule").len().sort("len", "rule", descending=[True, False]).row(0)
    return f"{refused.height} lines were refused, {lines} of them by the rule {rule}"
