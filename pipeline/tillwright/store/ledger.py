"""The ledger: arrivals of files, runs, and the steps that are finished.

It is one DuckDB file, held open by the compile that uses it, which keeps a second one out.
"""

from __future__ import annotations

import json
import re
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Self

import duckdb

from tillwright.errors import DataError, WorkspaceBusy
from tillwright.store.decisions import Decision, now

_SCHEMA = """
create table if not exists arrivals (
    feed text not null, file text not null, sha256 text not null, arrival bigint not null,
    bytes bigint not null, modified bigint not null, received timestamp not null,
    primary key (feed, file, sha256)
);
create table if not exists runs (
    run bigint primary key, started timestamp not null, finished timestamp, plan text not null,
    plan_sha256 text not null, code text not null, orchestrator text not null, outcome text
);
create table if not exists steps (
    run bigint not null, step text not null, key text not null, state text not null,
    rows bigint, seconds double, outputs text, finished timestamp not null
);
create table if not exists decisions (
    feed text not null, old_item text not null, new_item text not null, verdict text not null,
    decided_by text not null, why text not null, decided timestamp not null
);
"""


@dataclass(frozen=True, slots=True)
class Arrival:
    """One file as it was received: its bytes are told by the hash."""

    feed: str
    file: str
    sha256: str
    arrival: int
    bytes: int
    modified: int


@dataclass(frozen=True, slots=True)
class Stamp:
    """What tells an output file unchanged: size, time of change, hash of its bytes."""

    bytes: int
    modified: int
    sha256: str


class Ledger:
    """An open ledger. Use it as a context manager; closing it lets the next compile in."""

    def __init__(self, path: Path) -> None:
        try:
            path.parent.mkdir(parents=True, exist_ok=True)
            self._connection = duckdb.connect(str(path))
            self._connection.execute(_SCHEMA)
        except duckdb.IOException as error:
            holder = re.search(r"PID (\d+)", str(error))
            if "lock" in str(error).lower():
                detail = f"process {holder[1]}" if holder else "its ledger is locked"
                raise WorkspaceBusy(str(path.parent), detail) from None
            raise DataError(f"The ledger {path} cannot be opened: {error}") from None
        except OSError as error:
            raise DataError(
                f"The workspace {path.parent} cannot be written ({error.strerror}). Give another folder with --work."
            ) from None

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self._connection.close()

    def arrivals(self, feed: str) -> list[Arrival]:
        """Every file ever received of a feed, in the order of arrival."""
        rows = self._connection.execute(
            "select feed, file, sha256, arrival, bytes, modified from arrivals where feed = $feed order by arrival",
            {"feed": feed},
        ).fetchall()
        return [Arrival(*row) for row in rows]

    def receive(self, arrivals: Iterable[Arrival]) -> None:
        """Record files received; a file already known by name and hash only gets its new time of change."""
        for arrival in arrivals:
            self._connection.execute(
                "insert into arrivals values ($feed, $file, $sha256, $arrival, $bytes, $modified, $now) "
                "on conflict do update set modified = excluded.modified",
                {
                    "feed": arrival.feed,
                    "file": arrival.file,
                    "sha256": arrival.sha256,
                    "arrival": arrival.arrival,
                    "bytes": arrival.bytes,
                    "modified": arrival.modified,
                    "now": now(),
                },
            )

    def start_run(self, *, plan: str, plan_sha256: str, code: str, orchestrator: str) -> int:
        """Number of a new run."""
        row = self._connection.execute("select coalesce(max(run), 0) + 1 from runs").fetchone()
        run = int(row[0]) if row else 1
        self._connection.execute(
            "insert into runs values ($run, $now, null, $plan, $sha, $code, $orchestrator, null)",
            {"run": run, "now": now(), "plan": plan, "sha": plan_sha256, "code": code, "orchestrator": orchestrator},
        )
        return run

    def end_run(self, run: int, outcome: str) -> None:
        """Record how a run ended."""
        self._connection.execute(
            "update runs set finished = $now, outcome = $outcome where run = $run",
            {"now": now(), "outcome": outcome, "run": run},
        )

    def finished_step(self, step: str, key: str) -> Mapping[str, Stamp] | None:
        """Output files of the last finished step of that name and key; None if there is none."""
        row = self._connection.execute(
            "select outputs from steps where step = $step and key = $key and state = 'finished' "
            "order by finished desc limit 1",
            {"step": step, "key": key},
        ).fetchone()
        if row is None:
            return None
        return {file: Stamp(*stamp) for file, stamp in json.loads(row[0]).items()}

    def record_step(
        self, run: int, step: str, key: str, state: str, *, rows: int, seconds: float, outputs: Mapping[str, Stamp]
    ) -> None:
        """Record that a step was finished, found unchanged, or failed."""
        stamps = {file: (stamp.bytes, stamp.modified, stamp.sha256) for file, stamp in outputs.items()}
        self._connection.execute(
            "insert into steps values ($run, $step, $key, $state, $rows, $seconds, $outputs, $now)",
            {
                "run": run,
                "step": step,
                "key": key,
                "state": state,
                "rows": rows,
                "seconds": seconds,
                "outputs": json.dumps(stamps),
                "now": now(),
            },
        )

    def decisions(self) -> list[Decision]:
        """Every decision on a succession, in the order in which they were taken."""
        rows = self._connection.execute(
            "select feed, old_item, new_item, verdict, decided_by, why, decided from decisions order by decided, rowid"
        ).fetchall()
        return [Decision(*row) for row in rows]

    def decide(self, decisions: Iterable[Decision]) -> None:
        """Record decisions; none is ever changed, the last on a pair stands."""
        for one in decisions:
            self._connection.execute(
                "insert into decisions values ($feed, $old, $new, $verdict, $by, $why, $at)",
                {
                    "feed": one.feed,
                    "old": one.old_item,
                    "new": one.new_item,
                    "verdict": one.verdict,
                    "by": one.by,
                    "why": one.why,
                    "at": one.at,
                },
            )

    def steps_of(self, run: int) -> list[tuple[str, str]]:
        """Name and state of every step of a run, in order."""
        return self._connection.execute(
            "select step, state from steps where run = $run order by finished, rowid", {"run": run}
        ).fetchall()
