"""Periods by their first day: months and quarters of the calendar, weeks as ISO 8601-1:2019 has them."""

from datetime import date, timedelta

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tillwright.choices import PeriodKind
from tillwright.periods import (
    EXAMPLES,
    label_period,
    list_periods,
    next_period,
    parse_any_period,
    parse_period,
    periods_a_year,
    year_of,
)

KINDS: tuple[PeriodKind, ...] = ("month", "week", "quarter")
# ISO 8601 counts a week to the year that holds its Thursday; the pairs below are the standard's own kind of example.
ISO_WEEKS = {
    "2009-W01": date(2008, 12, 29),
    "2009-W53": date(2009, 12, 28),
    "2020-W53": date(2020, 12, 28),
    "2021-W01": date(2021, 1, 4),
    "2025-W01": date(2024, 12, 30),
}


@pytest.mark.parametrize(("label", "monday"), ISO_WEEKS.items())
def test_week_starts_on_its_iso_monday(label: str, monday: date) -> None:
    assert parse_period(label, "week") == monday
    assert label_period(monday, "week") == label


@pytest.mark.parametrize(
    ("text", "kind", "first"),
    [
        ("2024-03", "month", date(2024, 3, 1)),
        ("202403", "month", date(2024, 3, 1)),
        ("2024-W07", "week", date(2024, 2, 12)),
        ("2024W07", "week", date(2024, 2, 12)),
        ("2024-Q1", "quarter", date(2024, 1, 1)),
        ("2024Q4", "quarter", date(2024, 10, 1)),
    ],
)
def test_hyphen_may_be_missing(text: str, kind: PeriodKind, first: date) -> None:
    assert parse_period(text, kind) == first


@pytest.mark.parametrize(
    ("text", "kind"),
    [
        ("2024-13", "month"),
        ("2024-00", "month"),
        ("2024-3", "month"),
        ("2024-03-01", "month"),
        ("2024", "month"),
        ("2024-W07", "month"),
        ("2024-W54", "week"),
        ("2024-W53", "week"),  # 2024 has 52 ISO weeks
        ("2024-W00", "week"),
        ("2024-Q5", "quarter"),
        ("", "month"),
        (" 2024-03", "month"),
    ],
)
def test_other_texts_are_no_periods(text: str, kind: PeriodKind) -> None:
    with pytest.raises(ValueError):
        parse_period(text, kind)


@pytest.mark.parametrize(
    ("text", "first", "after"),
    [
        ("2024-02", date(2024, 2, 1), date(2024, 3, 1)),
        ("202412", date(2024, 12, 1), date(2025, 1, 1)),
        ("2024-W52", date(2024, 12, 23), date(2024, 12, 30)),
        ("2024Q4", date(2024, 10, 1), date(2025, 1, 1)),
    ],
)
def test_announced_period_of_any_kind_has_its_bounds(text: str, first: date, after: date) -> None:
    assert parse_any_period(text) == (first, after)


def test_text_that_is_no_period_of_any_kind_is_refused_with_examples() -> None:
    with pytest.raises(ValueError, match="2024-W07"):
        parse_any_period("2024-99")


@pytest.mark.parametrize("kind", KINDS)
def test_examples_are_periods(kind: PeriodKind) -> None:
    assert label_period(parse_period(EXAMPLES[kind], kind), kind) == EXAMPLES[kind]


@pytest.mark.parametrize("kind", KINDS)
@given(day=st.dates(date(1990, 1, 1), date(2090, 1, 1)))
@settings(deadline=None, database=None, derandomize=True, max_examples=60)
def test_labels_and_steps_agree(kind: PeriodKind, day: date) -> None:
    start = next_period(
        {"month": day.replace(day=1), "week": day - timedelta(day.weekday()), "quarter": date(day.year, 1, 1)}[kind],
        kind,
    )
    after = next_period(start, kind)
    assert parse_period(label_period(start, kind), kind) == start
    assert label_period(start, kind) < label_period(after, kind)
    assert label_period(after - timedelta(1), kind) in {label_period(start, kind), f"{after - timedelta(1):%Y-%m}"}
    assert list_periods(start, after, kind) == [start, after]


def test_periods_are_listed_across_the_year() -> None:
    assert list_periods(date(2023, 11, 1), date(2024, 2, 1), "month") == [
        date(2023, 11, 1),
        date(2023, 12, 1),
        date(2024, 1, 1),
        date(2024, 2, 1),
    ]
    assert list_periods(date(2024, 2, 1), date(2024, 1, 1), "month") == []


def test_week_belongs_to_its_iso_year() -> None:
    assert year_of(date(2024, 12, 30), "week") == 2025
    assert year_of(date(2024, 12, 1), "month") == 2024
    assert [periods_a_year(kind) for kind in KINDS] == [12, 52, 4]
