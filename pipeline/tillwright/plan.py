"""The plan: plan.toml read, validated whole, and turned into frozen objects.

Everything a compile depends on is here. Relative paths are relative to the plan's folder. Every
problem is reported at once, before any data are read.
"""

from __future__ import annotations

import glob
import re
import tomllib
from collections.abc import Iterator
from datetime import date
from pathlib import Path
from typing import Annotated, Any, Literal
from zoneinfo import ZoneInfo

from pydantic import BaseModel, ConfigDict, Field, ValidationError

from tillwright.choices import (
    BILATERAL_FORMULAS,
    Form,
    Gate,
    ItemCode,
    Method,
    MonthRule,
    Onto,
    PeriodKind,
    Returns,
    Splice,
    StratumRole,
    WeightFormula,
    WeightSource,
)
from tillwright.errors import PlanError, PlanProblem
from tillwright.kernels.methods import Recipe
from tillwright.periods import parse_period, year_of

DATE_ROLES = ("sold_at", "week", "month")
Share = Annotated[float, Field(ge=0)]
Bounds = Annotated[tuple[Annotated[float, Field(gt=0)], Annotated[float, Field(gt=0)]], Field()]


class _Section(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid", strict=False)


class Scope(_Section):
    """[plan]: what is compiled, and in which periods."""

    title: str
    currency: str
    start: str
    period: PeriodKind = "month"
    reference: str = ""
    month_rule: MonthRule = "calendar"
    weeks: Annotated[int, Field(ge=1, le=4)] = 3

    @property
    def first_day(self) -> date:
        """First day of the first period."""
        return parse_period(self.start, self.period)


class Columns(_Section):
    """[feed.columns]: the source column that plays each role."""

    item: str
    quantity: str
    turnover: str
    sold_at: str | None = None
    week: str | None = None
    month: str | None = None
    outlet: str | None = None
    line_id: str | None = None
    region: str | None = None
    household_group: str | None = None
    description: str | None = None
    brand: str | None = None
    size: str | None = None
    category: str | None = None

    @property
    def date_role(self) -> str:
        """The one role of `DATE_ROLES` that is mapped."""
        return next(role for role in DATE_ROLES if getattr(self, role) is not None)


class RuleLimits(_Section):
    """feed.limits: bounds of the rules that have any."""

    unit_price: Bounds | None = None


class GateLimits(_Section):
    """feed.gates: the largest value that does not hold the release."""

    refused_share: Share = 0.02
    turnover_swing: Share = 0.5
    missing_outlets: Annotated[int, Field(ge=0)] = 0


class Feed(_Section):
    """[[feed]]: one retailer's stream of files, and how to read it."""

    name: Annotated[str, Field(pattern=r"^[a-z0-9][a-z0-9_-]*$")]
    files: str
    columns: Columns
    timezone: str = "UTC"
    stamped_in: str | None = None
    replaces: str = "same-name"
    announced: str | None = None
    returns: Returns = "net"
    item_code: ItemCode = "any"
    turnover_less: tuple[str, ...] = ()
    encoding: Literal["utf-8", "utf-16", "latin-1"] = "utf-8"
    delimiter: Annotated[str, Field(min_length=1, max_length=1)] = ","
    decimal: Literal[".", ","] = "."
    limits: RuleLimits = RuleLimits()
    gates: GateLimits = GateLimits()


class MasterColumns(_Section):
    """[item_master.columns]."""

    item: str
    description: str | None = None
    brand: str | None = None
    size: str | None = None
    category: str | None = None


class ItemMaster(_Section):
    """[[item_master]]: what is known of a feed's items."""

    feed: str
    file: str
    columns: MasterColumns
    attributes: tuple[str, ...] = ()


class Classification(_Section):
    """[classification]: the tree of headings and where items belong in it."""

    headings: str
    assignment: str
    stratum: tuple[StratumRole, ...] = ()


class Weights(_Section):
    """[weights]: what headings weigh, year by year."""

    source: WeightSource = "file"
    file: str | None = None
    formula: WeightFormula = "lowe"
    price_update: bool = True
    link_month: Annotated[int, Field(ge=1, le=12)] = 12


class Products(_Section):
    """[products]: which items are one product."""

    by: tuple[Literal["item"]] = ("item",)


class Screening(_Section):
    """[screening]: bounds outside which a price relative is set aside."""

    extreme: Bounds | Literal["off"] = (0.25, 4.0)


class IndexOverride(_Section):
    """[[index.override]]: other choices for a heading and everything below it."""

    heading: str
    method: Method | None = None
    form: Form | None = None
    window: Annotated[int, Field(ge=2)] | None = None
    splice: Splice | None = None
    onto: Onto | None = None


class IndexChoice(_Section):
    """[index]: how elementary aggregates are compiled."""

    method: Method = "geks-tornqvist"
    form: Form = "chained"
    window: Annotated[int, Field(ge=2)] = 25
    splice: Splice = "mean"
    onto: Onto = "published"
    override: tuple[IndexOverride, ...] = ()

    def recipe(self, ancestry: list[str]) -> Recipe:
        """The recipe for an elementary aggregate; the nearest override on its way up wins.

        `ancestry` lists the aggregate itself first, then its parents up to the root.
        """
        choice: dict[str, Any] = {name: getattr(self, name) for name in ("method", "form", "window", "splice", "onto")}
        for heading in reversed(ancestry):
            for override in self.override:
                if override.heading == heading:
                    choice |= override.model_dump(exclude={"heading"}, exclude_none=True)
        if choice["method"] in BILATERAL_FORMULAS:
            return Recipe(choice["method"], form=choice["form"])
        return Recipe(**choice)


class OutsideSeries(_Section):
    """[[outside_series]]: indexes collected elsewhere, aggregated alongside."""

    file: str


class Release(_Section):
    """[release]: how figures are shown."""

    rounding: Annotated[int, Field(ge=0, le=6)] = 1


class Answer(_Section):
    """[[answer]]: a person's answer to a breached gate."""

    gate: Gate
    on: str
    by: Annotated[str, Field(min_length=1)]
    why: Annotated[str, Field(min_length=1)]
    feed: str | None = None


class Plan(_Section):
    """A whole plan; `folder` is what its relative paths are relative to."""

    plan: Scope
    feed: Annotated[tuple[Feed, ...], Field(min_length=1)]
    classification: Classification
    weights: Weights = Weights()
    products: Products = Products()
    screening: Screening = Screening()
    index: IndexChoice = IndexChoice()
    release: Release = Release()
    item_master: tuple[ItemMaster, ...] = ()
    outside_series: tuple[OutsideSeries, ...] = ()
    answer: tuple[Answer, ...] = ()
    folder: Path

    def resolve(self, relative: str) -> Path:
        """A path of the plan as a path of the file system."""
        return self.folder / relative

    def delivery_files(self, feed: Feed) -> list[Path]:
        """Files of a feed that exist now, sorted by path."""
        return sorted(Path(found) for found in glob.glob(str(self.resolve(feed.files)), recursive=True))  # noqa: PTH207 - may be absolute


def read_plan(path: Path) -> Plan:
    """The plan in a TOML file.

    Raises
    ------
    PlanError : with every problem found; no data have been read.
    """
    try:
        raw = tomllib.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        problem = PlanProblem("PLAN", f"{path} ({error.strerror})", "a readable plan.toml")
        raise PlanError(str(path), [problem]) from None
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise PlanError(str(path), [PlanProblem("PLAN", str(error), "a TOML document in UTF-8")]) from None
    raw.pop("folder", None)
    try:
        plan = Plan.model_validate({**raw, "folder": path.resolve().parent})
    except ValidationError as error:
        raise PlanError(str(path), [_problem(detail) for detail in error.errors()]) from None
    problems = [*_scope_problems(plan), *_feed_problems(plan), *_reference_problems(plan)]
    if problems:
        raise PlanError(str(path), problems)
    return plan


def _problem(detail: Any) -> PlanProblem:
    key = ".".join(str(part) for part in detail["loc"])
    if detail["type"] == "missing":
        return PlanProblem(key, "nothing", "a value; this key is required")
    if detail["type"] == "extra_forbidden":
        return PlanProblem(key, f"{detail['input']!r}", "no such key; see the sections of a plan in DEVELOPERS.md")
    message = re.sub(r"^Input should be ", "", detail["msg"])
    return PlanProblem(key, f"{detail['input']!r}", message)


def _scope_problems(plan: Plan) -> Iterator[PlanProblem]:
    scope = plan.plan
    try:
        first = scope.first_day
    except ValueError as error:
        yield PlanProblem("plan.start", repr(scope.start), str(error))
        return
    if scope.reference and not re.fullmatch(r"\d{4}", scope.reference):
        try:
            if parse_period(scope.reference, scope.period) < first:
                yield PlanProblem("plan.reference", repr(scope.reference), f"a year or period from {scope.start} on")
        except ValueError:
            yield PlanProblem("plan.reference", repr(scope.reference), f"a year, or a {scope.period}")
    elif scope.reference and int(scope.reference) < year_of(first, scope.period):
        yield PlanProblem("plan.reference", repr(scope.reference), f"a year or period from {scope.start} on")
    if scope.month_rule != "calendar" and scope.period != "month":
        yield PlanProblem("plan.month_rule", repr(scope.month_rule), "'calendar' unless plan.period is 'month'")


def _feed_problems(plan: Plan) -> Iterator[PlanProblem]:
    names = [feed.name for feed in plan.feed]
    for position, feed in enumerate(plan.feed):
        key = f"feed.{position}"
        if names.count(feed.name) > 1:
            yield PlanProblem(f"{key}.name", repr(feed.name), "a name that no other feed has")
        mapped = [role for role in DATE_ROLES if getattr(feed.columns, role)]
        if len(mapped) != 1:
            found = " and ".join(mapped) or "none of them"
            yield PlanProblem(f"{key}.columns", found, f"exactly one of {', '.join(DATE_ROLES)}")
        for name in ("timezone", "stamped_in"):
            yield from _zone_problems(f"{key}.{name}", getattr(feed, name))
        yield from _pattern_problems(f"{key}.announced", feed.announced, "period")
        if feed.replaces != "same-name":
            yield from _pattern_problems(f"{key}.replaces", feed.replaces, "what")
        if feed.limits.unit_price and feed.limits.unit_price[0] > feed.limits.unit_price[1]:
            yield PlanProblem(f"{key}.limits.unit_price", str(list(feed.limits.unit_price)), "lower bound first")
        for role in plan.classification.stratum:
            if role != "feed" and getattr(feed.columns, role) is None:
                yield PlanProblem(f"{key}.columns.{role}", "nothing", "a column, since classification.stratum uses it")
        if not plan.delivery_files(feed):
            yield PlanProblem(f"{key}.files", repr(feed.files), f"a pattern that matches a file below {plan.folder}")


def _zone_problems(key: str, zone: str | None) -> Iterator[PlanProblem]:
    try:
        ZoneInfo(zone or "UTC")
    except (KeyError, ValueError, OSError):
        yield PlanProblem(key, repr(zone), "a time zone of the IANA database, such as 'Europe/Lisbon'")


def _pattern_problems(key: str, pattern: str | None, group: str) -> Iterator[PlanProblem]:
    if pattern is None:
        return
    try:
        groups = re.compile(pattern).groupindex
    except re.error as error:
        yield PlanProblem(key, repr(pattern), f"a regular expression ({error})")
        return
    if group not in groups:
        yield PlanProblem(key, repr(pattern), f"a regular expression with a named group (?P<{group}>…)")


def _reference_problems(plan: Plan) -> Iterator[PlanProblem]:
    feeds = {feed.name for feed in plan.feed}
    allowed = "one of the feeds " + ", ".join(sorted(feeds))
    files = [("classification.headings", plan.classification.headings)]
    files.append(("classification.assignment", plan.classification.assignment))
    files += [(f"item_master.{n}.file", master.file) for n, master in enumerate(plan.item_master)]
    files += [(f"outside_series.{n}.file", series.file) for n, series in enumerate(plan.outside_series)]
    if plan.weights.source == "file":
        if plan.weights.file is None:
            yield PlanProblem("weights.file", "nothing", "a CSV file, since weights.source is 'file'")
        else:
            files.append(("weights.file", plan.weights.file))
    for key, name in files:
        if not plan.resolve(name).is_file():
            yield PlanProblem(key, repr(name), f"a file below {plan.folder}")
    for number, master in enumerate(plan.item_master):
        if master.feed not in feeds:
            yield PlanProblem(f"item_master.{number}.feed", repr(master.feed), allowed)
    for number, answer in enumerate(plan.answer):
        if answer.feed is not None and answer.feed not in feeds:
            yield PlanProblem(f"answer.{number}.feed", repr(answer.feed), allowed)
    if plan.screening.extreme != "off" and plan.screening.extreme[0] >= 1 <= plan.screening.extreme[1]:
        yield PlanProblem("screening.extreme", str(list(plan.screening.extreme)), "a bound below 1, then one above 1")
