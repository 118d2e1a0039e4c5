"""What multilateral methods have in common: windows anchored on their first period, and connected."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from tillwright.errors import UnconnectedPeriods
from tillwright.kernels.pairs import Array


def anchor(levels: Array) -> Array:
    """(K, W) log levels with 0 in the first period of each row that has one."""
    first = np.isfinite(levels).argmax(axis=1)
    anchored: Array = levels - levels[np.arange(len(levels)), first][:, None]
    return anchored


def check_connected(sold: NDArray[np.bool_], positions: NDArray[np.intp]) -> None:
    """Raise UnconnectedPeriods, with the positions of each group, unless a chain of products joins all periods.

    `sold` (n, N) tells which products are priced in each of n periods, `positions` (n,) what to call them.
    """
    priced = sold.astype(np.float64)
    groups = connected_groups(priced @ priced.T > 0)
    if len(groups) > 1:
        raise UnconnectedPeriods([positions[group].tolist() for group in groups])


def connected_groups(linked: NDArray[np.bool_]) -> list[NDArray[np.intp]]:
    """Positions of each connected group of a symmetric (n, n) adjacency, in order of first member."""
    reach = linked | np.eye(len(linked), dtype=bool)
    for _ in range(max(int(np.ceil(np.log2(len(linked)))), 1)):
        reach = (reach.astype(np.float64) @ reach.astype(np.float64)) > 0
    leaders = reach.argmax(axis=1)
    return [np.flatnonzero(leaders == leader) for leader in np.unique(leaders)]
