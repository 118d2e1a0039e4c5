"""Stage 5: an index for every elementary aggregate and stratum."""

from __future__ import annotations

from collections.abc import Collection

import numpy as np
import polars as pl

from tillwright.kernels.churn import measure_churn
from tillwright.kernels.methods import Failure, make_indexes
from tillwright.kernels.recipes import Recipe, Years
from tillwright.panels import Array, Block, to_arrays
from tillwright.periods import year_and_month
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
    failed += _empty_leaves(context, periods, {ea for ea, _ in arrays.keys.iter_rows()})
    context.workspace.write("ea_indexes", pl.concat(made) if made else pl.DataFrame(schema=_EMPTY))
    context.workspace.write("failures", _failures(failed, context))
    return len(made)


def _try_index(block: Block, recipe: Recipe, context: Context, periods: pl.Series) -> tuple[Array | None, str]:
    """The index, if one can be made, and what is wrong with it, if anything is.

    Windows that fall apart are passed over; what is made of others stands.
    """
    prices, quantities = block.prices, block.values
    assert quantities is not None
    priced = np.flatnonzero(np.isfinite(prices).any(axis=1))
    cut = slice(int(priced[0]), int(priced[-1]) + 1)
    failures: list[Failure] = []
    index, message = np.full(len(prices), np.nan), ""
    years = _link_years(context, periods[cut.start : cut.stop])
    index[cut] = make_indexes(prices[cut], quantities[cut], [recipe], years=years, failures=failures)[0, 0]
    if failures:
        labels = [context.label(day) for day in periods[cut.start : cut.stop]]
        message = str(failures[0].reason.labelled(labels, f"{block.key[0]} {block.key[1]}".strip()))
    gaps = np.flatnonzero(~np.isfinite(index))
    if gaps.size and not message:
        first, last = context.label(periods[int(gaps[0])]), context.label(periods[int(gaps[-1])])
        message = (
            f"no level in {gaps.size} of {len(prices)} periods, between {first} and {last}: no product, none "
            "in common, or no window that reaches across the gap; imputed from the heading above"
        )
    return (index if np.isfinite(index).any() else None), message


def _link_years(context: Context, periods: pl.Series) -> Years:
    """The year that each period belongs to, ending in the link month of the weights."""
    ends = (year_and_month(day, context.plan.plan.period) for day in periods)
    link_month = context.plan.weights.link_month
    return np.array([year + (month > link_month) for year, month in ends], dtype=np.int64)


def _empty_leaves(context: Context, periods: pl.Series, compiled: Collection[str]) -> list[tuple[str, str, str]]:
    """Leaves that weigh something and have no product at all, and outside series with periods missing."""
    weights, outside = context.references.weights, context.references.outside
    weighing = set(weights.filter(pl.col("weight") > 0)["heading"])
    surveyed = outside.filter(pl.col("period").is_in(periods.implode())).group_by("heading").len()
    figures = dict(surveyed.iter_rows())
    failed = []
    for leaf in context.references.tree.leaves:
        if leaf in set(outside["heading"]):
            missing = len(periods) - figures.get(leaf, 0)
            if missing:
                failed.append((leaf, "", f"the outside series has no figure in {missing} of {len(periods)} periods"))
        elif leaf in weighing and leaf not in compiled:
            failed.append((leaf, "", "no product of it was sold in any period; imputed from the heading above"))
    return failed


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
