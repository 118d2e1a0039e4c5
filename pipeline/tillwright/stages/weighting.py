"""What components weigh: the weight years of a compile, from a file or from turnover."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import polars as pl

from tillwright.errors import CallError, DataError
from tillwright.kernels.chaining import WeightYear
from tillwright.panels import Array
from tillwright.periods import year_and_month
from tillwright.stages.context import Context

DECEMBER = 12


@dataclass(frozen=True, slots=True)
class Components:
    """What is aggregated: (T, L) levels, and per component its leaf of the tree and its stratum."""

    levels: Array
    leaves: tuple[str, ...]
    strata: tuple[str, ...]


def weight_years(context: Context, components: Components, periods: pl.Series) -> list[WeightYear]:
    """The stretches of periods that are weighted alike.

    Weights of year y hold from the period after the link month: of y−1 if that is December, else of y.

    Raises
    ------
    CallError : weights.file has no weights for a year, or they are all 0.
    """
    plan = context.plan
    months = [year_and_month(day, plan.plan.period) for day in periods]
    link_month = plan.weights.link_month
    belongs = [year if link_month == DECEMBER or month > link_month else year - 1 for year, month in months]
    updates = plan.weights.formula == "lowe" and plan.weights.price_update
    turnover = _turnover(context)
    years = []
    for year in sorted(set(belongs)):
        rows = [position for position, owner in enumerate(belongs) if owner == year]
        base = [n for n, (calendar, _) in enumerate(months) if calendar == year - 1] if updates and rows[0] > 0 else []
        weights = _weights(context, components, year, turnover)
        if not weights.sum() > 0:
            raise CallError(f"Nothing has a weight in {year}: weights.source is '{plan.weights.source}'.")
        link = max(rows[0] - 1, 0)
        years.append(WeightYear(link, rows[0], rows[-1], weights, np.array(base, dtype=np.intp)))
    return years


def _turnover(context: Context) -> pl.DataFrame:
    """Turnover of unit values that were kept, by calendar year, elementary aggregate and stratum."""
    year = pl.col("period").dt.iso_year() if context.plan.plan.period == "week" else pl.col("period").dt.year()
    kept = context.workspace.read("screened").filter(pl.col("verdict") == "kept")
    return kept.group_by(year.cast(pl.Int64).alias("year"), "ea", "stratum").agg(
        pl.col("turnover").sum().cast(pl.Float64)
    )


def _weights(context: Context, components: Components, year: int, turnover: pl.DataFrame) -> Array:
    """(L,) weights of a year: of the leaf, divided among its strata by turnover of the year before.

    The first year, before which nothing is known, takes its own turnover.
    """
    known = sorted(set(turnover["year"]))
    if not known:
        raise DataError("No unit value was kept, so there is nothing to weigh; look at the verdicts in `screened`.")
    source = year - 1 if year - 1 in known else min(known, key=lambda candidate: abs(candidate - year))
    rows = turnover.filter(pl.col("year") == source)
    sold = {(ea, stratum): value for ea, stratum, value in rows.select("ea", "stratum", "turnover").iter_rows()}
    own = np.array([sold.get(key, 0.0) for key in zip(components.leaves, components.strata, strict=True)])
    if context.plan.weights.source == "turnover":
        return own
    listed = context.references.weights.filter(pl.col("year") == year)
    if listed.height == 0:
        raise CallError(
            f"{context.plan.weights.file} has no weights for {year}, which the compile reaches. "
            "Add them, or stop before with --through."
        )
    given = dict(listed.select("heading", "weight").iter_rows())
    leaves = np.array(components.leaves)
    total = np.array([own[leaves == leaf].sum() for leaf in components.leaves])
    count = np.array([(leaves == leaf).sum() for leaf in components.leaves])
    part = np.divide(own, total, out=1.0 / count, where=total > 0)
    weights: Array = np.array([given[leaf] for leaf in components.leaves]) * part
    return weights
