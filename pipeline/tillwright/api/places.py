"""Price levels of places, such as regions or outlets, at one time."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import polars as pl

from tillwright.api.frames import check_choice, check_number, code, named, position_of
from tillwright.api.levels import deal, name_of
from tillwright.api.recipes import Asked, ask
from tillwright.choices import PLACE_METHODS, UNCONNECTED, Unconnected
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
    unconnected: Unconnected = "refuse",
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
    base : the place whose level is 100, or a list of places the geometric mean of which is 100; None = all that are
        there. Levels of different periods compare best against a base whose places are always there.
    groups : standard errors by a delete-a-group jackknife with this many random groups of products.
    unconnected : "refuse" raises where places fall into groups that share no product, "blank" leaves the
        levels of that `by` group missing and goes on; also where nothing of the base is there.
    by : columns that split the panel, such as the period.
    product, price, quantity : column names.

    Returns
    -------
    The `by` columns, the place column, `level`, `products` sold there and `shared`, those also sold in another
    place; with `groups` also `standard_error` of the level. A place that is alone has no level.

    Raises
    ------
    UnconnectedPlaces : places fall into groups that share no product.
    CallError, BadPanel, MissingColumns

    Reference: Eltetö & Köves (1964) and Szulc (1964); Summers (1973), weighted by expenditure shares Rao (2005);
    Geary (1958); World Bank (2013), Measuring the Real Size of the World Economy, ch. 4–5.
    """
    if groups is not None:
        check_number("groups", groups, 2)
    check_choice("unconnected", unconnected, UNCONNECTED)
    asked = ask(method, PLACE_METHODS)
    columns = named(by, place, product, price, quantity)
    result = ("method", *FIGURES, *(("standard_error",) if groups else ()))
    weighed = any(recipe.needs_quantities for recipe in asked.recipes)
    arrays = code(frame, columns, quantities=weighed, result=result, unit="place")
    given = base if isinstance(base, list | tuple) else [base]
    bases = None if base is None else np.array([position_of("base", one, arrays.periods) for one in given])
    parts = [
        _Comparison(arrays, asked, group, cut, bases).rows(place, groups, blank=unconnected == "blank")
        for group, cut in enumerate(arrays.cuts)
    ]
    return pl.concat(parts)


class _Comparison:
    """The places of one group, those that sell something."""

    def __init__(self, arrays: PanelArrays, asked: Asked, group: int, cut: slice, bases: Positions | None) -> None:
        self.arrays, self.asked, self.group = arrays, asked, group
        self.columns = np.arange(cut.start, cut.stop)
        self.sold = np.isfinite(arrays.prices[:, cut])
        self.here = np.flatnonzero(self.sold.any(axis=1))
        self.base = np.arange(len(self.here)) if bases is None else np.flatnonzero(np.isin(self.here, bases))

    def rows(self, name: str, groups: int | None, *, blank: bool) -> pl.DataFrame:
        """A row for every method and place, the column of places called `name`."""
        levels, failures = self._levels(self.columns, None)
        if not blank:
            self._check(failures)
        shared = (self.sold & (self.sold.sum(axis=0) > 1)).sum(axis=1)[self.here]
        levels = np.where(shared > 0, levels[:, 0], np.nan)
        figures = {"level": levels}
        if groups:
            figures["standard_error"] = np.where(np.isfinite(levels), self._errors(groups), np.nan)
        recipe, place = np.divmod(np.arange(len(self.asked.recipes) * len(self.here)), len(self.here))
        level, *errors = ({name: value.ravel()} for name, value in figures.items())
        numbers = {**level, "products": self.sold.sum(axis=1)[self.here][place], "shared": shared[place]}
        for error in errors:
            numbers |= error
        parts = [self.arrays.keys[np.full(len(recipe), self.group)]] if self.arrays.keys.width else []
        parts += [self.asked.describe()[recipe]] if self.asked.shown else []
        parts += [pl.DataFrame({name: self.arrays.periods[self.here[place]]}), pl.DataFrame(numbers)]
        return pl.concat(parts, how="horizontal").with_columns(pl.col(pl.Float64).fill_nan(None))

    def _check(self, failures: list[Failure]) -> None:
        where = name_of(self.arrays, self.group)
        if failures:
            labels = [str(self.arrays.periods[int(place)]) for place in self.here]
            sides = [[labels[int(str(at))] for at in side] for side in failures[0].reason.groups]
            raise UnconnectedPlaces(sides, where)
        if not len(self.base):
            raise CallError(f"base names places where nothing is sold{' for ' + where if where else ''}.")

    def _levels(self, columns: Positions, segments: Positions | None) -> tuple[Array, list[Failure]]:
        """(R, B, P) levels, and what could not be made."""
        cells = np.ix_(self.here, columns)
        failures: list[Failure] = []
        made = make_indexes(
            self.arrays.prices[cells],
            None if self.arrays.values is None else self.arrays.values[cells],
            self.asked.recipes,
            segments=segments,
            leave_out=segments is not None,
            failures=failures,
        )
        logs = np.log(made)
        based = logs[..., self.base]
        known = np.isfinite(based)
        counts = known.sum(axis=-1, keepdims=True)
        centre = np.where(known, based, 0.0).sum(axis=-1, keepdims=True) / np.maximum(counts, 1)
        return np.where(counts > 0, 100.0 * np.exp(logs - centre), np.nan), failures

    def _errors(self, groups: int) -> Array:
        """(R, P) standard errors; NaN where there is one product only or places fall apart without some."""
        dealt = deal(self.columns, groups)
        if len(dealt.left_out) < 2:
            return np.full((len(self.asked.recipes), len(self.here)), np.nan)
        replicates, _ = self._levels(self.columns[dealt.order], dealt.segments)
        return standard_errors(replicates.swapaxes(0, 1))
