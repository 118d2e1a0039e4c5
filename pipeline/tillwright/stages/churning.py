"""Stage 8: how items and products come and go, and how long products live."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import polars as pl

from tillwright.kernels.churn import count_products, measure_flows, measure_lives, share_matched
from tillwright.kernels.pairs import Positions
from tillwright.panels import Block, PanelArrays, to_arrays
from tillwright.stages.context import Context
from tillwright.tables import TABLES

GROUP = ("ea", "stratum")
KEY = (*GROUP, "period")
FLOWS = tuple(f"{flow}{kind}" for kind in ("", "_turnover") for flow in ("continuing", "entering", "exiting"))


def assess_churn(context: Context) -> int:
    """Write `churn` and `lives`; the number of products whose life is measured.

    Products are those of `panel`, before anything is set aside; items are the codes as sold. An item or a product
    counts as sold in a period whose returns leave positive sales.
    """
    workspace, periods, links = context.workspace, context.periods()["period"], link_positions(context)
    panel = workspace.read("panel").with_columns(pl.col("turnover").cast(pl.Float64))
    products = _blocks(panel, "product", periods)
    items = _blocks(price_items(sum_items(context)), ("feed", "item"), periods)
    rows = [_flows(block, periods, links) for block in products]
    shares = [_shares(block, periods, links, "item") for block in items]
    of_items = _together("churn", shares, (*KEY, "matched_by_item", "linked_by_item"))
    of_products = _together(
        "churn", rows, [name for name in TABLES["churn"].columns if name not in of_items or name in KEY]
    )
    workspace.write("churn", of_products.join(of_items, on=KEY, how="left"))
    lives = _lives(panel, workspace.read("products"), periods)
    workspace.write("lives", lives)
    return lives.height


def sum_items(context: Context) -> pl.DataFrame:
    """Exact quantity and turnover by ea, stratum, feed, item and period of counted sales within the calendar."""
    periods = context.periods()["period"]
    assigned = context.workspace.read("products").filter(pl.col("ea").is_not_null()).select("feed", "item", "ea")
    return (
        pl.scan_parquet(context.workspace.parts("sales", context.active_deliveries()), glob=False)
        .filter("counted", pl.col("period").is_between(periods[0], periods[-1]))
        .join(assigned.lazy(), on=["feed", "item"])
        .group_by(*GROUP, "feed", "item", "period")
        .agg(pl.col("quantity", "turnover").sum())
        .collect()
    )


def price_items(sums: pl.DataFrame) -> pl.DataFrame:
    """Those whose returns leave positive sales, as float64, with their unit value."""
    sold = sums.filter(pl.col("quantity") > 0, pl.col("turnover") > 0)
    numbers = sold.with_columns(pl.col("quantity", "turnover").cast(pl.Float64))
    return numbers.with_columns((pl.col("turnover") / pl.col("quantity")).alias("price"))


def link_positions(context: Context) -> Positions:
    """(T,) position of the last link month before each period, −1 where there is none."""
    years = context.link_years(context.periods()["period"])
    return np.searchsorted(years, years, side="left") - 1


def _blocks(rows: pl.DataFrame, product: str | tuple[str, ...], periods: pl.Series) -> PanelArrays:
    return to_arrays(rows, by=GROUP, product=product, period="period", price="price", value="turnover", periods=periods)


def _flows(block: Block, periods: pl.Series, links: Positions) -> pl.DataFrame:
    """Rows of products; the first period has none before it, so nothing can be said to enter or leave."""
    prices, turnover = block.prices, block.values
    assert turnover is not None
    flows = measure_flows(prices, turnover)
    figures = pl.DataFrame({name: getattr(flows, name) for name in FLOWS})
    known = figures.with_columns(pl.when(pl.int_range(pl.len()) > 0).then(pl.all()))
    counts = pl.DataFrame({"products": count_products(prices)})
    return pl.concat([_shares(block, periods, links, "product"), counts, known], how="horizontal")


def _shares(block: Block, periods: pl.Series, links: Positions, unit: str) -> pl.DataFrame:
    """Shares of turnover matched with the period before and with the last link month."""
    assert block.values is not None
    shares = {
        f"matched_by_{unit}": share_matched(block.prices, block.values),
        f"linked_by_{unit}": share_matched(block.prices, block.values, against=links),
    }
    ea, stratum = (pl.lit(str(part)).alias(name) for name, part in zip(GROUP, block.key, strict=True))
    return pl.DataFrame({"period": periods, **shares}).with_columns(ea, stratum, pl.col(pl.Float64).fill_nan(None))


def _lives(panel: pl.DataFrame, products: pl.DataFrame, periods: pl.Series) -> pl.DataFrame:
    """Rows of products over all strata; a life is seen to begin and end within what is known of its feed."""
    feeds = products.select("ea", "product", "feed").unique()
    sold = panel.filter(pl.col("price").is_not_null()).select("ea", "product", "period").unique()
    arrays = to_arrays(
        sold.join(feeds, on=["ea", "product"]).with_columns(pl.lit(1.0).alias("price")),
        by=("feed",),
        product=("ea", "product"),
        period="period",
        price="price",
        periods=periods,
        value=None,
    )
    parts = [_block_lives(arrays, block, cut) for block, cut in zip(arrays, arrays.cuts, strict=True)]
    return _together("lives", parts, list(TABLES["lives"].columns))


def _block_lives(arrays: PanelArrays, block: Block, cut: slice) -> pl.DataFrame:
    lives = measure_lives(block.prices)
    return (
        arrays.products[cut]
        .select("ea", "product")
        .with_columns(
            arrays.periods.gather(lives.first).alias("first_period"),
            arrays.periods.gather(lives.last).alias("last_period"),
            pl.Series("length", lives.length),
            pl.Series("periods_sold", lives.sold),
            pl.Series("begins", lives.begins),
            pl.Series("ends", lives.ends),
            pl.Series("complete", lives.complete),
        )
    )


def _together(name: str, parts: list[pl.DataFrame], columns: Sequence[str]) -> pl.DataFrame:
    """Those columns of a table from its parts one below the other, of which there may be none."""
    declared = TABLES[name].columns
    typed = [part.select(pl.col(column).cast(declared[column]) for column in columns) for part in parts]
    return pl.concat([pl.DataFrame(schema={column: declared[column] for column in columns}), *typed])
