"""Sums over products for pairs of periods, each formed once.

Every bilateral index used here, but for Sato–Vartia, is built from sums of the form
Σ_i a[s,i]·b[t,i] over the products priced in both periods, where a and b are fields of the notation
table.  A field is 0 where a product is not sold, so the sum runs over matched products by itself.
For all pairs of periods such a sum is a matrix product.

Columns may lie in segments, each a panel of its own: the sums of all of them come in one array with
a leading axis, and so do the sums over all segments but one.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

Array: TypeAlias = NDArray[np.float64]
Positions: TypeAlias = NDArray[np.intp]
Pair: TypeAlias = tuple[str, str]
PairSum: TypeAlias = Callable[[str, str], Array]

# Products are taken in blocks whose fields stay in a core's cache: 32 768 numbers are 256 KB a field.
BLOCK = 1 << 15


def sum_all_pairs(
    prices: Array,
    quantities: Array | None,
    wanted: Iterable[Pair],
    span: int | None = None,
    *,
    segments: Positions | None = None,
    leave_out: bool = False,
) -> PairSum:
    """Sums for every pair of periods: ``(a, b)`` gives the (T, T) array Σ_i a[s,i]·b[t,i].

    Parameters
    ----------
    prices, quantities : (T, N) arrays, currency per unit and units; NaN = not sold. `quantities` may
        be None where no wanted field needs them.
    wanted : pairs of field names; ``(b, a)`` is the transpose of ``(a, b)`` and is not computed again.
    span : pairs further than this many periods apart may be left at 0, which saves their cost.
    segments : (B,) first columns of the segments; the sums are (B, T, T) then.
    leave_out : the sums over the columns of all segments but one, in place of those of each.
    """
    pairs = list(dict.fromkeys(min(pair, pair[::-1]) for pair in wanted))
    shape = (len(prices), len(prices))
    totals = _accumulate(
        make_fields, (prices, quantities), pairs, lambda a, b: _banded_product(a, b, span), shape, segments
    )
    if leave_out:
        totals = {pair: sum_others(parts) for pair, parts in totals.items()}

    def pair_sum(base: str, current: str) -> Array:
        if (base, current) in totals:
            return totals[base, current]
        return totals[current, base].swapaxes(-1, -2)

    return pair_sum


def sum_listed_pairs(
    prices: Array,
    quantities: Array | None,
    wanted: Iterable[Pair],
    base: Positions,
    current: Positions,
    *,
    weights: Array | None = None,
    segments: Positions | None = None,
    leave_out: bool = False,
) -> PairSum:
    """Sums for K listed pairs: ``(a, b)`` gives Σ_i a[base[k],i]·b[current[k],i] as a (K,) array.

    `weights` (N,) are those of the products in a period of their own; the other arguments are those of
    `sum_all_pairs`.
    """
    pairs = list(dict.fromkeys(wanted))

    def multiply(left: Array, right: Array) -> Array:
        products: Array = np.einsum("ki,ki->k", left[base], right[current])
        return products

    totals = _accumulate(make_fields, (prices, quantities, weights), pairs, multiply, (len(base),), segments)
    if leave_out:
        totals = {pair: sum_others(parts) for pair, parts in totals.items()}
    return lambda first, second: totals[first, second]


def sum_segments(values: Array, segments: Positions) -> Array:
    """(B, T) sums of a (T, N) array over the columns of each segment."""
    if values.shape[1] == 0:
        return np.zeros((len(segments), len(values)))
    sums: Array = np.add.reduceat(values, segments, axis=1).T
    return sums


def sum_others(parts: Array) -> Array:
    """(B, …) sums over all parts but one, by adding what lies before and after it.

    Subtracting a part from the total would leave rounding where nothing is left.
    """
    before, after = np.zeros_like(parts), np.zeros_like(parts)
    np.cumsum(parts[:-1], axis=0, out=before[1:])
    np.cumsum(parts[:0:-1], axis=0, out=after[:-1][::-1])
    before += after
    return before


def _accumulate(
    fields: Callable[..., Callable[[str], Array]],
    data: tuple[Array | None, ...],
    pairs: list[Pair],
    multiply: Callable[[Array, Array], Array],
    shape: tuple[int, ...],
    segments: Positions | None,
) -> dict[Pair, Array]:
    """Sums of each pair of fields, block by block of products; (B, *shape), or `shape` without segments."""
    assert data[0] is not None
    periods, products = data[0].shape
    starts = np.zeros(1, dtype=np.intp) if segments is None else segments
    ends = np.append(starts[1:], products)
    totals = {pair: np.zeros((len(starts), *shape)) for pair in pairs}
    width = max(BLOCK // max(periods, 1), 1)
    for low in range(0, products, width):
        high = min(low + width, products)
        field = fields(*(None if part is None else part[..., low:high] for part in data))
        first, last = np.searchsorted(ends, low, side="right"), np.searchsorted(starts, high)
        for position in range(int(first), int(last)):
            cut = slice(max(int(starts[position]), low) - low, min(int(ends[position]), high) - low)
            for left, right in pairs:
                totals[left, right][position] += multiply(field(left)[:, cut], field(right)[:, cut])
    return totals if segments is not None else {pair: parts[0] for pair, parts in totals.items()}


def make_fields(prices: Array, quantities: Array | None, weights: Array | None = None) -> Callable[[str], Array]:
    """Fields of the notation table by name, each computed at first use.

    With `weights` (N,) a product without a positive weight counts as not sold.

    Returns
    -------
    A function from a field's name to its (T, N) array: ``m`` ``p`` ``q`` ``x`` ``l`` ``e`` ``w`` and
    products of them named by their factors.
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
        makers["xq"] = lambda: field("x") * field("q")
        makers["pp"] = lambda: field("p") ** 2
        makers["qq"] = lambda: field("q") ** 2
        makers["√q"] = lambda: np.sqrt(field("q"))
        makers["p√q"] = lambda: field("p") * field("√q")
    if weights is not None:
        weighing = np.where(weights > 0, weights, 0.0)
        sold = sold & (weighing > 0)
        makers["w"] = lambda: field("m") * weighing
        makers["wp"] = lambda: field("p") * weighing
        makers["wl"] = lambda: field("l") * weighing
        makers["w/e"] = lambda: field("1/e") * weighing

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
