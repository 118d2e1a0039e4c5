"""Inflation compiled from markets whose inflation is known: worst and mean of twenty seeds, each part on and off.

Run: python -m tests.bench.planted [SEEDS]
"""

from __future__ import annotations

import sys
import tempfile
import time
from collections import defaultdict
from collections.abc import Callable, Iterable
from pathlib import Path

import numpy as np

from tests.bench.measure import show
from tests.planted.evaluation import (
    EVERYTHING,
    SUCCESSIONS,
    VARIANTS,
    Error,
    compare,
    judge_clearance,
    judge_successions,
    known_levels,
    levels_of,
    make_market,
)
from tests.stages.lookalikes import Verdict

THRESHOLDS = (0.6, 0.7, 0.8, 0.85, 0.9, 0.95, 0.98)
QUANTITY_FALLS = (0.5, 0.6, 0.7, 0.8)
LARGE = 12
KNOWN = "same index, everything known"
MEASURES: dict[str, Callable[[Error], float]] = {
    "mean twelve-month rate": lambda error: error.average,
    "first month to last, a year": lambda error: error.ends,
    "first month to last but two, a year": lambda error: error.last_known,
    "mean twelve-month rate of each aggregate": lambda error: max(error.aggregates, key=abs),
}


def main(seeds: int) -> None:
    """Print the tables."""
    errors: dict[str, list[Error]] = defaultdict(list)
    verdicts: dict[str, list[Verdict]] = defaultdict(list)
    seconds = []
    for seed in range(seeds):
        with tempfile.TemporaryDirectory() as folder:
            seconds.append(_measure(Path(folder) / "market", seed, errors, verdicts))
    for title, measure in MEASURES.items():
        show(
            f"away from the truth, percentage points: {title}",
            [(n, _spread(map(measure, e))) for n, e in errors.items()],
        )
    decided = [
        compiled.average - known.average for compiled, known in zip(errors["everything on"], errors[KNOWN], strict=True)
    ]
    show("what decisions cost: everything on less everything known", [("mean twelve-month rate", _spread(decided))])
    show(f"worst and mean of {seeds} seeds", [(name, _quality(found)) for name, found in verdicts.items()])
    show(
        "making a market and compiling it once", [("seconds", f"mean {np.mean(seconds):.1f}, worst {max(seconds):.1f}")]
    )
    _large(seeds)


def _measure(folder: Path, seed: int, errors: dict[str, list[Error]], verdicts: dict[str, list[Verdict]]) -> float:
    """Compile one market in every variant; seconds of making it and of the first compile."""
    started = time.perf_counter()
    market = make_market(folder, seed)
    workspace = market.compile(EVERYTHING)
    seconds = time.perf_counter() - started
    verdicts["successions accepted"].append(judge_successions(workspace, market.truth))
    verdicts["the same, of all relaunches"].append(judge_successions(workspace, market.truth, all_of=True))
    for least in THRESHOLDS:
        verdicts[f"successions, score ≥ {least:.2f}"].append(judge_successions(workspace, market.truth, least))
    errors[KNOWN].append(compare(known_levels(market), market.truth))
    for name, sections in VARIANTS.items():
        errors[name].append(compare(levels_of(market.compile(sections)), market.truth))
    for fall in QUANTITY_FALLS:
        sections = f"{SUCCESSIONS}[screening]\nclearance = {{ quantity_fall = {fall} }}\n"
        workspace = market.compile(sections)
        errors[f"successions, clearance at quantity_fall {fall}"].append(compare(levels_of(workspace), market.truth))
        verdicts[f"clearance, quantity_fall {fall}"].append(judge_clearance(workspace, market.truth))
    return seconds


def _large(seeds: int) -> None:
    """The same with four times the items, so that chance weighs half as much."""
    errors: dict[str, list[Error]] = defaultdict(list)
    for seed in range(seeds):
        with tempfile.TemporaryDirectory() as folder:
            market = make_market(Path(folder) / "market", seed, LARGE)
            errors[KNOWN].append(compare(known_levels(market), market.truth))
            for name in ("everything on", "both off"):
                errors[name].append(compare(levels_of(market.compile(VARIANTS[name])), market.truth))
    rows = [(name, _spread(error.average for error in found)) for name, found in errors.items()]
    show(f"{LARGE} aggregates instead of 3: mean twelve-month rate", rows)


def _spread(values: Iterable[float]) -> str:
    found = np.array(list(values))
    return f"mean {found.mean():+8.3f}   deviation {found.std():6.3f}   worst {found[np.argmax(np.abs(found))]:+8.3f}"


def _quality(verdicts: list[Verdict]) -> str:
    shares = {"precision": [v.precision for v in verdicts], "recall": [v.recall for v in verdicts]}
    parts = (f"{name} {min(values):.3f} {np.mean(values):.3f}" for name, values in shares.items())
    return f"{'   '.join(parts)}   of {sum(v.true for v in verdicts)}"


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 20)
