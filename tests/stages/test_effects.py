"""The effect of every screen equals a compile with that one off, and only screens that are on are listed."""

from pathlib import Path
from typing import Any

import numpy as np
import polars as pl
import pytest

from tests.stages.sold import Months, compile_sold, random_months
from tillwright.stages.compiling import Compiled
from tillwright.tables import TABLES

ON: dict[str, Any] = {"extreme": [0.25, 4.0], "clearance": {}, "small": {}, "imputation": {}}
REASONS = {
    "extreme": "extreme-relative",
    "clearance": "clearance",
    "small": "small-sales",
    "imputation": "class-mean",
}
# M by an elementary formula, S by a multilateral method, which has no imputed prices.
INDEX: dict[str, Any] = {"window": 5, "override": [{"heading": "M", "method": "jevons"}]}
ROW = ["ea", "stratum", "period"]


def shelf(seed: int) -> dict[str, Months]:
    rng = np.random.default_rng(seed)
    steady: Months = [(4.0, 30.0), (4.1, 30.0), (4.2, 28.0), (4.4, 31.0), (4.3, 30.0), (4.5, 30.0), (4.6, 29.0)]
    return {f"{seed}-00": steady} | {f"{seed}-{number:02d}": random_months(rng, 7) for number in range(1, 25)}


def compiled(folder: Path, **screening: Any) -> Compiled:
    return compile_sold(folder, shelf(1), shelf(2), screening=screening, index=INDEX)


@pytest.fixture(scope="module")
def all_on(tmp_path_factory: pytest.TempPathFactory) -> Compiled:
    return compiled(tmp_path_factory.mktemp("all-on"), **ON)


@pytest.mark.parametrize("screen", list(ON))
def test_level_without_a_screen_is_that_of_a_compile_with_it_off(all_on: Compiled, tmp_path: Path, screen: str) -> None:
    effects = all_on.context.workspace.read("screen_effects").filter(screen=screen)
    without = compiled(tmp_path, **ON | {screen: "off"}).context.workspace.read("ea_indexes")
    assert effects.select(*ROW, level="level_without").equals(without.select(*ROW, "level"))


def test_level_stands_beside_it_with_all_screens_on(all_on: Compiled) -> None:
    workspace = all_on.context.workspace
    for screen in ON:
        effects = workspace.read("screen_effects").filter(screen=screen)
        assert effects.select(*ROW, "level").equals(workspace.read("ea_indexes").select(*ROW, "level"))


@pytest.mark.parametrize("screen", list(ON))
def test_rows_are_those_with_the_reason_of_the_screen(all_on: Compiled, screen: str) -> None:
    workspace = all_on.context.workspace
    counted = workspace.read("screen_effects").filter(pl.col("rows") > 0, screen=screen).select(*ROW, "rows")
    reason = workspace.read("screened").filter(reason=REASONS[screen]).group_by(ROW).len("rows").sort(ROW)
    assert reason.height > 0
    assert counted.equals(reason.cast({"rows": pl.Int64}))


def test_imputation_moves_no_index_of_another_method(all_on: Compiled) -> None:
    effects = all_on.context.workspace.read("screen_effects").filter(screen="imputation", ea="S")
    assert effects["level"].equals(effects["level_without"])
    assert effects["rows"].sum() == 0


def test_every_other_screen_moves_both_indexes(all_on: Compiled) -> None:
    effects = all_on.context.workspace.read("screen_effects")
    moved = effects.filter(pl.col("level") != pl.col("level_without")).select("ea", "screen").unique()
    others = {(ea, screen) for ea in ("M", "S") for screen in ("extreme", "clearance", "small")}
    assert others <= set(moved.iter_rows())


@pytest.mark.parametrize("on", [(), ("clearance",), ("small", "imputation")], ids=lambda on: " ".join(on) or "none")
def test_only_screens_that_are_on_are_listed(tmp_path: Path, on: tuple[str, ...]) -> None:
    screening = {screen: ON[screen] if screen in on else "off" for screen in ON}
    effects = compiled(tmp_path, **screening).context.workspace.read("screen_effects")
    assert effects["screen"].unique().sort().to_list() == sorted(on)
    assert effects.schema == TABLES["screen_effects"].columns


def test_level_that_a_screen_takes_away_is_told(tmp_path: Path) -> None:
    # In March nothing is sold but a product that is sold off.
    milk: dict[str, Months] = {
        "A": [(10.0, 50.0), (10.0, 50.0), (4.0, 5.0), None, None],
        "B": [None] * 4 + [(1.0, 1.0)],
    }
    screening: dict[str, Any] = {"extreme": "off", "clearance": {}}
    made = compile_sold(tmp_path, milk, screening=screening, index={"method": "jevons"})
    effects = made.context.workspace.read("screen_effects").filter(ea="M")
    march = effects.filter(period=pl.date(2024, 3, 1)).row(0, named=True)
    assert (march["level"], march["rows"]) == (None, 1)
    assert march["level_without"] == pytest.approx(40.0, rel=1e-12)


def test_step_is_not_run_again_unless_what_it_rests_on_changes(tmp_path: Path) -> None:
    first = compiled(tmp_path, **ON)
    again = compiled(tmp_path, **ON)
    assert {step.name: step.unchanged for step in again.steps}["effects"]
    other = compiled(tmp_path, **ON | {"small": {"factor": 1.2500001}})
    assert not {step.name: step.unchanged for step in other.steps}["effects"]
    assert not {step.name: step.unchanged for step in first.steps}["effects"]


def test_imputed_rows_follow_the_method_of_the_plan(tmp_path: Path) -> None:
    # The formula is that of [index], so a change there must reach the screened rows.
    screening: dict[str, Any] = {"imputation": {}}
    first = compile_sold(tmp_path, shelf(1), screening=screening, index={"method": "jevons"})
    jevons = first.context.workspace.read("screened").filter(verdict="imputed")
    second = compile_sold(tmp_path, shelf(1), screening=screening, index={"method": "dutot"})
    dutot = second.context.workspace.read("screened").filter(verdict="imputed")
    assert jevons.height == dutot.height > 0
    assert not jevons["price"].equals(dutot["price"])
