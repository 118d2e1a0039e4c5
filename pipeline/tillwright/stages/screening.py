"""Stage 4: a verdict and a reason on every row of the panel, and rows for prices that are imputed.

Nothing is deleted.  The screens work one after the other, each on what those before it kept, so a row
carries the first reason that applies: no net sales, an extreme relative, clearance, small sales.  What
is then missing is imputed, where the plan says so.

Verdicts on clearance and small sales rest on later periods too: a further one can change those of the last
`ahead` periods, of the last period, and of a product that is back after it seemed to be sold off.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import polars as pl

from tillwright.choices import NO_NET_SALES, SCREEN_REASONS, Screen
from tillwright.kernels.imputation import Elementary, impute_class_mean
from tillwright.kernels.network import Flags
from tillwright.kernels.pairs import Array
from tillwright.kernels.screening import SmallSales, find_clearance, find_extreme, find_small_sales, last_sold
from tillwright.panels import PanelArrays, to_arrays
from tillwright.plan import Clearance, Screening
from tillwright.stages.context import Context
from tillwright.tables import TABLES

KEY = ("ea", "stratum", "product", "period")


def screen(context: Context) -> int:
    """Write `screened`; the number of rows set aside."""
    screened = screen_panel(context, context.workspace.read("panel"), context.plan.screening)
    context.workspace.write("screened", screened)
    return int((screened["verdict"] == "excluded").sum())


def screen_panel(context: Context, panel: pl.DataFrame, screening: Screening) -> pl.DataFrame:
    """The panel with a verdict (kept, excluded, imputed) and a reason on every row, in order of its key.

    An imputed row has a price, and no quantity, turnover or lines: 0 of each, so that sums over `screened` are those
    over `panel`. No row is imputed where the panel has one, even if it is set aside.

    `linked` is false where a product sells too little in the link that ends in the period, and beside that screen also
    where its price is imputed: a chained bilateral index is made without it in that link.
    """
    arrays = to_arrays(
        panel,
        by=("ea", "stratum"),
        product="product",
        period="period",
        price="price",
        value="quantity",
        periods=context.periods()["period"],
    )
    tree = context.references.tree
    formulas = [context.plan.elementary_formula(tree.ancestry(ea)) for ea in arrays.keys["ea"]]
    found = _find(arrays, screening, formulas)
    reasons = pl.concat([_rows(arrays, flags, reason) for reason, flags in found.excluded.items()])
    screened = panel.join(reasons, on=KEY, how="left", maintain_order="left").with_columns(
        pl.when(pl.col("price").is_null())
        .then(pl.lit(NO_NET_SALES))
        .otherwise(pl.col("reason").fill_null(""))
        .alias("reason")
    )
    verdict = pl.when(pl.col("reason") == "").then(pl.lit("kept")).otherwise(pl.lit("excluded"))
    imputed = _rows(arrays, np.isfinite(found.imputed), SCREEN_REASONS["imputation"], price=found.imputed)
    imputed = imputed.join(panel, on=KEY, how="anti").with_columns(
        pl.lit("imputed").alias("verdict"), pl.lit(screening.small == "off").alias("linked")
    )
    unlinked = _rows(arrays, found.unlinked, "").select(*KEY, pl.lit(False).alias("linked"))
    nothing = [pl.lit(0).cast(panel.schema[name]).alias(name) for name in ("quantity", "turnover", "lines")]
    screened = screened.with_columns(verdict.alias("verdict")).join(unlinked, on=KEY, how="left", maintain_order="left")
    screened = screened.with_columns(pl.col("linked").fill_null(True))
    columns = list(TABLES["screened"].columns)
    return pl.concat([screened.select(columns), imputed.with_columns(nothing).select(columns)]).sort(KEY)


@dataclass(frozen=True, slots=True)
class _Found:
    """(T, N) flags by reason, no cell with more than one; small sales in a link; imputed prices, NaN elsewhere."""

    excluded: dict[str, Flags]
    unlinked: Flags
    imputed: Array


def _find(arrays: PanelArrays, screening: Screening, formulas: Sequence[Elementary | None]) -> _Found:
    """What the screens say of every price; each ea and stratum by itself, imputed by its own formula."""
    assert arrays.values is not None
    prices = arrays.prices
    extreme, imputed = _find_extreme(prices, screening), np.full(prices.shape, np.nan)
    clearance, small, unlinked = (np.zeros(prices.shape, dtype=bool) for _ in range(3))
    kept = np.where(extreme, np.nan, prices)
    for cut, formula in zip(arrays.cuts, formulas, strict=True):
        left, quantities = kept[:, cut], arrays.values[:, cut]
        if screening.clearance != "off":
            clearance[:, cut] = _find_sold_off(prices[:, cut], left, quantities, screening.clearance)
            left[clearance[:, cut]] = np.nan
        if screening.small != "off":
            links = find_small_sales(left, quantities, factor=screening.small.factor)
            unlinked[:, cut], small[:, cut] = links.small, find_unused(left, links)
            left[small[:, cut]] = np.nan
        if screening.imputation != "off" and formula is not None:
            made = impute_class_mean(left, formula, screening.imputation.run, screening.imputation.limit)
            imputed[:, cut] = np.where(made.imputed, made.prices, np.nan)
    flags: dict[Screen, Flags] = {"extreme": extreme, "clearance": clearance, "small": small}
    return _Found({SCREEN_REASONS[screen]: flag for screen, flag in flags.items()}, unlinked, imputed)


def _find_extreme(prices: Array, screening: Screening) -> Flags:
    extreme = np.zeros(prices.shape, dtype=bool)
    if screening.extreme != "off":
        sold = np.isfinite(prices.T)
        column = np.nonzero(sold)[0]
        starts = np.diff(column, prepend=-1) > 0
        extreme.T[sold] = find_extreme(prices.T[sold], starts, *screening.extreme)
    return extreme


def _find_sold_off(prices: Array, left: Array, quantities: Array, clearance: Clearance) -> Flags:
    """Clearance among the prices `left`, of products that have gone by all of their `prices`.

    A product is not gone because its last price was set aside.
    """
    sold = np.isfinite(prices)
    gone = last_sold(sold)[-1] < np.flatnonzero(sold.any(axis=1))[-1]
    found: Flags = find_clearance(left, quantities, **clearance.model_dump()) & gone
    return found


def find_unused(prices: Array, links: SmallSales) -> Flags:
    """Whether each price is matched with one before or after it, and the product sells too little in every such link.

    The filter on small sales is one of links, a verdict one of prices, which take part in the link that ends in their
    period and in the one that begins there. A price that either uses is kept: set aside because of the first alone, a
    product would lack its way down into a promotion and have its way up again, and a chain would drift. A chained
    bilateral index also leaves out the single links; direct and multilateral ones know no such links and take the
    prices that are kept.
    """
    rows = np.flatnonzero(np.isfinite(prices).any(axis=1))
    used, small = links.used.copy(), links.small.copy()
    used[rows[:-1]] |= links.used[rows[1:]]
    small[rows[:-1]] |= links.small[rows[1:]]
    unused: Flags = small & ~used
    return unused


def _rows(arrays: PanelArrays, flags: Flags, reason: str, **values: Array) -> pl.DataFrame:
    """Key, reason and values of the cells with a flag."""
    column, row = np.nonzero(flags.T)
    return arrays.products[column].with_columns(
        arrays.periods[row].alias("period"),
        pl.lit(reason).alias("reason"),
        *(pl.Series(name, value[row, column]) for name, value in values.items()),
    )
