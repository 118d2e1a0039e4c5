"""Items with known relaunches, and with look-alikes that are none; brands and shops are invented."""

from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import polars as pl

PERIODS = 36
PRICED = 3
MULTIPACKS = 0.15
MULTIPACK = 6.0
BRANDS = (
    "Tarvik", "Ellenmo", "Quorrel", "Sunnbrae", "Dovrini", "Maskelle", "Orvanta", "Pellico Nord", "Braskelo",
    "Hilvaro", "Lumavique", "Corvade", "Ystrand", "Fennuco", "Galdera", "Wexholm", "Jastrel & Mill", "Rondivårr",
    "Tarvik Gold", "Ystral",
)  # fmt: skip
KINDS = (
    "yoghurt", "fruit tea", "breakfast cereal", "chocolate bar", "laundry detergent", "cheese slices", "shower gel",
    "pasta sauce", "ice cream", "cat food", "crackers", "lemonade",
)  # fmt: skip
VARIANTS = (
    "strawberry", "vanilla", "hazelnut", "peppermint", "blueberry", "caramel", "lemon", "orange", "natural",
    "smoked", "apricot", "wild cherry", "sea salt", "honey", "ginger", "forest fruit", "coconut", "lavender",
    "tomato", "cinnamon", "white peach", "black pepper", "mountain herbs", "almond",
    "yellow peach", "black cherry", "dark", "milk",
)  # fmt: skip
GRADES = ("", "", "", "organic", "light", "0,1 % fat", "3.5% fat")
PACKS = ((150.0, "g"), (200.0, "g"), (500.0, "g"), (1000.0, "g"))
TALK = ("creamy", "premium", "classic", "family favourite")
NEWS = ("NEW", "new recipe", "improved", "; Nouveau", "NOW")

# How a life ends: under a new code, or with another item in its place, or with none.
ENDINGS = ("relaunch", "sister", "sister grade", "other brand", "other pack", "none")
SHARES = (0.3, 0.2, 0.1, 0.15, 0.1, 0.15)


REWORDINGS = ("not", "order", "news", "short", "upper", "plural", "talk", "no kind")
REWORDED = (0.3, 0.15, 0.2, 0.15, 0.08, 0.04, 0.04, 0.04)


@dataclass(frozen=True, slots=True)
class Article:
    """What a shop sells under one code. `level` is its log turnover a period."""

    brand: str
    kind: str
    variant: str
    grade: str
    pack: float
    measure: str
    price: float
    level: float
    first: int
    words: tuple[str, ...]
    spelling: str


@dataclass(frozen=True, slots=True)
class Lookalikes:
    """The items as `propose` takes them, and the true pairs (feed, old item, new item)."""

    items: pl.DataFrame
    truth: frozenset[tuple[str, str, str]]


def make_lookalikes(seed: int, *, feeds: int = 2, aggregates: int = 12, slots: int = 25) -> Lookalikes:
    """The items of some shops, a place on the shelf filled by one article after the other."""
    rng = np.random.default_rng(seed)
    rows: list[dict[str, Any]] = []
    truth: set[tuple[str, str, str]] = set()
    for feed in (f"shop {number}" for number in range(feeds)):
        for number in range(aggregates):
            aggregate = _Aggregate(rng, f"{number:03d}", KINDS[number % len(KINDS)])
            for _ in range(slots):
                _fill(aggregate, feed, rows, truth)
    order = rng.permutation(len(rows))
    return Lookalikes(pl.DataFrame([rows[i] for i in order]), frozenset(truth))


class _Aggregate:
    """One elementary aggregate of one shop: its articles are distinct but for relaunches and packs."""

    def __init__(self, rng: np.random.Generator, ea: str, kind: str) -> None:
        self.rng, self.ea, self.kind = rng, ea, kind
        self.sold: set[tuple[str, str, str]] = set()
        self.brands = tuple(rng.choice(BRANDS, 6, replace=False).tolist())
        self.variants = tuple(rng.choice(VARIANTS, 8, replace=False).tolist())
        self.usual = float(rng.uniform(1.0, 9.0))
        self.copies = 0

    def fresh(self, first: int, like: Article | None = None, *, differs: str = "") -> Article | None:
        """An article not sold before, in one point different from another one; None if all were."""
        for _ in range(40):
            brand, variant, grade = (
                str(self.rng.choice(self.brands)),
                str(self.rng.choice(self.variants)),
                str(self.rng.choice(GRADES)),
            )
            if like is not None:
                brand = brand if differs == "brand" else like.brand
                variant = variant if differs == "variant" else like.variant
                grade = grade if differs == "grade" else like.grade
            if (brand, variant, grade) not in self.sold:
                self.sold.add((brand, variant, grade))
                return self._made(first, like, brand, variant, grade)
        return None

    def _made(self, first: int, like: Article | None, brand: str, variant: str, grade: str) -> Article:
        pack, measure = PACKS[int(self.rng.integers(len(PACKS)))]
        price = self.usual * float(np.exp(self.rng.normal(0.0, 0.35))) * (pack / 200.0) ** 0.8
        if like is not None:
            pack, measure, price = like.pack, like.measure, like.price * float(np.exp(self.rng.normal(0.0, 0.05)))
        words = (self.kind, variant, *([grade] if grade else []))
        level = float(self.rng.normal(6.0, 0.8))
        return Article(brand, self.kind, variant, grade, pack, measure, price, level, first, words, brand)


def _fill(aggregate: _Aggregate, feed: str, rows: list[dict[str, Any]], truth: set[tuple[str, str, str]]) -> None:
    """Add the lives of one place on the shelf; some places have a second one beside them for a multipack."""
    lives = list(_lives(aggregate))
    for packs in (1.0, MULTIPACK) if aggregate.rng.random() < MULTIPACKS else (1.0,):
        old = ""
        for article, last, heir in lives:
            code = f"{len(rows):06d}"
            sold = replace(article, pack=article.pack * packs, price=article.price * packs**0.8)
            rows.append(_row(aggregate.rng, feed, aggregate.ea, code, sold, min(last, PERIODS - 1)))
            if heir:
                truth.add((feed, old, code))
            old = code


def _lives(aggregate: _Aggregate) -> Iterator[tuple[Article, int, bool]]:
    """Articles that follow each other, their last periods, and whether each is the relaunch of the one before."""
    rng = aggregate.rng
    article = aggregate.fresh(int(rng.integers(-6, 4)))
    heir = False
    while article is not None and article.first < PERIODS:
        last = max(article.first, 0) + 3 + int(rng.geometric(1 / 12))
        yield article, last, heir
        if last >= PERIODS - 1:
            return
        ending = str(rng.choice(ENDINGS, p=SHARES))
        first = last + int(rng.choice((-1, 0, 1, 2), p=(0.05, 0.25, 0.55, 0.15)))
        heir = ending == "relaunch"
        article = _next(aggregate, article, ending, max(first, article.first + 1, 1))


def _next(aggregate: _Aggregate, article: Article, ending: str, first: int) -> Article | None:
    rng = aggregate.rng
    if ending == "relaunch":
        return _relaunched(rng, article, first)
    if ending == "other pack":
        factor = float(rng.choice((0.4, 0.5, 2.0, 2.5)))
        return replace(article, first=first, pack=article.pack * factor, price=article.price * factor**0.8)
    differs = {"sister": "variant", "sister grade": "grade", "other brand": "brand"}.get(ending)
    return aggregate.fresh(first, article, differs=differs) if differs else None


def _relaunched(rng: np.random.Generator, article: Article, first: int) -> Article:
    how = str(rng.choice(("smaller", "same", "dearer", "larger"), p=(0.55, 0.2, 0.1, 0.15)))
    shrink = {"smaller": rng.uniform(0.8, 0.96), "larger": rng.uniform(1.04, 1.25)}.get(how, 1.0)
    rise = {"dearer": rng.uniform(1.04, 1.15), "larger": shrink}.get(how, 1.0)
    return replace(
        article,
        first=first,
        pack=max(5.0, round(article.pack * float(shrink) / 5.0) * 5.0),
        price=article.price * float(rise),
        level=article.level + float(rng.normal(0.0, 0.3)),
        words=_reworded(rng, article.words),
        spelling=_respelt(rng, article.brand) if rng.random() < 0.25 else article.spelling,
    )


def _reworded(rng: np.random.Generator, words: tuple[str, ...]) -> tuple[str, ...]:
    how = str(rng.choice(REWORDINGS, p=REWORDED))
    at = int(rng.integers(len(words)))
    if how == "order":
        return tuple(words[i] for i in rng.permutation(len(words)))
    if how == "news":
        return (*words, str(rng.choice(NEWS)))
    if how == "talk":
        return (*words, str(rng.choice(TALK)))
    if how == "no kind":
        return words[1:]
    if how == "upper":
        return tuple(word.upper() for word in words)
    changed = {"short": _shortened(words[at]), "plural": words[at] + "s"}.get(how, words[at])
    return (*words[:at], changed if words[at].isalpha() else words[at], *words[at + 1 :])


def _shortened(word: str) -> str:
    """The word without its inner vowels, as tills print it."""
    return word[0] + "".join(letter for letter in word[1:] if letter not in "aeiou")


def _respelt(rng: np.random.Generator, brand: str) -> str:
    plain = brand.replace(" & ", " ").replace("å", "a")
    spellings = (brand.upper(), plain.replace(" ", "-"), plain.replace(" ", ""), plain[:-2] + plain[-1])
    return str(rng.choice(spellings))


def _row(rng: np.random.Generator, feed: str, ea: str, code: str, article: Article, last: int) -> dict[str, Any]:
    first = max(article.first, 0)
    periods = np.arange(first, last + 1)
    turnover = np.exp(article.level + rng.normal(0.0, 0.25, len(periods)))
    prices = article.price * np.exp(0.002 * periods + rng.normal(0.0, 0.03, len(periods)))
    known = rng.random() > 0.1
    size = f"{article.pack:g}{rng.choice((' ', ''))}{article.measure}"
    parts = (article.spelling, *article.words) if rng.random() < 0.7 else (*article.words, article.spelling)
    return {
        "feed": feed,
        "item": code,
        "ea": ea,
        "description": " ".join((*parts, size)),
        "brand": article.spelling if rng.random() > 0.05 else None,
        "size_amount": article.pack if known else None,
        "size_measure": article.measure if known else None,
        "first_period": first,
        "last_period": last,
        "last_known": PERIODS - 1,
        "quantity": float((turnover / prices).sum()),
        "turnover": float(turnover.sum()),
        "periods_sold": len(periods),
        "opening_price": _unit_value(prices[:PRICED], turnover[:PRICED]),
        "closing_price": _unit_value(prices[-PRICED:], turnover[-PRICED:]),
        "opening_turnover": float(turnover[:PRICED].mean()),
        "closing_turnover": float(turnover[-PRICED:].mean()),
    }


def _unit_value(prices: np.ndarray[Any, Any], turnover: np.ndarray[Any, Any]) -> float:
    return float(turnover.sum() / (turnover / prices).sum())


@dataclass(frozen=True, slots=True)
class Verdict:
    """Pairs taken, and those among them that are true, of all that are true."""

    taken: int
    right: int
    true: int

    @property
    def precision(self) -> float:
        """Share of the pairs taken that are true."""
        return self.right / self.taken

    @property
    def recall(self) -> float:
        """Share of the true pairs that are taken."""
        return self.right / self.true


def judge(proposals: pl.DataFrame, truth: frozenset[tuple[str, str, str]], least: float) -> Verdict:
    """The proposals that score at least so much, against the truth."""
    found = set(pairs_of(proposals.filter(pl.col("score") >= least)))
    return Verdict(len(found), len(found & truth), len(truth))


def pairs_of(proposals: pl.DataFrame) -> Iterator[tuple[str, str, str]]:
    """(feed, old item, new item) of every proposal."""
    yield from proposals.select("feed", "old_item", "new_item").iter_rows()
