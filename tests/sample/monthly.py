"""Ombray: monthly sums of the whole chain, semicolons and decimal commas in Latin-1."""

from dataclasses import replace

import numpy as np
import polars as pl
from numpy.typing import NDArray

from tests.sample.behaviour import Behaviour
from tests.sample.deliveries import Delivery, scattered, sound, spoiled
from tests.sample.market import Aggregate
from tests.sample.timeline import MONTHS, days_of, numbered_months, stream, week_of
from tests.sample.wording import description

COLUMNS = ("mois", "réf_article", "libellé", "rayon", "quantité", "chiffre_affaires")
UNITS_A_DAY = 7.0
STOCKPILING = "2023-10"
CORRECTED = "2024-05"

Integers = NDArray[np.int64]


def monthly_deliveries(seen: Behaviour) -> list[Delivery]:
    """Return Ombray's files; one has a second version."""
    files = [_delivery(seen, number, month) for number, month in numbered_months()]
    second = MONTHS.index(CORRECTED)
    whole = files[second]
    files[second] = whole.cut(whole.path, int(whole.frame.height * 0.55))
    return [*files, replace(whole, path=whole.path.replace(".csv", "_v2.csv"))]


def csv_bytes(frame: pl.DataFrame) -> bytes:
    """Return the file's text; `cells` says how many cells a row has too few or too many."""
    lines = [";".join(COLUMNS)]
    for *cells, surplus in frame.select(*COLUMNS, "cells").iter_rows():
        written = [_quoted(cell or "") for cell in cells]
        lines.append(";".join(written[:surplus] if surplus < 0 else written + ["0,00"] * surplus))
    return ("\r\n".join(lines) + "\r\n").encode("latin-1")


def _delivery(seen: Behaviour, number: int, month: str) -> Delivery:
    rng = stream("ombray", month)
    clean = _clean(seen, number, month, rng)
    faults = [] if month == CORRECTED else _faults(clean, number, month, rng)
    frame = scattered(clean, faults, rng) if faults else clean
    return Delivery(f"deliveries/ombray/ombray_{month}.csv.gz", "ombray", month, frame)


def _clean(seen: Behaviour, number: int, month: str, rng: np.random.Generator) -> pl.DataFrame:
    weeks, days = np.unique([week_of(day) for day in days_of(month)], return_counts=True)
    rush = 1.75 if month == STOCKPILING else 1.0
    expected = UNITS_A_DAY * rush * seen.demand[:, weeks] * days
    weighed = np.array([entry.aggregate.weighed for entry in seen.items])[:, None]
    thousandths = np.where(weighed, np.rint(950.0 * rng.gamma(expected)), 1000.0 * rng.poisson(expected))
    price = np.rint(100.0 * seen.regular[:, number, None] * seen.factor[:, weeks])
    turnover = np.rint((price * thousandths / 1000.0).sum(axis=1)).astype(np.int64)
    quantity = thousandths.sum(axis=1).astype(np.int64)
    places = [int(place) for place in np.flatnonzero(turnover)]
    items = [seen.items[place] for place in places]
    frame = pl.DataFrame(
        {
            "mois": [month] * len(items),
            "réf_article": [item.code for item in items],
            "libellé": [description(item) for item in items],
            "rayon": [item.aggregate.category["ombray"] for item in items],
            "quantité": [_quantity(int(quantity[n]), seen.items[n].aggregate) for n in places],
            "chiffre_affaires": [_money(int(turnover[n])) for n in places],
            "cells": pl.Series([0] * len(items), dtype=pl.Int8),
            "cents": pl.Series(turnover[places], dtype=pl.Int64),
        }
    )
    return sound(frame)


def _faults(clean: pl.DataFrame, number: int, month: str, rng: np.random.Generator) -> list[pl.DataFrame]:
    """Plant three of the fifteen faults, in turn, so that no file passes the refused share."""
    other = MONTHS[(number + 5) % len(MONTHS)]
    planted = (
        ("missing-key", pl.lit("").alias("réf_article")),
        ("missing-key", pl.lit("").alias("mois")),
        ("unreadable-date", pl.lit(f"{month[:4]}-13").alias("mois")),
        ("unreadable-date", pl.lit("mars").alias("mois")),
        ("unreadable-number", pl.lit("n.d.").alias("quantité")),
        ("unreadable-number", pl.lit("12,3,4").alias("chiffre_affaires")),
        ("non-finite", pl.lit("NaN").alias("chiffre_affaires")),
        ("quantity-not-positive", pl.lit("0").alias("quantité")),
        ("quantity-not-positive", pl.lit("-2").alias("quantité")),
        ("turnover-not-positive", pl.lit("0,00").alias("chiffre_affaires")),
        ("turnover-not-positive", pl.lit("-7,50").alias("chiffre_affaires")),
        ("unit-price-limits", pl.lit("98765432,10").alias("chiffre_affaires")),
        ("outside-announced-period", pl.lit(other).alias("mois")),
        ("broken-row", pl.lit(-2).alias("cells")),
        ("broken-row", pl.lit(1).alias("cells")),
    )
    turn = [planted[(3 * number + step) % len(planted)] for step in range(3)]
    return [spoiled(clean, rng, rule, 1, change) for rule, change in turn]


def _quantity(thousandths: int, aggregate: Aggregate) -> str:
    if not aggregate.weighed:
        return str(thousandths // 1000)
    return f"{thousandths // 1000},{thousandths % 1000:03d}"


def _money(cents: int) -> str:
    return f"{cents // 100},{cents % 100:02d}"


def _quoted(cell: str) -> str:
    if ";" not in cell and '"' not in cell:
        return cell
    doubled = cell.replace('"', '""')
    return f'"{doubled}"'
