"""Compiles of hand-made panels: prices and quantities by month as one delivery, and what becomes of them."""

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import polars as pl
from numpy.typing import NDArray

from tests.stages.small import line, put, sections, write_plan
from tillwright.stages.compiling import Compiled, Request, carry_out

# Price and quantity of each month of 2024 from January on; None = not sold.
Floats = NDArray[np.float64]
Months = Sequence[tuple[float, float] | None]
JEVONS = {"method": "jevons"}


def compile_sold(
    folder: Path, milk: Mapping[str, Months], drinks: Mapping[str, Months] | None = None, **changes: Any
) -> Compiled:
    """The compile of two aggregates, M and S, whose products are sold as told; sections of the plan by keyword."""
    drinks = drinks or {"Z": [(1.0, 1.0)] * max(map(len, milk.values()))}
    named = [*((item, "M") for item in milk), *((item, "S") for item in drinks)]
    assigned = "\n".join(f",,{item},{ea}" for item, ea in named)
    put(folder / "assignment.csv", f"feed,category,item,ea\n{assigned}\n")
    rows = [
        line(day=f"2024-{month:02d}-05", item=item, quantity=f"{quantity:.4f}", turnover=f"{price * quantity:.4f}")
        for item, months in {**milk, **drinks}.items()
        for month, (price, quantity) in sold(months)
    ]
    put(folder / "in/a.csv", rows)
    return carry_out(Request(write_plan(folder, sections(**changes))))


def sold(months: Months) -> list[tuple[int, tuple[float, float]]]:
    """Month, and price and quantity, of the months in which there are any."""
    return [(number, one) for number, one in enumerate(months, start=1) if one is not None]


def reasons(compiled: Compiled, verdict: str = "excluded", ea: str = "M") -> dict[str, dict[int, str]]:
    """The reason of every row with a verdict, by item and month."""
    screened = compiled.context.workspace.read("screened").filter(verdict=verdict, ea=ea)
    found: dict[str, dict[int, str]] = {}
    for product, period, reason in screened.select("product", "period", "reason").iter_rows():
        found.setdefault(product.removeprefix("shop/"), {})[period.month] = reason
    return found


def levels(compiled: Compiled, ea: str = "M") -> Floats:
    """The index of an aggregate, 100 in its first month."""
    found = compiled.context.workspace.read("ea_indexes").filter(ea=ea).sort("period")["level"]
    return found.cast(pl.Float64).to_numpy()


def random_months(
    rng: np.random.Generator, months: int, *, comes_back: bool = True
) -> list[tuple[float, float] | None]:
    """A product with a quarter of its months missing, and wild prices, promotions and few sales now and then."""
    first, last = sorted(rng.integers(0, months, 2).tolist())
    told: list[tuple[float, float] | None] = []
    price = float(rng.uniform(1.0, 9.0))
    for month in range(months):
        gone = not first <= month <= last or (comes_back and rng.random() < 0.25)
        wild = 10.0 if rng.random() < 0.05 else 1.0
        cleared = 0.5 if month == last else 1.0
        amount = float(rng.choice([2.0, 20.0, 60.0])) * (0.2 if month == last else 1.0)
        told.append(None if gone else (round(price * wild * cleared, 2), round(amount, 1)))
        price *= float(rng.uniform(0.9, 1.15))
    return told
