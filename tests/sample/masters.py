"""The item masters of the three chains, and how their items are assigned."""

from dataclasses import dataclass

import polars as pl

from tests.sample.assortment import Item
from tests.sample.market import FEEDS, Market
from tests.sample.timeline import stream
from tests.sample.wording import description, size, variant

MISFILED = 5
UNLISTED = 2
SHARED_CATEGORIES = ("PET",)


@dataclass(frozen=True, slots=True)
class Masters:
    """Item master tables by feed, and items whose category is another's or that are missing."""

    tables: dict[str, pl.DataFrame]
    misfiled: dict[str, str]
    unlisted: tuple[str, ...]


def item_masters(market: Market, items: dict[str, tuple[Item, ...]]) -> Masters:
    """Return the item masters: some Brindlow items misfiled, some Kestrin items never entered."""
    misfiled = _misfiled(market, items["brindlow"])
    sundries = [item.code for item in items["kestrin"] if not item.aggregate.code]
    unlisted = tuple(sundries[:UNLISTED])
    tables = {
        "brindlow": _brindlow(items["brindlow"], misfiled),
        "kestrin": _kestrin(tuple(item for item in items["kestrin"] if item.code not in unlisted)),
        "ombray": _ombray(items["ombray"]),
    }
    return Masters(tables, misfiled, unlisted)


def assignment(market: Market, items: dict[str, tuple[Item, ...]], masters: Masters) -> pl.DataFrame:
    """Return which category or item belongs to which elementary aggregate."""
    rows: list[tuple[str, str, str, str]] = []
    for feed in FEEDS:
        filled = [aggregate for aggregate in market.indexed() if aggregate.slots[feed]]
        names = [aggregate.category[feed] for aggregate in filled]
        for aggregate in filled:
            category = aggregate.category[feed]
            if names.count(category) == 1 and category not in SHARED_CATEGORIES:
                rows.append((feed, category, "", aggregate.code))
        coarse = {name for name in names if names.count(name) > 1}
        rows.extend(
            (feed, "", item.code, item.aggregate.code)
            for item in items[feed]
            if item.aggregate.code and (item.aggregate.category[feed] in coarse or item.code in masters.misfiled)
        )
    rows.extend(("", name, "", _ea_of(market, name)) for name in SHARED_CATEGORIES)
    return pl.DataFrame(rows, schema=["feed", "category", "item", "ea"], orient="row")


def _ea_of(market: Market, category: str) -> str:
    return next(entry.code for entry in market.indexed() if entry.category["brindlow"] == category)


def _misfiled(market: Market, items: tuple[Item, ...]) -> dict[str, str]:
    rng = stream("misfiled")
    places = rng.choice(len(items), size=MISFILED, replace=False)
    chosen = [items[int(place)] for place in places if items[int(place)].aggregate.code]
    others = market.indexed()
    wrong: dict[str, str] = {}
    for item in chosen:
        place = (others.index(item.aggregate) + 1 + int(rng.integers(len(others) - 1))) % len(others)
        wrong[item.code] = others[place].category["brindlow"]
    return wrong


def _brindlow(items: tuple[Item, ...], misfiled: dict[str, str]) -> pl.DataFrame:
    return pl.DataFrame(
        {
            "ART_NO": [item.code for item in items],
            "DESCR": [description(item) for item in items],
            "BRAND": [item.brand.upper() for item in items],
            "SIZE_TXT": [size(item) for item in items],
            "CAT": [misfiled.get(item.code, item.aggregate.category["brindlow"]) for item in items],
            "FAT_PCT": [item.fat for item in items],
            "ORGANIC": ["Y" if item.organic else "N" for item in items],
            "VARIANT": [variant(item) for item in items],
        }
    ).sort("ART_NO")


def _kestrin(items: tuple[Item, ...]) -> pl.DataFrame:
    return pl.DataFrame(
        {
            "gtin": [item.code for item in items],
            "name": [description(item) for item in items],
            "brand": [item.brand for item in items],
            "pack": [size(item) or None for item in items],
            "department": [item.aggregate.category["kestrin"] for item in items],
            "organic": [item.organic for item in items],
            "flavour": [variant(item) for item in items],
        }
    ).sort("gtin")


def _ombray(items: tuple[Item, ...]) -> pl.DataFrame:
    return pl.DataFrame(
        {
            "réf_article": [item.code for item in items],
            "libellé": [description(item) for item in items],
            "marque": [item.brand for item in items],
            "contenance": [size(item) for item in items],
            "rayon": [item.aggregate.category["ombray"] for item in items],
            "bio": ["oui" if item.organic else "non" for item in items],
            "matière_grasse": [item.fat.replace(".", ",") for item in items],
        }
    ).sort("réf_article")
