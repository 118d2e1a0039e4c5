"""The screen on price relatives against a loop written from its docstring, and its verdicts in the table."""

from itertools import pairwise
from pathlib import Path

import numpy as np
import polars as pl
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from tests.stages.small import line, put, sections, write_plan
from tillwright.kernels.screening import find_extreme
from tillwright.stages.compiling import Request, carry_out

LOW, HIGH = 0.25, 4.0
PROPERTY = settings(deadline=None, database=None, derandomize=True, max_examples=200)


def is_outside(relative: float, low: float, high: float) -> bool:
    return relative < low or relative > high


def loop(products: list[list[float]], low: float, high: float) -> list[bool]:
    """Price by price: extreme if outside against the last price that was not, and against the price before."""
    verdicts = []
    for prices in products:
        good = prices[0]
        verdicts.append(False)
        for before, now in pairwise(prices):
            extreme = is_outside(now / good, low, high) and is_outside(now / before, low, high)
            verdicts.append(extreme)
            if not extreme:
                good = now
    return verdicts


def screened(products: list[list[float]], low: float = LOW, high: float = HIGH) -> NDArray[np.bool_]:
    prices = np.array([price for product in products for price in product], dtype=np.float64)
    starts = np.array([position == 0 for product in products for position in range(len(product))], dtype=bool)
    return find_extreme(prices, starts, low, high)


# Powers of two, so that relatives are exact and fall on the bounds often.
prices = st.sampled_from([0.125, 0.25, 0.5, 1.0, 1.0, 2.0, 4.0, 8.0, 16.0, 64.0])


@given(products=st.lists(st.lists(prices, min_size=1, max_size=9), min_size=1, max_size=8))
@PROPERTY
def test_screen_equals_the_loop(products: list[list[float]]) -> None:
    assert screened(products).tolist() == loop(products, LOW, HIGH)


@pytest.mark.parametrize(("low", "high"), [(LOW, HIGH), (1 / 3, 3.0), (0.9, 1.1)])
def test_screen_equals_the_loop_on_many_products(low: float, high: float) -> None:
    rng = np.random.default_rng(20240305)
    products = [np.exp(rng.normal(0, 0.8, rng.integers(1, 40))).tolist() for _ in range(300)]
    assert screened(products, low, high).tolist() == loop(products, low, high)


def test_lone_wrong_price_is_set_aside_and_the_next_right_one_is_not() -> None:
    assert screened([[1.0, 1.1, 110.0, 1.2, 1.1]]).tolist() == [False, False, True, False, False]


def test_two_wrong_prices_in_a_row_at_different_levels_are_both_set_aside() -> None:
    assert screened([[1.0, 100.0, 0.01, 1.0]]).tolist() == [False, True, True, False]


def test_lasting_change_costs_one_period() -> None:
    assert screened([[1.0, 1.0, 10.0, 10.0, 10.5]]).tolist() == [False, False, True, False, False]


def test_relative_on_a_bound_is_kept() -> None:
    assert screened([[1.0, 4.0, 1.0]]).tolist() == [False] * 3
    assert screened([[1.0, np.nextafter(4.0, 5.0), 1.0]]).tolist() == [False, True, False]
    assert screened([[1.0, np.nextafter(0.25, 0.0), 1.0]]).tolist() == [False, True, False]


def test_products_do_not_touch_each_other() -> None:
    assert not screened([[1.0], [100.0], [1.0, 1.0], [100.0]]).any()


def test_no_prices_no_verdicts() -> None:
    assert find_extreme(np.array([]), np.array([], dtype=bool), LOW, HIGH).tolist() == []


def screened_table(folder: Path, extreme: list[float] | str) -> pl.DataFrame:
    turnovers = ["3.00", "300.00", "3.30", "0"]
    rows = [line(day=f"2024-{month:02d}-05", turnover=t) for month, t in enumerate(turnovers, start=1)]
    rows += [line(day="2024-05-05"), line(day="2024-06-05"), line(day="2024-06-06", quantity="-2", turnover="-3.00")]
    put(folder / "in/a.csv", rows)
    compiled = carry_out(Request(write_plan(folder, sections(screening={"extreme": extreme}))))
    return compiled.context.workspace.read("screened")


def test_every_row_of_the_panel_has_a_verdict_and_a_reason(tmp_path: Path) -> None:
    table = screened_table(tmp_path, [LOW, HIGH])
    found = {str(row["period"])[:7]: (row["verdict"], row["reason"]) for row in table.to_dicts()}
    assert found == {
        "2024-01": ("kept", ""),
        "2024-02": ("excluded", "extreme-relative"),
        "2024-03": ("kept", ""),
        "2024-05": ("kept", ""),
        "2024-06": ("excluded", "no-net-sales"),
    }


def test_screening_that_is_off_sets_no_price_aside(tmp_path: Path) -> None:
    table = screened_table(tmp_path, "off")
    assert table.filter(pl.col("verdict") == "excluded")["reason"].to_list() == ["no-net-sales"]
