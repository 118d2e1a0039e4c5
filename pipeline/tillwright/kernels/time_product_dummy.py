"""Time product dummy: log prices regressed on period and product dummies."""

from __future__ import annotations

import numpy as np

from tillwright.kernels.pairs import Array
from tillwright.kernels.windows import anchor, check_connected


def window_levels(prices: Array, quantities: Array, window: int) -> Array:
    """(K, W) log levels of the weighted time product dummy index of every window of W periods.

    Weighted least squares of ln p[t,i] = π_t + γ_i, weights the expenditure shares s[t,i] within each
    period.  With γ taken out, π solves (diag(1) − S·D⁻¹·Sᵀ) π = Σ_i s·(ln p − mean_i), where D_i = Σ_t s[t,i]
    and mean_i the share-weighted mean log price of the product: one matrix product per window.

    Parameters
    ----------
    prices, quantities : (T, N) arrays, currency per unit and units; NaN = not sold.
    window : periods in a window; more than T means one window over all T.

    Returns
    -------
    Row k covers periods k … k+W−1 and is 0 at its first priced period; NaN in periods without any
    product.

    Raises
    ------
    UnconnectedPeriods : the priced periods of a window share no chain of products.

    Reference: de Haan & Krsinich (2014); Diewert & Fox (2022), weighted by expenditure shares.
    """
    length = min(window, len(prices))
    rows = [
        _one_window(prices[start : start + length], quantities[start : start + length], start)
        for start in range(len(prices) - length + 1)
    ]
    return anchor(np.array(rows))


def _one_window(prices: Array, quantities: Array, start: int) -> Array:
    sold = np.isfinite(prices)
    priced = sold.any(axis=1)
    levels = np.full(len(prices), np.nan)
    columns = sold.any(axis=0)
    sold, prices, quantities = sold[priced][:, columns], prices[priced][:, columns], quantities[priced][:, columns]
    if sold.size == 0:
        return levels
    check_connected(sold, np.flatnonzero(priced) + start)
    logs = np.log(np.where(sold, prices, 1.0))
    value = np.where(sold, prices * quantities, 0.0)
    shares = value / value.sum(axis=1, keepdims=True)
    weight = shares.sum(axis=0)
    centred = (logs - (shares * logs).sum(axis=0) / weight) * sold
    normal = np.diag(shares.sum(axis=1)) - (shares / weight) @ shares.T
    levels[priced] = np.linalg.solve(normal + 1.0 / len(normal), (shares * centred).sum(axis=1))
    return levels
