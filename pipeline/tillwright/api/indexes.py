"""Indexes of a panel: one method, or every combination of methods, windows and splices in one call."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import polars as pl

from tillwright.api.frames import Columns, check_choice, check_number, code, named
from tillwright.api.recipes import FORMULAS, SETTINGS, Asked, ask, place_in_time, years_of
from tillwright.api.replicates import jackknife
from tillwright.choices import METHODS, MULTILATERAL_METHODS, UNCONNECTED, Form, Onto, Splice, Unconnected, Window
from tillwright.errors import UnconnectedPeriods
from tillwright.kernels.churn import count_by_segment
from tillwright.kernels.methods import Failure, Years, make_indexes
from tillwright.kernels.pairs import Array, Positions
from tillwright.panels import PanelArrays

FIGURES = ("index", "products", "matched")
ERRORS = ("standard_error", "change", "change_error")


def bilateral(
    frame: Any,
    formula: str | Sequence[str],
    *,
    form: Form | Sequence[Form] = "chained",
    weight_period: Any = None,
    by: str | Sequence[str] | None = None,
    period: str = "period",
    product: str = "product",
    price: str = "price",
    quantity: str = "quantity",
) -> pl.DataFrame:
    """Index of bilateral or elementary formulas, the first period = 100.

    Parameters
    ----------
    frame : Polars, pandas or Arrow frame with one row per product and period; a null price means
        not sold. Prices in currency per unit, quantities in units; a quantity may be 0.
    formula : one or a list of `tillwright.choices.BILATERAL_FORMULAS` and `BASE_WEIGHTED_FORMULAS`.
    form : "chained" multiplies the links between consecutive periods, "direct" compares every
        period with the first. May be a list.
    weight_period : the period, or a list of periods added up, that gives "lowe", "young" and
        "geometric-young" their weights; products not sold in it are left out.
    by : columns that split the panel, one series each.
    period, product, price, quantity : column names; the quantity column is not read by formulas
        that use prices alone.

    Returns
    -------
    The `by` columns, a column for each argument given as a list, `period` as given, `index`
    (missing where the formula has no level), `products` sold in the period and `matched`, those also
    sold in the period before.

    Raises
    ------
    CallError, BadPanel, MissingColumns

    Reference: `tillwright.kernels.formulas`, `tillwright.kernels.sato_vartia`.
    """
    asked = ask(formula, FORMULAS, form=form, name="formula")
    columns = named(by, period, product, price, quantity)
    return _compile(frame, asked, columns, weight_period=weight_period)


def multilateral(
    frame: Any,
    method: str | Sequence[str],
    *,
    window: Window | Sequence[Window | None] | None = None,
    splice: Splice | Sequence[Splice] = "mean",
    onto: Onto | Sequence[Onto] = "published",
    link_month: int = 12,
    unconnected: Unconnected = "refuse",
    by: str | Sequence[str] | None = None,
    period: str = "period",
    product: str = "product",
    price: str = "price",
    quantity: str = "quantity",
) -> pl.DataFrame:
    """Index of multilateral methods over windows, the first period = 100.

    Parameters
    ----------
    frame, by, period, product, price, quantity : as for `bilateral`.
    method : one or a list of `tillwright.choices.MULTILATERAL_METHODS`.
    window : periods in a rolling window, at least 2; "expanding" from the last link month on, with the
        splice "link-month"; None = one window over all periods. May be a list.
    splice, onto : how later windows extend the series; see `tillwright.kernels.splicing`. May be lists.
        Neither applies to one window or to "similarity", nor `onto` to "link-month".
    link_month : the calendar month that a year ends in, for the splice "link-month"; of weeks and
        quarters the last that ends in it.
    unconnected : "refuse" raises where the periods of a window share no chain of products; "blank" leaves
        the index of that group and method missing and goes on.

    Returns
    -------
    As for `bilateral`.

    Raises
    ------
    UnconnectedPeriods, CallError, BadPanel, MissingColumns

    Reference: `tillwright.kernels.geks`, `time_product_dummy`, `geary_khamis`, `similarity` and `splicing`.
    """
    asked = ask(method, MULTILATERAL_METHODS, window=window, splice=splice, onto=onto)
    columns = named(by, period, product, price, quantity)
    return _compile(frame, asked, columns, link_month=link_month, unconnected=unconnected)


def indexes(
    frame: Any,
    method: str | Sequence[str],
    *,
    form: Form | Sequence[Form] = "chained",
    window: Window | Sequence[Window | None] | None = None,
    splice: Splice | Sequence[Splice] = "mean",
    onto: Onto | Sequence[Onto] = "published",
    weight_period: Any = None,
    link_month: int = 12,
    unconnected: Unconnected = "refuse",
    groups: int | None = None,
    over: str | None = None,
    by: str | Sequence[str] | None = None,
    period: str = "period",
    product: str = "product",
    price: str = "price",
    quantity: str = "quantity",
) -> pl.DataFrame:
    """Indexes of any methods side by side, the first period = 100, with standard errors where asked.

    What combinations have in common is computed once; a combination in which an argument makes no
    difference occurs once, with null for that argument.

    Parameters
    ----------
    frame, form, weight_period, by, period, product, price, quantity : as for `bilateral`.
    method : one or a list of `tillwright.choices.METHODS`.
    window, splice, onto, link_month, unconnected : as for `multilateral`.
    groups : standard errors by a delete-a-group jackknife with this many random groups of products (at
        least 2; as many as there are products where they are fewer).
    over : a column, such as the outlet, whose values are grouped instead. It becomes part of what makes
        a product, so that prices are compared within it.

    Returns
    -------
    As for `bilateral`; with `groups` also `standard_error` of the index, `change` on the period before
    in per cent and `change_error` in percentage points, missing where an index cannot be made without
    some group.

    Raises
    ------
    UnconnectedPeriods, CallError, BadPanel, MissingColumns

    Reference: those of `bilateral` and `multilateral`; `tillwright.kernels.jackknife`.
    """
    if groups is not None:
        check_number("groups", groups, 2)
    asked = ask(method, METHODS, form=form, window=window, splice=splice, onto=onto)
    columns = named(by, period, product, price, quantity, over=over)
    return _compile(
        frame,
        asked,
        columns,
        weight_period=weight_period,
        link_month=link_month,
        unconnected=unconnected,
        groups=groups,
    )


def _compile(
    frame: Any,
    asked: Asked,
    columns: Columns,
    *,
    weight_period: Any = None,
    link_month: int = 12,
    unconnected: Unconnected = "refuse",
    groups: int | None = None,
) -> pl.DataFrame:
    check_choice("unconnected", unconnected, UNCONNECTED)
    weighed = any(recipe.needs_quantities for recipe in asked.recipes)
    result = (*SETTINGS, *FIGURES, *(ERRORS if groups else ()))
    arrays = code(frame, columns, quantities=weighed, result=result)
    asked = place_in_time(asked, arrays.periods, weight_period, link_month)
    years = years_of(asked, arrays.periods, link_month)
    counts = count_by_segment(arrays.prices, arrays.starts)
    reach = _reach(counts.products)
    levels = 100.0 * make_levels(arrays, asked, years, reach, blank=unconnected == "blank")
    figures = {"index": levels}
    if groups:
        figures |= jackknife(arrays, asked, years, reach, levels, groups, over=columns.over)
    return _tidy(arrays, asked, reach, figures, {"products": counts.products, "matched": counts.matched}).rename(
        {"_period": columns.period}
    )


def _reach(products: np.ndarray) -> Positions:
    """(B, 2) first and last period with a product of each group."""
    sold = products > 0
    return np.stack([sold.argmax(axis=1), sold.shape[1] - 1 - sold[:, ::-1].argmax(axis=1)], axis=1)


def make_levels(arrays: PanelArrays, asked: Asked, years: Years | None, reach: Positions, *, blank: bool) -> Array:
    """(R, B, T) levels, base 1; windows of a group begin with its first period.

    Groups that begin and end in the same periods are compiled together.
    """
    levels = np.full((len(asked.recipes), *reach.shape[:1], len(arrays.periods)), np.nan)
    rolling = [recipe.is_spliced and recipe.window != "expanding" for recipe in asked.recipes]
    # Rolling windows begin where a group does; nothing else depends on empty periods around it.
    bounds = {True: reach, False: np.broadcast_to([0, len(arrays.periods) - 1], reach.shape)}
    for kind, span in bounds.items():
        positions = [at for at, rolls in enumerate(rolling) if rolls == kind]
        if not positions:
            continue
        recipes = [asked.recipes[at] for at in positions]
        for first, last in np.unique(span, axis=0):
            members = np.flatnonzero((span == (first, last)).all(axis=1))
            prices, values, starts = _part(arrays, members, slice(first, last + 1))
            failures: list[Failure] = []
            made = make_indexes(
                prices,
                values,
                recipes,
                segments=starts,
                years=None if years is None else years[first : last + 1],
                failures=failures,
            )
            if failures and not blank:
                raise _labelled(failures[0].reason, arrays, int(members[failures[0].segment]), int(first))
            levels[np.ix_(np.array(positions), members, np.arange(first, last + 1))] = made
    return levels


def _part(arrays: PanelArrays, members: Positions, cut: slice) -> tuple[Array, Array | None, Positions]:
    """Prices, quantities and first columns of some groups over some periods."""
    ends = np.append(arrays.starts[1:], arrays.prices.shape[1])
    if len(members) == len(arrays.starts):
        return arrays.prices[cut], None if arrays.values is None else arrays.values[cut], arrays.starts
    sizes = (ends - arrays.starts)[members]
    starts = np.cumsum(sizes) - sizes
    columns = np.concatenate([np.arange(arrays.starts[at], ends[at]) for at in members])
    values = None if arrays.values is None else arrays.values[cut][:, columns]
    return arrays.prices[cut][:, columns], values, starts


def _labelled(problem: UnconnectedPeriods, arrays: PanelArrays, group: int, first: int) -> UnconnectedPeriods:
    """The error with the labels of its periods and the group named."""
    names = arrays.keys.row(group, named=True) if arrays.keys.width else {}
    where = ", ".join(f"{name} {value}" for name, value in names.items())
    return problem.labelled(arrays.periods.to_list()[first:], where)


def _tidy(
    arrays: PanelArrays,
    asked: Asked,
    reach: Positions,
    figures: dict[str, Array],
    counts: dict[str, np.ndarray],
) -> pl.DataFrame:
    """One row per group, recipe and period from the group's first to its last."""
    recipes, periods = len(asked.recipes), np.arange(len(arrays.periods))
    inside = (periods >= reach[:, :1]) & (periods <= reach[:, 1:])
    shape = (len(reach), recipes, len(periods))
    group, recipe, period = np.nonzero(np.broadcast_to(inside[:, None], shape))
    parts = [] if not arrays.keys.width else [arrays.keys[group]]
    if asked.shown:
        parts.append(asked.describe()[recipe])
    parts.append(pl.DataFrame({"_period": arrays.periods[period]}))
    made = {"index": figures["index"], **counts, **{name: value for name, value in figures.items() if name != "index"}}
    parts.append(
        pl.DataFrame(
            {
                name: value[group, period] if name in counts else value[recipe, group, period]
                for name, value in made.items()
            }
        ).with_columns(pl.col(pl.Float64).fill_nan(None))
    )
    return pl.concat(parts, how="horizontal")
