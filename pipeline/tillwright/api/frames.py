"""The frames that researchers bring: which column plays which role, and their arrays."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

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
    groups = (by,) if isinstance(by, str) else tuple(by or ())
    return Columns(groups, period, product, price, quantity, over)


def code(frame: Any, columns: Columns, *, quantities: bool, result: Sequence[str], ordered: bool = True) -> PanelArrays:
    """The arrays of a frame.

    Parameters
    ----------
    quantities : whether the quantity column is read at all.
    result : the columns that the result will have of its own, which no column kept may be called like.
    ordered : whether periods must sort as time.

    Raises
    ------
    CallError, BadPanel, MissingColumns
    """
    value = columns.quantity if quantities else None
    _check_columns(columns, value, result)
    arrays = to_arrays(
        to_polars(frame),
        by=columns.by,
        product=columns.identity,
        period=columns.period,
        price=columns.price,
        value=value,
        ordered=ordered,
    )
    if len(arrays.periods) == 0:
        raise BadPanel("The panel has no priced row, so there is nothing to compare.")
    return arrays


def to_polars(frame: Any) -> pl.DataFrame:
    """A Polars frame of whatever frame was given."""
    if isinstance(frame, pl.DataFrame):
        return frame
    if isinstance(frame, pl.LazyFrame):
        return frame.collect()
    try:
        return pl.DataFrame(frame)
    except (TypeError, ValueError) as error:
        kind = type(frame).__name__
        raise CallError(f"The panel is a {kind}; give a Polars, pandas or Arrow frame. ({error})") from None


def check_choice(name: str, found: object, allowed: Sequence[str]) -> None:
    """Raise CallError unless the value is one of those allowed."""
    if found not in allowed:
        raise CallError(f"{name} is '{found}'; allowed: {', '.join(allowed)}.")


def check_number(name: str, found: object, least: int, most: int | None = None) -> None:
    """Raise CallError unless the value is a whole number within the bounds."""
    if isinstance(found, int) and not isinstance(found, bool) and least <= found and (most is None or found <= most):
        return
    allowed = f"whole numbers from {least} on" if most is None else f"{least} to {most}"
    raise CallError(f"{name} is {found!r}; allowed: {allowed}.")


def position_of(name: str, label: Any, labels: pl.Series) -> int:
    """Where a label given as an argument stands among those of the panel, in its own type or as text.

    Raises CallError, with the name of the argument and what there is.
    """
    known = labels.to_list()
    for position, one in enumerate(known):
        if one == label or str(one) == str(label):
            return position
    shown = ", ".join(str(one) for one in known) if len(known) <= 12 else f"{known[0]} to {known[-1]}"
    raise CallError(f"{name} is '{label}', which the panel does not have; it has {shown}.")


def _check_columns(columns: Columns, value: str | None, result: Sequence[str]) -> None:
    """Every column plays one role, and none that is kept is called like a column of the result."""
    roles = [*columns.by, *columns.identity, columns.period, columns.price, *([value] if value else [])]
    twice = sorted({name for name in roles if roles.count(name) > 1})
    if twice:
        raise CallError(f"Column '{twice[0]}' is named for more than one of by, period, product, price and quantity.")
    taken = sorted({*columns.by, columns.period} & set(result))
    if taken:
        raise CallError(f"Column '{taken[0]}' would collide with a column of the result; rename it in the panel.")
