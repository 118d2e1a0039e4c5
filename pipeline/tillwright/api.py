"""For researchers: a frame in, a frame of indexes out."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import polars as pl

from tillwright.choices import BILATERAL_FORMULAS, FORMS, MULTILATERAL_METHODS, ONTO, SPLICES, Form, Onto, Splice
from tillwright.errors import BadPanel, CallError, UnconnectedPeriods
from tillwright.kernels.churn import count_matched, count_products
from tillwright.kernels.methods import Recipe, make_index
from tillwright.panels import PanelArrays, to_arrays


def bilateral(
    frame: Any,
    formula: str,
    *,
    form: Form = "chained",
    by: str | Sequence[str] | None = None,
    period: str = "period",
    product: str = "product",
    price: str = "price",
    quantity: str = "quantity",
) -> pl.DataFrame:
    """Index of a bilateral or elementary formula, the first period = 100.

    Parameters
    ----------
    frame : Polars, pandas or Arrow frame with one row per product and period; a null price means
        not sold. Prices in currency per unit, quantities in units.
    formula : one of `tillwright.choices.BILATERAL_FORMULAS`.
    form : "chained" multiplies the links between consecutive periods, "direct" compares every
        period with the first.
    by : columns that split the panel, one series each.
    period, product, price, quantity : column names; the quantity column is not read by formulas
        that use prices alone.

    Returns
    -------
    The `by` columns, `period` as given, `index` (missing where the formula has no level),
    `products` sold in the period and `matched`, those also sold in the period before.

    Raises
    ------
    CallError, BadPanel, MissingColumns

    Reference: `tillwright.kernels.bilateral`.
    """
    _check_choice("formula", formula, BILATERAL_FORMULAS)
    _check_choice("form", form, FORMS)
    return index_frame(
        frame, Recipe(formula, form=form), by=by, period=period, product=product, price=price, quantity=quantity
    )


def multilateral(
    frame: Any,
    method: str,
    *,
    window: int | None = None,
    splice: Splice = "mean",
    onto: Onto = "published",
    by: str | Sequence[str] | None = None,
    period: str = "period",
    product: str = "product",
    price: str = "price",
    quantity: str = "quantity",
) -> pl.DataFrame:
    """Index of a multilateral method over rolling windows, the first period = 100.

    Parameters
    ----------
    frame, by, period, product, price, quantity : as for `bilateral`.
    method : one of `tillwright.choices.MULTILATERAL_METHODS`.
    window : periods in a window, at least 2; None = one window over all periods.
    splice, onto : how later windows extend the series; see `tillwright.kernels.splicing`.

    Returns
    -------
    As for `bilateral`.

    Raises
    ------
    UnconnectedPeriods : the periods of a window share no chain of products.
    CallError, BadPanel, MissingColumns

    Reference: `tillwright.kernels.geks`, `time_product_dummy`, `geary_khamis` and `splicing` beside it.
    """
    _check_choice("method", method, MULTILATERAL_METHODS)
    _check_choice("splice", splice, SPLICES)
    _check_choice("onto", onto, ONTO)
    if window is not None and window < 2:
        raise CallError(f"window is {window}; a window needs at least 2 periods, or None for one over all.")
    recipe = Recipe(method, window=window, splice=splice, onto=onto)
    return index_frame(frame, recipe, by=by, period=period, product=product, price=price, quantity=quantity)


def index_frame(
    frame: Any,
    recipe: Recipe,
    *,
    by: str | Sequence[str] | None = None,
    period: str = "period",
    product: str = "product",
    price: str = "price",
    quantity: str = "quantity",
) -> pl.DataFrame:
    """Index of any recipe, the first period = 100; what `bilateral` and `multilateral` return."""
    groups = [by] if isinstance(by, str) else list(by or ())
    _check_columns(groups, [period, product, price, *([quantity] if recipe.needs_quantities else [])])
    panel = _to_polars(frame)
    value = quantity if recipe.needs_quantities else None
    arrays = to_arrays(panel, by=groups, product=product, period=period, price=price, value=value)
    if len(arrays.periods) == 0:
        raise BadPanel("The panel has no priced row, so there is no index to make.")
    parts = [_group_frame(arrays, position, block, recipe) for position, block in enumerate(arrays)]
    result = pl.concat(parts).rename({"_period": period})
    return result.select(*groups, period, "index", "products", "matched")


def _group_frame(arrays: PanelArrays, position: int, block: Any, recipe: Recipe) -> pl.DataFrame:
    """One series, from the group's first to its last period with a product."""
    priced = np.flatnonzero(np.isfinite(block.prices).any(axis=1))
    cut = slice(int(priced[0]), int(priced[-1]) + 1)
    prices = block.prices[cut]
    quantities = None if block.values is None else block.values[cut]
    labels = arrays.periods[cut.start : cut.stop]
    try:
        index = make_index(prices, quantities, recipe)
    except UnconnectedPeriods as error:
        where = ", ".join(f"{name} {value}" for name, value in zip(arrays.keys.columns, block.key, strict=True))
        raise error.labelled(labels.to_list(), where) from None
    series = pl.DataFrame(
        {
            "_period": labels,
            "index": pl.Series(100.0 * index).fill_nan(None),
            "products": count_products(prices),
            "matched": count_matched(prices),
        }
    )
    key = arrays.keys[position] if arrays.keys.width else pl.DataFrame()
    return series.with_columns(
        pl.lit(value).alias(name).cast(key.schema[name]) for name, value in zip(key.columns, block.key, strict=True)
    )


def _to_polars(frame: Any) -> pl.DataFrame:
    if isinstance(frame, pl.DataFrame):
        return frame
    if isinstance(frame, pl.LazyFrame):
        return frame.collect()
    try:
        return pl.DataFrame(frame)
    except (TypeError, ValueError) as error:
        kind = type(frame).__name__
        raise CallError(f"The panel is a {kind}; give a Polars, pandas or Arrow frame. ({error})") from None


def _check_columns(by: Sequence[str], roles: Sequence[str]) -> None:
    """Every column plays one role, and none is called like a column of the result."""
    names = [*by, *roles]
    twice = sorted({name for name in names if names.count(name) > 1})
    if twice:
        raise CallError(f"Column '{twice[0]}' is named for more than one of by, period, product, price and quantity.")
    taken = sorted({"index", "products", "matched"} & {*by, roles[0]})
    if taken:
        raise CallError(f"Column '{taken[0]}' would collide with a column of the result; rename it in the panel.")


def _check_choice(name: str, found: str, allowed: Sequence[str]) -> None:
    if found not in allowed:
        raise CallError(f"{name} is '{found}'; allowed: {', '.join(allowed)}.")
