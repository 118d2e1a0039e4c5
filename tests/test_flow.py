"""The compile under Prefect: embedded, and on one real server; what is recorded, and what a failure leaves."""

import hashlib
import json
import os
import signal
import socket
import sqlite3
import subprocess
import sys
import time
import urllib.request
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from tests.conftest import write_small
from tests.prefect_server import PATIENCE, clean_environment, running_server
from tillwright.stages.compiling import Request, carry_out
from tillwright.store.ledger import Ledger

TILLWRIGHT = Path(sys.executable).with_name("tillwright")
STEPS = (
    "intake shop 1",
    "deliveries",
    "gates",
    "items",
    "successions",
    "products",
    "panel",
    "churn",
    "screening",
    "indexes",
    "effects",
    "aggregation",
)


def compile_plan(plan: Path, **more: str) -> subprocess.CompletedProcess[str]:
    command = [str(TILLWRIGHT), "compile", str(plan)]
    return subprocess.run(
        command, env=clean_environment(**more), capture_output=True, text=True, check=False, timeout=PATIENCE
    )


def task_states(plan: Path) -> dict[str, str]:
    """State of every task run in Prefect's own database, by name; the database outlives the command."""
    query = "select name, state_type from task_run order by start_time"
    with sqlite3.connect(plan.parent / "work" / "prefect" / "prefect.db") as connection:
        return {name.rsplit("-", 1)[0]: state for name, state in connection.execute(query)}


def ledger_states(plan: Path) -> dict[str, str]:
    with Ledger(plan.parent / "work" / "ledger.duckdb") as ledger:
        return dict(ledger.steps_of(1))


def table_bytes(plan: Path) -> dict[str, str]:
    tables = plan.parent / "work" / "tables"
    files = sorted(path for path in tables.rglob("*") if path.is_file())
    return {path.relative_to(tables).as_posix(): hashlib.sha256(path.read_bytes()).hexdigest() for path in files}


@pytest.fixture(scope="module")
def embedded(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, subprocess.CompletedProcess[str]]:
    plan = write_small(tmp_path_factory.mktemp("embedded") / "small")
    return plan, compile_plan(plan)


def test_embedded_run_says_no_more_than_the_summary(embedded: tuple[Path, subprocess.CompletedProcess[str]]) -> None:
    plan, done = embedded
    assert done.returncode == 0
    assert done.stderr == ""
    assert "prefect" not in done.stdout.lower().replace(str(plan.parent).lower(), "")


def test_embedded_run_records_every_step_in_both_places(
    embedded: tuple[Path, subprocess.CompletedProcess[str]],
) -> None:
    plan, _ = embedded
    assert set(task_states(plan)) == set(STEPS)
    assert set(task_states(plan).values()) == {"COMPLETED"}
    recorded = ledger_states(plan)
    assert set(STEPS[1:]) < set(recorded)
    assert set(recorded.values()) == {"finished"}


def test_embedded_and_direct_runs_make_the_same_bytes(
    embedded: tuple[Path, subprocess.CompletedProcess[str]], tmp_path: Path
) -> None:
    plan, _ = embedded
    direct = write_small(tmp_path / "small")
    carry_out(Request(direct))
    assert table_bytes(plan) == table_bytes(direct)


def test_failure_comes_out_as_its_message_and_is_recorded(small_plan: Path) -> None:
    broken = small_plan.parent / "deliveries" / "sales_2024-03.csv"
    broken.write_bytes("day,item,shelf,units,value\n2024-03-15,0,Käse,1,1\n".encode("latin-1"))
    done = compile_plan(small_plan)
    assert done.returncode == 3
    assert "sales_2024-03.csv" in done.stderr
    assert "Traceback" not in done.stderr
    assert done.stdout == ""
    assert task_states(small_plan) == {"intake shop 1": "COMPLETED", "deliveries": "FAILED"}


def test_killed_run_leaves_no_server_and_goes_on_to_the_same_bytes(small_plan: Path, tmp_path: Path) -> None:
    untouched = write_small(tmp_path / "untouched")
    carry_out(Request(untouched))
    work = small_plan.parent / "work"
    process = subprocess.Popen(
        [str(TILLWRIGHT), "compile", str(small_plan)],
        env=clean_environment(),
        stdout=subprocess.DEVNULL,
        stderr=subprocess.DEVNULL,
        start_new_session=True,
    )
    deadline = time.monotonic() + PATIENCE
    while not any((work / "tables").rglob("*.parquet")) and time.monotonic() < deadline and process.poll() is None:
        time.sleep(0.002)
    os.kill(process.pid, signal.SIGKILL)
    process.wait()
    with pytest.raises(ProcessLookupError):
        os.killpg(process.pid, 0)
    assert compile_plan(small_plan).returncode == 0
    assert table_bytes(small_plan) == table_bytes(untouched)


@pytest.fixture(scope="module")
def server(tmp_path_factory: pytest.TempPathFactory) -> Iterator[str]:
    """The API address of a Prefect server of its own on a free port."""
    with running_server(tmp_path_factory.mktemp("server")) as url:
        yield url


def ask(url: str, question: dict[str, Any]) -> Any:
    body = json.dumps(question).encode()
    request = urllib.request.Request(url, body, {"Content-Type": "application/json"})
    with urllib.request.urlopen(request, timeout=30) as answer:
        return json.load(answer)


@pytest.mark.server
def test_run_on_a_real_server_is_recorded_there(small_plan: Path, server: str) -> None:
    done = compile_plan(small_plan, PREFECT_API_URL=server)
    assert (done.returncode, done.stderr) == (0, "")
    (run,) = ask(f"{server}/flow_runs/filter", {})
    assert run["state_type"] == "COMPLETED"
    tasks = ask(f"{server}/task_runs/filter", {"flow_runs": {"id": {"any_": [run["id"]]}}})
    assert {task["name"].rsplit("-", 1)[0] for task in tasks} == set(STEPS)
    assert {task["state_type"] for task in tasks} == {"COMPLETED"}
    assert not (small_plan.parent / "work" / "prefect" / "prefect.db").exists()


def test_server_that_does_not_answer_is_told(small_plan: Path) -> None:
    with socket.create_server(("127.0.0.1", 0)) as free:
        port = free.getsockname()[1]
    done = compile_plan(small_plan, PREFECT_API_URL=f"http://127.0.0.1:{port}/api")
    assert done.returncode == 3
    assert "Traceback" not in done.stderr
    assert f"127.0.0.1:{port}" in done.stderr
