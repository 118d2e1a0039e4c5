"""Indexes of a panel: one method, or every combination of methods, windows and splices in one call."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import polars as pl

from tillwright.api.frames import Columns, check_choice, check_number, code, named
from tillwright.api.levels import clusters_of, errors_of, jackknife, make_levels, reach_of
from tillwright.api.recipes import FORMULAS, SETTINGS, Asked, ask, place_in_time, years_of
from tillwright.choices import METHODS, MULTILATERAL_METHODS, UNCONNECTED, Form, Onto, Splice, Unconnected, Window
from tillwright.errors import BadPanel, CallError
from tillwright.kernels.churn import SegmentCounts, count_by_segment
from tillwright.kernels.pairs import Array, Positions
from tillwright.kernels.recipes import Years
from tillwright.panels import PanelArrays

FIGURES = ("index", "products", "matched")
ERRORS = ("standard_error", "change", "change_error", "groups")


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

    What combinations have in common is computed once. A setting that does not apply to a method is null for it, and
    makes no further combination.

    Parameters
    ----------
    frame, form, weight_period, by, period, product, price, quantity : as for `bilateral`.
    method : one or a list of `tillwright.choices.METHODS`.
    window, splice, onto, link_month, unconnected : as for `multilateral`.
    groups : standard errors by a delete-a-group jackknife with this many random groups of products (at
        least 2; as many as there are products where they are fewer). With few groups the errors are themselves
        uncertain, so ask for 20 or more.
    over : with `groups`, a column such as the outlet, whose values are left out instead of products. It becomes part
        of what makes a product, so that prices are compared within it.

    Returns
    -------
    As for `bilateral`; with `groups` also `standard_error` of the index, `change` on the period before
    in per cent, `change_error` in percentage points, and `groups` as used. Errors are missing where an index cannot be
    made without some group. Those of "tpd" are made with the weights of the full panel
    (`tillwright.kernels.time_product_dummy`), those of all others as if what is left out had not been there.

    Raises
    ------
    UnconnectedPeriods, CallError, BadPanel, MissingColumns

    Reference: those of `bilateral` and `multilateral`; `tillwright.kernels.jackknife`.
    """
    if over is not None and groups is None:
        raise CallError("over says what is left out for standard errors, and groups how many times: give both.")
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


def replicates(
    frame: Any,
    method: str | Sequence[str],
    *,
    groups: int,
    over: str | None = None,
    form: Form | Sequence[Form] = "chained",
    window: Window | Sequence[Window | None] | None = None,
    splice: Splice | Sequence[Splice] = "mean",
    onto: Onto | Sequence[Onto] = "published",
    weight_period: Any = None,
    link_month: int = 12,
    by: str | Sequence[str] | None = None,
    period: str = "period",
    product: str = "product",
    price: str = "price",
    quantity: str = "quantity",
) -> pl.DataFrame:
    """Index without each of so many groups of products or outlets: what the errors of `indexes` are made of.

    For standard errors of anything made of indexes, such as a change over a year or the gap between two methods:
    make it of each replicate θ_g, then √((G − 1)/G · Σ (θ_g − mean θ)²).

    Parameters
    ----------
    As for `indexes`.

    Returns
    -------
    The `by` columns, a column for each setting given as a list, `without` (the number of the group left out, from 1),
    `period` and `index`, missing where it cannot be made.

    Raises
    ------
    CallError, BadPanel, MissingColumns

    Reference: `tillwright.kernels.jackknife`.
    """
    check_number("groups", groups, 2)
    asked = ask(method, METHODS, form=form, window=window, splice=splice, onto=onto)
    columns = named(by, period, product, price, quantity, over=over)
    ready = _prepare(frame, asked, columns, weight_period, link_month, ("without", *SETTINGS, *FIGURES))
    parts = []
    clusters = clusters_of(ready.arrays, over)
    for group, left_out, levels in jackknife(ready.arrays, ready.asked, ready.years, ready.reach, clusters, groups):
        first, last = ready.reach[group]
        recipe, without, time = (axis.ravel() for axis in np.indices((*levels.shape[:2], last + 1 - first)))
        made = {"without": left_out[without] + 1, period: ready.arrays.periods[first + time]}
        parts.append(
            _framed(ready, np.full(len(time), group), recipe, {**made, "index": levels[recipe, without, first + time]})
        )
    if not parts:
        raise BadPanel("Nothing can be left out: every group has one product, or one value of over.")
    return pl.concat(parts)


@dataclass(frozen=True, slots=True)
class _Ready:
    """A panel coded for the recipes of a call."""

    arrays: PanelArrays
    asked: Asked
    years: Years | None
    counts: SegmentCounts
    reach: Positions


def _prepare(
    frame: Any, asked: Asked, columns: Columns, weight_period: Any, link_month: int, result: Sequence[str]
) -> _Ready:
    weighed = any(recipe.needs_quantities for recipe in asked.recipes)
    arrays = code(frame, columns, quantities=weighed, result=result)
    asked = place_in_time(asked, arrays.periods, weight_period, link_month)
    years = years_of(asked, arrays.periods, link_month)
    counts = count_by_segment(arrays.prices, arrays.starts)
    return _Ready(arrays, asked, years, counts, reach_of(counts.products))


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
    result = (*SETTINGS, *FIGURES, *(ERRORS if groups else ()))
    ready = _prepare(frame, asked, columns, weight_period, link_month, result)
    panel = (ready.arrays, ready.asked, ready.years, ready.reach)
    levels = make_levels(*panel, blank=unconnected == "blank")
    figures = {"index": levels}
    if groups:
        figures |= errors_of(*panel, levels, clusters_of(ready.arrays, columns.over), groups)
    return _tidy(ready, columns.period, figures)


def _tidy(ready: _Ready, period: str, figures: dict[str, Array]) -> pl.DataFrame:
    """One row per group, recipe and period from the group's first to its last."""
    periods = np.arange(len(ready.arrays.periods))
    inside = (periods >= ready.reach[:, :1]) & (periods <= ready.reach[:, 1:])
    shape = (len(ready.reach), len(ready.asked.recipes), len(periods))
    group, recipe, time = np.nonzero(np.broadcast_to(inside[:, None], shape))
    index, *others = ({name: value[recipe, group, time]} for name, value in figures.items())
    counts = {"products": ready.counts.products[group, time], "matched": ready.counts.matched[group, time]}
    made = {period: ready.arrays.periods[time], **index, **counts}
    for other in others:
        made |= other
    return _framed(ready, group, recipe, made)


def _framed(ready: _Ready, group: Positions, recipe: Positions, made: dict[str, Any]) -> pl.DataFrame:
    """The columns made, after those of the groups and of the settings shown; NaN as missing."""
    parts = [ready.arrays.keys[group]] if ready.arrays.keys.width else []
    parts += [ready.asked.describe()[recipe]] if ready.asked.shown else []
    return pl.concat([*parts, pl.DataFrame(made).with_columns(pl.col(pl.Float64).fill_nan(None))], how="horizontal")
