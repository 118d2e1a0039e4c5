"""GEKS: bilateral indexes between all periods of a window, made transitive."""

from __future__ import annotations

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view

from tillwright.errors import UnconnectedPeriods
from tillwright.kernels.network import Flags, fit_levels
from tillwright.kernels.pairs import Array
from tillwright.kernels.windows import Windows, anchor, settle


def window_levels(log_pairs: Array, windows: Windows, *, apart: list[UnconnectedPeriods] | None = None) -> Array:
    """(…, K, W) log GEKS levels of every window.

    The levels π minimise Σ_{s,t} (ln P[s,t] − (π_t − π_s))² over the pairs that exist.  Where every
    pair exists this is the geometric mean over all l of P(0,l)·P(l,t), the bilateral of a period
    with itself being 1.

    Parameters
    ----------
    log_pairs : (T, T) or (B, T, T) log bilateral levels that satisfy time reversal, NaN where no
        product is in common; only pairs within a window are read.
    windows : see `kernels.windows`.
    apart : as in `kernels.windows.fit_windows`.

    Returns
    -------
    Row k is 0 at its first priced period; NaN in periods without any product.

    Raises
    ------
    UnconnectedPeriods : the priced periods of a window share no chain of products.

    Reference: Gini (1931); Eltetö & Köves (1964); Szulc (1964); Ivancic, Diewert & Fox (2011);
    on Törnqvist, Caves, Christensen & Diewert (1982).
    """
    pairs = _pad(log_pairs.reshape(-1, *log_pairs.shape[-2:]), windows.before)
    length = windows.length
    blocks = sliding_window_view(pairs, (length, length), axis=(1, 2))
    matrices = np.diagonal(blocks, axis1=1, axis2=2).transpose(0, 3, 1, 2)
    covered = windows.covered()
    levels = matrices.mean(axis=-2)
    incomplete = ~np.isfinite(levels).all(axis=2) | ~covered.all(axis=1)
    for row in np.flatnonzero(incomplete.any(axis=0)):
        members = np.flatnonzero(incomplete[:, row])
        present, linked = _what_exists(matrices[members, row], covered[row])
        present[settle(linked, present, int(row) - windows.before, apart, members)] = False
        levels[members, row] = _fit_incomplete(matrices[members, row], linked, present)
    return anchor(levels).reshape(*log_pairs.shape[:-2], *levels.shape[1:])


def _what_exists(pairs: Array, covered: Flags) -> tuple[Flags, Flags]:
    """(B, W) periods with products and (B, W, W) pairs with a common one, within the window."""
    present = np.isfinite(pairs.diagonal(axis1=1, axis2=2)) & covered
    linked = np.isfinite(pairs) & covered & covered[:, None]
    return present, linked


def _fit_incomplete(pairs: Array, linked: Flags, present: Flags) -> Array:
    """(B, W) least-squares log levels of one window over the pairs that exist within it."""
    levels = fit_levels(linked.astype(np.float64), np.where(linked, pairs, 0.0))
    return np.where(present, levels, np.nan)


def _pad(pairs: Array, before: int) -> Array:
    return np.pad(pairs, ((0, 0), (before, 0), (before, 0)), constant_values=np.nan) if before else pairs
