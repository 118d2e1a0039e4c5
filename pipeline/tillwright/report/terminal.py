"""The summary as it stands in a terminal or a log."""

from __future__ import annotations

from collections.abc import Iterator
from decimal import ROUND_HALF_UP, Decimal

from rich import box
from rich.console import Console, Group, RenderableType
from rich.padding import Padding
from rich.table import Table
from rich.text import Text

from tillwright.report.summary import Summary


def render(summary: Summary, console: Console) -> str:
    """The summary as text of the console's width, without blanks at the ends of lines."""
    with console.capture() as captured:
        console.print(Group(*_sections(summary)))
    return "\n".join(line.rstrip() for line in captured.get().splitlines())


def round_half_up(figure: float | None, places: int) -> str:
    """A figure as printed, exact halves rounded up; an empty string for none.

    Decimals are rounded, not binary fractions: 127.985 becomes 127.99 as in the printed tables of the
    PPI Manual (2004), Table 9.8.
    """
    if figure is None:
        return ""
    quantum = Decimal(1).scaleb(-places)
    return f"{Decimal(repr(round(figure, 10))).quantize(quantum, ROUND_HALF_UP):f}"


def _sections(summary: Summary) -> Iterator[RenderableType]:
    yield Text(summary.title, style="bold")
    yield Text("")
    yield from _section("Deliveries", _deliveries(summary))
    yield from _section("Lines refused, by rule", _rules(summary))
    if any(feed.unassigned_items for feed in summary.feeds):
        yield from _section("Accepted, but without an elementary aggregate", _unassigned(summary))
    yield from _section(_gate_title(summary), _gates(summary))
    if summary.idle_answers:
        yield from _section("Answers that meet no breached gate", Text("\n".join(summary.idle_answers)))
    if summary.methods:
        yield from _section("Elementary aggregates", _methods(summary))
    if summary.all_items:
        yield from _section("All items", _all_items(summary))
    yield Text(_closing(summary))


def _section(title: str, body: RenderableType | None) -> Iterator[RenderableType]:
    yield Text(title, style="bold")
    if body is not None:
        yield Padding(body, (0, 0, 0, 2))
    yield Text("")


def _table(*columns: str, left: int = 1, whole: int = 1) -> Table:
    """A table whose first `left` columns are flush left and whose first `whole` are never broken."""
    table = Table(box=box.SIMPLE_HEAD, pad_edge=False, show_edge=False, header_style="")
    for position, column in enumerate(columns):
        table.add_column(column, justify="left" if position < left else "right", no_wrap=position < whole)
    return table


def _deliveries(summary: Summary) -> Group:
    statuses = [
        s for s in ("active", "superseded", "repeated", "withdrawn") if any(s in f.files for f in summary.feeds)
    ]
    money = f"turnover accepted ({summary.currency})"
    table = _table("feed", *statuses, "lines received", "accepted", "refused", money)
    for feed in summary.feeds:
        counts = [str(feed.files.get(status, 0)) for status in statuses]
        lines = [f"{n:,}" for n in (feed.lines_received, feed.lines_accepted, feed.lines_refused)]
        table.add_row(feed.feed, *counts, *lines, f"{Decimal(feed.turnover_accepted):,}")
    return Group(table, Text("Lines and turnover are those of active deliveries."))


def _rules(summary: Summary) -> RenderableType:
    rules = sorted({rule for feed in summary.feeds for rule in feed.refused_by_rule})
    if not rules:
        return Text("none")
    table = _table("rule", *(feed.feed for feed in summary.feeds))
    for rule in rules:
        table.add_row(rule, *(f"{feed.refused_by_rule.get(rule, 0):,}" for feed in summary.feeds))
    return table


def _unassigned(summary: Summary) -> Table:
    table = _table("feed", "items", "lines", f"turnover ({summary.currency})")
    for feed in summary.feeds:
        figures = (f"{feed.unassigned_items:,}", f"{feed.unassigned_lines:,}", f"{Decimal(feed.unassigned_turnover):,}")
        table.add_row(feed.feed, *figures)
    return table


def _gate_title(summary: Summary) -> str:
    held, breached = len(summary.held), len(summary.breached)
    state = "nothing is held" if not held else f"{held} unanswered: the release is held"
    return f"Gates: {summary.gates_checked} checked, {breached} breached, {state}"


def _gates(summary: Summary) -> Table | None:
    if not summary.breached:
        return None
    table = _table("gate", "feed", "on", "what was seen", "answer", left=5, whole=3)
    for gate in summary.breached:
        answer = f"{gate.answer} ({gate.answered_by})" if gate.answered_by else "HELD: no answer in the plan"
        table.add_row(gate.gate, gate.feed, gate.subject, gate.note, answer)
    return table


def _methods(summary: Summary) -> Table:
    table = _table("method", "indexes")
    for method, count in summary.methods.items():
        table.add_row(method, str(count))
    for reason, count in summary.excluded.items():
        table.add_row(f"unit values set aside: {reason}", str(count))
    if summary.imputed:
        table.add_row("prices imputed", str(summary.imputed))
    return table


def _all_items(summary: Summary) -> Group:
    table = _table("period", "index", "1 period, %", "1 year, %")
    for row in summary.all_items:
        changes = (round_half_up(figure, 1) for figure in (row.change_period, row.change_year))
        table.add_row(row.period, round_half_up(row.index, summary.rounding), *changes)
    return Group(table, Text("Changes are computed from unrounded levels."))


def _closing(summary: Summary) -> str:
    done = summary.steps - summary.unchanged
    if done == 0:
        steps = f"Nothing had changed: all {summary.steps} steps were found done, none was run again."
    else:
        steps = f"{done} of {summary.steps} steps run, {summary.unchanged} found done, in {summary.seconds:.1f} s."
    tables = f"Tables: {summary.tables}"
    if summary.all_items:
        tables += " (Parquet; headings also as headings.csv)"
    return f"{steps}\n{tables}"
