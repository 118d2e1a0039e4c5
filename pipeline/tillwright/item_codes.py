"""GTINs: check digits, one form for all lengths, and the item part of in-store codes.

Codes are texts. The form that they are compared in is the GTIN-14: right-justified digits, padded
with zeros. What counts as malformed is what `sql/11_malformed.sql` says.

Reference: GS1 General Specifications, sections on GTINs, GS1 Prefixes and check digits (from memory).
"""

from __future__ import annotations

import re

import numpy as np
import polars as pl

from tillwright.errors import CallError

BLANKS = " \t\r"
WELL_FORMED = re.compile(r"(?:[0-9]{8}|[0-9]{12,14})\Z")

RESTRICTED_START = r"^(?:00[24]|02[0-9]|000000[02])"
"""How GTIN-14s of restricted circulation start.

GTIN-13 prefixes 02 (UPC number system 2), 04 (UPC number system 4) and 20–29; in GTIN-8s, the first digit
0 or 2. Retailers give them out, commonly for variable measure, and each means them in its own way.
"""


def check_digit(body: str) -> int:
    """The check digit of a code without it: from the right weights 3, 1, 3, 1, …; (10 − sum mod 10) mod 10.

    Raises ValueError where the body has anything but the digits 0–9.
    """
    if not re.fullmatch(r"[0-9]+", body):
        raise ValueError(f"'{body}' is not made of the digits 0 to 9")
    total = sum(int(digit) * (1 if place % 2 else 3) for place, digit in enumerate(reversed(body)))
    return -total % 10


def gtin14(code: str) -> str | None:
    """The 14 digits of a GTIN-8, -12, -13 or -14, or None where it is malformed.

    Blanks around the code do not count; other lengths, other characters and a wrong check digit do.
    """
    digits = code.strip(BLANKS)
    if not WELL_FORMED.match(digits) or check_digit(digits[:-1]) != int(digits[-1]):
        return None
    return digits.zfill(14)


def is_restricted(code: str) -> bool:
    """Whether a code is a well-formed GTIN of restricted circulation, see `RESTRICTED_START`."""
    digits = gtin14(code)
    return digits is not None and re.match(RESTRICTED_START, digits) is not None


def item_part(code: str, pattern: str) -> str | None:
    r"""The digits that name the item in an in-store code, without price, weight and check digit.

    Parameters
    ----------
    code : a GTIN of any length; a UPC is read as the GTIN-13 that starts with 0.
    pattern : regular expression over the 13 digits of the GTIN-13 with a group `item`, such as
        `2[0-9](?P<item>\d{5})\d{5}\d`; the layout is agreed nationally or by the retailer.

    Returns
    -------
    None where the code is malformed or not of restricted circulation, or the pattern does not fit.
    Raises CallError where the pattern is no regular expression or has no group `item`.
    """
    _item_group(pattern)
    digits = gtin14(code)
    if digits is None or not re.match(RESTRICTED_START, digits):
        return None
    found = re.fullmatch(pattern, digits[1:])
    return found["item"] if found else None


def gtin14_of(codes: pl.Expr) -> pl.Expr:
    """The 14 digits of each code of a text column, null where it is missing or malformed; see `gtin14`."""
    return codes.cast(pl.String).map_batches(_pad_column, return_dtype=pl.String, is_elementwise=True)


def is_restricted_of(codes: pl.Expr) -> pl.Expr:
    """Whether each code is a well-formed GTIN of restricted circulation; false where it is missing."""
    return gtin14_of(codes).str.contains(RESTRICTED_START).fill_null(value=False)


def item_part_of(codes: pl.Expr, pattern: str) -> pl.Expr:
    """The item part of each code of a text column, null where `item_part` says None; Raises as it does."""
    group = _item_group(pattern)

    def reduce(column: pl.Series) -> pl.Series:
        return _reduce_column(_pad_column(column), pattern, group)

    return codes.cast(pl.String).map_batches(reduce, return_dtype=pl.String, is_elementwise=True)


def item_key_of(codes: pl.Expr, pattern: str) -> pl.Expr:
    """What to tell items apart by: the item part of in-store codes, the 14 digits of all others.

    In-store codes that the pattern does not fit keep their 14 digits; malformed codes are null.
    Raises as `item_part` does.
    """
    group = _item_group(pattern)

    def reduce(column: pl.Series) -> pl.Series:
        digits = _pad_column(column)
        parts = _reduce_column(digits, pattern, group)
        return parts.zip_with(parts.is_not_null(), digits)

    return codes.cast(pl.String).map_batches(reduce, return_dtype=pl.String, is_elementwise=True)


def _pad_column(codes: pl.Series) -> pl.Series:
    """`gtin14` of a whole column, which is weighed as integers."""
    digits = codes.str.strip_chars(BLANKS)
    well_formed = digits.str.contains(r"^(?:[0-9]{8}|[0-9]{12,14})$").fill_null(value=False)
    left = digits.set(~well_formed, "0").cast(pl.Int64).to_numpy().copy()
    weighed = np.zeros_like(left)
    for place in range(14):
        left, digit = np.divmod(left, 10)
        weighed += digit * (3 if place % 2 else 1)
    right = well_formed & pl.Series(weighed % 10 == 0)
    return digits.str.zfill(14).set(~right, None)


def _reduce_column(digits: pl.Series, pattern: str, group: int) -> pl.Series:
    """`item_part` of a column of 14 digits."""
    restricted = digits.str.contains(RESTRICTED_START).fill_null(value=False)
    return digits.str.slice(1).str.extract(f"^(?:{pattern})$", group).set(~restricted, None)


def _item_group(pattern: str) -> int:
    try:
        groups = re.compile(pattern).groupindex
    except re.error as problem:
        raise CallError(f"The pattern {pattern} is no regular expression: {problem}.") from problem
    if "item" not in groups:
        raise CallError(
            f"The pattern {pattern} does not say which digits name the item. "
            r"Mark them as a group, such as 2[0-9](?P<item>\d{5})\d{5}\d."
        )
    return groups["item"]
