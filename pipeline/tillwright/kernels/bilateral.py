"""Bilateral and elementary indexes: one period against another over the products priced in both."""

from __future__ import annotations

from collections.abc import Callable
from typing import Literal

import numpy as np

from tillwright.kernels.pairs import Array, PairSum, make_fields, sums_of_all_pairs, sums_of_rows


def jevons(pair_sum: PairSum) -> Array:
    """Log of the geometric mean of price relatives, Π (p_t/p_s)^(1/n).

    Reference: ILO et al. (2004), Consumer Price Index Manual, ch. 9.
    """
    mean: Array = (pair_sum("m", "l") - pair_sum("l", "m")) / pair_sum("m", "m")
    return mean


def dutot(pair_sum: PairSum) -> Array:
    """Log of the ratio of mean prices, Σ p_t / Σ p_s over matched products.

    Depends on the units that products are measured in.
    Reference: ILO et al. (2004), Consumer Price Index Manual, ch. 9.
    """
    logs: Array = np.log(pair_sum("m", "p")) - np.log(pair_sum("p", "m"))
    return logs


def fisher(pair_sum: PairSum) -> Array:
    """Log of the geometric mean of Laspeyres and Paasche, √(L·P).

    L = Σ p_t q_s / Σ p_s q_s, P = Σ p_t q_t / Σ p_s q_t.
    Reference: ILO et al. (2004), Consumer Price Index Manual, ch. 15.
    """
    laspeyres = np.log(pair_sum("q", "p")) - np.log(pair_sum("x", "m"))
    paasche = np.log(pair_sum("m", "x")) - np.log(pair_sum("p", "q"))
    return 0.5 * (laspeyres + paasche)


def tornqvist(pair_sum: PairSum) -> Array:
    """Log of the Törnqvist index, Σ ½(s_s + s_t)·(ln p_t − ln p_s), shares over matched products.

    Reference: ILO et al. (2004), Consumer Price Index Manual, ch. 16.
    """
    base_weighted = (pair_sum("x", "l") - pair_sum("xl", "m")) / pair_sum("x", "m")
    current_weighted = (pair_sum("m", "xl") - pair_sum("l", "x")) / pair_sum("m", "x")
    return 0.5 * (base_weighted + current_weighted)


FORMULAS: dict[str, Callable[[PairSum], Array]] = {
    "jevons": jevons,
    "dutot": dutot,
    "fisher": fisher,
    "tornqvist": tornqvist,
}
PRICES_ONLY = frozenset({"jevons", "dutot"})


def log_pair_levels(prices: Array, quantities: Array | None, formula: str, *, span: int | None = None) -> Array:
    """(T, T) log index levels of period t (column) relative to period s (row).

    Parameters
    ----------
    prices, quantities : (T, N) arrays; NaN = not sold. Quantities may be None for formulas in
        `PRICES_ONLY`.
    formula : a key of `FORMULAS`.
    span : the largest distance in periods between the two sides; None = every pair.

    Returns
    -------
    NaN where no product is priced in both periods, or beyond `span`; 0 on the diagonal of every
    priced period.
    """
    field = make_fields(prices, quantities)
    pair_sum = sums_of_all_pairs(field, span)
    matched = pair_sum("m", "m") > 0
    levels = _where_matched(formula, pair_sum, matched)
    if span is not None:
        distance = np.abs(np.subtract.outer(np.arange(len(prices)), np.arange(len(prices))))
        levels[distance > span] = np.nan
    diagonal = np.arange(len(prices))
    levels[diagonal, diagonal] = np.where(matched.diagonal(), 0.0, np.nan)
    return levels


def pair_levels(prices: Array, quantities: Array | None, formula: str, *, span: int | None = None) -> Array:
    """(T, T) index levels of period t (column) relative to period s (row), base 1.

    The exponential of `log_pair_levels`, which see.
    """
    levels: Array = np.exp(log_pair_levels(prices, quantities, formula, span=span))
    return levels


def series(
    prices: Array, quantities: Array | None, formula: str, *, form: Literal["chained", "direct"] = "chained"
) -> Array:
    """(T,) index of one formula, the first priced period = 1.

    Parameters
    ----------
    prices, quantities : (T, N) arrays; NaN = not sold.
    formula : a key of `FORMULAS`.
    form : "direct" compares every period with the first priced one; "chained" multiplies the
        links between consecutive priced periods.

    Returns
    -------
    NaN in a period without any product, which a chain steps over; in a direct index also where
    the period shares no product with the first; in a chained index from the first link without a
    common product onwards.
    """
    result = np.full(len(prices), np.nan)
    priced = np.flatnonzero(np.isfinite(prices).any(axis=1))
    if priced.size == 0:
        return result
    base = priced[:-1] if form == "chained" else np.full(priced.size - 1, priced[0])
    pair_sum = sums_of_rows(make_fields(prices, quantities), base, priced[1:])
    logs = _where_matched(formula, pair_sum, pair_sum("m", "m") > 0)
    if form == "chained":
        logs = np.cumsum(logs)
    result[priced[0]] = 1.0
    result[priced[1:]] = np.exp(logs)
    return result


def _where_matched(formula: str, pair_sum: PairSum, matched: np.ndarray) -> Array:
    with np.errstate(divide="ignore", invalid="ignore"):
        levels = FORMULAS[formula](pair_sum)
    return np.where(matched, levels, np.nan)
