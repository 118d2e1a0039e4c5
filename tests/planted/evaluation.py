"""What a compile makes of a market, against what was planted in it."""

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from types import MappingProxyType

import numpy as np
import polars as pl
from numpy.typing import NDArray

import tillwright as tw
from tests.planted.builder import FEED, PERIODS, WEIGHTS, Truth, write_market, write_plan
from tests.planted.shelf import MONTHS
from tests.stages.lookalikes import Verdict
from tillwright.stages.compiling import Request, carry_out
from tillwright.store.workspace import Workspace

Floats = NDArray[np.float64]

SUCCESSIONS = "[successions]\n"
CLEARANCE = """
[screening]
extreme = [0.25, 4.0]
clearance = { price_fall = 0.7, quantity_fall = 0.5, ahead = 2 }
small = "off"
imputation = "off"
"""
JEVONS = '[index]\nmethod = "jevons"\nform = "chained"\n'
EVERYTHING = SUCCESSIONS + CLEARANCE
VARIANTS: Mapping[str, str] = MappingProxyType(
    {
        "everything on": EVERYTHING,
        "successions off": CLEARANCE,
        "clearance off": SUCCESSIONS,
        "both off": "",
        "chained Jevons, everything on": EVERYTHING + JEVONS,
        "chained Jevons, both off": JEVONS,
    }
)


@dataclass(frozen=True, slots=True)
class Error:
    """How far inflation lies from the truth, in percentage points a year.

    average : the mean of the twelve-month rates of all items; of each aggregate in `aggregates`.
    ends : from the first month to the last, of all items; `last_known` to the last month in which a clearance of two
        months can be told by what comes after.
    """

    average: float
    ends: float
    last_known: float
    aggregates: tuple[float, ...]


@dataclass(frozen=True, slots=True)
class Market:
    """A market written to a folder, and its truth."""

    folder: Path
    truth: Truth

    def compile(self, sections: str) -> Workspace:
        """The market compiled with sections added to the plan; intake is done once."""
        return carry_out(Request(write_plan(self.folder, sections), self.folder / "work")).context.workspace


def make_market(folder: Path, seed: int, aggregates: int = 3) -> Market:
    """A market of its own seed."""
    return Market(folder, write_market(folder, seed, aggregates))


def levels_of(workspace: Workspace) -> Floats:
    """(T, A) compiled index of each elementary aggregate, first month = 1."""
    table = workspace.read("ea_indexes").sort("ea", "period")
    return np.stack([part["level"].to_numpy() / 100.0 for _, part in table.group_by("ea", maintain_order=True)], axis=1)


def all_items(levels: Floats) -> Floats:
    """(T,) index of all items: weighted means of relatives within a year, linked in December."""
    index, weights = np.ones(len(levels)), np.array(WEIGHTS[: levels.shape[1]])
    for first in range(0, len(levels), 12):
        link, whole = max(first - 1, 0), slice(first, first + 12)
        index[whole] = index[link] * (levels[whole] / levels[link]) @ weights / weights.sum()
    return index


def compare(levels: Floats, truth: Truth) -> Error:
    """The error of indexes of the elementary aggregates, (T, A), first month = 1."""
    index, right = all_items(levels), all_items(truth.levels)
    return Error(
        average=_average_rate(index) - _average_rate(right),
        ends=_rate(index, MONTHS - 1) - _rate(right, MONTHS - 1),
        last_known=_rate(index, MONTHS - 3) - _rate(right, MONTHS - 3),
        aggregates=tuple(
            _average_rate(found) - _average_rate(planted)
            for found, planted in zip(levels.T, truth.levels.T, strict=True)
        ),
    )


def _average_rate(index: Floats) -> float:
    return float(np.mean(index[12:] / index[:-12]) - 1.0) * 100.0


def _rate(index: Floats, last: int) -> float:
    return float((index[last] / index[0]) ** (12.0 / last) - 1.0) * 100.0


def known_levels(market: Market) -> Floats:
    """(T, A) the default index of one who knows every relaunch, every pack and every clearance.

    What it lies from the truth is what a shelf of finite size leaves to chance: promotions, noise, which items are
    there. It reads the delivered sums and not the compile's tables.
    """
    lines = pl.concat([pl.read_parquet(path) for path in sorted((market.folder / "deliveries").glob("*.parquet"))])
    truth = market.truth
    cleared = pl.DataFrame(
        [(code, PERIODS[month]) for code, month in sorted(truth.sold_off)],
        schema={"article": pl.String, "month": pl.String},
        orient="row",
    )
    lines_of = pl.DataFrame(
        [(code, *line) for code, line in truth.products.items()],
        schema={"article": pl.String, "product": pl.String, "ea": pl.String, "content": pl.Float64},
        orient="row",
    )
    panel = (
        lines.join(cleared, on=["article", "month"], how="anti")
        .join(lines_of, on="article", validate="m:1")
        .group_by("ea", "product", "month")
        .agg((pl.col("units") * pl.col("content")).sum().alias("quantity"), pl.col("value").sum())
        .with_columns((pl.col("value") / pl.col("quantity")).alias("price"))
    )
    made = tw.multilateral(panel, "geks-tornqvist", window=25, by="ea", period="month").sort("ea", "month")
    return np.stack([part["index"].to_numpy() / 100.0 for _, part in made.group_by("ea", maintain_order=True)], axis=1)


def judge_successions(
    workspace: Workspace, truth: Truth, least: float | None = None, *, all_of: bool = False
) -> Verdict:
    """Successions that were accepted, or that score at least so much, against planted relaunches.

    Recall is of those that sales can tell, or of all of them.
    """
    table = workspace.read("successions").filter(pl.col("feed") == FEED)
    taken = table.filter(pl.col("status") == "accepted" if least is None else pl.col("score") >= least)
    found = set(taken.select("old_item", "new_item").iter_rows())
    right = truth.relaunches if all_of else truth.visible
    wrong = found - truth.relaunches
    return Verdict(len(found & right) + len(wrong), len(found & right), len(right))


def judge_clearance(workspace: Workspace, truth: Truth) -> Verdict:
    """Unit values set aside as clearance, against planted ones of items that are seen to be gone."""
    table = workspace.read("screened").filter(pl.col("reason") == "clearance")
    # A product is named for the first item of its line; what is planted is named for the item sold off.
    months = table.select(pl.col("product").str.strip_prefix(f"{FEED}/"), pl.col("period").dt.strftime("%Y-%m"))
    found = {(product, PERIODS.index(month)) for product, month in months.iter_rows()}
    first = {(truth.products[code][0], month) for code, month in truth.cleared}
    named = {(truth.products[product][0], month) for product, month in found}
    return Verdict(len(named), len(named & first), len(first))
