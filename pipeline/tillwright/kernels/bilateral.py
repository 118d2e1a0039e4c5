"""Bilateral and elementary indexes: one period against another over the products priced in both."""

from __future__ import annotations

from collections.abc import Callable
from functools import cache
from typing import Literal

import numpy as np

from tillwright.kernels.pairs import Array, Pair, PairSum, sum_all_pairs, sum_listed_pairs


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
    return _log(pair_sum("m", "p") / pair_sum("p", "m"))


def carli(pair_sum: PairSum) -> Array:
    """Log of the arithmetic mean of price relatives, (1/n) Σ p_t/p_s; fails time reversal upwards.

    Reference: ILO et al. (2004), Consumer Price Index Manual, ch. 9.
    """
    return _log(pair_sum("1/e", "e") / pair_sum("m", "m"))


def harmonic(pair_sum: PairSum) -> Array:
    """Log of the harmonic mean of price relatives, n / Σ p_s/p_t; fails time reversal downwards.

    Reference: ILO et al. (2004), Consumer Price Index Manual, ch. 20.
    """
    return _log(pair_sum("m", "m") / pair_sum("e", "1/e"))


def cswd(pair_sum: PairSum) -> Array:
    """Log of the geometric mean of Carli and harmonic (Carruthers, Sellwood & Ward; Dalén).

    Reference: ILO et al. (2004), Consumer Price Index Manual, ch. 20.
    """
    return 0.5 * (carli(pair_sum) + harmonic(pair_sum))


def laspeyres(pair_sum: PairSum) -> Array:
    """Log of Σ p_t q_s / Σ p_s q_s over matched products.

    Reference: ILO et al. (2004), Consumer Price Index Manual, ch. 15.
    """
    return _log(pair_sum("q", "p") / pair_sum("x", "m"))


def paasche(pair_sum: PairSum) -> Array:
    """Log of Σ p_t q_t / Σ p_s q_t over matched products.

    Reference: ILO et al. (2004), Consumer Price Index Manual, ch. 15.
    """
    return _log(pair_sum("m", "x") / pair_sum("p", "q"))


def fisher(pair_sum: PairSum) -> Array:
    """Log of the geometric mean of Laspeyres and Paasche, √(L·P).

    Reference: ILO et al. (2004), Consumer Price Index Manual, ch. 15.
    """
    return 0.5 * (laspeyres(pair_sum) + paasche(pair_sum))


def walsh(pair_sum: PairSum) -> Array:
    """Log of Σ p_t √(q_s q_t) / Σ p_s √(q_s q_t) over matched products.

    Reference: ILO et al. (2004), Consumer Price Index Manual, ch. 15.
    """
    return _log(pair_sum("√q", "p√q") / pair_sum("p√q", "√q"))


def marshall_edgeworth(pair_sum: PairSum) -> Array:
    """Log of Σ p_t (q_s + q_t) / Σ p_s (q_s + q_t) over matched products.

    Reference: ILO et al. (2004), Consumer Price Index Manual, ch. 15.
    """
    return _log((pair_sum("q", "p") + pair_sum("m", "x")) / (pair_sum("x", "m") + pair_sum("p", "q")))


def geometric_laspeyres(pair_sum: PairSum) -> Array:
    """Log of Π (p_t/p_s)^s_s, shares of the base period over matched products.

    Reference: ILO et al. (2004), Consumer Price Index Manual, ch. 1 and 19.
    """
    mean: Array = (pair_sum("x", "l") - pair_sum("xl", "m")) / pair_sum("x", "m")
    return mean


def geometric_paasche(pair_sum: PairSum) -> Array:
    """Log of Π (p_t/p_s)^s_t, shares of the current period over matched products.

    Reference: ILO et al. (2004), Consumer Price Index Manual, ch. 19.
    """
    mean: Array = (pair_sum("m", "xl") - pair_sum("l", "x")) / pair_sum("m", "x")
    return mean


def tornqvist(pair_sum: PairSum) -> Array:
    """Log of the Törnqvist index, Σ ½(s_s + s_t)·(ln p_t − ln p_s), shares over matched products.

    Reference: ILO et al. (2004), Consumer Price Index Manual, ch. 16.
    """
    return 0.5 * (geometric_laspeyres(pair_sum) + geometric_paasche(pair_sum))


def palgrave(pair_sum: PairSum) -> Array:
    """Log of Σ s_t·(p_t/p_s), shares of the current period over matched products.

    Reference: ILO et al. (2004), Consumer Price Index Manual, ch. 19.
    """
    return _log(pair_sum("1/e", "xe") / pair_sum("m", "x"))


def _log(ratio: Array) -> Array:
    logs: Array = np.log(ratio)
    return logs


FORMULAS: dict[str, Callable[[PairSum], Array]] = {
    "jevons": jevons,
    "dutot": dutot,
    "carli": carli,
    "harmonic": harmonic,
    "cswd": cswd,
    "laspeyres": laspeyres,
    "paasche": paasche,
    "fisher": fisher,
    "tornqvist": tornqvist,
    "walsh": walsh,
    "marshall-edgeworth": marshall_edgeworth,
    "geometric-laspeyres": geometric_laspeyres,
    "geometric-paasche": geometric_paasche,
    "palgrave": palgrave,
}
PRICES_ONLY = frozenset({"jevons", "dutot", "carli", "harmonic", "cswd"})


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
    pair_sum = sum_all_pairs(prices, quantities, wanted_pairs(formula), span)
    levels, matched = _where_matched(formula, pair_sum)
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
    pair_sum = sum_listed_pairs(prices, quantities, wanted_pairs(formula), base, priced[1:])
    logs, _ = _where_matched(formula, pair_sum)
    if form == "chained":
        logs = np.cumsum(logs)
    result[priced[0]] = 1.0
    result[priced[1:]] = np.exp(logs)
    return result


@cache
def wanted_pairs(formula: str) -> tuple[Pair, ...]:
    """Sums that a formula asks for, found by letting it ask; the first tells which pairs have a match."""
    asked: list[Pair] = []

    def note(base: str, current: str) -> Array:
        asked.append((base, current))
        return np.ones(1)

    FORMULAS[formula](note)
    match = ("x", "m") if ("x", "m") in asked else ("m", "m")
    return (match, *asked)


def _where_matched(formula: str, pair_sum: PairSum) -> tuple[Array, np.ndarray]:
    """Log levels, NaN where no product is in common, and whether one is."""
    matched = pair_sum(*wanted_pairs(formula)[0]) > 0
    with np.errstate(divide="ignore", invalid="ignore"):
        levels = FORMULAS[formula](pair_sum)
    return np.where(matched, levels, np.nan), matched
