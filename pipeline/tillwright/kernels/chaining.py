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
    nearest heading above it that has one, so a heading that is missing for a while comes back at the
    level that its parent's movement carries it to.

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
    reached = np.ones((periods, headings))
    for year in years:
        rows = np.arange(year.first, year.last + 1)
        ratios = levels[rows] / levels[year.link]
        known = np.isfinite(ratios)
        shares = year.weights / year.weights.sum()
        totals = _fill(ratios, known, shares, below, paths) * shares @ below.T
        chain = reached[year.link] if year.first > 0 else np.ones(headings)
        weighs = below @ shares
        movement = np.divide(totals, weighs, out=np.ones_like(totals), where=weighs > 0)
        reached[rows] = chain * movement
        index[rows] = np.where(known @ (below * (shares > 0)).T > 0, reached[rows], np.nan)
        weight[rows] = weighs
        np.divide((~known * shares) @ below.T, weighs, out=imputed[rows[0] : rows[-1] + 1], where=weighs > 0)
        steps[rows] = chain[0] * np.diff(totals, axis=0, prepend=weighs[None, :])
    return Aggregate(index, weight, imputed, np.cumsum(steps, axis=0))


def _membership(paths: NDArray[np.intp], headings: int) -> Array:
    """(H, L) 1.0 where a component lies below a heading."""
    below = np.zeros((headings, len(paths)))
    below[paths.T, np.arange(len(paths))] = 1.0
    return below


def _fill(ratios: Array, known: NDArray[np.bool_], shares: Array, below: Array, paths: NDArray[np.intp]) -> Array:
    """Ratios with unknown ones taken from the nearest heading that has any known component.

    Where nothing at all is known, the ratios of the period before stand, or 1 in the first.
    """
    weighted = np.where(known, ratios, 0.0) * shares
    held = (known * shares) @ below.T
    movement = np.divide(weighted @ below.T, held, out=np.full(held.shape, np.nan), where=held > 0)
    filled = np.where(known, ratios, np.nan)
    for depth in range(paths.shape[1]):
        filled = np.where(np.isnan(filled), movement[:, paths[:, depth]], filled)
    before = np.ones(filled.shape[1])
    for row in np.flatnonzero(np.isnan(filled).any(axis=1)):
        filled[row] = np.where(np.isnan(filled[row]), filled[row - 1] if row else before, filled[row])
    return filled
