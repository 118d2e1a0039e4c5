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
    result[:, :length] = series[:, 0]
    for start in range(1, windows):
        _extend(result, series[:, start - 1 : start + 1], start, None if where is None else int(where[start]), onto)
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


def _extend(result: Array, windows: Array, start: int, wanted: int | None, onto: str) -> None:
    """Write into (B, T) log levels that of the period in which the second of two windows, (B, 2, W), ends."""
    length = windows.shape[-1]
    now = start + length - 1
    made, new, before = result[:, start:now], windows[:, 1], windows[:, 0, 1:]
    old = made if onto == "published" else before
    used = _used_links(np.isfinite(old) & np.isfinite(new[:, :-1]), wanted)
    counts = used.sum(axis=1)
    level = np.where(used, old - new[:, :-1], 0.0).sum(axis=1) / np.maximum(counts, 1) + new[:, -1]
    linked = counts > 0
    if onto != "published":
        carried = np.isfinite(before) & np.isfinite(made)
        last = length - 2 - carried[:, ::-1].argmax(axis=1)[:, None]
        gap = np.where(carried, made - before, 0.0)
        level += np.take_along_axis(gap, last, axis=1)[:, 0]
        linked &= carried.any(axis=1)
    begun = np.isfinite(result[:, :now]).any(axis=1)
    result[:, now] = np.where(linked, level, np.where(begun | ~np.isfinite(new[:, -1]), np.nan, 0.0))


def _used_links(shared: NDArray[np.bool_], wanted: int | None) -> NDArray[np.bool_]:
    """(B, W − 1) positions in the overlap that each new window is linked on; `wanted` None = on all shared."""
    if wanted is None:
        return shared
    positions = np.arange(shared.shape[1])
    earlier = np.where(shared & (positions <= wanted), positions, -1).max(axis=1)
    later = np.where(shared & (positions > wanted), positions, shared.shape[1]).min(axis=1)
    chosen = np.where(earlier >= 0, earlier, later)
    used: NDArray[np.bool_] = shared & (positions == chosen[:, None])
    return used
