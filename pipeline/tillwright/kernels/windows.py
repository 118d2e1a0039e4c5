"""Windows of periods: which periods each covers, and fitting all of them from sums over products."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray

from tillwright.errors import UnconnectedPeriods
from tillwright.kernels.network import Flags, find_groups
from tillwright.kernels.pairs import Array, Positions, sum_others, sum_segments

# Matrices of windows and segments are solved so many numbers (1 MB) at a time, to stay in a core's cache.
HELD = 1 << 17


@dataclass(frozen=True, slots=True)
class Windows:
    """K windows as rows of `length` consecutive periods; row k ends in period k + length − 1 − `before`.

    `before` periods are put before the first, and are empty. Of row k the first `skipped[k]` periods
    do not belong to the window.
    """

    length: int
    before: int
    skipped: NDArray[np.intp]

    @classmethod
    def rolling(cls, periods: int, length: int) -> Windows:
        """Every window of `length` periods, or one over all if there are fewer."""
        length = min(length, periods)
        return cls(length, 0, np.zeros(periods - length + 1, dtype=np.intp))

    @classmethod
    def expanding(cls, links: Positions) -> Windows:
        """For each of T periods the window from its link period, `links` (T,), to itself."""
        reach = np.arange(len(links)) - links
        length = int(reach.max(initial=0)) + 1
        return cls(length, length - 1, length - 1 - reach)

    def covered(self) -> Flags:
        """(K, W) whether a period of a row belongs to its window."""
        flags: Flags = np.arange(self.length) >= self.skipped[:, None]
        return flags

    def pad(self, values: Array, fill: float) -> Array:
        """A (T, …) array with the empty periods put before it."""
        if self.before == 0:
            return values
        return np.concatenate([np.full((self.before, *values.shape[1:]), fill), values])


def anchor(levels: Array) -> Array:
    """(…, W) log levels with 0 in the first period of each row that has one."""
    first = np.isfinite(levels).argmax(axis=-1)
    anchored: Array = levels - np.take_along_axis(levels, first[..., None], axis=-1)
    return anchored


def fit_windows(
    left: Array,
    rights: Sequence[Array],
    windows: Windows,
    solve: Callable[..., Array],
    *,
    segments: Positions | None = None,
    leave_out: bool = False,
    apart: list[UnconnectedPeriods] | None = None,
) -> Array:
    """(B, K, W) anchored log levels of every window and segment, from matrices that are sums over products.

    For each right field r the matrix of a window is Σ_i left[s,i]·r[t,i] / Σ_z left[z,i], the last
    sum over the window. Products sold once in a window link nothing and are passed over.

    Parameters
    ----------
    left, rights : (T, N) arrays, 0 = not sold.
    solve : takes the (…, W, W) matrices of all rights and returns (…, W) log levels.
    segments, leave_out : as in `kernels.pairs.sum_all_pairs`.
    apart : collects windows that fall apart, which are NaN then; None = raise.

    Raises
    ------
    UnconnectedPeriods : the priced periods of a window share no chain of products.
    """
    starts = np.zeros(1, dtype=np.intp) if segments is None else segments
    length, count = windows.length, len(windows.skipped)
    present = sum_segments((windows.pad(left, 0.0) > 0).astype(np.float64), starts)
    if leave_out:
        present = sum_others(present)
    fields = _Fields(windows, left, rights)
    levels = np.full((len(starts), count, length), np.nan)
    held = max(HELD // (len(starts) * length * length * len(rights)), 1)
    for low in range(0, count, held):
        rows = range(low, min(low + held, count))
        matrices = [np.zeros((len(starts), len(rows), length, length)) for _ in rights]
        for at, row in enumerate(rows):
            fields.fill([matrix[:, at] for matrix in matrices], row, starts)
        if leave_out:
            matrices = [sum_others(matrix) for matrix in matrices]
        here = sliding_window_view(present > 0, length, axis=1)[:, rows.start : rows.stop] & windows.covered()[rows]
        for at, row in enumerate(rows):
            here[settle(matrices[0][:, at] > 0, here[:, at], row - windows.before, apart), at] = False
        levels[:, rows] = np.where(here, solve(*matrices), np.nan)
    return anchor(levels)


class _Fields:
    """The fields of `fit_windows`, with the number of times that each product was sold up to each period."""

    def __init__(self, windows: Windows, left: Array, rights: Sequence[Array]) -> None:
        self.windows = windows
        self.left, *self.rights = (windows.pad(field, 0.0) for field in (left, *rights))
        self.sold = np.zeros((len(self.left) + 1, self.left.shape[1]), dtype=np.int32)
        np.cumsum(self.left > 0, axis=0, out=self.sold[1:])

    def fill(self, into: Sequence[Array], row: int, starts: Positions) -> None:
        """Write the matrices of one window, (B, W, W) each, of all segments."""
        skip = int(self.windows.skipped[row])
        first, after = row + skip, row + self.windows.length
        traded = np.flatnonzero(self.sold[after] - self.sold[first] > 1)
        share = self.left[first:after].take(traded, axis=1)
        share /= share.sum(axis=0)
        bounds = np.append(np.searchsorted(traded, starts), len(traded))
        for matrix, right in zip(into, self.rights, strict=True):
            field = right[first:after].take(traded, axis=1)
            for position in np.flatnonzero(np.diff(bounds)):
                cut = slice(bounds[position], bounds[position + 1])
                matrix[position, skip:, skip:] = share[:, cut] @ field[:, cut].T


def settle(
    linked: Flags,
    present: Flags,
    start: int,
    apart: list[UnconnectedPeriods] | None,
    segments: Positions | None = None,
) -> list[int]:
    """Positions of those of B windows that fall apart, noted in `apart`; None = raise for the first.

    `linked` (B, W, W) tells which periods have a product in common, `present` (B, W) which have any; the
    windows begin in period `start` and are those of `segments`, None = of all.
    """
    found = []
    for position, groups in enumerate(find_groups(linked, present)):
        if groups:
            segment = position if segments is None else int(segments[position])
            problem = UnconnectedPeriods([[start + member for member in group] for group in groups], segment=segment)
            if apart is None:
                raise problem
            apart.append(problem)
            found.append(position)
    return found
