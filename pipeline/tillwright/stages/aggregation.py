"""Stage 6: from elementary aggregates to every heading above them."""

from __future__ import annotations

import re
from dataclasses import dataclass
from datetime import date, timedelta

import numpy as np
import polars as pl
from numpy.typing import NDArray

from tillwright.errors import BrokenInvariant, PlanError, PlanProblem
from tillwright.kernels.chaining import Aggregate, WeightYear, aggregate, update_weights
from tillwright.kernels.contributions import measure_contributions, percent_change
from tillwright.panels import Array
from tillwright.periods import parse_period, periods_a_year
from tillwright.plan import Plan
from tillwright.stages.context import Context
from tillwright.store.references import Tree
from tillwright.store.workspace import write_frame

# Contributions are sums of some hundred terms of order 1; rounding stays far below this.
_ADDITIVE_TO = 1e-9
_DECIMAL = pl.Decimal(38, 10)


@dataclass(frozen=True, slots=True)
class Components:
    """What is aggregated: (T, L) levels, and per component its leaf of the tree and its stratum."""

    levels: Array
    leaves: tuple[str, ...]
    strata: tuple[str, ...]


def aggregate_headings(context: Context) -> int:
    """Write `headings`; the number of headings that have an index.

    Raises
    ------
    PlanError : no weights for a year, or a reference outside the periods compiled.
    BrokenInvariant : contributions do not add up to the change of all items.
    """
    periods = context.periods()["period"]
    tree = context.references.tree
    components = _components(context, periods)
    order = sorted(tree.parents, key=lambda heading: (bool(tree.parents[heading]), heading))
    paths = _paths(components.leaves, tree, order)
    years = _weight_years(context, components, periods)
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


def _weight_years(context: Context, components: Components, periods: pl.Series) -> list[WeightYear]:
    """The stretches of periods that are weighted alike, each with its weights at link prices."""
    plan = context.plan
    months = [_year_month(day, plan) for day in periods]
    link_month = plan.weights.link_month
    belongs = [year if link_month == 12 or month > link_month else year - 1 for year, month in months]
    turnover = _turnover(context)
    years = []
    for year in sorted(set(belongs)):
        rows = [position for position, owner in enumerate(belongs) if owner == year]
        link = max(rows[0] - 1, 0)
        base = np.array([n for n, (calendar, _) in enumerate(months) if calendar == year - 1], dtype=np.intp)
        weights = _weights(context, components, year, turnover)
        update = plan.weights.formula == "lowe" and plan.weights.price_update and rows[0] > 0 and base.size > 0
        if update:
            weights = update_weights(weights, components.levels, link, base)
        years.append(WeightYear(link, rows[0], rows[-1], weights))
    return years


def _year_month(day: date, plan: Plan) -> tuple[int, int]:
    """Calendar year and month that a period ends in; a week belongs where its Thursday lies."""
    if plan.plan.period == "week":
        thursday = day + timedelta(days=3)
        return thursday.year, thursday.month
    return day.year, day.month + (2 if plan.plan.period == "quarter" else 0)


def _turnover(context: Context) -> pl.DataFrame:
    """Accepted turnover by calendar year, elementary aggregate and stratum."""
    year = pl.col("period").dt.iso_year() if context.plan.plan.period == "week" else pl.col("period").dt.year()
    panel = context.workspace.read("panel")
    return panel.group_by(year.cast(pl.Int64).alias("year"), "ea", "stratum").agg(
        pl.col("turnover").sum().cast(pl.Float64)
    )


def _weights(context: Context, components: Components, year: int, turnover: pl.DataFrame) -> Array:
    """(L,) weights of a year: of the leaf, divided among its strata by turnover of the year before."""
    known = sorted(set(turnover["year"]))
    source = year - 1 if year - 1 in known else min(known, key=lambda candidate: abs(candidate - year))
    rows = turnover.filter(pl.col("year") == source)
    sold = {(ea, stratum): value for ea, stratum, value in rows.select("ea", "stratum", "turnover").iter_rows()}
    own = np.array([sold.get(key, 0.0) for key in zip(components.leaves, components.strata, strict=True)])
    if context.plan.weights.source == "turnover":
        return own
    listed = context.references.weights.filter(pl.col("year") == year)
    if listed.height == 0:
        problem = PlanProblem("weights.file", f"no weights for {year}", "weights for every year compiled")
        raise PlanError(str(context.plan.source), [problem])
    given = dict(listed.select("heading", "weight").iter_rows())
    leaves = np.array(components.leaves)
    total = np.array([own[leaves == leaf].sum() for leaf in components.leaves])
    count = np.array([(leaves == leaf).sum() for leaf in components.leaves])
    part = np.divide(own, total, out=1.0 / count, where=total > 0)
    weights: Array = np.array([given[leaf] for leaf in components.leaves]) * part
    return weights


def _frame(context: Context, result: Aggregate, order: list[str], periods: pl.Series) -> pl.DataFrame:
    tree, year = context.references.tree, periods_a_year(context.plan.plan.period)
    index = result.index * _scale(context.plan, result.index, periods)
    contributions = {lag: measure_contributions(result.points, result.index[:, 0], lag) for lag in (1, year)}
    for lag, parts in contributions.items():
        _check_additive(parts, percent_change(result.index[:, 0], lag), [order.index(leaf) for leaf in tree.leaves])
    missing = ~np.isfinite(index)
    columns = {
        "index": index,
        "weight": result.weight,
        "imputed_weight": result.imputed,
        "change_period": percent_change(index, 1),
        "change_year": percent_change(index, year),
        "contribution_period": np.where(missing, np.nan, contributions[1]),
        "contribution_year": np.where(missing, np.nan, contributions[year]),
    }
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
    """(H,) factors that make each heading 100 in the reference, or in its first period without one."""
    reference, days = plan.plan.reference, periods.to_list()
    if re.fullmatch(r"\d{4}", reference):
        rows = [n for n, day in enumerate(days) if _year_month(day, plan)[0] == int(reference)]
    else:
        wanted = parse_period(reference, plan.plan.period) if reference else days[0]
        rows = [n for n, day in enumerate(days) if day == wanted]
    if not rows:
        problem = PlanProblem("plan.reference", repr(reference), "a year or period among those compiled")
        raise PlanError(str(plan.source), [problem])
    level = index[rows].mean(axis=0)
    known = np.isfinite(index)
    first = index[known.argmax(axis=0), np.arange(index.shape[1])]
    scale: Array = 100.0 / np.where(np.isfinite(level), level, first)
    return scale


def _check_additive(parts: Array, change: Array, leaves: list[int]) -> None:
    known = np.isfinite(change)
    gap = np.abs(np.nan_to_num(parts[:, leaves]).sum(axis=1) - change)[known]
    if gap.size and gap.max() > _ADDITIVE_TO:
        raise BrokenInvariant("contributions add up", f"they miss the change of all items by {gap.max():.2e} points")
