"""The columns of a delivery in their roles, as SQL expressions made from the plan.

Only this mapping is put together in code, since SQL files cannot bind column names; what is done with
the roles is in `sql/`.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from datetime import datetime
from typing import TypeAlias

from tillwright.plan import Feed
from tillwright.queries import identifier, literal
from tillwright.store.clock import shift
from tillwright.store.sources import Source

DESCRIBING_ROLES = ("description", "brand", "size", "category")
_OPTIONAL_ROLES = ("outlet", "line_id", *DESCRIBING_ROLES)
_INTEGERS = {"TINYINT", "SMALLINT", "INTEGER", "BIGINT", "UTINYINT", "USMALLINT", "UINTEGER"}
Offsets: TypeAlias = list[tuple[datetime, int]] | None
_FIRST_DAY, _LAST_DAY = "date '1900-01-01'", "date '2100-12-31'"


def select_roles(source: Source, feed: Feed, stratum: Sequence[str], offsets: Offsets = None) -> str:
    """The select that gives a delivery's columns their roles; see `deliveries.open_delivery` for its columns.

    `offsets` are those of the outlets' zone over the span of the delivery's UTC stamps, where it has such.
    """
    columns = feed.columns
    sold = getattr(columns, columns.date_role)
    optional = {role: getattr(columns, role) for role in _OPTIONAL_ROLES}
    parts = [
        f"{source.line} as line",
        f"{source.broken} as broken",
        f"{_present(sold, source)} as sold_given",
        f"{_day(sold, source, feed, offsets)} as day_read",
        f"{_item(columns.item, source)} as item",
        f"{_exact(columns.quantity, source, feed)} as units",
        f"{_amount(source, feed)} as amount",
        f"{_non_finite((columns.quantity, columns.turnover), source, feed)} as non_finite",
        f"{identifier(columns.quantity)} as quantity_given",
        f"{identifier(columns.turnover)} as turnover_given",
        f"{_stratum(source, feed, stratum)} as stratum",
        f"{source.raw} as raw",
        *(
            f"{_present(name, source, text=True) if name else 'cast(null as varchar)'} as {role}"
            for role, name in optional.items()
        ),
    ]
    day = f"case when day_read between {_FIRST_DAY} and {_LAST_DAY} then day_read end as day"
    return f"select * exclude (day_read), {day} from (select {', '.join(parts)} from {source.relation})"


def _present(name: str, source: Source, *, text: bool = False) -> str:
    """A column with blank text as null; `text` casts other types to text."""
    column = identifier(name)
    if source.types[name] == "VARCHAR":
        return f"nullif(trim({column}, e' \\t\\r'), '')"
    return f"cast({column} as varchar)" if text else column


def _item(name: str, source: Source) -> str:
    """An item code, null where blank.

    Only a code that does not begin with a printed character is trimmed line by line; blanks behind a code
    go when its lines have been summed.
    """
    column = identifier(name)
    if source.types[name] != "VARCHAR":
        return column
    return f"case when {column} >= '!' then {column} else nullif(trim({column}, e' \\t\\r'), '') end"


def _number(name: str, source: Source, feed: Feed) -> str:
    present = _present(name, source)
    if feed.decimal == "," and source.types[name] == "VARCHAR":
        return f"case when not contains({present}, '.') then replace({present}, ',', '.') end"
    return present


def _exact(name: str, source: Source, feed: Feed) -> str:
    """A column as an exact number, null where it is none.

    Decimals of up to four places and integers stay as they are stored, which sums faster than a
    wider type; all else becomes decimal(18, 4).
    """
    kind = source.types[name]
    narrow = re.fullmatch(r"DECIMAL\((\d+),(\d+)\)", kind)
    if kind in _INTEGERS or (narrow and int(narrow[1]) <= 18 and int(narrow[2]) <= 4):
        return identifier(name)
    exact = f"try_cast({_number(name, source, feed)} as decimal(18, 4))"
    return exact if source.broken == "false" else f"case when not {source.broken} then {exact} end"


def _amount(source: Source, feed: Feed) -> str:
    """Turnover less the columns to subtract, in which nothing means 0."""
    amount = _exact(feed.columns.turnover, source, feed)
    for name in feed.turnover_less:
        number = _number(name, source, feed)
        amount += f" - case when {number} is null then 0 else {_exact(name, source, feed)} end"
    return amount


def _non_finite(names: Sequence[str], source: Source, feed: Feed) -> str:
    """Whether any of the columns holds infinity or not-a-number; false for types that cannot."""
    loose = [name for name in names if source.types[name] in {"DOUBLE", "FLOAT", "VARCHAR"}]
    tests = [f"coalesce(not isfinite(try_cast({_number(name, source, feed)} as double)), false)" for name in loose]
    return " or ".join(tests) or "false"


def _stratum(source: Source, feed: Feed, stratum: Sequence[str]) -> str:
    members = [
        literal(feed.name)
        if role == "feed"
        else f"coalesce({_present(getattr(feed.columns, role), source, text=True)}, '')"
        for role in stratum
    ]
    return f"concat_ws(' / ', {', '.join(members)})" if members else "''"


def _day(name: str, source: Source, feed: Feed, offsets: Offsets) -> str:
    role, kind = feed.columns.date_role, source.types[name]
    value = _present(name, source)
    if role == "month":
        return _day_of_month(value, kind, feed, offsets)
    if role == "week" and kind == "VARCHAR":
        week = f"try_strptime({value} || '-4', ['%G-W%V-%u', '%GW%V-%u'])"
        real = f"case when strftime({week}, '%GW%V') = replace({value}, '-', '') then {week} end"
        return f"cast(coalesce({real}, {_thursday(f'try_cast({value} as date)')}) as date)"
    day = _local_day(value, kind, feed, offsets)
    return f"cast({_thursday(day)} as date)" if role == "week" else day


def _thursday(day: str) -> str:
    return f"date_trunc('week', {day}) + interval 3 day"


def _day_of_month(value: str, kind: str, feed: Feed, offsets: Offsets) -> str:
    if kind == "DATE" or kind.startswith("TIMESTAMP"):
        return _local_day(value, kind, feed, offsets)
    text = f"cast({value} as varchar)"
    digits = f"regexp_replace({text}, '^(\\d{{4}})-?(\\d{{2}})$', '\\1-\\2-01')"
    return f"try_cast({digits} as date)"


def utc_stamp(value: str, kind: str, feed: Feed) -> str | None:
    """A time stamp column as naive UTC; None if it is no UTC stamp, or the outlets keep UTC."""
    if feed.timezone == "UTC" or not kind.startswith("TIMESTAMP"):
        return None
    if _is_aware(kind):
        return f"make_timestamp(epoch_us(cast({value} as timestamp with time zone)))"
    return f"cast({value} as timestamp)" if feed.stamped_in == "UTC" else None


def _is_aware(kind: str) -> bool:
    return kind.startswith("TIMESTAMPTZ") or kind == "TIMESTAMP WITH TIME ZONE"


def _local_day(value: str, kind: str, feed: Feed, offsets: Offsets) -> str:
    """The outlet's calendar day of a date or time stamp."""
    zone, stamped = literal(feed.timezone), feed.stamped_in or feed.timezone
    if kind == "DATE":
        return value
    utc = utc_stamp(value, kind, feed)
    if utc is not None and offsets:
        return f"cast({shift(utc, offsets)} as date)"
    if _is_aware(kind):
        return f"cast(timezone({zone}, {value}) as date)"
    naive = value if kind.startswith("TIMESTAMP") else f"try_cast({value} as timestamp)"
    if stamped != feed.timezone:
        naive = f"timezone({zone}, timezone({literal(stamped)}, {naive}))"
    if kind != "VARCHAR":
        return f"cast({naive} as date)"
    offset = f"regexp_matches({value}, '(Z|[+-]\\d\\d:?\\d*)$') and contains({value}, ':')"
    return f"cast(case when {offset} then timezone({zone}, try_cast({value} as timestamptz)) else {naive} end as date)"
