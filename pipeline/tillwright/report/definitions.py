"""Scores of product definitions as a table for people."""

from __future__ import annotations

import polars as pl
from rich.console import Console
from rich.table import Table


def render(scores: pl.DataFrame, console: Console) -> str:
    """One row per elementary aggregate: the definition that wins, beside the products that the plan makes now."""
    if scores.is_empty():
        return "No definition can be scored: no elementary aggregate has sales in two periods."
    table = Table(box=None, pad_edge=False, header_style="bold")
    for name in ("ea", "", "wins"):
        table.add_column(name, overflow="fold")
    for name in ("score", "match", "R²", "products", "plan's score", "plan's products"):
        table.add_column(name, justify="right")
    now = {row["ea"]: row for row in scores.filter(pl.col("definition") == "(plan)").iter_rows(named=True)}
    for row in scores.filter("wins").iter_rows(named=True):
        plan = now[row["ea"]]
        figures = (f"{row[name]:.3f}" for name in ("score", "match", "r2"))
        counts = (str(row["products"]), f"{plan['score']:.3f}", str(plan["products"]))
        table.add_row(row["ea"], row["label"], row["definition"], *figures, *counts)
    with console.capture() as captured:
        console.print(table)
    lines = "\n".join(line.rstrip() for line in captured.get().splitlines())
    return f"{lines}\n\nMeans over all periods, weighted by turnover; of equal scores the simpler definition wins."
