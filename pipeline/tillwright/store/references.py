"""The small files a plan names: headings, assignment, weights, outside series, item masters.

They are read and checked with the plan, before any delivery is opened.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from datetime import date
from pathlib import Path

import polars as pl

from tillwright.errors import PlanError, PlanProblem
from tillwright.periods import parse_period
from tillwright.plan import ItemMaster, Plan


@dataclass(frozen=True, slots=True)
class Tree:
    """The headings: `parent` is empty for the root; `leaves` are elementary aggregates and outside series."""

    labels: dict[str, str]
    parents: dict[str, str]
    leaves: tuple[str, ...]

    def ancestry(self, heading: str) -> list[str]:
        """The heading itself, its parent, and so on up to the root."""
        line = [heading]
        while parent := self.parents[line[-1]]:
            line.append(parent)
        return line


@dataclass(frozen=True, slots=True)
class References:
    """All small files of a plan.

    assignment: feed (null = any), category, item, ea. weights: year, heading, weight; empty where weights
    come from turnover. outside: heading, period (first day), index.
    """

    tree: Tree
    assignment: pl.DataFrame
    weights: pl.DataFrame
    outside: pl.DataFrame


def read_references(plan: Plan) -> References:
    """The plan's small files.

    Raises
    ------
    PlanError : with every problem found in any of them.
    """
    problems: list[PlanProblem] = []
    headings = _read_csv(
        plan, "classification.headings", plan.classification.headings, "heading,parent,label", problems
    )
    assignment = _read_csv(plan, "classification.assignment", plan.classification.assignment, "ea", problems)
    weights = pl.DataFrame(schema={"year": pl.Int64, "heading": pl.String, "weight": pl.Float64})
    if plan.weights.source == "file" and plan.weights.file is not None:
        weights = _numbers(
            _read_csv(plan, "weights.file", plan.weights.file, "year,heading,weight", problems),
            {"year": pl.Int64, "weight": pl.Float64},
            "weights.file",
            problems,
        )
    outside = _read_outside(plan, problems)
    if problems:
        raise PlanError(str(plan.folder), problems)
    tree = _make_tree(headings)
    problems += [*_tree_problems(headings, tree, plan), *_assignment_problems(assignment, tree, plan)]
    problems += [*_weight_problems(weights, tree, plan), *_outside_problems(outside, tree)]
    if problems:
        raise PlanError(str(plan.folder), problems)
    for optional in ("feed", "category", "item"):
        if optional not in assignment.columns:
            assignment = assignment.with_columns(pl.lit(None, pl.String).alias(optional))
    return References(tree, assignment.select("feed", "category", "item", "ea"), weights, outside)


def read_master(plan: Plan, master: ItemMaster) -> pl.DataFrame:
    """An item master: feed, item, description, brand, size, category, attributes (a JSON text).

    Raises
    ------
    PlanError : the file cannot be read, lacks a mapped column, or names an item twice.
    """
    path = plan.resolve(master.file)
    try:
        raw = pl.read_parquet(path) if path.suffix == ".parquet" else pl.read_csv(path, infer_schema=False)
    except (OSError, pl.exceptions.PolarsError) as error:
        raise _master_error(plan, master, str(error).splitlines()[0], "a readable Parquet or CSV file") from None
    mapped = {role: name for role, name in master.columns.model_dump().items() if name is not None}
    missing = [name for name in [*mapped.values(), *master.attributes] if name not in raw.columns]
    if missing:
        raise _master_error(plan, master, f"no column {', '.join(missing)}", f"columns {', '.join(raw.columns)}")
    roles = ("item", "description", "brand", "size", "category")
    text = [
        pl.col(mapped[role]).cast(pl.String).alias(role) if role in mapped else pl.lit(None, pl.String).alias(role)
        for role in roles
    ]
    attributes = pl.struct(master.attributes).struct.json_encode() if master.attributes else pl.lit(None, pl.String)
    frame = raw.select(pl.lit(master.feed).alias("feed"), *text, attributes.alias("attributes")).filter(
        pl.col("item").is_not_null()
    )
    repeated = frame.height - frame["item"].n_unique()
    if repeated:
        raise _master_error(plan, master, f"{repeated} rows that repeat an item", "one row per item")
    return frame


def _master_error(plan: Plan, master: ItemMaster, found: str, allowed: str) -> PlanError:
    return PlanError(str(plan.folder), [PlanProblem(f"item_master.file {master.file}", found, allowed)])


def _read_csv(plan: Plan, key: str, name: str, needed: str, problems: list[PlanProblem]) -> pl.DataFrame:
    columns = needed.split(",")
    path: Path = plan.resolve(name)
    try:
        frame = pl.read_csv(path, infer_schema=False)
    except (OSError, pl.exceptions.PolarsError) as error:
        problems.append(PlanProblem(key, f"{name}: {str(error).splitlines()[0]}", "a CSV file in UTF-8"))
        return pl.DataFrame(schema=dict.fromkeys(columns, pl.String))
    missing = [column for column in columns if column not in frame.columns]
    if missing:
        problems.append(PlanProblem(key, f"columns {', '.join(frame.columns)} in {name}", f"columns {needed}"))
        return pl.DataFrame(schema=dict.fromkeys(columns, pl.String))
    return frame.select(pl.col(pl.String).str.strip_chars().replace("", None))


def _numbers(
    frame: pl.DataFrame, types: dict[str, type[pl.DataType]], key: str, problems: list[PlanProblem]
) -> pl.DataFrame:
    typed = frame.with_columns(pl.col(name).cast(kind, strict=False) for name, kind in types.items())
    for name in types:
        bad = frame.filter(typed[name].is_null())[name]
        if len(bad):
            problems.append(PlanProblem(key, f"{name} {bad[0]!r} and {len(bad) - 1} more like it", "numbers"))
    return typed


def _read_outside(plan: Plan, problems: list[PlanProblem]) -> pl.DataFrame:
    parts = [pl.DataFrame(schema={"heading": pl.String, "period": pl.Date, "index": pl.Float64})]
    for number, series in enumerate(plan.outside_series):
        key = f"outside_series.{number}.file"
        raw = _read_csv(plan, key, series.file, "heading,period,index", problems)
        typed = _numbers(raw, {"index": pl.Float64}, key, problems)
        days: list[date | None] = []
        for label in raw["period"]:
            try:
                days.append(parse_period(label or "", plan.plan.period))
            except ValueError as error:
                problems.append(PlanProblem(key, f"period {label!r}", str(error)))
                days.append(None)
        parts.append(typed.with_columns(pl.Series("period", days, pl.Date)).select("heading", "period", "index"))
    return pl.concat(parts)


def _make_tree(headings: pl.DataFrame) -> Tree:
    parents = dict(zip(headings["heading"], headings["parent"].fill_null(""), strict=True))
    labels = dict(zip(headings["heading"], headings["label"].fill_null(""), strict=True))
    inner = set(parents.values())
    return Tree(labels, parents, tuple(sorted(heading for heading in parents if heading not in inner)))


def _tree_problems(headings: pl.DataFrame, tree: Tree, plan: Plan) -> Iterator[PlanProblem]:
    key = "classification.headings"
    roots = [heading for heading, parent in tree.parents.items() if not parent]
    if len(roots) != 1:
        yield PlanProblem(key, f"{len(roots)} headings without a parent", "exactly one, the root")
    if headings.height != headings["heading"].n_unique():
        yield PlanProblem(key, "a heading that is listed twice", "each heading once")
    unknown = sorted(set(tree.parents.values()) - set(tree.parents) - {""})
    if unknown:
        yield PlanProblem(key, f"parents that are no headings: {', '.join(unknown[:5])}", "headings of the same file")
    elif any(_is_circular(tree.parents, heading) for heading in tree.parents):
        yield PlanProblem(key, "headings that are their own ancestors", "a tree")
    for number, override in enumerate(plan.index.override):
        if override.heading not in tree.parents:
            yield PlanProblem(
                f"index.override.{number}.heading",
                repr(override.heading),
                f"a heading of {plan.classification.headings}",
            )


def _is_circular(parents: dict[str, str], heading: str) -> bool:
    seen = set()
    while heading:
        if heading in seen:
            return True
        seen.add(heading)
        heading = parents[heading]
    return False


def _assignment_problems(assignment: pl.DataFrame, tree: Tree, plan: Plan) -> Iterator[PlanProblem]:
    key = "classification.assignment"
    if not {"category", "item"} & set(assignment.columns):
        yield PlanProblem(key, f"columns {', '.join(assignment.columns)}", "a column category or item, and ea")
    unknown = sorted(set(assignment["ea"].drop_nulls()) - set(tree.leaves))
    if unknown:
        yield PlanProblem(key, f"ea {', '.join(unknown[:5])}", "headings without headings below them")
    if assignment["ea"].null_count():
        yield PlanProblem(key, f"{assignment['ea'].null_count()} rows without ea", "an ea on every row")
    if "feed" in assignment.columns:
        odd = sorted(set(assignment["feed"].drop_nulls()) - {feed.name for feed in plan.feed})
        if odd:
            yield PlanProblem(key, f"feed {', '.join(odd[:5])}", "feeds of the plan, or nothing")
    same = [name for name in ("feed", "category", "item") if name in assignment.columns]
    repeated = assignment.height - assignment.select(same).n_unique()
    if repeated:
        yield PlanProblem(key, f"{repeated} rows that repeat a {'/'.join(same)}", "each assigned once")


def _weight_problems(weights: pl.DataFrame, tree: Tree, plan: Plan) -> Iterator[PlanProblem]:
    if plan.weights.source != "file":
        return
    key = "weights.file"
    unknown = sorted(set(weights["heading"].drop_nulls()) - set(tree.leaves))
    if unknown:
        yield PlanProblem(key, f"heading {', '.join(unknown[:5])}", "headings without headings below them")
    if (weights["weight"] < 0).any() or not weights["weight"].is_finite().all():
        yield PlanProblem(key, "a weight that is negative or not finite", "weights of 0 or more")
    if weights.height != weights.select("year", "heading").n_unique():
        yield PlanProblem(key, "a heading with two weights in a year", "one weight per year and heading")
    for (year,), part in weights.group_by("year", maintain_order=True):
        missing = sorted(set(tree.leaves) - set(part["heading"]))
        if missing:
            yield PlanProblem(
                key, f"no weight in {year} for {', '.join(missing[:5])}", "a weight, or 0, for every leaf"
            )
        if not part["weight"].sum() > 0:
            yield PlanProblem(key, f"weights of {year} that sum to {part['weight'].sum()}", "a positive sum")


def _outside_problems(outside: pl.DataFrame, tree: Tree) -> Iterator[PlanProblem]:
    key = "outside_series.file"
    unknown = sorted(set(outside["heading"].drop_nulls()) - set(tree.leaves))
    if unknown:
        yield PlanProblem(key, f"heading {', '.join(unknown[:5])}", "headings without headings below them")
    if not outside["index"].is_finite().all() or (outside["index"] <= 0).any():
        yield PlanProblem(key, "an index that is not positive and finite", "positive numbers")
    if outside.height != outside.select("heading", "period").n_unique():
        yield PlanProblem(key, "a heading with two figures in a period", "one per heading and period")
