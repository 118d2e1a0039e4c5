"""One received file before it is written: its rows, and which of them must be refused."""

from dataclasses import dataclass, replace
from decimal import Decimal
from typing import Any, Literal

import numpy as np
import polars as pl

Status = Literal["active", "repeated", "superseded"]
MARKS = ("rule", "cents")


@dataclass(frozen=True, slots=True)
class Delivery:
    """One file.

    `frame` holds the source columns, `rule` (the refusal rule a row was made for, null when sound) and `cents`
    (the consumer's turnover of a sound row).
    """

    path: str
    feed: str
    period: str
    frame: pl.DataFrame
    status: Status = "active"
    returns: int = 0
    moved: int = 0

    @property
    def accepted(self) -> pl.DataFrame:
        """The sound rows."""
        return self.frame.filter(pl.col("rule").is_null())

    @property
    def turnover(self) -> Decimal:
        """The turnover of the sound rows."""
        return Decimal(int(self.frame["cents"].sum())).scaleb(-2)

    @property
    def refused(self) -> dict[str, int]:
        """The number of rows made for each refusal rule."""
        counts = self.frame["rule"].drop_nulls().value_counts()
        return dict(sorted(counts.iter_rows()))

    @property
    def refused_share(self) -> float:
        """The share of rows that must be refused."""
        return sum(self.refused.values()) / self.frame.height

    def record(self) -> dict[str, Any]:
        """Return what a test needs to know of this file."""
        return {
            "path": self.path,
            "feed": self.feed,
            "period": self.period,
            "status": self.status,
            "rows": self.frame.height,
            "refused": self.refused,
            "accepted_rows": self.accepted.height,
            "accepted_turnover": str(self.turnover),
            "returns": self.returns,
            "utc_month_differs": self.moved,
        }

    def cut(self, path: str, rows: int) -> "Delivery":
        """Return the superseded first version: the same file broken off after some rows."""
        return replace(self, path=path, frame=self.frame.head(rows), status="superseded")


def sound(frame: pl.DataFrame) -> pl.DataFrame:
    """Mark every row as sound; `cents` must be there."""
    return frame.with_columns(pl.lit(None, dtype=pl.String).alias("rule"))


def spoiled(frame: pl.DataFrame, rng: np.random.Generator, rule: str, count: int, *changes: pl.Expr) -> pl.DataFrame:
    """Return copies of random sound rows, changed so that `rule` must refuse them."""
    places = rng.integers(0, frame.height, size=count)
    copies = frame[places].with_columns(*changes)
    marked = copies.with_columns(pl.lit(rule).alias("rule"), pl.lit(0, dtype=pl.Int64).alias("cents"))
    return marked.select(pl.col(name).cast(dtype) for name, dtype in frame.schema.items())


def scattered(frame: pl.DataFrame, additions: list[pl.DataFrame], rng: np.random.Generator) -> pl.DataFrame:
    """Return the rows with the additions strewn among them."""
    added = pl.concat(additions)
    places = np.concatenate([np.arange(frame.height), rng.uniform(0, frame.height, size=added.height)])
    mixed = pl.concat([frame, added]).with_columns(pl.Series("place", places))
    return mixed.sort("place", maintain_order=True).drop("place")
