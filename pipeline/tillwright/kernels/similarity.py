"""Similarity linking: each period compared with the most similar one before it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from tillwright.errors import UnconnectedPeriods
from tillwright.kernels.bilateral import logs_of_pairs
from tillwright.kernels.pairs import Array, Pair, PairSum, Positions

WANTED: tuple[Pair, ...] = (("p", "q"), ("m", "x"), ("p", "xq"), ("pp", "qq"))
ALIKE = 1e-12
"""Dissimilarities closer than this are equal: they are sums of squared shares with rounding of 1e-16 each."""


@dataclass(frozen=True, slots=True)
class Links:
    """(B, T) log levels and the position of the period that each is linked to, −1 = none."""

    levels: Array
    to: Positions


def link(pair_sum: PairSum, reach: int | None = None, *, apart: list[UnconnectedPeriods] | None = None) -> Links:
    """(B, T) log levels, 0 in the first priced period, with the period that each is linked to.

    P_t = P_r·F(r, t), F the Fisher index over matched products and r the earlier period with the
    smallest predicted-share dissimilarity

        D(r, t) = Σ_i [s_t − p_r q_t/(p_r·q_t)]² + Σ_i [s_r − p_t q_r/(p_t·q_r)]²

    over all products of either period, price and quantity 0 where not sold, so that a product
    without a partner adds its squared share. Levels never depend on later periods.

    Parameters
    ----------
    pair_sum : sums over products for all pairs of periods, (B, T, T), of the fields in `WANTED` and those of
        "fisher".
    reach : how many periods back to look; None = all. Of equal candidates the latest is taken.
    apart : collects periods that share no product with those they may be linked to, which are NaN then;
        None = raise.

    Returns
    -------
    Levels are NaN and links −1 in periods without any product; the link of the first priced period
    is −1.

    Raises
    ------
    UnconnectedPeriods : a period shares no product with any it may be linked to.

    Reference: Diewert (2021), Scanner Data, Elementary Price Indexes and the Chain Drift Problem.
    """
    far = dissimilarity(pair_sum)
    logs = logs_of_pairs("fisher", pair_sum)
    segments, periods = far.shape[:2]
    every, here = np.arange(segments), np.isfinite(logs.diagonal(axis1=1, axis2=2))
    levels, links = np.full((segments, periods), np.nan), np.full((segments, periods), -1, dtype=np.intp)
    for t in range(periods):
        low = 0 if reach is None else max(t - reach, 0)
        started = np.isfinite(levels[:, :t]).any(axis=1) if t else np.zeros(segments, dtype=bool)
        usable = np.isfinite(logs[:, low:t, t]) & np.isfinite(levels[:, low:t])
        distance = np.where(usable, far[:, low:t, t], np.inf)
        linked = usable.any(axis=1) & here[:, t]
        if linked.any():
            best = distance <= distance.min(axis=1, keepdims=True) + ALIKE
            latest = t - 1 - best[:, ::-1].argmax(axis=1)
            links[linked, t] = latest[linked]
            levels[linked, t] = (levels[every, latest] + logs[every, latest, t])[linked]
        levels[here[:, t] & ~started, t] = 0.0
        for segment in np.flatnonzero(here[:, t] & started & ~linked):
            problem = UnconnectedPeriods([np.flatnonzero(here[segment, :t]).tolist(), [t]], segment=int(segment))
            if apart is None:
                raise problem
            apart.append(problem)
    return Links(levels, links)


def dissimilarity(pair_sum: PairSum) -> Array:
    """(…, T, T) predicted-share dissimilarities, symmetric; infinite without a common product.

    The squares are multiplied out, so that each is three sums over products.
    """
    turnover = pair_sum("m", "x").diagonal(axis1=-2, axis2=-1)
    squared = pair_sum("pp", "qq").diagonal(axis1=-2, axis2=-1)
    predicted = pair_sum("p", "q")
    with np.errstate(divide="ignore", invalid="ignore"):
        own = squared / turnover**2
        half = (
            own[..., None, :]
            - 2.0 * pair_sum("p", "xq") / (turnover[..., None, :] * predicted)
            + pair_sum("pp", "qq") / predicted**2
        )
    half = np.where(predicted > 0, half, np.inf)
    both: Array = np.maximum(half + half.swapaxes(-1, -2), 0.0)
    return both
