"""How many products, and how much of turnover, periods have in common, and how long products live."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tillwright.kernels.network import Flags
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


@dataclass(frozen=True, slots=True)
class Flows:
    """(T,) counts and turnover of a period against an earlier one; 0 where there is none.

    Continuing products are sold in both, entering ones only in this period, exiting ones only in the
    earlier. Turnover in currency: of this period for continuing and entering, of the earlier period for
    exiting products.
    """

    continuing: Counts
    entering: Counts
    exiting: Counts
    continuing_turnover: Array
    entering_turnover: Array
    exiting_turnover: Array


def measure_flows(prices: Array, turnover: Array, *, against: Positions | None = None) -> Flows:
    """Counts and turnover of continuing, entering and exiting products.

    Parameters
    ----------
    prices, turnover : (T, N) arrays, currency per unit and currency; NaN = not sold.
    against : (T,) the period that each is compared with, −1 = none; None = the period before.
    """
    sold = np.isfinite(prices)
    value = np.where(sold, turnover, 0.0)
    earlier, some = _earlier(len(prices), against)
    before = sold[earlier]
    flags = (sold & before & some, sold & ~before & some, before & ~sold & some)
    counts = [flag.sum(axis=1) for flag in flags]
    values = [(amount * flag).sum(axis=1) for amount, flag in zip((value, value, value[earlier]), flags, strict=True)]
    return Flows(counts[0], counts[1], counts[2], values[0], values[1], values[2])


def share_matched(
    prices: Array, turnover: Array, *, against: Positions | None = None, chains: Counts | None = None
) -> Array:
    """(T,) share, 0…1, of a period's turnover in products that were sold in an earlier period too.

    Parameters
    ----------
    prices, turnover : (T, N) arrays, currency per unit and currency; NaN = not sold.
    against : (T,) the period that each is compared with, such as its link period, −1 = none; None = the
        period before.
    chains : (N,) code of the chain of successions that a column belongs to; a column without
        predecessor or successor has a code of its own. A product is matched if any column of its
        chain was sold. None = every column for itself.

    Returns
    -------
    NaN where there is no period to compare with, or no turnover.
    """
    sold = np.isfinite(prices)
    earlier, some = _earlier(len(prices), against)
    return _share(np.where(sold, turnover, 0.0), _sold_in_chain(sold, chains)[earlier], some[:, 0])


def share_known(prices: Array, turnover: Array, *, chains: Counts | None = None) -> Array:
    """(T,) share, 0…1, of a period's turnover in products that were sold in any period before.

    Arguments as in `share_matched`. NaN in the first period and where there is no turnover.
    """
    sold = np.isfinite(prices)
    earlier, some = _earlier(len(prices), None)
    ever = np.logical_or.accumulate(_sold_in_chain(sold, chains), axis=0)
    return _share(np.where(sold, turnover, 0.0), ever[earlier], some[:, 0])


@dataclass(frozen=True, slots=True)
class Lives:
    """(N,) arrays of the life of each product; positions −1 and lengths 0 for one that is never sold.

    `length` is the number of periods from first to last, gaps included; `sold` the number in which it
    is sold. `begins` and `ends`: its first period lies after, its last before, the panel's first and last
    period with any sale, so that the life is seen to begin or end; `complete` if both. Other lives are
    censored, and their length is a lower bound.
    """

    first: Counts
    last: Counts
    length: Counts
    sold: Counts
    begins: Flags
    ends: Flags
    complete: Flags


def measure_lives(prices: Array) -> Lives:
    """Lengths of products' lives in the (T, N) array, complete and censored lives told apart."""
    sold = np.isfinite(prices)
    clock = np.arange(len(prices))[:, None]
    last = np.where(sold, clock, -1).max(axis=0, initial=-1)
    first = np.where(sold, clock, len(prices)).min(axis=0, initial=len(prices))
    first[last < 0] = -1
    ever = last >= 0
    length = np.where(ever, last - first + 1, 0)
    begins = ever & (first > first[ever].min(initial=len(prices)))
    ends = ever & (last < last.max(initial=-1))
    return Lives(first, last, length, sold.sum(axis=0), begins, ends, begins & ends)


def _earlier(periods: int, against: Positions | None) -> tuple[Positions, Flags]:
    """(T,) rows to compare with, 0 where there is none, and (T, 1) whether there is one."""
    rows = np.arange(periods) - 1 if against is None else against
    return np.maximum(rows, 0), (rows >= 0)[:, None]


def _sold_in_chain(sold: Flags, chains: Counts | None) -> Flags:
    """(T, N) whether any column of each column's chain is sold."""
    if chains is None or not chains.size:
        return sold
    codes = np.unique(chains, return_inverse=True)[1]
    order = np.argsort(codes, kind="stable")
    starts = np.searchsorted(codes[order], np.arange(codes.max() + 1))
    flags: Flags = np.logical_or.reduceat(sold[:, order], starts, axis=1)[:, codes]
    return flags


def _share(value: Array, matched: Flags, some: Flags) -> Array:
    """(T,) share of the (T, N) turnover that is matched, NaN where there is none or nothing to match with."""
    total = value.sum(axis=1)
    share = np.full(len(value), np.nan)
    np.divide((value * matched).sum(axis=1), total, out=share, where=some & (total > 0))
    return share
