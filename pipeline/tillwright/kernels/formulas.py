"""Bilateral and elementary formulas: the log of each index from sums over the products priced in both periods."""

from __future__ import annotations

from collections.abc import Callable
from functools import cache

import numpy as np

from tillwright.kernels.pairs import Array, Pair, PairSum


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


def lowe(pair_sum: PairSum) -> Array:
    """Log of Σ p_t q_b / Σ p_s q_b over matched products, q_b the quantities of a period of their own.

    Reference: ILO et al. (2004), Consumer Price Index Manual, ch. 15.
    """
    return _log(pair_sum("m", "wp") / pair_sum("wp", "m"))


def young(pair_sum: PairSum) -> Array:
    """Log of Σ s_b·(p_t/p_s), s_b the shares in the turnover of a period of their own over matched products.

    Reference: ILO et al. (2004), Consumer Price Index Manual, ch. 15.
    """
    return _log(pair_sum("w/e", "e") / pair_sum("w", "m"))


def geometric_young(pair_sum: PairSum) -> Array:
    """Log of Π (p_t/p_s)^s_b, s_b as in `young`.

    Reference: ILO et al. (2020), Consumer Price Index Manual, ch. 8.
    """
    mean: Array = (pair_sum("w", "l") - pair_sum("wl", "m")) / pair_sum("w", "m")
    return mean


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
    "lowe": lowe,
    "young": young,
    "geometric-young": geometric_young,
}
PRICES_ONLY = frozenset({"jevons", "dutot", "carli", "harmonic", "cswd"})
BASE_WEIGHTED = frozenset({"lowe", "young", "geometric-young"})
SATO_VARTIA = "sato-vartia"
BILATERAL = (*FORMULAS, SATO_VARTIA)


@cache
def wanted_pairs(formula: str) -> tuple[Pair, ...]:
    """Sums that a formula asks for, found by letting it ask; the diagonal of the first tells what was sold."""
    asked: list[Pair] = []

    def note(base: str, current: str) -> Array:
        asked.append((base, current))
        return np.ones(1)

    FORMULAS[formula](note)
    sold = ("m", "m") if formula in PRICES_ONLY | BASE_WEIGHTED else ("x", "m")
    return (sold, *asked)


def log_levels(formula: str, pair_sum: PairSum) -> Array:
    """Log levels; NaN where no product is in common, since every formula is 0/0 there."""
    with np.errstate(divide="ignore", invalid="ignore"):
        levels = FORMULAS[formula](pair_sum)
    return np.where(np.isfinite(levels), levels, np.nan)
