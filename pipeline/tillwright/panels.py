"""The only bridge between frames and (T, N) arrays.

All groups of a panel are coded together: the distinct products are sorted once, and one scatter puts
every row into its cell. The columns of a group lie side by side.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
import polars as pl
from numpy.typing import NDArray

from tillwright.errors import BadPanel, MissingColumns

Array = NDArray[np.float64]
_SORTS_AS_TIME = r"^\d{4}(-?(0[1-9]|1[0-2])(-?[0-3]\d)?|-?W(0[1-9]|[1-4]\d|5[0-3])|-?Q[1-4])?$"


# No column of a panel is called so.
_ROW = "\0row"


@dataclass(frozen=True, slots=True)
class Block:
    """The (T, N) arrays of one group; NaN = not sold. `values` is None where it was not asked for."""

    key: tuple[object, ...]
    prices: Array
    values: Array | None


@dataclass(frozen=True, slots=True)
class PanelArrays:
    """Every group of a panel over the same T periods.

    `periods` holds the T labels in order, as given. `keys` has one row per group, `products` one per
    column: the group's key and what makes a product. `starts` (B,) are the first columns of the groups.
    `prices` and `values` are (T, N); NaN = not sold.
    """

    periods: pl.Series
    keys: pl.DataFrame
    products: pl.DataFrame
    starts: NDArray[np.intp]
    prices: Array
    values: Array | None

    @property
    def ends(self) -> NDArray[np.intp]:
        """(B,) the columns after the last ones of the groups."""
        return np.append(self.starts, self.prices.shape[1])[1:]

    @property
    def cuts(self) -> list[slice]:
        """The columns of each group."""
        return [slice(int(start), int(end)) for start, end in zip(self.starts, self.ends, strict=True)]

    def __iter__(self) -> Iterator[Block]:
        names = self.keys.rows() if self.keys.width else [()] * len(self.starts)
        for key, cut in zip(names, self.cuts, strict=True):
            yield Block(key, self.prices[:, cut], None if self.values is None else self.values[:, cut])


def to_arrays(
    frame: pl.DataFrame,
    *,
    by: Sequence[str],
    product: str | Sequence[str],
    period: str,
    price: str,
    value: str | None,
    periods: pl.Series | None = None,
    unit: Literal["period", "place"] = "period",
) -> PanelArrays:
    """Code a long panel into (T, N) arrays per group.

    Parameters
    ----------
    frame : one row per `by`, `product` and `period`. A null price means not sold.
    product : the column, or the columns together, that tell products apart.
    value : a second column to carry along, such as the quantity or turnover; None = prices alone.
    periods : the T labels in order; None = those that occur, sorted.
    unit : what the labels are, as messages call them; periods must sort as time.

    Raises
    ------
    BadPanel : a product twice in a period; a price that is not positive and finite; a value that
        is missing, not finite or negative where there is a price.
    """
    identity = [*by, *([product] if isinstance(product, str) else product)]
    asked = [*identity, period, price, *([] if value is None else [value])]
    missing = [name for name in asked if name not in frame.columns]
    if missing:
        raise MissingColumns("The panel", missing, frame.columns)
    for name in (price, *([] if value is None else [value])):
        if not frame.schema[name].is_numeric():
            raise BadPanel(_no_numbers(frame[name]))
    kept = frame.select(asked).filter(pl.col(price).is_not_null() & pl.col(price).cast(pl.Float64).is_not_nan())
    _check_keys(kept, [*identity, period])
    if unit == "period":
        _check_periods(kept[period])
    _check_numbers(kept, price, [*identity, period], zero=False)
    if value is not None:
        _check_numbers(kept, value, [*identity, period], zero=True)
    labels = kept[period].unique().sort() if periods is None else periods
    return _scatter(kept, list(by), identity, period, price, value, labels, unit)


def _scatter(
    rows: pl.DataFrame,
    by: list[str],
    identity: list[str],
    period: str,
    price: str,
    value: str | None,
    labels: pl.Series,
    unit: str,
) -> PanelArrays:
    kept, period_of = _number_periods(rows, period, labels)
    # One hash grouping finds the distinct products and their rows; only the distinct ones are sorted.
    grouped = kept.select(identity).with_row_index(_ROW).group_by(identity).agg(_ROW).sort(identity)
    products = grouped.select(identity)
    order = grouped[_ROW].explode(empty_as_null=False).to_numpy()
    at = np.repeat(np.arange(products.height), grouped[_ROW].list.len().to_numpy())
    at += period_of[order].astype(np.int64) * products.height
    shape = (len(labels), products.height)
    _check_once(at, order, shape[0] * shape[1], kept, [*identity, period], unit)

    def spread(name: str) -> Array:
        flat = np.full(shape[0] * shape[1], np.nan)
        flat[at] = kept[name].cast(pl.Float64).to_numpy()[order]
        return flat.reshape(shape)

    opens = _starts(products, by)
    keys = products.select(by).filter(pl.Series(opens)) if by else pl.DataFrame()
    starts = np.flatnonzero(opens)
    return PanelArrays(labels, keys, products, starts, spread(price), None if value is None else spread(value))


def _number_periods(rows: pl.DataFrame, period: str, labels: pl.Series) -> tuple[pl.DataFrame, NDArray[np.uint32]]:
    """The rows whose period is among the labels, and its position for each of them."""
    codes = pl.DataFrame({period: labels}).with_row_index(_ROW)
    numbers = rows.select(period).join(codes, on=period, how="left", maintain_order="left")[_ROW]
    known = numbers.is_not_null()
    if known.all():
        return rows, numbers.to_numpy()
    return rows.filter(known), numbers.drop_nulls().to_numpy()


def _starts(rows: pl.DataFrame, columns: list[str]) -> NDArray[np.bool_]:
    """Whether each row differs from the row before it in any of the columns; the first does."""
    starts = np.zeros(rows.height, dtype=bool)
    starts[:1] = True
    for name in columns:
        starts |= rows[name].ne_missing(rows[name].shift(1)).to_numpy()
    return starts


def _no_numbers(column: pl.Series) -> str:
    """What to say of a column that should hold numbers."""
    if column.is_empty():
        return f"The panel has no rows (column '{column.name}' is empty)."
    odd = column
    if column.dtype == pl.String:
        odd = column.filter(column.cast(pl.Float64, strict=False).is_null() & column.is_not_null())
    example = f": '{odd[0]}' and {len(odd) - 1} more rows" if len(odd) else ""
    return (
        f"Column '{column.name}' of the panel holds {column.dtype}, not numbers{example}. Convert it, with "
        "a decimal point, and leave unsold products empty."
    )


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
    labels = periods.unique(maintain_order=True)
    odd = labels.filter(~labels.str.contains(_SORTS_AS_TIME))
    shapes = labels.str.replace_all(r"\d", "0")
    if not len(odd) and shapes.n_unique() > 1:
        odd = labels.filter(shapes != shapes[0])
    if len(odd):
        rows = periods.is_in(odd.implode()).sum()
        raise BadPanel(
            f"Column '{periods.name}' holds '{odd[0]}', and {rows} of {len(periods)} rows like it. A period is a "
            "date, an integer, or text such as 2024-03, 2024-W07, 2024-Q1 or 2024-03-31: all written alike, so that "
            "they sort as time."
        )


def _check_numbers(rows: pl.DataFrame, name: str, keys: list[str], *, zero: bool) -> None:
    number = pl.col(name).cast(pl.Float64)
    right = number.is_finite() & (number >= 0 if zero else number > 0)
    bad = rows.filter(~right.fill_null(False))
    if bad.height:
        example = ", ".join(f"{key} {bad[key][0]}" for key in keys)
        wanted = "negative" if zero else "not positive"
        raise BadPanel(
            f"Column '{name}' is missing, not finite or {wanted} in {bad.height} of {rows.height} priced rows "
            f"(first: {example}: {bad[name][0]}). No index can be made of that: drop or mend these rows."
        )


def _check_once(
    at: NDArray[np.int64], order: NDArray[np.uint32], size: int, rows: pl.DataFrame, keys: list[str], unit: str
) -> None:
    taken = np.bincount(at, minlength=size) if len(at) else np.zeros(0, dtype=np.int64)
    if (taken > 1).any():
        first = rows.row(int(order[taken[at] > 1].min()), named=True)
        example = ", ".join(f"{key} {first[key]}" for key in keys)
        raise BadPanel(
            f"Products occur more than once in a {unit}, {int((taken > 1).sum())} times (first: {example}). A panel "
            f"has one row per product and {unit}: sum turnover and quantity to unit values first, or name the column "
            "that tells the rows apart with by."
        )
