"""Deliveries as they lie on disk, opened for SQL as one relation of roles."""

from __future__ import annotations

import csv
import gzip
import hashlib
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path

import duckdb

from tillwright.errors import DataError, UnreadableDeliveries, UnreadableFile
from tillwright.plan import Feed
from tillwright.queries import Connection, define, identifier, offer, select
from tillwright.store.clock import find_offsets
from tillwright.store.roles import Offsets, select_roles, utc_stamp
from tillwright.store.sources import Source, Unfit, count_text_lines, is_text, open_source

_BLOCK = 1 << 20


def hash_file(path: Path) -> str:
    """SHA-256 of a file's bytes, as 64 hexadecimal digits."""
    digest = hashlib.sha256()
    with path.open("rb") as file:
        while block := file.read(_BLOCK):
            digest.update(block)
    return digest.hexdigest()


def open_delivery(connection: Connection, path: Path, feed: Feed, stratum: Sequence[str]) -> None:
    """Make one delivery readable as `received`, and as `marked`, which also says what `sql/` marks on its lines.

    `received` has one row per line: line, broken, sold_given, day, item, outlet, units, amount,
    non_finite, quantity_given, turnover_given, line_id, stratum, description, brand, size, category,
    raw. Blank text is null, and so are units and amount that are no numbers. `amount` is turnover less
    what the feed subtracts. `day` is the local day of sale; of a weekly line, the week's Thursday.

    Raises
    ------
    UnreadableDeliveries : the file is not what its name says, or lacks columns that the plan maps.
    """
    with reading(path, feed):
        source = open_source(connection, path, feed)
        _check_columns(source, feed)
        roles = select_roles(source, feed, stratum, _offsets(connection, source, feed))
        if is_text(path):
            connection.execute(f"create or replace temp table received_text as {roles}")
            _check_count(connection, path, feed)
            roles = "select * from received_text"
        connection.execute(f"create or replace temp view received as {roles}")
        _mark(connection, feed)


@contextmanager
def reading(path: Path, feed: Feed) -> Iterator[None]:
    """Turn what is wrong with a delivery into an error about it; what is wrong with the disk stays an OSError."""
    try:
        yield
    except duckdb.OutOfMemoryException as error:
        raise DataError(
            f"{path.name} (feed {feed.name}) needs more memory than it may use: {_first_sentence(str(error))} "
            "Give more with --memory, such as --memory 8GB."
        ) from None
    except (Unfit, duckdb.Error, gzip.BadGzipFile, EOFError, UnicodeError, csv.Error) as error:
        raise UnreadableDeliveries([UnreadableFile(feed.name, path.name, _reason(path, feed, error))]) from None


def _offsets(connection: Connection, source: Source, feed: Feed) -> Offsets:
    """Offsets of the outlets' zone over the delivery's UTC stamps; None if it has none, or they span too long."""
    column = getattr(feed.columns, feed.columns.date_role)
    stamp = utc_stamp(identifier(column), source.types[column], feed)
    if stamp is None:
        return None
    first, last = connection.execute(f"select min({stamp}), max({stamp}) from {source.relation}").fetchall()[0]
    try:
        return None if first is None else find_offsets(first, last, feed.timezone)
    except (ValueError, OverflowError):
        return None


def _mark(connection: Connection, feed: Feed) -> None:
    """Define `marked`; without identifiers or GTINs to look up, no line pays for a join."""
    if feed.columns.line_id is None and feed.item_code == "any":
        connection.execute(
            "create or replace temp view marked as "
            "select *, false as repeated, false as malformed_item_code from received"
        )
        return
    offer(connection, "repeats", select(connection, "repeats"))
    malformed = select(connection, "malformed")
    offer(connection, "malformed", malformed if feed.item_code == "gtin" else malformed.clear())
    define(connection, "marked")


def _reason(path: Path, feed: Feed, error: Exception) -> str:
    text = str(error)
    if isinstance(error, Unfit):
        return text
    if "unicode" in text.lower() or "encod" in text.lower() or isinstance(error, UnicodeError):
        return f"it is not {feed.encoding} text as the plan says (feed.encoding)"
    if is_text(path):
        return f"it cannot be read as CSV: {_first_sentence(text)}"
    return f"it cannot be read as Parquet, is cut off or damaged: {_first_sentence(text)}"


def _first_sentence(text: str) -> str:
    line = text.strip().splitlines()[0] if text.strip() else "no reason given"
    return line.split(": ", 1)[-1].replace("'" + str(Path.cwd()), "'")


def _check_count(connection: Connection, path: Path, feed: Feed) -> None:
    """No line of a CSV may be lost on the way: what SQL reads is held against a plain count."""
    row = connection.execute("select count(*) from received_text").fetchall()[0]
    counted = count_text_lines(path, feed)
    if int(row[0]) != counted:
        raise Unfit(f"its line ends are mixed: it has {counted} lines by one count and {row[0]} by another")


def _check_columns(source: Source, feed: Feed) -> None:
    asked = [name for name in feed.columns.model_dump().values() if name is not None]
    missing = [name for name in dict.fromkeys([*asked, *feed.turnover_less]) if name not in source.types]
    if missing:
        names = ", ".join(f"'{name}'" for name in missing)
        present = ", ".join(f"'{name}'" for name in source.types)
        raise Unfit(f"it has no column {names}, which the plan maps; its columns are {present}")
