"""Shares, and the logarithmic mean."""

from __future__ import annotations

import numpy as np

from tillwright.kernels.pairs import Array


def shares(values: Array) -> Array:
    """(…, n) values as shares of the sum of their row, 0 where that is 0."""
    totals = values.sum(axis=-1, keepdims=True)
    parts: Array = values / np.where(totals > 0, totals, 1.0)
    return parts


def logarithmic_mean(a: Array, b: Array) -> Array:
    """(a − b) / ln(a/b) of numbers that are not negative, a where they are equal, 0 where one is 0.

    Reference: Vartia (1976).
    """
    both = (a > 0) & (b > 0)
    gap = np.log(np.where(both, a, 1.0)) - np.log(np.where(both, b, 1.0))
    with np.errstate(divide="ignore", invalid="ignore"):
        mean = np.where(gap == 0, a, b * np.expm1(gap) / gap)
    return np.where(both, mean, 0.0)
