"""How many products, and how much of turnover, two consecutive periods have in common."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tillwright.kernels.pairs import Array, Positions

Counts = NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Churn:
    """(T,) arrays; the first period has no period before it, so its matches and moves are 0 or NaN.

    Shares lie in 0…1: matched and entering of this period's turnover, exiting of the turnover of
    the period before.
    """

    products: Counts
    matched: Counts
    entering: Counts
    exiting: Counts
    matched_share: Array
    entering_share: Array
    exiting_share: Array


def count_products(prices: Array) -> Counts:
    """(T,) number of products priced in each period of the (T, N) array."""
    counts: Counts = np.isfinite(prices).sum(axis=1)
    return counts


def count_matched(prices: Array) -> Counts:
    """(T,) number of products priced in this period and the one before; 0 in the first."""
    sold = np.isfinite(prices)
    matched = np.zeros(len(prices), dtype=np.int64)
    matched[1:] = (sold[1:] & sold[:-1]).sum(axis=1)
    return matched


@dataclass(frozen=True, slots=True)
class SegmentCounts:
    """(B, T) products, and those matched with the period before, of each segment of columns."""

    products: Counts
    matched: Counts


def count_by_segment(prices: Array, segments: Positions) -> SegmentCounts:
    """Products and matched products of each segment of the (T, N) array; see `kernels.pairs`."""
    sold = np.isfinite(prices)
    both = np.zeros_like(sold)
    np.logical_and(sold[1:], sold[:-1], out=both[1:])
    products, matched = (np.add.reduceat(flags, segments, axis=1, dtype=np.int64).T for flags in (sold, both))
    return SegmentCounts(products, matched)


def measure_churn(prices: Array, turnover: Array) -> Churn:
    """Counts and turnover shares of matched, entering and exiting products.

    Parameters
    ----------
    prices, turnover : (T, N) arrays, currency per unit and currency; NaN = not sold.
    """
    sold = np.isfinite(prices)
    value = np.where(sold, turnover, 0.0)
    total = value.sum(axis=1)
    products, matched = count_products(prices), count_matched(prices)
    entering, exiting = np.zeros_like(matched), np.zeros_like(matched)
    entering[1:] = products[1:] - matched[1:]
    exiting[1:] = products[:-1] - matched[1:]
    shares = np.full((3, len(prices)), np.nan)
    kept_now = (value[1:] * sold[:-1]).sum(axis=1)
    kept_before = (value[:-1] * sold[1:]).sum(axis=1)
    now, before = total[1:], total[:-1]
    np.divide(kept_now, now, out=shares[0, 1:], where=now > 0)
    np.subtract(1.0, shares[0, 1:], out=shares[1, 1:])
    np.divide(before - kept_before, before, out=shares[2, 1:], where=before > 0)
    return Churn(products, matched, entering, exiting, shares[0], shares[1], shares[2])
