"""Package sizes as labels state them, read into grams, millilitres or pieces."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass
from math import gcd
from typing import Literal, TypeAlias

import polars as pl

Measure: TypeAlias = Literal["g", "ml", "piece"]

NIST = "NIST Handbook 44, Appendix C"
SI = "SI Brochure, 9th edition"
UK = "Weights and Measures Act 1985, Schedule 1"
TRADE = "common practice"


@dataclass(frozen=True, slots=True)
class Size:
    """What a package holds: the total `amount`, in grams, millilitres or pieces, of all its `packs`.

    `amount / packs` is the size of one pack; a package that is no multipack has 1 pack. `text` is
    the spelling that was read.
    """

    amount: float
    measure: Measure
    packs: int
    text: str


@dataclass(frozen=True, slots=True)
class Unit:
    """A unit as labels write it: its spellings, and how many grams, millilitres or pieces it is.

    A unit that may stand `alone` means one of it where the label has no figure.
    """

    spellings: tuple[str, ...]
    measure: Measure
    amount: float
    source: str
    alone: bool = False


GRAM = Unit(("G", "GM", "GMS", "GR", "GRAM", "GRAMS"), "g", 1.0, SI)
MILLILITRE = Unit(("ML", "CC", "MILLILITER", "MILLILITERS", "MILLILITRE", "MILLILITRES"), "ml", 1.0, SI)
CENTILITRE = Unit(("CL",), "ml", 10.0, SI)
DECILITRE = Unit(("DL",), "ml", 100.0, SI)
LITRE = Unit(("L", "LT", "LTR", "LITER", "LITERS", "LITRE", "LITRES"), "ml", 1000.0, SI)
OUNCE = Unit(("OZ", "OZS", "Z", "OUNCE", "OUNCES"), "g", 28.349523125, NIST)
FLUID_OUNCE = Unit(("FL OZ", "FL OZS", "FLOZ", "FLUID OZ", "FLUID OUNCE", "FLUID OUNCES"), "ml", 29.5735295625, NIST)
POUND = Unit(("LB", "LBS", "POUND", "POUNDS"), "g", 453.59237, NIST, alone=True)
PINT = Unit(("PT", "PTS", "PINT", "PINTS"), "ml", 473.176473, NIST, alone=True)
QUART = Unit(("QT", "QTS", "QUART", "QUARTS"), "ml", 946.352946, NIST, alone=True)
GALLON = Unit(("GAL", "GA", "GALS", "GALLON", "GALLONS"), "ml", 3785.411784, NIST, alone=True)
PACK = Unit(("PK", "PKS", "P", "PACK", "PACKS"), "piece", 1.0, TRADE)

UNITS: tuple[Unit, ...] = (
    Unit(("MG",), "g", 0.001, SI),
    GRAM,
    Unit(("KG", "KGS", "KILO", "KILOGRAM", "KILOGRAMS"), "g", 1000.0, SI, alone=True),
    MILLILITRE,
    CENTILITRE,
    DECILITRE,
    LITRE,
    OUNCE,
    POUND,
    FLUID_OUNCE,
    PINT,
    QUART,
    GALLON,
    Unit(("CU IN",), "ml", 16.387064, NIST),
    Unit(("CU FT",), "ml", 28316.846592, NIST),
    Unit(("BU", "BUSHEL", "BUSHELS"), "ml", 35239.07016688, NIST),
    PACK,
    Unit(("CT", "CTS", "CNT", "COUNT", "EA", "EACH"), "piece", 1.0, TRADE),
    Unit(("PC", "PCS", "PIECE", "PIECES", "KIT", "KITS", "SET", "SETS"), "piece", 1.0, TRADE),
    Unit(("ROLL", "ROLLS", "SHEET", "SHEETS", "PAD", "PADS", "SQUARES", "STRIPS"), "piece", 1.0, TRADE),
    Unit(("STEM", "STEMS", "BUNCH", "BUNCHES", "BAG", "BAGS", "PKGS"), "piece", 1.0, TRADE),
    Unit(("SLICE", "SLICES", "STICK", "STICKS", "SPOONS", "BAR", "BARS"), "piece", 1.0, TRADE),
    Unit(("LOAD", "LOADS", "LD", "LDS", "USE", "USES", "DOSE", "DOSES"), "piece", 1.0, TRADE),
    Unit(("PAIR", "PAIRS"), "piece", 2.0, TRADE),
    Unit(("DOZ", "DZ", "DZN", "DOZEN"), "piece", 12.0, TRADE, alone=True),
)

IMPERIAL: Mapping[str, float] = {
    FLUID_OUNCE.spellings[0]: 28.4130625,
    PINT.spellings[0]: 568.26125,
    QUART.spellings[0]: 1136.5225,
    GALLON.spellings[0]: 4546.09,
}
"""Millilitres of the units that the imperial system measures otherwise (UK)."""

METRIC_VOLUMES = frozenset({MILLILITRE, CENTILITRE, DECILITRE, LITRE})
HYPHENATED = frozenset({OUNCE, FLUID_OUNCE, GRAM, *METRIC_VOLUMES})
"""`6-12 OZ` is six of twelve, whereas `18-22 LB` and `14-18 CT` are ranges (common practice)."""

OUNCES_IN_POUND = 16
DENOMINATORS = frozenset({2, 3, 4, 8, 16, 32})
LONGEST_FIGURE = 5
"""Digits before the point; longer ones are catalogue numbers (`974006 PK`), by common practice."""
LONGEST_PACKS = 2
"""A figure that stands apart, `12 16.9 OZ`, may be packs up to this many digits, and a code beyond."""
LEAST_GRADE, WIDEST_GRADE = 20, 1.5
"""`80/88 CT` is a grade, so many to the case, not 80 of 88: both at least 20, and close (common practice)."""

_BY_SPELLING: Mapping[str, Unit] = {spelling.replace(" ", ""): unit for unit in UNITS for spelling in unit.spellings}
_SPELLINGS = "|".join(
    spelling.replace(" ", r"\.?[ ]?")
    for spelling in sorted((spelling for unit in UNITS for spelling in unit.spellings), key=len, reverse=True)
)
_FIGURE = r"[0-9]+(?:[.,][0-9]+)*\.?|[.,][0-9]+"
_STATEMENT = re.compile(
    rf"""(?<![0-9.,])(?<![0-9]/)
    (?:
        (?:(?P<whole>[0-9]{{1,3}})[ -][ ]?)?
        (?P<first>{_FIGURE})[ ]?(?P<sign>[/X*-])[ ]?
    )?
    (?P<figure>{_FIGURE})
    [ ]?-?[ ]?
    (?P<unit>{_SPELLINGS})(?![A-Z])""",
    re.VERBOSE,
)
_STANDS_APART = re.compile(r"(?<![A-Z0-9.,-])(?<!X )([0-9]+)\.? $")
_DIMENSION = re.compile(r"[0-9 ]X ?$")
_BOUND = re.compile(r"\b(?:OVER|UNDER|UP TO)\b")
_TYPOGRAPHIC = str.maketrans({"½": " 1/2", "¼": " 1/4", "¾": " 3/4", "⅓": " 1/3", "⅔": " 2/3", "×": "X", "_": " "})


@dataclass(frozen=True, slots=True)
class _Statement:
    """One measure stated on a label: so many packs of so much of a unit."""

    each: float
    packs: int
    unit: Unit


def parse_size(text: str, *, fluid: bool = False, imperial: bool = False) -> Size | None:
    """The size that a label states, or None where it states none that can be trusted.

    Parameters
    ----------
    text : the label: `12 OZ`, `1,5 L`, `1 1/2 LB`, `6 X 330 ML`, `12 PK/12 OZ`, `10/6.75 OZ`, `HALF GAL`.
    fluid : ounces that are not said to be fluid are so. They are avoirdupois otherwise, unless a
        metric volume follows: `12 OZ (355 ML)`.
    imperial : fluid ounces, pints, quarts and gallons are imperial; US liquid ones otherwise.

    Notes
    -----
    Of several measures the first counts, of a range its lower end; `2 LB 3 OZ` is one measure. `n PK`
    multiplies the measure beside it, whichever comes first, and alone is n pieces; where a label gives
    the total beside its packs (`8 PK/24.8 OZ`), nothing in it says so and the amount is too large.
    `a/b` is a fraction where b is a usual denominator and a/b is proper and in lowest terms, a packs of
    b otherwise. A comma before three digits groups thousands of pieces; in a weight or volume it may be
    either, and nothing is read.

    None: lengths and areas (`75 SQ FT`), words (LARGE, ASST, CTN, EACH), bounds (OVER 50 LB), cups (a
    measure, a container or what a machine makes), reconstituted ounces, and figures of more than
    five digits. A pint, quart, gallon, pound, kilogram or dozen without any figure is one.

    Reference: NIST Handbook 44, Appendix C, and SI Brochure for units; spellings are common practice.
    """
    label = " ".join(text.upper().translate(_TYPOGRAPHIC).split())
    label = re.sub(r"(?<![0-9] )\b(?:HALF|HLF)[ -]", "1/2 ", label)
    label = re.sub(r"\b(?:SZ|SIZE) ?[0-9]+\b", "", label)
    if _BOUND.search(label):
        return None
    stated = _find_statements(label)
    total = _combine(stated) if stated else _read_alone(label)
    if total is None:
        return None
    unit = _settle_ounces(total.unit, [statement.unit for statement in stated], fluid=fluid)
    factor = IMPERIAL.get(unit.spellings[0], unit.amount) if imperial else unit.amount
    amount = total.each * total.packs * factor
    return Size(amount, unit.measure, total.packs, text) if amount > 0 else None


def parse_sizes(series: pl.Series, *, fluid: bool = False, imperial: bool = False) -> pl.DataFrame:
    """Sizes of a column of labels, row by row: `text`, `amount`, `measure`, `packs`; null where not read.

    Each distinct spelling is read once; see `parse_size`.
    """
    labels = series.cast(pl.String).alias("text").to_frame()
    spellings = labels["text"].drop_nulls().unique()
    sizes = (parse_size(spelling, fluid=fluid, imperial=imperial) for spelling in spellings)
    read = pl.DataFrame(
        [(size.text, size.amount, size.measure, size.packs) for size in sizes if size is not None],
        schema={"text": pl.String, "amount": pl.Float64, "measure": pl.String, "packs": pl.Int64},
        orient="row",
    )
    return labels.join(read, on="text", how="left", maintain_order="left")


def _find_statements(label: str) -> list[_Statement]:
    """Every measure of a label that has a figure, from left to right."""
    found: list[_Statement] = []
    end = 0
    for match in _STATEMENT.finditer(label):
        statement = _read_statement(match)
        if statement is None:
            continue
        if found and not label[end : match.start()].strip() and _continues(found[-1], statement):
            pounds = found.pop()
            statement = _Statement(pounds.each + statement.each / OUNCES_IN_POUND, 1, POUND)
        found.append(statement)
        end = match.end()
    return found


def _continues(before: _Statement, statement: _Statement) -> bool:
    """Whether ounces finish the pounds before them, as in `2 LB 3 OZ`."""
    single = before.packs == statement.packs == 1
    return single and before.unit is POUND and statement.unit is OUNCE and statement.each < OUNCES_IN_POUND


def _read_statement(match: re.Match[str]) -> _Statement | None:
    unit = _BY_SPELLING[re.sub(r"[. ]", "", match["unit"])]
    figure = _read_figure(match["figure"], unit)
    before = match.string[: match.start()]
    apart = _STANDS_APART.search(before)
    if figure is None or (apart is not None and len(apart[1]) <= LONGEST_PACKS):
        return None
    first = _read_figure(match["first"], unit) if match["first"] else None
    if first is None or _DIMENSION.search(before):
        return _state(figure, 1, unit)
    if match["sign"] == "/" and _is_fraction(first, figure):
        return _state(float(match["whole"] or 0) + first / figure, 1, unit)
    if match["whole"]:
        return _state(figure, 1, unit)
    if _is_range(match["sign"], first, figure, unit):
        return _state(first, 1, unit)
    return _state(figure, int(first), unit) if first.is_integer() else None


def _state(each: float, packs: int, unit: Unit) -> _Statement | None:
    if unit is PACK:
        return _Statement(1.0, packs * int(each), unit) if each.is_integer() and each > 0 < packs else None
    return _Statement(each, packs, unit) if each > 0 < packs else None


def _read_figure(written: str, unit: Unit) -> float | None:
    """A decimal number with a point or comma; None where it could be two numbers, or is a code."""
    digits = written.rstrip(".")
    if re.fullmatch(r"[1-9][0-9]{0,2}(?:,[0-9]{3})+", digits):
        if unit.measure != "piece":
            return None
        digits = digits.replace(",", "")
    elif re.fullmatch(r"[1-9][0-9]{0,2}(?:,[0-9]{3})+\.[0-9]+", digits):
        digits = digits.replace(",", "")
    digits = digits.replace(",", ".")
    if digits.count(".") > 1 or len(digits.split(".")[0].lstrip("0")) > LONGEST_FIGURE:
        return None
    return float(digits)


def _is_fraction(numerator: float, denominator: float) -> bool:
    whole = numerator.is_integer() and denominator in DENOMINATORS
    return whole and 0 < numerator < denominator and gcd(int(numerator), int(denominator)) == 1


def _is_range(sign: str, low: float, high: float, unit: Unit) -> bool:
    if not low < high or unit is PACK:
        return False
    if sign == "/":
        return unit.measure == "piece" and low >= LEAST_GRADE and high <= WIDEST_GRADE * low
    return sign == "-" and (unit not in HYPHENATED or not low.is_integer())


def _combine(stated: list[_Statement]) -> _Statement:
    """The first measure, of as many packs as the label says."""
    contents = [statement for statement in stated if statement.unit is not PACK]
    packs = next((statement.packs for statement in stated if statement.unit is PACK), 1)
    if not contents:
        return stated[0]
    first = contents[0]
    return _Statement(first.each, first.packs * packs, first.unit)


def _read_alone(label: str) -> _Statement | None:
    """One of the unit that a label without any figure names, such as `PT`."""
    if re.search(r"[0-9]", label):
        return None
    units = [_BY_SPELLING[word] for word in re.findall(r"[A-Z]+", label) if word in _BY_SPELLING]
    return next((_Statement(1.0, 1, unit) for unit in units if unit.alone), None)


def _settle_ounces(unit: Unit, stated: list[Unit], *, fluid: bool) -> Unit:
    """Fluid ounces where the caller or a metric volume beside says so."""
    beside = any(other in METRIC_VOLUMES for other in stated)
    return FLUID_OUNCE if unit is OUNCE and (fluid or beside) else unit
