"""Geary–Khamis: turnover deflated by quantities at the window's mean prices."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from tillwright.kernels.pairs import Array
from tillwright.kernels.windows import fit_windows


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
    return fit_windows(prices, quantities, window, _fit)


def _fit(prices: Array, quantities: Array, _: NDArray[np.bool_]) -> Array:
    value = prices * quantities
    turnover = value.sum(axis=1)
    # Unknowns are u times turnover, so that columns are alike in size whatever prices do.
    system = np.eye(len(turnover)) - ((quantities / quantities.sum(axis=0)) @ value.T) / turnover[None, :]
    scaled = np.ones(len(turnover))
    if len(turnover) > 1:
        scaled[1:] = np.linalg.solve(system[1:, 1:], -system[1:, 0])
    levels: Array = np.log(turnover) - np.log(scaled)
    return levels
