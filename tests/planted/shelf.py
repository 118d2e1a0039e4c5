"""The items of the market: which place on the shelf each fills, from when to when, and how it ends.

Months count from the first that is compiled. The market lives before it and after it, so that nothing starts or
ends because the data do: holds, promotions and clearance are as many in the first month as in any other.
"""

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np

from tests.planted.wording import BRANDS, GRADES, VARIANTS, respell, reword

MONTHS = 30
BEFORE, AFTER = 36, 21
WHOLE = BEFORE + MONTHS + AFTER
PLACES = 150
# The first three make a market; a larger one takes more of them.
KINDS = (
    "biscuits", "shampoo", "coffee", "muesli", "fabric softener", "sausages", "nectar", "dishwashing liquid",
    "ravioli", "dog food", "hand cream", "rice cakes",
)  # fmt: skip
IN_MILLILITRES = frozenset({"shampoo", "fabric softener", "nectar", "dishwashing liquid", "hand cream"})
PACKS = (150.0, 200.0, 300.0, 400.0, 500.0)

# Three months and a geometric rest of 26 on average: 27 % of the codes live less than a year; a third is common.
SHORTEST_LIFE, MEAN_REST = 4, 26
# How a life ends. Three in ten of the codes that go come back under a new one, half of them with less in the pack.
# That is up to 6 % of the shelf a year in smaller packs: many, as in years of rising costs.
ENDINGS = ("smaller", "same", "sister", "other brand", "none")
RELAUNCHED = ("smaller", "same")
ENDED = (0.15, 0.15, 0.2, 0.1, 0.4)
# The new code comes in the month after the old one's last, now and then beside it or a month late.
ARRIVALS, ARRIVED = (-1, 0, 1, 2), (0.05, 0.25, 0.55, 0.15)
# Packs shrink by 4 to 14 %: less is not worth the cost, more is noticed. Before that the price has been held for
# 4 to 18 months, while others rose by as much; where prices rise too slowly for that, the pack stays as it is.
SHRINKING, HELD = (0.04, 0.14), (4, 18)
# Prices rise by 2 to 8 % a year, as food prices did in years when packs shrank, unsteadily so.
YEARLY, UNSTEADY = (0.02, 0.08), 0.002
# Six in ten of the items that go for good are sold off, and one in seven of those that are relaunched.
CLEARED, CLEARED_OLD = 0.6, 0.15
# Sold off at half price, give or take; what is left is a fraction of a month's sales, and less in a second month.
CLEARANCE_PRICE, CLEARANCE_QUANTITY, LEFT_OVER = (0.45, 0.6), (0.15, 0.45), 0.5
# Items of one brand have one price line: a sister flavour costs what its sister cost within 5 %.
LINE_PRICE = 0.05
# Best sellers sell some ten times what the slowest do: 95 % lie within a factor of exp(4 · 0.6) = 11.
POPULARITY, RELAUNCHED_POPULARITY = 0.6, 0.2


@dataclass(frozen=True, slots=True)
class Item:
    """One article code. `base` is its log price per unit of content when the trend stands at 0."""

    code: str
    aggregate: int
    place: int
    line: int
    brand: str
    variant: str
    grade: str
    spelling: str
    words: tuple[str, ...]
    pack: float
    base: float
    popularity: float
    first: int
    last: int
    ending: str = ""
    relaunches: str = ""
    held_from: int | None = None
    cleared: int = 0
    clearance_price: float = 1.0
    clearance_quantity: float = 1.0


class Shelf:
    """The shelf of one elementary aggregate: an article not relaunched is never sold again."""

    def __init__(self, rng: np.random.Generator, aggregate: int) -> None:
        self.rng, self.aggregate = rng, aggregate
        self.sold: set[tuple[str, str, str]] = set()
        self.items: list[Item] = []
        self.lines = 0
        self.trend = np.cumsum(rng.uniform(*YEARLY) / 12.0 + rng.normal(0.0, UNSTEADY, WHOLE))
        self.trend -= self.trend[BEFORE]
        self.usual = float(rng.uniform(np.log(0.006), np.log(0.02)))
        for place in range(PLACES):
            self._fill(place)

    def _fill(self, place: int) -> None:
        item: Item | None = self._fresh(place, -BEFORE - int(self.rng.integers(0, 4)))
        while item is not None and item.first < MONTHS + AFTER:
            item = self._ended(item)
            self.items.append(item)
            item = self._next(item)

    def _ended(self, item: Item) -> Item:
        """The item with the end of its life drawn."""
        rng = self.rng
        last = item.first + SHORTEST_LIFE - 1 + int(rng.geometric(1.0 / MEAN_REST))
        ending = str(rng.choice(ENDINGS, p=ENDED))
        held_from = self._held_from(item, last) if ending == "smaller" else None
        if ending == "smaller" and held_from is None:
            ending = "same"
        if rng.random() >= (CLEARED_OLD if ending in RELAUNCHED else CLEARED):
            return replace(item, last=last, ending=ending, held_from=held_from)
        return replace(
            item,
            last=last,
            ending=ending,
            held_from=held_from,
            cleared=int(rng.integers(1, 3)),
            clearance_price=float(rng.uniform(*CLEARANCE_PRICE)),
            clearance_quantity=float(rng.uniform(*CLEARANCE_QUANTITY)),
        )

    def _held_from(self, item: Item, last: int) -> int | None:
        """A month since which the trend has risen by what packs shrink; None where there is none."""
        now = min(last + 1, WHOLE - BEFORE - 1)
        since = np.arange(max(now - HELD[1], item.first + 1, -BEFORE), now - HELD[0] + 1)
        shrunk = 1.0 - np.exp(self.trend[since + BEFORE] - self.trend[now + BEFORE])
        fitting = since[(shrunk >= SHRINKING[0]) & (shrunk <= SHRINKING[1])]
        return int(self.rng.choice(fitting)) if len(fitting) else None

    def _next(self, old: Item) -> Item | None:
        """What takes the item's place."""
        first = max(old.last + int(self.rng.choice(ARRIVALS, p=ARRIVED)), old.first + 2)
        if old.ending in RELAUNCHED:
            return self._relaunched(old, first)
        if old.ending in {"sister", "other brand"}:
            return self._fresh(old.place, first, like=old)
        return self._fresh(old.place, old.last + int(self.rng.integers(1, 7)))

    def _relaunched(self, old: Item, first: int) -> Item:
        rng = self.rng
        pack = old.pack
        if old.ending == "smaller":
            assert old.held_from is not None
            ratio = float(np.exp(self.trend[old.held_from + BEFORE] - self.trend[min(first + BEFORE, WHOLE - 1)]))
            pack = min(round(old.pack * ratio / 5.0) * 5.0, old.pack - 5.0)
        return replace(
            old,
            code=self._code(),
            words=reword(rng, old.words, KINDS[self.aggregate]),
            spelling=respell(rng, old.brand) if rng.random() < 0.25 else old.spelling,
            pack=pack,
            popularity=old.popularity * float(np.exp(rng.normal(0.0, RELAUNCHED_POPULARITY))),
            first=first,
            ending="",
            relaunches=old.code,
            held_from=None,
            cleared=0,
        )

    def _fresh(self, place: int, first: int, *, like: Item | None = None) -> Item:
        rng = self.rng
        brand, variant, grade = self._unsold(like)
        pack = float(rng.choice(PACKS)) if like is None else like.pack
        # Large packs are cheaper by the gram: 0.85 is a usual elasticity of price to content.
        base = self.usual + float(rng.normal(0.0, 0.3)) - 0.15 * float(np.log(pack / 200.0))
        if like is not None:
            base = like.base + float(rng.normal(0.0, LINE_PRICE))
        self.lines += 1
        return Item(
            code=self._code(),
            aggregate=self.aggregate,
            place=place,
            line=self.lines - 1,
            brand=brand,
            variant=variant,
            grade=grade,
            spelling=brand,
            words=(KINDS[self.aggregate], variant, *([grade] if grade else [])),
            pack=pack,
            base=base,
            popularity=float(np.exp(rng.normal(0.0, POPULARITY))),
            first=first,
            last=first,
        )

    def _unsold(self, like: Item | None) -> tuple[str, str, str]:
        """Brand, variant and grade of an article not sold before; like another one in all but variant or brand."""
        while True:
            brand, variant, grade = (str(self.rng.choice(names)) for names in (BRANDS, VARIANTS, GRADES))
            if like is not None and like.ending == "sister":
                brand, grade = like.brand, like.grade
            if like is not None and like.ending == "other brand":
                variant, grade = like.variant, like.grade
            if (brand, variant, grade) not in self.sold:
                self.sold.add((brand, variant, grade))
                return brand, variant, grade
            like = None if self.rng.random() < 0.1 else like

    def _code(self) -> str:
        return f"{self.aggregate + 10}{self.rng.integers(10**6):06d}{len(self.items):04d}"


def fill_shelves(rng: np.random.Generator, aggregates: int = 3) -> Iterator[Shelf]:
    """One shelf for each elementary aggregate."""
    for aggregate in range(aggregates):
        yield Shelf(rng, aggregate)
