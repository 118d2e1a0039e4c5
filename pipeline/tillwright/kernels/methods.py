"""Any method by its name: one (T,) index out of one (T, N) panel."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

import numpy as np

from tillwright.kernels import geary_khamis, geks, time_product_dummy
from tillwright.kernels.bilateral import FORMULAS, PRICES_ONLY, log_pair_levels, series
from tillwright.kernels.pairs import Array
from tillwright.kernels.splicing import splice


@dataclass(frozen=True, slots=True)
class Recipe:
    """What an index is made by; fields that a method does not use are ignored.

    `window` counts periods, None = one window over all of them.
    """

    method: str
    form: Literal["chained", "direct"] = "chained"
    window: int | None = None
    splice: Literal["movement", "window", "half", "mean"] = "mean"
    onto: Literal["published", "recalculated"] = "published"

    @property
    def needs_quantities(self) -> bool:
        """Whether the method weighs products."""
        return self.method.removeprefix("geks-") not in PRICES_ONLY

    def __str__(self) -> str:
        if self.method in FORMULAS:
            return f"{self.method}, {self.form}"
        if self.window is None:
            return f"{self.method}, one window"
        return f"{self.method}, window {self.window}, {self.splice} splice onto {self.onto}"


def make_index(prices: Array, quantities: Array | None, recipe: Recipe) -> Array:
    """(T,) index, the first priced period = 1; NaN where the method has no level.

    Parameters
    ----------
    prices, quantities : (T, N) arrays; NaN = not sold.

    Raises
    ------
    UnconnectedPeriods : a multilateral window without a chain of common products.

    Reference: `kernels.bilateral`, `kernels.geks`, `kernels.time_product_dummy`, `kernels.geary_khamis`,
    `kernels.splicing`.
    """
    if recipe.method in FORMULAS:
        return series(prices, quantities, recipe.method, form=recipe.form)
    window = len(prices) if recipe.window is None else recipe.window
    levels = _window_levels(prices, quantities, recipe.method, window)
    index: Array = splice(levels, splice=recipe.splice, onto=recipe.onto)
    index[~np.isfinite(prices).any(axis=1)] = np.nan
    return index


def _window_levels(prices: Array, quantities: Array | None, method: str, window: int) -> Array:
    if method.startswith("geks-"):
        span = None if window >= len(prices) else window - 1
        log_pairs = log_pair_levels(prices, quantities, method.removeprefix("geks-"), span=span)
        return geks.window_levels(log_pairs, window)
    if quantities is None:
        raise ValueError(f"method {method!r} needs quantities")
    return _DIRECT[method](prices, quantities, window)


_DIRECT: dict[str, Callable[[Array, Array, int], Array]] = {
    "tpd": time_product_dummy.window_levels,
    "geary-khamis": geary_khamis.window_levels,
}
