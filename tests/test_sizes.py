"""Sizes against exact factors, a table of spellings, round trips, and the labels of an open grocery data set."""

import csv
from fractions import Fraction
from pathlib import Path

import polars as pl
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tests.grocery.builder import data_folder
from tillwright.sizes import PACK, UNITS, Measure, Size, Unit, parse_size, parse_sizes

SAMPLE = Path(__file__).parent / "reference" / "size_sample.csv"

PROPERTY = settings(deadline=None, database=None, derandomize=True, max_examples=200)

ROUNDING = 1e-12
"""One or two products of float64 figures."""

WRITTEN = 1e-9
"""Amounts in the sample file are written with ten digits."""

POUND = Fraction(45359237, 100000)
CUBIC_INCH = Fraction(254, 100) ** 3
GALLON = 231 * CUBIC_INCH
CUBIC_FOOT = 12**3 * CUBIC_INCH

US = {
    "1 LB": POUND,
    "1 OZ": POUND / 16,
    "1 GAL": GALLON,
    "1 QT": GALLON / 4,
    "1 PT": GALLON / 8,
    "1 FL OZ": GALLON / 128,
    "1 BU": Fraction(215042, 100) * CUBIC_INCH,
    "1 CU IN": CUBIC_INCH,
    "1 CU FT": CUBIC_FOOT,
}
IMPERIAL = {
    "1 GAL": Fraction(454609, 100),
    "1 QT": Fraction(454609, 400),
    "1 PT": Fraction(454609, 800),
    "1 FL OZ": Fraction(454609, 16000),
    "1 LB": POUND,
    "1 OZ": POUND / 16,
}

OUNCE_G = float(POUND / 16)
FLUID_OUNCE_ML = float(GALLON / 128)
PINT_ML = float(GALLON / 8)
GALLON_ML = float(GALLON)

MEANINGS: list[tuple[str, float, Measure, int]] = [
    ("6 X 330 ML", 1980, "ml", 6),
    ("6x330ml", 1980, "ml", 6),
    ("6 × 33 cl", 1980, "ml", 6),
    ("12 PK/12 OZ", 144 * OUNCE_G, "g", 12),
    ("12 OZ/12 PK", 144 * OUNCE_G, "g", 12),
    ("12 PK 12 OZ", 144 * OUNCE_G, "g", 12),
    ("10/6.75 OZ", 67.5 * OUNCE_G, "g", 10),
    ("6-12 OZ", 72 * OUNCE_G, "g", 6),
    ("8/10 CT", 80, "piece", 8),
    ("1 PAIR", 2, "piece", 1),
    ("24-12 OZ", 288 * OUNCE_G, "g", 24),
    ("6/12 OZ", 72 * OUNCE_G, "g", 6),
    ("2/8 OZ", 16 * OUNCE_G, "g", 2),
    ("12 OZ-4/6 PK", 288 * OUNCE_G, "g", 24),
    ("3 PK/100 CT", 300, "piece", 3),
    ("4/187 ML", 748, "ml", 4),
    ("1,5 L", 1500, "ml", 1),
    ("0,330 L", 330, "ml", 1),
    ("4x1,5L", 6000, "ml", 4),
    (".5 L", 500, "ml", 1),
    ("500G", 500, "g", 1),
    ("2 x 2.5 kg", 5000, "g", 2),
    ("1,000 SHEETS", 1000, "piece", 1),
    ("4 PK", 4, "piece", 4),
    ("2 LB", 32 * OUNCE_G, "g", 1),
    ("2 LB 3 OZ", 35 * OUNCE_G, "g", 1),
    ("2 LB(32 OZ)", 32 * OUNCE_G, "g", 1),
    ("3-LB BAG", 48 * OUNCE_G, "g", 1),
    ("HALF GAL", GALLON_ML / 2, "ml", 1),
    ("1/2 GAL", GALLON_ML / 2, "ml", 1),
    ("2/3 OZ", 2 / 3 * OUNCE_G, "g", 1),
    ("1 1/2 LB", 24 * OUNCE_G, "g", 1),
    ("1½ LB", 24 * OUNCE_G, "g", 1),
    ("1-3/4 LB", 28 * OUNCE_G, "g", 1),
    ("10 3/4 OZ", 10.75 * OUNCE_G, "g", 1),
    ("2 L BTL", 2000, "ml", 1),
    ("PT", PINT_ML, "ml", 1),
    ("GAL", GALLON_ML, "ml", 1),
    ("LB", 16 * OUNCE_G, "g", 1),
    ("DOZ", 12, "piece", 1),
    ("1/2 DZ", 6, "piece", 1),
    ("20 CT", 20, "piece", 1),
    ("1 EA", 1, "piece", 1),
    ("6 ROLLS", 6, "piece", 1),
    ("16.9 FL. OZ.", 16.9 * FLUID_OUNCE_ML, "ml", 1),
    ("12 FLOZ", 12 * FLUID_OUNCE_ML, "ml", 1),
    ("12 OZ (340 G)", 12 * OUNCE_G, "g", 1),
    ("12 OZ (355 ML)", 12 * FLUID_OUNCE_ML, "ml", 1),
    ("14-18 CT", 14, "piece", 1),
    ("18-22 LB", 18 * 16 * OUNCE_G, "g", 1),
    ("80/88 CT", 80, "piece", 1),
    ("12 CT/15 OZ", 12, "piece", 1),
    ("20 CT/13 GAL", 20, "piece", 1),
    ("4 IN/10 OZ", 10 * OUNCE_G, "g", 1),
    ("11 X9/150 CT", 150, "piece", 1),
    ("22515 32 OZ", 32 * OUNCE_G, "g", 1),
    ("0000012 OZ", 12 * OUNCE_G, "g", 1),
    ("L    750 ML", 750, "ml", 1),
    ("ALL17.9 OZ", 17.9 * OUNCE_G, "g", 1),
]
NO_MEASURE = [
    *("", "LARGE", "CTN", "ASST", "EACH", "PK", "KIT", "L", "X-LARGE", "523233 CTN", "974006  PK", "12"),
    *("75 SQ FT", "18 IN", "8 X10 IN", "2.50 DIOPT", "SIZE 4", "12 CUP", "26 REC OZ", "13 GOING O"),
    *("OVER 50 LB", "UNDER 15 LB", "1.80/LB", "0 OZ", "0/3 OZ", "1/0 OZ", "1.2.3 OZ", "2.5 PK"),
    *("1,000 ML", "12 16.9 OZ", "4. 5 OZ", "4/6/12 OZ", "15 00 OZ", "1448997 OZ", f".{322 * '0'}5 MG"),
]

packs_of = st.integers(2, 99)
hundredths = st.integers(1, 999_999).map(lambda number: Fraction(number, 100))


def amount_of(size: Size | None) -> float:
    assert size is not None
    return size.amount


def assert_reads(size: Size | None, amount: float, measure: Measure, packs: int = 1) -> None:
    assert size is not None
    assert (size.measure, size.packs) == (measure, packs)
    assert size.amount == pytest.approx(amount, rel=ROUNDING)


def labels() -> pl.Series:
    return pl.read_parquet(data_folder() / "products.parquet", columns=["package_size"])["package_size"].drop_nulls()


@pytest.mark.parametrize(("text", "exact"), US.items())
def test_us_customary_units_have_the_factors_of_their_definitions(text: str, exact: Fraction) -> None:
    """NIST Handbook 44, Appendix C, from memory: the pound is 453.59237 g, the gallon 231 cubic inches of
    2.54 cm, the bushel 2150.42 cubic inches; ounce, quart, pint and fluid ounce divide them."""
    assert amount_of(parse_size(text)) == pytest.approx(float(exact), rel=ROUNDING)


@pytest.mark.parametrize(("text", "exact"), IMPERIAL.items())
def test_imperial_units_are_read_only_where_asked_for(text: str, exact: Fraction) -> None:
    """Weights and Measures Act 1985, Schedule 1, from memory: the gallon is 4.54609 l, a fluid ounce 1/160 of it."""
    assert amount_of(parse_size(text, imperial=True)) == pytest.approx(float(exact), rel=ROUNDING)
    assert amount_of(parse_size(text)) == pytest.approx(float(US[text]), rel=ROUNDING)


@pytest.mark.parametrize(("text", "amount", "measure", "packs"), MEANINGS)
def test_spellings_mean_what_a_shopper_reads(text: str, amount: float, measure: Measure, packs: int) -> None:
    assert_reads(parse_size(text), amount, measure, packs)


@pytest.mark.parametrize("text", NO_MEASURE)
def test_labels_without_a_measure_to_trust_give_none(text: str) -> None:
    assert parse_size(text) is None


def test_ounces_are_fluid_where_the_caller_says_so() -> None:
    assert_reads(parse_size("12 OZ"), 12 * OUNCE_G, "g")
    assert_reads(parse_size("12 OZ", fluid=True), 12 * FLUID_OUNCE_ML, "ml")
    british = parse_size("12 OZ", fluid=True, imperial=True)
    assert_reads(british, float(12 * IMPERIAL["1 FL OZ"]), "ml")


def test_every_spelling_belongs_to_one_unit() -> None:
    spellings = [spelling for unit in UNITS for spelling in unit.spellings]
    assert len(spellings) == len(set(spellings))
    assert all(unit.source for unit in UNITS)


@settings(PROPERTY, max_examples=1000)
@given(
    written=st.sampled_from([(unit, spelling) for unit in UNITS for spelling in unit.spellings if unit is not PACK]),
    number=hundredths,
    packs=packs_of,
    sign=st.sampled_from("X/*"),
    point=st.sampled_from(".,"),
    blank=st.booleans(),
)
def test_a_written_size_is_read_back(
    written: tuple[Unit, str], number: Fraction, packs: int, sign: str, point: str, blank: bool
) -> None:
    unit, spelling = written
    figure = f"{float(number):.2f}".replace(".", point)
    between = " " if blank else ""
    one, expected = parse_size(f"{figure}{between}{spelling}"), float(number) * unit.amount
    many = parse_size(f"{packs}{between}{sign}{between}{figure}{between}{spelling}".lower())
    beside = parse_size(f"{packs} PK/{figure} {spelling}")
    assert_reads(one, expected, unit.measure)
    assert_reads(beside, packs * expected, unit.measure, packs)
    grade_or_fraction = sign == "/" and (number.denominator == 1 or unit.measure == "piece")
    if not grade_or_fraction:
        assert_reads(many, packs * expected, unit.measure, packs)


@PROPERTY
@given(st.integers(0, 99), st.integers(1, 15), st.sampled_from([2, 4, 8, 16]), st.sampled_from(" -"))
def test_fractions_are_read_back(whole: int, numerator: int, denominator: int, joint: str) -> None:
    fraction = Fraction(numerator, denominator)
    if fraction >= 1 or fraction.denominator != denominator:
        return
    text = f"{whole}{joint}{numerator}/{denominator} LB" if whole else f"{numerator}/{denominator} LB"
    assert amount_of(parse_size(text)) == pytest.approx(float((whole + fraction) * POUND), rel=ROUNDING)


@PROPERTY
@given(st.text())
def test_any_text_gives_a_positive_size_or_none(text: str) -> None:
    size = parse_size(text)
    assert size is None or (size.amount > 0 and size.packs >= 1 and size.text == text)


@PROPERTY
@given(st.text("0123456789 .,/-X()OZLBCTPKGAL", max_size=14))
def test_figures_in_any_order_give_a_positive_size_or_none(text: str) -> None:
    size = parse_size(text)
    assert size is None or (size.amount > 0 and size.packs >= 1 and size.text == text)


def test_columns_keep_their_rows_and_read_missing_labels_as_missing() -> None:
    column = pl.Series("label", ["2 LB", None, "LARGE", "2 LB", "6 X 330 ML"])
    sizes = parse_sizes(column)
    assert sizes["text"].to_list() == column.to_list()
    assert sizes["measure"].to_list() == ["g", None, None, "g", "ml"]
    assert sizes["packs"].to_list() == [1, None, None, 1, 6]
    assert sizes.schema == {"text": pl.String, "amount": pl.Float64, "measure": pl.String, "packs": pl.Int64}


@pytest.mark.parametrize("column", [pl.Series([], dtype=pl.String), pl.Series([None]), pl.Series(["CTN"])])
def test_columns_without_any_size_have_the_same_schema(column: pl.Series) -> None:
    sizes = parse_sizes(column)
    assert sizes.columns == ["text", "amount", "measure", "packs"]
    assert sizes["amount"].to_list() == [None] * len(column)


def test_columns_pass_their_choices_on() -> None:
    sizes = parse_sizes(pl.Series(["1 OZ"]), fluid=True, imperial=True)
    assert sizes["amount"][0] == pytest.approx(float(IMPERIAL["1 FL OZ"]), rel=ROUNDING)


def test_open_grocery_labels_are_read_but_for_lengths_areas_and_words() -> None:
    """The Complete Journey (84.51°), 61 745 items with a label: those that state a weight, volume or number."""
    sizes = parse_sizes(labels())
    read = sizes["amount"].is_not_null()
    extent = sizes["text"].str.contains(r"[0-9.] ?(?:IN|INX|FT|FTX|FOOT|SQ FT|S FT|YDS?|CM|MM)\b|[0-9] ?X ?[0-9]")
    assert len(sizes) == 61_745
    assert len(sizes.filter(read)) >= 0.96 * len(sizes)
    assert len(sizes.filter(read)) >= 0.98 * len(sizes.filter(read | ~extent))
    assert sizes.filter(read)["text"].n_unique() >= 0.81 * sizes["text"].n_unique()


def test_sampled_grocery_labels_are_read_as_by_eye() -> None:
    """200 of the 3 705 spellings, drawn with a seed (4) and read by eye; ounces avoirdupois throughout."""
    with SAMPLE.open(encoding="utf-8", newline="") as lines:
        rows = list(csv.DictReader(lines))
    assert len(rows) == 200
    assert {row["spelling"] for row in rows} <= set(labels())
    sizes = {row["spelling"]: parse_size(row["spelling"]) for row in rows}
    unread = {row["spelling"] for row in rows if row["amount"] and sizes[row["spelling"]] is None}
    wrong = {row["spelling"] for row in rows if not agrees(sizes[row["spelling"]], row)}
    assert wrong == {"4-6 OZ/1 LB", "40/19.8 OZ"}
    assert unread == {"18514050 CT", "45009824 CT"}


def agrees(size: Size | None, row: dict[str, str]) -> bool:
    """Whether a reading is that of the eye; a label that is left unread is none that is read wrong."""
    if size is None:
        return True
    if not row["amount"]:
        return False
    same = size.measure == row["measure"] and size.packs == int(row["packs"])
    return same and size.amount == pytest.approx(float(row["amount"]), rel=WRITTEN)
