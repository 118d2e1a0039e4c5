"""Geary–Khamis: turnover deflated by quantities at the window's mean prices."""

from __future__ import annotations

import numpy as np

from tillwright.errors import UnconnectedPeriods
from tillwright.kernels.network import balance
from tillwright.kernels.pairs import Array, Positions, make_fields
from tillwright.kernels.windows import Windows, fit_windows


def window_levels(
    prices: Array,
    quantities: Array,
    windows: Windows,
    *,
    segments: Positions | None = None,
    leave_out: bool = False,
    apart: list[UnconnectedPeriods] | None = None,
) -> Array:
    """(B, K, W) log levels of the Geary–Khamis index of every window and segment.

    P_t = Σ p_t q_t / Σ v q_t up to a common factor, v_i = Σ_z q[z,i]·(p[z,i]/P_z) / Σ_z q[z,i].  In u = 1/P
    this is linear, Σ_t C[s,t]·u_t = u_s·Σ_t C[t,s] with C = (q / Σ_z q)·xᵀ and x the turnovers: u is the stationary
    vector of a Markov chain, which `kernels.network.balance` finds without iteration and to nearly full precision.

    Parameters
    ----------
    prices, quantities : (T, N) arrays, currency per unit and units; NaN = not sold. A quantity of 0
        weighs nothing.
    windows : see `kernels.windows`.
    segments, leave_out : as in `kernels.pairs.sum_all_pairs`.
    apart : as in `kernels.windows.fit_windows`.

    Returns
    -------
    Row k is 0 at its first priced period; NaN in periods without any product.

    Raises
    ------
    UnconnectedPeriods : the priced periods of a window share no chain of products.

    Reference: Geary (1958); Khamis (1972); Chessa (2016); as a linear system, Diewert (1999).
    """
    field = make_fields(prices, quantities)
    return fit_windows(field("q"), (field("x"),), windows, _solve, segments=segments, leave_out=leave_out, apart=apart)


def _solve(rates: Array) -> Array:
    levels: Array = -np.log(balance(rates))
    return levels
