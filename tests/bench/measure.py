"""How benchmarks measure: medians of interleaved runs, and peak memory in a process of its own."""

from __future__ import annotations

import multiprocessing
import os
import statistics
import time
from collections.abc import Callable, Mapping
from pathlib import Path


def interleave(calls: Mapping[str, Callable[[], object]], rounds: int) -> dict[str, float]:
    """Median wall time in seconds of each call, the calls taking turns so that noise falls on all."""
    seconds: dict[str, list[float]] = {name: [] for name in calls}
    for _ in range(rounds):
        for name, call in calls.items():
            started = time.perf_counter()
            call()
            seconds[name].append(time.perf_counter() - started)
    return {name: statistics.median(values) for name, values in seconds.items()}


def peak_memory(call: Callable[[], object]) -> int:
    """Peak resident memory in MB of a call, in a fresh process."""
    context = multiprocessing.get_context("spawn")
    receiver, sender = context.Pipe(duplex=False)
    process = context.Process(target=_measured, args=(call, sender))
    process.start()
    peak = int(receiver.recv())
    process.join()
    return peak


def _measured(call: Callable[[], object], sender: object) -> None:
    call()
    # Not getrusage: its figure starts from the parent's, which a new process takes over.
    status = Path("/proc/self/status").read_text(encoding="ascii")
    kilobytes = int(status.split("VmHWM:")[1].split()[0])
    sender.send(kilobytes // 1024)  # type: ignore[attr-defined]


def show(title: str, rows: list[tuple[str, str]]) -> None:
    """Print a titled list of figures."""
    print(f"\n{title} ({os.cpu_count()} cores)")
    width = max(len(name) for name, _ in rows)
    for name, figure in rows:
        print(f"  {name:{width}}  {figure}")
