"""The frames that researchers bring: which column plays which role, and their arrays."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from datetime import date
from numbers import Integral
from typing import Any, Literal

import polars as pl

from tillwright.errors import BadPanel, CallError
from tillwright.panels import PanelArrays, to_arrays


@dataclass(frozen=True, slots=True)
class Columns:
    """Names of the columns that play a role, and of those that split the panel."""

    by: tuple[str, ...]
    period: str
    product: str
    price: str
    quantity: str
    over: str | None = None

    @property
    def identity(self) -> tuple[str, ...]:
        """The columns that make a product."""
        return (self.product,) if self.over is None else (self.product, self.over)


def named(
    by: str | Sequence[str] | None, period: str, product: str, price: str, quantity: str, *, over: str | None = None
) -> Columns:
    """Columns by their names."""
    if by is not None and not isinstance(by, str | Iterable):
        raise CallError(f"by is {by!r}; name a column, or a list of columns.")
    groups = (by,) if isinstance(by, str) else tuple(() if by is None else by)
    return Columns(groups, period, product, price, quantity, over)


def code(
    frame: Any,
    columns: Columns,
    *,
    quantities: bool,
    result: Sequence[str],
    unit: Literal["period", "place"] = "period",
    keeps: Literal["period", "product"] = "period",
) -> PanelArrays:
    """The arrays of a frame.

    Parameters
    ----------
    quantities : whether the quantity column is read at all.
    result : the columns that the result will have of its own, which no column kept may be called like.
    unit : what the rows of the arrays are; periods must sort as time.
    keeps : the column, besides those of `by`, that the result keeps.

    Raises
    ------
    CallError, BadPanel, MissingColumns
    """
    value = columns.quantity if quantities else None
    _check_columns(columns, value, result, columns.period if keeps == "period" else columns.product)
    arrays = to_arrays(
        to_polars(frame),
        by=columns.by,
        product=columns.identity,
        period=columns.period,
        price=columns.price,
        value=value,
        unit=unit,
    )
    if len(arrays.periods) == 0:
        raise BadPanel("The panel has no priced row, so there is nothing to compare.")
    return arrays


def to_polars(frame: Any) -> pl.DataFrame:
    """A Polars frame of whatever frame was given; periods of pandas become text.

    Raises CallError for what is no frame, or cannot be read as one.
    """
    if isinstance(frame, pl.DataFrame):
        return frame
    kind = type(frame).__name__
    if frame is None or isinstance(frame, str | bytes | pl.Series):
        raise CallError(f"The panel is a {kind}; give a Polars, pandas or Arrow frame.")
    try:
        if isinstance(frame, pl.LazyFrame):
            return frame.collect()
        for name, column in frame.items() if hasattr(frame, "dtypes") and hasattr(frame, "items") else ():
            if str(column.dtype).startswith("period["):
                frame = frame.assign(**{name: column.astype(str)})
        return pl.DataFrame(frame)
    except Exception as error:  # noqa: BLE001 - whatever another library's frame raises is about the frame
        raise CallError(f"The panel is a {kind} that cannot be read: {error}") from None


def check_choice(name: str, found: object, allowed: Sequence[str]) -> None:
    """Raise CallError unless the value is one of those allowed."""
    if found not in allowed:
        raise CallError(f"{name} is '{found}'; allowed: {', '.join(allowed)}.")


def check_number(name: str, found: object, least: int, most: int | None = None) -> None:
    """Raise CallError unless the value is a whole number within the bounds."""
    whole = isinstance(found, Integral) and not isinstance(found, bool)
    if whole and least <= int(found) and (most is None or int(found) <= most):  # type: ignore[call-overload]
        return
    allowed = f"whole numbers from {least} on" if most is None else f"{least} to {most}"
    raise CallError(f"{name} is {found!r}; allowed: {allowed}.")


def position_of(name: str, label: Any, labels: pl.Series) -> int:
    """Where a label given as an argument stands among those of the panel, in its own type or as text.

    The beginning of a date, such as 2024-03, stands for the only date that begins so.

    Raises CallError, with the name of the argument and what there is.
    """
    known = labels.to_list()
    for position, one in enumerate(known):
        if str(one) == str(label) or (isinstance(one, int) and str(one) == str(label).replace("-", "")):
            return position
    begin = [
        position for position, one in enumerate(known) if isinstance(one, date) and str(one).startswith(str(label))
    ]
    if len(begin) == 1:
        return begin[0]
    shown = ", ".join(str(one) for one in known) if len(known) <= 12 else f"{known[0]} to {known[-1]}"
    raise CallError(f"{name} is '{label}', which the panel does not have; it has {shown}.")


def _check_columns(columns: Columns, value: str | None, result: Sequence[str], kept: str) -> None:
    """Every column plays one role, and none that is kept is called like a column of the result."""
    roles: list[Any] = [*columns.by, *columns.identity, columns.period, columns.price, *([value] if value else [])]
    odd = [name for name in roles if not isinstance(name, str)]
    if odd:
        raise CallError(f"{odd[0]!r} is no column name; columns are named by text.")
    twice = sorted({name for name in roles if roles.count(name) > 1})
    if twice:
        raise CallError(
            f"Column '{twice[0]}' is named for more than one of by, over, period, product, price and quantity."
        )
    taken = sorted({*columns.by, kept} & set(result))
    if taken:
        raise CallError(f"Column '{taken[0]}' would collide with a column of the result; rename it in the panel.")
