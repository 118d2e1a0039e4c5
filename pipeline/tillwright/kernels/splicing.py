"""Splicing: one series out of the indexes of overlapping windows."""

from __future__ import annotations

from typing import Literal

import numpy as np
from numpy.typing import NDArray

from tillwright.kernels.pairs import Array


def splice(
    levels: Array,
    *,
    splice: Literal["movement", "window", "half", "mean"],
    onto: Literal["recalculated", "published"],
) -> Array:
    """(T,) index levels, the first priced period = 1, from the log levels of rolling windows.

    The first window stands as it is.  The window that ends in t extends the series at link
    period s: movement s = t−1, window s = t−W+1, half s = t−⌊W/2⌋, mean the geometric mean over
    the W−1 periods common to both windows.

        onto published      I(t) = I(s) · Pnew(t)/Pnew(s)
        onto recalculated   I(t) = I(t−1) · [Pnew(t)/Pnew(s)] / [Pold(t−1)/Pold(s)]

    A link period without products gives way to the nearest earlier one that both windows price,
    or failing that the nearest later one; with none, the level of t is NaN.  Where t−1 has no
    level, the last period that has one takes its place in the recalculated form.

    Parameters
    ----------
    levels : (K, W) log levels, row k covering periods k … k+W−1; NaN = period without products.

    Reference: Ivancic, Diewert & Fox (2011) movement; Krsinich (2016) window; de Haan (2015)
    half; Diewert & Fox (2017) mean; Chessa (2019, 2021) published and recalculated.
    """
    windows, length = levels.shape
    result = np.full(windows + length - 1, np.nan)
    result[:length] = levels[0]
    for start in range(1, windows):
        now = start + length - 1
        new = levels[start]
        if not np.isfinite(new[-1]):
            continue
        if not np.isfinite(result[:now]).any():
            result[now] = 0.0
            continue
        old = result[start:now] if onto == "published" else levels[start - 1][1:]
        links = _link_positions(np.isfinite(old) & np.isfinite(new[:-1]), length, splice)
        if links.size == 0:
            continue
        if onto == "published":
            result[now] = (old[links] - new[links]).mean() + new[-1]
        else:
            last = np.flatnonzero(np.isfinite(old) & np.isfinite(result[start:now]))
            if last.size == 0:
                continue
            change_new = new[-1] - new[links].mean()
            change_old = old[last[-1]] - old[links].mean()
            result[now] = result[start + last[-1]] + change_new - change_old
    index: Array = np.exp(result)
    return index


def _link_positions(usable: NDArray[np.bool_], length: int, splice: str) -> NDArray[np.intp]:
    """Positions in the overlap (0 … W−2) that the new window is linked on."""
    candidates = np.flatnonzero(usable)
    if splice == "mean" or candidates.size == 0:
        return candidates
    wanted = {"movement": length - 2, "window": 0, "half": length - 1 - length // 2}[splice]
    at = int(np.searchsorted(candidates, wanted, side="right")) - 1
    return candidates[max(at, 0) : max(at, 0) + 1]
