"""Rolling GEKS-Törnqvist with churn, against its matrix products and against joins written by hand.

120 periods, 20 000 products that live about 24 periods, windows of 25.
Run: python -m tests.bench.geks
"""

from __future__ import annotations

import numpy as np
import polars as pl

from tests.bench.measure import interleave, show
from tillwright.kernels.methods import Recipe, make_index
from tillwright.kernels.pairs import Array
from tillwright.panels import to_arrays

PERIODS, PRODUCTS, LIFE, WINDOW, ROUNDS = 120, 20_000, 24, 25, 7


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


def main() -> None:
    """Print the ratios, after checking that both ways agree on the first window."""
    prices, quantities = make_panel()
    period, product = np.nonzero(np.isfinite(prices))
    panel = pl.DataFrame(
        {
            "period": period,
            "product": product,
            "price": prices[period, product],
            "quantity": quantities[period, product],
        }
    )
    recipe = Recipe("geks-tornqvist", window=WINDOW)
    ready = (np.nan_to_num(prices), np.nan_to_num(quantities))
    columns = {"by": [], "product": "product", "period": "period", "price": "price", "value": "quantity"}
    windows = PERIODS - WINDOW + 1
    assert abs(make_index(prices, quantities, recipe)[WINDOW - 1] / by_joins(panel, 0) - 1) < 1e-10
    seconds = interleave(
        {
            "kernel": lambda: make_index(prices, quantities, recipe),
            "products": lambda: products_alone(*ready),
            "bridge": lambda: to_arrays(panel, **columns),  # type: ignore[arg-type]
            "joins, one window": lambda: by_joins(panel, 48),
        },
        ROUNDS,
    )
    kernel, bridge = seconds["kernel"], seconds["bridge"]
    show(
        f"GEKS-Törnqvist, {PERIODS} periods, {PRODUCTS:,} products, {panel.height:,} observations, "
        f"{windows} windows of {WINDOW}",
        [
            ("kernel / its three matrix products", f"{kernel / seconds['products']:.2f}"),
            ("(kernel + bridge) / (products + bridge)", f"{(kernel + bridge) / (seconds['products'] + bridge):.2f}"),
            ("joins by hand / kernel, all windows", f"{seconds['joins, one window'] * windows / kernel:.0f}"),
            ("joins by hand / (kernel + bridge)", f"{seconds['joins, one window'] * windows / (kernel + bridge):.0f}"),
            *((name, f"{value:.3f} s") for name, value in seconds.items()),
        ],
    )


if __name__ == "__main__":
    main()
