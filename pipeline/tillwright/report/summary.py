"""The summary of a compile, as text for people and as JSON for programs."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict, dataclass
from typing import Any

import polars as pl

from tillwright.stages.context import Context
from tillwright.stages.keyed import StepResult

LAST_PERIODS = 13


@dataclass(frozen=True, slots=True)
class FeedSummary:
    """One feed: its files by status, and the lines and turnover of the active ones."""

    feed: str
    files: dict[str, int]
    lines_received: int
    lines_accepted: int
    lines_refused: int
    turnover_accepted: str
    refused_by_rule: dict[str, int]
    unassigned_items: int
    unassigned_lines: int
    unassigned_turnover: str


@dataclass(frozen=True, slots=True)
class GateSummary:
    """One breached gate, and its answer if it has one."""

    gate: str
    feed: str
    subject: str
    note: str
    answered_by: str | None
    answer: str | None


@dataclass(frozen=True, slots=True)
class PeriodSummary:
    """All items in one period: index, and changes in per cent."""

    period: str
    index: float | None
    change_period: float | None
    change_year: float | None


@dataclass(frozen=True, slots=True)
class Summary:
    """What a compile received, refused, held and made."""

    title: str
    currency: str
    feeds: tuple[FeedSummary, ...]
    gates_checked: int
    breached: tuple[GateSummary, ...]
    idle_answers: tuple[str, ...]
    methods: dict[str, int]
    excluded: dict[str, int]
    imputed: int
    all_items: tuple[PeriodSummary, ...]
    rounding: int
    steps: int
    unchanged: int
    seconds: float
    tables: str

    @property
    def held(self) -> tuple[GateSummary, ...]:
        """Breached gates that nobody has answered: they hold the release."""
        return tuple(gate for gate in self.breached if gate.answered_by is None)

    def as_dict(self) -> dict[str, Any]:
        """The summary as plain values, `held` included."""
        return {**asdict(self), "held": [asdict(gate) for gate in self.held]}


def summarise_intake(context: Context, steps: Sequence[StepResult]) -> Summary:
    """The summary of an intake: everything but indexes."""
    deliveries, gates = context.workspace.read("deliveries"), context.workspace.read("gates")
    return Summary(
        title=context.plan.plan.title,
        currency=context.plan.plan.currency,
        feeds=tuple(_feed(context, feed.name, deliveries, None) for feed in context.plan.feed),
        gates_checked=gates.height,
        breached=_breached(gates),
        idle_answers=(),
        methods={},
        excluded={},
        imputed=0,
        all_items=(),
        rounding=context.plan.release.rounding,
        steps=len(steps),
        unchanged=sum(step.unchanged for step in steps),
        seconds=sum(step.seconds for step in steps),
        tables=str(context.workspace.tables),
    )


def summarise_compile(context: Context, steps: Sequence[StepResult]) -> Summary:
    """The summary of a whole compile."""
    workspace = context.workspace
    deliveries, gates, failures = (workspace.read(name) for name in ("deliveries", "gates", "failures"))
    unassigned = _unassigned(context)
    indexes, screened = workspace.read("ea_indexes"), workspace.read("screened")
    methods = indexes.group_by("method").agg(pl.struct("ea", "stratum").n_unique().alias("made")).sort("method")
    excluded = screened.filter(pl.col("verdict") == "excluded").group_by("reason").len().sort("reason")
    return Summary(
        title=context.plan.plan.title,
        currency=context.plan.plan.currency,
        feeds=tuple(_feed(context, feed.name, deliveries, unassigned) for feed in context.plan.feed),
        gates_checked=gates.height + len(context.references.tree.leaves),
        breached=(*_breached(gates), *_failed(failures)),
        idle_answers=_idle_answers(context, gates, failures),
        methods=dict(methods.iter_rows()),
        excluded=dict(excluded.iter_rows()),
        imputed=screened.filter(pl.col("verdict") == "imputed").height,
        all_items=_all_items(context),
        rounding=context.plan.release.rounding,
        steps=len(steps),
        unchanged=sum(step.unchanged for step in steps),
        seconds=sum(step.seconds for step in steps),
        tables=str(workspace.tables),
    )


def _feed(context: Context, feed: str, deliveries: pl.DataFrame, unassigned: pl.DataFrame | None) -> FeedSummary:
    own = deliveries.filter(pl.col("feed") == feed)
    active = own.filter(pl.col("status") == "active")
    parts = context.workspace.parts("refused", active["delivery"].to_list())
    rules: dict[str, int] = {}
    if parts:
        counted = pl.scan_parquet(parts, glob=False).group_by("rule").len().collect()
        rules = dict(counted.sort("len", "rule", descending=[True, False]).iter_rows())
    left = None if unassigned is None else unassigned.filter(pl.col("feed") == feed)
    some = left if left is not None and left.height else None
    return FeedSummary(
        feed=feed,
        files=dict(own.group_by("status").len().sort("status").iter_rows()),
        lines_received=_total(active["lines_received"]),
        lines_accepted=_total(active["lines_accepted"]),
        lines_refused=_total(active["lines_refused"]),
        turnover_accepted=_money(active["turnover_accepted"].sum()),
        refused_by_rule=rules,
        unassigned_items=0 if some is None else int(some["items"][0]),
        unassigned_lines=0 if some is None else int(some["lines"][0]),
        unassigned_turnover=_money(None if some is None else some["turnover"][0]),
    )


def _total(column: pl.Series) -> int:
    return int(column.sum() or 0)


def _money(amount: Any) -> str:
    return f"{amount or 0:.2f}"


def _unassigned(context: Context) -> pl.DataFrame:
    items, products = context.workspace.read("items"), context.workspace.read("products")
    left = items.join(products.filter(pl.col("ea").is_null()), on=["feed", "item"], how="semi")
    return left.group_by("feed").agg(pl.len().alias("items"), pl.col("lines").sum(), pl.col("turnover").sum())


def _breached(gates: pl.DataFrame) -> tuple[GateSummary, ...]:
    rows = gates.filter("breached").select("gate", "feed", "subject", "note", "answered_by", "answer")
    return tuple(GateSummary(*row) for row in rows.iter_rows())


def _failed(failures: pl.DataFrame) -> tuple[GateSummary, ...]:
    return tuple(
        GateSummary("index-failed", "", f"{ea} / {stratum}" if stratum else ea, message, by, answer)
        for ea, stratum, message, by, answer in failures.iter_rows()
    )


def _idle_answers(context: Context, gates: pl.DataFrame, failures: pl.DataFrame) -> tuple[str, ...]:
    """Answers of the plan that meet no breached gate."""
    met = set(gates.filter("breached").select("gate", "feed", "subject").iter_rows())
    met |= {("index-failed", None, ea) for ea in failures["ea"]}
    idle = [a for a in context.plan.answer if (a.gate, None if a.gate == "index-failed" else a.feed, a.on) not in met]
    return tuple(f"{answer.gate} on {answer.on}" + (f" ({answer.feed})" if answer.feed else "") for answer in idle)


def _all_items(context: Context) -> tuple[PeriodSummary, ...]:
    top = context.workspace.read("headings").filter(pl.col("parent") == "").sort("period").tail(LAST_PERIODS)
    rows = top.select("period", "index", "change_period", "change_year").iter_rows()
    return tuple(PeriodSummary(context.label(period), *figures) for period, *figures in rows)
