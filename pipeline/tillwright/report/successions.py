"""Successions as a table for people."""

from __future__ import annotations

import io

import polars as pl
from rich.console import Console
from rich.table import Table

WIDTH = 150


def render(frame: pl.DataFrame) -> str:
    """One row per pair: what was decided, the two items, and the evidence."""
    if frame.is_empty():
        return "No successions to list. The section [successions] of the plan proposes them."
    table = Table(box=None, pad_edge=False, header_style="bold")
    for name in ("status", "feed", "old item", "new item", "score"):
        table.add_column(name, overflow="fold")
    for name in ("size ×", "price ×", "unit price ×", "turnover ×", "gap"):
        table.add_column(name, justify="right")
    for row in frame.iter_rows(named=True):
        table.add_row(
            row["status"],
            row["feed"],
            _item(row["old_item"], row["old"], row["old_size"]),
            _item(row["new_item"], row["new"], row["new_size"]),
            _number(row["score"]),
            *(_number(row[name]) for name in ("size_ratio", "price_ratio", "unit_price_ratio", "turnover_ratio")),
            "" if row["gap"] is None else str(row["gap"]),
        )
    console = Console(file=io.StringIO(), width=WIDTH, highlight=False)
    console.print(table)
    counted = frame.group_by("status").len().sort("status")
    told = ", ".join(f"{count} {status}" for status, count in counted.iter_rows())
    text = console.file.getvalue()  # type: ignore[attr-defined]
    return f"{text}\n{frame.height} pairs: {told}. Ratios are new over old."


def _item(code: str, description: str | None, size: str | None) -> str:
    stated = size if size and size not in (description or "") else None
    return " ".join(part for part in (code, description, stated) if part)


def _number(value: float | None) -> str:
    return "" if value is None else f"{value:.2f}"
