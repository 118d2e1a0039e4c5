"""What an index is made by, and what follows from it: windows, link periods, weights."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal, TypeAlias

import numpy as np
from numpy.typing import NDArray

from tillwright.errors import CallError
from tillwright.kernels.formulas import BILATERAL, PRICES_ONLY
from tillwright.kernels.network import Flags
from tillwright.kernels.pairs import Array, Positions
from tillwright.kernels.splicing import splice
from tillwright.kernels.windows import Windows

Years: TypeAlias = NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Recipe:
    """What an index is made by; fields that a method does not use are ignored.

    `window` counts periods, None = one window over all of them, "expanding" = from the last link month
    on. `weight_periods` are the positions of the periods that give formulas with weights of their own
    those weights.
    """

    method: str
    form: Literal["chained", "direct"] = "chained"
    window: int | Literal["expanding"] | None = None
    splice: Literal["movement", "window", "half", "mean", "link-month"] = "mean"
    onto: Literal["published", "recalculated"] = "published"
    weight_periods: tuple[int, ...] = ()

    @property
    def needs_quantities(self) -> bool:
        """Whether the method weighs products."""
        return self.method.removeprefix("geks-") not in PRICES_ONLY | {"tpd-unweighted"}

    @property
    def is_bilateral(self) -> bool:
        """Whether the method compares two periods at a time, without windows."""
        return self.method in BILATERAL

    @property
    def is_spliced(self) -> bool:
        """Whether windows are linked into a series."""
        return not self.is_bilateral and self.window is not None and self.method != "similarity"

    @property
    def needs_years(self) -> bool:
        """Whether link months have to be known."""
        return self.is_spliced and self.splice == "link-month"

    def __str__(self) -> str:
        if self.is_bilateral:
            return f"{self.method}, {self.form}"
        if self.window is None:
            return f"{self.method}, one window"
        if self.method == "similarity":
            return f"{self.method}, window {self.window}"
        if self.window == "expanding":
            return f"{self.method}, window expanding from the link month"
        if self.splice == "link-month":
            return f"{self.method}, window {self.window}, linked on the link month"
        return f"{self.method}, window {self.window}, {self.splice} splice onto {self.onto}"


def period_weights(prices: Array, quantities: Array | None, recipe: Recipe) -> Array:
    """(N,) quantities (Lowe) or turnover (Young) of the periods that give the weights, 0 = not sold in them."""
    if not recipe.weight_periods or quantities is None:
        raise CallError(f"'{recipe.method}' takes its weights from a period of its own, and none is given.")
    rows = list(recipe.weight_periods)
    values = quantities[rows] if recipe.method == "lowe" else prices[rows] * quantities[rows]
    weights: Array = np.nansum(values, axis=0)
    return weights


def window_length(recipe: Recipe, periods: int) -> int:
    """Periods in a window of the recipe, none longer than the panel."""
    return periods if recipe.window is None or recipe.window == "expanding" else min(recipe.window, periods)


def windows_of(recipe: Recipe, periods: int, links: Positions | None) -> Windows:
    """The windows of a multilateral recipe over T periods, `links` (T,) being the period that each is linked on.

    Raises CallError where the windows and the link months do not fit each other.
    """
    if recipe.window == "expanding":
        if recipe.splice != "link-month":
            raise CallError(f"An expanding window is linked on its link month; splice is '{recipe.splice}'.")
        return Windows.expanding(known(links))
    windows = Windows.rolling(periods, window_length(recipe, periods))
    if recipe.needs_years:
        ends = np.arange(windows.length, periods)
        reach = int((ends - known(links)[ends]).max(initial=0)) + 1
        if reach > windows.length:
            raise CallError(
                f"A window of {windows.length} periods does not reach the link month; it takes at least {reach}."
            )
    return windows


def links_of(years: Years, priced: Flags | None = None) -> Positions:
    """(T,) position of the last period of an earlier year that is `priced` (T,), None = any; 0 where there is none."""
    links = np.searchsorted(years, years, side="left") - 1
    if priced is not None:
        last = np.maximum.accumulate(np.where(priced, np.arange(len(years)), -1))
        links = np.where(links >= 0, last[links], -1)
    found: Positions = np.maximum(links, 0).astype(np.intp)
    return found


def links_for(recipe: Recipe, prices: Array, quantities: Array | None, years: Years | None) -> Positions | None:
    """(T,) period that each is linked on, if link months matter; in expanding windows one that is priced."""
    if not recipe.needs_years:
        return None
    return links_of(known(years), priced_periods(prices, quantities) if recipe.window == "expanding" else None)


def priced_periods(prices: Array, quantities: Array | None) -> Flags:
    """(T,) whether anything that weighs is sold."""
    sold = np.isfinite(prices)
    if quantities is not None:
        sold &= np.where(sold, quantities, 0.0) > 0
    return np.asarray(sold.any(axis=1), dtype=bool)


def join_windows(levels: Array, windows: Windows, recipe: Recipe, links: Positions | None) -> Array:
    """(…, T) index from the (…, K, W) log levels of the windows of a recipe, `links` as for `windows_of`."""
    offsets = None
    if recipe.needs_years:
        rows = np.arange(levels.shape[-2]) - windows.before
        offsets = np.clip(known(links)[rows + windows.length - 1] - rows, 0, windows.length - 2)
    index: Array = splice(levels, splice=recipe.splice, onto=recipe.onto, links=offsets)
    return index[..., windows.before :]


def known(values: NDArray[Any] | None) -> NDArray[Any]:
    """What link periods are made of; raises CallError where there is nothing."""
    if values is None:
        raise CallError("Linking on the link month needs periods that tell their month, such as 2024-03 or dates.")
    return values
