"""Sums over products for pairs of periods, each formed once.

Every bilateral index used here is built from sums of the form Σ_i a[s,i]·b[t,i] over the products
priced in both periods, where a and b are fields of the notation table.  A field is 0 where a
product is not sold, so the sum runs over matched products by itself.  For all pairs of periods such
a sum is a matrix product.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

Array: TypeAlias = NDArray[np.float64]
Pair: TypeAlias = tuple[str, str]
PairSum: TypeAlias = Callable[[str, str], Array]

# Products are taken in blocks whose fields stay in a core's cache: 32 768 numbers are 256 KB a field.
BLOCK = 1 << 15


def sum_all_pairs(prices: Array, quantities: Array | None, wanted: Iterable[Pair], span: int | None = None) -> PairSum:
    """Sums for every pair of periods: ``(a, b)`` gives the (T, T) array Σ_i a[s,i]·b[t,i].

    Parameters
    ----------
    prices, quantities : (T, N) arrays, currency per unit and units; NaN = not sold. `quantities` may
        be None where no wanted field needs them.
    wanted : pairs of field names; ``(b, a)`` is the transpose of ``(a, b)`` and is not computed again.
    span : pairs further than this many periods apart may be left at 0, which saves their cost.
    """
    pairs = list(dict.fromkeys(min(pair, pair[::-1]) for pair in wanted))
    totals = _accumulate(prices, quantities, pairs, lambda left, right: _banded_product(left, right, span))
    return lambda base, current: totals[base, current] if (base, current) in totals else totals[current, base].T


def sum_listed_pairs(
    prices: Array,
    quantities: Array | None,
    wanted: Iterable[Pair],
    base: NDArray[np.intp],
    current: NDArray[np.intp],
) -> PairSum:
    """Sums for K listed pairs: ``(a, b)`` gives Σ_i a[base[k],i]·b[current[k],i] as a (K,) array."""
    pairs = list(dict.fromkeys(wanted))
    totals = _accumulate(
        prices, quantities, pairs, lambda left, right: np.einsum("ki,ki->k", left[base], right[current])
    )
    return lambda first, second: totals[first, second]


def _accumulate(
    prices: Array, quantities: Array | None, pairs: list[Pair], multiply: Callable[[Array, Array], Array]
) -> dict[Pair, Array]:
    periods, products = prices.shape
    width = max(BLOCK // max(periods, 1), 1)
    totals: dict[Pair, Array] = {}
    for start in range(0, max(products, 1), width):
        cut = slice(start, start + width)
        field = make_fields(prices[:, cut], None if quantities is None else quantities[:, cut])
        for left, right in pairs:
            part = multiply(field(left), field(right))
            if start == 0:
                totals[left, right] = part
            else:
                totals[left, right] += part
    return totals


def make_fields(prices: Array, quantities: Array | None) -> Callable[[str], Array]:
    """Fields of the notation table by name, each computed at first use.

    Returns
    -------
    A function from a field's name to its (T, N) array: ``m`` ``p`` ``q`` ``x`` ``l`` ``e`` and products
    of them named by their factors.
    Log prices are centred per product, which cancels in every relative and keeps the digits of
    products whose price level is extreme.
    """
    sold = np.isfinite(prices)
    kept: dict[str, Array] = {}
    makers: dict[str, Callable[[], Array]] = {
        "m": lambda: sold.astype(np.float64),
        "p": lambda: np.where(sold, prices, 0.0),
        "l": lambda: _centred_logs(prices, sold),
        "e": lambda: np.where(sold, np.exp(field("l")), 0.0),
        "1/e": lambda: np.where(sold, np.exp(-field("l")), 0.0),
    }
    if quantities is not None:
        makers["q"] = lambda: np.where(sold, quantities, 0.0)
        makers["x"] = lambda: field("p") * field("q")
        makers["xl"] = lambda: field("x") * field("l")
        makers["xe"] = lambda: field("x") * field("e")
        makers["√q"] = lambda: np.sqrt(field("q"))
        makers["p√q"] = lambda: field("p") * field("√q")

    def field(name: str) -> Array:
        if name not in kept:
            kept[name] = makers[name]()
        return kept[name]

    return field


def _centred_logs(prices: Array, sold: NDArray[np.bool_]) -> Array:
    logs = np.log(np.where(sold, prices, 1.0))
    centre = logs.sum(axis=0) / np.maximum(sold.sum(axis=0), 1)
    logs -= centre
    logs *= sold
    return logs


def _banded_product(left: Array, right: Array, span: int | None) -> Array:
    periods = len(left)
    if span is None or periods <= 4 * (span + 1):
        full: Array = left @ right.T
        return full
    block = span + 1
    result = np.zeros((periods, periods))
    for start in range(0, periods, block):
        rows = slice(start, min(start + block, periods))
        columns = slice(max(start - span, 0), min(start + block + span, periods))
        result[rows, columns] = left[rows] @ right[columns].T
    return result
