"""plan.toml, read and validated whole; every problem is told at once, before any data are read."""

from __future__ import annotations

import re
import tomllib
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any
from zoneinfo import ZoneInfo

from pydantic import TypeAdapter, ValidationError

from tillwright.choices import PeriodKind
from tillwright.errors import PlanError, PlanProblem
from tillwright.periods import parse_period, year_of
from tillwright.plan import DATE_ROLES, ITEM_FACTS, IndexOverride, Plan

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
        details = error.errors()
        inner = {detail["loc"][:depth] for detail in details for depth in range(len(detail["loc"]))}
        # A section whose members are wrong is also told to be too short, since they do not count.
        told = [_problem(d) for d in details if not (d["type"] == "too_short" and d["loc"] in inner)]
        problems += _joined(told)
        wrong = {str(detail["loc"][0]) for detail in details}
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


def _joined(problems: list[PlanProblem]) -> Iterator[PlanProblem]:
    """One problem per key and value, where each kind that was allowed is told by itself."""
    allowed: dict[tuple[str, str], list[str]] = {}
    for problem in problems:
        allowed.setdefault((problem.key, problem.found), []).append(problem.allowed)
    return (PlanProblem(key, found, ", or ".join(kinds)) for (key, found), kinds in allowed.items())


def _problem(detail: Any) -> PlanProblem:
    key = ".".join(str(part) for part in detail["loc"] if not _UNION_MEMBER.search(str(part)))
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
        if feed.decimal == feed.delimiter:
            yield PlanProblem(f"{key}.delimiter", repr(feed.delimiter), "another character than feed.decimal")
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
        ZoneInfo("UTC" if zone is None else zone)
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


def _calendar_problems(plan: Plan) -> Iterator[PlanProblem]:
    scope, link = plan.plan, plan.weights.link_month
    for position, feed in enumerate(plan.feed):
        if feed.columns.month is not None and (scope.period == "week" or scope.month_rule != "calendar"):
            allowed = "sold_at or week: months cannot be told apart by weeks"
            yield PlanProblem(f"feed.{position}.columns.month", repr(feed.columns.month), allowed)
    if scope.period == "quarter" and link % 3:
        yield PlanProblem("weights.link_month", str(link), "3, 6, 9 or 12, the last month of a quarter")


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
    clearance = plan.screening.clearance
    if clearance != "off":
        for name in ("price_fall", "quantity_fall"):
            share = getattr(clearance, name)
            if not share < 1:
                yield PlanProblem(f"screening.clearance.{name}", str(share), "a share of the last one kept, below 1")
    small = plan.screening.small
    if small != "off" and not small.factor > 1:
        allowed = "above 1, or the only product of a link would sell too little"
        yield PlanProblem("screening.small.factor", str(small.factor), allowed)


def _index_problems(plan: Plan) -> Iterator[PlanProblem]:
    shortest = _LONGEST_YEAR[plan.plan.period] + 1
    keys = [f"index.override.{number}" for number in range(len(plan.index.override))]
    # What is adjusted for quality takes its windows from [index], whatever method stands there.
    method = plan.hedonic[0].method if plan.hedonic else None
    overrides: list[tuple[IndexOverride, ...]] = [(), *((override,) for override in plan.index.override)]
    recipes = [plan.index.overridden(*each, method=method) for each in overrides]
    for key, recipe in zip(["index", *keys], recipes, strict=True):
        if not recipe.is_spliced:
            continue
        if recipe.window == "expanding" and recipe.splice != "link-month":
            yield PlanProblem(f"{key}.splice", repr(recipe.splice), "'link-month', since the window is expanding")
        elif recipe.splice == "link-month" and isinstance(recipe.window, int) and recipe.window < shortest:
            allowed = f"{shortest} or more periods, so as to reach the link month, or 'expanding'"
            yield PlanProblem(f"{key}.window", str(recipe.window), allowed)


def _succession_problems(plan: Plan) -> Iterator[PlanProblem]:
    rules = plan.successions
    if rules is not None and rules.ask > rules.accept:
        yield PlanProblem("successions.ask", str(rules.ask), f"at most successions.accept, {rules.accept}")


def _product_problems(plan: Plan) -> Iterator[PlanProblem]:
    known = {"item", *ITEM_FACTS, *(name for master in plan.item_master for name in master.attributes)}
    choices = [("products.by", plan.products.by)]
    choices += [
        (f"products.override.{number}.by", override.by or ()) for number, override in enumerate(plan.products.override)
    ]
    for number, names in enumerate(plan.products.candidates):
        choices.append((f"products.candidates.{number}", names))
        if not names:
            yield PlanProblem(f"products.candidates.{number}", "no attributes", "at least one attribute")
    for key, names in choices:
        for name in names:
            if name not in known or (name == "item" and len(names) > 1):
                allowed = f"'item' alone, or attributes: {', '.join(sorted(known - {'item'}))}"
                yield PlanProblem(key, repr(name), allowed)
    for number, feed in enumerate(plan.feed):
        yield from _pattern_problems(f"feed.{number}.item_part", feed.item_part, "item")


def _hedonic_problems(plan: Plan) -> Iterator[PlanProblem]:
    listed = sorted({name for master in plan.item_master for name in master.attributes})
    for number, choice in enumerate(plan.hedonic):
        key = f"hedonic.{number}"
        if not choice.attributes:
            yield PlanProblem(key, "no attributes", "at least one, in numeric, logs or categorical")
        for kind, names in (("numeric", choice.numeric), ("logs", choice.logs), ("categorical", choice.categorical)):
            known = [*(ITEM_FACTS if kind == "categorical" else ("size",)), *listed]
            for name in names:
                if name not in known:
                    yield PlanProblem(f"{key}.{kind}", repr(name), f"{', '.join(known)}, as item_master.attributes has")
        for name in sorted({name for name in choice.attributes if choice.attributes.count(name) > 1}):
            yield PlanProblem(key, f"{name!r} more than once", "each attribute once, in numeric, logs or categorical")
        if any(other.heading == choice.heading for other in plan.hedonic[:number]):
            yield PlanProblem(f"{key}.heading", repr(choice.heading), "a heading that no other [[hedonic]] has")


_LONGEST_YEAR: dict[PeriodKind, int] = {"month": 12, "week": 53, "quarter": 4}
_UNION_MEMBER = re.compile(r"^(constrained-|literal\[|tuple\[|<)")

_CHECKS: dict[Callable[[Plan], Iterator[PlanProblem]], tuple[str, ...]] = {
    _scope_problems: ("plan",),
    _feed_problems: ("feed",),
    _calendar_problems: ("plan", "feed", "weights"),
    _stratum_problems: ("feed", "classification"),
    _classification_problems: ("classification",),
    _weight_problems: ("weights",),
    _outside_problems: ("outside_series",),
    _master_problems: ("item_master",),
    _feed_name_problems: ("feed", "item_master", "answer"),
    _answer_problems: ("answer",),
    _screening_problems: ("screening",),
    _index_problems: ("plan", "index", "hedonic"),
    _hedonic_problems: ("hedonic", "item_master"),
    _succession_problems: ("successions",),
    _product_problems: ("products", "item_master", "feed"),
}
