"""Parquet and CSV files as relations that SQL can read, one row per line."""

from __future__ import annotations

import csv
import gzip
from dataclasses import dataclass
from pathlib import Path
from typing import IO, cast

from tillwright.plan import Feed
from tillwright.queries import Connection, identifier, literal

TEXT_SUFFIXES = (".csv", ".csv.gz", ".tsv", ".tsv.gz", ".txt", ".txt.gz")
# Names of the reader's own columns: a control character keeps them apart from any header.
_TEXT, _LINE, _BROKEN, _CELLS = ('"\x1ftext"', '"\x1fline"', '"\x1fbroken"', '"\x1fcells"')


class Unfit(Exception):
    """A file that cannot be used; the message completes a sentence about it."""


@dataclass(frozen=True, slots=True)
class Source:
    """A delivery as a relation, the types of its columns, and expressions for raw row, state and number of a line."""

    relation: str
    types: dict[str, str]
    raw: str
    broken: str
    line: str


def is_text(path: Path) -> bool:
    """Whether a file is read as CSV."""
    return path.name.lower().endswith(TEXT_SUFFIXES)


def open_source(connection: Connection, path: Path, feed: Feed) -> Source:
    """A file as a relation.

    Raises
    ------
    Unfit : an empty file, a header that names a column twice, or an encoding that is not read.
    """
    return _open_text(path, feed) if is_text(path) else _open_parquet(connection, path)


def count_text_lines(path: Path, feed: Feed) -> int:
    """Lines of a CSV that are not blank, its header apart: a count that owes nothing to the reader."""
    with _open(path, feed, newline=None) as file:
        return sum(1 for line in file if line.strip("\n")) - 1


def _open(path: Path, feed: Feed, newline: str | None) -> IO[str]:
    opener = gzip.open if path.name.lower().endswith(".gz") else open
    codec = "utf-8-sig" if feed.encoding == "utf-8" else feed.encoding
    return cast(IO[str], opener(path, "rt", encoding=codec, newline=newline))


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
    with _open(path, feed, newline="") as file:
        names = next(csv.reader(file, delimiter=feed.delimiter), [])
    if not names:
        raise Unfit("it is empty")
    if feed.encoding == "utf-16" and _starts_high(path):
        raise Unfit("it is UTF-16 with the high byte first, which is not read; ask for the low byte first, or UTF-8")
    names = [name or f"column {position}" for position, name in enumerate(names, start=1)]
    _check_header(names)
    cut = literal(feed.delimiter)
    code = f"\\x{{{ord(feed.delimiter):x}}}"
    pattern = literal(f'{code}("(?:[^"]|"")*"|[^"{code}]*)')
    cells = (
        f"case when contains({_TEXT}, '\"') then regexp_extract_all({cut} || {_TEXT}, {pattern}, 1) "
        f"else string_split({_TEXT}, {cut}) end"
    )
    named = ", ".join(f"{_unquoted(f'{_CELLS}[{n + 1}]')} as {identifier(name)}" for n, name in enumerate(names))
    lines = (
        f"read_csv({literal(str(path))}, columns = {{'text': 'VARCHAR'}}, header = false, skip = 1, "
        "delim = '\\x01', quote = '', escape = '', strict_mode = false, auto_detect = false, "
        f"encoding = {literal(feed.encoding)}, max_line_size = 16777216)"
    )
    broken = f"len({_CELLS}) <> {len(names)} or array_to_string({_CELLS}, {cut}) <> {_TEXT}"
    relation = (
        f"(select {_LINE}, {_TEXT}, {named}, {broken} as {_BROKEN} "
        f"from (select {_LINE}, {_TEXT}, {cells} as {_CELLS} "
        f"from (select row_number() over () + 1 as {_LINE}, text as {_TEXT} from {lines}) where {_TEXT} is not null))"
    )
    return Source(relation, dict.fromkeys(names, "VARCHAR"), _TEXT, _BROKEN, _LINE)


def _starts_high(path: Path) -> bool:
    opener = gzip.open if path.name.lower().endswith(".gz") else open
    with cast(IO[bytes], opener(path, "rb")) as file:
        return file.read(2) == b"\xfe\xff"


def _check_header(names: list[str]) -> None:
    seen: set[str] = set()
    for name in names:
        if name.casefold() in seen:
            raise Unfit(f"its header names the column '{name}' twice")
        seen.add(name.casefold())


def _unquoted(cell: str) -> str:
    return f"case when starts_with({cell}, '\"') then replace({cell}[2:-2], '\"\"', '\"') else {cell} end"
