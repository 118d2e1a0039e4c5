"""Prices for products that are missing: class means, overlap at replacement, and carrying forward."""

from __future__ import annotations

from dataclasses import dataclass
from enum import IntEnum
from typing import Literal, TypeAlias

import numpy as np
from numpy.typing import NDArray

from tillwright.kernels.bilateral import pair_levels
from tillwright.kernels.network import Flags
from tillwright.kernels.pairs import Array, Positions
from tillwright.kernels.screening import last_sold

Elementary: TypeAlias = Literal["jevons", "dutot", "carli"]
Run: TypeAlias = Literal["short", "long"]


class Reason(IntEnum):
    """Why a cell of the panel holds the price it holds, or none."""

    OBSERVED = 0
    CLASS_MEAN = 1
    CARRIED_FORWARD = 2
    NOT_YET_SOLD = 3
    BEYOND_LIMIT = 4
    NOTHING_MATCHED = 5
    NOT_NAMED = 6


@dataclass(frozen=True, slots=True)
class Imputed:
    """(T, N) arrays: prices with the imputed ones filled in, which those are, and a `Reason` for each cell."""

    prices: Array
    imputed: Flags
    reasons: NDArray[np.int8]


def impute_class_mean(
    prices: Array,
    formula: Elementary = "jevons",
    run: Run = "short",
    limit: int | None = None,
) -> Imputed:
    """Prices of missing products moved by the index of the products that are matched.

    Short run: p*[t] = p[s]·I(s→t), s the latest period in which the product has a price, own or
    imputed, which is t−1 unless nothing could be matched then.  Long run: p*[t] = p[f]·I(f→t), f the
    product's first period.  I is the elementary index over products with a price of their own in
    both periods.  An index of the same formula is left unchanged by long-run imputation if it is
    direct, and by short-run imputation if it is chained, in every link in which no product comes back;
    a product that is back counts with its own price, and its relative to the imputed one puts the
    chain right.

    Parameters
    ----------
    prices : (T, N) array, currency per unit; NaN = not sold.
    formula : the elementary formula of the class; its own, or imputation moves the index.
    run : from the period before, or from the product's first price.
    limit : the most periods in a row that are imputed after a price of the product's own; None = all.
        What is imputed in a period does not depend on later periods.

    Returns
    -------
    Nothing is imputed before a product's first price, beyond the limit, or where no product is priced
    both in the period that the price is moved from and in this one.

    Reference: IMF et al. (2020), Consumer Price Index Manual: Concepts and Methods, ch. 6.
    """
    sold = np.isfinite(prices)
    due = _within(sold, limit)
    levels = pair_levels(prices, None, formula)
    filled = prices.copy()
    origin = np.full(prices.shape[1], -1)
    for t in range(len(prices)):
        columns = np.flatnonzero(due[t])
        start = origin[columns]
        filled[t, columns] = filled[start, columns] * levels[start, t]
        moves = np.isfinite(filled[t])
        if run == "long":
            moves &= origin < 0
        origin[moves] = t
    return _explain(prices, filled, due, Reason.CLASS_MEAN)


def carry_forward(prices: Array, *, columns: Positions, limit: int) -> Imputed:
    """Prices of the named products held at their last own price, p*[t] = p[last].

    For tariffs and for seasons in which a product is not offered; it pulls an index towards no
    change, and is no default.

    Parameters
    ----------
    prices : (T, N) array, currency per unit; NaN = not sold.
    columns : (K,) positions of the products that are carried forward, each with a reason outside the data.
    limit : the most periods in a row for which a price is held.

    Returns
    -------
    Nothing is imputed for other products, before the first price, or beyond the limit.

    Reference: IMF et al. (2020), Consumer Price Index Manual: Concepts and Methods, ch. 6.
    """
    sold = np.isfinite(prices)
    named = np.zeros(prices.shape[1], dtype=bool)
    named[columns] = True
    due = _within(sold, limit) & named
    last = last_sold(sold)
    filled = np.where(due, np.take_along_axis(prices, np.maximum(last, 0), axis=0), prices)
    carried = _explain(prices, filled, due, Reason.CARRIED_FORWARD)
    carried.reasons[~sold & ~named & (last >= 0)] = Reason.NOT_NAMED
    return carried


def overlap_ratio(
    prices: Array, old: Positions | int, new: Positions | int, period: Positions | int
) -> NDArray[np.float64]:
    """(…) quality ratio of replacements, p[T,new]/p[T,old] in the period T in which both are sold.

    The old product's prices times this ratio continue as the new product's: what the two differ in
    price while both are on offer is taken for what they differ in quality.

    Parameters
    ----------
    prices : (T, N) array, currency per unit; NaN = not sold.
    old, new : (…) columns of the product that is replaced and of its replacement.
    period : (…) rows of the overlap.

    Returns
    -------
    NaN where one of the two is not sold in the period.

    Reference: IMF et al. (2020), Consumer Price Index Manual: Concepts and Methods, ch. 6.
    """
    return np.asarray(prices[period, new] / prices[period, old])


def _within(sold: Flags, limit: int | None) -> Flags:
    """(T, N) whether a product is missing at most `limit` periods after its latest price."""
    last = last_sold(sold)
    missing = ~sold & (last >= 0)
    if limit is None:
        return missing
    within: Flags = missing & (np.arange(len(sold))[:, None] - last <= limit)
    return within


def _explain(prices: Array, filled: Array, due: Flags, reason: Reason) -> Imputed:
    """The filled panel with a reason for each cell; a cell that was due and stayed empty had no match."""
    sold = np.isfinite(prices)
    imputed = due & np.isfinite(filled)
    reasons = np.select(
        [sold, imputed, due, last_sold(sold) < 0],
        [Reason.OBSERVED, reason, Reason.NOTHING_MATCHED, Reason.NOT_YET_SOLD],
        Reason.BEYOND_LIMIT,
    )
    return Imputed(filled, imputed, reasons.astype(np.int8))
