"""Seeded random panels for the twin tests, and Hypothesis strategies for the axioms."""

from dataclasses import dataclass

import hypothesis.extra.numpy as hnp
import numpy as np
from hypothesis import settings
from hypothesis import strategies as st
from numpy.typing import NDArray

Array = NDArray[np.float64]

PROPERTY = settings(deadline=None, database=None, derandomize=True, max_examples=50)
KINDS = ("complete", "churn", "gaps", "one-product", "staircase", "empty-period", "split")
PANELS = 21


@dataclass(frozen=True, slots=True)
class Panel:
    """Prices and quantities (T, N), NaN = not sold."""

    name: str
    prices: Array
    quantities: Array


def _sold(kind: str, rng: np.random.Generator, periods: int, products: int) -> NDArray[np.bool_]:
    """Which product is sold in which period."""
    sold = np.ones((periods, products), dtype=bool)
    if kind == "churn":
        starts = rng.integers(-2, periods - 1, products)
        lives = rng.integers(2, periods, products)
        clock = np.arange(periods)[:, None]
        sold = (clock >= starts) & (clock < starts + lives)
    elif kind == "staircase":
        sold = np.array([[i in (t, t + 1) for i in range(products)] for t in range(periods)])
    elif kind == "split":
        sold[: periods // 2, products // 2 :] = False
        sold[periods // 2 :, : products // 2] = False
    elif kind != "complete":
        sold = rng.random((periods, products)) < 0.6
        sold[np.arange(periods), rng.integers(0, products, periods)] = True
    if kind == "one-product":
        alone = rng.choice(periods, size=2, replace=False)
        sold[alone] = False
        sold[alone, rng.integers(0, products, 2)] = True
    if kind == "empty-period":
        sold[rng.choice([0, periods // 2, periods - 1])] = False
    return sold


def random_panel(seed: int) -> Panel:
    """One panel; its kind follows from the seed."""
    rng = np.random.default_rng(seed)
    kind = KINDS[seed % len(KINDS)]
    periods = int(rng.integers(5, 10))
    products = periods + 1 if kind == "staircase" else int(rng.integers(3, 12))
    sold = _sold(kind, rng, periods, products)
    size = (periods, products)
    noise = rng.normal(0, 0.3, size) - np.log(2) * (rng.random(size) < 0.15)
    prices = np.exp(rng.normal(1, 1, products) + 0.01 * np.arange(periods)[:, None] + noise)
    quantities = np.exp(rng.normal(3, 1, products) - 2 * noise + rng.normal(0, 0.2, size))
    prices[~sold] = np.nan
    quantities[~sold] = np.nan
    return Panel(f"{seed:02d}-{kind}", prices, quantities)


def random_panels() -> list[Panel]:
    """All panels, three of each kind."""
    return [random_panel(seed) for seed in range(PANELS)]


def floats(low: float, high: float) -> st.SearchStrategy[float]:
    """Finite floats between two bounds."""
    return st.floats(low, high, allow_nan=False, allow_subnormal=False)


def powers_of_ten(low: int, high: int) -> st.SearchStrategy[float]:
    """10^x with x uniform between two exponents."""
    return floats(low, high).map(lambda x: float(10.0**x))


ORDINARY_PRICES = floats(0.05, 50.0)


@st.composite
def panels(
    draw: st.DrawFn,
    *,
    gaps: bool = False,
    shape: tuple[int, int] | None = None,
    prices: st.SearchStrategy[float] = ORDINARY_PRICES,
) -> tuple[Array, Array]:
    """Prices and quantities of two to five periods and one to five products."""
    size = shape or (draw(st.integers(2, 5)), draw(st.integers(1, 5)))
    price = draw(hnp.arrays(np.float64, size, elements=prices))
    quantity = draw(hnp.arrays(np.float64, size, elements=floats(0.1, 1000.0)))
    if gaps:
        sold = draw(hnp.arrays(np.bool_, size))
        price[~sold] = np.nan
        quantity[~sold] = np.nan
    return price, quantity
