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
    """Periods `first` … `last` (positions, inclusive) are weighted alike and linked on `link`."""

    link: int
    first: int
    last: int
    weights: Array


@dataclass(frozen=True, slots=True)
class Aggregate:
    """Result of `aggregate`.

    index : (T, H) levels, the first period = 1; NaN where nothing below the heading has a level.
    weight : (T, H) weight of the heading at prices of the link period, as a share of all.
    imputed : (T, H) part of the heading's weight whose components take their parent's movement, 0 to 1.
    points : (T, H) cumulated additive contributions to the top heading's index, in units of it.
    """

    index: Array
    weight: Array
    imputed: Array
    points: Array


def update_weights(weights: Array, levels: Array, link: int, base: NDArray[np.intp]) -> Array:
    """(L,) weights carried from the prices of the base periods to those of the link period.

    w_i · I_i(link) / mean of I_i over the base periods, the step that makes a Young index a Lowe
    index.  A component without levels keeps its weight.

    Reference: ILO et al. (2004), Consumer Price Index Manual, ch. 9; (2020) ch. 8.
    """
    known = np.isfinite(levels[base])
    total = np.where(known, levels[base], 0.0).sum(axis=0)
    ratio = np.ones(levels.shape[1])
    usable = (total > 0) & np.isfinite(levels[link])
    np.divide(levels[link] * known.sum(axis=0), total, out=ratio, where=usable)
    updated: Array = weights * ratio
    return updated


def aggregate(levels: Array, years: list[WeightYear], paths: NDArray[np.intp], headings: int) -> Aggregate:
    """Indexes of all headings from those of their components.

    Within a weight year y, R_h(t) = Σ w_i·I_i(t)/I_i(link) / Σ w_i over the components below h, and
    I_h(t) = I_h(link)·R_h(t).  A component without a level at t or at the link takes the R of the
    nearest heading above it that has one.

    Parameters
    ----------
    levels : (T, L) component levels, any base; NaN = none.
    years : weight years in order, together covering every period; the first begins with its link.
    paths : (L, D) headings above each component, nearest first, padded with the top heading.
        The top heading is number 0.
    headings : number of headings H.

    Reference: ILO et al. (2004), Consumer Price Index Manual, ch. 9; contributions through a chain
    link, Ribe (1999).
    """
    periods = len(levels)
    below = _membership(paths, headings)
    index, weight = np.full((periods, headings), np.nan), np.zeros((periods, headings))
    imputed, steps = np.zeros((periods, headings)), np.zeros((periods, headings))
    index[0], chain = 1.0, np.ones(headings)
    for year in years:
        rows = np.arange(year.first, year.last + 1)
        ratios = levels[rows] / levels[year.link]
        known = np.isfinite(ratios)
        shares = year.weights / year.weights.sum()
        heading_weight = below @ shares
        filled = _fill(ratios, known, shares, below, paths)
        value = np.nan_to_num(filled) * shares
        totals = value @ below.T
        chain = index[year.link] if year.first > 0 else chain
        with np.errstate(divide="ignore", invalid="ignore"):
            index[rows] = chain * (totals / heading_weight)
            imputed[rows] = ((~known * shares) @ below.T) / heading_weight
        index[rows] = np.where((known @ (below * (shares > 0)).T) > 0, index[rows], np.nan)
        weight[rows] = heading_weight
        start = (np.where(shares > 0, shares, 0.0) @ below.T)[None, :]
        steps[rows] = chain[0] * np.diff(totals, axis=0, prepend=start)
    index[0] = np.where(np.isfinite(index[0]), index[0], np.nan)
    return Aggregate(index, weight, imputed, np.cumsum(steps, axis=0))


def _membership(paths: NDArray[np.intp], headings: int) -> Array:
    """(H, L) 1.0 where a component lies below a heading."""
    below = np.zeros((headings, len(paths)))
    below[paths.T, np.arange(len(paths))] = 1.0
    return below


def _fill(ratios: Array, known: NDArray[np.bool_], shares: Array, below: Array, paths: NDArray[np.intp]) -> Array:
    """Ratios with unknown ones taken from the nearest heading that has any known component."""
    weighted = np.where(known, ratios, 0.0) * shares
    held = (known * shares) @ below.T
    with np.errstate(divide="ignore", invalid="ignore"):
        movement = (weighted @ below.T) / held
    filled = np.where(known, ratios, np.nan)
    for depth in range(paths.shape[1]):
        candidate = movement[:, paths[:, depth]]
        filled = np.where(np.isnan(filled), candidate, filled)
    return filled
