"""What is compiled once for all tests: the sample, the grocery data, and a small plan of two aggregates."""

import subprocess
import sys
from collections.abc import Callable, Sequence
from pathlib import Path

import pytest

from tests.grocery.builder import write_plan
from tillwright.stages.compiling import Compiled, Request, carry_out

Answer = subprocess.CompletedProcess[str]
Run = Callable[..., Answer]

SMALL_PLAN = """
[plan]
title = "Two aggregates"
currency = "crown"
start = "2024-01"
reference = "2024-01"

[[feed]]
name = "shop"
files = "deliveries/*.csv"
announced = 'sales_(?P<period>\\d{4}-\\d{2})'
limits = { unit_price = [0.01, 5000.0] }
gates = { refused_share = 0.0, turnover_swing = 0.5, missing_outlets = 0 }

[feed.columns]
sold_at = "day"
item = "item"
quantity = "units"
turnover = "value"
category = "shelf"

[classification]
headings = "headings.csv"
assignment = "assignment.csv"

[weights]
source = "turnover"

[index]
window = 3

[[answer]]
gate = "refused-share"
feed = "shop"
on = "sales_2024-02.csv"
by = "price desk"
why = "One line without a price; the shop knows."
"""
HEADINGS = "heading,parent,label\n0,,All items\nmilk,0,Milk\ntea,0,Tea\n"
ASSIGNMENT = "category,ea\nMILK,milk\nTEA,tea\n"
MONTHS = ("2024-01", "2024-02", "2024-03", "2024-04", "2024-05")


def write_small(folder: Path) -> Path:
    """Write a plan with five monthly deliveries of five items; the path of the plan."""
    (folder / "deliveries").mkdir(parents=True)
    for name, text in (("plan.toml", SMALL_PLAN), ("headings.csv", HEADINGS), ("assignment.csv", ASSIGNMENT)):
        (folder / name).write_text(text, encoding="utf-8")
    for number, month in enumerate(MONTHS):
        lines = ["day,item,shelf,units,value"]
        for item in range(5):
            shelf, units = ("MILK" if item < 3 else "TEA"), 10 + (3 * item + number) % 7
            price = 100 + 10 * item + number * (1 + item % 2)
            lines.append(f"{month}-15,{item},{shelf},{units},{units * price / 100:.2f}")
        if number == 1:
            lines.append(f"{month}-16,0,MILK,1,")
        (folder / "deliveries" / f"sales_{month}.csv").write_text("\n".join(lines) + "\n", encoding="utf-8")
    return folder / "plan.toml"


@pytest.fixture
def small_plan(tmp_path: Path) -> Path:
    """A plan that compiles in well under a second, with one answered gate."""
    return write_small(tmp_path / "small")


@pytest.fixture(scope="session")
def sample_folder() -> Path:
    """The sample as it lies in the repository."""
    return Path(__file__).resolve().parents[1] / "sample_parquet"


@pytest.fixture(scope="session")
def sample(sample_folder: Path, tmp_path_factory: pytest.TempPathFactory) -> Compiled:
    """The sample, compiled in a workspace of its own."""
    return carry_out(Request(sample_folder / "plan.toml", tmp_path_factory.mktemp("sample") / "work"))


@pytest.fixture(scope="session")
def grocery(tmp_path_factory: pytest.TempPathFactory) -> Compiled:
    """The open grocery data of 2017, compiled."""
    return carry_out(Request(write_plan(tmp_path_factory.mktemp("grocery"))))


@pytest.fixture(scope="session")
def tillwright() -> Run:
    """The installed command, run as a process of its own."""
    command = Path(sys.executable).with_name("tillwright")

    def run(*arguments: str | Path, cwd: Path | None = None) -> Answer:
        given: Sequence[str] = [str(argument) for argument in arguments]
        return subprocess.run(
            [str(command), *given], capture_output=True, text=True, encoding="utf-8", check=False, cwd=cwd, timeout=120
        )

    return run
