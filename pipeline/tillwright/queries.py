"""Find, bind and run one numbered SQL file.

A file in `sql/` holds one pure select whose name is that of the table it makes. `select` runs it
with bound parameters and gives a frame; `define` makes a temporary view of it. Views take no
parameters in DuckDB, so `define` writes the values in as literals.
"""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import date
from functools import cache
from importlib.resources import files
from pathlib import Path
from typing import TypeAlias

import duckdb
import polars as pl

Connection: TypeAlias = duckdb.DuckDBPyConnection
Value: TypeAlias = str | int | float | bool | date | None


@dataclass(frozen=True, slots=True)
class Query:
    """One SQL file: its number, the table it makes, its five header lines and its text."""

    number: int
    name: str
    meaning: str
    grain: tuple[str, ...]
    reads: tuple[str, ...]
    params: tuple[str, ...]
    text: str


@dataclass(frozen=True, slots=True)
class Resources:
    """What a connection may use: memory as DuckDB writes it ("4GB"), threads, a spill folder."""

    memory: str = "4GB"
    threads: int | None = None
    spill: Path | None = None


def connect(resources: Resources) -> Connection:
    """A fresh in-memory DuckDB connection under the limits, without progress bar or extensions."""
    settings: dict[str, str | bool | int | float | list[str]] = {
        "memory_limit": resources.memory,
        "autoinstall_known_extensions": False,
        "autoload_known_extensions": False,
    }
    if resources.threads is not None:
        settings["threads"] = resources.threads
    if resources.spill is not None:
        settings["temp_directory"] = str(resources.spill)
    connection = duckdb.connect(config=settings)
    connection.execute("set enable_progress_bar = false")
    connection.execute("set timezone = 'UTC'")
    return connection


@cache
def load_queries() -> Mapping[str, Query]:
    """Every query by the table it makes, in the order of their numbers."""
    found = sorted(_sql_folder().glob("*.sql"))
    return {query.name: query for query in map(_read_query, found)}


def select(connection: Connection, name: str, **params: Value) -> pl.DataFrame:
    """The table of that name as a frame; parameters are bound, none may be missing or surplus."""
    frame: pl.DataFrame = connection.sql(load_queries()[name].text, params=params or None).pl()
    return frame


def define(connection: Connection, name: str, **params: Value) -> None:
    """A temporary view of that name, the parameters written in as literals."""
    query = load_queries()[name]
    if set(params) != set(query.params):
        raise ValueError(f"query {name} takes {query.params}, not {tuple(params)}")
    text = re.sub(r"\$([a-z_]+)", lambda found: literal(params[found[1]]), query.text)
    connection.execute(f"create or replace temp view {name} as {text}")


def offer(connection: Connection, name: str, source: pl.DataFrame | Sequence[Path]) -> None:
    """Make a frame, or the rows of Parquet files, readable under a table's name."""
    if isinstance(source, pl.DataFrame):
        connection.register(name, source.to_arrow())
        return
    listed = ", ".join(literal(str(path)) for path in source)
    connection.execute(f"create or replace temp view {name} as select * from read_parquet([{listed}])")


def literal(value: Value) -> str:
    """A value as a SQL literal."""
    if value is None:
        return "null"
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, date):
        return f"date '{value.isoformat()}'"
    if isinstance(value, str):
        return "'" + value.replace("'", "''") + "'"
    if isinstance(value, float):
        return f"cast('{value}' as double)"
    return str(value)


def identifier(name: str) -> str:
    """A name as a quoted SQL identifier."""
    return '"' + name.replace('"', '""') + '"'


def _sql_folder() -> Path:
    """The folder of SQL files: in the installed package, else in the repository."""
    packaged = Path(str(files("tillwright"))) / "sql"
    return packaged if packaged.is_dir() else Path(__file__).parents[2] / "sql"


def _read_query(path: Path) -> Query:
    text = path.read_text(encoding="utf-8")
    header = dict(re.findall(r"^-- (name|meaning|grain|reads|params): *(.*)$", text, flags=re.MULTILINE))
    lists = {key: tuple(part for part in re.split(r", *", header[key]) if part) for key in ("grain", "reads", "params")}
    number, name = path.stem.split("_", 1)
    if header["name"] != name:
        raise ValueError(f"{path.name} says it makes {header['name']}")
    return Query(int(number), name, header["meaning"], text=text, **lists)
