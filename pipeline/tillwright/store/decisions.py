"""Decisions of people on successions: read from and written to CSV, kept in the ledger."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Literal, get_args

import polars as pl

from tillwright.errors import CallError

Verdict = Literal["accepted", "declined"]
VERDICTS: tuple[Verdict, ...] = get_args(Verdict)
COLUMNS = ("feed", "old_item", "new_item", "verdict", "by", "why", "at")


@dataclass(frozen=True, slots=True)
class Decision:
    """What a person decided on one pair of items, and why; `at` in UTC."""

    feed: str
    old_item: str
    new_item: str
    verdict: Verdict
    by: str
    why: str
    at: datetime


def now() -> datetime:
    """The time in UTC, as the ledger keeps it."""
    return datetime.now(UTC).replace(tzinfo=None)


def read_decisions(path: Path) -> list[Decision]:
    """Decisions from a CSV file with the columns feed, old_item, new_item, verdict, by, why and, if it has it, at.

    Raises
    ------
    CallError : the file cannot be read, lacks a column, or a row names no verdict or nobody.
    """
    try:
        frame = pl.read_csv(path, infer_schema=False)
    except (OSError, pl.exceptions.PolarsError) as error:
        raise CallError(f"The decisions {path} cannot be read as CSV: {str(error).splitlines()[0]}") from None
    missing = [name for name in COLUMNS[:-1] if name not in frame.columns]
    if missing:
        raise CallError(
            f"The decisions {path} have no column {', '.join(missing)}; needed are {', '.join(COLUMNS[:-1])}."
        )
    if "at" not in frame.columns:
        frame = frame.with_columns(pl.lit(None, pl.String).alias("at"))
    decisions = []
    for number, row in enumerate(frame.select(COLUMNS).iter_rows(named=True), start=2):
        empty = [name for name in COLUMNS[:-1] if not (row[name] or "").strip()]
        if empty or row["verdict"] not in VERDICTS:
            what = f"nothing in {empty[0]}" if empty else f"the verdict '{row['verdict']}'"
            raise CallError(f"Line {number} of {path} has {what}; a verdict is one of {', '.join(VERDICTS)}.")
        at = _time(row["at"], path, number)
        told = {name: row[name].strip() for name in COLUMNS[:-1]}
        decisions.append(Decision(**told, at=at))
    return decisions


def write_decisions(decisions: list[Decision], path: Path) -> None:
    """The decisions as CSV, in the order in which they were taken."""
    rows = [[getattr(one, name) for name in COLUMNS[:-1]] + [one.at.isoformat()] for one in decisions]
    path.parent.mkdir(parents=True, exist_ok=True)
    pl.DataFrame(rows, schema=dict.fromkeys(COLUMNS, pl.String), orient="row").write_csv(path)


def _time(text: str | None, path: Path, number: int) -> datetime:
    if not text:
        return now()
    try:
        return datetime.fromisoformat(text).replace(tzinfo=None)
    except ValueError:
        raise CallError(f"Line {number} of {path} has the time '{text}'; write it as 2024-03-31T14:00.") from None
