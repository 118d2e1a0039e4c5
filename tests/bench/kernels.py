"""Index kernels with churn: against their matrix products, joins by hand, a regression library and themselves.

120 periods, 20 000 products that live about 24 periods, windows of 25; and the open grocery year.
Run: python -m tests.bench.kernels
"""

from __future__ import annotations

from functools import partial

import numpy as np
import polars as pl
import statsmodels.api as sm

import tillwright as tw
from tests.bench.measure import interleave, show
from tests.grocery.builder import data_folder
from tillwright.choices import MULTILATERAL_METHODS
from tillwright.kernels.methods import make_index, make_indexes
from tillwright.kernels.pairs import Array
from tillwright.kernels.recipes import Recipe
from tillwright.panels import to_arrays

PERIODS, PRODUCTS, LIFE, WINDOW, ROUNDS, GROUPS = 120, 20_000, 24, 25, 7, 50
REGRESSED = 500
"""Products in the regression by dummies: a dense column for each of all 20 000 would need gigabytes."""
COLUMNS = ["product", "period", "price", "quantity"]


def make_panel(periods: int = PERIODS, products: int = PRODUCTS) -> tuple[Array, Array]:
    """(T, N) prices and quantities of products that enter at random and live about `LIFE` periods."""
    random = np.random.default_rng(7)
    start = random.integers(-LIFE, periods, products)
    life = random.geometric(1 / LIFE, products)
    time = np.arange(periods)[:, None]
    alive = (time >= start) & (time < start + life) & (random.random((periods, products)) < 0.95)
    walk = np.cumsum(random.normal(0.002, 0.05, (periods, products)), axis=0)
    prices = np.exp(random.normal(1, 0.6, products) + walk)
    quantities = np.exp(random.normal(3, 1, products) - 2 * walk + random.normal(0, 0.3, (periods, products)))
    return np.where(alive, prices, np.nan), np.where(alive, quantities, np.nan)


def to_frame(prices: Array, quantities: Array) -> pl.DataFrame:
    """The same panel as rows."""
    period, product = np.nonzero(np.isfinite(prices))
    return pl.DataFrame(
        {
            "period": period,
            "product": product,
            "price": prices[period, product],
            "quantity": quantities[period, product],
        }
    )


def products_alone(prices: Array, quantities: Array) -> None:
    """The three matrix products that Törnqvist needs, on arrays that are ready."""
    for left, right in ((quantities, prices), (prices, quantities), (quantities, quantities)):
        left @ right.T


def by_joins(panel: pl.DataFrame, start: int) -> float:
    """Last level of one window, by a self-join on product and group-by of pairs of periods, as one would write it."""
    window = panel.filter(pl.col("period").is_between(start, start + WINDOW - 1))
    value = pl.col("price") * pl.col("quantity")
    pairs = window.join(window, on="product", suffix="_1").with_columns(
        (value).alias("x0"),
        (pl.col("price_1") * pl.col("quantity_1")).alias("x1"),
        (pl.col("price_1") / pl.col("price")).log().alias("r"),
    )
    bilateral = pairs.group_by("period", "period_1").agg(
        (
            0.5
            * (
                (pl.col("x0") * pl.col("r")).sum() / pl.col("x0").sum()
                + (pl.col("x1") * pl.col("r")).sum() / pl.col("x1").sum()
            )
        ).alias("log")
    )
    levels = bilateral.group_by("period_1").agg(pl.col("log").mean()).sort("period_1")["log"]
    return float(np.exp(levels[-1] - levels[0]))


def by_dummies(prices: Array, quantities: Array) -> Array:
    """Log levels of one window by weighted least squares on a column for every period and product."""
    period, product = np.nonzero(np.isfinite(prices))
    value = (prices * quantities)[period, product]
    weights = value / np.bincount(period, value)[period]
    columns = np.zeros((len(period), len(prices) + prices.shape[1]))
    columns[np.arange(len(period)), period] = 1.0
    columns[np.arange(len(period)), len(prices) + product] = 1.0
    fitted = sm.WLS(np.log(prices[period, product]), columns[:, 1:], weights=weights).fit()
    levels: Array = np.concatenate([[0.0], fitted.params[: len(prices) - 1]])
    return levels


def geks(prices: Array, quantities: Array) -> None:
    """GEKS-Törnqvist against its matrix products, with and without the bridge, and against joins."""
    panel = to_frame(prices, quantities)
    recipe = Recipe("geks-tornqvist", window=WINDOW)
    ready = (np.nan_to_num(prices), np.nan_to_num(quantities))
    windows = PERIODS - WINDOW + 1
    assert abs(make_index(prices, quantities, recipe)[WINDOW - 1] / by_joins(panel, 0) - 1) < 1e-10
    seconds = interleave(
        {
            "kernel": lambda: make_index(prices, quantities, recipe),
            "products": lambda: products_alone(*ready),
            "bridge": lambda: to_arrays(
                panel, by=[], product="product", period="period", price="price", value="quantity"
            ),
            "scatter": lambda: scatter_alone(panel),
            "joins, one window": lambda: by_joins(panel, 48),
        },
        ROUNDS,
    )
    kernel, bridge, joins = seconds["kernel"], seconds["bridge"], seconds["joins, one window"] * windows
    show(
        f"GEKS-Törnqvist, {PERIODS} periods, {PRODUCTS:,} products, {panel.height:,} observations, "
        f"{windows} windows of {WINDOW}",
        [
            ("kernel / its three matrix products", f"{kernel / seconds['products']:.2f}"),
            ("(kernel + bridge) / (products + bridge)", f"{(kernel + bridge) / (seconds['products'] + bridge):.2f}"),
            ("bridge / a join for the codes and a scatter", f"{bridge / seconds['scatter']:.2f}"),
            ("joins by hand / kernel, all windows", f"{joins / kernel:.0f}"),
            ("joins by hand / (kernel + bridge)", f"{joins / (kernel + bridge):.0f}"),
            *((name, f"{value:.3f} s") for name, value in seconds.items()),
        ],
    )


def scatter_alone(panel: pl.DataFrame) -> None:
    """The least that the bridge has to do: number the products, and put every row into its cell."""
    numbers = panel.select("product").unique().sort("product").with_row_index("at")
    at = panel.join(numbers, on="product", how="left", maintain_order="left")["at"].to_numpy()
    for name in ("price", "quantity"):
        cells = np.full((PERIODS, numbers.height), np.nan)
        cells[panel["period"].to_numpy(), at] = panel[name].to_numpy()


def regression(prices: Array, quantities: Array) -> None:
    """The time product dummy against weighted least squares on dummies, one window."""
    sold = np.flatnonzero(np.isfinite(prices[:WINDOW]).sum(axis=0) > 1)[:REGRESSED]
    window = (prices[:WINDOW, sold], quantities[:WINDOW, sold])
    recipe = Recipe("tpd")
    levels = np.log(make_index(*window, recipe))
    assert np.abs(levels - by_dummies(*window)).max() < 1e-9
    seconds = interleave(
        {"kernel": lambda: make_index(*window, recipe), "dummies": lambda: by_dummies(*window)}, ROUNDS
    )
    show(
        f"Time product dummy, one window of {WINDOW}, {len(sold)} products",
        [("statsmodels WLS on dummies / kernel", f"{seconds['dummies'] / seconds['kernel']:.0f}")],
    )


def jackknife(prices: Array, quantities: Array) -> None:
    """Delete-a-group replicates against one run, for every kind of method."""
    segments = np.linspace(0, PRODUCTS, GROUPS, endpoint=False).astype(np.intp)
    methods = ("fisher", "geks-tornqvist", "tpd", "geary-khamis", "similarity")
    rows = []
    for method in methods:
        once = partial(make_index, prices, quantities, Recipe(method, window=WINDOW))
        replicates = partial(
            make_indexes, prices, quantities, [Recipe(method, window=WINDOW)], segments=segments, leave_out=True
        )
        seconds = interleave({"once": once, "replicates": replicates}, 3)
        rows.append((method, f"{seconds['replicates'] / seconds['once']:.1f}"))
    show(f"{GROUPS} jackknife replicates / one run", rows)


def scaling() -> None:
    """How the cost grows when periods, products or aggregates double."""
    half = to_frame(*make_panel(PERIODS, PRODUCTS // 2)).select(COLUMNS)
    small = to_frame(*make_panel(PERIODS // 2, PRODUCTS // 2)).select(COLUMNS)
    methods = ["geks-tornqvist", "tpd", "geary-khamis"]
    piece = to_frame(*make_panel(PERIODS, PRODUCTS // 10)).select(COLUMNS)
    panels = {
        "base": half,
        "periods": small,
        "products": to_frame(*make_panel()).select(COLUMNS),
        "aggregates": pl.concat([piece.with_columns(pl.lit(number).alias("ea")) for number in range(40)]),
        "half the aggregates": pl.concat([piece.with_columns(pl.lit(number).alias("ea")) for number in range(20)]),
    }
    calls = {
        (method, name): partial(
            tw.multilateral, frame, method, window=WINDOW, by="ea" if "ea" in frame.columns else None
        )
        for method in methods
        for name, frame in panels.items()
    }
    seconds = interleave({f"{method} {name}": call for (method, name), call in calls.items()}, 3)
    rows = []
    for method in methods:
        taken = {name: seconds[f"{method} {name}"] for name in panels}
        rows += [
            (f"{method}, twice the periods (60 to 120)", f"{taken['base'] / taken['periods']:.2f}"),
            (f"{method}, twice the products (10 000 to 20 000)", f"{taken['products'] / taken['base']:.2f}"),
            (
                f"{method}, twice the aggregates of 2 000 products (20 to 40)",
                f"{taken['aggregates'] / taken['half the aggregates']:.2f}",
            ),
        ]
    show("Growth of cost, from frame to frame", rows)


def read_and_group() -> pl.DataFrame:
    """The open grocery year as a monthly panel by category, as one would read it."""
    lines = pl.scan_parquet(data_folder() / "transactions.parquet")
    categories = pl.scan_parquet(data_folder() / "products.parquet").select("product_id", "product_category")
    local = pl.col("transaction_timestamp").dt.replace_time_zone("UTC").dt.convert_time_zone("America/New_York")
    return (
        lines.filter(pl.col("quantity") > 0, pl.col("sales_value") > 0)
        .group_by(pl.col("product_id").alias("product"), local.dt.strftime("%Y-%m").alias("period"))
        .agg(pl.col("quantity").sum(), pl.col("sales_value").sum())
        .join(categories, left_on="product", right_on="product_id", how="inner")
        .filter(pl.col("product_category").is_not_null())
        .select("product_category", "product", "period", "quantity", price=pl.col("sales_value") / pl.col("quantity"))
        .collect()
    )


def grocery() -> None:
    """Every multilateral method for all categories of the grocery year, in one call."""
    panel = read_and_group()

    def compile_all() -> pl.DataFrame:
        return tw.multilateral(panel, list(MULTILATERAL_METHODS), by="product_category", unconnected="blank")

    made = compile_all()
    series = made.group_by("product_category", "method").agg(pl.col("index").is_null().all().alias("blank"))
    seconds = interleave({"read": read_and_group, "compile": compile_all}, ROUNDS)
    show(
        f"Grocery year, {panel.height:,} unit values, {panel['product_category'].n_unique()} categories, "
        f"{len(MULTILATERAL_METHODS)} methods, one call",
        [
            ("all methods / reading and grouping the file", f"{seconds['compile'] / seconds['read']:.2f}"),
            ("series made", f"{series.height - series['blank'].sum()} of {series.height}; the others fall apart"),
            *((name, f"{value:.3f} s") for name, value in seconds.items()),
        ],
    )


def main() -> None:
    """Print all ratios, after checking that what is compared agrees."""
    prices, quantities = make_panel()
    geks(prices, quantities)
    regression(prices, quantities)
    jackknife(prices, quantities)
    scaling()
    grocery()


if __name__ == "__main__":
    main()
