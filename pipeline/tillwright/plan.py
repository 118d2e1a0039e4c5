"""The plan: plan.toml read, validated whole, and turned into frozen objects.

Everything a compile depends on is here. Relative paths are relative to the plan's folder. Every
problem is reported at once, before any data are read.
"""

from __future__ import annotations

import glob
import re
import tomllib
from collections.abc import Callable, Iterator
from datetime import date
from pathlib import Path
from typing import Annotated, Any, Literal
from zoneinfo import ZoneInfo

from pydantic import BaseModel, ConfigDict, Field, TypeAdapter, ValidationError

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
    """A whole plan, read from the file `source`."""

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
    source: Annotated[Path, Field(exclude=True)] = Path("plan.toml")

    @property
    def folder(self) -> Path:
        """The folder that relative paths are relative to."""
        return self.source.parent

    def has(self, *sections: str) -> bool:
        """Whether these sections are usable; one that `examine_plan` found wrong is not."""
        return all(getattr(self, section) is not None for section in sections)

    def resolve(self, relative: str) -> Path:
        """A path of the plan as a path of the file system."""
        return self.folder / relative

    def delivery_files(self, feed: Feed) -> list[Path]:
        """Files of a feed that exist now, sorted by path."""
        found = glob.glob(str(self.resolve(feed.files)), recursive=True)  # noqa: PTH207 - may be absolute
        return sorted(path for path in map(Path, found) if path.is_file())


SECTIONS = tuple(name for name in Plan.model_fields if name != "source")


def read_plan(path: Path) -> Plan:
    """The plan in a TOML file.

    Raises
    ------
    PlanError : with every problem found; no data have been read.
    """
    plan, problems = examine_plan(path)
    if problems:
        raise PlanError(str(path), problems)
    return plan


def examine_plan(path: Path) -> tuple[Plan, list[PlanProblem]]:
    """What can be made of a plan, and everything wrong with it; a section that is wrong is None.

    Raises
    ------
    PlanError : the file cannot be read as TOML.
    """
    try:
        raw = tomllib.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        problem = PlanProblem("PLAN", f"{path} ({error.strerror})", "a readable plan.toml")
        raise PlanError(str(path), [problem]) from None
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise PlanError(str(path), [PlanProblem("PLAN", str(error), "a TOML document in UTF-8")]) from None
    problems = [_unknown("source", raw.pop("source"))] if "source" in raw else []
    try:
        plan = Plan.model_validate({**raw, "source": path.resolve()})
    except ValidationError as error:
        problems += map(_problem, error.errors())
        wrong = {str(detail["loc"][0]) for detail in error.errors()}
        plan = Plan.model_construct(source=path.resolve(), **{name: _salvage(raw, name, wrong) for name in SECTIONS})
    for check, needs in _CHECKS.items():
        if plan.has(*needs):
            problems += check(plan)
    return plan, problems


def _salvage(raw: dict[str, Any], name: str, wrong: set[str]) -> Any:
    if name in wrong:
        return None
    field = Plan.model_fields[name]
    kind: Any = field.annotation
    return TypeAdapter(kind).validate_python(raw[name]) if name in raw else field.default


def _problem(detail: Any) -> PlanProblem:
    key = ".".join(str(part) for part in detail["loc"])
    if detail["type"] == "missing":
        return PlanProblem(key, "nothing", "a value; this key is required")
    if detail["type"] == "extra_forbidden":
        return _unknown(key, detail["input"])
    message = re.sub(r"^Input should be ", "", detail["msg"])
    return PlanProblem(key, f"{detail['input']!r}", message)


def _unknown(key: str, found: object) -> PlanProblem:
    return PlanProblem(key, repr(found), "no such key; README.md lists the keys of a plan")


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
        files = plan.delivery_files(feed)
        if files and feed.announced and not _matches_any(feed.announced, files):
            allowed = f"a pattern that the name of at least one file has, such as {files[0].name}"
            yield PlanProblem(f"{key}.announced", repr(feed.announced), allowed)
        if not files:
            yield PlanProblem(f"{key}.files", repr(feed.files), f"a pattern that matches a file below {plan.folder}")


def _matches_any(pattern: str, files: list[Path]) -> bool:
    try:
        return any(re.search(pattern, path.name) for path in files)
    except re.error:
        return True


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


def _stratum_problems(plan: Plan) -> Iterator[PlanProblem]:
    for position, feed in enumerate(plan.feed):
        for role in plan.classification.stratum:
            if role != "feed" and getattr(feed.columns, role) is None:
                key = f"feed.{position}.columns.{role}"
                yield PlanProblem(key, "nothing", "a column, since classification.stratum uses it")


def _classification_problems(plan: Plan) -> Iterator[PlanProblem]:
    yield from _file_problems(plan, "classification.headings", plan.classification.headings)
    yield from _file_problems(plan, "classification.assignment", plan.classification.assignment)


def _weight_problems(plan: Plan) -> Iterator[PlanProblem]:
    if plan.weights.source == "turnover":
        return
    if plan.weights.file is None:
        yield PlanProblem("weights.file", "nothing", "a CSV file, since weights.source is 'file'")
    else:
        yield from _file_problems(plan, "weights.file", plan.weights.file)


def _outside_problems(plan: Plan) -> Iterator[PlanProblem]:
    for number, series in enumerate(plan.outside_series):
        yield from _file_problems(plan, f"outside_series.{number}.file", series.file)


def _master_problems(plan: Plan) -> Iterator[PlanProblem]:
    for number, master in enumerate(plan.item_master):
        yield from _file_problems(plan, f"item_master.{number}.file", master.file)


def _file_problems(plan: Plan, key: str, name: str) -> Iterator[PlanProblem]:
    if not plan.resolve(name).is_file():
        yield PlanProblem(key, repr(name), f"a file below {plan.folder}")


def _feed_name_problems(plan: Plan) -> Iterator[PlanProblem]:
    feeds = {feed.name for feed in plan.feed}
    allowed = "one of the feeds " + ", ".join(sorted(feeds))
    for number, master in enumerate(plan.item_master):
        if master.feed not in feeds:
            yield PlanProblem(f"item_master.{number}.feed", repr(master.feed), allowed)
    for number, answer in enumerate(plan.answer):
        if answer.feed is not None and answer.feed not in feeds:
            yield PlanProblem(f"answer.{number}.feed", repr(answer.feed), allowed)


def _answer_problems(plan: Plan) -> Iterator[PlanProblem]:
    seen = set()
    for number, answer in enumerate(plan.answer):
        gate = (answer.gate, answer.feed, answer.on)
        if gate in seen:
            yield PlanProblem(
                f"answer.{number}", f"a second answer to {answer.gate} on {answer.on}", "one answer a gate"
            )
        seen.add(gate)


def _screening_problems(plan: Plan) -> Iterator[PlanProblem]:
    extreme = plan.screening.extreme
    if extreme != "off" and not extreme[0] < 1 < extreme[1]:
        yield PlanProblem("screening.extreme", str(list(extreme)), "a bound below 1, then one above 1; or 'off'")


_CHECKS: dict[Callable[[Plan], Iterator[PlanProblem]], tuple[str, ...]] = {
    _scope_problems: ("plan",),
    _feed_problems: ("feed",),
    _stratum_problems: ("feed", "classification"),
    _classification_problems: ("classification",),
    _weight_problems: ("weights",),
    _outside_problems: ("outside_series",),
    _master_problems: ("item_master",),
    _feed_name_problems: ("feed", "item_master", "answer"),
    _answer_problems: ("answer",),
    _screening_problems: ("screening",),
}
