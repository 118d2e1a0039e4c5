"""One case of a SQL file: small input tables, parameters, and the table that must come out.

`schema.toml` of a query lists its parameters and the columns of what it reads, as "TYPE" or "TYPE = default";
a case's input CSV has the columns that matter and the others take their defaults. Queries named in `views` are
defined first, so that a case starts from the lines of a delivery. An empty parameter is null; an empty cell is
null and "" an empty text. `expected.csv` has the columns that the case is about.
"""

import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from typing import Any

import polars as pl

from tillwright.queries import Connection, Value, define, identifier, literal, load_queries, offer, select

HERE = Path(__file__).parent


@dataclass(frozen=True, slots=True)
class Schema:
    """What a query takes: default parameters, columns by table, and the queries it stands on."""

    params: Mapping[str, Value]
    tables: Mapping[str, Mapping[str, str]]
    views: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Case:
    """A folder with `case.toml` (says, source, params), input tables and `expected.csv`."""

    folder: Path

    @property
    def query(self) -> str:
        return self.folder.parent.name

    @property
    def about(self) -> dict[str, Any]:
        return tomllib.loads((self.folder / "case.toml").read_text(encoding="utf-8"))


def cases() -> list[Case]:
    """Every case, by query and name."""
    return [Case(path.parent) for path in sorted(HERE.glob("*/*/case.toml"))]


@cache
def schema_of(query: str) -> Schema:
    """The schema of a query together with those of the queries it stands on."""
    raw = tomllib.loads((HERE / query / "schema.toml").read_text(encoding="utf-8"))
    views: list[str] = []
    params: dict[str, Value] = {}
    tables: dict[str, Mapping[str, str]] = {}
    for name in raw.get("views", ()):
        below = schema_of(name)
        views += [*below.views, name]
        params |= below.params
        tables |= below.tables
    return Schema(params | raw.get("params", {}), tables | raw.get("tables", {}), tuple(views))


def run(
    connection: Connection, query: str, folder: Path | None = None, params: Mapping[str, Value] | None = None
) -> Any:
    """The table that a query makes of a case's inputs, or of empty ones."""
    schema = schema_of(query)
    values = {name: None if value == "" else value for name, value in {**schema.params, **(params or {})}.items()}
    for table, columns in schema.tables.items():
        offer(connection, table, _read(connection, columns, folder / f"{table}.csv" if folder else None))
    for view in schema.views:
        define(connection, view, **_taken(view, values))
    return select(connection, query, **_taken(query, values))


def expected(connection: Connection, folder: Path, actual: pl.DataFrame) -> pl.DataFrame:
    """The expected table, its columns of the types that came out."""
    offer(connection, "actual", actual)
    types = {row[0]: row[1] for row in connection.execute("describe actual").fetchall()}
    path = folder / "expected.csv"
    header = path.read_text(encoding="utf-8").splitlines()[0].split(",")
    return _read(connection, {name: types[name] for name in header}, path)


def _taken(query: str, values: Mapping[str, Value]) -> dict[str, Value]:
    return {name: values[name] for name in load_queries()[query].params}


def _read(connection: Connection, columns: Mapping[str, str], path: Path | None) -> pl.DataFrame:
    """A CSV with the columns and defaults of a schema; without a file, no rows."""
    source, there = "(select 1) where false", []
    if path is not None and path.exists():
        there = path.read_text(encoding="utf-8").splitlines()[0].split(",")
        unknown = set(there) - set(columns)
        assert not unknown, f"{path} has columns that the schema does not know: {unknown}"
        source = f"read_csv({literal(str(path))}, all_varchar = true, header = true, allow_quoted_nulls = false)"
    parts = []
    for name, described in columns.items():
        kind, _, default = described.partition(" = ")
        value = identifier(name) if name in there else default or "null"
        parts.append(f"cast({value} as {kind}) as {identifier(name)}")
    frame: pl.DataFrame = connection.sql(f"select {', '.join(parts)} from {source}").pl()
    return frame
