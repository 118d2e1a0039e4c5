"""Sato–Vartia: log relatives weighted by logarithmic means of shares, no sum of products of fields."""

from __future__ import annotations

import numpy as np

from tillwright.kernels.means import logarithmic_mean, shares
from tillwright.kernels.pairs import BLOCK, Array, Positions


def log_levels(
    prices: Array, quantities: Array, base: Positions, current: Positions, segments: Positions | None = None
) -> Array:
    """(B, K) log levels of Π (p_t/p_s)^w for K listed pairs, w ∝ logarithmic mean of s_s and s_t.

    Shares are those over the products matched in the pair; a product that weighs nothing on one
    side weighs nothing.

    Parameters
    ----------
    prices, quantities : (T, N) arrays; NaN = not sold.
    base, current : (K,) positions of s and t.
    segments : (B,) first columns of the segments; None = one.

    Returns
    -------
    NaN where no product is in common.

    Reference: Sato (1976); Vartia (1976).
    """
    starts = np.zeros(1, dtype=np.intp) if segments is None else segments
    ends = np.append(starts[1:], prices.shape[1])
    result = np.full((len(starts), len(base)), np.nan)
    for segment, (start, end) in enumerate(zip(starts, ends, strict=True)):
        step = max(8 * BLOCK // max(int(end - start), 1), 1)
        for low in range(0, len(base), step):
            rows = slice(low, low + step)
            result[segment, rows] = _compare(
                prices[base[rows], start:end],
                prices[current[rows], start:end],
                quantities[base[rows], start:end],
                quantities[current[rows], start:end],
            )
    return result


def weigh(before: Array, after: Array) -> Array:
    """(K, n) weights that add up to 1 in each row, from turnovers in the two periods, 0 = not matched."""
    return shares(logarithmic_mean(shares(before), shares(after)))


def _compare(before: Array, after: Array, sold_before: Array, sold_after: Array) -> Array:
    matched = np.isfinite(before) & np.isfinite(after)
    relative = np.log(np.where(matched, after, 1.0) / np.where(matched, before, 1.0))
    weights = weigh(np.where(matched, before * sold_before, 0.0), np.where(matched, after * sold_after, 0.0))
    return np.where(weights.sum(axis=1) > 0, (weights * relative).sum(axis=1), np.nan)
