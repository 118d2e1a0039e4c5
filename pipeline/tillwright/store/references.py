"""The small files a plan names: headings, assignment, weights, outside series, item masters.

They are read and checked with the plan, before any delivery is opened.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from datetime import date
from pathlib import Path

import polars as pl

from tillwright.choices import IMPUTED_METHODS
from tillwright.errors import PlanError, PlanProblem
from tillwright.periods import parse_period
from tillwright.plan import Plan
from tillwright.plan_file import examine_plan

_NO_TEXT = pl.lit(None, pl.String)
_EMPTY_WEIGHTS = pl.DataFrame(schema={"year": pl.Int64, "heading": pl.String, "weight": pl.Float64})
_EMPTY_OUTSIDE = pl.DataFrame(schema={"heading": pl.String, "period": pl.Date, "index": pl.Float64})
_EMPTY_MASTERS = pl.DataFrame(
    schema=dict.fromkeys(("feed", "item", "description", "brand", "size", "category", "attributes"), pl.String)
)


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
    come from turnover. outside: heading, period (first day), index. masters: feed, item, description,
    brand, size, category, attributes (a JSON text).
    """

    tree: Tree
    assignment: pl.DataFrame
    weights: pl.DataFrame
    outside: pl.DataFrame
    masters: pl.DataFrame


def open_plan(path: Path) -> tuple[Plan, References]:
    """A plan and the small files it names.

    Raises
    ------
    PlanError : with every problem found in any of them; no delivery has been opened.
    """
    plan, problems = examine_plan(path)
    told = {problem.key for problem in problems}
    references = _read_references(plan, problems, told)
    if problems or references is None:
        raise PlanError(str(path), problems)
    return plan, references


def _read_references(plan: Plan, problems: list[PlanProblem], told: set[str]) -> References | None:
    """The small files; what is wrong with them is added to the problems. None without a tree."""
    weights, outside, masters = _EMPTY_WEIGHTS, _EMPTY_OUTSIDE, _EMPTY_MASTERS
    if plan.has("weights") and plan.weights.source == "file" and "weights.file" not in told:
        weights = _read_weights(plan, problems)
    if plan.has("outside_series", "plan"):
        parts = [_read_outside(plan, number, problems, told) for number in range(len(plan.outside_series))]
        outside = pl.concat([outside, *parts])
    if plan.has("item_master"):
        parts = [_read_master(plan, number, problems, told) for number in range(len(plan.item_master))]
        masters = pl.concat([masters, *parts]).unique(["feed", "item"], keep="last", maintain_order=True)
    tree, assignment = _read_classification(plan, problems, told)
    leaves = None if tree is None else set(tree.leaves)
    problems += [*_weight_problems(weights, leaves), *_outside_problems(outside, leaves)]
    if assignment is not None:
        problems += _assignment_problems(assignment, leaves, plan)
    if tree is None or assignment is None:
        return None
    problems += _override_problems(tree, plan)
    problems += _mixed_problems(assignment, outside, plan)
    problems += _imputation_problems(tree, outside, plan)
    for optional in ("feed", "category", "item"):
        if optional not in assignment.columns:
            assignment = assignment.with_columns(_NO_TEXT.alias(optional))
    return References(tree, assignment.select("feed", "category", "item", "ea"), weights, outside, masters)


def _read_classification(
    plan: Plan, problems: list[PlanProblem], told: set[str]
) -> tuple[Tree | None, pl.DataFrame | None]:
    """The tree and the assignment, None for one that cannot be used."""
    if not plan.has("classification"):
        return None, None
    tree, assignment, names = None, None, plan.classification
    if "classification.headings" not in told:
        headings = _read_csv(plan, "classification.headings", names.headings, "heading,parent,label", problems)
        if headings is not None:
            wrong = list(_heading_problems(headings))
            problems += wrong
            tree = None if wrong else _make_tree(headings)
    if "classification.assignment" not in told:
        assignment = _read_csv(plan, "classification.assignment", names.assignment, "ea", problems)
    return tree, assignment


def _read_master(plan: Plan, number: int, problems: list[PlanProblem], told: set[str]) -> pl.DataFrame:
    """One item master, empty where it cannot be used."""
    master, key = plan.item_master[number], f"item_master.{number}.file"
    if key in told:
        return _EMPTY_MASTERS
    path = plan.resolve(master.file)
    try:
        raw = pl.read_parquet(path, glob=False) if path.suffix == ".parquet" else pl.read_csv(path, infer_schema=False)
    except (OSError, pl.exceptions.PolarsError) as error:
        problems.append(PlanProblem(key, f"{master.file}: {str(error).splitlines()[0]}", "a Parquet or CSV file"))
        return _EMPTY_MASTERS
    mapped = {role: name for role, name in master.columns.model_dump().items() if name is not None}
    missing = [name for name in [*mapped.values(), *master.attributes] if name not in raw.columns]
    if missing:
        problems.append(PlanProblem(key, f"no column {', '.join(missing)}", f"columns {', '.join(raw.columns)}"))
        return _EMPTY_MASTERS
    roles = ("item", "description", "brand", "size", "category")
    text = [(pl.col(mapped[role]).cast(pl.String) if role in mapped else _NO_TEXT).alias(role) for role in roles]
    attributes = pl.struct(master.attributes).struct.json_encode() if master.attributes else _NO_TEXT
    frame = raw.select(pl.lit(master.feed).alias("feed"), *text, attributes.alias("attributes"))
    frame = frame.select(pl.col(pl.String).str.strip_chars().replace("", None)).filter(pl.col("item").is_not_null())
    repeated = frame.height - frame["item"].n_unique()
    if repeated:
        problems.append(PlanProblem(key, f"{repeated} rows that repeat an item", "one row per item"))
    return frame


def _read_csv(plan: Plan, key: str, name: str, needed: str, problems: list[PlanProblem]) -> pl.DataFrame | None:
    """A CSV file as text without blanks around it; None where it cannot be used."""
    try:
        frame = pl.read_csv(plan.resolve(name), infer_schema=False)
    except (OSError, pl.exceptions.PolarsError) as error:
        problems.append(PlanProblem(key, f"{name}: {str(error).splitlines()[0]}", "a CSV file in UTF-8"))
        return None
    missing = [column for column in needed.split(",") if column not in frame.columns]
    if missing:
        problems.append(PlanProblem(key, f"columns {', '.join(frame.columns)} in {name}", f"columns {needed}"))
        return None
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


def _read_weights(plan: Plan, problems: list[PlanProblem]) -> pl.DataFrame:
    raw = _read_csv(plan, "weights.file", plan.weights.file or "", "year,heading,weight", problems)
    if raw is None:
        return _EMPTY_WEIGHTS
    typed = _numbers(raw, {"year": pl.Int64, "weight": pl.Float64}, "weights.file", problems)
    return typed.select("year", "heading", "weight").drop_nulls()


def _read_outside(plan: Plan, number: int, problems: list[PlanProblem], told: set[str]) -> pl.DataFrame:
    key = f"outside_series.{number}.file"
    raw = None
    if key not in told:
        raw = _read_csv(plan, key, plan.outside_series[number].file, "heading,period,index", problems)
    if raw is None:
        return _EMPTY_OUTSIDE
    typed = _numbers(raw, {"index": pl.Float64}, key, problems)
    days: list[date | None] = []
    for label in raw["period"]:
        try:
            days.append(parse_period(label or "", plan.plan.period))
        except ValueError as error:
            problems.append(PlanProblem(key, f"period {label!r}", str(error)))
            days.append(None)
    dated = typed.with_columns(pl.Series("period", days, pl.Date))
    return dated.select("heading", "period", "index").drop_nulls()


def _make_tree(headings: pl.DataFrame) -> Tree:
    parents = dict(zip(headings["heading"], headings["parent"].fill_null(""), strict=True))
    labels = dict(zip(headings["heading"], headings["label"].fill_null(""), strict=True))
    inner = set(parents.values())
    return Tree(labels, parents, tuple(sorted(heading for heading in parents if heading not in inner)))


def _heading_problems(headings: pl.DataFrame) -> Iterator[PlanProblem]:
    key = "classification.headings"
    if headings["heading"].null_count():
        yield PlanProblem(key, f"{headings['heading'].null_count()} rows without a heading", "a code on every row")
    if headings["parent"].null_count() != 1:
        yield PlanProblem(key, f"{headings['parent'].null_count()} headings without a parent", "exactly one, the root")
    if headings.height != headings["heading"].n_unique():
        yield PlanProblem(key, "a heading that is listed twice", "each heading once")
    unknown = sorted(set(headings["parent"].drop_nulls()) - set(headings["heading"]))
    if unknown:
        yield PlanProblem(key, f"parents that are no headings: {', '.join(unknown[:5])}", "headings of the same file")
    parents = dict(headings.select("heading", pl.col("parent").fill_null("")).iter_rows())
    if not unknown and any(_is_circular(parents, heading) for heading in parents if heading):
        yield PlanProblem(key, "headings that are their own ancestors", "a tree")


def _override_problems(tree: Tree, plan: Plan) -> Iterator[PlanProblem]:
    overrides: list[tuple[str, str]] = []
    for section in ("index", "products"):
        if plan.has(section):
            named = enumerate(getattr(plan, section).override)
            overrides += [(f"{section}.override.{number}.heading", one.heading) for number, one in named]
    if plan.has("hedonic"):
        overrides += [(f"hedonic.{number}.heading", one.heading) for number, one in enumerate(plan.hedonic)]
    for key, heading in overrides:
        if heading not in tree.parents:
            yield PlanProblem(key, repr(heading), f"a heading of {plan.classification.headings}")


def _mixed_problems(assignment: pl.DataFrame, outside: pl.DataFrame, plan: Plan) -> Iterator[PlanProblem]:
    """A leaf is compiled from sales or collected elsewhere, and what is collected elsewhere has no turnover."""
    both = sorted(set(outside["heading"]) & set(assignment["ea"].drop_nulls()))
    if both:
        allowed = "headings that classification.assignment does not assign items to"
        yield PlanProblem("outside_series.file", f"heading {', '.join(both[:5])}", allowed)
    if outside.height and plan.has("weights") and plan.weights.source == "turnover":
        yield PlanProblem("weights.source", "'turnover'", "'file' beside outside series, which have no turnover")


def _imputation_problems(tree: Tree, outside: pl.DataFrame, plan: Plan) -> Iterator[PlanProblem]:
    """Imputation that nothing can use: what a plan asks for and does not get must not go unnoticed."""
    if not plan.has("screening", "index", "hedonic") or plan.screening.imputation == "off":
        return
    compiled = set(tree.leaves) - set(outside["heading"])
    if not any(plan.elementary_formula(tree.ancestry(leaf)) for leaf in compiled):
        allowed = f"'off' unless an elementary aggregate is compiled by {', '.join(IMPUTED_METHODS)}"
        yield PlanProblem("screening.imputation", "on, and no aggregate can use it", allowed)


def _is_circular(parents: dict[str, str], heading: str) -> bool:
    seen = set()
    while heading:
        if heading in seen:
            return True
        seen.add(heading)
        heading = parents[heading]
    return False


def _unknown(headings: pl.Series, leaves: set[str] | None) -> list[str]:
    """Headings that are no leaves, in order; none where the tree is not known."""
    return [] if leaves is None else sorted(set(headings) - leaves)


def _assignment_problems(assignment: pl.DataFrame, leaves: set[str] | None, plan: Plan) -> Iterator[PlanProblem]:
    key = "classification.assignment"
    told_by = [name for name in ("category", "item") if name in assignment.columns]
    if not told_by:
        yield PlanProblem(key, f"columns {', '.join(assignment.columns)}", "a column category or item, and ea")
        return
    idle = assignment.filter(pl.all_horizontal(pl.col(told_by).is_null())).height
    if idle:
        yield PlanProblem(key, f"{idle} rows without {' and '.join(told_by)}", "something to assign on every row")
    unknown = _unknown(assignment["ea"].drop_nulls(), leaves)
    if unknown:
        yield PlanProblem(key, f"ea {', '.join(unknown[:5])}", "headings without headings below them")
    if assignment["ea"].null_count():
        yield PlanProblem(key, f"{assignment['ea'].null_count()} rows without ea", "an ea on every row")
    if "feed" in assignment.columns and plan.has("feed"):
        odd = sorted(set(assignment["feed"].drop_nulls()) - {feed.name for feed in plan.feed})
        if odd:
            yield PlanProblem(key, f"feed {', '.join(odd[:5])}", "feeds of the plan, or nothing")
    same = [name for name in ("feed", "category", "item") if name in assignment.columns]
    repeated = assignment.height - assignment.select(same).n_unique()
    if repeated:
        yield PlanProblem(key, f"{repeated} rows that repeat a {'/'.join(same)}", "each assigned once")


def _weight_problems(weights: pl.DataFrame, leaves: set[str] | None) -> Iterator[PlanProblem]:
    key = "weights.file"
    unknown = _unknown(weights["heading"], leaves)
    if unknown:
        yield PlanProblem(key, f"heading {', '.join(unknown[:5])}", "headings without headings below them")
    if (weights["weight"] < 0).any() or not weights["weight"].is_finite().all():
        yield PlanProblem(key, "a weight that is negative or not finite", "weights of 0 or more")
    if weights.height != weights.select("year", "heading").n_unique():
        yield PlanProblem(key, "a heading with two weights in a year", "one weight per year and heading")
    for (year,), part in weights.group_by("year", maintain_order=True):
        missing = sorted((leaves or set()) - set(part["heading"]))
        if missing:
            yield PlanProblem(
                key, f"no weight in {year} for {', '.join(missing[:5])}", "a weight, or 0, for every leaf"
            )
        if not part["weight"].sum() > 0:
            yield PlanProblem(key, f"weights of {year} that sum to {part['weight'].sum()}", "a positive sum")


def _outside_problems(outside: pl.DataFrame, leaves: set[str] | None) -> Iterator[PlanProblem]:
    key = "outside_series.file"
    unknown = _unknown(outside["heading"], leaves)
    if unknown:
        yield PlanProblem(key, f"heading {', '.join(unknown[:5])}", "headings without headings below them")
    if not outside["index"].is_finite().all() or (outside["index"] <= 0).any():
        yield PlanProblem(key, "an index that is not positive and finite", "positive numbers")
    if outside.height != outside.select("heading", "period").n_unique():
        yield PlanProblem(key, "a heading with two figures in a period", "one per heading and period")
