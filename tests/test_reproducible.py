"""The same inputs give the same bytes, whatever happened on the way, and nothing is done twice."""

import os
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
import polars as pl
import pytest

from tests.conftest import Run
from tillwright.stages.compiling import Compiled, Request, carry_out
from tillwright.store.ledger import Ledger

PATIENCE = 60.0
# Levels and changes are of order 100; matrix products over fewer windows may sum in another order.
SAME_FIGURE = 1e-10
# Waits in front of the stage "indexes", after all that comes before it is done.
DRIVER = """
import sys, time
from pathlib import Path
import tillwright.stages.sequence as sequence
from tillwright.stages.compiling import Request, carry_out

def halted(context):
    Path(sys.argv[3]).touch()
    time.sleep(600)

sequence.compile_indexes = halted
carry_out(Request(Path(sys.argv[1]), Path(sys.argv[2])))
"""
SINGLE = """
import sys
from pathlib import Path
from tillwright.stages.compiling import Request, carry_out
carry_out(Request(Path(sys.argv[1]), Path(sys.argv[2])))
"""


def content(work: Path) -> dict[str, bytes]:
    """Every file under `tables/` by name; hidden ones are pieces that a kill may leave, never tables."""
    tables = work / "tables"
    files = [path for path in tables.rglob("*") if path.is_file() and not path.name.startswith(".")]
    return {path.relative_to(tables).as_posix(): path.read_bytes() for path in files}


def steps(work: Path, run: int) -> dict[str, str]:
    """State of every step of a run."""
    with Ledger(work / "ledger.duckdb") as ledger:
        return dict(ledger.steps_of(run))


def run_again(work: Path, run: int) -> set[str]:
    """Steps that a run did anew."""
    return {step for step, state in steps(work, run).items() if state != "unchanged"}


def kill_once(process: subprocess.Popen[bytes], reached: Callable[[], bool]) -> None:
    """SIGKILL the process as soon as the moment is reached; it must not have ended by itself."""
    deadline = time.monotonic() + PATIENCE
    while not reached():
        assert process.poll() is None, "the process ended before the moment to kill it"
        assert time.monotonic() < deadline, "the moment to kill the process never came"
        time.sleep(0.01)
    process.send_signal(signal.SIGKILL)
    assert process.wait() == -signal.SIGKILL


def start(*command: str | Path) -> subprocess.Popen[bytes]:
    quiet = subprocess.DEVNULL
    return subprocess.Popen([str(part) for part in command], stdout=quiet, stderr=quiet)


@pytest.fixture
def compiled_copy(sample_folder: Path, sample: Compiled, tmp_path: Path) -> Path:
    """The sample with a finished workspace beside its plan, both free to be changed."""
    copy = tmp_path / "sample"
    shutil.copytree(sample_folder, copy, ignore=shutil.ignore_patterns("work"))
    shutil.copytree(sample.context.workspace.root, copy / "work")
    return copy


def change(path: Path, old: str, new: str) -> None:
    text = path.read_text(encoding="utf-8")
    assert text.count(old) == 1
    path.write_text(text.replace(old, new), encoding="utf-8")


def test_a_compile_killed_in_intake_and_in_indexes_ends_in_the_same_bytes(
    sample: Compiled, sample_folder: Path, tmp_path: Path
) -> None:
    plan, work, marker = sample_folder / "plan.toml", tmp_path / "work", tmp_path / "reached"
    command = Path(sys.executable).with_name("tillwright")
    sales = work / "tables" / "sales"
    process = start(command, "compile", plan, "--work", work, "--direct")
    kill_once(process, lambda: sales.is_dir() and len(list(sales.glob("*.parquet"))) >= 40)
    left = len(list(sales.glob("*.parquet")))
    assert not (work / "tables" / "deliveries.parquet").exists()

    kill_once(start(sys.executable, "-c", DRIVER, plan, work, marker), marker.exists)
    assert (work / "tables" / "screened.parquet").exists()
    assert not (work / "tables" / "ea_indexes.parquet").exists()
    second = steps(work, 2)
    # A delivery whose sums were written but not yet recorded when the kill came is taken in again.
    unchanged = [step for step, state in second.items() if step.startswith("intake") and state == "unchanged"]
    assert left - 1 <= len(unchanged) <= left

    carry_out(Request(plan, work))
    assert run_again(work, 3) == {"indexes", "effects", "aggregation"}
    assert content(work) == content(sample.context.workspace.root)


def test_two_runs_write_the_same_bytes_on_one_thread_and_on_several(small_plan: Path, tmp_path: Path) -> None:
    carry_out(Request(small_plan, tmp_path / "one"))
    run = [sys.executable, "-c", SINGLE, str(small_plan), str(tmp_path / "two")]
    environment = {**os.environ, "POLARS_MAX_THREADS": "1", "OMP_NUM_THREADS": "1", "OPENBLAS_NUM_THREADS": "1"}
    subprocess.run(run, check=True, env=environment)
    assert content(tmp_path / "one") == content(tmp_path / "two")


def test_a_second_compile_runs_no_step(small_plan: Path) -> None:
    work = small_plan.parent / "work"
    carry_out(Request(small_plan))
    before = {path: path.stat().st_mtime_ns for path in (work / "tables").rglob("*")}
    again = carry_out(Request(small_plan))
    assert all(step.unchanged for step in again.steps)
    assert run_again(work, 2) == set()
    assert {path: path.stat().st_mtime_ns for path in (work / "tables").rglob("*")} == before


def test_a_table_that_was_damaged_is_made_again(small_plan: Path) -> None:
    work = small_plan.parent / "work"
    carry_out(Request(small_plan))
    good = content(work)
    (work / "tables" / "panel.parquet").write_bytes(b"damaged")
    next((work / "tables" / "sales").iterdir()).unlink()
    carry_out(Request(small_plan))
    assert content(work) == good


@pytest.mark.parametrize(
    ("old", "new", "expected"),
    [
        # The answers stand in `gates`, and those to failed indexes in `failures`, which `indexes` writes.
        ('by = "price desk"\nwhy = "Outlet 140', 'by = "head of prices"\nwhy = "Outlet 140', {"gates", "indexes"}),
        (
            'heading = "01.1.4.E"\nmethod = "dutot"',
            'heading = "01.1.4.E"\nmethod = "jevons"',
            {"indexes", "effects", "aggregation"},
        ),
        ("rounding = 1", "rounding = 2", {"aggregation"}),
        ("extreme = [0.25, 4.0]", "extreme = [0.2, 5.0]", {"screening", "effects"}),
        ("link_month = 12", "link_month = 12\n", set()),
    ],
)
def test_a_change_of_the_plan_reruns_only_what_depends_on_it(
    compiled_copy: Path, old: str, new: str, expected: set[str]
) -> None:
    change(compiled_copy / "plan.toml", old, new)
    carry_out(Request(compiled_copy / "plan.toml"))
    assert run_again(compiled_copy / "work", 2) == expected


def test_a_corrected_file_is_taken_in_alone(small_plan: Path) -> None:
    carry_out(Request(small_plan))
    change(small_plan.parent / "deliveries" / "sales_2024-03.csv", "2024-03-15,0,MILK,12,", "2024-03-15,0,MILK,13,")
    carry_out(Request(small_plan))
    again = run_again(small_plan.parent / "work", 2)
    assert len([step for step in again if step.startswith("intake")]) == 1
    assert {"deliveries", "panel", "screening", "indexes", "aggregation"} <= again


def test_a_compile_through_an_earlier_month_has_the_figures_of_the_full_one(
    compiled_copy: Path, sample: Compiled
) -> None:
    # Windows spliced onto the published series never revise it, nor do chained formulas; June 2024 lies past the
    # first window of 25 months, which is published as it stands.
    part = carry_out(Request(compiled_copy / "plan.toml", through="2024-06")).context.workspace
    full = sample.context.workspace
    for table, key, figures in (
        ("ea_indexes", ["ea", "stratum", "period"], ["level", "movement", "matched_share"]),
        ("headings", ["heading", "period"], ["index", "change_period", "change_year", "contribution_year", "weight"]),
    ):
        some, whole = part.read(table), full.read(table)
        assert some["period"].max() == pl.Series(["2024-06-01"]).str.to_date().item()
        both = some.join(whole, on=key, how="left", validate="1:1")
        assert some.height == whole.filter(pl.col("period") <= some["period"].max()).height
        for figure in figures:
            found, expected = both[figure].to_numpy(), both[f"{figure}_right"].to_numpy()
            np.testing.assert_allclose(found, expected, rtol=0, atol=SAME_FIGURE, err_msg=figure)


def test_a_second_compile_at_the_same_time_is_refused(small_plan: Path, tmp_path: Path, tillwright: Run) -> None:
    marker, work = tmp_path / "reached", tmp_path / "work"
    process = start(sys.executable, "-c", DRIVER, small_plan, work, marker)
    try:
        deadline = time.monotonic() + PATIENCE
        while not marker.exists() and time.monotonic() < deadline:
            time.sleep(0.02)
        second = tillwright("compile", small_plan, "--work", work, "--direct")
    finally:
        process.kill()
        process.wait()
    assert second.returncode == 3
    assert "in use by another compile" in second.stderr
    assert "--work" in second.stderr
    assert "Traceback" not in second.stderr
