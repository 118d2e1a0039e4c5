"""CSV deliveries as senders write them: encodings, quotes, line ends, rows that do not fit (RFC 4180 for quoting)."""

import gzip
from decimal import Decimal
from pathlib import Path
from typing import Any

import polars as pl
import pytest

from tests.stages.small import Taken, csv_text, feed, line, put, sections, take_in, take_in_rows, write_plan
from tillwright.errors import UnreadableDeliveries

HEADER = "day,outlet,item,quantity,turnover\n"
GOOD = "2024-03-05,1,A,2,3.00\n"


def take_text(folder: Path, content: str | bytes, name: str = "a.csv", **feed_changes: Any) -> Taken:
    """The intake of one file with that content."""
    put(folder / "in" / name, content)
    return take_in(write_plan(folder, sections(feed(**feed_changes))))


def reason(folder: Path, content: str | bytes, name: str = "a.csv", **feed_changes: Any) -> str:
    """Why one file cannot be read."""
    with pytest.raises(UnreadableDeliveries) as caught:
        take_text(folder, content, name, **feed_changes)
    (file,) = caught.value.files
    assert (file.feed, file.file) == ("shop", name)
    assert "Traceback" not in str(caught.value)
    return file.reason


@pytest.mark.parametrize(
    ("encoding", "written"),
    [
        ("utf-8", "utf-8"),
        ("utf-8", "utf-8-sig"),
        ("latin-1", "latin-1"),
        ("utf-16", "utf-16"),
    ],
)
@pytest.mark.parametrize("newline", ["\n", "\r\n"], ids=["lf", "crlf"])
def test_encoding_and_line_ends_do_not_change_what_is_read(
    tmp_path: Path, encoding: str, written: str, newline: str
) -> None:
    text = csv_text([line(item="Käse ½"), line(item="Öl")], newline=newline)
    taken = take_text(tmp_path, text.encode(written), encoding=encoding)
    assert taken.table("totals")["lines_received"].to_list() == [2]
    assert taken.table("sales")["item"].to_list() == ["Käse ½", "Öl"]


def test_utf_16_with_the_high_byte_first_is_told_apart_and_refused(tmp_path: Path) -> None:
    content = ("\ufeff" + csv_text([line()])).encode("utf-16-be")
    assert "high byte first" in reason(tmp_path, content, encoding="utf-16")


def test_gzipped_csv_is_read_like_a_plain_one(tmp_path: Path) -> None:
    content = gzip.compress(csv_text([line(item="Käse")]).encode("latin-1"))
    assert take_text(tmp_path, content, "a.csv.gz", encoding="latin-1").table("sales")["item"].to_list() == ["Käse"]


def test_delimiter_and_decimal_comma(tmp_path: Path) -> None:
    text = csv_text([line(quantity="1,5", turnover="3,25"), line(quantity="2", turnover="0,1")], ";")
    taken = take_text(tmp_path, text, delimiter=";", decimal=",")
    assert taken.table("sales").select("quantity", "turnover").row(0) == (Decimal("3.5"), Decimal("3.35"))


@pytest.mark.parametrize(
    ("decimal", "turnover"), [(".", "1,234"), (".", "1,234.50"), (",", "1.234"), (",", "1.234,50")]
)
def test_grouping_mark_is_no_part_of_a_number(tmp_path: Path, decimal: str, turnover: str) -> None:
    """Common practice: where the comma is the decimal mark a point groups thousands; 1.234 is not 1 and a bit."""
    taken = take_text(tmp_path, csv_text([line(turnover=turnover)], ";"), delimiter=";", decimal=decimal)
    assert taken.rules == {2: "unreadable-number"}


@pytest.mark.parametrize("delimiter", [",", ";", "\t", "|"])
def test_quoted_cells_may_hold_the_delimiter_and_doubled_quotes(tmp_path: Path, delimiter: str) -> None:
    items = [f"COLA{delimiter} 6{delimiter}L", 'SAY "CHEESE"', '"', f'""{delimiter}""', " padded ", "it's", "a\\b"]
    taken = take_text(tmp_path, csv_text([line(item=item) for item in items], delimiter), delimiter=delimiter)
    assert taken.table("refused").height == 0
    assert sorted(taken.table("sales")["item"]) == sorted(item.strip() for item in items)


def test_all_cells_may_be_quoted(tmp_path: Path) -> None:
    text = HEADER + '"2024-03-05","1","A","2","3.00"\n"2024-03-05","1","","2","3.00"\n'
    taken = take_text(tmp_path, text)
    assert taken.table("sales")["item"].to_list() == ["A"]
    assert taken.rules == {3: "missing-key"}


BROKEN = {
    "too few cells": "2024-03-05,1,B,2",
    "too many cells": "2024-03-05,1,B,2,3.00,9",
    "unclosed quote": '2024-03-05,1,"B,2,3.00',
    "unclosed quote at the end": '2024-03-05,1,B,2,"3.00',
    "text after a quote": '2024-03-05,1,"B"x,2,3.00',
    "quote within a bare cell": '2024-03-05,1,B"x,2,3.00',
    "one word": "total",
    "only delimiters, too many": ",,,,,",
}


@pytest.mark.parametrize("broken", BROKEN.values(), ids=BROKEN)
def test_broken_row_is_refused_as_it_came_and_swallows_nothing(tmp_path: Path, broken: str) -> None:
    taken = take_text(tmp_path, f"{HEADER}{GOOD}{broken}\n{GOOD}{GOOD}")
    refused = taken.table("refused").select("line", "rule", "raw").rows()
    assert refused == [(3, "broken-row", broken)]
    assert taken.table("sales")["lines"].to_list() == [3]


def test_many_unclosed_quotes_swallow_nothing(tmp_path: Path) -> None:
    """A reader that cuts cells on its own was seen to drop the rest of a file after one."""
    text = HEADER + (GOOD * 9 + BROKEN["unclosed quote"] + "\n") * 300
    (totals,) = take_text(tmp_path, text).table("totals").to_dicts()
    assert (totals["lines_received"], totals["lines_accepted"], totals["lines_refused"]) == (3000, 2700, 300)


def test_last_line_needs_no_line_end_and_empty_lines_are_no_rows(tmp_path: Path) -> None:
    taken = take_text(tmp_path, HEADER + GOOD + "\n" + GOOD + "\n" + GOOD.rstrip("\n"))
    assert taken.table("totals")["lines_received"].to_list() == [3]


def test_row_of_empty_cells_is_a_missing_key(tmp_path: Path) -> None:
    assert take_text(tmp_path, HEADER + ",,,,\n").rules == {2: "missing-key"}


@pytest.mark.parametrize("name", ["line", "text", "cells", "broken"])
def test_column_may_have_any_name(tmp_path: Path, name: str) -> None:
    columns = {"sold_at": "day", "item": "item", "quantity": "quantity", "turnover": "turnover", "description": name}
    taken = take_text(tmp_path, f"day,{name},item,quantity,turnover\n{GOOD}", columns=columns)
    assert taken.table("described")["description"].to_list() == ["1"]


def test_order_of_columns_is_free_and_other_columns_are_ignored(tmp_path: Path) -> None:
    taken = take_text(tmp_path, "x,turnover,quantity,item,day,outlet\n?,3.00,2,A,2024-03-05,1\n")
    assert taken.table("sales").select("item", "turnover").rows() == [("A", Decimal(3))]


def test_file_with_a_header_only_is_received_with_no_lines(tmp_path: Path) -> None:
    taken = take_text(tmp_path, HEADER)
    assert taken.statuses == {"in/a.csv": "active"}
    assert taken.table("totals")["lines_received"].to_list() == [0]


def test_parquet_without_rows_is_received_with_no_lines(tmp_path: Path) -> None:
    put(tmp_path / "in/a.parquet", pl.DataFrame([line()]).clear())
    assert take_in(write_plan(tmp_path)).table("totals")["lines_received"].to_list() == [0]


@pytest.mark.parametrize("name", ["a.csv", "a.csv.gz", "a.parquet"])
def test_empty_file_cannot_be_read(tmp_path: Path, name: str) -> None:
    assert reason(tmp_path, b"", name)


def test_empty_csv_is_told_to_be_empty(tmp_path: Path) -> None:
    assert "empty" in reason(tmp_path, "")


@pytest.mark.parametrize("before", [0, 60_000], ids=["at the start", "far down"])
def test_latin_1_read_as_utf_8_is_told_with_the_setting_to_mend(tmp_path: Path, before: int) -> None:
    content = (HEADER + GOOD * before + GOOD.replace("A", "Käse")).encode("latin-1")
    assert "utf-8" in reason(tmp_path, content)
    assert "feed.encoding" in reason(tmp_path, content)


@pytest.mark.parametrize(("written", "encoding"), [("utf-16", "utf-8"), ("utf-8", "utf-16")])
def test_mistaken_encoding_is_told(tmp_path: Path, written: str, encoding: str) -> None:
    assert encoding in reason(tmp_path, (HEADER + GOOD).encode(written), encoding=encoding)


@pytest.mark.parametrize("name", ["a.parquet", "a.csv"])
def test_missing_columns_are_named_with_those_that_are_there(tmp_path: Path, name: str) -> None:
    put(tmp_path / "in" / name, [{"day": "2024-03-05", "shop": "1", "item": "A", "quantity": "1"}])
    with pytest.raises(UnreadableDeliveries) as caught:
        take_in(write_plan(tmp_path, sections(feed(turnover_less=["deposit"]))))
    (file,) = caught.value.files
    for column in ("'outlet'", "'turnover'", "'deposit'", "'shop'"):
        assert column in file.reason
    assert "damaged" not in file.reason


@pytest.mark.parametrize("left", [0.3, 0.5, 0.95])
def test_cut_parquet_cannot_be_read(tmp_path: Path, left: float) -> None:
    path = put(tmp_path / "in/a.parquet", [line(item=str(n)) for n in range(2000)])
    whole = path.read_bytes()
    assert "Parquet" in reason(tmp_path, whole[: int(left * len(whole))], "a.parquet")


def test_parquet_with_a_hole_cannot_be_read(tmp_path: Path) -> None:
    path = put(tmp_path / "in/a.parquet", [line(item=str(n)) for n in range(2000)])
    whole = path.read_bytes()
    assert "Parquet" in reason(tmp_path, whole[:200] + bytes(800) + whole[1000:], "a.parquet")


def test_cut_gzip_cannot_be_read(tmp_path: Path) -> None:
    content = gzip.compress(csv_text([line(item=str(n), turnover=str(n + 1)) for n in range(3000)]).encode())
    assert "CSV" in reason(tmp_path, content[:-2000], "a.csv.gz")


def test_text_that_is_called_parquet_and_the_reverse_cannot_be_read(tmp_path: Path) -> None:
    assert "Parquet" in reason(tmp_path / "one", HEADER + GOOD, "a.parquet")
    parquet = put(tmp_path / "x.parquet", [line()]).read_bytes()
    assert reason(tmp_path / "two", parquet, "a.csv")


def test_unreadable_file_writes_no_part_of_itself(tmp_path: Path) -> None:
    reason(tmp_path, (HEADER + GOOD * 60_000).encode() + b"2024-03-05,1,K\xe4se,2,3.00\n")
    assert list((tmp_path / "work").rglob("*.parquet")) == []


def test_parquet_types_do_not_matter(tmp_path: Path) -> None:
    frames = {
        "float": pl.DataFrame([line(quantity=2.0, turnover=0.1), line(quantity=1.0, turnover=0.2)]),
        "integer": pl.DataFrame([line(quantity=2, turnover=3, item=17, outlet=4)]),
        "decimal": pl.DataFrame([line(quantity=Decimal("1.5"), turnover=Decimal("3.25"))]),
    }
    sums = {}
    for name, frame in frames.items():
        put(tmp_path / name / "in/a.parquet", frame)
        sums[name] = take_in(write_plan(tmp_path / name)).table("sales").select("quantity", "turnover").row(0)
    assert sums == {
        "float": (Decimal(3), Decimal("0.3")),  # 0.1 + 0.2 to the cent, whatever floats make of it
        "integer": (Decimal(2), Decimal(3)),
        "decimal": (Decimal("1.5"), Decimal("3.25")),
    }
    assert take_in_rows(tmp_path / "text", [line()]).table("sales")["item"].to_list() == ["A"]
