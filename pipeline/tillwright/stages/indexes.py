"""Stage 5: an index for every elementary aggregate and stratum."""

from __future__ import annotations

import numpy as np
import polars as pl

from tillwright.errors import UnconnectedPeriods
from tillwright.kernels.churn import measure_churn
from tillwright.kernels.methods import Recipe, make_index
from tillwright.panels import Array, Block, to_arrays
from tillwright.stages.context import Context
from tillwright.stages.intake import answers


def compile_indexes(context: Context) -> int:
    """Write `ea_indexes` and `failures`; the number of indexes made.

    An elementary aggregate that no index can be made of is a row of `failures`; the others go on.
    """
    kept = context.workspace.read("screened").filter(pl.col("verdict") == "kept")
    periods = context.periods()["period"]
    arrays = to_arrays(
        kept,
        by=("ea", "stratum"),
        product="product",
        period="period",
        price="price",
        value="quantity",
        periods=periods,
    )
    made, failed = [], []
    for block in arrays:
        ea, stratum = str(block.key[0]), str(block.key[1])
        recipe = context.plan.index.recipe(context.references.tree.ancestry(ea))
        index, message = _try_index(block, recipe, context, periods)
        if message:
            failed.append((ea, stratum, message))
        if index is not None:
            made.append(_series(block, index, recipe, periods))
    context.workspace.write("ea_indexes", pl.concat(made) if made else pl.DataFrame(schema=_EMPTY))
    context.workspace.write("failures", _failures(failed, context))
    return len(made)


def _try_index(block: Block, recipe: Recipe, context: Context, periods: pl.Series) -> tuple[Array | None, str]:
    """The index, if one can be made, and what is wrong with it, if anything is."""
    prices, quantities = block.prices, block.values
    assert quantities is not None
    priced = np.flatnonzero(np.isfinite(prices).any(axis=1))
    span = slice(int(priced[0]), int(priced[-1]) + 1)
    labels = [context.label(day) for day in periods[span.start : span.stop]]
    try:
        index = np.full(len(prices), np.nan)
        index[span] = make_index(prices[span], quantities[span], recipe)
    except UnconnectedPeriods as error:
        return None, str(error.labelled(labels, f"{block.key[0]} {block.key[1]}".strip()))
    gaps = np.flatnonzero(~np.isfinite(index[priced[0] :])) + priced[0]
    if gaps.size == 0:
        return index, ""
    first, last = context.label(periods[int(gaps[0])]), context.label(periods[int(gaps[-1])])
    return index, f"no level in {gaps.size} of {len(prices)} periods ({first} to {last}): no product, or none in common"


def _series(block: Block, index: Array, recipe: Recipe, periods: pl.Series) -> pl.DataFrame:
    assert block.values is not None
    turnover = block.prices * block.values
    churn = measure_churn(block.prices, turnover)
    movement = np.full(len(index), np.nan)
    movement[1:] = index[1:] / index[:-1]
    frame = pl.DataFrame(
        {
            "period": periods,
            "level": 100.0 * index,
            "movement": movement,
            "turnover": np.nansum(turnover, axis=1),
            "products": churn.products,
            "matched": churn.matched,
            "entering": churn.entering,
            "exiting": churn.exiting,
            "matched_share": churn.matched_share,
            "entering_share": churn.entering_share,
            "exiting_share": churn.exiting_share,
        }
    ).with_columns(pl.col(pl.Float64).fill_nan(None))
    return frame.select(
        pl.lit(str(block.key[0])).alias("ea"),
        pl.lit(str(block.key[1])).alias("stratum"),
        pl.lit(str(recipe)).alias("method"),
        pl.all(),
    )


def _failures(failed: list[tuple[str, str, str]], context: Context) -> pl.DataFrame:
    schema = {"ea": pl.String, "stratum": pl.String, "message": pl.String}
    given = answers(context.plan).filter(pl.col("gate") == "index-failed").unique("subject", keep="last")
    return pl.DataFrame(failed, schema=schema, orient="row").join(
        given.select(pl.col("subject").alias("ea"), "answered_by", "answer"), on="ea", how="left"
    )


_EMPTY = {
    "ea": pl.String,
    "stratum": pl.String,
    "period": pl.Date,
    "method": pl.String,
    **dict.fromkeys(("level", "movement", "turnover"), pl.Float64),
    **dict.fromkeys(("products", "matched", "entering", "exiting"), pl.Int64),
    **dict.fromkeys(("matched_share", "entering_share", "exiting_share"), pl.Float64),
}
