"""GEKS: bilateral indexes between all periods of a window, made transitive."""

from __future__ import annotations

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view

from tillwright.kernels.pairs import Array
from tillwright.kernels.windows import anchor, check_connected


def window_levels(log_pairs: Array, window: int) -> Array:
    """(K, W) log GEKS levels of every window of W consecutive periods.

    The levels π minimise Σ_{s,t} (ln P[s,t] − (π_t − π_s))² over the pairs that exist.  Where every
    pair exists this is the geometric mean over all l of P(0,l)·P(l,t), the bilateral of a period
    with itself being 1.

    Parameters
    ----------
    log_pairs : (T, T) log bilateral levels that satisfy time reversal, NaN where no product is in
        common; only pairs less than `window` apart are read.
    window : periods in a window; more than T means one window over all T.

    Returns
    -------
    Row k covers periods k … k+W−1 and is 0 at its first priced period; NaN in periods without any
    product.

    Raises
    ------
    UnconnectedPeriods : the priced periods of a window share no chain of products.

    Reference: Gini (1931); Eltetö & Köves (1964); Szulc (1964); Ivancic, Diewert & Fox (2011);
    on Törnqvist, Caves, Christensen & Diewert (1982).
    """
    length = min(window, len(log_pairs))
    blocks = sliding_window_view(log_pairs, (length, length))
    windows = np.diagonal(blocks, axis1=0, axis2=1).transpose(2, 0, 1)
    levels = windows.mean(axis=1)
    for position in np.flatnonzero(~np.isfinite(levels).all(axis=1)):
        levels[position] = _fit_incomplete(windows[position], int(position))
    return anchor(levels)


def _fit_incomplete(pairs: Array, start: int) -> Array:
    """(W,) least-squares log levels over the pairs that exist, mean 0."""
    present = np.isfinite(pairs)
    priced = np.flatnonzero(present.diagonal())
    levels = np.full(len(pairs), np.nan)
    if priced.size == 0:
        return levels
    linked = present[np.ix_(priced, priced)]
    check_connected(linked, start + priced)
    weights = linked.astype(np.float64)
    laplacian = np.diag(weights.sum(axis=1)) - weights
    observed = np.where(linked, pairs[np.ix_(priced, priced)], 0.0).sum(axis=0)
    levels[priced] = np.linalg.solve(laplacian + 1.0 / priced.size, observed)
    return levels
