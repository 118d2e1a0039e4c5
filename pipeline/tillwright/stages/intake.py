"""Stage 1: from files to exact sums and refused lines, one delivery at a time.

Lines are read from the file itself and are not written again; `sales` keeps their exact sums per
delivery, so a corrected file replaces its own sums and nothing else.
"""

from __future__ import annotations

import os
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import date, timedelta
from decimal import Decimal
from pathlib import Path

import polars as pl

from tillwright.errors import BrokenInvariant, UnreadableDeliveries, UnreadableFile
from tillwright.periods import parse_any_period, period_number
from tillwright.plan import Feed, Plan
from tillwright.queries import Connection, define, offer, select
from tillwright.stages.context import Context
from tillwright.store.deliveries import hash_file, open_delivery, reading
from tillwright.store.ledger import Arrival, Ledger
from tillwright.store.roles import DESCRIBING_ROLES
from tillwright.store.workspace import Workspace
from tillwright.tables import TABLES

PARTS = ("totals", "sales", "refused", "outlet_days", "described")


@dataclass(frozen=True, slots=True)
class Delivery:
    """One file as received. `present` is false once the file is gone or holds other bytes."""

    feed: Feed
    path: Path
    file: str
    sha256: str
    arrival: int
    bytes: int
    present: bool

    @property
    def name(self) -> str:
        """The delivery's name: its feed, the start of its hash, and the period that its file announces.

        The same bytes under names that announce different periods are different deliveries.
        """
        announced = announced_text(self.feed, self.path.name)
        return f"{self.feed.name}-{self.sha256[:12]}" + (f"-{announced}" if announced else "")


def receive(plan: Plan, ledger: Ledger) -> list[Delivery]:
    """Every file of every feed, those seen for the first time entered into the ledger.

    Files of one call arrive in the order of their paths.
    """
    return [delivery for feed in plan.feed for delivery in _receive_feed(plan, feed, ledger)]


def _receive_feed(plan: Plan, feed: Feed, ledger: Ledger) -> list[Delivery]:
    known = {(arrival.file, arrival.sha256): arrival for arrival in ledger.arrivals(feed.name)}
    stamped = {(a.file, a.bytes, a.modified): a.sha256 for a in known.values()}
    here: dict[tuple[str, str], Path] = {}
    fresh: list[Arrival] = []
    for path in plan.delivery_files(feed):
        status = path.stat()
        file = Path(os.path.relpath(path, plan.folder)).as_posix()
        stamp = (file, status.st_size, status.st_mtime_ns)
        digest = stamped.get(stamp) or hash_file(path)
        here[file, digest] = path
        if stamp not in stamped:
            before = known.get((file, digest))
            number = (
                before.arrival if before else len(known) + sum(1 for a in fresh if (a.file, a.sha256) not in known) + 1
            )
            fresh.append(Arrival(feed.name, file, digest, number, status.st_size, status.st_mtime_ns))
    ledger.receive(fresh)
    return [
        Delivery(
            feed,
            here.get((a.file, a.sha256), plan.resolve(a.file)),
            a.file,
            a.sha256,
            a.arrival,
            a.bytes,
            (a.file, a.sha256) in here,
        )
        for a in ledger.arrivals(feed.name)
    ]


def take_in(context: Context, connection: Connection, delivery: Delivery) -> int:
    """Write the parts of one delivery; the number of lines received.

    Raises
    ------
    UnreadableDeliveries : the file cannot be read.
    BrokenInvariant : lines or turnover do not add up.
    """
    feed, scope, name = delivery.feed, context.plan.plan, delivery.name
    rules = _rules(delivery)
    open_delivery(connection, delivery.path, feed, context.plan.classification.stratum)
    periods = {"period": scope.period, "month_rule": scope.month_rule, "weeks": scope.weeks}
    define(connection, "lines", **periods, only_period=_only_period(context, delivery), **rules)
    covered = {name: rules[name] for name in ("outlet_mapped", "announced_from", "announced_until")}
    with reading(delivery.path, feed):
        totals = select(connection, "totals", delivery=name)
        parts = {
            "sales": select(connection, "sales", delivery=name, feed=feed.name, period=scope.period),
            "outlet_days": select(connection, "outlet_days", delivery=name, feed=feed.name, **covered),
        }
        parts["refused"] = pl.DataFrame(schema=TABLES["refused"].columns)
        if parts["sales"]["lines"].sum() < totals["lines"][0]:
            parts["refused"] = select(connection, "refused", delivery=name, feed=feed.name, **rules)
        if _describes(feed):
            parts["described"] = select(connection, "described", delivery=name, feed=feed.name)
    totals = _reconcile(delivery, totals, parts)
    for table, frame in parts.items():
        context.workspace.write(table, frame, name)
    context.workspace.write("totals", totals, name)
    return int(totals["lines_received"][0])


def part_files(workspace: Workspace, delivery: Delivery) -> list[Path]:
    """Files that `take_in` writes for a delivery."""
    return [
        workspace.path(table, delivery.name) for table in PARTS if table != "described" or _describes(delivery.feed)
    ]


def announced_text(feed: Feed, file_name: str) -> str:
    """The period that a file's name announces, as it is written there; empty if it announces none."""
    found = re.search(feed.announced, file_name) if feed.announced else None
    return (found["period"] or "") if found else ""


def announced_period(feed: Feed, file_name: str) -> tuple[date, date] | None:
    """First day and day after the last of the period that a file's name announces; None if it announces none.

    Raises
    ------
    UnreadableDeliveries : the period it announces is none, such as 2024-13.
    """
    text = announced_text(feed, file_name)
    try:
        return parse_any_period(text) if text else None
    except ValueError:
        reason = f"its name announces the period '{text}', which there is not"
        raise UnreadableDeliveries([UnreadableFile(feed.name, file_name, reason)]) from None


def _rules(delivery: Delivery) -> dict[str, str | int | float | bool | date | None]:
    """The parameters of the refusal rules for one delivery; null switches a rule off."""
    feed = delivery.feed
    announced = announced_period(feed, delivery.path.name) or (None, None)
    low, high = feed.limits.unit_price or (None, None)
    return {
        "outlet_mapped": feed.columns.outlet is not None,
        "announced_from": announced[0],
        "announced_until": announced[1],
        "unit_price_low": low,
        "unit_price_high": high,
        "returns": feed.returns,
    }


def _only_period(context: Context, delivery: Delivery) -> int | None:
    """Number of the one period that a delivery's accepted lines can lie in, where its name announces one."""
    announced = announced_period(delivery.feed, delivery.path.name)
    if announced is None:
        return None
    kind = context.plan.plan.period
    first, last = (period_number(day, kind) for day in (announced[0], announced[1] - timedelta(days=1)))
    return first if first == last else None


def _describes(feed: Feed) -> bool:
    return any(getattr(feed.columns, role) is not None for role in DESCRIBING_ROLES)


def _reconcile(delivery: Delivery, totals: pl.DataFrame, parts: Mapping[str, pl.DataFrame]) -> pl.DataFrame:
    """The totals of a delivery, to which accepted and refused lines and turnover must add up exactly.

    The turnover of lines whose amount is no number counts as 0 on both sides.
    """
    sales, refused, file = parts["sales"], parts["refused"], delivery.file
    accepted, received = int(sales["lines"].sum()), int(totals["lines"][0])
    turnover_accepted, turnover_refused = _exact_sum(sales["turnover"]), _exact_sum(refused["turnover"])
    turnover_received = Decimal(totals["turnover"][0])
    unnamed = refused["rule"].null_count()
    if unnamed:
        raise BrokenInvariant("every refused line breaks a rule", f"{file}: {unnamed} lines break none")
    if received != accepted + refused.height:
        detail = f"{file}: {received} received, {accepted} accepted, {refused.height} refused"
        raise BrokenInvariant("lines add up", detail)
    if turnover_received != turnover_accepted + turnover_refused:
        detail = f"{file}: {turnover_received} received, {turnover_accepted} accepted, {turnover_refused} refused"
        raise BrokenInvariant("turnover adds up", detail)
    days = parts["outlet_days"]["day"]
    return pl.DataFrame(
        {
            "delivery": [delivery.name],
            "lines_received": [received],
            "lines_accepted": [accepted],
            "lines_refused": [refused.height],
            "turnover_received": [turnover_received],
            "turnover_accepted": [turnover_accepted],
            "turnover_refused": [turnover_refused],
            "first_day": [days.min()],
            "last_day": [days.max()],
        },
        schema=TABLES["totals"].columns,
    )


def _exact_sum(column: pl.Series) -> Decimal:
    return Decimal(column.sum() or 0)


def settle(context: Context, deliveries: Sequence[Delivery]) -> int:
    """Write `deliveries`: what became of every file; the number of files."""
    rows = []
    for feed in context.plan.feed:
        own = [delivery for delivery in deliveries if delivery.feed.name == feed.name]
        for delivery, (status, replaced_by) in zip(own, _statuses(feed, own), strict=True):
            rows.append(
                {
                    "feed": feed.name,
                    "arrival": delivery.arrival,
                    "delivery": delivery.name,
                    "file": delivery.file,
                    "status": status,
                    "replaced_by": replaced_by,
                    "sha256": delivery.sha256,
                    "bytes": delivery.bytes,
                }
            )
    listed = pl.DataFrame(rows, schema_overrides={"replaced_by": pl.String})
    names = [path for path in context.workspace.parts("totals", sorted(set(listed["delivery"]))) if path.exists()]
    totals = pl.read_parquet(names, glob=False) if names else pl.DataFrame(schema=TABLES["totals"].columns)
    context.workspace.write("deliveries", listed.join(totals, on="delivery", how="left"))
    return listed.height


def _statuses(feed: Feed, deliveries: Sequence[Delivery]) -> list[tuple[str, str | None]]:
    """Status of each delivery of a feed, and the file that replaces it."""
    latest: dict[str, Delivery] = {}
    present = [delivery for delivery in deliveries if delivery.present]
    for delivery in present:
        what, rank = _replaces(feed, delivery)
        if what not in latest or rank > _replaces(feed, latest[what])[1]:
            latest[what] = delivery
    first: dict[str, Delivery] = {}
    originals: dict[str, Delivery] = {}
    for delivery in sorted(present, key=lambda delivery: (len(Path(delivery.file).parts), delivery.file)):
        what, _ = _replaces(feed, delivery)
        owner, _ = _replaces(feed, first.setdefault(delivery.name, delivery))
        if what == owner and delivery.name == latest[what].name:
            originals.setdefault(delivery.name, delivery)
        elif what != owner:
            originals.setdefault(delivery.name, first[delivery.name])
    here = {delivery.file: delivery for delivery in present}
    return [_status(feed, delivery, originals, latest, here) for delivery in deliveries]


def _status(
    feed: Feed,
    delivery: Delivery,
    originals: Mapping[str, Delivery],
    latest: Mapping[str, Delivery],
    here: Mapping[str, Delivery],
) -> tuple[str, str | None]:
    """active; repeated: the same as another file; superseded; withdrawn: gone and not replaced.

    A file that was overwritten counts as superseded by what holds its name now.
    """
    original = originals.get(delivery.name)
    winner = latest.get(_replaces(feed, delivery)[0])
    if original is delivery and winner is not None and winner.name == delivery.name:
        return "active", None
    if not delivery.present and delivery.file not in here:
        return "withdrawn", original.file if original else None
    if delivery.present and original is not None and original is not delivery:
        return "repeated", original.file
    return "superseded", winner.file if winner else None


def _replaces(feed: Feed, delivery: Delivery) -> tuple[str, tuple[object, ...]]:
    """What a delivery stands for, and its rank among deliveries that stand for the same.

    Ranks come from the files, not from when they were seen, so that a workspace made anew agrees: by
    version, else the file in the deeper folder, else the later path.
    """
    path = Path(delivery.file)
    place = (len(path.parts), delivery.file)
    found = None if feed.replaces == "same-name" else re.search(feed.replaces, path.name)
    if found is None:
        return path.name, ("", *place)
    version = found.groupdict().get("version") or ""
    digits = re.sub(r"\d+", lambda number: number[0].rjust(12, "0"), version)
    return found["what"], (digits, *place)


def find_active(plan: Plan, deliveries: Sequence[Delivery]) -> set[int]:
    """Identities of the deliveries whose lines count."""
    active = set()
    for feed in plan.feed:
        own = [delivery for delivery in deliveries if delivery.feed.name == feed.name]
        statuses = _statuses(feed, own)
        active |= {id(delivery) for delivery, (status, _) in zip(own, statuses, strict=True) if status == "active"}
    return active


def check_gates(context: Context) -> int:
    """Write `gates`; the number of gates checked."""
    connection = context.connect()
    deliveries = context.workspace.read("deliveries")
    offer(connection, "deliveries", deliveries)
    context.offer_active(connection, "sales", "outlet_days")
    replaced = deliveries.filter(pl.col("status") == "superseded")["delivery"].to_list()
    context.offer_parts(connection, "outlet_days", replaced, called="replaced_days")
    offer(connection, "periods", context.periods())
    offer(connection, "gate_limits", _gate_limits(context.plan))
    offer(connection, "answers", answers(context.plan))
    gates = select(connection, "gates")
    context.workspace.write("gates", gates)
    return gates.height


def _gate_limits(plan: Plan) -> pl.DataFrame:
    return pl.DataFrame([{"feed": feed.name, **feed.gates.model_dump()} for feed in plan.feed])


def answers(plan: Plan) -> pl.DataFrame:
    """The plan's answers: gate, feed, subject, answered_by, answer."""
    rows = [(a.gate, a.feed, a.on, a.by, a.why) for a in plan.answer]
    columns = ("gate", "feed", "subject", "answered_by", "answer")
    return pl.DataFrame(rows, schema=dict.fromkeys(columns, pl.String), orient="row")
