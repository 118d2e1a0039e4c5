"""Check the written sample on its own: `python -m tests.sample.check SAMPLEDIR [TRUTHDIR]`.

Reads the files, refuses rows and computes one GEKS-Tornqvist per elementary aggregate with code that shares nothing
with the generator, then compares with `planted.json` and `truth.csv`.
"""

import gzip
import json
import sys
from pathlib import Path
from typing import Any

import numpy as np
import polars as pl
from numpy.typing import NDArray

ZONE = "America/Halifax"
WEIGHTS = np.array([1, 3] * 6)


def read_rows(path: Path, feed: str) -> pl.DataFrame:
    """Return a file's rows with a column `rule`, null where the row is accepted."""
    return {"brindlow": _brindlow, "kestrin": _kestrin, "ombray": _ombray}[feed](path)


def compare(sample: Path, planted: dict[str, Any]) -> tuple[pl.DataFrame, list[str]]:
    """Return the accepted rows of all active files, and every difference from what was planted."""
    kept, differences = [], []
    for entry in planted["deliveries"]:
        rows = read_rows(sample / entry["path"], entry["feed"])
        period = pl.col("day").dt.strftime("%Y-%m")
        rows = rows.with_columns(
            pl.when(pl.col("rule").is_null() & (period != entry["period"]))
            .then(pl.lit("outside-announced-period"))
            .otherwise(pl.col("rule"))
            .alias("rule")
        )
        accepted = rows.filter(pl.col("rule").is_null())
        found = {
            "rows": rows.height,
            "accepted_rows": accepted.height,
            "accepted_turnover": f"{accepted['turnover'].sum():.2f}",
            "refused": dict(sorted(rows["rule"].drop_nulls().value_counts().iter_rows())),
        }
        differences += [
            f"{entry['path']}: {key} {value}, planted {entry[key]}"
            for key, value in found.items()
            if value != entry[key]
        ]
        if entry["status"] == "active":
            kept.append(
                accepted.select(
                    pl.lit(entry["feed"]).alias("feed"), "item", period.alias("period"), "quantity", "turnover"
                )
            )
    return pl.concat(kept), differences


def assigned(sales: pl.DataFrame, sample: Path) -> pl.DataFrame:
    """Return the sales with their elementary aggregate; those without one are dropped."""
    rules = pl.read_csv(sample / "classification/assignment.csv", infer_schema=False)
    by_item = rules.filter(pl.col("item") != "").select("feed", "item", pl.col("ea").alias("by_item"))
    by_category = rules.filter(pl.col("category") != "")
    named = by_category.filter(pl.col("feed") != "").select("feed", "category", pl.col("ea").alias("by_category"))
    shared = by_category.filter(pl.col("feed") == "").select("category", pl.col("ea").alias("by_shared"))
    listed = (
        _categories(sample)
        .join(by_item, on=["feed", "item"], how="left")
        .join(named, on=["feed", "category"], how="left")
        .join(shared, on="category", how="left")
        .select("feed", "item", pl.coalesce("by_item", "by_category", "by_shared").alias("ea"))
        .drop_nulls()
    )
    return sales.join(listed, on=["feed", "item"])


def geks_tornqvist(prices: NDArray[np.float64], shares: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the index of (T, N) prices over one window, first period 1."""
    periods = prices.shape[0]
    log = np.zeros((periods, periods))
    for start in range(periods):
        for end in range(periods):
            both = np.isfinite(prices[start]) & np.isfinite(prices[end])
            first = shares[start, both] / shares[start, both].sum()
            last = shares[end, both] / shares[end, both].sum()
            log[start, end] = (0.5 * (first + last)) @ np.log(prices[end, both] / prices[start, both])
    means = log.mean(axis=0)
    level: NDArray[np.float64] = np.exp(means - means[0])
    return level


def spread(sales: pl.DataFrame, truth: pl.DataFrame) -> pl.DataFrame:
    """Return, per elementary aggregate, how far the index ends and strays from the truth, in percent."""
    panel = sales.group_by("ea", "feed", "item", "period").agg(pl.col("quantity").sum(), pl.col("turnover").sum())
    rows = []
    for (ea,), true in truth.group_by("ea", maintain_order=True):
        cells = panel.filter(pl.col("ea") == ea).with_columns(pl.concat_str("feed", "item").alias("product"))
        periods = true["period"].to_list()
        amounts = _grid(cells, "turnover", periods)
        units = _grid(cells, "quantity", periods)
        index = geks_tornqvist(amounts / units, np.nan_to_num(amounts))
        error = 100.0 * (index / (true["index"].to_numpy() / true["index"][0]) - 1.0)
        sold = np.isfinite(units).sum(axis=1)
        rows.append(
            (
                ea,
                float(true["index"][-1]),
                *map(float, (error[-1], error.min(), error.max(), np.sqrt(np.mean(error**2)))),
                int(sold.min()),
            )
        )
    names = ["ea", "truth_end", "end", "lowest", "highest", "typical", "fewest_products"]
    return pl.DataFrame(rows, schema=names, orient="row")


def _grid(cells: pl.DataFrame, value: str, periods: list[str]) -> NDArray[np.float64]:
    wide = cells.pivot("product", index="period", values=value)
    ordered = pl.DataFrame({"period": periods}).join(wide, on="period", how="left", maintain_order="left")
    grid: NDArray[np.float64] = ordered.drop("period").cast(pl.Float64).fill_null(float("nan")).to_numpy()
    return grid


def _categories(sample: Path) -> pl.DataFrame:
    one = pl.read_csv(sample / "items/brindlow_items.csv", infer_schema=False).select(
        pl.lit("brindlow").alias("feed"), pl.col("ART_NO").alias("item"), pl.col("CAT").alias("category")
    )
    two = pl.read_parquet(sample / "items/kestrin_items.parquet").select(
        pl.lit("kestrin").alias("feed"), pl.col("gtin").alias("item"), pl.col("department").alias("category")
    )
    three = pl.read_csv(sample / "items/ombray_items.csv", infer_schema=False).select(
        pl.lit("ombray").alias("feed"), pl.col("réf_article").alias("item"), pl.col("rayon").alias("category")
    )
    return pl.concat([one, two, three])


def _refuse(rows: pl.DataFrame, before: list[tuple[pl.Expr, str]], limits: tuple[float, float]) -> pl.DataFrame:
    price = pl.col("turnover") / pl.col("quantity")
    rules = [
        *before,
        (pl.col("quantity") <= 0, "quantity-not-positive"),
        (pl.col("turnover") <= 0, "turnover-not-positive"),
        (~price.is_between(*limits), "unit-price-limits"),
    ]
    return rows.with_columns(pl.coalesce(pl.when(broken).then(pl.lit(rule)) for broken, rule in rules).alias("rule"))


def _brindlow(path: Path) -> pl.DataFrame:
    rows = pl.read_parquet(path).select(
        pl.col("STORE_NO").cast(pl.String).alias("outlet"),
        pl.col("ART_NO").cast(pl.String).alias("item"),
        pl.col("UNITS").cast(pl.Float64).alias("quantity"),
        pl.col("SALES_VAL").alias("turnover"),
        (pl.col("WEEK_MON") + pl.duration(days=3)).alias("day"),
    )
    missing = pl.any_horizontal(pl.col("outlet", "item", "day").is_null())
    return _refuse(rows, [(missing, "missing-key"), (~pl.col("turnover").is_finite(), "non-finite")], (0.05, 500.0))


def _kestrin(path: Path) -> pl.DataFrame:
    local = pl.col("sold_utc").dt.replace_time_zone("UTC").dt.convert_time_zone(ZONE).dt.date()
    rows = pl.read_parquet(path).select(
        pl.col("shop").alias("outlet"),
        pl.col("gtin").alias("item"),
        pl.col("till_line").alias("line_id"),
        pl.col("qty").cast(pl.Float64).alias("quantity"),
        (pl.col("amount") - pl.col("deposit").fill_null(0)).cast(pl.Float64).alias("turnover"),
        local.alias("day"),
    )
    missing = pl.any_horizontal(pl.col("outlet", "item", "day").is_null())
    malformed = ~pl.Series([_is_gtin13(code or "") for code in rows["item"]])
    rows = rows.with_columns(malformed.alias("malformed"))
    returned = (pl.col("quantity") < 0) & (pl.col("turnover") < 0)
    signs = rows.with_columns(pl.when(returned).then(-1.0).otherwise(1.0).alias("sign"))
    turned = signs.with_columns(pl.col("quantity", "turnover") * pl.col("sign"))
    repeated = ~pl.col("line_id").is_first_distinct()
    before = [(missing, "missing-key"), (repeated, "duplicate-line"), (pl.col("malformed"), "malformed-item-code")]
    judged = _refuse(turned, before, (0.05, 300.0))
    return judged.with_columns(pl.col("quantity", "turnover") * pl.col("sign")).drop("sign", "malformed")


def _ombray(path: Path) -> pl.DataFrame:
    text = gzip.decompress(path.read_bytes()).decode("latin-1")
    cells = [_cells(line) for line in text.splitlines()[1:]]
    names = ["month", "item", "quantity", "turnover"]
    rows = pl.DataFrame(
        [(row[0], row[1], row[4], row[5]) if len(row) == 6 else ("", "", "", "") for row in cells],
        schema=dict.fromkeys(names, pl.String),
        orient="row",
    ).with_columns(
        pl.Series("broken", [len(row) != 6 for row in cells]),
        (pl.col("month") + "-01").str.to_date("%Y-%m-%d", strict=False).alias("day"),
        pl.col("quantity", "turnover").str.replace(",", ".", literal=True).cast(pl.Float64, strict=False),
        pl.any_horizontal(pl.col("month", "item") == "").alias("missing"),
    )
    numbers = pl.col("quantity", "turnover")
    before = [
        (pl.col("broken"), "broken-row"),
        (pl.col("missing"), "missing-key"),
        (pl.col("day").is_null(), "unreadable-date"),
        (pl.any_horizontal(numbers.is_null()), "unreadable-number"),
        (~pl.all_horizontal(numbers.is_finite()), "non-finite"),
    ]
    return _refuse(rows, before, (0.01, 5000.0))


def _cells(line: str) -> list[str]:
    """Split at semicolons outside double quotes."""
    parts = line.split('"')
    marked = "".join(part.replace(";", "\0") if place % 2 == 0 else part for place, part in enumerate(parts))
    return marked.split("\0")


def _is_gtin13(code: str) -> bool:
    if len(code) != 13 or not code.isdigit():
        return False
    digits = np.array([int(digit) for digit in code])
    return bool((int(WEIGHTS @ digits[:12]) + int(digits[12])) % 10 == 0)


def main(sample: Path, truth: Path) -> int:
    """Print the differences and the spread; return 1 if a file is not as planted."""
    planted = json.loads((truth / "planted.json").read_text(encoding="utf-8"))
    sales, differences = compare(sample, planted)
    print("\n".join(differences) or "every file is as planted")
    table = spread(assigned(sales, sample), pl.read_csv(truth / "truth.csv"))
    with pl.Config(tbl_rows=-1, float_precision=2, tbl_hide_dataframe_shape=True):
        print(table)
    return 1 if differences else 0


if __name__ == "__main__":
    folders = [Path(argument) for argument in sys.argv[1:]]
    sys.exit(main(folders[0], folders[1] if len(folders) == 2 else Path(__file__).resolve().parent))
