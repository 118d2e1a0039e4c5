"""Stage 2: which items there are, and which product and elementary aggregate each belongs to."""

from __future__ import annotations

import polars as pl

from tillwright.item_codes import item_key_of
from tillwright.plan import ITEM_FACTS, Definition
from tillwright.queries import offer, select
from tillwright.sizes import parse_sizes
from tillwright.stages.context import Context


def list_items(context: Context) -> int:
    """Write `items`; the number of items."""
    workspace, connection = context.workspace, context.connect()
    context.offer_active(connection, "sales", "described")
    offer(connection, "masters", context.references.masters)
    items = select(connection, "items")
    workspace.write("items", pl.concat([items, _sizes(items)], how="horizontal"))
    return items.height


def _sizes(items: pl.DataFrame) -> pl.DataFrame:
    """What each size states, or the description where the size states nothing."""
    stated, described = (parse_sizes(items[name]) for name in ("size", "description"))
    states = stated["amount"].is_not_null()
    return pl.DataFrame(
        {f"size_{name}": stated[name].zip_with(states, described[name]) for name in ("amount", "measure", "packs")}
    )


def assign(context: Context) -> pl.DataFrame:
    """feed, item, product, ea and units_per_item of every item before sizes and successions are looked at."""
    connection = context.connect()
    offer(connection, "items", context.workspace.read("items"))
    offer(connection, "assignment", context.references.assignment)
    return select(connection, "products")


def define_products(context: Context) -> int:
    """Write `products`; the number of distinct products.

    An item is a product of its own unless the plan's definition for its elementary aggregate, the item part of its
    code or an accepted succession joins it to others. Units per item are content in grams, millilitres or
    pieces where the plan prices by unit, and else 1; an item that continues another counts in units of the first
    of its line, by their contents where both are known in one measure.
    """
    items = context.workspace.read("items")
    assigned = assign(context).join(
        items.select("feed", "item", *ITEM_FACTS, "attributes", "size_amount", "size_measure"), on=["feed", "item"]
    )
    keyed = _keyed(assigned, context)
    parts = [_define(part, context.definition(ea)) for (ea,), part in keyed.group_by("ea")]
    joined = _follow(pl.concat(parts or [keyed]), context.workspace.read("successions"))
    products = joined.select("feed", "item", "product", "ea", "units_per_item")
    context.workspace.write("products", products)
    return products["product"].n_unique()


def _keyed(items: pl.DataFrame, context: Context) -> pl.DataFrame:
    """With the item part of each code where the feed's plan has a pattern for it, else the code."""
    key = pl.col("item")
    for feed in context.plan.feed:
        if feed.item_part is not None:
            part = item_key_of(pl.col("item"), feed.item_part)
            key = pl.when(pl.col("feed") == feed.name).then(part.fill_null(pl.col("item"))).otherwise(key)
    return items.with_columns(key.alias("key"))


def _define(items: pl.DataFrame, definition: Definition) -> pl.DataFrame:
    """Product and units of the items of one elementary aggregate; one that lacks an attribute stands alone."""
    own = pl.concat_str(pl.col("feed"), pl.col("key"), separator="/")
    if definition.by == ("item",):
        product = own
    else:
        facts = [_fact(name) for name in definition.by]
        shared = pl.concat_str([pl.col("feed"), *facts], separator="/")
        product = pl.when(pl.all_horizontal(fact.is_not_null() for fact in facts)).then(shared).otherwise(own)
    defined = items.with_columns(product.alias("product"))
    if not definition.unit_pricing:
        return defined
    sized = pl.col("size_amount").is_not_null()
    measured = pl.concat_str(pl.col("product"), pl.lit(" by "), pl.col("size_measure"))
    return defined.with_columns(
        pl.when(sized).then(measured).otherwise(own).alias("product"),
        pl.when(sized).then(pl.col("size_amount")).otherwise(1.0).alias("units_per_item"),
    )


def _fact(name: str) -> pl.Expr:
    """A column of `items`, or an attribute of the item master, as text."""
    if name in ITEM_FACTS:
        return pl.col(name)
    told = pl.col("attributes").str.json_path_match(f"$['{name}']").str.strip_chars()
    return pl.when(told != "").then(told)


def _follow(items: pl.DataFrame, successions: pl.DataFrame) -> pl.DataFrame:
    """Items that continue another become its product, in units of the first item of their line."""
    accepted = successions.filter(pl.col("status") == "accepted")
    if accepted.is_empty():
        return items
    before = {(feed, new): old for feed, old, new in accepted.select("feed", "old_item", "new_item").iter_rows()}
    lines = [(feed, new, _first(before, feed, new)) for feed, new in before]
    first = pl.DataFrame(lines, schema={"feed": pl.String, "item": pl.String, "first": pl.String}, orient="row")
    known = items.select(
        "feed",
        pl.col("item").alias("first"),
        pl.col("product").alias("first_product"),
        pl.col("units_per_item").alias("first_units"),
        pl.col("size_amount").alias("first_amount"),
        pl.col("size_measure").alias("first_measure"),
    )
    linked = items.join(first.join(known, on=["feed", "first"]), on=["feed", "item"], how="left")
    continues = pl.col("first_product").is_not_null()
    ratio = (
        pl.when(pl.col("size_measure") == pl.col("first_measure"))
        .then(pl.col("size_amount") / pl.col("first_amount"))
        .otherwise(1.0)
        .fill_null(1.0)
    )
    return linked.with_columns(
        pl.when(continues).then("first_product").otherwise("product").alias("product"),
        pl.when(continues).then(pl.col("first_units") * ratio).otherwise("units_per_item").alias("units_per_item"),
    )


def _first(before: dict[tuple[str, str], str], feed: str, item: str) -> str:
    """The first item of a line of successions; a line that bites its tail ends where it would turn."""
    seen = {item}
    while (feed, item) in before and before[feed, item] not in seen:
        item = before[feed, item]
        seen.add(item)
    return item
