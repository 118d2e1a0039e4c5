"""Item codes against published GTINs, the SQL that checks deliveries, and properties of the check digit."""

import re

import polars as pl
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from tests.reference.published import Case, cases
from tillwright.errors import CallError
from tillwright.item_codes import (
    check_digit,
    gtin14,
    gtin14_of,
    is_restricted,
    is_restricted_of,
    item_key_of,
    item_part,
    item_part_of,
)
from tillwright.queries import Resources, connect, offer, select

PROPERTY = settings(deadline=None, database=None, derandomize=True, max_examples=100)

PRICED = r"2[0-9](?P<item>\d{5})\d{5}\d"
PUBLISHED = [pytest.param(case, id=case.citation) for case in cases("gtin_")]

KNOWN = {
    "9780306406157": "ISBN-13 of the ISBN Users' Manual's example 0-306-40615-2, from memory",
    "036000291452": "UPC-A example of encyclopaedias, from memory",
    "4006381333931": "EAN-13 example of encyclopaedias, from memory",
    "73513537": "EAN-8 example of encyclopaedias, from memory",
    "10614141000415": "GTIN-14 of GS1 US examples, from memory",
    "9501101530003": "GTIN-13 of the GS1 General Specifications' examples, from memory",
}

bodies = st.sampled_from([7, 11, 12, 13]).flatmap(lambda size: st.text("0123456789", min_size=size, max_size=size))
in_store = st.text("0123456789", min_size=10, max_size=10).flatmap(
    lambda rest: st.sampled_from(["02", "04", *(str(prefix) for prefix in range(20, 30))]).map(
        lambda prefix: prefix + rest
    )
)
codes = st.one_of(
    st.text("0123456789", max_size=15),
    bodies.map(lambda body: body + str(check_digit(body))),
    in_store.map(lambda body: body + str(check_digit(body))),
    st.text("0123456789 \t\r\nX-.٣", max_size=14),
    bodies.map(lambda body: f" {body}{check_digit(body)}\t"),
)


def column(values: list[str | None], expression: pl.Expr) -> list[object]:
    return pl.DataFrame({"code": values}, schema={"code": pl.String}).select(expression).to_series().to_list()


@pytest.mark.parametrize("case", PUBLISHED)
def test_check_digits_are_those_published(case: Case) -> None:
    assert check_digit(case.inputs["body"]) == int(case.expected[0])


@pytest.mark.parametrize("case", PUBLISHED)
def test_published_codes_are_padded_and_every_other_check_digit_is_malformed(case: Case) -> None:
    body, right = case.inputs["body"], int(case.expected[0])
    given_codes = [f"{body}{digit}" for digit in range(10)]
    expected = [f"{body}{digit}".rjust(14, "0") if digit == right else None for digit in range(10)]
    assert [gtin14(code) for code in given_codes] == expected
    assert column([*given_codes], gtin14_of(pl.col("code"))) == expected


@pytest.mark.parametrize(("code", "source"), KNOWN.items())
def test_known_codes_are_well_formed(code: str, source: str) -> None:
    assert gtin14(code) == code.rjust(14, "0"), source


@PROPERTY
@given(bodies, st.data())
def test_a_single_wrong_digit_is_always_found(body: str, data: st.DataObject) -> None:
    """GS1 General Specifications: the weights 3 and 1 have no factor in common with 10."""
    code = body + str(check_digit(body))
    place = data.draw(st.integers(0, len(code) - 1))
    shift = data.draw(st.integers(1, 9))
    wrong = code[:place] + str((int(code[place]) + shift) % 10) + code[place + 1 :]
    assert gtin14(code) is not None
    assert gtin14(wrong) is None


@PROPERTY
@given(bodies, st.data())
def test_exchanged_neighbours_are_found_unless_they_differ_by_five(body: str, data: st.DataObject) -> None:
    """Arithmetic: exchanging a and b changes the weighted sum by 2(a − b)."""
    code = body + str(check_digit(body))
    place = data.draw(st.integers(0, len(code) - 2))
    left, right = code[place], code[place + 1]
    exchanged = code[:place] + right + left + code[place + 2 :]
    assert (gtin14(exchanged) is None) == (abs(int(left) - int(right)) not in {0, 5})


@PROPERTY
@given(bodies)
def test_padding_changes_neither_the_check_digit_nor_the_item(body: str) -> None:
    digits = gtin14(body + str(check_digit(body)))
    assert digits is not None
    assert digits[-1] == str(check_digit(digits[:-1]))
    assert gtin14(digits) == digits


@pytest.mark.parametrize("body", ["", "12a", "-1", "٣", "1 2"])
def test_a_body_that_is_not_digits_is_refused(body: str) -> None:
    with pytest.raises(ValueError, match="digits"):
        check_digit(body)


@PROPERTY
@given(st.lists(codes, max_size=30, unique=True))
@example([" 96385074\t\r", "96385074\r", "96385074\n", "\n96385074", "９６３８５０７４", "00000000"])
def test_malformed_means_what_the_intake_says(values: list[str]) -> None:
    connection = connect(Resources(memory="500MB", threads=1))
    offer(connection, "received", pl.DataFrame({"item": values}, schema={"item": pl.String}))
    malformed = set(select(connection, "malformed")["item"])
    connection.close()
    assert {code for code in values if gtin14(code) is None} == malformed


@PROPERTY
@given(st.lists(st.none() | codes, max_size=20))
@example([" 96385074\t\r", "96385074\r", "96385074\n", None, "９６３８５０７４", "00000000"])
def test_columns_say_what_single_codes_say(values: list[str | None]) -> None:
    code = pl.col("code")
    padded = [None if value is None else gtin14(value) for value in values]
    parts = [None if value is None else item_part(value, PRICED) for value in values]
    assert column(values, gtin14_of(code)) == padded
    assert column(values, is_restricted_of(code)) == [value is not None and is_restricted(value) for value in values]
    assert column(values, item_part_of(code, PRICED)) == parts
    assert column(values, item_key_of(code, PRICED)) == [
        part or whole for part, whole in zip(parts, padded, strict=True)
    ]


@pytest.mark.parametrize("prefix", [f"{number:02d}" for number in range(100)])
def test_restricted_prefixes_are_those_of_gs1(prefix: str) -> None:
    """GS1 General Specifications, table of GS1 Prefixes, from memory: 02, 04 and 20–29 of GTIN-13s."""
    body = prefix + "1234567890"
    assert is_restricted(body + str(check_digit(body))) == (prefix in {"02", "04", *map(str, range(20, 30))})


@pytest.mark.parametrize("system", range(10))
def test_restricted_number_systems_of_upcs_are_2_and_4(system: int) -> None:
    """GS1 General Specifications, from memory."""
    body = f"{system}1234567890"
    assert is_restricted(body + str(check_digit(body))) == (system in {2, 4})


@pytest.mark.parametrize("first", range(10))
def test_restricted_gtin_8s_start_with_0_or_2(first: int) -> None:
    """GS1 General Specifications, GS1-8 Prefixes, from memory."""
    body = f"{first}123456"
    assert is_restricted(body + str(check_digit(body))) == (first in {0, 2})


def test_malformed_codes_and_cases_of_a_product_are_not_restricted() -> None:
    body = "201234567890"
    right = check_digit(body)
    assert is_restricted(f"{body}{right}")
    assert not is_restricted(f"{body}{(right + 1) % 10}")
    case = "1" + body
    assert not is_restricted(case + str(check_digit(case)))


@PROPERTY
@given(st.text("0123456789", min_size=5, max_size=5), st.lists(st.integers(0, 99999), min_size=2, max_size=5))
def test_one_item_at_many_prices_has_one_part(item: str, prices: list[int]) -> None:
    sold = [f"21{item}{price:05d}" for price in prices]
    labels: list[str | None] = [body + str(check_digit(body)) for body in sold]
    assert set(column(labels, item_key_of(pl.col("code"), PRICED))) == {item}


def test_a_upc_is_reduced_as_the_gtin_13_that_starts_with_zero() -> None:
    body = "21234500399"
    assert item_part(body + str(check_digit(body)), r"02(?P<item>\d{5})\d{5}\d") == "12345"


def test_other_codes_keep_all_digits_even_where_the_pattern_fits() -> None:
    greedy = r"(?P<item>\d{5})\d{8}"
    assert item_part("4006381333931", greedy) is None
    assert column(["4006381333931"], item_key_of(pl.col("code"), greedy)) == ["04006381333931"]


def test_in_store_codes_that_the_pattern_does_not_fit_keep_all_digits() -> None:
    code = "0212345003990"[:12]
    code += str(check_digit(code))
    assert is_restricted(code)
    assert item_part(code, PRICED) is None
    assert column([code], item_key_of(pl.col("code"), PRICED)) == [code.rjust(14, "0")]


def test_the_pattern_must_fit_the_whole_code_in_either_branch() -> None:
    code = "2112345003990"[:12]
    code += str(check_digit(code))
    branches = r"99|21(?P<item>\d{5})|2(?P<rest>\d)\d{11}"
    assert re.match(branches, code)
    assert item_part(code, branches) is None
    assert column([code], item_part_of(pl.col("code"), branches)) == [None]


@pytest.mark.parametrize("pattern", [r"2\d(\d{5})\d{6}", r"2(?P<item>\d{5}", r"(?P<Item>\d{13})"])
def test_a_pattern_that_names_no_item_is_refused(pattern: str) -> None:
    with pytest.raises(CallError, match="pattern"):
        item_part("4006381333931", pattern)
    with pytest.raises(CallError, match="pattern"):
        item_part_of(pl.col("code"), pattern)
    with pytest.raises(CallError, match="pattern"):
        item_key_of(pl.col("code"), pattern)


def test_columns_work_lazily_and_within_groups() -> None:
    frame = pl.LazyFrame({"shop": ["a", "b", "a"], "code": ["73513537", "x", "4006381333931"]})
    by_shop = frame.group_by("shop", maintain_order=True).agg(gtin14_of(pl.col("code")).drop_nulls().len())
    assert by_shop.collect().to_dicts() == [{"shop": "a", "code": 2}, {"shop": "b", "code": 0}]
