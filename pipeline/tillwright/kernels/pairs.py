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
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

Array: TypeAlias = NDArray[np.float64]
Positions: TypeAlias = NDArray[np.intp]
Pair: TypeAlias = tuple[str, str]
PairSum: TypeAlias = Callable[[str, str], Array]

# Products are taken in blocks whose fields stay in a core's cache: 32 768 numbers are 256 KB a field.
BLOCK = 1 << 15
# From this many blocks on, products with like lives go together, in as many classes of first period.
MANY = 8


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

    def add(total: Array, left: Array, right: Array, rows: slice) -> None:
        total[rows, rows] += _banded_product(left, right, span)

    totals = _accumulate((prices, quantities), pairs, add, shape, segments)
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

    def add(total: Array, left: Array, right: Array, rows: slice) -> None:
        here = (np.minimum(base, current) >= rows.start) & (np.maximum(base, current) < rows.stop)
        total[here] += np.einsum("ki,ki->k", left[base[here] - rows.start], right[current[here] - rows.start])

    totals = _accumulate((prices, quantities, weights), pairs, add, (len(base),), segments)
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
    data: tuple[Array | None, ...],
    pairs: list[Pair],
    add: Callable[[Array, Array, Array, slice], None],
    shape: tuple[int, ...],
    segments: Positions | None,
) -> dict[Pair, Array]:
    """Sums of each pair of fields, block by block of products; (B, *shape), or `shape` without segments.

    `add` adds a block's part to a sum, from its fields in the rows in which it sells anything.
    """
    prices = data[0]
    assert prices is not None
    products = prices.shape[1]
    starts = np.zeros(1, dtype=np.intp) if segments is None else segments
    ends = np.append(starts[1:], products)
    totals = {pair: np.zeros((len(starts), *shape)) for pair in pairs}
    order, first, after = _by_life(prices, starts)
    width = max(BLOCK // max(len(prices), 1), 1)
    for low in range(0, products, width):
        high = min(low + width, products)
        columns = slice(low, high) if order is None else order[low:high]
        rows = slice(int(first[columns].min()), int(after[columns].max()))
        field = make_fields(*(_cut(part, rows, columns) for part in data))
        position, last = np.searchsorted(ends, low, side="right"), np.searchsorted(starts, high)
        for segment in range(int(position), int(last)):
            cut = slice(max(int(starts[segment]), low) - low, min(int(ends[segment]), high) - low)
            for left, right in pairs:
                add(totals[left, right][segment], field(left)[:, cut], field(right)[:, cut], rows)
    return totals if segments is not None else {pair: parts[0] for pair, parts in totals.items()}


def _cut(part: Array | None, rows: slice, columns: slice | Positions) -> Any:
    """Rows and columns of a (T, N) array, or columns of an (N,) one."""
    if part is None:
        return None
    if part.ndim == 1 or isinstance(columns, slice):
        return part[..., columns] if part.ndim == 1 else part[rows, columns]
    return part[rows].take(columns, axis=1)


def _by_life(prices: Array, starts: Positions) -> tuple[Positions | None, Positions, Positions]:
    """An order of columns within segments that puts those sold at the same time together, None = as they are.

    With the first period of each column and the one after its last, both by column.
    """
    periods, products = prices.shape
    if prices.size <= MANY * BLOCK:
        return None, np.zeros(products, dtype=np.intp), np.full(products, periods)
    sold = np.isfinite(prices)
    first, after = sold.argmax(axis=0), periods - sold[::-1].argmax(axis=0)
    segment = np.repeat(np.arange(len(starts)), np.diff(np.append(starts, products)))
    return np.lexsort((after, first // max(periods // MANY, 1), segment)), first, after


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
