"""Time product dummy: log prices regressed on period and product dummies."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from tillwright.kernels.pairs import Array
from tillwright.kernels.windows import fit_windows


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
    return fit_windows(prices, quantities, window, _fit)


def _fit(prices: Array, quantities: Array, sold: NDArray[np.bool_]) -> Array:
    logs = np.log(prices)
    value = prices * quantities
    shares = value / value.sum(axis=1, keepdims=True)
    weight = shares.sum(axis=0)
    centred = (logs - (shares * logs).sum(axis=0) / weight) * sold
    normal = np.diag(shares.sum(axis=1)) - (shares / weight) @ shares.T
    return np.linalg.solve(normal + 1.0 / len(normal), (shares * centred).sum(axis=1))
