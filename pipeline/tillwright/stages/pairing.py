"""Stage 2: which item that arrives is the relaunch of which item that leaves; proposals with their evidence."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import polars as pl
from numpy.typing import NDArray
from rapidfuzz import fuzz
from rapidfuzz.distance import LCSseq
from rapidfuzz.process import cpdist
from scipy.optimize import linear_sum_assignment
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from tillwright.errors import CallError
from tillwright.kernels.pairs import Array
from tillwright.kernels.succession import Evidence, combine

Rows = NDArray[np.int64]

_BLOCK = ("feed", "ea")
_ABBREVIATED = 0.95
# The words of so many pairs take some 200 MB.
_PAIRS_AT_ONCE = 200_000
# Shorter ones are the beginnings of too many words: pea and peach.
_SHORTEST_ABBREVIATION = 4
_SHORTEST_SKELETON = 3
# Weight of a word that every item of the aggregate has; a rarer one weighs ln(items / items that have it) more.
_COMMON = 0.25
# Packs are written in whole grams, so that half a per cent is rounding.
_SAME_PACK = 0.005
_LETTERS = {"ß": "ss", "œ": "oe", "æ": "ae", "ø": "o", "ł": "l", "'": "", "’": "", "_": " "}
_UNITS = (
    "kgs?|gr?|grs|gms?|grams?|mg|l|lt|ltrs?|lit(?:er|re)s?|ml|cl|dl|(?:fl )?oz|lbs?|gal|qt|pt|"
    "pks?|packs?|pcs?|pces?|pieces?|ct|count|ea|rolls?|sheets?"
)
_NUMBER = r"\d+(?:_\d+)?(?:\s*/\s*\d+)?"
_SIZES = rf"\b(?:\d+\s*[x*×]\s*)?{_NUMBER}[\s-]*(?:{_UNITS})\b|\bpack of \d+\b|\b(?:x\s?\d+|\d+\s?x)\b"


@dataclass(frozen=True, slots=True)
class Successions:
    """What counts as a relaunch.

    accept, ask: least scores to take a pair without, and with, a person's decision; below `ask`
    it is not proposed. gap, overlap: most periods from the old item's last to the new one's first,
    and most by which the new one may come before. absent: periods without a sale at the end of
    the data after which an item has left. probes: rare words of an old item by which candidates
    are found. candidates: most of them looked at. alike: least likeness of two spellings of one
    word; brand: of one brand. news: words that announce a relaunch and describe nothing.
    """

    accept: float = 0.9
    ask: float = 0.6
    gap: int = 3
    overlap: int = 1
    absent: int = 1
    probes: int = 4
    candidates: int = 20
    alike: float = 0.8
    brand: float = 0.8
    news: tuple[str, ...] = ("new", "improved", "recipe", "now", "nouveau", "nouvelle", "neu", "nuevo", "nuovo")

    def __post_init__(self) -> None:
        if not 0 < self.ask <= self.accept <= 1:
            raise CallError(f"ask is {self.ask} and accept {self.accept}; allowed: 0 < ask ≤ accept ≤ 1.")
        if min(self.gap, self.overlap) < 0 or min(self.absent, self.probes, self.candidates) < 1:
            raise CallError("gap and overlap must be 0 or more; absent, probes and candidates 1 or more.")


def propose(items: pl.DataFrame, *, settings: Successions | None = None) -> pl.DataFrame:
    """Pairs (old item, new item) with a score of at least `ask`, each item at most once on either side.

    Within a feed and elementary aggregate the pairs have the largest total score. An old item
    started and ended before its new one, so that chains of pairs lead forward in time.

    Parameters
    ----------
    items : one row per feed and item. feed, item, ea, description, brand (strings); size_amount,
        size_measure (g, ml or piece; null = unknown); first_period, last_period, last_known
        (numbers of periods; the last one the feed has data of); quantity, turnover, periods_sold;
        opening_price, closing_price (unit values over up to three first and last periods without
        clearance), opening_turnover, closing_turnover (average turnover of those periods; null =
        that of all periods sold). Items without ea are left out.

    Returns
    -------
    feed, ea, old_item, new_item, the evidence, score, runner_up (best other pair of either item,
    null = none), kind; sorted by the first four.
    """
    chosen = settings or Successions()
    known = items.filter(pl.col("ea").is_not_null()).sort("feed", "ea", "item").with_row_index("row")
    words = _weighted_words(known, chosen)
    known = _with_brands(known, words, chosen)
    pairs = _find_candidates(known, words, chosen)
    scored = _score(known, pairs, _without_brand(known, words, chosen), chosen)
    return _assigned(scored, chosen)


def normalise(text: pl.Expr) -> pl.Expr:
    """The text in lower case without accents, punctuation and sizes; words parted by one blank."""
    plain = text.str.normalize("NFKD").str.replace_all(r"\p{M}", "").str.to_lowercase()
    marked = plain.str.replace_many(list(_LETTERS), list(_LETTERS.values())).str.replace_all(
        r"(\d)[.,](\d)", "${1}_${2}"
    )
    bare = marked.str.replace_all(_SIZES, " ").str.replace_all(r"(\d)\s*%", "${1}% ")
    return bare.str.replace_all(r"[^\p{L}\p{N}%_]+", " ").str.strip_chars()


def liken(left: pl.Series, right: pl.Series) -> Array:
    """Likeness 0…1 of two words: share of letters in common, or 0.95 if one abbreviates the other.

    An abbreviation is the word without its inner vowels, or has its first letter and at least four
    letters and half the word's, all of them in the word's order. Words with digits are alike only
    if they are equal.
    """
    shared = _compare(left, right, LCSseq.similarity)
    lengths = np.sort(np.stack([side.str.len_chars().cast(pl.Float64).to_numpy() for side in (left, right)]), axis=0)
    shorter, longer = lengths
    abbreviated = (shared == shorter) & (shorter >= np.maximum(_SHORTEST_ABBREVIATION, longer / 2))
    abbreviated &= (left.str.slice(0, 1) == right.str.slice(0, 1)).to_numpy()
    abbreviated |= (shorter >= _SHORTEST_SKELETON) & (_skeleton(left) == _skeleton(right)).to_numpy()
    likeness = np.maximum(_compare(left, right, fuzz.ratio) / 100.0, np.where(abbreviated, _ABBREVIATED, 0.0))
    number = (left.str.contains(r"\d") | right.str.contains(r"\d")).to_numpy()
    return np.where(number & (left != right).to_numpy(), 0.0, likeness)


def _skeleton(words: pl.Series) -> pl.Series:
    return words.str.slice(0, 1) + words.str.slice(1).str.replace_all("[aeiou]", "")


def assign(old: Rows, new: Rows, scores: Array) -> NDArray[np.bool_]:
    """(K,) the pairs that make the largest total of scores with every old and new row used once at most.

    Pairs that share no item directly or through others are solved apart, each group by the
    Hungarian method; scores must be positive.

    Reference: Kuhn (1955), The Hungarian method for the assignment problem.
    """
    taken = np.zeros(len(scores), dtype=bool)
    if not len(scores):
        return taken
    (olds, left), (news, right) = (np.unique(side, return_inverse=True) for side in (old, new))
    size = len(olds) + len(news)
    graph = coo_array((np.ones(len(scores)), (left, right + len(olds))), shape=(size, size))
    group = connected_components(graph, directed=False)[1][left]
    order = np.argsort(group, kind="stable")
    for members in np.split(order, np.flatnonzero(np.diff(group[order])) + 1):
        taken[members if len(members) == 1 else _best(members, left, right, scores)] = True
    return taken


def _best(members: Rows, left: Rows, right: Rows, scores: Array) -> Rows:
    (olds, i), (news, j) = (np.unique(side[members], return_inverse=True) for side in (left, right))
    table = np.zeros((len(olds), len(news)))
    table[i, j] = scores[members]
    partner = np.full(len(olds), -1)
    rows, columns = linear_sum_assignment(table, maximize=True)
    partner[rows] = columns
    best: Rows = members[partner[i] == j]
    return best


def _weighted_words(known: pl.DataFrame, settings: Successions) -> pl.DataFrame:
    """Distinct words of every row, with the number of items of the block that have it, and their weights."""
    words = _split(known.select("row", *_BLOCK, text="description"), settings)
    items = known.group_by(_BLOCK).agg(pl.len().alias("items"))
    have = words.group_by(*_BLOCK, "word").agg(pl.len().alias("have"))
    counted = words.join(items, on=_BLOCK).join(have, on=[*_BLOCK, "word"])
    return counted.with_columns((_COMMON + (pl.col("items") / pl.col("have")).log()).alias("weight")).sort(
        "row", "word"
    )


def _split(texts: pl.DataFrame, settings: Successions) -> pl.DataFrame:
    split = texts.with_columns(normalise(pl.col("text")).str.split(" ").alias("word")).drop("text")
    found = split.explode("word").filter(pl.col("word") != "", ~pl.col("word").is_in(settings.news))
    return found.unique(["row", "word"])


def _find_candidates(known: pl.DataFrame, words: pl.DataFrame, settings: Successions) -> pl.DataFrame:
    """Old and new rows that share one of the old one's rare words and follow each other in time.

    Of more than `candidates` those with the most weight in shared words stay.
    """
    rare = words.filter(pl.col("have") > 1).sort("row", "have", "word").group_by("row", maintain_order=True)
    probes = rare.head(settings.probes).select("row", *_BLOCK, "word", "weight")
    left = known.filter(pl.col("last_period") + settings.absent <= pl.col("last_known"))
    last = pl.col("last_period").cast(pl.Int64)
    window = pl.int_ranges(last - settings.overlap, last + settings.gap + 1)
    old = probes.join(left.select("row", "first_period", "last_period", window.alias("at")), on="row").explode("at")
    new = words.join(
        known.select("row", pl.col("first_period").cast(pl.Int64).alias("at"), "last_period"), on="row"
    ).select("row", *_BLOCK, "word", "at", "last_period")
    met = old.join(new, on=[*_BLOCK, "word", "at"], suffix="_new").filter(
        pl.col("at") > pl.col("first_period"), pl.col("last_period_new") > pl.col("last_period")
    )
    shared = met.sort("row", "row_new", "word").group_by("row", "row_new", maintain_order=True).agg(pl.sum("weight"))
    ranked = shared.sort(["row", "weight", "row_new"], descending=[False, True, False])
    best = ranked.group_by("row", maintain_order=True).head(settings.candidates)
    return best.select(pl.col("row").alias("old"), pl.col("row_new").alias("new")).sort("old", "new")


def _with_brands(known: pl.DataFrame, words: pl.DataFrame, settings: Successions) -> pl.DataFrame:
    """The items, an unknown brand replaced by the feed's brand of most words that the description holds whole."""
    brands = known.select("feed", "brand").drop_nulls().unique().sort("feed", "brand").with_row_index("row")
    spelt = _split(brands.rename({"brand": "text"}), settings).rename({"row": "name"})
    lengths = spelt.group_by("name").agg(pl.len().alias("length"))
    unknown = known.filter(pl.col("brand").is_null()).select("row")
    held = words.join(unknown, on="row").join(spelt, on=["feed", "word"]).group_by("row", "name").len()
    whole = held.join(lengths, on="name").filter(pl.col("len") == pl.col("length"))
    longest = whole.sort(["row", "length", "name"], descending=[False, True, False]).unique(
        "row", keep="first", maintain_order=True
    )
    found = longest.join(brands.select("brand", name="row"), on="name").select("row", found="brand")
    filled = known.join(found, on="row", how="left", maintain_order="left")
    return filled.with_columns(pl.coalesce("brand", "found").alias("brand")).drop("found")


def _without_brand(known: pl.DataFrame, words: pl.DataFrame, settings: Successions) -> pl.DataFrame:
    """The words but those that spell the item's brand, which is evidence of its own."""
    brands = _split(known.select("row", text="brand"), settings)
    both = words.select("row", "word").join(brands, on="row", suffix="_brand")
    spellings = _likenesses(both.select("word", other="word_brand"), settings.alike)
    spelt = both.join(spellings, left_on=["word", "word_brand"], right_on=["word", "other"], how="semi")
    return words.join(spelt, on=["row", "word"], how="anti", maintain_order="left")


def _likenesses(pairs: pl.DataFrame, least: float) -> pl.DataFrame:
    distinct = pairs.unique(["word", "other"])
    likeness = pl.Series("likeness", liken(distinct["word"], distinct["other"]), dtype=pl.Float64)
    return distinct.with_columns(likeness).filter(pl.col("likeness") >= least)


def _similarity(pairs: pl.DataFrame, words: pl.DataFrame, settings: Successions) -> Array:
    """Share of the weight of a side's words that the other side has too; the lesser share counts twice.

    NaN where a side has no word. A word more on one side may be talk or tell another article apart.
    Words are weighed because a ratio of letters finds sister flavours, which share most words, too like.
    """
    numbered = pairs.with_row_index("pair")
    short = words.select("row", "word", "weight")
    sides = [
        numbered.select("pair", row=side).join(short, on="row", maintain_order="left_right").drop("row")
        for side in ("old", "new")
    ]
    mine, others = sides
    rest, rest_other = (one.join(two, on=["pair", "word"], how="anti") for one, two in ((mine, others), (others, mine)))
    crossed = rest.select("pair", "word").join(rest_other.select("pair", other="word"), on="pair")
    matched = crossed.join(_likenesses(crossed.select("word", "other"), settings.alike), on=["word", "other"])
    shares = [
        _share(one, two, matched.select("pair", "likeness", word=column), len(pairs))
        for one, two, column in ((mine, others, "word"), (others, mine, "other"))
    ]
    similarity: Array = np.clip((shares[0] + shares[1] + np.minimum(*shares)) / 3.0, 0.0, 1.0)
    return similarity


def _share(mine: pl.DataFrame, others: pl.DataFrame, matched: pl.DataFrame, count: int) -> Array:
    best = matched.group_by("pair", "word").agg(pl.max("likeness"))
    equal = others.select("pair", "word", equal=pl.lit(1.0))
    joined = mine.join(equal, on=["pair", "word"], how="left", maintain_order="left")
    joined = joined.join(best, on=["pair", "word"], how="left", maintain_order="left")
    found = joined.select(pl.coalesce("equal", "likeness", pl.lit(0.0))).to_series().to_numpy()
    pair, weight = joined["pair"].to_numpy(), joined["weight"].to_numpy()
    whole = np.bincount(pair, weight, minlength=count)
    share = np.full(count, np.nan)
    np.divide(np.bincount(pair, weight * found, minlength=count), whole, out=share, where=whole > 0)
    return share


def _score(known: pl.DataFrame, pairs: pl.DataFrame, words: pl.DataFrame, settings: Successions) -> pl.DataFrame:
    old, new = known[pairs["old"]], known[pairs["new"]]
    size = _ratio(new["size_amount"], old["size_amount"])
    size = np.where((new["size_measure"] == old["size_measure"]).fill_null(value=False).to_numpy(), size, np.nan)
    price = _ratio(new["opening_price"], old["closing_price"])
    evidence = {
        "similarity": np.concatenate([_similarity(some, words, settings) for some in _slices(pairs)]),
        "same_brand": _same_brand(old["brand"], new["brand"], settings),
        "size_ratio": size,
        "price_ratio": price,
        "unit_price_ratio": price / size,
        "turnover_ratio": _ratio(_turnover(new, "opening_turnover"), _turnover(old, "closing_turnover")),
        "gap": (new["first_period"].cast(pl.Int64) - old["last_period"].cast(pl.Int64)).to_numpy().astype(np.float64),
    }
    scores = combine(Evidence(**evidence))
    identity = {"feed": old["feed"], "ea": old["ea"], "old_item": old["item"], "new_item": new["item"]}
    named = pairs.with_columns(**identity, **{name: pl.Series(values) for name, values in evidence.items()})
    return named.with_columns(pl.Series("score", scores))


def _slices(pairs: pl.DataFrame) -> list[pl.DataFrame]:
    return [pairs.slice(start, _PAIRS_AT_ONCE) for start in range(0, max(len(pairs), 1), _PAIRS_AT_ONCE)]


def _turnover(items: pl.DataFrame, column: str) -> pl.Series:
    return items.select(pl.coalesce(column, pl.col("turnover") / pl.col("periods_sold"))).to_series()


def _ratio(above: pl.Series, below: pl.Series) -> Array:
    ratio = np.full(len(above), np.nan)
    over, under = (side.cast(pl.Float64).fill_null(np.nan).to_numpy() for side in (above, below))
    np.divide(over, under, out=ratio, where=(over > 0) & (under > 0))
    return np.where(np.isfinite(ratio), ratio, np.nan)


def _same_brand(old: pl.Series, new: pl.Series, settings: Successions) -> Array:
    plain = [
        pl.DataFrame({"brand": side.cast(pl.String)})
        .select(normalise(pl.col("brand")).str.replace_all(" ", "").fill_null(""))
        .to_series()
        for side in (old, new)
    ]
    unknown = ((plain[0] == "") | (plain[1] == "")).to_numpy()
    same = _compare(plain[0], plain[1], fuzz.ratio) / 100.0 >= settings.brand
    return np.where(unknown, np.nan, same.astype(np.float64))


def _assigned(scored: pl.DataFrame, settings: Successions) -> pl.DataFrame:
    fit = scored.filter(pl.col("score") >= settings.ask)
    taken = fit.filter(assign(fit["old"].to_numpy(), fit["new"].to_numpy(), fit["score"].to_numpy()))
    other = [
        taken.select("old", "new")
        .join(scored, on=side, suffix="_other")
        .filter(pl.col(other) != pl.col(f"{other}_other"))
        for side, other in (("old", "new"), ("new", "old"))
    ]
    runner_up = pl.concat([found.select("old", "new", "score") for found in other]).group_by("old", "new")
    log = pl.col("size_ratio").log()
    kind = (
        pl.when(log.abs() < _SAME_PACK)
        .then(pl.lit("same pack"))
        .when(log < 0)
        .then(pl.lit("smaller pack"))
        .when(log > 0)
        .then(pl.lit("larger pack"))
        .otherwise(pl.lit("unknown size"))
    )
    return (
        taken.join(runner_up.agg(pl.max("score").alias("runner_up")), on=["old", "new"], how="left")
        .with_columns(pl.col(pl.Float64).fill_nan(None))
        .with_columns(kind.alias("kind"), pl.col("gap", "same_brand").cast(pl.Int64))
        .drop("old", "new")
        .sort("feed", "ea", "old_item", "new_item")
    )


def _compare(left: pl.Series, right: pl.Series, scorer: Any) -> Array:
    found: Array = cpdist(left.to_list(), right.to_list(), scorer=scorer, dtype=np.float64, workers=-1)
    return found
