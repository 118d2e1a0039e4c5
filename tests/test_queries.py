"""Every SQL file against its own header, the engine's view of it, and the declared tables."""

import re
from collections.abc import Iterator
from datetime import date
from pathlib import Path

import duckdb
import polars as pl
import pytest

from tests.sql.case import run, schema_of
from tillwright import queries
from tillwright.queries import Connection, Query, Resources, Value, connect, define, load_queries, offer, select
from tillwright.tables import TABLES

SQL = sorted((Path(__file__).parents[1] / "sql").glob("*.sql"))
QUERIES = list(load_queries().values())
# A view that others sum over is not sorted for its own sake; every other query makes a table or a frame.
UNSORTED_VIEWS = {"lines", "marked"}
# Lines and turnover received; what was accepted and refused is set beside them once both are known.
COMPLETED_LATER = {"items", "totals"}

each_query = pytest.mark.parametrize("query", QUERIES, ids=lambda query: query.name)


@pytest.fixture(scope="module")
def connection() -> Iterator[Connection]:
    opened = connect(Resources(memory="500MB", threads=1))
    yield opened
    opened.close()


@pytest.mark.parametrize("path", SQL, ids=lambda path: path.stem)
def test_file_starts_with_the_five_header_lines_in_order(path: Path) -> None:
    lines = path.read_text(encoding="utf-8").splitlines()
    assert [re.match(r"-- (\w+):", line)[1] for line in lines[:5]] == ["name", "meaning", "grain", "reads", "params"]  # type: ignore[index]


def test_every_file_is_loaded_under_the_name_of_its_table() -> None:
    assert [f"{query.number}_{query.name}" for query in QUERIES] == [path.stem for path in SQL]


@each_query
def test_tens_digit_is_the_stage_of_the_table(query: Query) -> None:
    stage = TABLES[query.name].stage if query.name in TABLES else 1
    assert query.number // 10 == stage


@each_query
def test_query_is_one_pure_select(query: Query) -> None:
    statements = duckdb.connect().extract_statements(query.text)
    assert [statement.type for statement in statements] == [duckdb.StatementType.SELECT]


@each_query
def test_params_of_the_header_are_those_that_the_engine_asks_for(query: Query) -> None:
    (statement,) = duckdb.connect().extract_statements(query.text)
    assert set(query.params) == statement.named_parameters
    assert len(query.params) == len(set(query.params))


@each_query
def test_reads_of_the_header_are_the_tables_that_the_engine_sees(query: Query) -> None:
    without_params = re.sub(r"\$[a-z_]+", "null", query.text)
    assert set(query.reads) == duckdb.connect().get_table_names(without_params)
    assert len(query.reads) == len(set(query.reads))


@each_query
def test_rows_come_in_the_order_of_the_grain(query: Query) -> None:
    last = query.text.strip().splitlines()[-1]
    if query.name in UNSORTED_VIEWS:
        assert not last.startswith("order by")
    else:
        assert last == f"order by {', '.join(query.grain)}"


@each_query
def test_inputs_come_first_and_whole_rows_last(query: Query) -> None:
    body = [line for line in query.text.splitlines() if line and not line.startswith("--")]
    assert body[0].startswith("with ")
    assert any(re.fullmatch(r"select \* from \w+", line) for line in body[-2:])


@each_query
def test_columns_are_those_of_the_declared_table(query: Query, connection: Connection) -> None:
    frame: pl.DataFrame = run(connection, query.name)
    assert set(query.grain) <= set(frame.columns)
    if query.name in TABLES.keys() - COMPLETED_LATER:
        assert frame.columns == list(TABLES[query.name].columns)


@each_query
def test_grain_is_the_key_of_the_declared_table(query: Query) -> None:
    if query.name in TABLES:
        assert query.grain == TABLES[query.name].key


@each_query
def test_cases_know_every_table_that_the_query_reads(query: Query) -> None:
    schema = schema_of(query.name)
    assert set(query.reads) <= set(schema.tables) | set(schema.views)
    assert set(query.params) <= set(schema.params)


@pytest.mark.parametrize("surplus", [{"delivery": "d"}, {"delivery": "d", "feed": "f", "more": 1}])
def test_missing_and_surplus_parameters_are_refused(connection: Connection, surplus: dict[str, Value]) -> None:
    run(connection, "refused")
    with pytest.raises(duckdb.Error):
        select(connection, "refused", **surplus)
    with pytest.raises(ValueError, match="refused takes"):
        define(connection, "refused", **surplus)


@pytest.mark.parametrize("value", [None, True, 3, -0.1, 1e-300, "it's $feed", "", 'a"b\\', date(2024, 2, 29)])
def test_literal_is_the_value(connection: Connection, value: Value) -> None:
    ((found,),) = connection.execute(f"select {queries.literal(value)}").fetchall()
    assert found == value
    assert type(found) is type(value)


def test_infinite_bound_is_a_literal(connection: Connection) -> None:
    assert connection.execute(f"select {queries.literal(float('inf'))} > 1e308").fetchall() == [(True,)]


@pytest.mark.parametrize("name", ["plain", 'say "so"', "réf article", "select", "a;b"])
def test_identifier_is_the_name(connection: Connection, name: str) -> None:
    assert connection.sql(f"select 1 as {queries.identifier(name)}").columns == [name]


def test_view_is_defined_with_the_values_it_was_given(connection: Connection) -> None:
    received = {
        "line_id": ["x", "x"],
        "line": [1, 2],
        "broken": [False] * 2,
        "item": ["A"] * 2,
        "day": [date(2024, 3, 1)] * 2,
    }
    offer(connection, "received", pl.DataFrame(received | {"units": [1, 1], "amount": [1, 1]}))
    define(connection, "repeats")
    assert connection.execute("select * from repeats").fetchall() == [("x", 1)]


def test_parquet_files_are_offered_as_one_table(connection: Connection, tmp_path: Path) -> None:
    paths = [tmp_path / "it's one.parquet", tmp_path / "two [2].parquet"]
    for number, path in enumerate(paths):
        pl.DataFrame({"number": [number]}).write_parquet(path)
    offer(connection, "parts", paths)
    assert sorted(connection.execute("select number from parts").fetchall()) == [(0,), (1,)]


def test_connection_keeps_within_its_resources(tmp_path: Path) -> None:
    opened = connect(Resources(memory="300MB", threads=1, spill=tmp_path / "spill"))
    settings = dict(
        opened.execute(
            "select name, value from duckdb_settings() where name in ('threads', 'TimeZone', 'temp_directory')"
        ).fetchall()
    )
    opened.close()
    assert settings == {"threads": "1", "TimeZone": "UTC", "temp_directory": str(tmp_path / "spill")}
