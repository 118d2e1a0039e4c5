"""How far evidence speaks for one item being the relaunch of another."""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

from tillwright.kernels.pairs import Array

PRIOR = -3.0
"""Log odds before any evidence: of some twenty items that arrive in the aggregate around an item's
end, one at most is its relaunch (common practice: a shelf place has one heir)."""

WORDS_TURN = 0.8
"""Similarity that speaks neither way: five sixths of a description kept, or one plain word changed."""
WORDS_SLOPE = 20.0
"""Log odds per unit of similarity. A sister flavour keeps 0.4 to 0.7 of the weight of the words, so it
meets −2 to −8, more than price, pack, brand and date together can make good."""
WORDS_FLOOR = -8.0
"""Beyond this the description is that of another article, whatever else agrees."""

SAME_BRAND = 1.5
"""ln of 4.5: relaunches keep their brand, an unrelated pair of an aggregate shares it once in four or five."""
OTHER_BRAND = -4.0
"""Brands change hands, but rarely in the month of a relaunch."""

GAP_COST = 0.3
"""Log odds per period of an empty shelf, or of selling side by side, beyond the period of the change."""


@dataclass(frozen=True, slots=True)
class Normal:
    """Spread of a log ratio about 0 among relaunches and among unrelated pairs, and the least log factor."""

    relaunched: float
    unrelated: float
    floor: float


SIZE = Normal(relaunched=0.15, unrelated=0.60, floor=-3.0)
"""Packs shrink by 3 to 20 %, seldom more; packs of an aggregate differ by factors of two."""
PRICE = Normal(relaunched=0.12, unrelated=0.45, floor=-3.0)
"""The price, or the price per unit, is carried over within a promotion's depth; shelf neighbours differ by half."""
TURNOVER = Normal(relaunched=0.70, unrelated=1.20, floor=-1.5)
"""Turnover carries over within a factor of two; it is noisy, so it may decide little."""


@dataclass(frozen=True, slots=True)
class Evidence:
    """(K,) float arrays about K pairs of an old and a new item; NaN = unknown.

    similarity of the descriptions 0…1; same_brand 1 or 0; size_ratio, price_ratio, unit_price_ratio
    (price per gram, millilitre or piece) and turnover_ratio (turnover per period sold) new over
    old, positive; gap, the new item's first period minus the old one's last, may be negative.
    """

    similarity: Array
    same_brand: Array
    size_ratio: Array
    price_ratio: Array
    unit_price_ratio: Array
    turnover_ratio: Array
    gap: Array


def combine(evidence: Evidence) -> Array:
    """(K,) scores in 0…1 that the new item of a pair is the relaunch of the old one.

    1/(1 + exp(−z)), z = PRIOR + Σ log factors of `weigh`, as if the pieces of evidence were
    independent. The score rises with similarity and same_brand, and falls with the distance of
    a ratio from 1 and of the gap from 0…1. A ratio of prices counts by whichever of price and
    price per unit is nearer to 1. A piece that is unknown leaves the score as it would be without it.
    Scores put pairs in order; they are no probabilities: where other packs of the same article are
    common, fewer of the pairs above a score are relaunches than it says.

    Raises
    ------
    ValueError : arrays of different lengths, a similarity outside 0…1, a ratio that is not positive.

    Reference: Fellegi & Sunter (1969), A theory for record linkage, JASA 64; constants: common practice.
    """
    log_odds = PRIOR + weigh(evidence).sum(axis=0)
    scores: Array = 1.0 / (1.0 + np.exp(-log_odds))
    return scores


def weigh(evidence: Evidence) -> Array:
    """(6, K) log factors of words, brand, size, price, turnover and gap; 0 where unknown.

    Words: WORDS_SLOPE·(similarity − WORDS_TURN), at least WORDS_FLOOR. Brand: one of two constants.
    Size, price, turnover: see `compare_normals`. Gap: −GAP_COST for each period outside 0…1.

    Raises
    ------
    ValueError : as `combine`.
    """
    _check(evidence)
    words = np.maximum(WORDS_SLOPE * (evidence.similarity - WORDS_TURN), WORDS_FLOOR)
    brand = np.where(np.isnan(evidence.same_brand), 0.0, np.where(evidence.same_brand > 0, SAME_BRAND, OTHER_BRAND))
    held = np.fmin(_distance(evidence.price_ratio), _distance(evidence.unit_price_ratio))
    away = np.maximum(np.maximum(evidence.gap - 1.0, -evidence.gap), 0.0)
    factors = np.stack(
        [
            words,
            brand,
            compare_normals(_distance(evidence.size_ratio), SIZE),
            compare_normals(held, PRICE),
            compare_normals(_distance(evidence.turnover_ratio), TURNOVER),
            -GAP_COST * away,
        ]
    )
    return np.where(np.isnan(factors), 0.0, factors)


def compare_normals(distance: Array, normal: Normal) -> Array:
    """(K,) log likelihood ratio of relaunched against unrelated at a distance, at least the floor.

    ln(σ₀/σ₁) − ½x²(1/σ₁² − 1/σ₀²) for x = |ln ratio|, σ₁ the spread among relaunches and σ₀ among
    unrelated pairs; NaN where the distance is.
    """
    precision = normal.relaunched**-2 - normal.unrelated**-2
    ratio = np.log(normal.unrelated / normal.relaunched) - 0.5 * precision * distance**2
    floored: Array = np.maximum(ratio, normal.floor)
    return floored


def _distance(ratio: Array) -> Array:
    return np.abs(np.log(ratio))


def _check(evidence: Evidence) -> None:
    pieces: dict[str, NDArray[np.float64]] = {field.name: getattr(evidence, field.name) for field in fields(evidence)}
    if len({piece.shape for piece in pieces.values()}) > 1:
        raise ValueError(f"evidence of different lengths: { {name: len(piece) for name, piece in pieces.items()} }")
    if ((evidence.similarity < 0) | (evidence.similarity > 1)).any():
        raise ValueError("similarity lies outside 0…1")
    for name, piece in pieces.items():
        if name.endswith("ratio") and (piece <= 0).any():
            raise ValueError(f"{name} is not positive")
