"""Sums over products for pairs of periods, each formed once and shared between formulas.

Every bilateral index used here is built from sums of the form Σ_i a[s,i]·b[t,i] over the products
priced in both periods, where a and b are fields of the notation table.  A field is 0 where a
product is not sold, so the sum runs over matched products by itself.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

Array: TypeAlias = NDArray[np.float64]
PairSum: TypeAlias = Callable[[str, str], Array]


def make_fields(prices: Array, quantities: Array | None) -> Callable[[str], Array]:
    """Fields of the notation table by name, each computed at first use.

    Parameters
    ----------
    prices, quantities : (T, N) arrays, currency per unit and units; NaN = not sold.
        `quantities` may be None for formulas that use prices alone.

    Returns
    -------
    A function from a field's name to its (T, N) array: ``m`` ``p`` ``q`` ``x`` ``l`` ``xl``.
    Log prices are centred per product, which cancels in every relative and keeps the digits of
    products whose price level is extreme.
    """
    sold = np.isfinite(prices)
    kept: dict[str, Array] = {}
    makers: dict[str, Callable[[], Array]] = {
        "m": lambda: sold.astype(np.float64),
        "p": lambda: np.where(sold, prices, 0.0),
        "l": lambda: _centred_logs(prices, sold),
    }
    if quantities is not None:
        makers["q"] = lambda: np.where(sold, quantities, 0.0)
        makers["x"] = lambda: field("p") * field("q")
        makers["xl"] = lambda: field("x") * field("l")

    def field(name: str) -> Array:
        if name not in kept:
            kept[name] = makers[name]()
        return kept[name]

    return field


def _centred_logs(prices: Array, sold: NDArray[np.bool_]) -> Array:
    logs = np.zeros_like(prices)
    np.log(prices, out=logs, where=sold)
    centre = logs.sum(axis=0) / np.maximum(sold.sum(axis=0), 1)
    np.subtract(logs, centre, out=logs, where=sold)
    return logs


def sums_of_all_pairs(field: Callable[[str], Array], span: int | None = None) -> PairSum:
    """Sums for every pair of periods: ``(a, b)`` gives the (T, T) array Σ_i a[s,i]·b[t,i].

    With `span`, pairs further than `span` periods apart are left at 0 and cost nothing: the
    product is taken over blocks along the diagonal.  ``(b, a)`` is the transpose of ``(a, b)``
    and is not computed again.
    """
    kept: dict[tuple[str, str], Array] = {}

    def pair_sum(base: str, current: str) -> Array:
        if (base, current) not in kept:
            if (current, base) in kept:
                kept[base, current] = kept[current, base].T
            else:
                kept[base, current] = _banded_product(field(base), field(current), span)
        return kept[base, current]

    return pair_sum


def sums_of_rows(field: Callable[[str], Array], base: NDArray[np.intp], current: NDArray[np.intp]) -> PairSum:
    """Sums for listed pairs: ``(a, b)`` gives Σ_i a[base[k],i]·b[current[k],i] as a (K,) array."""

    def pair_sum(first: str, second: str) -> Array:
        total: Array = np.einsum("ki,ki->k", field(first)[base], field(second)[current])
        return total

    return pair_sum


def _banded_product(left: Array, right: Array, span: int | None) -> Array:
    periods = len(left)
    if span is None or periods <= 2 * (span + 1):
        full: Array = left @ right.T
        return full
    block = span + 1
    result = np.zeros((periods, periods))
    for start in range(0, periods, block):
        rows = slice(start, min(start + block, periods))
        columns = slice(max(start - span, 0), min(start + block + span, periods))
        result[rows, columns] = left[rows] @ right[columns].T
    return result
