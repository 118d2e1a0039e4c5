"""The command that lists successions and takes decisions, as people use it."""

import json
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from tests.stages.test_successions import compiled
from tillwright.cli import commands
from tillwright.errors import CallError


def call(*arguments: str | Path) -> Result:
    return CliRunner().invoke(commands, ["successions", *map(str, arguments)], standalone_mode=False)


@pytest.fixture
def plan(tmp_path: Path) -> Path:
    made = compiled(tmp_path, successions={"accept": 1.0, "ask": 0.5})
    return made.context.plan.source


def test_what_was_proposed_is_listed_with_its_evidence(plan: Path) -> None:
    told = call(plan).output
    assert "2 pairs: 2 asked" in told
    assert "Galdera oat flakes" in told
    assert "0.90" in told
    listed = json.loads(call(plan, "--json").output)
    assert {(row["old_item"], row["new_item"]) for row in listed} == {("OLD", "NEW"), ("NEW", "NEWEST")}
    assert call(plan, "--status", "declined").output.startswith("No successions")


def test_decisions_are_taken_exported_and_taken_over(plan: Path, tmp_path: Path) -> None:
    told = call(plan, "--accept", "shop", "OLD", "NEW", "--by", "desk", "--why", "the same oats")
    assert told.output == "1 decisions recorded. The next compile follows them.\n"
    out = tmp_path / "decisions.csv"
    assert call(plan, "--export", out).output.endswith("1 decisions.\n")
    assert "the same oats" in out.read_text(encoding="utf-8")
    assert call(plan, "--import", out).return_value == 0
    assert call(plan, "--export", out).output.endswith("2 decisions.\n")


def test_a_decision_needs_who_and_why(plan: Path) -> None:
    refused = call(plan, "--decline", "shop", "OLD", "NEW", "--by", "desk")
    assert isinstance(refused.exception, CallError)
    assert "--why" in str(refused.exception)


def test_before_a_compile_there_is_nothing_to_list(tmp_path: Path) -> None:
    refused = call(tmp_path / "plan.toml")
    assert isinstance(refused.exception, CallError)
    assert "compile the plan first" in str(refused.exception)
