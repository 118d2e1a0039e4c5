"""The commands: help, summaries as text and as JSON, exit status."""

import json
import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

import click
import polars as pl
import pytest
from click.testing import CliRunner, Result

from tests.conftest import Run
from tillwright import __version__
from tillwright.cli import commands
from tillwright.report.terminal import round_half_up
from tillwright.stages.compiling import Compiled

Command = Callable[..., Result]


@pytest.fixture
def command() -> Command:
    """A command in this process, without Prefect; its return value is the exit status."""

    def run(*arguments: str | Path) -> Result:
        given = [str(argument) for argument in arguments]
        return CliRunner().invoke(commands, given, standalone_mode=False, catch_exceptions=False)

    return run


@pytest.fixture
def held_plan(small_plan: Path) -> Path:
    """The small plan without its answer."""
    text = small_plan.read_text(encoding="utf-8")
    small_plan.write_text(text[: text.index("[[answer]]")], encoding="utf-8")
    return small_plan


@pytest.mark.parametrize("name", sorted(commands.commands))
def test_help_of_every_command_shows_an_example_of_it(name: str) -> None:
    shown = CliRunner().invoke(commands, [name, "--help"])
    assert shown.exit_code == 0
    assert "Example:" in shown.output
    example = shown.output.split("Example:")[1].strip().splitlines()[0]
    assert example.strip().startswith(f"tillwright {name} ")
    assert "Traceback" not in shown.output


@pytest.mark.parametrize("name", sorted(commands.commands))
def test_the_example_in_the_help_can_be_parsed(name: str) -> None:
    shown = CliRunner().invoke(commands, [name, "--help"]).output
    words = shown.split("Example:")[1].split("Options:")[0].split()[2:]
    told = commands.commands[name]
    assert isinstance(told.make_context(name, words), click.Context)


def test_the_commands_of_this_stage_are_there() -> None:
    assert {"compile", "intake", "index"} <= set(commands.commands)


def test_general_help_lists_the_commands_and_the_exit_status(tillwright: Run) -> None:
    shown = tillwright("--help")
    assert shown.returncode == 0
    assert all(word in shown.stdout for word in ("compile", "intake", "index", "0 done", "1 done but", "2 the plan"))
    assert shown.stderr == ""


def test_version_is_that_of_the_package() -> None:
    assert __version__ in CliRunner().invoke(commands, ["--version"]).output


def test_a_compile_with_every_gate_answered_ends_with_0(command: Command, small_plan: Path) -> None:
    done = command("compile", small_plan, "--direct")
    assert done.return_value == 0
    assert "nothing is held" in done.stdout
    assert (small_plan.parent / "work" / "tables" / "headings.csv").is_file()


def test_a_held_gate_ends_with_1_and_the_compile_is_still_done(command: Command, held_plan: Path) -> None:
    done = command("compile", held_plan, "--direct")
    assert done.return_value == 1
    assert "the release is held" in done.stdout
    assert "HELD" in done.stdout
    assert (held_plan.parent / "work" / "tables" / "headings.parquet").is_file()
    told = json.loads(command("compile", held_plan, "--direct", "--json").stdout)
    assert [(gate["gate"], gate["subject"]) for gate in told["held"]] == [("refused-share", "sales_2024-02.csv")]


def test_a_second_compile_says_that_nothing_was_done(command: Command, small_plan: Path) -> None:
    command("compile", small_plan, "--direct")
    told = command("compile", small_plan, "--direct").stdout
    assert "Nothing had changed" in told
    assert "none was run again" in told


def test_intake_makes_the_tables_of_deliveries_and_no_others(command: Command, held_plan: Path) -> None:
    done = command("intake", held_plan, "--direct")
    assert done.return_value == 1
    tables = {path.name for path in (held_plan.parent / "work" / "tables").iterdir()}
    assert {"deliveries.parquet", "gates.parquet", "sales", "refused"} <= tables
    assert not {"panel.parquet", "ea_indexes.parquet", "headings.csv"} & tables
    assert "All items" not in done.stdout


def test_a_compile_after_an_intake_does_not_take_in_again(command: Command, small_plan: Path) -> None:
    command("intake", small_plan, "--direct")
    told = json.loads(command("compile", small_plan, "--direct", "--json").stdout)
    # Deliveries, gates and one batch of files are found done; the steps after them are run.
    assert told["unchanged"] == 3
    assert told["steps"] > 8


def test_work_puts_the_workspace_where_it_says(command: Command, small_plan: Path, tmp_path: Path) -> None:
    elsewhere = tmp_path / "else where" / "work"
    told = command("compile", small_plan, "--direct", "--work", elsewhere).stdout
    assert (elsewhere / "tables" / "headings.csv").is_file()
    assert (elsewhere / "ledger.duckdb").is_file()
    assert not (small_plan.parent / "work").exists()
    assert "headings.csv" in told


def test_the_workspace_does_not_depend_on_the_current_folder(
    command: Command, small_plan: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(small_plan.parent)
    command("compile", "plan.toml", "--direct")
    made = (small_plan.parent / "work" / "tables" / "headings.csv").read_bytes()
    monkeypatch.chdir(tmp_path)
    again = json.loads(command("compile", small_plan, "--direct", "--json").stdout)
    assert again["unchanged"] == again["steps"]
    assert (small_plan.parent / "work" / "tables" / "headings.csv").read_bytes() == made


def test_through_is_the_last_period_compiled(command: Command, small_plan: Path) -> None:
    told = json.loads(command("compile", small_plan, "--direct", "--through", "2024-03", "--json").stdout)
    assert [row["period"] for row in told["all_items"]] == ["2024-01", "2024-02", "2024-03"]
    headings = pl.read_csv(small_plan.parent / "work" / "tables" / "headings.csv", infer_schema=False)
    assert headings["period"].max() == "2024-03"


def test_a_period_without_any_delivery_is_held_and_has_no_index(command: Command, small_plan: Path) -> None:
    done = command("compile", small_plan, "--direct", "--through", "2024-06", "--json")
    assert done.return_value == 1
    told = json.loads(done.stdout)
    assert ("turnover-swing", "2024-06") in {(gate["gate"], gate["subject"]) for gate in told["held"]}
    assert told["all_items"][-1] == {"period": "2024-06", "index": None, "change_period": None, "change_year": None}


def test_json_holds_the_figures_of_the_tables(command: Command, small_plan: Path) -> None:
    done = command("compile", small_plan, "--direct", "--json")
    told: dict[str, Any] = json.loads(done.stdout)
    tables = small_plan.parent / "work" / "tables"
    deliveries = pl.read_parquet(tables / "deliveries.parquet")
    (feed,) = told["feeds"]
    assert feed["files"] == {"active": 5}
    assert feed["lines_received"] == deliveries["lines_received"].sum() == 26
    assert feed["lines_accepted"] == deliveries["lines_accepted"].sum() == 25
    assert feed["lines_refused"] == deliveries["lines_refused"].sum() == 1
    assert feed["refused_by_rule"] == {"unreadable-number": 1}
    assert feed["turnover_accepted"] == f"{deliveries['turnover_accepted'].sum():.2f}"
    assert [(gate["gate"], gate["answered_by"]) for gate in told["breached"]] == [("refused-share", "price desk")]
    assert told["held"] == []
    assert told["methods"] == {"geks-tornqvist, window 3, mean splice onto published": 2}
    top = pl.read_parquet(tables / "headings.parquet").filter(pl.col("parent") == "").sort("period")
    assert [row["index"] for row in told["all_items"]] == top["index"].to_list()
    assert [row["change_period"] for row in told["all_items"]] == top["change_period"].to_list()
    assert Path(told["tables"]) == tables


def test_the_summary_of_the_sample_holds_the_figures_of_headings_csv(
    sample_folder: Path, tillwright: Run, sample: Compiled, tmp_path: Path
) -> None:
    workspace = sample.context.workspace
    work = shutil.copytree(workspace.root, tmp_path / "work")
    told = tillwright("compile", sample_folder / "plan.toml", "--direct", "--work", work)
    assert told.returncode == 0, told.stderr
    rows = pl.read_csv(workspace.headings_csv, infer_schema=False).filter(pl.col("parent").fill_null("") == "")
    shown = {
        line.split()[0]: line.split()[1:] for line in told.stdout.splitlines() if line.strip()[:4] in {"2023", "2024"}
    }
    exact = workspace.read("headings").filter(pl.col("parent") == "").sort("period")
    for row, unrounded in zip(rows.tail(13).iter_rows(named=True), exact.tail(13).iter_rows(named=True), strict=True):
        changes = [round_half_up(unrounded[name], 1) for name in ("change_period", "change_year")]
        assert shown[row["period"]] == [row["index"], *changes]
        assert [float(change) for change in changes] == pytest.approx(
            [float(row["change_period"]), float(row["change_year"])], abs=0.0551
        )
    assert "Nothing had changed" in told.stdout
    assert told.stderr == ""


def test_the_summary_counts_deliveries_rules_gates_and_aggregates(
    sample: Compiled, sample_folder: Path, command: Command, tmp_path: Path
) -> None:
    work = shutil.copytree(sample.context.workspace.root, tmp_path / "work")
    told = command("compile", sample_folder / "plan.toml", "--direct", "--work", work).stdout
    deliveries = sample.context.workspace.read("deliveries").filter(pl.col("status") == "active")
    for feed, received, refused in (
        deliveries.group_by("feed").agg(pl.col("lines_received").sum(), pl.col("lines_refused").sum()).iter_rows()
    ):
        (line,) = [line for line in told.splitlines() if line.split()[:1] == [feed] and f"{received:,}" in line]
        assert f" {refused:,} " in line
    for words in ("3 breached", "duplicate-line", "geks-tornqvist", "jevons, chained", "dutot, chained", "price desk"):
        assert words in told
    assert all(len(line) <= 120 for line in told.splitlines()[:-1])


# PPI Manual (2004), Table 9.8: 127.985 and 131.575 are exact halves, printed rounded up.
@pytest.mark.parametrize(("figure", "printed"), [(127.985, "127.99"), (131.575, "131.58"), (-0.005, "-0.01")])
def test_exact_halves_are_rounded_away_from_zero(figure: float, printed: str) -> None:
    assert round_half_up(figure, 2) == printed
