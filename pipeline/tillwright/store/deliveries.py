"""Deliveries as they lie on disk, opened for SQL as one relation of roles."""

from __future__ import annotations

import csv
import gzip
import hashlib
import re
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import IO, cast

import duckdb
import polars as pl

from tillwright.errors import DataError, UnreadableDeliveries, UnreadableFile
from tillwright.plan import Feed
from tillwright.queries import Connection, identifier, literal, offer, select

TEXT_SUFFIXES = (".csv", ".csv.gz")
DESCRIBING_ROLES = ("description", "brand", "size", "category")
_OPTIONAL_ROLES = ("outlet", "line_id", *DESCRIBING_ROLES)
_INTEGERS = {"TINYINT", "SMALLINT", "INTEGER", "BIGINT", "UTINYINT", "USMALLINT", "UINTEGER"}
_BLOCK = 1 << 20


@dataclass(frozen=True, slots=True)
class Source:
    """A delivery as a relation: where its columns come from and of which type they are."""

    relation: str
    types: dict[str, str]
    raw: str
    broken: str
    line: str


def hash_file(path: Path) -> str:
    """SHA-256 of a file's bytes, as 64 hexadecimal digits."""
    digest = hashlib.sha256()
    with path.open("rb") as file:
        while block := file.read(_BLOCK):
            digest.update(block)
    return digest.hexdigest()


def open_delivery(connection: Connection, path: Path, feed: Feed, stratum: Sequence[str]) -> None:
    """Make one delivery readable as `received`, `repeats` and `malformed`.

    `received` has one row per line: line, broken, sold_given, day, item, outlet, units, amount,
    non_finite, quantity_given, turnover_given, line_id, stratum, description, brand, size, category,
    raw. Blank text is null, and so are units and amount that are no numbers. `amount` is turnover less
    what the feed subtracts. `day` is the local day of sale; of a weekly line, the week's Thursday.

    Raises
    ------
    UnreadableDeliveries : the file is not what its name says, or lacks columns that the plan maps.
    """
    with reading(path, feed):
        source = _open_text(path, feed) if _is_text(path) else _open_parquet(connection, path)
        _check_columns(source, feed)
        roles = _roles(source, feed, stratum)
        if _is_text(path):
            connection.execute(f"create or replace temp table received_text as {roles}")
            roles = "select * from received_text"
        connection.execute(f"create or replace temp view received as {roles}")
        offer(connection, "repeats", _repeats(connection, feed))
        offer(connection, "malformed", _malformed(connection, feed))


@contextmanager
def reading(path: Path, feed: Feed) -> Iterator[None]:
    """Turn what goes wrong while a delivery is read into an error about that delivery."""
    try:
        yield
    except duckdb.OutOfMemoryException as error:
        raise DataError(
            f"{path.name} (feed {feed.name}) needs more memory than it may use: {_first_sentence(str(error))} "
            "Give more with --memory, such as --memory 8GB."
        ) from None
    except (duckdb.Error, OSError, EOFError, UnicodeError, csv.Error) as error:
        raise UnreadableDeliveries([UnreadableFile(feed.name, path.name, _reason(path, feed, error))]) from None


def _repeats(connection: Connection, feed: Feed) -> pl.DataFrame:
    if feed.columns.line_id is None:
        return pl.DataFrame(schema={"line_id": pl.String, "first_line": pl.Int64})
    return select(connection, "repeats")


def _malformed(connection: Connection, feed: Feed) -> pl.DataFrame:
    if feed.item_code == "any":
        kind = connection.execute("describe select item from received").fetchall()[0][1]
        return pl.DataFrame(schema={"item": pl.String if kind == "VARCHAR" else pl.Int64})
    return select(connection, "malformed")


def _reason(path: Path, feed: Feed, error: Exception) -> str:
    text = str(error)
    if "unicode" in text.lower() or "encod" in text.lower() or isinstance(error, UnicodeError):
        return f"it is not {feed.encoding} text as the plan says (feed.encoding)"
    if _is_text(path):
        return f"it cannot be read as CSV: {_first_sentence(text)}"
    return f"it cannot be read as Parquet, is cut off or damaged: {_first_sentence(text)}"


def _first_sentence(text: str) -> str:
    line = text.strip().splitlines()[0] if text.strip() else "no reason given"
    return line.split(": ", 1)[-1].replace("'" + str(Path.cwd()), "'")


def _is_text(path: Path) -> bool:
    return path.name.lower().endswith(TEXT_SUFFIXES)


def _open_parquet(connection: Connection, path: Path) -> Source:
    relation = f"read_parquet({literal(str(path))}, file_row_number = true)"
    described = connection.execute(f"describe select * from read_parquet({literal(str(path))})").fetchall()
    types = {row[0]: row[1] for row in described}
    members = ", ".join(f"{literal(name)}: {identifier(name)}" for name in types)
    return Source(relation, types, f"{{{members}}}", "false", "file_row_number + 1")


def _open_text(path: Path, feed: Feed) -> Source:
    """A CSV as one row per physical line, cut into cells in SQL.

    Line by line because a line that does not fit must be kept as it came: readers that cut cells
    on their own were seen to drop the rest of a file after an unclosed quote.
    """
    opener = gzip.open if path.name.lower().endswith(".gz") else open
    with cast(IO[str], opener(path, "rt", encoding=_codec(feed.encoding), newline="")) as file:
        names = next(csv.reader(file, delimiter=feed.delimiter), [])
    if not names:
        raise csv.Error("it is empty")
    cut = literal(feed.delimiter)
    code = f"\\x{{{ord(feed.delimiter):x}}}"
    pattern = literal(f'{code}("(?:[^"]|"")*"|[^"{code}]*)')
    cells = (
        f"case when contains(text, '\"') then regexp_extract_all({cut} || text, {pattern}, 1) "
        f"else string_split(text, {cut}) end"
    )
    named = ", ".join(f"{_unquoted(f'cells[{n + 1}]')} as {identifier(name)}" for n, name in enumerate(names))
    lines = (
        f"read_csv({literal(str(path))}, columns = {{'text': 'VARCHAR'}}, header = false, skip = 1, "
        f"delim = '\\x01', quote = '', escape = '', encoding = {literal(feed.encoding)}, auto_detect = false, "
        "max_line_size = 16777216)"
    )
    relation = (
        f"(select line, text, {named}, len(cells) <> {len(names)} or array_to_string(cells, {cut}) <> text as broken "
        f"from (select line, text, {cells} as cells "
        f"from (select row_number() over () + 1 as line, text from {lines}) where text is not null))"
    )
    return Source(relation, dict.fromkeys(names, "VARCHAR"), "text", "broken", "line")


def _codec(encoding: str) -> str:
    return "utf-8-sig" if encoding == "utf-8" else encoding


def _unquoted(cell: str) -> str:
    return f"case when starts_with({cell}, '\"') then replace({cell}[2:-2], '\"\"', '\"') else {cell} end"


def _check_columns(source: Source, feed: Feed) -> None:
    asked = [name for name in feed.columns.model_dump().values() if name is not None]
    missing = [name for name in dict.fromkeys([*asked, *feed.turnover_less]) if name not in source.types]
    if missing:
        names = ", ".join(f"'{name}'" for name in missing)
        present = ", ".join(f"'{name}'" for name in source.types)
        raise csv.Error(f"it has no column {names}, which the plan maps; its columns are {present}")


def _roles(source: Source, feed: Feed, stratum: Sequence[str]) -> str:
    """The select that gives a delivery's columns their roles."""
    columns = feed.columns
    sold = getattr(columns, columns.date_role)
    optional = {role: getattr(columns, role) for role in _OPTIONAL_ROLES}
    parts = [
        f"{source.line} as line",
        f"{source.broken} as broken",
        f"{_present(sold, source)} as sold_given",
        f"{_day(sold, source, feed)} as day",
        f"{_present(columns.item, source)} as item",
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
    return f"select {', '.join(parts)} from {source.relation}"


def _present(name: str, source: Source, *, text: bool = False) -> str:
    """A column with blank text as null; `text` casts other types to text."""
    column = identifier(name)
    if source.types[name] == "VARCHAR":
        return f"nullif(trim({column}), '')"
    return f"cast({column} as varchar)" if text else column


def _number(name: str, source: Source, feed: Feed) -> str:
    present = _present(name, source)
    if feed.decimal == "," and source.types[name] == "VARCHAR":
        return f"replace({present}, ',', '.')"
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


def _day(name: str, source: Source, feed: Feed) -> str:
    role, kind = feed.columns.date_role, source.types[name]
    value = _present(name, source)
    if role == "month":
        return _day_of_month_role(value, kind)
    if role == "week" and kind == "VARCHAR":
        week = f"try_strptime({value} || '-4', ['%G-W%V-%u', '%GW%V-%u'])"
        return f"cast(coalesce({week}, {_thursday(f'try_cast({value} as date)')}) as date)"
    day = _local_day(value, kind, feed)
    return f"cast({_thursday(day)} as date)" if role == "week" else day


def _thursday(day: str) -> str:
    return f"date_trunc('week', {day}) + interval 3 day"


def _day_of_month_role(value: str, kind: str) -> str:
    if kind == "DATE" or kind.startswith("TIMESTAMP"):
        return f"cast({value} as date)"
    text = f"cast({value} as varchar)"
    digits = f"regexp_replace({text}, '^(\\d{{4}})-?(\\d{{2}})$', '\\1-\\2-01')"
    return f"try_cast({digits} as date)"


def _local_day(value: str, kind: str, feed: Feed) -> str:
    """The outlet's calendar day of a date or time stamp."""
    zone, stamped = literal(feed.timezone), feed.stamped_in or feed.timezone
    if kind == "DATE":
        return value
    if kind == "TIMESTAMP WITH TIME ZONE":
        return f"cast(timezone({zone}, {value}) as date)"
    naive = value if kind.startswith("TIMESTAMP") else f"try_cast({value} as timestamp)"
    if stamped != feed.timezone:
        naive = f"timezone({zone}, timezone({literal(stamped)}, {naive}))"
    if kind != "VARCHAR":
        return f"cast({naive} as date)"
    offset = f"regexp_matches({value}, '(Z|[+-]\\d\\d:?\\d*)$') and contains({value}, ':')"
    return f"cast(case when {offset} then timezone({zone}, try_cast({value} as timestamptz)) else {naive} end as date)"
