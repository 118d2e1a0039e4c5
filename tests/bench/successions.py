"""Time to propose relaunches among 100 000 items, and what thresholds of the score find on generated look-alikes.

Run: python -m tests.bench.successions [ITEMS]
"""

from __future__ import annotations

import functools
import sys
import time

import numpy as np
import polars as pl

from tests.bench.measure import peak_memory, show
from tests.stages.lookalikes import Verdict, judge, make_lookalikes
from tillwright.stages.pairing import Successions, propose

SEEDS = range(1000, 1020)
THRESHOLDS = (0.6, 0.7, 0.8, 0.85, 0.9, 0.95, 0.98)
ITEMS_A_PLACE = 2.9
PLACES = 25
FEEDS = 3
# Aggregates laid together until a feed has ten, so that a block holds some thousand items.
COARSE = 10


def main(items: int) -> None:
    """Print seconds and memory for fine and for coarse aggregates, then the table of thresholds."""
    rows = []
    for name, coarse in (("fine aggregates", False), ("ten aggregates a feed", True)):
        frame = _shelf(items, coarse=coarse)
        started = time.perf_counter()
        found = propose(frame)
        seconds = time.perf_counter() - started
        memory = peak_memory(functools.partial(_run, items, coarse=coarse))
        blocks = frame.select(pl.struct("feed", "ea").n_unique()).item()
        rows.append((name, f"{len(frame)} items in {blocks} blocks: {seconds:.1f} s, {memory} MB, {len(found)} pairs"))
    show("proposing relaunches", rows)
    _thresholds()


def _run(items: int, *, coarse: bool) -> None:
    propose(_shelf(items, coarse=coarse))


def _shelf(items: int, *, coarse: bool) -> pl.DataFrame:
    aggregates = round(items / (FEEDS * PLACES * ITEMS_A_PLACE))
    frame = make_lookalikes(1, feeds=FEEDS, aggregates=aggregates, slots=PLACES).items
    if coarse:
        return frame.with_columns((pl.col("ea").cast(pl.Int64) % COARSE).cast(pl.String).alias("ea"))
    return frame


def _thresholds() -> None:
    shelves = [make_lookalikes(seed) for seed in SEEDS]
    settings = Successions(ask=min(THRESHOLDS), accept=min(THRESHOLDS))
    found = [propose(shelf.items, settings=settings) for shelf in shelves]
    rows = []
    for least in THRESHOLDS:
        verdicts = [judge(pairs, shelf.truth, least) for pairs, shelf in zip(found, shelves, strict=True)]
        rows.append((f"score ≥ {least:.2f}", f"{_spread(verdicts, 'precision')}   {_spread(verdicts, 'recall')}"))
    show(f"worst and mean of {len(SEEDS)} seeds", rows)


def _spread(verdicts: list[Verdict], share: str) -> str:
    values = [getattr(verdict, share) for verdict in verdicts]
    return f"{share} {min(values):.3f} {np.mean(values):.3f}"


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 100_000)
