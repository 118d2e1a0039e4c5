"""Stage 8: which definition of products is homogeneous and yet lasts, for every elementary aggregate.

Candidates are scored by MARS (see `kernels.mars`) on what a compile left in its workspace.
"""

from __future__ import annotations

from dataclasses import replace
from itertools import combinations
from pathlib import Path
from typing import TypeAlias

import numpy as np
import polars as pl

from tillwright.errors import CallError
from tillwright.kernels.churn import count_products
from tillwright.kernels.mars import Groups, scores
from tillwright.kernels.network import Flags
from tillwright.kernels.pairs import Array, Positions
from tillwright.panels import PanelArrays, to_arrays
from tillwright.plan import ITEM_FACTS, Plan
from tillwright.queries import Resources
from tillwright.stages.churning import link_positions, price_items, sum_items
from tillwright.stages.context import Context
from tillwright.store.ledger import Ledger
from tillwright.store.references import open_plan
from tillwright.store.workspace import Workspace
from tillwright.tables import TABLES, Types

Candidate: TypeAlias = tuple[str, ...]

ITEM: Candidate = ("item",)
PLAN: Candidate = ("(plan)",)
SINGLES = ("brand", "size", "description")
# So many attributes alone and in pairs are ten candidates.
MOST_ATTRIBUTES = 4
# Decimals; scores are sums whose order depends on the candidate, and equal ones differ by rounding.
TIE = 9
NEEDED = ("deliveries", "items", "products", "panel")


def assess_definitions(plan: Path, workspace: Workspace) -> pl.DataFrame:
    """Write `definitions` and `definition_scores` of the last compile; the latter with the labels of the aggregates.

    Raises
    ------
    CallError : nothing has been compiled.
    WorkspaceBusy : a compile is under way.
    """
    read, references = open_plan(plan)
    missing = [name for name in NEEDED if not workspace.path(name).is_file()]
    if missing:
        raise CallError(f"The workspace {workspace.root} has no table '{missing[0]}' yet; compile the plan first.")
    with Ledger(workspace.ledger):
        context = Context(read, references, workspace, Resources(spill=workspace.spill))
        last = workspace.read("panel").select(pl.col("period").max()).item()
        by_period = score_definitions(replace(context, through=last))
        workspace.write("definitions", by_period.drop("products"))
        totals = _total(by_period)
        workspace.write("definition_scores", totals)
    labels = pl.DataFrame(list(references.tree.labels.items()), schema=["ea", "label"], orient="row")
    return totals.join(labels, on="ea", how="left", maintain_order="left")


def score_definitions(context: Context) -> pl.DataFrame:
    """`definitions`, and how many products each definition makes; rows in order of ea and candidate.

    Items are joined by a candidate if they are of one feed and agree in all its attributes; one that lacks any stands
    alone. "item" is each item by itself, "(plan)" the products of the compile, with its successions. Prices
    are per unit of `products`, over all strata together; where the plan prices by contents, items
    measured in another way than most of the turnover is are left out, for their prices cannot be compared.

    The base is the last link month before the period, or the last month with sales before that: the first of the
    thirteen months over which Chessa (2019, MARS; 2016, QU-method) follows a year's products, December being
    the usual link month. Before the first link month it is the first period with sales, which
    has no score itself.
    """
    items = _described(context)
    arrays = to_arrays(
        _sold(context),
        by=("ea",),
        product=("feed", "item"),
        period="period",
        price="price",
        value="quantity",
        periods=context.periods()["period"],
    )
    links = link_positions(context)
    parts = [_score_aggregate(arrays, number, items, context.plan, links) for number in range(len(arrays.starts))]
    schema: Types = {**TABLES["definitions"].columns, "products": pl.Int64}
    typed = [part.select(pl.col(name).cast(kind) for name, kind in schema.items()) for part in parts]
    return pl.concat([pl.DataFrame(schema=schema), *typed])


def _sold(context: Context) -> pl.DataFrame:
    """ea, feed, item, period, price, quantity in units of `products`, and turnover, of what is measured alike."""
    workspace = context.workspace
    by_stratum = sum_items(context)
    sums = by_stratum.group_by("ea", "feed", "item", "period").agg(pl.col("quantity", "turnover").sum())
    units = workspace.read("products").select("feed", "item", "units_per_item")
    measures = workspace.read("items").select("feed", "item", pl.col("size_measure").fill_null("").alias("measure"))
    by_contents = [ea for ea in sums["ea"].unique() if context.definition(ea).unit_pricing]
    known = price_items(sums).join(units, on=["feed", "item"]).join(measures, on=["feed", "item"])
    alike = pl.when(pl.col("ea").is_in(by_contents)).then("measure").otherwise(pl.lit(""))
    of_measure = pl.col("turnover").sum().over("ea", "measure")
    return (
        known.with_columns(alike.alias("measure"))
        .filter(of_measure == of_measure.max().over("ea"))
        .with_columns(pl.col("quantity") * pl.col("units_per_item"), pl.col("price") / pl.col("units_per_item"))
    )


def _described(context: Context) -> pl.DataFrame:
    """ea, feed, item, product, and what is told of each item, as text; null where nothing is."""
    workspace = context.workspace
    told = {name: pl.col(name) for name in ITEM_FACTS}
    listed = [name for master in context.plan.item_master for name in master.attributes]
    told |= {name: pl.col("attributes").str.json_path_match(f"$['{name}']") for name in listed if name not in told}
    facts = [fact.str.strip_chars().replace("", None).alias(_column(name)) for name, fact in told.items()]
    items = workspace.read("items").select("feed", "item", *facts)
    return workspace.read("products").select("ea", "feed", "item", "product").join(items, on=["feed", "item"])


def _column(name: str) -> str:
    """The column of a fact; an attribute may be called as any other column is."""
    return f"told {name}"


def _score_aggregate(
    arrays: PanelArrays, number: int, items: pl.DataFrame, plan: Plan, links: Positions
) -> pl.DataFrame:
    """Rows of one elementary aggregate."""
    cut = arrays.cuts[number]
    assert arrays.values is not None
    prices, quantities = arrays.prices[:, cut], arrays.values[:, cut]
    known = arrays.products[cut].join(items, on=["ea", "feed", "item"], how="left", maintain_order="left")
    turnover = np.nan_to_num(prices * quantities)
    bases = _bases(count_products(prices) > 0, links)
    rows = np.flatnonzero(bases >= 0)
    parts = []
    for candidate in _candidates(plan, known, turnover.sum(axis=0)):
        groups = _group(known, candidate)
        match, homogeneity = _measure(prices, quantities, groups, bases)
        frame = pl.DataFrame(
            {
                "period": arrays.periods.gather(rows),
                "base": arrays.periods.gather(bases[rows]),
                "match": match[rows],
                "r2": homogeneity[rows],
                "score": (match * homogeneity)[rows],
                "turnover": turnover.sum(axis=1)[rows],
            }
        )
        ea, products = pl.lit(known["ea"][0]).alias("ea"), pl.lit(len(np.unique(groups))).alias("products")
        parts.append(frame.with_columns(ea, products, pl.lit(" + ".join(candidate)).alias("definition")))
    return pl.concat(parts)


def _candidates(plan: Plan, known: pl.DataFrame, turnover: Array) -> list[Candidate]:
    """The item, attributes that are known of some item here, combinations of them, and the plan's products.

    Without combinations in the plan, single attributes and pairs of those that are known of the most turnover.
    """
    told = {name: known[_column(name)].is_not_null().to_numpy() for name in _told(known)}
    here = [name for name, flags in told.items() if flags.any()]
    singles = [name for name in here if name in SINGLES or name not in ITEM_FACTS]
    combined = [candidate for candidate in plan.products.candidates if set(candidate) <= set(here)]
    if not plan.products.candidates:
        best = sorted(singles, key=lambda name: -float(turnover[told[name]].sum()))[:MOST_ATTRIBUTES]
        singles = [name for name in singles if name in best]
        combined = list(combinations(singles, 2))
    return list(dict.fromkeys([ITEM, *((name,) for name in singles), *combined, PLAN]))


def _told(known: pl.DataFrame) -> list[str]:
    """The names of facts, in the order of their columns."""
    return [name.removeprefix(_column("")) for name in known.columns if name.startswith(_column(""))]


def _group(known: pl.DataFrame, candidate: Candidate) -> Groups:
    """(N,) code of the product that each item belongs to."""
    own = pl.concat_str(pl.lit(""), "feed", "item", separator="\0")
    facts = [pl.col(_column(name)) for name in candidate if candidate not in {ITEM, PLAN}]
    product = own
    if candidate == PLAN:
        product = pl.col("product")
    elif facts:
        shared = pl.concat_str("feed", *facts, separator="\0")
        product = pl.when(pl.all_horizontal(fact.is_not_null() for fact in facts)).then(shared).otherwise(own)
    return known.select(product.rank("dense").cast(pl.Int64)).to_series().to_numpy()


def _bases(sold: Flags, links: Positions) -> Positions:
    """(T,) position of the period that each is compared with, −1 where there is none or nothing is sold."""
    clock = np.arange(len(sold))
    latest = np.maximum.accumulate(np.where(sold, clock, -1))
    linked = np.where(links >= 0, latest[links], -1)
    bases = np.where(linked >= 0, linked, np.argmax(sold))
    return np.where(sold & (bases < clock), bases, -1)


def _measure(prices: Array, quantities: Array, groups: Groups, bases: Positions) -> tuple[Array, Array]:
    """(T,) match and homogeneity of each period against its base, NaN without one."""
    match, homogeneity = np.full((2, len(bases)), np.nan)
    for base in np.unique(bases[bases >= 0]):
        rows = np.flatnonzero(bases == base)
        both = np.append(base, rows)
        mars = scores(prices[both], quantities[both], groups, 0)
        match[rows], homogeneity[rows] = mars.match[1:], mars.homogeneity[1:]
    return match, homogeneity


def _total(by_period: pl.DataFrame) -> pl.DataFrame:
    """`definition_scores`; of equal scores that of the earlier candidate wins."""
    weight = pl.col("turnover")
    means = [((pl.col(name) * weight).sum() / weight.sum()).alias(name) for name in ("match", "r2", "score")]
    totals = by_period.group_by("ea", "definition", maintain_order=True).agg(pl.col("products").first(), *means)
    highest = pl.col("score").round(TIE) == pl.col("score").round(TIE).max().over("ea")
    return totals.with_columns((highest & (highest.cum_sum().over("ea") == 1)).alias("wins"))
