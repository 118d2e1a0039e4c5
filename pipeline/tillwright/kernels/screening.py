"""Screens: extreme price relatives, clearance before a product goes, and products that sell too little."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tillwright.kernels.network import Flags
from tillwright.kernels.pairs import Array, Positions


def find_extreme(prices: Array, starts: NDArray[np.bool_], low: float, high: float) -> NDArray[np.bool_]:
    """Whether each price is an outlier against the same product's history.

    A price is extreme if its relative to the product's last price that was not, and its relative
    to the price just before, both lie outside [low, high].  A lone wrong price is thus set aside
    and the next right one is not; a lasting change costs one period.

    Parameters
    ----------
    prices : (R,) prices of all products, each product's in order of time, one after another.
    starts : (R,) True where a product begins.
    low, high : bounds of the price relative; common practice is 1/4 and 4, a statistical office
        publishes 1/3 and 3.

    Returns
    -------
    (R,) booleans; a product's first price is never extreme.
    """
    extreme = np.zeros(len(prices), dtype=bool)
    first = np.flatnonzero(starts)
    lengths = np.diff(np.append(first, len(prices)))
    good = prices[first].copy()
    order = np.argsort(-lengths, kind="stable")
    for step in range(1, int(lengths.max(initial=0))):
        live = order[: np.searchsorted(-lengths[order], -step, side="left")]
        at = first[live] + step
        now = prices[at]
        against_good = now / good[live]
        against_last = now / prices[at - 1]
        out = ((against_good < low) | (against_good > high)) & ((against_last < low) | (against_last > high))
        extreme[at] = out
        good[live] = np.where(out, good[live], now)
    return extreme


def find_clearance(
    prices: Array,
    quantities: Array,
    *,
    price_fall: float = 0.7,
    quantity_fall: float = 0.5,
    ahead: int = 2,
    absent: int = 1,
) -> Flags:
    """Whether each price is one of a product sold off before it disappears for good.

    A price in one of the last `ahead` periods of a product's life is a clearance price if
    p < price_fall·p_kept and q < quantity_fall·q_kept, where p_kept and q_kept are those of its last
    period before that is not itself a clearance.  Leftovers sold at the same low price for more
    periods are thus found too, as long as the fall lies within the last `ahead` periods; a low price that
    lasts longer is a lasting change.  A last period that was cut short sells less at the usual price
    and is kept, because both must fall.

    Parameters
    ----------
    prices, quantities : (T, N) arrays, currency per unit and units; NaN = not sold. From a quantity
        of 0 there is no fall.
    price_fall, quantity_fall : shares of the last kept price and quantity, above 0.
    ahead : calendar periods that the clearance may take, counted back from the last with a price.
    absent : periods without a price, up to the last in which any product has one, that make a
        disappearance; more than 1 where the last periods are incomplete.

    Returns
    -------
    (T, N) booleans. A product's first price is never one of clearance, nor is any price of a product
    that is still sold.

    Reference: common practice.
    """
    sold = np.isfinite(prices)
    clearance = np.zeros_like(sold)
    last = last_sold(sold)
    if not sold.any():
        return clearance
    final, end = last[-1], np.flatnonzero(sold.any(axis=1))[-1]
    gone = np.flatnonzero((final >= 0) & (final <= end - absent))
    kept = np.full(len(gone), -1)
    for step in range(ahead - 1, -1, -1):
        row = final[gone] - step
        known = np.where(row > 0, last[row - 1, gone], -1)
        kept = np.where(kept < 0, known, kept)
        live = np.flatnonzero((row > 0) & (kept >= 0) & sold[np.maximum(row, 0), gone])
        at, before, column = row[live], kept[live], gone[live]
        cheap = prices[at, column] < price_fall * prices[before, column]
        few = quantities[at, column] < quantity_fall * quantities[before, column]
        clearance[at, column] = cheap & few
        kept[live] = np.where(cheap & few, before, at)
    return clearance


@dataclass(frozen=True, slots=True)
class SmallSales:
    """(T, N) booleans of the filter on small sales.

    `used`: the product is used in the link that ends in the period; False in the first period.
    `small`: the product is matched in that link and not used. A row that is small in the link that
    ends in its period may still be used in the next one, so a chain is made with `used`.
    """

    used: Flags
    small: Flags


def find_small_sales(prices: Array, quantities: Array, *, factor: float = 1.25) -> SmallSales:
    """Which matched products sell enough to be used in the link from the period before.

    Kept if (s[t−1,i] + s[t,i])/2 > 1/(n·λ), where n is the number of matched products, s their shares of
    the turnover of matched products in each of the two periods, λ the factor.

    Parameters
    ----------
    prices, quantities : (T, N) arrays, currency per unit and units; NaN = not sold. A period without
        any price is stepped over; a quantity of 0 gives a share of 0, and so does a period
        in which no matched product has turnover.
    factor : λ above 0; the greater, the more products are used.

    Reference: van der Grient & de Haan (2010), The use of supermarket scanner data in the Dutch CPI.
    """
    sold = np.isfinite(prices)
    used, small = np.zeros_like(sold), np.zeros_like(sold)
    rows = np.flatnonzero(sold.any(axis=1))
    before, now = rows[:-1], rows[1:]
    turnover = np.where(sold, prices * quantities, 0.0)
    matched = sold[before] & sold[now]
    mean_share = (_shares(turnover[before], matched) + _shares(turnover[now], matched)) / 2
    count = matched.sum(axis=1, keepdims=True)
    used[now] = matched & (mean_share * (count * factor) > 1)
    small[now] = matched & ~used[now]
    return SmallSales(used, small)


def last_sold(sold: Flags) -> Positions:
    """(T, N) position of the latest period up to and including each in which the product was sold; −1 if none."""
    clock = np.arange(len(sold))[:, None]
    latest: Positions = np.maximum.accumulate(np.where(sold, clock, -1), axis=0)
    return latest


def _shares(turnover: Array, matched: Flags) -> Array:
    """(K, N) shares of turnover over the matched products, 0 elsewhere and where there is no turnover."""
    value = np.where(matched, turnover, 0.0)
    total = value.sum(axis=1, keepdims=True)
    shares = np.zeros_like(value)
    np.divide(value, total, out=shares, where=total > 0)
    return shares
