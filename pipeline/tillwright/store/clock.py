"""Local time by comparison: the offsets of a time zone over a span, as one SQL expression.

Converting every time stamp through a time-zone library costs ten times as much as reading it.  Over
the span of one delivery a zone has few offsets, so each stamp is compared with the moments at which
they change.
"""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from itertools import pairwise
from zoneinfo import ZoneInfo

_DAY, _SECOND = timedelta(days=1), timedelta(seconds=1)
# Offsets are looked up day by day, and a stray date must not make that take long.
LONGEST = timedelta(days=366 * 120)


def find_offsets(first: datetime, last: datetime, zone: str) -> list[tuple[datetime, int]]:
    """Moments in UTC (naive) from which an offset in seconds holds, the first at or before `first`.

    Raises ValueError where the span is longer than `LONGEST`.
    """
    if last - first > LONGEST:
        raise ValueError(f"from {first} to {last} is longer than {LONGEST.days} days")
    local = ZoneInfo(zone)
    found = [(first, _offset(first, local))]
    moment = first
    while moment < last:
        following = min(moment + _DAY, last)
        if _offset(following, local) != found[-1][1]:
            change = _bisect(moment, following, local)
            found.append((change, _offset(change, local)))
        moment = following
    return found


def shift(stamp: str, offsets: list[tuple[datetime, int]]) -> str:
    """SQL for a naive UTC time stamp moved to local time by the offsets of its span."""
    cases = [
        f"when {stamp} < timestamp '{until}' then interval '{seconds} seconds'"
        for (_, seconds), (until, _) in pairwise(offsets)
    ]
    last = f"interval '{offsets[-1][1]} seconds'"
    return f"({stamp} + case {' '.join(cases)} else {last} end)" if cases else f"({stamp} + {last})"


def _bisect(low: datetime, high: datetime, local: ZoneInfo) -> datetime:
    """First second of (low, high] at which the offset is that of `high`."""
    while high - low > _SECOND:
        middle = low + (high - low) / 2
        middle -= timedelta(microseconds=middle.microsecond)
        if middle <= low:
            break
        low, high = (low, middle) if _offset(middle, local) == _offset(high, local) else (middle, high)
    return high.replace(microsecond=0) if high.microsecond else high


def _offset(moment: datetime, local: ZoneInfo) -> int:
    offset = moment.replace(tzinfo=UTC).astimezone(local).utcoffset()
    return int(offset.total_seconds()) if offset else 0
