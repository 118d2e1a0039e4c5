"""The items of every chain: their lives on the shelf, their packs, codes and prices at the start."""

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from tests.sample.market import Aggregate, Chain, Market, Pack, log_trend
from tests.sample.timeline import MONDAYS, month_of_weeks, stream

LAST_WEEK = len(MONDAYS) - 1
SHORTEST_LIFE = 14
DEAR_ITEMS = 0.7
RELAUNCH_RATIOS = (0.85, 0.955)
WEEK_MONTH = month_of_weeks()


@dataclass(frozen=True, slots=True)
class Item:
    """One article code of one chain. `base` is its price when the trend stands at 1."""

    feed: str
    code: str
    aggregate: Aggregate
    brand: str
    variant: int
    pack: Pack
    organic: bool
    fat: str
    base: float
    popularity: float
    first_week: int
    last_week: int
    ending: str
    predecessor: str
    held_from: int


@dataclass(frozen=True, slots=True)
class Relaunch:
    """An item that came back under a new code with a smaller pack at the same price."""

    feed: str
    ea: str
    old: str
    new: str
    week: str
    old_pack: str
    new_pack: str
    content_ratio: float


@dataclass(frozen=True, slots=True)
class Shelf:
    """One place on a chain's shelf, which items of an elementary aggregate fill one after the other."""

    chain: Chain
    aggregate: Aggregate
    brands: tuple[str, ...]
    trend: NDArray[np.float64]
    codes: Iterator[str]
    rng: np.random.Generator


def assortment(market: Market, chain: Chain) -> tuple[Item, ...]:
    """Return every item a chain sold in the three years."""
    codes = _codes(chain.feed)
    items: list[Item] = []
    for aggregate in market.aggregates:
        trend = log_trend(aggregate)
        brands = tuple(stream("brands", aggregate.code).choice(market.brands, size=6, replace=False).tolist())
        for slot in range(aggregate.slots[chain.feed]):
            rng = stream("slot", chain.feed, aggregate.code, slot)
            items.extend(_lives(Shelf(chain, aggregate, brands, trend, codes, rng)))
    return tuple(items)


def relaunches(items: tuple[Item, ...]) -> tuple[Relaunch, ...]:
    """Return the relaunches among a chain's items."""
    by_code = {item.code: item for item in items}
    return tuple(
        Relaunch(
            feed=new.feed,
            ea=new.aggregate.code,
            old=new.predecessor,
            new=new.code,
            week=MONDAYS[new.first_week].isoformat(),
            old_pack=pack_text(by_code[new.predecessor].pack),
            new_pack=pack_text(new.pack),
            content_ratio=round(new.pack.content / by_code[new.predecessor].pack.content, 4),
        )
        for new in items
        if new.predecessor
    )


def pack_text(pack: Pack) -> str:
    """Return the plain form of a pack, `6x330ml`."""
    count = f"{pack.count}x" if pack.count > 1 else ""
    return f"{count}{pack.amount:g}{pack.unit}"


def gtin13(number: int) -> str:
    """Return the GTIN-13 of a demonstration article number, with its check digit."""
    body = f"950{number:09d}"
    total = sum(int(digit) * (3 if place % 2 else 1) for place, digit in enumerate(body))
    return f"{body}{-total % 10}"


def _codes(feed: str) -> Iterator[str]:
    if feed == "kestrin":
        for number in stream("codes", feed).permutation(900_000):
            yield gtin13(31_000_000 + 7 * int(number))
    for number in stream("codes", feed).permutation(90_000):
        yield f"{100_000 + int(number)}" if feed == "brindlow" else f"{int(number):06d}"


def _lives(shelf: Shelf) -> Iterator[Item]:
    """Yield the items that follow each other on one place of the shelf."""
    rng = shelf.rng
    item = _fresh(shelf, first_week=0)
    while True:
        life = SHORTEST_LIFE + int(rng.geometric(shelf.aggregate.churn / 52.0 * 1.25))
        last = item.first_week + life
        if last >= LAST_WEEK - 8:
            yield item
            return
        held = _hold(shelf, item, last)
        if held >= 0:
            yield replace(item, last_week=last, ending="relaunch", held_from=held)
            item = _smaller(shelf, item, held, last + 1)
            continue
        ending = "clearance" if rng.random() < 0.6 else "delisted"
        yield replace(item, last_week=last, ending=ending)
        item = _fresh(shelf, first_week=last + 1 + int(rng.integers(0, 3)))


def _fresh(shelf: Shelf, *, first_week: int) -> Item:
    chain, aggregate, rng = shelf.chain, shelf.aggregate, shelf.rng
    own = rng.random() < 0.25
    loose = aggregate.weighed and chain.feed != "brindlow"
    pack = Pack(1, 1.0, "kg") if loose else aggregate.packs[int(rng.integers(len(aggregate.packs)))]
    scale = (pack.content / aggregate.packs[0].content) ** 0.85
    price = float(rng.uniform(*aggregate.price)) * chain.price_level * scale * (0.8 if own else 1.0)
    usual = sum(aggregate.price) / 2.0
    return Item(
        feed=chain.feed,
        code=next(shelf.codes),
        aggregate=aggregate,
        brand=chain.own_label if own else str(rng.choice(shelf.brands)),
        variant=int(rng.integers(len(aggregate.variants))),
        pack=pack,
        organic=bool(rng.random() < 0.15) and aggregate.code.startswith("01"),
        fat=str(rng.choice(aggregate.fat)) if aggregate.fat else "",
        base=price,
        popularity=float(np.exp(rng.normal(0.0, 0.4))) * (price / usual) ** -DEAR_ITEMS,
        first_week=first_week,
        last_week=LAST_WEEK,
        ending="",
        predecessor="",
        held_from=-1,
    )


def _hold(shelf: Shelf, item: Item, last: int) -> int:
    """Return the month from which the price is held until the pack shrinks, -1 for no relaunch."""
    if not shelf.aggregate.relaunch or shelf.rng.random() < 0.3:
        return -1
    month = int(WEEK_MONTH[last + 1])
    first = int(WEEK_MONTH[item.first_week])
    ratios = np.exp(shelf.trend[first : max(month - 2, first)] - shelf.trend[month])
    low, high = RELAUNCH_RATIOS
    fitting = [
        first + place
        for place, ratio in enumerate(ratios)
        if low <= ratio <= high and _shrunk(item.pack, float(ratio)).content < item.pack.content
    ]
    return int(shelf.rng.choice(fitting)) if fitting else -1


def _smaller(shelf: Shelf, item: Item, held: int, first_week: int) -> Item:
    """Return the successor: less in the pack at the price held, so that its price stands on the trend."""
    month = int(WEEK_MONTH[first_week])
    ratio = float(np.exp(shelf.trend[held] - shelf.trend[month]))
    return replace(
        item,
        code=next(shelf.codes),
        pack=_shrunk(item.pack, ratio),
        base=item.base * ratio,
        first_week=first_week,
        last_week=LAST_WEEK,
        ending="",
        predecessor=item.code,
        held_from=-1,
    )


def _shrunk(pack: Pack, ratio: float) -> Pack:
    step = 0.05 if pack.unit in ("kg", "l") else 10.0 if pack.amount >= 200 else 5.0
    amount = round(round(pack.amount * ratio / step) * step, 2)
    return replace(pack, amount=amount)
