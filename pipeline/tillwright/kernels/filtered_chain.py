"""A chained index with products left out link by link."""

from __future__ import annotations

import numpy as np

from tillwright.kernels.bilateral import series_of_segments
from tillwright.kernels.network import Flags
from tillwright.kernels.pairs import Array


def chain_links(prices: Array, quantities: Array | None, formula: str, left_out: Flags) -> Array:
    """(T,) chained index of one bilateral formula, the first priced period = 1.

    Every link is made of the products that are priced in both of its periods and not left out of it; one that is left
    out of a link may be in the next.

    Parameters
    ----------
    prices, quantities : (T, N) arrays, currency per unit and units; NaN = not sold.
    formula : one of `kernels.formulas.BILATERAL` that takes its weights from the two periods.
    left_out : (T, N) whether the product is left out of the link that ends in the period.

    Returns
    -------
    NaN in a period without any product, which the chain steps over, and from the first link without a product onwards.
    """
    rows = np.flatnonzero(np.isfinite(prices).any(axis=1))
    before, now = rows[:-1], rows[1:]
    used = np.isfinite(prices[before]) & np.isfinite(prices[now]) & ~left_out[now]
    index = np.full(len(prices), np.nan)
    index[rows[:1]] = 1.0

    def side_by_side(values: Array) -> Array:
        """(2, K·N): every link a panel of its own, of two periods."""
        return np.stack([np.where(used, values[at], np.nan).ravel() for at in (before, now)])

    if now.size:
        pairs = None if quantities is None else side_by_side(quantities)
        starts = np.arange(len(now)) * prices.shape[1]
        links = series_of_segments(side_by_side(prices), pairs, [formula], starts, form="direct")[0, :, 1]
        index[now] = np.cumprod(np.where(used.any(axis=1), links, np.nan))
    return index
