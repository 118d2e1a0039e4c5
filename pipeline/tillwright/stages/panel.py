"""Stage 3: unit values per elementary aggregate, stratum, product and period."""

from __future__ import annotations

from tillwright.errors import DataError
from tillwright.queries import offer, select
from tillwright.stages.context import Context


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
            "make. Compare plan.start with the deliveries' dates, and classification.assignment with the items."
        )
    workspace.write("panel", panel)
    return panel.height
