"""Every case below `tests/sql`: small input tables and the table that the SQL file must make of them."""

from collections.abc import Iterator
from datetime import date
from itertools import product
from pathlib import Path

import polars as pl
import pytest
from polars.testing import assert_frame_equal

from tests.sql.case import Case, cases, expected, run
from tillwright.choices import REFUSAL_RULES
from tillwright.queries import Connection, Resources, Value, connect, load_queries

PRICE = 1e-12
"""One division of two decimals in float64: a few units in the last place."""


@pytest.fixture(scope="module")
def connection() -> Iterator[Connection]:
    opened = connect(Resources(memory="500MB", threads=1))
    yield opened
    opened.close()


@pytest.mark.parametrize("case", cases(), ids=lambda case: f"{case.query}-{case.folder.name}")
def test_query_makes_the_expected_table(case: Case, connection: Connection) -> None:
    actual = run(connection, case.query, case.folder, case.about.get("params"))
    wanted = expected(connection, case.folder, actual)
    assert_frame_equal(actual.select(wanted.columns), wanted, abs_tol=0, rel_tol=PRICE)


@pytest.mark.parametrize("case", cases(), ids=lambda case: f"{case.query}-{case.folder.name}")
def test_grain_of_the_header_identifies_rows(case: Case, connection: Connection) -> None:
    actual: pl.DataFrame = run(connection, case.query, case.folder, case.about.get("params"))
    grain = list(load_queries()[case.query].grain)
    assert actual.select(grain).n_unique() == actual.height


@pytest.mark.parametrize("case", cases(), ids=lambda case: f"{case.query}-{case.folder.name}")
def test_case_says_what_holds_and_where_it_is_from(case: Case) -> None:
    assert case.about["says"]
    assert case.about["source"]


def test_every_query_has_cases() -> None:
    assert {case.query for case in cases()} == set(load_queries())


@pytest.mark.parametrize("returns", ["net", "refuse"])
def test_every_line_is_either_accepted_or_refused_by_a_rule(
    connection: Connection, tmp_path: Path, returns: str
) -> None:
    """The two queries say the rules twice, once for speed and once to name them: all combinations must agree."""
    cells = {
        "broken": ["true", "false"],
        "day": ["", "2024-02-29", "2024-03-05"],
        "item": ["", "A", "X"],
        "outlet": ["", "1"],
        "units": ["", "-1", "0", "2"],
        "amount": ["", "-9", "0", "3", "99"],
        "non_finite": ["true", "false"],
        "line_id": ["", "x"],
    }
    rows = [f"{line},{','.join(values)}" for line, values in enumerate(product(*cells.values()), start=1)]
    (tmp_path / "received.csv").write_text("\n".join([f"line,{','.join(cells)}", *rows]), encoding="utf-8")
    (tmp_path / "malformed.csv").write_text("item\nX\n", encoding="utf-8")
    limits: dict[str, Value] = {"unit_price_low": 0.5, "unit_price_high": 8.0, "returns": returns}
    announced: dict[str, Value] = {"announced_from": date(2024, 3, 1), "announced_until": date(2024, 4, 1)}
    refused: pl.DataFrame = run(connection, "refused", tmp_path, limits | announced)
    lines: pl.DataFrame = run(connection, "lines", tmp_path, limits | announced)
    assert set(refused["rule"]) <= set(REFUSAL_RULES)
    assert sorted([*lines.filter("accepted")["line"], *refused["line"]]) == list(range(1, len(rows) + 1))
    assert lines["accepted"].any()
