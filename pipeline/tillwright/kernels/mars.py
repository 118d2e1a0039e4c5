"""MARS: which grouping of items into products is homogeneous and yet lasts from period to period."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tillwright.kernels.pairs import Array

Groups = NDArray[np.int64]

# Unit values are turnover over quantity in float64; prices that differ by less than this share of
# their mean are the same price, and how well a grouping explains their spread means nothing.
SAME_PRICE = 1e-12


@dataclass(frozen=True, slots=True)
class Mars:
    """Match M, homogeneity R² and their product, each 0…1, as arrays of one shape; NaN where nothing is sold."""

    match: Array
    homogeneity: Array
    score: Array


def score(prices: Array, quantities: Array, groups: Groups, base: int, current: int) -> Mars:
    """(…) MARS scores of groupings in one period against a base period; see `scores`."""
    rows = np.array([base, current])
    both = scores(prices[rows], quantities[rows], groups, 0)
    return Mars(both.match[..., 1], both.homogeneity[..., 1], both.score[..., 1])


def scores(prices: Array, quantities: Array, groups: Groups, base: int) -> Mars:
    """(…, T) MARS scores M·R² of groupings in every period t against a base period.

    R² = Σ_k q_kt(p̄_kt − p̄_t)²/Σ_i q_it(p_it − p̄_t)² is the share of the spread of item prices that
    lies between products k, with p̄ unit values; M = Σ_{k in both} q_kt/Σ_i q_it the share of the quantity
    that is of products sold in the base period too.  Each item its own product has R² = 1; all items one
    product have M = 1 and R² = 0.

    Parameters
    ----------
    prices, quantities : (T, N) arrays of items, currency per unit and units of one measure; NaN =
        not sold. A quantity of 0 is no sale.
    groups : (…, N) codes of the product that each item belongs to, any integers; leading axes are
        candidate groupings.
    base : row of the base period, commonly the last month of the year before.

    Returns
    -------
    NaN in a period without sales. Where all items have the same price R² is 1, for no grouping can blur it.
    Without sales in the base period M is 0.

    Reference: Chessa (2019), MARS: a method for defining products and linking barcodes of item relaunches.
    """
    groupings = groups.reshape(math.prod(groups.shape[:-1]), groups.shape[-1])
    match = np.full((len(groupings), len(prices)), np.nan)
    homogeneity = match.copy()
    rows, columns = np.nonzero(np.isfinite(prices) & (np.nan_to_num(quantities) > 0))
    shares, gaps = _standardise(prices[rows, columns], quantities[rows, columns], rows, len(prices))
    spread = np.bincount(rows, shares * gaps**2, len(prices))
    live = np.bincount(rows, minlength=len(prices)) > 0
    for which, grouping in enumerate(groupings):
        codes = np.unique(grouping, return_inverse=True)[1]
        cells = (rows, codes[columns])
        sold = _sum_products(shares, cells, (len(prices), int(codes.max(initial=-1)) + 1))
        pull = _sum_products(shares * gaps, cells, sold.shape)
        between = np.divide(pull**2, sold, out=np.zeros_like(pull), where=sold > 0).sum(axis=1)
        differ = live & (spread > SAME_PRICE**2)
        homogeneity[which, live] = 1.0
        np.divide(between, spread, out=homogeneity[which], where=differ)
        match[which, live] = (sold * (sold[base] > 0)).sum(axis=1)[live]
    shape = (*groups.shape[:-1], len(prices))
    match, homogeneity = (np.minimum(part, 1.0).reshape(shape) for part in (match, homogeneity))
    return Mars(match, homogeneity, match * homogeneity)


def _standardise(price: Array, quantity: Array, rows: NDArray[np.intp], periods: int) -> tuple[Array, Array]:
    """Of each sale, its share of the period's quantity, and how far its price is from the unit value, as a share."""
    shares = quantity / np.bincount(rows, quantity, periods)[rows]
    mean = np.bincount(rows, shares * price, periods)[rows]
    return shares, (price - mean) / mean


def _sum_products(values: Array, cells: tuple[NDArray[np.intp], NDArray[np.intp]], shape: tuple[int, ...]) -> Array:
    """(T, K) sums of the values of sales over the products they belong to."""
    periods, products = shape
    row, product = cells
    sums = np.bincount(row * products + product, values, periods * products)
    return np.asarray(sums, dtype=np.float64).reshape(shape)
