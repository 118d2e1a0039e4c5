"""Geary–Khamis: turnover deflated by quantities at the window's mean prices."""

from __future__ import annotations

import numpy as np

from tillwright.kernels.pairs import Array
from tillwright.kernels.windows import anchor, check_connected


def window_levels(prices: Array, quantities: Array, window: int) -> Array:
    """(K, W) log levels of the Geary–Khamis index of every window of W periods.

    P_t = Σ p_t q_t / Σ v q_t up to a common factor, v_i = Σ_z q[z,i]·(p[z,i]/P_z) / Σ_z q[z,i].  In u = 1/P
    this is linear: (diag(X) − Q·diag(1/Σq)·Xᵀ) u = 0 with X the turnovers, whose one solution is found with
    u = 1 in the first priced period.

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

    Reference: Geary (1958); Khamis (1972); Chessa (2016); as a linear system, Diewert (1999).
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
    amount = np.where(sold, quantities, 0.0)
    value = np.where(sold, prices * quantities, 0.0)
    turnover = value.sum(axis=1)
    # Unknowns are u times turnover, so that columns are alike in size whatever prices do.
    system = np.eye(len(turnover)) - ((amount / amount.sum(axis=0)) @ value.T) / turnover[None, :]
    scaled = np.ones(len(turnover))
    if len(turnover) > 1:
        scaled[1:] = np.linalg.solve(system[1:, 1:], -system[1:, 0])
    levels[priced] = np.log(turnover) - np.log(scaled)
    return levels
