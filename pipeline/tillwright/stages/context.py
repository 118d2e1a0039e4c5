"""What every stage is given."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, date, datetime

import numpy as np
import polars as pl

from tillwright.kernels.recipes import Years
from tillwright.periods import label_period, list_periods, next_period, year_and_month
from tillwright.plan import Definition, Plan
from tillwright.queries import Connection, Resources, connect, offer
from tillwright.store.references import References
from tillwright.store.workspace import Workspace
from tillwright.tables import TABLES


@dataclass(frozen=True, slots=True)
class Context:
    """One compile: its plan, its small files, its workspace, and the last period asked for."""

    plan: Plan
    references: References
    workspace: Workspace
    resources: Resources
    through: date | None = None

    def connect(self) -> Connection:
        """A fresh connection within the resources of the compile."""
        return connect(self.resources)

    def active_deliveries(self) -> list[str]:
        """Deliveries whose sums count, in order of feed and arrival."""
        deliveries = self.workspace.read("deliveries")
        return deliveries.filter(pl.col("status") == "active")["delivery"].to_list()

    def offer_active(self, connection: Connection, *tables: str) -> None:
        """Make tables kept by delivery readable, restricted to active deliveries."""
        active = self.active_deliveries()
        for table in tables:
            self.offer_parts(connection, table, active, called=table)

    def offer_parts(self, connection: Connection, table: str, deliveries: Sequence[str], *, called: str) -> None:
        """Make the parts of some deliveries readable under a name; those that there are none of are left out."""
        parts = [path for path in self.workspace.parts(table, deliveries) if path.exists()]
        offer(connection, called, parts or pl.DataFrame(schema=TABLES[table].columns))

    def definition(self, ea: str | None) -> Definition:
        """What makes items of an elementary aggregate one product; None = items that none is assigned to."""
        tree = self.references.tree
        return self.plan.products.definition(tree.ancestry(ea) if ea in tree.parents and ea is not None else [])

    def link_years(self, periods: pl.Series) -> Years:
        """(T,) the year that each period belongs to, ending in the link month of the weights."""
        ends = (year_and_month(day, self.plan.plan.period) for day in periods)
        return np.array([year + (month > self.plan.weights.link_month) for year, month in ends], dtype=np.int64)

    def label(self, period: date) -> str:
        """A period as people write it."""
        return label_period(period, self.plan.plan.period)

    def periods(self) -> pl.DataFrame:
        """period, label, previous_period, next_period from the plan's start to the last one compiled.

        The last one is `through`, or else the last with accepted sales of an active delivery that does not lie in
        the future: a stray date must not stretch the calendar.
        """
        kind = self.plan.plan.period
        last = self.through or self._last_sold()
        days = list_periods(self.plan.plan.first_day, last, kind) if last else []
        return pl.DataFrame(
            {
                "period": days,
                "label": [self.label(day) for day in days],
                "previous_period": [None, *days[:-1]] if days else [],
                "next_period": [next_period(day, kind) for day in days],
            },
            schema={"period": pl.Date, "label": pl.String, "previous_period": pl.Date, "next_period": pl.Date},
        )

    def _last_sold(self) -> date | None:
        parts = self.workspace.parts("sales", self.active_deliveries())
        if not parts:
            return None
        last = (
            pl.scan_parquet(parts, glob=False)
            .filter(pl.col("counted") & (pl.col("period") <= datetime.now(UTC).date()))
            .select(pl.col("period").max())
            .collect()
        )
        found: date | None = last.item()
        return found
