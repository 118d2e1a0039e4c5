"""Bad calls through the installed command: one paragraph that says what to do, the right exit status, no traceback."""

import gzip
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import polars as pl
import pytest

from tests.conftest import Run
from tillwright.cli import main

WRONG_CALL, WRONG_DATA = 2, 3
Arguments = Sequence[str | Path]


@dataclass(frozen=True, slots=True)
class Case:
    """A bad call: how it comes about, its exit status, and what its message must name."""

    make: Callable[[Path], Arguments]
    status: int
    named: tuple[str, ...]


def change(path: Path, old: str, new: str) -> None:
    text = path.read_text(encoding="utf-8")
    assert old in text
    path.write_text(text.replace(old, new), encoding="utf-8")


def altered(old: str, new: str) -> Callable[[Path], Arguments]:
    """A compile of the plan with one passage altered."""

    def make(plan: Path) -> Arguments:
        change(plan, old, new)
        return ("compile", plan, "--direct")

    return make


def plain(*options: str) -> Callable[[Path], Arguments]:
    """A compile of the plan with further options."""
    return lambda plan: ("compile", plan, "--direct", *options)


def half_a_parquet(plan: Path) -> Arguments:
    source = plan.parent / "deliveries" / "sales_2024-03.csv"
    whole = plan.parent / "whole.parquet"
    pl.read_csv(source, try_parse_dates=True).write_parquet(whole)
    content = whole.read_bytes()
    (plan.parent / "deliveries" / "sales_2024-03.parquet").write_bytes(content[: len(content) // 2])
    source.unlink()
    change(plan, "deliveries/*.csv", "deliveries/*")
    return ("compile", plan, "--direct")


def wrong_encoding(plan: Path) -> Arguments:
    file = plan.parent / "deliveries" / "sales_2024-02.csv"
    file.write_bytes(file.read_text(encoding="utf-8").replace("MILK", "MÆLK").encode("latin-1"))
    return ("compile", plan, "--direct")


def half_a_gzip(plan: Path) -> Arguments:
    file = plan.parent / "deliveries" / "sales_2024-02.csv"
    content = gzip.compress(file.read_bytes())
    file.with_suffix(".csv.gz").write_bytes(content[: len(content) // 2])
    file.unlink()
    change(plan, "deliveries/*.csv", "deliveries/*")
    return ("compile", plan, "--direct")


def empty_file(plan: Path) -> Arguments:
    (plan.parent / "deliveries" / "sales_2024-02.csv").write_bytes(b"")
    return ("compile", plan, "--direct")


def file_for_a_workspace(plan: Path) -> Arguments:
    (plan.parent / "taken").write_text("a file", encoding="utf-8")
    return ("compile", plan, "--direct", "--work", plan.parent / "taken")


def file_above_a_workspace(plan: Path) -> Arguments:
    (plan.parent / "taken").write_text("a file", encoding="utf-8")
    return ("compile", plan, "--direct", "--work", plan.parent / "taken" / "work")


def no_sale_in_the_periods(plan: Path) -> Arguments:
    change(plan, 'start = "2024-01"', 'start = "2025-01"')
    change(plan, 'reference = "2024-01"', 'reference = "2025-01"')
    return ("compile", plan, "--direct")


COMPILES = {
    "missing plan": Case(
        lambda plan: ("compile", plan.parent / "nonesuch.toml", "--direct"), WRONG_CALL, ("nonesuch.toml",)
    ),
    "folder for a plan": Case(lambda plan: ("compile", plan.parent, "--direct"), WRONG_CALL, ("small",)),
    "not TOML": Case(altered('currency = "crown"', "currency = crown"), WRONG_CALL, ("TOML",)),
    "wrong key": Case(altered("currency", "currancy"), WRONG_CALL, ("plan.currancy", "plan.currency")),
    "wrong column": Case(
        altered('turnover = "value"', 'turnover = "worth"'), WRONG_DATA, ("'worth'", "'value'", "sales_2024-01.csv")
    ),
    "empty glob": Case(
        altered("deliveries/*.csv", "deliveries/*.txt"), WRONG_CALL, ("feed.0.files", "deliveries/*.txt")
    ),
    "Parquet cut in half": Case(half_a_parquet, WRONG_DATA, ("sales_2024-03.parquet", "Parquet", "shop")),
    "gzip cut in half": Case(half_a_gzip, WRONG_DATA, ("sales_2024-02.csv.gz", "shop")),
    "empty file": Case(empty_file, WRONG_DATA, ("sales_2024-02.csv", "empty")),
    "CSV in the wrong encoding": Case(wrong_encoding, WRONG_DATA, ("sales_2024-02.csv", "utf-8", "encoding")),
    "unknown method in the plan": Case(
        altered("window = 3", 'window = 3\nmethod = "geks"'), WRONG_CALL, ("index.method", "geks-tornqvist")
    ),
    "--through is no month": Case(plain("--through", "2024-13"), WRONG_CALL, ("--through", "2024-13", "2024-03")),
    "--through before the start": Case(plain("--through", "2023-12"), WRONG_CALL, ("--through", "2024-01")),
    "file for a workspace": Case(file_for_a_workspace, WRONG_DATA, ("taken", "--work")),
    "file above a workspace": Case(file_above_a_workspace, WRONG_DATA, ("taken", "--work")),
    "memory that is none": Case(plain("--memory", "lots"), WRONG_CALL, ("--memory", "lots")),
    "no sale in the periods": Case(no_sale_in_the_periods, WRONG_DATA, ("2025-01",)),
}

PANEL = {"period": [1, 1, 2, 2], "product": ["a", "b"] * 2, "price": [1.0, 2.0, 1.1, 2.1], "quantity": [3, 4, 5, 6]}


def indexing(
    *options: str, ending: str = ".parquet", out: str = "index.csv", **columns: object
) -> Callable[[Path], Arguments]:
    """An index over a panel with some columns exchanged."""

    def make(plan: Path) -> Arguments:
        frame = pl.DataFrame({**PANEL, **columns}, strict=False)
        panel = plan.parent / f"panel{ending}"
        if ending == ".csv":
            frame.write_csv(panel)
        else:
            frame.write_parquet(panel)
        method = () if "--method" in options else ("--method", "geks-tornqvist")
        return ("index", panel, *method, "--out", plan.parent / out, *options)

    return make


def half_a_panel(plan: Path) -> Arguments:
    arguments = indexing()(plan)
    panel = plan.parent / "panel.parquet"
    panel.write_bytes(panel.read_bytes()[:-40])
    return arguments


def panel_in_latin_1(plan: Path) -> Arguments:
    arguments = indexing(ending=".csv")(plan)
    panel = plan.parent / "panel.csv"
    panel.write_bytes(panel.read_text(encoding="utf-8").replace("a", "å").encode("latin-1"))
    return arguments


APART: dict[str, Any] = {"period": ["2024-01", "2024-02", "2024-03", "2024-04"], "product": ["a", "a", "b", "b"]}

INDEXES = {
    "missing panel": Case(
        lambda plan: ("index", plan.parent / "nonesuch.csv", "--method", "jevons", "--out", "x.csv"),
        WRONG_CALL,
        ("nonesuch.csv",),
    ),
    "panel cut off": Case(half_a_panel, WRONG_DATA, ("panel.parquet", "Parquet")),
    "panel in the wrong encoding": Case(panel_in_latin_1, WRONG_DATA, ("panel.csv",)),
    "wrong price column": Case(indexing("--price", "cost"), WRONG_CALL, ("'cost'", "'price'", "'quantity'")),
    "wrong by column": Case(indexing("--by", "region"), WRONG_CALL, ("'region'", "'product'")),
    "by column twice": Case(indexing("--by", "product", "--by", "product"), WRONG_CALL, ("product",)),
    "negative price": Case(indexing(price=[1.0, -2.0, 1.1, 2.1]), WRONG_DATA, ("'price'", "product b", "-2.0")),
    "price that is text": Case(indexing(ending=".csv", price=["1", "n/a", "1", "2"]), WRONG_DATA, ("'price'",)),
    "duplicate rows": Case(indexing(product=["a", "a", "a", "b"]), WRONG_DATA, ("more than once", "product a")),
    "unconnected window": Case(indexing(**APART), WRONG_DATA, ("(2024-01, 2024-02 | 2024-03, 2024-04)",)),
    "months as text": Case(
        indexing(period=["Mar 2024", "Mar 2024", "Apr 2024", "Apr 2024"]), WRONG_DATA, ("period", "Mar 2024")
    ),
    "unknown ending": Case(indexing(out="index.xlsx"), WRONG_CALL, ("index.xlsx", ".parquet", ".csv", ".json")),
    "file above the result": Case(indexing(out="panel.parquet/index.csv"), WRONG_DATA, ("index.csv",)),
}

USAGE = {
    "unknown option": Case(plain("--fast"), WRONG_CALL, ("--fast",)),
    "unknown command": Case(lambda _: ("compil",), WRONG_CALL, ("compil",)),
    "unknown method": Case(indexing("--method", "geks"), WRONG_CALL, ("--method", "geks", "geks-tornqvist")),
    "unknown splice": Case(indexing("--splice", "none"), WRONG_CALL, ("--splice", "movement")),
    "window of one": Case(indexing("--window", "1"), WRONG_CALL, ("--window", "2")),
    "no plan given": Case(lambda _: ("compile",), WRONG_CALL, ("PLAN",)),
}


# These run as processes of their own, the others through the function that the installed command calls.
PROCESSES = (
    "missing plan",
    "wrong key",
    "wrong column",
    "empty glob",
    "Parquet cut in half",
    "CSV in the wrong encoding",
    "--through is no month",
    "file for a workspace",
    "wrong price column",
    "negative price",
    "duplicate rows",
    "unconnected window",
    "unknown ending",
    "unknown option",
    "unknown method",
)
CASES = COMPILES | INDEXES | USAGE


def check(name: str, status: int, stdout: str, stderr: str) -> None:
    case = CASES[name]
    assert status == case.status, stderr
    assert all(word in stderr for word in case.named), stderr
    assert "Traceback" not in stderr
    assert "This is a defect" not in stderr
    assert stdout == ""
    assert len(stderr) < 1200
    paragraphs = stderr.strip().split("\n\n")
    if name in USAGE:
        assert paragraphs[0].startswith("Usage: ")
        assert paragraphs[1].startswith("Error: ")
    assert len(paragraphs) == (2 if name in USAGE else 1)


@pytest.mark.parametrize("name", PROCESSES)
def test_a_bad_call_gets_one_paragraph_and_its_exit_status(name: str, small_plan: Path, tillwright: Run) -> None:
    answer = tillwright(*CASES[name].make(small_plan))
    check(name, answer.returncode, answer.stdout, answer.stderr)


@pytest.mark.parametrize("name", [name for name in CASES if name not in PROCESSES])
def test_further_bad_calls_get_the_same(
    name: str, small_plan: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    arguments = [str(argument) for argument in CASES[name].make(small_plan)]
    monkeypatch.setattr("sys.argv", ["tillwright", *arguments])
    with pytest.raises(SystemExit) as left:
        main()
    told = capsys.readouterr()
    assert isinstance(left.value.code, int)
    check(name, left.value.code, told.out, told.err)


def test_all_problems_of_a_plan_are_told_together_and_nothing_is_written(small_plan: Path, tillwright: Run) -> None:
    change(small_plan, 'start = "2024-01"', 'start = "January"')
    change(small_plan, "deliveries/*.csv", "deliveries/*.txt")
    change(small_plan, "headings.csv", "nonesuch.csv")
    answer = tillwright("compile", small_plan, "--direct")
    assert answer.returncode == WRONG_CALL
    assert all(key in answer.stderr for key in ("3 problems", "plan.start", "feed.0.files", "classification.headings"))
    assert not (small_plan.parent / "work").exists()


def test_every_unreadable_delivery_is_told_and_the_sound_ones_are_taken_in(small_plan: Path, tillwright: Run) -> None:
    for month in ("2024-02", "2024-04"):
        (small_plan.parent / "deliveries" / f"sales_{month}.csv").write_bytes(b"\xff\xfe\x00" + month.encode())
    answer = tillwright("compile", small_plan, "--direct")
    assert answer.returncode == WRONG_DATA
    assert all(name in answer.stderr for name in ("2 deliveries", "sales_2024-02.csv", "sales_2024-04.csv"))
    assert len(list((small_plan.parent / "work" / "tables" / "sales").glob("*.parquet"))) == 3


def test_a_held_gate_ends_with_1_after_a_finished_compile(small_plan: Path, tillwright: Run) -> None:
    text = small_plan.read_text(encoding="utf-8")
    small_plan.write_text(text[: text.index("[[answer]]")], encoding="utf-8")
    answer = tillwright("compile", small_plan, "--direct")
    assert answer.returncode == 1
    assert "HELD" in answer.stdout
    assert answer.stderr == ""
    assert (small_plan.parent / "work" / "tables" / "headings.csv").is_file()
