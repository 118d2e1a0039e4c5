"""The market as files: a plan, monthly deliveries, an item master, and what is true of them."""

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import polars as pl
from numpy.typing import NDArray

from tests.planted.prices import Sold, sell
from tests.planted.shelf import BEFORE, IN_MILLILITRES, KINDS, MONTHS, RELAUNCHED, Item, fill_shelves

TEMPLATE = Path(__file__).with_name("plan_template.toml")
FEED = "selmark"
PERIODS = tuple(f"{2022 + month // 12}-{month % 12 + 1:02d}" for month in range(MONTHS))
YEARS = (2022, 2023, 2024)
OUTLETS = {"1": 0.4, "2": 0.3, "3": 0.2, "4": 0.1}
# The three aggregates of a market weigh unlike, as headings do; those of a larger one do so in turn.
WEIGHTS = (50, 20, 30) * 4
# A brand is missing where a clerk left it out; contents are known of nearly all, since shelf labels must give the
# price per unit.
NO_BRAND, NO_SIZE = 0.05, 0.01

Pair = tuple[str, str]


@dataclass(frozen=True, slots=True)
class Truth:
    """What was planted, of what is sold in the months that are compiled.

    levels : (T, A) true index of each elementary aggregate, per unit of content, first month = 1.
    relaunches : (old code, new code) where both are sold.
    visible : those of them that sales can tell: the old one is seen before the new one, and to be gone.
    products : of every code the first of its line that is sold, its aggregate and its content in units of that one's.
    sold_off : (code, month) of items that go for good, at the price of clearance.
    cleared : those of them whose item is seen to be gone, within the months compiled.
    """

    levels: NDArray[np.float64]
    relaunches: frozenset[Pair]
    visible: frozenset[Pair]
    products: dict[str, tuple[str, str, float]]
    sold_off: frozenset[tuple[str, int]]
    cleared: frozenset[tuple[str, int]]


def write_market(folder: Path, seed: int, aggregates: int = 3) -> Truth:
    """Write deliveries, item master, classification and weights into a folder; the truth."""
    rng = np.random.default_rng([2, seed])
    filled = list(fill_shelves(rng, aggregates))
    shelves = [shelf.items for shelf in filled]
    sold = [sell(rng, shelf.items, shelf.trend) for shelf in filled]
    lines = pl.concat([_lines(rng, items, sales) for items, sales in zip(shelves, sold, strict=True)])
    (folder / "deliveries").mkdir(parents=True)
    for (month,), part in lines.group_by("month", maintain_order=True):
        part.write_parquet(folder / "deliveries" / f"{FEED}_{month}.parquet")
    known = set(lines["article"])
    listed = [item for items in shelves for item in items if item.code in known]
    _master(rng, listed).write_parquet(folder / "items.parquet")
    leaves = [(heading(number), kind, WEIGHTS[number]) for number, kind in enumerate(KINDS[:aggregates])]
    _write(
        folder / "headings.csv", "heading,parent,label", ["0,,All items", *(f"{h},0,{kind}" for h, kind, _ in leaves)]
    )
    _write(folder / "assignment.csv", "category,ea", [f"{kind},{h}" for h, kind, _ in leaves])
    _write(folder / "weights.csv", "year,heading,weight", [f"{year},{h},{w}" for year in YEARS for h, _, w in leaves])
    levels = np.exp(np.stack([sales.trend[BEFORE : BEFORE + MONTHS] for sales in sold], axis=1))
    pairs = frozenset((item.relaunches, item.code) for item in listed if item.relaunches in known)
    seen = {article: (first, last) for article, first, last in _seen(lines).iter_rows()}
    visible = frozenset((o, n) for o, n in pairs if seen[o][0] < seen[n][0] and seen[o][1] < PERIODS[-1])
    gone = frozenset(item.code for item in listed if item.last < MONTHS - 1)
    sold_off = frozenset(found for item in listed for found in _sold_off(item))
    cleared = frozenset(found for found in sold_off if found[0] in gone)
    return Truth(levels, pairs, visible, _products(listed), sold_off, cleared)


def write_plan(folder: Path, sections: str) -> Path:
    """Write `plan.toml`: the template with more sections; its path."""
    plan = folder / "plan.toml"
    plan.write_text(f"{TEMPLATE.read_text(encoding='utf-8')}\n{sections}", encoding="utf-8")
    return plan


def heading(aggregate: int) -> str:
    """The code of an elementary aggregate; codes sort as aggregates do."""
    return f"{aggregate + 1:02d}"


def _write(path: Path, header: str, rows: list[str]) -> None:
    path.write_text("\n".join([header, *rows]) + "\n", encoding="utf-8")


def _lines(rng: np.random.Generator, items: list[Item], sold: Sold) -> pl.DataFrame:
    """Sums by month, outlet and item; the chain has one price in all outlets."""
    whole = slice(BEFORE, BEFORE + MONTHS)
    share = np.array(list(OUTLETS.values()))
    units = rng.poisson(sold.packs[:, whole, None] * share)
    values = np.round(units * sold.prices[:, whole, None], 2)
    item, month, outlet = np.nonzero((units > 0) & (values > 0))
    return pl.DataFrame(
        {
            "month": np.array(PERIODS)[month],
            "outlet": np.array(list(OUTLETS))[outlet],
            "article": np.array([one.code for one in items])[item],
            "units": units[item, month, outlet],
            "value": values[item, month, outlet],
        }
    )


def _master(rng: np.random.Generator, items: list[Item]) -> pl.DataFrame:
    return pl.DataFrame([_row(rng, item) for item in items], infer_schema_length=None)


def _row(rng: np.random.Generator, item: Item) -> dict[str, str | None]:
    kind = KINDS[item.aggregate]
    size = f"{item.pack:g} {'ml' if kind in IN_MILLILITRES else 'g'}"
    return {
        "article": item.code,
        "text": " ".join((item.spelling, *item.words, size.replace(" ", ""))),
        "brand": item.spelling if rng.random() >= NO_BRAND else None,
        "content": size if rng.random() >= NO_SIZE else None,
        "group": kind,
    }


def _seen(lines: pl.DataFrame) -> pl.DataFrame:
    return lines.group_by("article").agg(pl.col("month").min().alias("first"), pl.col("month").max().alias("last"))


def _products(items: list[Item]) -> dict[str, tuple[str, str, float]]:
    """Of every code the first of its line that is sold, its aggregate, and its content in units of that one's."""
    first: dict[str, Item] = {}
    for item in items:
        first[item.code] = first.get(item.relaunches, item)
    return {
        item.code: (first[item.code].code, heading(item.aggregate), item.pack / first[item.code].pack) for item in items
    }


def _sold_off(item: Item) -> Iterator[tuple[str, int]]:
    """Months of clearance before an item goes for good; those before the first month compiled are not seen."""
    if item.cleared and item.ending not in RELAUNCHED:
        for month in range(max(item.last - item.cleared + 1, item.first + 2, 0), min(item.last + 1, MONTHS)):
            yield item.code, month
