"""What each product contributes to a movement of an index."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import polars as pl

from tillwright.api.frames import code, named, position_of
from tillwright.api.recipes import ask, place_in_time, years_of
from tillwright.choices import METHODS, Form, Onto, Splice, Window
from tillwright.errors import CallError, NoLevel, UnconnectedPeriods
from tillwright.kernels.methods import Recipe, Years
from tillwright.kernels.product_contributions import Decomposition, decompose
from tillwright.panels import PanelArrays

FIGURES = ("status", "contribution")


def contributions(
    frame: Any,
    method: str,
    start: Any,
    end: Any,
    *,
    form: Form = "chained",
    window: Window | None = None,
    splice: Splice = "mean",
    onto: Onto = "published",
    weight_period: Any = None,
    link_month: int = 12,
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
        `tillwright.indexes`, each a single value.
    method : one of `tillwright.choices.METHODS`.
    start, end : labels of two periods, the earlier first.

    Returns
    -------
    The `by` columns, the product, `status` and `contribution`; per group they add up to
    100·(I(end)/I(start) − 1) exactly. Status: "continuing" sold in both periods, "entering" in `end` only,
    "exiting" in `start` only, "between" in neither; "splice", with the product null, is what linking windows
    moved beyond the movement of the last one. A group whose index has no level in one of the two periods has one
    row, "missing", without product and contribution.

    Raises
    ------
    UnconnectedPeriods, CallError, BadPanel, MissingColumns

    Reference: `tillwright.kernels.product_contributions`.
    """
    asked = ask(method, METHODS, form=form, window=window, splice=splice, onto=onto)
    if asked.shown:
        raise CallError(f"contributions take one {asked.shown[0]} at a time.")
    columns = named(by, period, product, price, quantity)
    arrays = code(frame, columns, quantities=asked.recipes[0].needs_quantities, result=FIGURES)
    asked = place_in_time(asked, arrays.periods, weight_period, link_month)
    years = years_of(asked, arrays.periods, link_month)
    movement = (position_of("start", start, arrays.periods), position_of("end", end, arrays.periods))
    if movement[0] >= movement[1]:
        raise CallError(f"start is '{start}' and end is '{end}'; a movement goes from an earlier to a later period.")
    ends = np.append(arrays.starts[1:], arrays.prices.shape[1])
    parts = [
        _group(arrays, group, slice(int(first), int(last)), asked.recipes[0], movement, years, product)
        for group, (first, last) in enumerate(zip(arrays.starts, ends, strict=True))
    ]
    return pl.concat(parts)


def _group(
    arrays: PanelArrays,
    group: int,
    cut: slice,
    recipe: Recipe,
    movement: tuple[int, int],
    years: Years | None,
    product: str,
) -> pl.DataFrame:
    prices = arrays.prices[:, cut]
    values = None if arrays.values is None else arrays.values[:, cut]
    key = arrays.keys.row(group, named=True) if arrays.keys.width else {}
    where = ", ".join(f"{name} {value}" for name, value in key.items())
    # Windows of a group begin with its first period, as they do for its index.
    first = 0 if recipe.is_bilateral else int(np.isfinite(prices).any(axis=1).argmax())
    start, end = movement
    made = _decompose(arrays, prices, values, recipe, (start, end), first, years, where)
    if made is None:
        return _with_key(arrays, group, _rows(arrays.products[product], slice(0, 0), ["missing"], [None], product))
    parts = made.in_points()
    sold = np.isfinite(prices[[start, end]])
    status = np.array([["between", "entering"], ["exiting", "continuing"]])[sold[0].astype(int), sold[1].astype(int)]
    figures = [*parts.products.tolist(), parts.splice]
    return _with_key(
        arrays, group, _rows(arrays.products[product], cut, [*status.tolist(), "splice"], figures, product)
    )


def _rows(
    products: pl.Series, cut: slice, status: list[str], figures: list[float] | list[None], product: str
) -> pl.DataFrame:
    """One row per product of a group, then one without."""
    named = pl.concat([products[cut], pl.Series(product, [None], dtype=products.dtype)])
    return pl.DataFrame({product: named, "status": status, "contribution": pl.Series(figures, dtype=pl.Float64)})


def _with_key(arrays: PanelArrays, group: int, rows: pl.DataFrame) -> pl.DataFrame:
    if not arrays.keys.width:
        return rows
    return pl.concat([arrays.keys[np.full(rows.height, group)], rows], how="horizontal")


def _decompose(
    arrays: PanelArrays,
    prices: np.ndarray,
    values: np.ndarray | None,
    recipe: Recipe,
    movement: tuple[int, int],
    first: int,
    years: Years | None,
    where: str,
) -> Decomposition | None:
    """The parts of the movement; None where the index has no level in one of its periods."""
    priced = np.isfinite(prices).any(axis=1)
    last = len(priced) - int(priced[::-1].argmax())
    if not priced[list(movement)].all():
        return None
    try:
        return decompose(
            prices[first:last],
            None if values is None else values[first:last],
            recipe,
            movement[0] - first,
            movement[1] - first,
            years=None if years is None else years[first:last],
        )
    except UnconnectedPeriods as problem:
        raise problem.labelled(arrays.periods.to_list()[first:], where) from None
    except NoLevel:
        return None
