"""Each refusal rule on real files, CSV and Parquet; the rules' words are those of `tillwright.choices`."""

import json
from datetime import date, timedelta
from decimal import Decimal
from pathlib import Path
from typing import Any

import polars as pl
import pytest

from tests.reference.published import cases
from tests.stages.small import COLUMNS, Taken, csv_text, feed, line, put, sections, take_in, take_in_rows, write_plan
from tillwright.choices import REFUSAL_RULES

KINDS = ("csv", "parquet")
CODE = "96385074"
# Every line breaks one rule; the first and the last are good.
BROKEN_LINES: dict[str, dict[str, Any]] = {
    "good": {},
    "missing-key": {"item": ""},
    "unreadable-date": {"day": "2024-02-30"},
    "unreadable-number": {"quantity": "two"},
    "non-finite": {"turnover": "inf"},
    "quantity-not-positive": {"quantity": "0"},
    "turnover-not-positive": {"turnover": "-3.00"},
    "unit-price-limits": {"turnover": "1000.02"},
    "outside-announced-period": {"day": "2024-04-01"},
    "malformed-item-code": {"item": "96385075"},
    "duplicate-line": {"id": "1"},
    "good again": {},
}
STRICT = {"item_code": "gtin", "announced": r"(?P<period>\d{4}-\d{2})", "limits": {"unit_price": [0.01, 500.0]}}


def rows() -> list[dict[str, Any]]:
    return [
        line(item=CODE) | {"id": str(number)} | changes for number, changes in enumerate(BROKEN_LINES.values(), start=1)
    ]


@pytest.fixture(scope="module", params=KINDS)
def strict(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Taken:
    return take_in_rows(
        tmp_path_factory.mktemp("rules"),
        rows(),
        f"shop_2024-03.{request.param}",
        columns=COLUMNS | {"line_id": "id"},
        **STRICT,
    )


@pytest.mark.parametrize("number", range(len(BROKEN_LINES)))
def test_line_is_refused_by_the_rule_it_breaks(strict: Taken, number: int) -> None:
    name = list(BROKEN_LINES)[number]
    first = 2 if strict.table("deliveries")["file"][0].endswith(".csv") else 1
    assert strict.rules.get(number + first) == (name if name in REFUSAL_RULES else None)


def test_every_rule_but_that_of_broken_rows_is_tried() -> None:
    assert set(REFUSAL_RULES) - set(BROKEN_LINES) == {"broken-row"}


def test_no_other_rule_is_broken(strict: Taken) -> None:
    assert strict.table("refused")["also"].to_list() == [""] * (len(BROKEN_LINES) - 2)


def test_raw_row_is_kept_as_it_came(strict: Taken) -> None:
    came = rows()[1:-1]
    raw = strict.table("refused").sort("line")["raw"].to_list()
    if strict.table("deliveries")["file"][0].endswith(".csv"):
        assert raw == csv_text(came).splitlines()[1:]
    else:
        assert [json.loads(text) for text in raw] == came


def test_lines_and_turnover_add_up(strict: Taken) -> None:
    (totals,) = strict.table("totals").to_dicts()
    assert totals["lines_received"] == len(BROKEN_LINES)
    assert totals["lines_accepted"] == 2
    assert totals["lines_refused"] == len(BROKEN_LINES) - 2
    assert totals["turnover_accepted"] == Decimal("6.00")
    # seven refused lines of 3.00, one of -3.00, one of 1000.02, and one without a readable turnover
    assert totals["turnover_refused"] == Decimal("1018.02")
    assert totals["turnover_received"] == Decimal("1024.02")


def test_line_with_several_faults_lists_them_in_order(tmp_path: Path) -> None:
    bad = line(item=CODE[:-1], day="2024-04-01", quantity="0", turnover="-1")
    refused = take_in_rows(tmp_path, [bad, bad | {"item": ""}], "shop_2024-03.csv", **STRICT).table("refused")
    rest = ["turnover-not-positive", "outside-announced-period"]
    assert refused["rule"].to_list() == ["quantity-not-positive", "missing-key"]
    assert refused["also"].to_list() == [
        ", ".join([*rest, "malformed-item-code"]),
        ", ".join(["quantity-not-positive", *rest]),
    ]


def test_parquet_numbers_that_are_not_finite_or_missing_are_told_apart(tmp_path: Path) -> None:
    frame = pl.DataFrame(
        [line(item=str(n), quantity=q, turnover=3.0) for n, q in enumerate([float("nan"), float("inf"), None, 1.5])]
    )
    put(tmp_path / "in/a.parquet", frame)
    assert take_in(write_plan(tmp_path)).rules == {1: "non-finite", 2: "non-finite", 3: "unreadable-number"}


def test_blank_text_is_a_missing_key(tmp_path: Path) -> None:
    lines = [line(item="  "), line(outlet=" "), line(day=" "), line(item=" A ")]
    taken = take_in_rows(tmp_path, lines)
    assert taken.rules == dict.fromkeys((2, 3, 4), "missing-key")
    assert taken.table("sales")["item"].to_list() == ["A"]


@pytest.mark.parametrize("kind", KINDS)
def test_columns_to_subtract_are_taken_out_and_nothing_is_nothing(tmp_path: Path, kind: str) -> None:
    lines = [
        line(turnover="3.00", deposit="0.25", bag="0.10"),
        line(turnover="3.00", deposit=None, bag="0.10"),
        line(turnover="0.25", deposit="0.25", bag=None),
    ]
    taken = take_in_rows(tmp_path, lines, f"a.{kind}", turnover_less=["deposit", "bag"])
    assert taken.table("sales")["turnover"].to_list() == [Decimal("5.55")]
    assert taken.table("refused")["rule"].to_list() == ["turnover-not-positive"]


def test_unreadable_amount_to_subtract_is_an_unreadable_number(tmp_path: Path) -> None:
    taken = take_in_rows(tmp_path, [line(deposit="?")], turnover_less=["deposit"])
    assert taken.rules == {2: "unreadable-number"}


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize(("returns", "quantity", "refused"), [("net", 3, 3), ("refuse", 5, 4)])
def test_returns_are_netted_or_refused(tmp_path: Path, kind: str, returns: str, quantity: int, refused: int) -> None:
    lines = [
        line(quantity=5, turnover=10.0),
        line(quantity=-2, turnover=-4.0),
        line(quantity=-2, turnover=4.0),
        line(quantity=2, turnover=-4.0),
        line(quantity=0, turnover=0.0),
    ]
    taken = take_in_rows(tmp_path, lines, f"a.{kind}", returns=returns)
    assert taken.table("sales")["quantity"].to_list() == [quantity]
    assert taken.table("sales")["turnover"].to_list() == [2 * quantity]
    assert taken.table("refused").height == refused


def test_file_whose_name_announces_nothing_is_not_held_to_a_period(tmp_path: Path) -> None:
    for name in ("shop_2024-03.csv", "shop_march.csv"):
        put(tmp_path / "in" / name, [line(day="2024-04-01", item=name)])
    taken = take_in(write_plan(tmp_path, sections(feed(announced=STRICT["announced"]))))
    assert taken.table("sales")["item"].to_list() == ["shop_march.csv"]
    assert taken.table("refused")["detail"].to_list() == ["day 2024-04-01"]


@pytest.mark.parametrize(
    ("announced", "first", "last"),
    [
        ("202402", "2024-02-01", "2024-02-29"),
        ("2024-W09", "2024-02-26", "2024-03-03"),
        ("2024W09", "2024-02-26", "2024-03-03"),
        ("2024-Q1", "2024-01-01", "2024-03-31"),
    ],
)
def test_announced_period_may_be_of_any_kind(tmp_path: Path, announced: str, first: str, last: str) -> None:
    inside = [date.fromisoformat(first), date.fromisoformat(last)]
    outside = [inside[0] - timedelta(1), inside[1] + timedelta(1)]
    lines = [line(day=day.isoformat()) for day in [*outside, *inside]]
    taken = take_in_rows(tmp_path, lines, f"a_{announced}.csv", announced=r"a_(?P<period>[^.]+)\.")
    assert taken.rules == dict.fromkeys((2, 3), "outside-announced-period")


def altered(code: str) -> list[str]:
    """The code with each digit changed by one in turn, which no check digit of weights 3 and 1 can miss."""
    return [code[:at] + str((int(digit) + 1) % 10) + code[at + 1 :] for at, digit in enumerate(code)]


PUBLISHED_CODES = [
    pytest.param(case.inputs["body"] + str(int(case.expected[0])), id=case.citation) for case in cases("gtin_")
]


@pytest.mark.parametrize("code", PUBLISHED_CODES)
def test_published_item_code_is_accepted_and_each_altered_digit_refused(tmp_path: Path, code: str) -> None:
    padded = code.rjust(14, "0")  # GS1: shorter codes are stored with zeros in front
    lines = [line(item=item) for item in [code, padded, *altered(code)]]
    taken = take_in_rows(tmp_path, lines, item_code="gtin")
    assert sorted(taken.table("sales")["item"].to_list()) == sorted([code, padded])
    assert set(taken.rules.values()) == {"malformed-item-code"}
    assert len(taken.rules) == len(code)


def test_item_codes_kept_as_numbers_are_checked_alike(tmp_path: Path) -> None:
    put(tmp_path / "in/a.parquet", [line(item=6291041500213), line(item=6291041500214)])
    taken = take_in(write_plan(tmp_path, sections(feed(item_code="gtin"))))
    assert taken.table("sales")["item"].to_list() == ["6291041500213"]
    assert taken.rules == {2: "malformed-item-code"}


@pytest.mark.parametrize("kind", KINDS)
def test_first_of_several_lines_with_one_identifier_is_kept(tmp_path: Path, kind: str) -> None:
    lines = [
        line(id=i, item=item) for i, item in [("x", "A"), ("y", "B"), ("x", "C"), (None, "D"), (None, "E"), ("x", "F")]
    ]
    taken = take_in_rows(tmp_path, lines, f"a.{kind}", columns=COLUMNS | {"line_id": "id"})
    assert taken.table("sales")["item"].to_list() == ["A", "B", "D", "E"]
    assert set(taken.rules.values()) == {"duplicate-line"}


def test_feed_without_outlets_needs_none_and_is_not_told_of_any(tmp_path: Path) -> None:
    columns = {role: name for role, name in COLUMNS.items() if role != "outlet"}
    taken = take_in_rows(tmp_path, [line(), line(item=None)], columns=columns)
    assert taken.table("sales")["lines"].to_list() == [1]
    assert taken.table("refused")["detail"].to_list() == ["no item"]
