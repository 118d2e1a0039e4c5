"""Aggregation of component indexes with yearly weights, linked through a link period.

Notation beside that of the package: L components, H headings, Y weight years.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tillwright.kernels.pairs import Array


@dataclass(frozen=True, slots=True)
class WeightYear:
    """Periods `first` … `last` (positions, inclusive) are weighted alike and linked on `link`.

    `weights` (L,) refer to the mean prices of the `base` periods and are carried to the link; with no
    base they are taken as they stand.
    """

    link: int
    first: int
    last: int
    weights: Array
    base: NDArray[np.intp]


@dataclass(frozen=True, slots=True)
class Aggregate:
    """Result of `aggregate`.

    index : (T, H) levels, the first period = 1; NaN where nothing below the heading has a level in
        any period.
    weight : (T, H) weight of the heading at prices of the link period, as a share of all.
    imputed : (T, H) part of the heading's weight whose components have no level at t, 0 to 1.
    points : (T, H) cumulated additive contributions to the top heading's index, in units of it.
    """

    index: Array
    weight: Array
    imputed: Array
    points: Array


def aggregate(levels: Array, years: list[WeightYear], paths: NDArray[np.intp], headings: int) -> Aggregate:
    """Indexes of all headings from those of their components.

    Within a weight year, R_h(t) = Σ w_i·C_i(t)/C_i(link) / Σ w_i over the components below h, and
    I_h(t) = I_h(link)·R_h(t).  C is the level of a component made complete: where it has none at t, its
    last one is carried by the movement of the nearest heading above it,

        C_i(t) = C_i(t−1)·M_h(t),   M_h(t) = Σ v_i·I_i(t)/I_i(t−1) / Σ v_i,   v_i = w_i·C_i(t−1)/C_i(link),

    over the components below h that have a level at t−1 and at t; 1 where no heading has any.  When a
    component comes back, it is at its own level again; before its first level it moves with the
    heading, and its first level counts as having moved with it too.  Components below a heading that
    weighs nothing in a year count alike within it.

    Parameters
    ----------
    levels : (T, L) component levels, any base; NaN = none.
    years : weight years in order, together covering every period; the first begins with its link.
    paths : (L, D) headings above each component, nearest first, padded with the top heading, which is
        number 0.
    headings : number of headings H.

    Reference: ILO et al. (2004), Consumer Price Index Manual, ch. 9; missing prices by the class mean,
    (2020) ch. 6; contributions through a chain link, Ribe (1999).
    """
    below = _membership(paths, headings)
    shape = (len(levels), headings)
    index, weight, imputed, points = np.ones(shape), np.zeros(shape), np.zeros(shape), np.zeros(shape)
    complete = _Completion(levels, below, paths)
    for year in years:
        weights = update_weights(year.weights, complete.levels, year.link, year.base)
        shares = weights / weights.sum()
        rows = slice(year.first, year.last + 1)
        for row in range(year.first, year.last + 1):
            complete.reach(row, shares, year.link)
        weighs = below @ shares
        within = below * np.where(weighs > 0, 1.0, 0.0)[:, None] * shares + below * (weighs == 0)[:, None]
        within /= within.sum(axis=1, keepdims=True)
        ratios = complete.levels[rows] / complete.levels[year.link]
        chain = index[year.link].copy()
        index[rows] = chain * (ratios @ within.T)
        weight[rows] = weighs
        imputed[rows] = ~np.isfinite(levels[rows]) @ within.T
        points[rows] = points[year.link] + chain[0] * (ratios * shares @ below.T - weighs)
    index[:, below @ np.isfinite(levels).any(axis=0) == 0] = np.nan
    return Aggregate(index, weight, imputed, points)


def update_weights(weights: Array, levels: Array, link: int, base: NDArray[np.intp]) -> Array:
    """(L,) weights carried from the mean prices of the base periods to those of the link period.

    w_i · I_i(link) / mean of I_i over the base periods, the step that makes a Young index a Lowe
    index; as they stand where `base` is empty.

    Reference: ILO et al. (2004), Consumer Price Index Manual, ch. 9; (2020) ch. 8.
    """
    if base.size == 0:
        return weights
    updated: Array = weights * levels[link] / levels[base].mean(axis=0)
    return updated


class _Completion:
    """Component levels made complete, period by period; only their ratios mean anything."""

    def __init__(self, levels: Array, below: Array, paths: NDArray[np.intp]) -> None:
        self.known = np.isfinite(levels)
        self.given = np.where(self.known, levels, 1.0)
        self.levels = np.ones_like(levels)
        self.scale = np.full(levels.shape[1], np.nan)
        self.below, self.paths = below, paths

    def reach(self, row: int, shares: Array, link: int) -> None:
        """Complete the levels of one period, those before it being complete."""
        known, given = self.known[row], self.given[row]
        carried = np.ones(len(given))
        if row > 0:
            value = shares * self.levels[row - 1] / self.levels[link]
            carried = self.levels[row - 1] * self._movements(row, value)
        starting = known & np.isnan(self.scale)
        self.scale[starting] = carried[starting] / given[starting]
        self.levels[row] = np.where(known, np.where(known, self.scale, 1.0) * given, carried)

    def _movements(self, row: int, value: Array) -> Array:
        """(L,) movement of the nearest heading above each component that has one, 1 where none has."""
        both = (self.known[row] & self.known[row - 1]) * value
        before = self.below @ both
        now = self.below @ (both * self.given[row] / self.given[row - 1])
        movement = np.divide(now, before, out=np.full(len(before), np.nan), where=before > 0)
        found = np.full(len(value), np.nan)
        for depth in range(self.paths.shape[1]):
            found = np.where(np.isnan(found), movement[self.paths[:, depth]], found)
        return np.where(np.isnan(found), 1.0, found)


def _membership(paths: NDArray[np.intp], headings: int) -> Array:
    """(H, L) 1.0 where a component lies below a heading."""
    below = np.zeros((headings, len(paths)))
    below[paths.T, np.arange(len(paths))] = 1.0
    return below
