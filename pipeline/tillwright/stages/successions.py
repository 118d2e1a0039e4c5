"""Stage 2: relaunches, proposed from what items look like and how they sell, and decided."""

from __future__ import annotations

from collections.abc import Sequence

import polars as pl

from tillwright.plan import SuccessionRules
from tillwright.stages.context import Context
from tillwright.stages.identity import assign
from tillwright.stages.pairing import Successions, normalise, propose
from tillwright.store.decisions import Decision
from tillwright.tables import TABLES, Types

RULE = "rule"
# A price this far below the item's median is taken for a clearance or a promotion, not for its price.
REGULAR = 0.75
# A description that so many items of one brand and aggregate share names a kind of goods, not an article.
NAMESAKES = 12
# Opening and closing figures rest on so many periods.
PERIODS = 3
EVIDENCE = (
    *("similarity", "same_brand", "size_ratio", "price_ratio", "unit_price_ratio", "turnover_ratio", "gap"),
    *("score", "runner_up", "kind"),
)


def find_successions(context: Context, decisions: Sequence[Decision]) -> int:
    """Write `successions`: pairs proposed, with what became of them; the number accepted.

    A person's last decision on a pair stands. A pair that nobody has decided is accepted if its score is at least the
    plan's `accept` and leads that of the best other pair of either item by `lead`, and asked about if not; it is
    displaced if one of its items is in a pair that a person has accepted.
    """
    rules, workspace = context.plan.successions, context.workspace
    empty = pl.DataFrame(schema=TABLES["successions"].columns)
    if rules is None:
        workspace.write("successions", empty)
        return 0
    settings = Successions(accept=rules.accept, ask=rules.ask, gap=rules.gap, overlap=rules.overlap)
    proposed = propose(_describe(context), settings=settings).select("feed", "ea", "old_item", "new_item", *EVIDENCE)
    decided = _frame(decisions, assign(context))
    table = proposed.join(decided, on=["feed", "old_item", "new_item"], how="full", coalesce=True).with_columns(
        pl.coalesce("ea", "decided_ea").alias("ea")
    )
    table = _with_status(table, rules).drop("decided_ea").filter(pl.col("ea").is_not_null())
    workspace.write("successions", table)
    return table.filter(pl.col("status") == "accepted").height


def _with_status(table: pl.DataFrame, rules: SuccessionRules) -> pl.DataFrame:
    by_person = pl.col("verdict").is_not_null()
    taken = table.filter(pl.col("verdict") == "accepted")
    blocked = pl.struct("feed", "old_item").is_in(taken.select(pl.struct("feed", "old_item")).to_series().implode())
    blocked |= pl.struct("feed", "new_item").is_in(taken.select(pl.struct("feed", "new_item")).to_series().implode())
    lead = pl.col("score") - pl.col("runner_up").fill_null(0.0)
    clear = (pl.col("score") >= rules.accept) & (lead >= rules.lead)
    status = (
        pl.when(by_person)
        .then(pl.col("verdict"))
        .when(blocked)
        .then(pl.lit("displaced"))
        .when(clear)
        .then(pl.lit("accepted"))
        .otherwise(pl.lit("asked"))
    )
    return table.with_columns(
        status.alias("status"),
        pl.when(by_person).then(pl.col("decided_by")).when(status != "asked").then(pl.lit(RULE)).alias("decided_by"),
    ).drop("verdict")


def _frame(decisions: Sequence[Decision], assigned: pl.DataFrame) -> pl.DataFrame:
    """The last decision on each pair, with the elementary aggregate of its new item."""
    rows = [(one.feed, one.old_item, one.new_item, one.verdict, one.by, one.why, one.at) for one in decisions]
    names = ("feed", "old_item", "new_item", "verdict", "decided_by", "why")
    schema: Types = {**dict.fromkeys(names, pl.String), "decided": pl.Datetime("us")}
    frame = pl.DataFrame(rows, schema=schema, orient="row").unique(
        ["feed", "old_item", "new_item"], keep="last", maintain_order=True
    )
    where = assigned.select("feed", pl.col("item").alias("new_item"), pl.col("ea").alias("decided_ea"))
    return frame.join(where, on=["feed", "new_item"], how="left")


def _describe(context: Context) -> pl.DataFrame:
    """What `pairing.propose` takes: one row per item, with its figures of the first and last periods sold."""
    items = context.workspace.read("items")
    sold = _sold(context)
    key = ["feed", "item"]
    regular = sold.filter(pl.col("price") >= REGULAR * pl.col("price").median().over(key))
    figures = sold.group_by(key).agg(
        pl.col("number").min().alias("first_period"),
        pl.col("number").max().alias("last_period"),
        pl.col("quantity").sum(),
        pl.col("turnover").sum(),
        pl.len().cast(pl.Int64).alias("periods_sold"),
    )
    ends = (
        regular.sort("number")
        .group_by(key)
        .agg(
            (pl.col("turnover").head(PERIODS).sum() / pl.col("quantity").head(PERIODS).sum()).alias("opening_price"),
            (pl.col("turnover").tail(PERIODS).sum() / pl.col("quantity").tail(PERIODS).sum()).alias("closing_price"),
            pl.col("turnover").head(PERIODS).mean().alias("opening_turnover"),
            pl.col("turnover").tail(PERIODS).mean().alias("closing_turnover"),
        )
    )
    last = sold.group_by("feed").agg(pl.col("number").max().alias("last_known"))
    words = items.select(*key, "description", "brand", "size_amount", "size_measure")
    aggregates = assign(context).select(*key, "ea")
    named = words.join(aggregates, on=key).with_columns(normalise(pl.col("description")).alias("words"))
    distinct = named.filter(pl.len().over("feed", "ea", "brand", "words") <= NAMESAKES).drop("words")
    return distinct.join(figures, on=key).join(ends, on=key, how="left").join(last, on="feed")


def _sold(context: Context) -> pl.DataFrame:
    """feed, item, number of the period, quantity, turnover and price of counted sales within the calendar."""
    periods = context.periods().select("period").with_row_index("number")
    parts = context.workspace.parts("sales", context.active_deliveries())
    figures = pl.col("quantity", "turnover").sum().cast(pl.Float64)
    sums = (
        pl.scan_parquet(parts, glob=False).filter("counted").group_by("feed", "item", "period").agg(figures).collect()
    )
    return (
        sums.filter(pl.col("quantity") > 0, pl.col("turnover") > 0)
        .join(periods.with_columns(pl.col("number").cast(pl.Int64)), on="period")
        .with_columns((pl.col("turnover") / pl.col("quantity")).alias("price"))
        .sort("feed", "item", "number")
    )
