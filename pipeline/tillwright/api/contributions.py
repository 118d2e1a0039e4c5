"""What each product contributes to a movement of an index."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import polars as pl

from tillwright.api.frames import check_choice, code, named, position_of
from tillwright.api.levels import name_of
from tillwright.api.recipes import SETTINGS, Asked, ask, place_in_time, years_of
from tillwright.choices import METHODS, UNCONNECTED, Form, Onto, Splice, Unconnected, Window
from tillwright.errors import CallError, NoLevel, UnconnectedPeriods
from tillwright.kernels.pairs import Array
from tillwright.kernels.product_contributions import Decomposition, decompose
from tillwright.kernels.recipes import Recipe, Years
from tillwright.panels import PanelArrays

FIGURES = ("status", "contribution", "price_start", "price_end", "share_start", "share_end")


def contributions(
    frame: Any,
    method: str | Sequence[str],
    start: Any,
    end: Any,
    *,
    form: Form | Sequence[Form] = "chained",
    window: Window | Sequence[Window | None] | None = None,
    splice: Splice | Sequence[Splice] = "mean",
    onto: Onto | Sequence[Onto] = "published",
    weight_period: Any = None,
    link_month: int = 12,
    unconnected: Unconnected = "refuse",
    by: str | Sequence[str] | None = None,
    period: str = "period",
    product: str = "product",
    price: str = "price",
    quantity: str = "quantity",
) -> pl.DataFrame:
    """Contributions of products, in percentage points, to the change of an index from `start` to `end`.

    Parameters
    ----------
    frame, form, window, splice, onto, weight_period, link_month, by, period, product, price, quantity : as for
        `tillwright.indexes`.
    method : one or a list of `tillwright.choices.METHODS`.
    start, end : labels of two periods, the earlier first.
    unconnected : "refuse" raises where the periods of a window share no chain of products, "blank" goes on.

    Returns
    -------
    The `by` columns, a column for each setting given as a list, the product, `status`, `contribution`, and the
    product's price and its share of turnover (0 to 1, missing without quantities) in both periods. Per group
    contributions add up to 100·(I(end)/I(start) − 1) exactly. Status:

        continuing   sold in both periods
        entering     sold in `end` only; exiting in `start` only
        neither      sold in other periods only, listed if it links them to these
        splice       what linking windows moved beyond the movement of the last one; no product
        missing      the index has no level in one of the two periods; no product and no contribution

    Raises
    ------
    UnconnectedPeriods, CallError, BadPanel, MissingColumns

    Reference: `tillwright.kernels.product_contributions`.
    """
    check_choice("unconnected", unconnected, UNCONNECTED)
    asked = ask(method, METHODS, form=form, window=window, splice=splice, onto=onto)
    columns = named(by, period, product, price, quantity)
    weighed = any(recipe.needs_quantities for recipe in asked.recipes)
    arrays = code(frame, columns, quantities=weighed, result=(*SETTINGS, *FIGURES), keeps="product")
    asked = place_in_time(asked, arrays.periods, weight_period, link_month)
    years = years_of(asked, arrays.periods, link_month)
    movement = (position_of("start", start, arrays.periods), position_of("end", end, arrays.periods))
    if movement[0] >= movement[1]:
        raise CallError(f"start is '{start}' and end is '{end}'; a movement goes from an earlier to a later period.")
    parts = []
    for group, columns_of_group in enumerate(arrays.cuts):
        moved = _Movement(arrays, group, columns_of_group, movement, years, unconnected == "blank")
        parts += [moved.rows(asked, at, product) for at in range(len(asked.recipes))]
    return pl.concat(parts)


@dataclass(frozen=True, slots=True)
class _Movement:
    """The movement of one group from one period to another."""

    arrays: PanelArrays
    group: int
    columns: slice
    movement: tuple[int, int]
    years: Years | None
    blank: bool

    def rows(self, asked: Asked, at: int, product: str) -> pl.DataFrame:
        """Its contributions by one recipe, a row per product and one for the splice."""
        parts = self._decompose(asked.recipes[at])
        rows = pl.DataFrame({product: self.arrays.products[product][self.columns], **self._facts(parts)})
        rows = rows.filter(parts is not None, (pl.col("status") != "neither") | (pl.col("contribution") != 0))
        last = {"status": "splice" if parts else "missing", "contribution": parts.splice if parts else None}
        rows = pl.concat([rows, pl.DataFrame([last], schema_overrides=rows.schema)], how="diagonal")
        key = [self.arrays.keys[np.full(rows.height, self.group)]] if self.arrays.keys.width else []
        settings = [asked.describe()[np.full(rows.height, at)]] if asked.shown else []
        return pl.concat([*key, *settings, rows], how="horizontal")

    def _facts(self, parts: Decomposition | None) -> dict[str, pl.Series]:
        count = self.columns.stop - self.columns.start
        prices: Array = self.arrays.prices[list(self.movement), self.columns]
        sold = np.asarray(np.isfinite(prices))
        shares = np.full(prices.shape, np.nan)
        if self.arrays.values is not None:
            value = prices * self.arrays.values[list(self.movement), self.columns]
            totals = np.nansum(value, axis=1, keepdims=True)
            np.divide(value, totals, out=shares, where=totals > 0)
        status = np.array([["neither", "entering"], ["exiting", "continuing"]])[
            sold[0].astype(int), sold[1].astype(int)
        ]
        made: dict[str, Array] = {
            "contribution": np.zeros(count) if parts is None else parts.products,
            "price_start": prices[0],
            "price_end": prices[1],
            "share_start": shares[0],
            "share_end": shares[1],
        }
        figures = {name: pl.Series(values, dtype=pl.Float64).fill_nan(None) for name, values in made.items()}
        return {"status": pl.Series(status), **figures}

    def _decompose(self, recipe: Recipe) -> Decomposition | None:
        """The parts of the movement; None where the index has no level in one of its periods."""
        prices = self.arrays.prices[:, self.columns]
        values = None if self.arrays.values is None else self.arrays.values[:, self.columns]
        priced = np.asarray(np.isfinite(prices).any(axis=1))
        if not priced[list(self.movement)].all():
            return None
        # Windows of a group begin with its first period, as they do for its index.
        first, last = 0, len(priced)
        if not recipe.is_bilateral:
            first, last = int(priced.argmax()), len(priced) - int(priced[::-1].argmax())
        start, end = self.movement
        try:
            return decompose(
                prices[first:last],
                None if values is None else values[first:last],
                recipe,
                start - first,
                end - first,
                years=None if self.years is None else self.years[first:last],
                pass_over=self.blank,
            ).in_points()
        except UnconnectedPeriods as problem:
            raise problem.labelled(self.arrays.periods.to_list()[first:], name_of(self.arrays, self.group)) from None
        except NoLevel:
            return None
