"""Kestrin: till lines with UTC time stamps, one Parquet file per local month."""

from dataclasses import replace
from datetime import date, timedelta

import numpy as np
import polars as pl
from numpy.typing import NDArray

from tests.sample.behaviour import Behaviour
from tests.sample.deliveries import Delivery, scattered, sound, spoiled
from tests.sample.market import Chain
from tests.sample.timeline import MONTHS, days_of, numbered_months, stream, week_of

ZONE = "America/Halifax"
LINES_A_DAY = 0.16
OUTLET_SIZE = (1.25, 1.0, 0.75)
WEEKDAY = (0.85, 0.85, 0.9, 1.0, 1.3, 1.4, 0.7)
RETURNS = 14
LATE = "2023-02"
MISCODED = ("2023-05", "K2", date(2023, 5, 9), date(2023, 5, 12))

Integers = NDArray[np.int64]


def till_deliveries(seen: Behaviour, chain: Chain) -> list[Delivery]:
    """Return Kestrin's files; one first came broken off and was sent again."""
    files = [_delivery(seen, chain, number, month) for number, month in numbered_months()]
    late = MONTHS.index(LATE)
    whole = files[late]
    files[late] = whole.cut(whole.path, int(whole.frame.height * 0.7))
    corrected = whole.path.replace("kestrin/", "kestrin/late/", 1)
    files.append(replace(whole, path=corrected))
    return [_counted(delivery) for delivery in files]


def exact(frame: pl.DataFrame) -> pl.DataFrame:
    """Return the frame in the types of the file, decimals in place of whole cents and grams."""
    return frame.with_columns(
        (pl.col("qty") / 1000).cast(pl.Decimal(9, 3)),
        (pl.col("amount") / 100).cast(pl.Decimal(9, 2)),
        (pl.col("deposit") / 100).cast(pl.Decimal(9, 2)),
    )


def _delivery(seen: Behaviour, chain: Chain, number: int, month: str) -> Delivery:
    rng = stream("kestrin", month)
    lines = _clean(seen, chain, number, month, rng)
    lines = pl.concat([lines, _returns(lines, rng)]).sort("local", "gtin", "shop", maintain_order=True)
    first = int(month[2:4] + month[5:7]) * 100_000
    lines = _in_utc(lines).with_columns(pl.int_range(first, first + pl.len(), dtype=pl.Int64).alias("till_line"))
    lines = sound(_miscoded(lines, month))
    lines = lines.with_columns(
        pl.when(pl.col("broken")).then(pl.lit("malformed-item-code")).alias("rule"),
        pl.when(pl.col("broken")).then(0).otherwise(pl.col("cents")).alias("cents"),
    ).drop("broken", "local")
    lines = lines.select("sold_utc", "till_line", "shop", "gtin", "qty", "amount", "deposit", "rule", "cents")
    frame = scattered(lines, _faults(lines.filter(pl.col("rule").is_null()), first, rng), rng)
    frame = pl.concat([frame, _doubled(frame, rng)])
    path = f"deliveries/kestrin/kestrin_lines_{month.replace('-', '')}.parquet"
    return Delivery(path, "kestrin", month, frame)


def _clean(seen: Behaviour, chain: Chain, number: int, month: str, rng: np.random.Generator) -> pl.DataFrame:
    days = days_of(month)
    weeks = np.array([week_of(day) for day in days])
    weekday = np.array([WEEKDAY[day.weekday()] for day in days])
    outlets, levels = np.array(list(chain.outlets)), np.array(list(chain.outlets.values()))
    expected = LINES_A_DAY * np.array(OUTLET_SIZE)[:, None, None] * seen.demand[:, weeks] * weekday
    counts = rng.poisson(expected)
    outlet, item, day = (np.repeat(place, counts[counts > 0]) for place in np.nonzero(counts))
    price = np.rint(100.0 * levels[outlet] * seen.regular[item, number] * seen.factor[item, weeks[day]])
    weighed = np.array([entry.aggregate.weighed for entry in seen.items])[item]
    grams = np.where(weighed, _weights(item.size, rng), 1000 * (1 + rng.poisson(0.6, size=item.size)))
    cents = np.rint(price * grams / 1000.0).astype(np.int64)
    per_piece = np.array([round(100 * entry.aggregate.deposit) * entry.pack.count for entry in seen.items])
    deposit = per_piece[item] * (grams // 1000)
    codes = np.array([entry.code for entry in seen.items])
    start = np.array(days, dtype="datetime64[D]").astype("datetime64[ms]")
    return pl.DataFrame(
        {
            "local": start[day] + _seconds(item.size, rng).astype("timedelta64[s]"),
            "shop": outlets[outlet],
            "gtin": codes[item],
            "qty": grams.astype(np.int64),
            "amount": cents + deposit,
            "deposit": deposit,
            "cents": cents,
        }
    ).with_columns(pl.when(pl.col("deposit") > 0).then(pl.col("deposit")).alias("deposit"))


def _weights(size: int, rng: np.random.Generator) -> Integers:
    grams: Integers = np.maximum(5 * np.rint(rng.gamma(5.0, 0.18, size=size) * 200.0), 100).astype(np.int64)
    return grams


def _seconds(size: int, rng: np.random.Generator) -> Integers:
    """Return seconds of the local day, half before lunch and half towards the evening."""
    hours = np.where(rng.random(size) < 0.4, rng.normal(11.0, 1.6, size), rng.normal(18.0, 2.0, size))
    opened: Integers = np.rint(np.clip(hours, 7.5, 21.98) * 3600.0).astype(np.int64)
    return opened


def _returns(lines: pl.DataFrame, rng: np.random.Generator) -> pl.DataFrame:
    """Return goods brought back some days after: the same line with all signs turned."""
    often = lines.filter((pl.len().over("gtin") >= 12) & (pl.col("local").dt.day() <= 24))
    places = rng.choice(often.height, size=RETURNS, replace=False)
    later = pl.Series([timedelta(days=int(days)) for days in rng.integers(1, 5, size=RETURNS)])
    return often[np.sort(places)].with_columns(
        (pl.col("local") + later).dt.cast_time_unit("ms").alias("local"),
        *(-pl.col(name) for name in ("qty", "amount", "deposit", "cents")),
    )


def _in_utc(lines: pl.DataFrame) -> pl.DataFrame:
    stamps = pl.col("local").dt.replace_time_zone(ZONE).dt.convert_time_zone("UTC").dt.replace_time_zone(None)
    return lines.with_columns(stamps.alias("sold_utc"))


def _miscoded(lines: pl.DataFrame, month: str) -> pl.DataFrame:
    """Spoil the check digits that one till wrote for some days."""
    bad_month, shop, first, last = MISCODED
    day = pl.col("local").dt.date()
    broken = pl.lit(month == bad_month) & (pl.col("shop") == shop) & day.is_between(first, last)
    return lines.with_columns(broken.alias("broken")).with_columns(
        pl.when(pl.col("broken")).then(_wrong_digit(3)).otherwise(pl.col("gtin")).alias("gtin")
    )


def _wrong_digit(shift: int) -> pl.Expr:
    digit = (pl.col("gtin").str.slice(12).cast(pl.Int64) + shift) % 10
    return pl.col("gtin").str.slice(0, 12) + digit.cast(pl.String)


def _faults(clean: pl.DataFrame, first: int, rng: np.random.Generator) -> list[pl.DataFrame]:
    untaxed = clean.filter(pl.col("deposit").is_null() & (pl.col("qty") > 0))
    with_deposit = clean.filter(pl.col("deposit").is_not_null() & (pl.col("qty") > 0))
    planted: tuple[tuple[str, pl.DataFrame, tuple[pl.Expr, ...]], ...] = (
        ("missing-key", untaxed, (pl.lit(None).alias("gtin"),)),
        ("missing-key", untaxed, (pl.lit(None).alias("shop"),)),
        ("missing-key", untaxed, (pl.lit(None).alias("sold_utc"),)),
        ("quantity-not-positive", untaxed, (pl.lit(0).alias("qty"),)),
        ("quantity-not-positive", untaxed, (-pl.col("qty"),)),
        ("turnover-not-positive", untaxed, (pl.lit(0).alias("amount"),)),
        ("turnover-not-positive", with_deposit, (pl.col("deposit").alias("amount"),)),
        ("unit-price-limits", untaxed, (pl.lit(1000).alias("qty"), pl.lit(999_999).alias("amount"))),
        ("unit-price-limits", untaxed, (pl.lit(900_000).alias("qty"), pl.lit(50).alias("amount"))),
        ("outside-announced-period", untaxed, (pl.col("sold_utc") - timedelta(days=40),)),
        ("malformed-item-code", untaxed, (_wrong_digit(1),)),
        ("malformed-item-code", untaxed, (pl.col("gtin").str.replace("0", "O", literal=True),)),
        ("malformed-item-code", untaxed, (pl.col("gtin").str.slice(0, 11),)),
    )
    counts = rng.integers(0, 3, size=len(planted))
    rows = pl.concat(
        spoiled(source, rng, rule, int(count), *changes)
        for (rule, source, changes), count in zip(planted, counts, strict=True)
    )
    return [
        rows.with_columns(pl.int_range(first + 90_000, first + 90_000 + pl.len(), dtype=pl.Int64).alias("till_line"))
    ]


def _doubled(frame: pl.DataFrame, rng: np.random.Generator) -> pl.DataFrame:
    """Return sound lines that come again, word for word, at the end of the file."""
    count = int(rng.integers(1, 5))
    return spoiled(frame.filter(pl.col("rule").is_null()), rng, "duplicate-line", count)


def _counted(delivery: Delivery) -> Delivery:
    """Return the delivery with its returns and the lines whose UTC month is another counted."""
    sound_rows = delivery.accepted
    return replace(
        delivery,
        returns=sound_rows.filter(pl.col("qty") < 0).height,
        moved=sound_rows.filter(pl.col("sold_utc").dt.strftime("%Y-%m") != delivery.period).height,
    )
