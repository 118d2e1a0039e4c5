"""Splicing: one series out of the indexes of overlapping windows."""

from __future__ import annotations

from typing import Literal

import numpy as np
from numpy.typing import NDArray

from tillwright.kernels.pairs import Array, Positions


def splice(
    levels: Array,
    *,
    splice: Literal["movement", "window", "half", "mean", "link-month"],
    onto: Literal["recalculated", "published"],
    links: Positions | None = None,
) -> Array:
    """(…, T) index levels, the first priced period = 1, from the log levels of windows.

    The first window stands as it is.  The window that ends in t extends the series at link
    period s: movement s = t−1, window s = t−W+1, half s = t−⌊W/2⌋, mean the geometric mean over
    the W−1 periods common to both windows, link-month the last link month before t.

        onto published      I(t) = I(s) · Pnew(t)/Pnew(s)
        onto recalculated   I(t) = I(t−1) · [Pnew(t)/Pnew(s)] / [Pold(t−1)/Pold(s)]

    A link period without products gives way to the nearest earlier one that both windows price,
    or failing that the nearest later one; with none, the level of t is NaN.  Where t−1 has no
    level, the last period that has one takes its place in the recalculated form.

    Parameters
    ----------
    levels : (…, K, W) log levels, row k covering periods k … k+W−1; NaN = period without products.
    links : (K,) for link-month: where in its row each window finds the link month, 0 … W−2.

    Reference: Ivancic, Diewert & Fox (2011) movement; Krsinich (2016) window; de Haan (2015)
    half; Diewert & Fox (2017) mean; Chessa (2016), Lamboray (2017) link month; Chessa (2019, 2021)
    published and recalculated.
    """
    windows, length = levels.shape[-2:]
    series = levels.reshape(-1, windows, length)
    where = _link_offsets(windows, length, splice, links)
    result = np.full((len(series), windows + length - 1), np.nan)
    for members in _alike(np.isfinite(series)):
        result[members] = _splice_alike(series[members], where, onto)
    index: Array = np.exp(result).reshape(*levels.shape[:-2], -1)
    return index


def _link_offsets(windows: int, length: int, splice: str, links: Positions | None) -> Positions | None:
    """(K,) where in its row each window is linked; None = on all periods."""
    if splice == "mean":
        return None
    if splice == "link-month":
        assert links is not None
        return links
    return np.full(windows, {"movement": length - 2, "window": 0, "half": length - 1 - length // 2}[splice])


def _alike(known: NDArray[np.bool_]) -> list[Positions]:
    """Positions of the series that have levels in the same places."""
    if (known == known[:1]).all():
        return [np.arange(len(known))]
    _, kinds = np.unique(known.reshape(len(known), -1), axis=0, return_inverse=True)
    return [np.flatnonzero(kinds == kind) for kind in range(int(kinds.max()) + 1)]


def _splice_alike(levels: Array, where: Positions | None, onto: str) -> Array:
    """(B, T) log levels of B series whose windows have levels in the same places."""
    count, windows, length = levels.shape
    known = np.isfinite(levels[0])
    result = np.full((count, windows + length - 1), np.nan)
    result[:, :length] = levels[:, 0]
    given = np.isfinite(result[0])
    for start in range(1, windows):
        now = start + length - 1
        new = levels[:, start]
        if not known[start, -1]:
            continue
        given[now] = True
        if not given[:now].any():
            result[:, now] = 0.0
            continue
        old = result[:, start:now] if onto == "published" else levels[:, start - 1, 1:]
        shared = (given[start:now] if onto == "published" else known[start - 1, 1:]) & known[start, :-1]
        links = _usable_links(shared, None if where is None else int(where[start]))
        at_all = np.flatnonzero(known[start - 1, 1:] & given[start:now])
        if links.size == 0 or (onto != "published" and at_all.size == 0):
            given[now] = False
            continue
        gap = (old[:, links] - new[:, links]).mean(axis=1)
        result[:, now] = gap + new[:, -1]
        if onto != "published":
            last = at_all[-1]
            result[:, now] += result[:, start + last] - old[:, last]
    return result


def _usable_links(shared: NDArray[np.bool_], wanted: int | None) -> Positions:
    """Positions in the overlap (0 … W−2) that the new window is linked on; None = all."""
    candidates = np.flatnonzero(shared)
    if wanted is None or candidates.size == 0:
        return candidates
    at = int(np.searchsorted(candidates, wanted, side="right")) - 1
    return candidates[max(at, 0) : max(at, 0) + 1]
