"""The only bridge between frames and (T, N) arrays.

All groups of a panel are coded together: one sort, one scatter into one flat buffer, and each
group's arrays are views of it.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
import polars as pl
from numpy.typing import NDArray

from tillwright.errors import BadPanel, MissingColumns

Array = NDArray[np.float64]
_SORTS_AS_TIME = r"^\d{4}(-?(0[1-9]|1[0-2])(-?[0-3]\d)?|-?W[0-5]\d|-?Q[1-4])?$"


@dataclass(frozen=True, slots=True)
class Block:
    """The (T, N) arrays of one group; NaN = not sold. `values` is None where it was not asked for."""

    key: tuple[object, ...]
    prices: Array
    values: Array | None


@dataclass(frozen=True, slots=True)
class PanelArrays:
    """Every group of a panel over the same T periods.

    `periods` holds the T labels in order, as given. `keys` has one row per group.
    """

    periods: pl.Series
    keys: pl.DataFrame
    offsets: NDArray[np.int64]
    flat_prices: Array
    flat_values: Array | None

    def __iter__(self) -> Iterator[Block]:
        length = len(self.periods)
        names = self.keys.rows() if self.keys.width else [()] * (len(self.offsets) - 1)
        for position, key in enumerate(names):
            cut = slice(int(self.offsets[position]), int(self.offsets[position + 1]))
            prices = self.flat_prices[cut].reshape(length, -1)
            values = None if self.flat_values is None else self.flat_values[cut].reshape(length, -1)
            yield Block(key, prices, values)


def to_arrays(
    frame: pl.DataFrame,
    *,
    by: Sequence[str],
    product: str,
    period: str,
    price: str,
    value: str | None,
    periods: pl.Series | None = None,
) -> PanelArrays:
    """Code a long panel into (T, N) arrays per group.

    Parameters
    ----------
    frame : one row per `by`, `product` and `period`. A null price means not sold.
    value : a second column to carry along, such as the quantity or turnover; None = prices alone.
    periods : the T labels in order; None = those that occur, sorted.

    Raises
    ------
    BadPanel : a product twice in a period; a price that is not positive and finite; a value that
        is missing or not positive where there is a price.
    """
    asked = [*by, product, period, price, *([] if value is None else [value])]
    missing = [name for name in asked if name not in frame.columns]
    if missing:
        raise MissingColumns("The panel", missing, frame.columns)
    for name in (price, *([] if value is None else [value])):
        if not frame.schema[name].is_numeric():
            raise BadPanel(f"Column '{name}' of the panel holds {frame.schema[name]}, not numbers.")
    kept = frame.select(asked).filter(pl.col(price).is_not_null() & pl.col(price).cast(pl.Float64).is_not_nan())
    _check_keys(kept, [*by, product, period])
    _check_periods(kept[period])
    _check_positive(kept, price, [*by, product, period])
    if value is not None:
        _check_positive(kept, value, [*by, product, period])
    labels = kept[period].unique().sort() if periods is None else periods
    codes = pl.DataFrame({period: labels}).with_row_index("_t")
    kept = kept.join(codes, on=period, how="inner", maintain_order="left").sort([*by, product])
    return _scatter(kept, list(by), product, price, value, labels)


def _scatter(
    rows: pl.DataFrame, by: list[str], product: str, price: str, value: str | None, labels: pl.Series
) -> PanelArrays:
    length, height = len(labels), rows.height
    new_group = _starts(rows, by)
    new_product = new_group | _starts(rows, [product])
    group = np.cumsum(new_group) - 1
    column = np.cumsum(new_product) - 1
    first_column = column[new_group]
    counts = np.diff(np.append(first_column, column[-1] + 1 if height else 0))
    offsets = np.concatenate([[0], np.cumsum(counts * length)]).astype(np.int64)
    at = offsets[group] + rows["_t"].to_numpy().astype(np.int64) * counts[group] + column - first_column[group]
    _check_once(at, int(offsets[-1]), rows, [*by, product])

    def spread(name: str) -> Array:
        flat = np.full(int(offsets[-1]), np.nan)
        flat[at] = rows[name].cast(pl.Float64).to_numpy()
        return flat

    keys = rows.select(by).filter(pl.Series(new_group)) if by else pl.DataFrame()
    return PanelArrays(labels, keys, offsets, spread(price), None if value is None else spread(value))


def _starts(rows: pl.DataFrame, columns: list[str]) -> NDArray[np.bool_]:
    """Whether each row differs from the row before it in any of the columns; the first does."""
    starts = np.zeros(rows.height, dtype=bool)
    starts[:1] = True
    for name in columns:
        starts |= rows[name].ne_missing(rows[name].shift(1)).to_numpy()
    return starts


def _check_keys(rows: pl.DataFrame, columns: list[str]) -> None:
    for name in columns:
        count = rows[name].null_count()
        if count:
            raise BadPanel(f"The panel has {count} priced rows without a value in '{name}'. Fill or drop them.")


def _check_periods(periods: pl.Series) -> None:
    """Text that does not sort as time would give a wrong index without a word."""
    if periods.dtype == pl.Categorical:
        periods = periods.cast(pl.String)
    if periods.dtype != pl.String:
        return
    odd = periods.filter(~periods.str.contains(_SORTS_AS_TIME))
    if not len(odd) and periods.str.len_chars().n_unique() > 1:
        odd = periods.filter(periods.str.len_chars() != periods.str.len_chars()[0])
    if len(odd):
        raise BadPanel(
            f"Column '{periods.name}' holds '{odd[0]}', and {len(odd)} of {len(periods)} rows like it. A period is a "
            "date, an integer, or text such as 2024-03, 2024-W07, 2024-Q1 or 2024-03-31: all written alike, so that "
            "they sort as time."
        )


def _check_positive(rows: pl.DataFrame, name: str, keys: list[str]) -> None:
    number = pl.col(name).cast(pl.Float64)
    bad = rows.filter(~(number.is_finite() & (number > 0)).fill_null(False))
    if bad.height:
        example = ", ".join(f"{key} {bad[key][0]}" for key in keys)
        raise BadPanel(
            f"Column '{name}' is missing, not finite or not positive in {bad.height} of {rows.height} priced rows "
            f"(first: {example}: {bad[name][0]}). An index needs positive figures: drop or mend these rows."
        )


def _check_once(at: NDArray[np.int64], size: int, rows: pl.DataFrame, keys: list[str]) -> None:
    taken = np.bincount(at, minlength=size) if len(at) else np.zeros(0, dtype=np.int64)
    if (taken > 1).any():
        first = rows.row(int(np.flatnonzero(taken[at] > 1)[0]), named=True)
        example = ", ".join(f"{key} {first[key]}" for key in keys)
        raise BadPanel(
            f"Products occur more than once in a period, {int((taken > 1).sum())} times (first: {example}). A panel "
            "has one row per product and period: sum turnover and quantity to unit values first, or name the column "
            "that tells the rows apart with by."
        )
