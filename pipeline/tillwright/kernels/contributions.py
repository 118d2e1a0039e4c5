"""Contributions of components to the change of an aggregate, in percentage points."""

from __future__ import annotations

import numpy as np

from tillwright.kernels.pairs import Array


def measure_contributions(points: Array, index: Array, lag: int) -> Array:
    """(T, H) contributions to the change of the top heading over `lag` periods; NaN before that.

    [G_h(t) − G_h(t−lag)] / I(t−lag) · 100, where G cumulates the additive steps of
    `chaining.aggregate`.  Over a change of weights this is the sum of the term up to the link and
    the term after it; components add up to the change exactly.

    Parameters
    ----------
    points : (T, H) cumulated steps in units of the top index.
    index : (T,) top index, in the same units.

    Reference: Ribe (1999), on contributions to the 12-month rate of a chain-linked index.
    """
    result = np.full(points.shape, np.nan)
    if lag < len(points):
        result[lag:] = 100.0 * (points[lag:] - points[:-lag]) / index[:-lag, None]
    return result


def percent_change(index: Array, lag: int) -> Array:
    """(T, …) change over `lag` periods in per cent; NaN in the first `lag` periods."""
    result = np.full(index.shape, np.nan)
    if lag < len(index):
        result[lag:] = 100.0 * (index[lag:] / index[:-lag] - 1.0)
    return result
