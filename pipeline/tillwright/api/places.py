"""Price levels of places, such as regions or outlets, at one time."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import polars as pl

from tillwright.api.frames import check_number, code, named, position_of
from tillwright.api.recipes import Asked, ask
from tillwright.api.replicates import draw_groups
from tillwright.choices import PLACE_METHODS
from tillwright.errors import CallError, UnconnectedPlaces
from tillwright.kernels.jackknife import standard_errors
from tillwright.kernels.methods import Failure, make_indexes
from tillwright.kernels.pairs import Array, Positions
from tillwright.panels import PanelArrays

FIGURES = ("level", "products", "shared")


def place_levels(
    frame: Any,
    method: str | Sequence[str],
    *,
    place: str = "region",
    base: Any = None,
    groups: int | None = None,
    by: str | Sequence[str] | None = None,
    product: str = "product",
    price: str = "price",
    quantity: str = "quantity",
) -> pl.DataFrame:
    """Price level of each place by a multilateral method, one window over all places.

    The kernels are those of indexes over time, with places in the part of periods; no result depends on
    the order of places, or on the base but for scale.

    Parameters
    ----------
    frame : Polars, pandas or Arrow frame with one row per product and place (and per `by`).
    method : one or a list of `tillwright.choices.PLACE_METHODS`; then there is a column `method`.
    place : the column that holds the places.
    base : the place whose level is 100; None = the geometric mean of all places is 100.
    groups : standard errors by a delete-a-group jackknife with this many random groups of products.
    by : columns that split the panel, such as the period.
    product, price, quantity : column names.

    Returns
    -------
    The `by` columns, the place column, `level`, `products` sold there and `shared`, those also sold in another
    place; with `groups` also `standard_error` of the level.

    Raises
    ------
    UnconnectedPlaces : places fall into groups that share no product.
    CallError, BadPanel, MissingColumns

    Reference: Eltetö & Köves (1964) and Szulc (1964); Summers (1973), weighted by expenditure shares Rao (2005);
    Geary (1958); World Bank (2013), Measuring the Real Size of the World Economy, ch. 4–5.
    """
    if groups is not None:
        check_number("groups", groups, 2)
    asked = ask(method, PLACE_METHODS)
    columns = named(by, place, product, price, quantity)
    result = ("method", *FIGURES, *(("standard_error",) if groups else ()))
    weighed = any(recipe.needs_quantities for recipe in asked.recipes)
    arrays = code(frame, columns, quantities=weighed, result=result, ordered=False)
    at = None if base is None else position_of("base", base, arrays.periods)
    ends = np.append(arrays.starts[1:], arrays.prices.shape[1])
    parts = [
        _group(arrays, asked, group, slice(int(start), int(end)), at, groups)
        for group, (start, end) in enumerate(zip(arrays.starts, ends, strict=True))
    ]
    return pl.concat(parts).rename({"_place": place})


def _group(
    arrays: PanelArrays, asked: Asked, group: int, cut: slice, base: int | None, groups: int | None
) -> pl.DataFrame:
    """The rows of one group, for every method and place that sells something."""
    sold = np.isfinite(arrays.prices[:, cut])
    priced = np.flatnonzero(sold.any(axis=1))
    key = arrays.keys.row(group, named=True) if arrays.keys.width else {}
    where = ", ".join(f"{name} {value}" for name, value in key.items())
    if base is not None and base not in priced:
        raise CallError(f"base is '{arrays.periods[base]}', where nothing is sold{' for ' + where if where else ''}.")
    at = None if base is None else int(np.searchsorted(priced, base))
    columns = np.arange(cut.start, cut.stop)
    levels, failures = _levels(arrays, asked, priced, columns, None, at)
    if failures:
        labels = [str(arrays.periods[int(place)]) for place in priced]
        raise UnconnectedPlaces([[labels[int(str(at))] for at in side] for side in failures[0].reason.groups], where)
    figures = {"level": levels[:, 0]}
    if groups:
        figures["standard_error"] = _errors(arrays, asked, priced, columns, groups, at)
    shared = (sold & (sold.sum(axis=0) > 1)).sum(axis=1)[priced]
    recipe, place = np.divmod(np.arange(len(asked.recipes) * len(priced)), len(priced))
    parts = [arrays.keys[np.full(len(recipe), group)]] if arrays.keys.width else []
    parts += [asked.describe()[recipe]] if asked.shown else []
    numbers = {
        "level": figures["level"].ravel(),
        "products": sold.sum(axis=1)[priced][place],
        "shared": shared[place],
        **{name: value.ravel() for name, value in figures.items() if name != "level"},
    }
    parts += [pl.DataFrame({"_place": arrays.periods[priced[place]]}), pl.DataFrame(numbers)]
    return pl.concat(parts, how="horizontal").with_columns(pl.col(pl.Float64).fill_nan(None))


def _levels(
    arrays: PanelArrays,
    asked: Asked,
    priced: Positions,
    columns: Positions,
    segments: Positions | None,
    base: int | None,
) -> tuple[Array, list[Failure]]:
    """(R, B, P) levels of the places that sell something, and what could not be made."""
    cells = np.ix_(priced, columns)
    failures: list[Failure] = []
    made = make_indexes(
        arrays.prices[cells],
        None if arrays.values is None else arrays.values[cells],
        asked.recipes,
        segments=segments,
        leave_out=segments is not None,
        failures=failures,
    )
    logs = np.log(made)
    centre = logs.mean(axis=-1, keepdims=True) if base is None else logs[..., base, None]
    levels: Array = 100.0 * np.exp(logs - centre)
    return levels, failures


def _errors(
    arrays: PanelArrays, asked: Asked, priced: Positions, columns: Positions, groups: int, base: int | None
) -> Array:
    """(R, P) standard errors of the levels; NaN where there is one product only or places fall apart without some."""
    drawn = draw_groups(columns, groups)
    if drawn.max(initial=0) == 0:
        return np.full((len(asked.recipes), len(priced)), np.nan)
    segments = np.flatnonzero(np.diff(np.sort(drawn), prepend=-1))
    replicates, _ = _levels(arrays, asked, priced, columns[np.argsort(drawn, kind="stable")], segments, base)
    return standard_errors(replicates.swapaxes(0, 1))
