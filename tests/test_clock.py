"""Local time by comparison with the moments at which a zone's offset changes; zoneinfo is the reference."""

from datetime import UTC, datetime, timedelta
from zoneinfo import ZoneInfo

import duckdb
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tillwright.store.clock import LONGEST, find_offsets, shift

ZONES = [
    "America/Halifax",
    "America/New_York",
    "Europe/Lisbon",
    "Australia/Lord_Howe",
    "Asia/Kathmandu",
    "Pacific/Apia",
]
STAMPS = st.datetimes(datetime(2005, 1, 1), datetime(2030, 1, 1)).map(lambda stamp: stamp.replace(microsecond=0))


@pytest.mark.parametrize("zone", ZONES)
@settings(max_examples=30, deadline=None)
@given(stamps=st.lists(STAMPS, min_size=1, max_size=20))
def test_shifted_stamps_are_those_of_the_time_zone_database(zone: str, stamps: list[datetime]) -> None:
    moved = shift("stamp", find_offsets(min(stamps), max(stamps), zone))
    rows = ", ".join(f"({number}, timestamp '{stamp}')" for number, stamp in enumerate(stamps))
    query = f"select {moved} from (values {rows}) as given(number, stamp) order by number"
    expected = [stamp.replace(tzinfo=UTC).astimezone(ZoneInfo(zone)).replace(tzinfo=None) for stamp in stamps]
    assert [row[0] for row in duckdb.execute(query).fetchall()] == expected


@pytest.mark.parametrize(
    ("moment", "local"),
    [
        # IANA time zone database, America/New_York: summer time began on 12 March 2017 at 2:00 local, 7:00 UTC.
        (datetime(2017, 3, 12, 6, 59, 59), datetime(2017, 3, 12, 1, 59, 59)),
        (datetime(2017, 3, 12, 7, 0, 0), datetime(2017, 3, 12, 3, 0, 0)),
    ],
)
def test_offset_changes_at_the_very_second(moment: datetime, local: datetime) -> None:
    offsets = find_offsets(datetime(2017, 1, 1), datetime(2017, 12, 31), "America/New_York")
    held = max(offset for offset in offsets if offset[0] <= moment)
    assert moment + timedelta(seconds=held[1]) == local


def test_span_that_takes_too_long_is_refused() -> None:
    first = datetime(1900, 1, 1)
    with pytest.raises(ValueError, match="longer than"):
        find_offsets(first, first + LONGEST + timedelta(days=1), "Europe/Lisbon")
