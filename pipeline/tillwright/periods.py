"""Calendar periods: months, ISO weeks and quarters, each known by its first day."""

from __future__ import annotations

import re
from collections.abc import Sequence
from datetime import date, timedelta

from tillwright.choices import PeriodKind

_PATTERNS: dict[PeriodKind, str] = {
    "month": r"(\d{4})-?(0[1-9]|1[0-2])",
    "week": r"(\d{4})-?W(0[1-9]|[1-4]\d|5[0-3])",
    "quarter": r"(\d{4})-?Q([1-4])",
}
EXAMPLES: dict[PeriodKind, str] = {"month": "2024-03", "week": "2024-W07", "quarter": "2024-Q1"}


def parse_period(text: str, kind: PeriodKind) -> date:
    """First day of a period written as 2024-03, 2024-W07 or 2024-Q1 (the hyphen may be missing).

    Raises ValueError where the text is not a period of that kind.
    Reference: ISO 8601-1:2019 for weeks.
    """
    found = re.fullmatch(_PATTERNS[kind], text)
    if found is None:
        raise ValueError(f"'{text}' is not a {kind} such as {EXAMPLES[kind]}")
    year, number = int(found[1]), int(found[2])
    if kind == "month":
        return date(year, number, 1)
    if kind == "quarter":
        return date(year, 3 * number - 2, 1)
    return date.fromisocalendar(year, number, 1)


def parse_any_period(text: str) -> tuple[date, date]:
    """First day of a period of whichever kind, and first day after it."""
    for kind, pattern in _PATTERNS.items():
        if re.fullmatch(pattern, text):
            start = parse_period(text, kind)
            return start, next_period(start, kind)
    raise ValueError(f"'{text}' is not a period such as {', '.join(EXAMPLES.values())}")


def label_period(start: date, kind: PeriodKind) -> str:
    """The period as people write it: 2024-03, 2024-W07, 2024-Q1."""
    if kind == "month":
        return f"{start:%Y-%m}"
    if kind == "quarter":
        return f"{start.year}-Q{(start.month + 2) // 3}"
    year, week, _ = start.isocalendar()
    return f"{year}-W{week:02d}"


def next_period(start: date, kind: PeriodKind) -> date:
    """First day of the period after the one that starts on `start`."""
    if kind == "week":
        return start + timedelta(days=7)
    months = 12 * start.year + start.month - 1 + (3 if kind == "quarter" else 1)
    return date(months // 12, months % 12 + 1, 1)


def list_periods(first: date, last: date, kind: PeriodKind) -> list[date]:
    """First days of every period from the one that starts on `first` to that of `last`."""
    periods = []
    while first <= last:
        periods.append(first)
        first = next_period(first, kind)
    return periods


def period_number(day: date, kind: PeriodKind) -> int:
    """Running number of the period that holds a day, as the query `lines` counts them.

    Months and quarters since the year 0, weeks since Monday 5 January 1970.
    """
    if kind == "month":
        return 12 * day.year + day.month - 1
    if kind == "quarter":
        return 4 * day.year + (day.month - 1) // 3
    return (day - date(1970, 1, 5)).days // 7


def year_of(start: date, kind: PeriodKind) -> int:
    """Calendar year of a period; for weeks the ISO year."""
    return start.isocalendar()[0] if kind == "week" else start.year


def year_and_month(start: date, kind: PeriodKind) -> tuple[int, int]:
    """Calendar year and month that a period ends in; a week belongs where its Thursday lies."""
    if kind == "week":
        thursday = start + timedelta(days=3)
        return thursday.year, thursday.month
    return start.year, start.month + (2 if kind == "quarter" else 0)


def link_years(labels: Sequence[object], link_month: int) -> list[int] | None:
    """The year that each period belongs to, a year ending with its link month.

    `labels` are dates, text such as 2024-03, 2024-W07, 2024-Q1 or 2024-03-31, or integers such as 202403.
    None where they do not tell a month.
    """
    years = []
    for label in labels:
        try:
            year, month = _month_of(label)
        except ValueError:
            return None
        years.append(year + (month > link_month))
    return years


def _month_of(label: object) -> tuple[int, int]:
    if isinstance(label, date):
        return label.year, label.month
    text = str(label)
    for kind, pattern in _PATTERNS.items():
        if re.fullmatch(pattern, text):
            return year_and_month(parse_period(text, kind), kind)
    day = date.fromisoformat(text)
    return day.year, day.month


def periods_of_year(year: int, kind: PeriodKind) -> list[date]:
    """First days of every period of a calendar year; for weeks of the ISO year."""
    first = date.fromisocalendar(year, 1, 1) if kind == "week" else date(year, 1, 1)
    after = date.fromisocalendar(year + 1, 1, 1) if kind == "week" else date(year + 1, 1, 1)
    return list_periods(first, after - timedelta(days=1), kind)


def periods_a_year(kind: PeriodKind) -> int:
    """Periods between a period and the same one a year before; 52 for weeks."""
    return {"month": 12, "week": 52, "quarter": 4}[kind]
