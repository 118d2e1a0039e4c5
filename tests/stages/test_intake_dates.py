"""Days and periods of lines: zones, weeks, month labels.

Offsets are those of the IANA database for the days used; weeks are those of ISO 8601-1:2019, and a week belongs to
the month of its Thursday as its year does in that standard.
"""

from datetime import date, datetime
from pathlib import Path
from typing import Any

import polars as pl
import pytest

from tests.stages.small import COLUMNS, Taken, feed, line, put, sections, take_in, take_in_rows, write_plan

NEW_YORK = {"timezone": "America/New_York", "stamped_in": "UTC"}


def columns(role: str) -> dict[str, str]:
    """The usual columns with another role for the date."""
    return {role: "day"} | {name: column for name, column in COLUMNS.items() if name != "sold_at"}


def days_of(folder: Path, stamps: list[Any], name: str = "a.csv", **feed_changes: Any) -> Taken:
    """The intake of one line per date or stamp, its place in the list being the item."""
    return take_in_rows(folder, [line(day=day, item=str(n)) for n, day in enumerate(stamps)], name, **feed_changes)


def day_by_item(taken: Taken) -> list[str]:
    """The periods of the accepted items, in the order of the lines."""
    return [taken.periods[item] for item in sorted(taken.periods, key=int)]


UTC_STAMPS = {
    "2024-04-01 03:59:59": "2024-03-01",  # summer time since 10 March: UTC-4
    "2024-04-01 04:00:00": "2024-04-01",
    "2024-02-01 04:59:59": "2024-01-01",  # winter time: UTC-5
    "2024-02-01 05:00:00": "2024-02-01",
    "2024-11-03 05:30:00": "2024-11-01",  # the hour that comes twice
    "2024-12-01 04:59:59": "2024-11-01",
    "2025-01-01 04:59:59": "2024-12-01",
    "2024-03-01 04:30:00": "2024-02-01",  # 29 February
}


def test_naive_text_in_utc_moves_to_the_outlets_month(tmp_path: Path) -> None:
    assert day_by_item(days_of(tmp_path, list(UTC_STAMPS), **NEW_YORK)) == list(UTC_STAMPS.values())


@pytest.mark.parametrize("unit", ["ms", "us", "ns"])
@pytest.mark.parametrize("aware", [False, True], ids=["naive", "aware"])
def test_parquet_stamps_move_to_the_outlets_month(tmp_path: Path, unit: Any, aware: bool) -> None:
    stamps = pl.Series("day", [datetime.fromisoformat(stamp) for stamp in UTC_STAMPS]).cast(pl.Datetime(unit))
    stamps = stamps.dt.replace_time_zone("UTC") if aware else stamps
    rows = pl.DataFrame([line(item=str(n)) for n in range(len(stamps))]).with_columns(stamps)
    put(tmp_path / "in/a.parquet", rows)
    taken = take_in(write_plan(tmp_path, sections(feed(**NEW_YORK))))
    assert day_by_item(taken) == list(UTC_STAMPS.values())


def test_aware_parquet_stamps_are_instants_whatever_zone_they_are_written_in(tmp_path: Path) -> None:
    stamps = (
        pl.Series("day", [datetime.fromisoformat("2024-04-01T03:30")])
        .dt.replace_time_zone("UTC")
        .dt.convert_time_zone("Asia/Tokyo")
    )
    put(tmp_path / "in/a.parquet", pl.DataFrame([line()]).with_columns(stamps))
    taken = take_in(write_plan(tmp_path, sections(feed(timezone="America/New_York"))))
    assert taken.periods == {"A": "2024-03-01"}


def test_text_with_an_offset_is_an_instant_and_without_one_local(tmp_path: Path) -> None:
    stamps = {
        "2024-04-01T00:30:00Z": "2024-03-01",
        "2024-04-01T00:30:00+00:00": "2024-03-01",
        "2024-03-31T23:30:00-05:00": "2024-04-01",
        "2024-03-31T23:30-0500": "2024-04-01",
        "2024-04-01T09:00:00.123+05:30": "2024-03-01",
        "2024-04-01T00:30:00": "2024-04-01",
        "2024-03-31 23:59:59.999": "2024-03-01",
        "2024-03-31": "2024-03-01",
    }
    taken = days_of(tmp_path, list(stamps), timezone="America/New_York")
    assert day_by_item(taken) == list(stamps.values())


def test_stamps_of_a_feed_without_zones_stay_on_their_day(tmp_path: Path) -> None:
    taken = days_of(tmp_path, ["2024-03-31 23:59:59", "2024-04-01 00:00:00"])
    assert day_by_item(taken) == ["2024-03-01", "2024-04-01"]


def test_stamps_written_in_another_zone_than_utc_are_converted(tmp_path: Path) -> None:
    stamps = ["2024-04-01 05:59:59", "2024-04-01 06:00:00"]  # Berlin is 6 hours ahead of New York on that day
    taken = days_of(tmp_path, stamps, timezone="America/New_York", stamped_in="Europe/Berlin")
    assert day_by_item(taken) == ["2024-03-01", "2024-04-01"]


def test_dates_have_no_hour_to_move(tmp_path: Path) -> None:
    put(tmp_path / "in/a.parquet", [line(day=date(2024, 4, 1))])
    assert take_in(write_plan(tmp_path, sections(feed(**NEW_YORK)))).periods == {"A": "2024-04-01"}


@pytest.mark.parametrize(
    "text", ["2024-02-30", "31.03.2024", "03/31/2024", "2024-03-31T25:00:00", "soon", "infinity", "20240-03-05", "2024"]
)
def test_text_that_is_no_date_is_refused_and_told(tmp_path: Path, text: str) -> None:
    taken = days_of(tmp_path, ["2024-03-05", text])
    assert taken.rules == {3: "unreadable-date"}
    assert taken.table("refused")["detail"].to_list() == [f"date {text}"]


@pytest.mark.parametrize("day", ["9999-12-31", "0001-01-01", "1899-12-30"])
def test_placeholder_date_stops_no_intake(tmp_path: Path, day: str) -> None:
    """Common practice: 9999-12-31 and day 0 of spreadsheets stand for no date in what tills and ledgers write."""
    taken = days_of(tmp_path, ["2024-03-05", day])
    assert taken.periods["0"] == "2024-03-01"
    assert taken.table("totals")["lines_received"].to_list() == [2]


WEEKS = {
    "2024-W01": "2024-01-01",
    "2024-W05": "2024-02-01",  # 29 January to 4 February, Thursday 1 February
    "2024-W09": "2024-02-01",  # 26 February to 3 March, Thursday 29 February
    "2024W14": "2024-04-01",
    "2025-W01": "2025-01-01",  # 30 December 2024 to 5 January, Thursday 2 January
    "2020-W53": "2020-12-01",  # Thursday 31 December 2020
    "2021-W53": None,  # 2021 has 52 weeks
    "2024-W53": None,
    "2024-W00": None,
    "2024-W54": None,
    "2024-01-29": "2024-02-01",
    "2024-02-04": "2024-02-01",
    "2024-03-03": "2024-02-01",
    "2024-12-30": "2025-01-01",
    "2020-12-28": "2020-12-01",
}


def test_week_belongs_to_the_month_of_its_thursday(tmp_path: Path) -> None:
    taken = days_of(tmp_path, list(WEEKS), columns=columns("week"))
    assert [taken.periods.get(str(n)) for n in range(len(WEEKS))] == list(WEEKS.values())


def test_impossible_week_is_an_unreadable_date(tmp_path: Path) -> None:
    taken = days_of(tmp_path, list(WEEKS), columns=columns("week"))
    assert taken.rules == {n: "unreadable-date" for n, month in enumerate(WEEKS.values(), start=2) if month is None}


@pytest.mark.parametrize("kind", [pl.Date, pl.Datetime("us"), pl.Datetime("ns")])
def test_parquet_date_within_a_week_stands_for_the_week(tmp_path: Path, kind: Any) -> None:
    texts = [text for text in WEEKS if "W" not in text]
    days = pl.Series("day", texts).str.to_date().cast(kind)
    put(tmp_path / "in/a.parquet", pl.DataFrame([line(item=str(n)) for n in range(len(texts))]).with_columns(days))
    taken = take_in(write_plan(tmp_path, sections(feed(columns=columns("week")))))
    assert day_by_item(taken) == [WEEKS[text] for text in texts]


def test_weeks_are_periods_of_their_own_where_the_plan_says_so(tmp_path: Path) -> None:
    put(tmp_path / "in/a.csv", [line(day=day, item=str(n)) for n, day in enumerate(["2025-W01", "2024-12-29"])])
    scope = {"title": "Weeks", "currency": "crown", "period": "week", "start": "2024-W01"}
    taken = take_in(write_plan(tmp_path, sections(feed(columns=columns("week")), plan=scope)))
    assert day_by_item(taken) == ["2024-12-30", "2024-12-23"]


@pytest.mark.parametrize("name", ["a.csv", "a.parquet"])
def test_month_labels_as_text(tmp_path: Path, name: str) -> None:
    labels = ["2024-03", "202403", "2024-03-31", "2024-12", "2024-13", "202400", "2024-3", "March"]
    taken = days_of(tmp_path, labels, name, columns=columns("month"))
    assert day_by_item(taken) == ["2024-03-01"] * 3 + ["2024-12-01"]
    assert set(taken.rules.values()) == {"unreadable-date"}


@pytest.mark.parametrize(
    "month",
    [202403, date(2024, 3, 1), date(2024, 3, 31), datetime.fromisoformat("2024-03-31T23:00")],
    ids=repr,
)
def test_month_labels_of_other_types(tmp_path: Path, month: Any) -> None:
    put(tmp_path / "in/a.parquet", [line(day=month)])
    taken = take_in(write_plan(tmp_path, sections(feed(columns=columns("month")))))
    assert taken.periods == {"A": "2024-03-01"}


def test_quarters_hold_their_three_months(tmp_path: Path) -> None:
    put(
        tmp_path / "in/a.csv",
        [line(day=day, item=str(n)) for n, day in enumerate(["2024-01-01", "2024-03-31", "2024-04-01"])],
    )
    scope = {"title": "Quarters", "currency": "crown", "period": "quarter", "start": "2024-Q1"}
    taken = take_in(write_plan(tmp_path, sections(plan=scope)))
    assert day_by_item(taken) == ["2024-01-01", "2024-01-01", "2024-04-01"]


@pytest.mark.parametrize(("rule", "counted"), [("whole-weeks", 28), ("first-weeks", 21)])
def test_days_left_out_by_the_month_rule_stay_on_record(tmp_path: Path, rule: str, counted: int) -> None:
    """March 2024 starts on a Friday: its whole weeks start on the 4th, 11th, 18th and 25th."""
    put(tmp_path / "in/a.csv", [line(day=f"2024-03-{day:02d}") for day in range(1, 32)])
    scope = {"title": "Weeks", "currency": "crown", "start": "2024-01", "month_rule": rule}
    taken = take_in(write_plan(tmp_path, sections(plan=scope)))
    lines = dict(taken.table("sales").select("counted", "lines").iter_rows())
    assert lines == {True: counted, False: 31 - counted}
    assert taken.table("totals")["lines_accepted"].to_list() == [31]
