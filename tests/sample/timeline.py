"""Days, weeks and months of the sample, and its seeded random streams."""

import zlib
from collections.abc import Iterator
from datetime import date, timedelta

import numpy as np
from numpy.typing import NDArray

SEED = 20_240_611
YEARS = (2022, 2023, 2024)
MONTHS = tuple(f"{year}-{month:02d}" for year in YEARS for month in range(1, 13))
FIRST_MONDAY = date(2021, 12, 27)
DAYS = tuple(date(2022, 1, 1) + timedelta(days=n) for n in range(1096))
MONDAYS = tuple(FIRST_MONDAY + timedelta(weeks=n) for n in range(158))


def stream(*keys: str | int) -> np.random.Generator:
    """Return the random stream of a purpose, independent of every other purpose's."""
    words = [zlib.crc32(str(key).encode()) for key in keys]
    return np.random.Generator(np.random.PCG64(np.random.SeedSequence([SEED, *words])))


def month_of(day: date) -> str:
    """Return the calendar month of a day, `2024-03`."""
    return f"{day:%Y-%m}"


def week_of(day: date) -> int:
    """Return the position of a day's week among `MONDAYS`."""
    return (day - FIRST_MONDAY).days // 7


def days_of(month: str) -> tuple[date, ...]:
    """Return the days of a month."""
    return tuple(day for day in DAYS if month_of(day) == month)


def weeks_of(month: str) -> tuple[int, ...]:
    """Return the weeks whose Thursday lies in a month."""
    return tuple(n for n, monday in enumerate(MONDAYS) if month_of(monday + timedelta(days=3)) == month)


def month_of_weeks() -> NDArray[np.int64]:
    """Return the month position of every week by its Thursday, held within the sample's months."""
    thursdays = [monday + timedelta(days=3) for monday in MONDAYS]
    positions = [12 * (day.year - YEARS[0]) + day.month - 1 for day in thursdays]
    return np.clip(np.array(positions, dtype=np.int64), 0, len(MONTHS) - 1)


def numbered_months() -> Iterator[tuple[int, str]]:
    """Yield the position and name of every month."""
    yield from enumerate(MONTHS)
