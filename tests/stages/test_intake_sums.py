"""Nothing is lost: on random deliveries, lines and turnover add up exactly against sums in Python's Decimal."""

import tempfile
from collections import defaultdict
from decimal import Decimal
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tests.stages.small import GOOD_LINE, Taken, csv_text, feed, put, sections, take_in, write_plan

PROPERTY = settings(deadline=None, database=None, derandomize=True, max_examples=8)
QUANTITIES = ["1", "2.5", "0.0001", "-1", "-0.5", "0", "12", "", "x", "nan", "inf", "-0", "1e2"]
TURNOVERS = ["0.01", "3.00", "1234.5678", "-3.00", "-0.01", "0", "", "?", "NaN", "-inf", "99999999999.99", " 7.10 "]
DAYS = ["2024-02-29", "2024-03-01", "2024-03-31", "2024-04-01", "", "2024-02-30"]

cells = st.tuples(
    st.sampled_from(DAYS),
    st.sampled_from(["1", "2", ""]),
    st.sampled_from(["A", "B", "C d", 'E "x", y', ""]),
    st.sampled_from(QUANTITIES),
    st.sampled_from(TURNOVERS),
).map(lambda row: dict(zip(GOOD_LINE, row, strict=True)))
tears = st.sampled_from(["", "", "", ",surplus", '"'])


def number(text: str) -> Decimal | None:
    """The number in a cell; None where it holds none."""
    try:
        value = Decimal(text.strip())
    except ArithmeticError:
        return None
    return value if value.is_finite() else None


def is_accepted(row: dict[str, str]) -> bool:
    """The rules of a feed that nets returns and has no limits, written once more in Python."""
    quantity, turnover = number(row["quantity"]), number(row["turnover"])
    if not row["outlet"] or not row["item"] or row["day"] in {"", "2024-02-30"} or quantity is None or turnover is None:
        return False
    return (quantity > 0 and turnover > 0) or (quantity < 0 and turnover < 0)


def check(taken: Taken, sound: list[dict[str, str]], torn: int) -> None:
    (totals,) = taken.table("totals").to_dicts()
    good = [row for row in sound if is_accepted(row)]
    readable = [number(row["turnover"]) or Decimal(0) for row in sound]
    assert totals["lines_received"] == len(sound) + torn
    assert totals["lines_accepted"] == len(good)
    assert totals["lines_refused"] == taken.table("refused").height == len(sound) + torn - len(good)
    assert totals["turnover_received"] == sum(readable, Decimal(0))
    assert totals["turnover_accepted"] == sum((number(row["turnover"]) or Decimal(0) for row in good), Decimal(0))
    assert totals["turnover_received"] == totals["turnover_accepted"] + totals["turnover_refused"]
    expected: dict[tuple[str, str], list[Decimal | int]] = defaultdict(lambda: [Decimal(0), Decimal(0), 0])
    for row in good:
        sums = expected[row["day"][:7] + "-01", row["item"]]
        sums[0] += number(row["quantity"]) or 0
        sums[1] += number(row["turnover"]) or 0
        sums[2] += 1
    found: dict[Any, list[Any]] = {
        (str(row["period"]), row["item"]): [row["quantity"], row["turnover"], row["lines"]]
        for row in taken.table("sales").to_dicts()
    }
    assert found == dict(expected)


@given(rows=st.lists(st.tuples(cells, tears), min_size=1, max_size=80))
@PROPERTY
def test_random_csv_adds_up_to_the_last_digit(rows: list[tuple[dict[str, str], str]]) -> None:
    texts = [csv_text([row]).splitlines()[1] + tear for row, tear in rows]
    sound = [row for row, tear in rows if not tear]
    with tempfile.TemporaryDirectory() as folder:
        put(Path(folder) / "in/a.csv", "\n".join([",".join(GOOD_LINE), *texts]) + "\n")
        check(take_in(write_plan(Path(folder))), sound, len(rows) - len(sound))


@given(rows=st.lists(cells, min_size=1, max_size=80))
@PROPERTY
def test_random_parquet_adds_up_to_the_last_digit(rows: list[dict[str, str]]) -> None:
    with tempfile.TemporaryDirectory() as folder:
        put(Path(folder) / "in/a.parquet", rows)
        check(take_in(write_plan(Path(folder))), rows, 0)


@given(cents=st.lists(st.integers(1, 10**9), min_size=1, max_size=200))
@PROPERTY
def test_float_amounts_are_summed_as_the_cents_they_stand_for(cents: list[int]) -> None:
    with tempfile.TemporaryDirectory() as folder:
        put(Path(folder) / "in/a.parquet", [GOOD_LINE | {"turnover": amount / 100} for amount in cents])
        totals = take_in(write_plan(Path(folder))).table("totals")
    assert totals["turnover_accepted"].to_list() == [Decimal(sum(cents)) / 100]


@pytest.mark.parametrize("deposit", ["0.25", "0.333"])
def test_turnover_adds_up_after_subtraction(tmp_path: Path, deposit: str) -> None:
    rows = [GOOD_LINE | {"deposit": deposit, "turnover": str(amount)} for amount in range(5)]
    put(tmp_path / "in/a.csv", rows)
    (totals,) = take_in(write_plan(tmp_path, sections(feed(turnover_less=["deposit"])))).table("totals").to_dicts()
    assert totals["turnover_received"] == 10 - 5 * Decimal(deposit)
    assert totals["turnover_accepted"] == 10 - 4 * Decimal(deposit)
