"""What multilateral methods have in common: windows anchored on their first period, and connected."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from tillwright.errors import UnconnectedPeriods
from tillwright.kernels.pairs import Array


def anchor(levels: Array) -> Array:
    """(K, W) log levels with 0 in the first period of each row that has one."""
    first = np.isfinite(levels).argmax(axis=1)
    anchored: Array = levels - levels[np.arange(len(levels)), first][:, None]
    return anchored


def fit_windows(
    prices: Array, quantities: Array, window: int, fit: Callable[[Array, Array, NDArray[np.bool_]], Array]
) -> Array:
    """(K, W) log levels of every window of W periods, each fitted on its own and anchored.

    `fit` is given the prices, quantities and sold flags of a window without its empty periods and
    products, 0 where not sold except that prices are 1, and returns a log level per period. Periods
    without any product are NaN.

    Raises
    ------
    UnconnectedPeriods : the priced periods of a window share no chain of products.
    """
    length = min(window, len(prices))
    sold = np.isfinite(prices)
    levels = np.full((len(prices) - length + 1, length), np.nan)
    for start in range(len(levels)):
        here = sold[start : start + length]
        priced, traded = np.flatnonzero(here.any(axis=1)), np.flatnonzero(here.any(axis=0))
        if priced.size == 0:
            continue
        cut = np.ix_(start + priced, traded)
        flags = sold[cut]
        matched = flags.astype(np.float64)
        check_connected(matched @ matched.T > 0, start + priced)
        levels[start, priced] = fit(np.where(flags, prices[cut], 1.0), np.where(flags, quantities[cut], 0.0), flags)
    return anchor(levels)


def check_connected(linked: NDArray[np.bool_], positions: NDArray[np.intp]) -> None:
    """Raise UnconnectedPeriods, with the positions of each group, unless links join all periods.

    `linked` (n, n) tells which of n periods have a product in common, `positions` (n,) what to call them.
    """
    groups = connected_groups(linked)
    if len(groups) > 1:
        raise UnconnectedPeriods([positions[group].tolist() for group in groups])


def connected_groups(linked: NDArray[np.bool_]) -> list[NDArray[np.intp]]:
    """Positions of each connected group of a symmetric (n, n) adjacency, in order of first member."""
    reach = linked | np.eye(len(linked), dtype=bool)
    for _ in range(max(int(np.ceil(np.log2(len(linked)))), 1)):
        reach = (reach.astype(np.float64) @ reach.astype(np.float64)) > 0
    leaders = reach.argmax(axis=1)
    return [np.flatnonzero(leaders == leader) for leader in np.unique(leaders)]
