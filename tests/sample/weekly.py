"""Brindlow: weekly sums by outlet, one Parquet file a month."""

from dataclasses import replace
from datetime import timedelta

import numpy as np
import polars as pl

from tests.sample.behaviour import Behaviour
from tests.sample.deliveries import Delivery, scattered, sound, spoiled
from tests.sample.market import Chain
from tests.sample.timeline import MONDAYS, MONTHS, numbered_months, stream, weeks_of

UNITS_A_WEEK = 14.0
OUTLET_SIZE = (1.3, 1.0, 0.8, 0.6)
CLOSED = ("2024-03", "140")
REPEATED = "2022-08"


def weekly_deliveries(seen: Behaviour, chain: Chain) -> list[Delivery]:
    """Return Brindlow's files, one of them sent a second time under another name."""
    files = [_delivery(seen, chain, number, month) for number, month in numbered_months()]
    again = replace(
        files[MONTHS.index(REPEATED)],
        path=f"deliveries/brindlow/resent/brindlow_weekly_{REPEATED}_again.parquet",
        status="repeated",
    )
    return [*files, again]


def _delivery(seen: Behaviour, chain: Chain, number: int, month: str) -> Delivery:
    rng = stream("brindlow", month)
    clean = _clean(seen, chain, number, month, rng)
    frame = scattered(clean, _faults(clean, rng), rng)
    path = f"deliveries/brindlow/brindlow_weekly_{month}.parquet"
    return Delivery(path, "brindlow", month, frame)


def _clean(seen: Behaviour, chain: Chain, number: int, month: str, rng: np.random.Generator) -> pl.DataFrame:
    weeks = np.array(weeks_of(month))
    levels = np.array(list(chain.outlets.values()))
    outlets = np.array([int(name) for name in chain.outlets])
    size = np.where((outlets == int(CLOSED[1])) & (month == CLOSED[0]), 0.0, np.array(OUTLET_SIZE))
    shelf = seen.regular[:, number, None] * seen.factor[:, weeks]
    cents = np.rint(100.0 * levels[:, None, None] * shelf).astype(np.int64)
    units = rng.poisson(UNITS_A_WEEK * size[:, None, None] * seen.demand[:, weeks])
    outlet, item, week = np.nonzero(units)
    sold = units[outlet, item, week]
    turnover = sold * cents[outlet, item, week]
    codes = np.array([int(entry.code) for entry in seen.items])
    frame = pl.DataFrame(
        {
            "WEEK_MON": pl.Series([MONDAYS[weeks[place]] for place in week], dtype=pl.Date),
            "STORE_NO": pl.Series(outlets[outlet], dtype=pl.Int16),
            "ART_NO": pl.Series(codes[item], dtype=pl.Int32),
            "UNITS": pl.Series(sold, dtype=pl.Int32),
            "SALES_VAL": pl.Series(turnover / 100.0, dtype=pl.Float64),
            "cents": pl.Series(turnover, dtype=pl.Int64),
        }
    )
    return sound(frame)


def _faults(clean: pl.DataFrame, rng: np.random.Generator) -> list[pl.DataFrame]:
    far = timedelta(days=35 if rng.random() < 0.5 else -35)
    units, value = pl.col("UNITS"), pl.col("SALES_VAL")
    planted: tuple[tuple[str, tuple[pl.Expr, ...]], ...] = (
        ("missing-key", (pl.lit(None).alias("ART_NO"),)),
        ("missing-key", (pl.lit(None).alias("STORE_NO"),)),
        ("missing-key", (pl.lit(None).alias("WEEK_MON"),)),
        ("non-finite", (pl.lit(float("nan")).alias("SALES_VAL"),)),
        ("non-finite", (pl.lit(float("inf")).alias("SALES_VAL"),)),
        ("quantity-not-positive", (pl.lit(0).alias("UNITS"),)),
        ("quantity-not-positive", (-units, -value)),
        ("turnover-not-positive", (pl.lit(0.0).alias("SALES_VAL"),)),
        ("turnover-not-positive", (-value,)),
        ("unit-price-limits", ((units * 999.99).round(2).alias("SALES_VAL"),)),
        ("unit-price-limits", (units * 10_000,)),
        ("outside-announced-period", (pl.col("WEEK_MON") + far,)),
    )
    counts = rng.integers(0, 3, size=len(planted))
    return [
        spoiled(clean, rng, rule, int(count), *changes) for (rule, changes), count in zip(planted, counts, strict=True)
    ]
