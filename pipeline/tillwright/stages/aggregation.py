"""Stage 6: from elementary aggregates to every heading above them."""

from __future__ import annotations

import re
from datetime import date

import numpy as np
import polars as pl
from numpy.typing import NDArray

from tillwright.errors import BrokenInvariant, CallError
from tillwright.kernels.chaining import Aggregate, aggregate
from tillwright.kernels.contributions import measure_contributions, percent_change
from tillwright.panels import Array
from tillwright.periods import label_period, parse_period, periods_a_year, periods_of_year, year_and_month
from tillwright.plan import Plan
from tillwright.stages.context import Context
from tillwright.stages.weighting import Components, weight_years
from tillwright.store.references import Tree
from tillwright.store.workspace import write_frame

# Contributions are sums of some hundred terms of order 1; rounding stays far below this.
_ADDITIVE_TO = 1e-9
_DECIMAL = pl.Decimal(38, 10)


def aggregate_headings(context: Context) -> int:
    """Write `headings`; the number of headings that have an index.

    Raises
    ------
    CallError : no weights for a year, or a reference that the periods compiled do not hold.
    BrokenInvariant : contributions do not add up to the change of all items.
    """
    periods = context.periods()["period"]
    tree = context.references.tree
    components = _components(context, periods)
    order = sorted(tree.parents, key=lambda heading: (bool(tree.parents[heading]), heading))
    paths = _paths(components.leaves, tree, order)
    years = weight_years(context, components, periods)
    result = aggregate(components.levels, years, paths, len(order))
    frame = _frame(context, result, order, periods)
    context.workspace.write("headings", frame)
    write_frame(_for_people(context, frame), context.workspace.headings_csv)
    return frame.filter(pl.col("index").is_not_null())["heading"].n_unique()


def _components(context: Context, periods: pl.Series) -> Components:
    compiled = context.workspace.read("ea_indexes").select("ea", "stratum", "period", "level")
    outside = context.references.outside.select(
        pl.col("heading").alias("ea"), pl.lit("").alias("stratum"), "period", pl.col("index").alias("level")
    )
    series = pl.concat([compiled, outside]).filter(pl.col("period").is_in(periods.implode()))
    have = set(series["ea"])
    keys = [
        *series.select("ea", "stratum").unique().rows(),
        *((leaf, "") for leaf in context.references.tree.leaves if leaf not in have),
    ]
    keys.sort()
    column = pl.DataFrame({"ea": [k[0] for k in keys], "stratum": [k[1] for k in keys]}).with_row_index("column")
    row = pl.DataFrame({"period": periods}).with_row_index("row")
    placed = series.join(column, on=["ea", "stratum"]).join(row, on="period").filter(pl.col("level").is_not_null())
    levels = np.full((len(periods), len(keys)), np.nan)
    levels[placed["row"].to_numpy(), placed["column"].to_numpy()] = placed["level"].to_numpy()
    return Components(levels, tuple(k[0] for k in keys), tuple(k[1] for k in keys))


def _paths(leaves: tuple[str, ...], tree: Tree, order: list[str]) -> NDArray[np.intp]:
    number = {heading: position for position, heading in enumerate(order)}
    lines = [[number[heading] for heading in tree.ancestry(leaf)] for leaf in leaves]
    depth = max(map(len, lines))
    return np.array([line + [0] * (depth - len(line)) for line in lines], dtype=np.intp)


def _frame(context: Context, result: Aggregate, order: list[str], periods: pl.Series) -> pl.DataFrame:
    tree, year = context.references.tree, periods_a_year(context.plan.plan.period)
    index = result.index * _scale(context.plan, result.index, periods)
    index[result.imputed[:, 0] > 1.0 - _ADDITIVE_TO] = np.nan  # a period of which nothing is known has no index
    contributions = {lag: measure_contributions(result.points, result.index[:, 0], lag) for lag in (1, year)}
    leaves = [order.index(leaf) for leaf in tree.leaves]
    columns = {
        "index": index,
        "weight": result.weight,
        "imputed_weight": result.imputed,
        "change_period": percent_change(index, 1),
        "change_year": percent_change(index, year),
        "contribution_period": contributions[1],
        "contribution_year": contributions[year],
    }
    for lag in ("period", "year"):
        columns[f"contribution_{lag}"][~np.isfinite(columns[f"change_{lag}"][:, 0])] = np.nan
        _check_additive(columns[f"contribution_{lag}"][:, leaves], columns[f"change_{lag}"][:, 0])
    frame = pl.DataFrame(
        {
            "heading": np.repeat(order, len(periods)),
            "period": pl.concat([periods] * len(order)),
            **{name: values.T.ravel() for name, values in columns.items()},
        }
    ).with_columns(pl.col(pl.Float64).fill_nan(None))
    return frame.with_columns(
        pl.col("heading").replace_strict(tree.labels).alias("label"),
        pl.col("heading").replace_strict(tree.parents).alias("parent"),
    )


def _for_people(context: Context, frame: pl.DataFrame) -> pl.DataFrame:
    """The headings with period labels and rounded figures; decimals are rounded, exact halves up."""
    places = {"index": context.plan.release.rounding, "weight": 6, "imputed_weight": 6}
    places |= dict.fromkeys(("change_period", "change_year"), 2) | dict.fromkeys(
        ("contribution_period", "contribution_year"), 3
    )
    labels = {day: context.label(day) for day in frame["period"].unique()}
    return frame.sort("heading", "period").select(
        "heading",
        "label",
        "parent",
        pl.col("period").replace_strict(labels, return_dtype=pl.String),
        *(
            pl.col(name).cast(_DECIMAL).round(n, mode="half_away_from_zero").cast(pl.Decimal(38, n))
            for name, n in places.items()
        ),
    )


def _scale(plan: Plan, index: Array, periods: pl.Series) -> Array:
    """(H,) factors that make each heading 100 in the reference period, or on average over the reference year."""
    rows = _reference_rows(plan, periods.to_list())
    scale: Array = 100.0 / index[rows].mean(axis=0)
    return scale


def _reference_rows(plan: Plan, days: list[date]) -> list[int]:
    reference, kind = plan.plan.reference, plan.plan.period
    if not re.fullmatch(r"\d{4}", reference):
        wanted = parse_period(reference, kind) if reference else days[0]
        rows = [n for n, day in enumerate(days) if day == wanted]
    else:
        rows = [n for n, day in enumerate(days) if year_and_month(day, kind)[0] == int(reference)]
        if len(rows) != len(periods_of_year(int(reference), kind)):
            rows = []
    if not rows:
        span = f"{label_period(days[0], kind)} to {label_period(days[-1], kind)}"
        raise CallError(
            f"plan.reference is '{reference}', which the periods compiled ({span}) do not hold whole, so no "
            "level can be 100 on its average for good. Compile further, or give a period as the reference until the "
            "year is over."
        )
    return rows


def _check_additive(parts: Array, change: Array) -> None:
    """Contributions of the leaves must add up to the change of all items, as both are written."""
    gap = np.abs(np.nan_to_num(parts).sum(axis=1) - change)[np.isfinite(change)]
    if gap.size and gap.max() > _ADDITIVE_TO:
        raise BrokenInvariant("contributions add up", f"they miss the change of all items by {gap.max():.2e} points")
