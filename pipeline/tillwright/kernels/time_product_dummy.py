"""Time product dummy: log prices regressed on period and product dummies."""

from __future__ import annotations

import numpy as np

from tillwright.errors import UnconnectedPeriods
from tillwright.kernels.network import fit_levels
from tillwright.kernels.pairs import Array, Positions, make_fields, sum_segments
from tillwright.kernels.windows import Windows, fit_windows


def window_levels(
    prices: Array,
    quantities: Array | None,
    windows: Windows,
    *,
    segments: Positions | None = None,
    leave_out: bool = False,
    apart: list[UnconnectedPeriods] | None = None,
) -> Array:
    """(B, K, W) log levels of the time product dummy index of every window and segment.

    Least squares of ln p[t,i] = π_t + γ_i, weighted by w: the expenditure shares s[t,i] within each
    period, or 1 without quantities.  With γ taken out, π is the least-squares fit to the log
    relatives of pairs of periods, each pair weighing Σ_i w[s,i]·w[t,i] / Σ_z w[z,i]: two matrix
    products per window, solved by `kernels.network.fit_levels`.

    Parameters
    ----------
    prices, quantities : (T, N) arrays, currency per unit and units; NaN = not sold. A quantity of 0
        weighs nothing. None = unweighted.
    windows : see `kernels.windows`.
    segments, leave_out : as in `kernels.pairs.sum_all_pairs`. What is left when a segment is left out
        keeps its weights, shares in the turnover of all.
    apart : as in `kernels.windows.fit_windows`.

    Returns
    -------
    Row k is 0 at its first priced period; NaN in periods without any product.

    Raises
    ------
    UnconnectedPeriods : the priced periods of a window share no chain of products.

    Reference: de Haan & Krsinich (2014); Diewert & Fox (2022), weighted by expenditure shares;
    unweighted, Summers (1973). Deleting observations with their weights as they are is the cluster
    jackknife of weighted least squares (MacKinnon, Nielsen & Webb 2023).
    """
    weights = dummy_weights(prices, quantities, segments, together=leave_out)
    logs = make_fields(prices, quantities)("l")
    return fit_windows(
        weights, (weights, weights * logs), windows, _solve, segments=segments, leave_out=leave_out, apart=apart
    )


def dummy_weights(
    prices: Array, quantities: Array | None, segments: Positions | None = None, *, together: bool = False
) -> Array:
    """(T, N) weights of the regression, 0 = not sold: shares in the turnover of the segment, or of all `together`."""
    field = make_fields(prices, quantities)
    if quantities is None:
        return field("m")
    turnover = field("x")
    if segments is None or together:
        totals = turnover.sum(axis=1, keepdims=True)
    else:
        sizes = np.diff(np.append(segments, turnover.shape[1]))
        totals = np.repeat(sum_segments(turnover, segments).T, sizes, axis=1)
    shares: Array = turnover / np.where(totals > 0, totals, 1.0)
    return shares


def _solve(weights: Array, moments: Array) -> Array:
    return fit_levels(weights, moments - moments.swapaxes(-1, -2))
