"""Screens on price relatives."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from tillwright.kernels.pairs import Array


def find_extreme(prices: Array, starts: NDArray[np.bool_], low: float, high: float) -> NDArray[np.bool_]:
    """Whether each price is an outlier against the same product's history.

    A price is extreme if its relative to the product's last price that was not, and its relative
    to the price just before, both lie outside [low, high].  A lone wrong price is thus set aside
    and the next right one is not; a lasting change costs one period.

    Parameters
    ----------
    prices : (R,) prices of all products, each product's in order of time, one after another.
    starts : (R,) True where a product begins.
    low, high : bounds of the price relative; common practice is 1/4 and 4, a statistical office
        publishes 1/3 and 3.

    Returns
    -------
    (R,) booleans; a product's first price is never extreme.
    """
    extreme = np.zeros(len(prices), dtype=bool)
    first = np.flatnonzero(starts)
    lengths = np.diff(np.append(first, len(prices)))
    good = prices[first].copy()
    order = np.argsort(-lengths, kind="stable")
    for step in range(1, int(lengths.max(initial=0))):
        live = order[: np.searchsorted(-lengths[order], -step, side="left")]
        at = first[live] + step
        now = prices[at]
        against_good = now / good[live]
        against_last = now / prices[at - 1]
        out = ((against_good < low) | (against_good > high)) & ((against_last < low) | (against_last > high))
        extreme[at] = out
        good[live] = np.where(out, good[live], now)
    return extreme
