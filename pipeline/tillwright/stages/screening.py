"""Stage 4: a verdict and a reason on every row of the panel; nothing is deleted."""

from __future__ import annotations

import numpy as np
import polars as pl

from tillwright.kernels.screening import find_extreme
from tillwright.stages.context import Context

PRODUCT = ("ea", "stratum", "product")


def screen(context: Context) -> int:
    """Write `screened`; the number of rows set aside."""
    panel = context.workspace.read("panel")
    priced = panel.filter(pl.col("price").is_not_null())
    extreme = np.zeros(priced.height, dtype=bool)
    bounds = context.plan.screening.extreme
    if bounds != "off":
        starts = priced.select(pl.struct(PRODUCT).ne_missing(pl.struct(PRODUCT).shift(1))).to_series()
        starts = starts.scatter(0, True) if priced.height else starts
        extreme = find_extreme(priced["price"].to_numpy(), starts.to_numpy(), *bounds)
    marked = priced.select(*PRODUCT, "period", pl.Series("extreme", extreme))
    screened = panel.join(marked, on=[*PRODUCT, "period"], how="left").with_columns(
        pl.when(pl.col("price").is_null())
        .then(pl.lit("no-net-sales"))
        .when(pl.col("extreme"))
        .then(pl.lit("extreme-relative"))
        .otherwise(pl.lit(""))
        .alias("reason")
    )
    verdict = pl.when(pl.col("reason") == "").then(pl.lit("kept")).otherwise(pl.lit("excluded"))
    screened = screened.with_columns(verdict.alias("verdict")).drop("extreme")
    context.workspace.write("screened", screened)
    return int((screened["verdict"] == "excluded").sum())
