"""Stage 5: an index for every elementary aggregate and stratum."""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import dataclass

import numpy as np
import polars as pl

from tillwright.errors import TooFewObservations, UnconnectedPeriods
from tillwright.kernels.churn import measure_churn
from tillwright.kernels.filtered_chain import chain_links
from tillwright.kernels.methods import Failure, make_indexes
from tillwright.kernels.network import Flags
from tillwright.kernels.recipes import Recipe
from tillwright.panels import Array, Block, PanelArrays, to_arrays
from tillwright.stages.context import Context
from tillwright.stages.hedonics import Adjusted, Adjustment, adjust, find_adjustments, write_diagnostics
from tillwright.stages.intake import answers


def compile_indexes(context: Context) -> int:
    """Write `ea_indexes` and `failures`; the number of indexes made.

    An elementary aggregate that no index can be made of is a row of `failures`; the others go on.
    """
    periods = context.periods()["period"]
    adjusted: list[Adjusted] = []
    groups = index_groups(context, context.workspace.read("screened"), adjusted)
    failed = [(*group.key, group.message) for group in groups if group.message]
    failed += _empty_leaves(context, periods, {group.key[0] for group in groups})
    made = [_series(group.block, group.index, str(group.way), periods) for group in groups if group.index is not None]
    context.workspace.write("ea_indexes", pl.concat(made) if made else pl.DataFrame(schema=_EMPTY))
    context.workspace.write("failures", _failures(failed, context))
    write_diagnostics(context, adjusted)
    return len(made)


@dataclass(frozen=True, slots=True)
class Group:
    """One elementary aggregate and stratum: its panel, how its index is made, the index, and what is wrong with it."""

    block: Block
    way: Recipe | Adjustment
    index: Array | None
    message: str

    @property
    def key(self) -> tuple[str, str]:
        """Its elementary aggregate and stratum."""
        return str(self.block.key[0]), str(self.block.key[1])


def index_groups(context: Context, screened: pl.DataFrame, adjusted: list[Adjusted]) -> list[Group]:
    """Every group of a screened panel with its index, base 1; `adjusted` collects those made hedonically.

    Prices that were kept make an index, and those imputed, which only groups compiled by elementary formulas have.
    """
    periods = context.periods()["period"]
    used = screened.filter(pl.col("verdict") != "excluded")
    arrays, groups = _code(used, "quantity", periods), []
    linked = (
        None if used["linked"].all() else _code(used.with_columns(pl.col("linked").cast(pl.Int8)), "linked", periods)
    )
    for block, cut, adjustment in zip(arrays, arrays.cuts, find_adjustments(context, arrays), strict=True):
        way = adjustment or context.plan.index.recipe(context.references.tree.ancestry(str(block.key[0])))
        left_out = None if linked is None or linked.values is None else linked.values[:, cut] == 0
        groups.append(Group(block, way, *_try_index(block, way, left_out, context, periods, adjusted)))
    return groups


def _code(rows: pl.DataFrame, value: str, periods: pl.Series) -> PanelArrays:
    return to_arrays(
        rows,
        by=("ea", "stratum"),
        product="product",
        period="period",
        price="price",
        value=value,
        periods=periods,
    )


def _try_index(
    block: Block,
    way: Recipe | Adjustment,
    left_out: Flags | None,
    context: Context,
    periods: pl.Series,
    adjusted: list[Adjusted],
) -> tuple[Array | None, str]:
    """The index, if one can be made, and what is wrong with it, if anything is; one made hedonically joins `adjusted`.

    Windows that fall apart are passed over; what is made of others stands.
    """
    prices, quantities = block.prices, block.values
    assert quantities is not None
    priced = np.flatnonzero(np.isfinite(prices).any(axis=1))
    cut = slice(int(priced[0]), int(priced[-1]) + 1)
    index, message = np.full(len(prices), np.nan), ""
    span = periods[cut.start : cut.stop]
    years = context.link_years(span)
    problems: Sequence[UnconnectedPeriods | TooFewObservations]
    if isinstance(way, Recipe) and way.is_bilateral and way.form == "chained" and left_out is not None:
        index[cut], problems = chain_links(prices[cut], quantities[cut], way.method, left_out[cut]), []
    elif isinstance(way, Recipe):
        failures: list[Failure] = []
        index[cut] = make_indexes(prices[cut], quantities[cut], [way], years=years, failures=failures)[0, 0]
        problems = [failure.reason for failure in failures]
    else:
        key = (str(block.key[0]), str(block.key[1]))
        adjusted.append(adjust(prices[cut], quantities[cut], way, periods=span, years=years, key=key))
        index[cut], problems = adjusted[-1].index, adjusted[-1].problems
    if problems:
        labels = [context.label(day) for day in span]
        more = f" {len(problems) - 1} more of its periods or windows fail likewise." if len(problems) > 1 else ""
        message = str(problems[0].labelled(labels, f"{block.key[0]} {block.key[1]}".strip(), more))
    gaps = np.flatnonzero(~np.isfinite(index))
    if gaps.size and not message:
        first, last = context.label(periods[int(gaps[0])]), context.label(periods[int(gaps[-1])])
        message = (
            f"no level in {gaps.size} of {len(prices)} periods, between {first} and {last}: no product, none "
            "in common, or no window that reaches across the gap; imputed from the heading above"
        )
    return (index if np.isfinite(index).any() else None), message


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


def _series(block: Block, index: Array, method: str, periods: pl.Series) -> pl.DataFrame:
    assert block.values is not None
    sold = np.where(block.values > 0, block.prices, np.nan)
    imputed = np.isfinite(block.prices) & (block.values == 0)
    turnover = sold * block.values
    churn = measure_churn(sold, turnover)
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
            "imputed": imputed.sum(axis=1),
        }
    ).with_columns(pl.col(pl.Float64).fill_nan(None))
    return frame.select(
        pl.lit(str(block.key[0])).alias("ea"),
        pl.lit(str(block.key[1])).alias("stratum"),
        pl.lit(method).alias("method"),
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
    **dict.fromkeys(("products", "matched", "entering", "exiting", "imputed"), pl.Int64),
    **dict.fromkeys(("matched_share", "entering_share", "exiting_share"), pl.Float64),
}
