"""Indexes adjusted for quality by the attributes of products, with the regressions behind them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, fields
from typing import Any

import numpy as np
import polars as pl

from tillwright.api.frames import Columns, check_choice, check_number, code, named, to_polars
from tillwright.choices import (
    COEFFICIENT_ERRORS,
    FORMS,
    HEDONIC_METHODS,
    MISSING,
    REGRESSIONS,
    THIN,
    Form,
    HedonicMethod,
    Thin,
)
from tillwright.errors import BadPanel, CallError, MissingColumns, TooFewObservations, UnconnectedPeriods
from tillwright.kernels.attributes import Missing
from tillwright.kernels.hedonic import LEAST_OBSERVATIONS, Errors, Hedonic, Regressions
from tillwright.kernels.hedonic_series import TIME_DUMMY, Regressing, make_series
from tillwright.kernels.recipes import Recipe
from tillwright.panels import PanelArrays
from tillwright.stages.regressions import list_coefficients, list_fits, make_design

RESULT = (
    *("index", "observations", "name", "coefficient", "standard_error", "t", "left_out", "unpredicted"),
    *("parameters", "degrees_of_freedom", "adjusted_r2", "dropped", "residual", "standardized_residual"),
)
# Common practice: of normal residuals three in a thousand lie beyond.
OUTLYING = 3.0


@dataclass(frozen=True, slots=True)
class Hedonics:
    """Frames of a hedonic index; each begins with the `by` columns.

    indexes : period, `index`, its first = 100, and `observations` of the regressions; of a time dummy also the
        `standard_error` of the index.
    coefficients : `name`, `coefficient`, `standard_error`, `t`; of regressions by period also the period.
    fit : one row per regression, with its period if it has one: `observations`; `left_out`, prices without all
        attributes or without weight; `unpredicted`, products that it cannot predict; `parameters`;
        `degrees_of_freedom` of residuals; `adjusted_r2`; `dropped`, names of the columns that say nothing new.
    outliers : product, period, `residual` of the log price and `standardized_residual` of more than 3 in size.
    """

    indexes: pl.DataFrame
    coefficients: pl.DataFrame
    fit: pl.DataFrame
    outliers: pl.DataFrame


@dataclass(frozen=True, slots=True)
class _Asked:
    recipe: Recipe
    regressing: Regressing

    @property
    def is_pooled(self) -> bool:
        return self.recipe.method == TIME_DUMMY or self.regressing.regressions == "pooled"


@dataclass(frozen=True, slots=True)
class _Made:
    """The frames of one group, and the first of its periods that was passed over, told with its label."""

    frames: Hedonics
    problem: TooFewObservations | UnconnectedPeriods | None


@dataclass(frozen=True, slots=True)
class _Attributes:
    """Names of the attributes by how they enter, and what a missing category does."""

    numeric: tuple[str, ...]
    categorical: tuple[str, ...]
    logs: tuple[str, ...]
    missing: Missing

    @property
    def names(self) -> list[str]:
        return [*self.numeric, *self.logs, *self.categorical]


def hedonic(
    frame: Any,
    method: HedonicMethod = "time-dummy",
    *,
    numeric: Sequence[str] = (),
    categorical: Sequence[str] = (),
    logs: Sequence[str] = (),
    by: str | Sequence[str] | None = None,
    weighted: bool = True,
    form: Form = "chained",
    regressions: Regressions = "period",
    errors: Errors = "classical",
    missing: Missing = "category",
    least: int = LEAST_OBSERVATIONS,
    thin: Thin = "refuse",
    period: str = "period",
    product: str = "product",
    price: str = "price",
    quantity: str = "quantity",
) -> Hedonics:
    """Index adjusted for quality by a regression of log prices on attributes, the first period = 100.

    Parameters
    ----------
    frame : Polars, pandas or Arrow frame with one row per product and period, in which each product has one value
        of every attribute; a null price means not sold.
    method : "time-dummy" reads the index off period dummies of one regression; "imputation" is a Törnqvist index
        with the prices of entering and exiting products predicted in both periods; "geks-imputation" makes that
        transitive over all periods.
    numeric, logs : columns that enter as they are, and as natural logs; products without a value are left out of
        regressions.
    categorical : columns that enter as dummies, all categories but the first.
    by : columns that split the panel, one index each.
    weighted : whether regressions are weighted by expenditure shares within each period; an index by imputation
        always is. Without weights a time dummy does not read the quantity column.
    form : of "imputation", as for `tillwright.bilateral`.
    regressions : of imputation: "period", one in each period, or "pooled", one time dummy over all.
    errors : "classical", or "HC1", which holds whatever the variances of the errors.
    missing : products without a category are a "category" of their own, or "leave-out".
    least : fewest prices to make a regression of.
    thin : "refuse" raises where a regression has too few prices, or the periods of "geks-imputation" nothing to
        compare; "blank" leaves the index of that period missing, or of the whole group where a regression is over all
        periods, and goes on.
    period, product, price, quantity : column names.

    Raises
    ------
    TooFewObservations, UnconnectedPeriods, CallError, BadPanel, MissingColumns

    Reference: `tillwright.kernels.hedonic`.
    """
    _check_choices(method, form=form, regressions=regressions, errors=errors, missing=missing, thin=thin)
    check_number("least", least, 1)
    asked = _Asked(Recipe(method, form=form), Regressing(regressions, weighted, errors, least))
    wanted = _Attributes(_listed(numeric), _listed(categorical), _listed(logs), missing)
    columns = named(by, period, product, price, quantity)
    table = to_polars(frame)
    _check_attributes(table, columns, wanted)
    arrays = code(table, columns, quantities=weighted or method != TIME_DUMMY, result=RESULT)
    attributes = _by_product(table, columns, wanted, arrays)
    made = [_group(arrays, attributes, wanted, asked, group, cut, columns) for group, cut in enumerate(arrays.cuts)]
    problems = [one.problem for one in made if one.problem is not None]
    if problems and thin == "refuse":
        raise _told(problems)
    return Hedonics(*(pl.concat([getattr(one.frames, field.name) for one in made]) for field in fields(Hedonics)))


def _check_choices(method: object, **given: object) -> None:
    allowed = {
        "form": FORMS,
        "regressions": REGRESSIONS,
        "errors": COEFFICIENT_ERRORS,
        "missing": MISSING,
        "thin": THIN,
    }
    check_choice("method", method, HEDONIC_METHODS)
    for name, found in given.items():
        check_choice(name, found, allowed[name])


def _check_attributes(table: pl.DataFrame, columns: Columns, wanted: _Attributes) -> None:
    names = wanted.names
    if not names:
        raise CallError("No attribute is named; name columns with numeric, logs or categorical.")
    absent = [name for name in names if name not in table.columns]
    if absent:
        raise MissingColumns("The panel", absent, table.columns)
    roles = [*names, *columns.by, columns.period, columns.product, columns.price, columns.quantity]
    twice = sorted({name for name in names if roles.count(name) > 1})
    if twice:
        raise CallError(
            f"Column '{twice[0]}' is named for more than one of numeric, logs, categorical, by, period, product, price "
            "and quantity."
        )
    if columns.product in RESULT:
        raise CallError(f"Column '{columns.product}' would collide with a column of the result; rename it.")
    for name in (*wanted.numeric, *wanted.logs):
        if not (table.schema[name].is_numeric() or table.schema[name] == pl.Boolean):
            raise BadPanel(
                f"Column '{name}' of the panel holds {table.schema[name]}, not numbers; name it with categorical."
            )


def _by_product(table: pl.DataFrame, columns: Columns, wanted: _Attributes, arrays: PanelArrays) -> pl.DataFrame:
    """The attributes of every column of the arrays.

    Raises BadPanel where a product has more than one value, or a value has no log.
    """
    identity = [*columns.by, columns.product]
    rows = table.filter(pl.col(columns.price).is_not_null() & pl.col(columns.price).cast(pl.Float64).is_not_nan())
    rows = rows.with_columns(pl.col(name).cast(pl.Float64).fill_nan(None) for name in (*wanted.numeric, *wanted.logs))
    rows = rows.with_columns(pl.col(name).cast(pl.String) for name in wanted.categorical)
    own = [f"_{number}" for number in range(len(wanted.names))]
    grouped = rows.group_by(identity).agg(
        pl.col(name).drop_nulls().unique(maintain_order=True).alias(key)
        for name, key in zip(wanted.names, own, strict=True)
    )
    for name, key in zip(wanted.names, own, strict=True):
        several = grouped.filter(pl.col(key).list.len() > 1).sort(identity)
        if several.height:
            example = ", ".join(f"{column} {several[column][0]}" for column in identity)
            values = ", ".join(str(value) for value in several[key][0].to_list()[:3])
            raise BadPanel(
                f"{several.height} products have more than one value in '{name}' (first: {example}: {values}). A "
                "product whose attributes change is another product: give it a code of its own, or mend these rows."
            )
    found = arrays.products.join(grouped, on=identity, how="left", maintain_order="left").select(
        pl.col(key).list.first().alias(name) for name, key in zip(wanted.names, own, strict=True)
    )
    for name in wanted.logs:
        bad = int((found[name] <= 0).sum())
        if bad:
            raise BadPanel(f"Column '{name}' is not positive in {bad} products and has no log; name it with numeric.")
    return found


def _group(
    arrays: PanelArrays,
    attributes: pl.DataFrame,
    wanted: _Attributes,
    asked: _Asked,
    group: int,
    cut: slice,
    columns: Columns,
) -> _Made:
    """One group, from its first period to its last."""
    key = arrays.keys.row(group, named=True) if arrays.keys.width else {}
    where = ", ".join(f"{name} {value}" for name, value in key.items())
    priced = np.flatnonzero(np.isfinite(arrays.prices[:, cut]).any(axis=1))
    span = slice(int(priced[0]), int(priced[-1]) + 1)
    labels = arrays.periods[span]
    prices = arrays.prices[span, cut]
    values = None if arrays.values is None else arrays.values[span, cut]
    design = make_design(attributes[cut], wanted.numeric, wanted.logs, wanted.categorical, missing=wanted.missing)
    made = make_series(prices, values, design, asked.recipe, asked.regressing)
    fits, rows = made.regressions, [slice(*span) for span in made.spans]
    times = None if asked.is_pooled else labels[[start for start, _ in made.spans]]
    observations = np.zeros(len(labels), dtype=np.int64)
    for fit, row in zip(fits, rows, strict=True):
        observations[row] = fit.observations
    index = {columns.period: labels, "index": 100.0 * made.index, "observations": observations}
    if asked.recipe.method == TIME_DUMMY:
        errors = fits[0].level_errors if fits else np.full(len(labels), np.nan)
        index["standard_error"] = 100.0 * made.index * errors
    tables = (
        pl.DataFrame(index),
        list_coefficients(fits, times),
        list_fits(fits, times),
        _outliers(fits, rows, arrays.products[columns.product][cut], labels, columns),
    )
    problem = made.problems[0].labelled(labels.to_list(), where) if made.problems else None
    return _Made(Hedonics(*(_with_key(arrays, group, table) for table in tables)), problem)


def _told(problems: Sequence[TooFewObservations | UnconnectedPeriods]) -> Exception:
    """The first problem, with the number of other groups that have one."""
    first = problems[0]
    more = f" {len(problems) - 1} more groups fail likewise." if len(problems) > 1 else ""
    hint = f"{more} With thin 'blank', what cannot be made is left empty and the rest is."
    if isinstance(first, UnconnectedPeriods):
        return UnconnectedPeriods(first.groups, first.where, hint=hint)
    return TooFewObservations(
        first.observations, first.parameters, first.least, period=first.period, where=first.where, hint=hint
    )


def _outliers(
    fits: Sequence[Hedonic], rows: Sequence[slice], products: pl.Series, labels: pl.Series, columns: Columns
) -> pl.DataFrame:
    """Prices far from their prediction, by period, the furthest first."""
    residuals, standardized = (np.full((len(labels), len(products)), np.nan) for _ in range(2))
    for fit, row in zip(fits, rows, strict=True):
        residuals[row], standardized[row] = fit.residuals, fit.standardized
    period, at = np.nonzero(np.abs(np.nan_to_num(standardized)) > OUTLYING)
    order = np.lexsort((at, -np.abs(standardized[period, at]), period))
    period, at = period[order], at[order]
    return pl.DataFrame(
        {
            columns.product: products[at],
            columns.period: labels[period],
            "residual": residuals[period, at],
            "standardized_residual": standardized[period, at],
        }
    )


def _with_key(arrays: PanelArrays, group: int, rows: pl.DataFrame) -> pl.DataFrame:
    if arrays.keys.width:
        rows = pl.concat([arrays.keys[np.full(rows.height, group)], rows], how="horizontal")
    return rows.with_columns(pl.col(pl.Float64).fill_nan(None))


def _listed(names: str | Sequence[str]) -> tuple[str, ...]:
    return (names,) if isinstance(names, str) else tuple(names)
