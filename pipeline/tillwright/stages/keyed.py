"""Keyed work: what is finished is not done again.

The key of a piece of work is a hash of its name, of the code, of the plan's sections it depends on,
and of the bytes it reads.  Work whose key is in the ledger as finished, and whose output files hold
the bytes recorded there, is left alone.  Keys rest on bytes, not on the steps before, so a change
that does not alter a table stops there.
"""

from __future__ import annotations

import hashlib
import json
import time
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from functools import cache
from pathlib import Path

from tillwright.errors import UnreadableFile
from tillwright.queries import load_queries
from tillwright.stages.context import Context
from tillwright.store.deliveries import hash_file
from tillwright.store.ledger import Ledger, Stamp


@dataclass(frozen=True, slots=True)
class StepResult:
    """What a step did: `rows` it made, 0 when it was found `unchanged`."""

    name: str
    rows: int
    seconds: float
    unchanged: bool


@dataclass(frozen=True, slots=True)
class Run:
    """A compile under way: what it works on, where it is recorded, and the deliveries found unreadable so far."""

    context: Context
    ledger: Ledger
    number: int
    unreadable: list[UnreadableFile] = field(default_factory=list)


@dataclass(frozen=True, slots=True)
class Work:
    """A piece of work: what its result depends on, the files it writes, and the call that does it."""

    name: str
    inputs: Sequence[str]
    outputs: Sequence[Path]
    do: Callable[[], int]


@cache
def code_version() -> str:
    """Hash of the package's own source and SQL."""
    digest = hashlib.sha256()
    for path in sorted(Path(__file__).parents[1].rglob("*.py")):
        digest.update(path.read_bytes())
    for query in load_queries().values():
        digest.update(query.text.encode())
    return digest.hexdigest()[:16]


def perform(run: Run, work: Work) -> StepResult:
    """Do a piece of work unless the ledger and the files say that it is done; record it either way."""
    started = time.monotonic()
    key = hashlib.sha256(json.dumps([work.name, code_version(), *work.inputs]).encode()).hexdigest()
    root = run.context.workspace.root
    recorded = run.ledger.finished_step(work.name, key)
    if recorded is not None and _intact(root, work.outputs, recorded):
        seconds = time.monotonic() - started
        run.ledger.record_step(run.number, work.name, key, "unchanged", rows=0, seconds=seconds, outputs=recorded)
        return StepResult(work.name, 0, seconds, unchanged=True)
    try:
        rows = work.do()
    except BaseException:
        seconds = time.monotonic() - started
        run.ledger.record_step(run.number, work.name, key, "failed", rows=0, seconds=seconds, outputs={})
        raise
    outputs = {path.relative_to(root).as_posix(): _stamp(path) for path in work.outputs}
    seconds = time.monotonic() - started
    run.ledger.record_step(run.number, work.name, key, "finished", rows=rows, seconds=seconds, outputs=outputs)
    return StepResult(work.name, rows, seconds, unchanged=False)


def _stamp(path: Path) -> Stamp:
    status = path.stat()
    return Stamp(status.st_size, status.st_mtime_ns, hash_file(path))


def _intact(root: Path, outputs: Iterable[Path], recorded: Mapping[str, Stamp]) -> bool:
    for path in outputs:
        stamp = recorded.get(path.relative_to(root).as_posix())
        if stamp is None or not path.is_file():
            return False
        status = path.stat()
        if (status.st_size, status.st_mtime_ns) != (stamp.bytes, stamp.modified) and hash_file(path) != stamp.sha256:
            return False
    return True
