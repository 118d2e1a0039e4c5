"""Slow twins of the base-weighted formulas, similarity linking, and every multilateral method in every window.

Plain loops over products, periods and windows, as in `twins`; nothing here imports Tillwright.
Definitions: Lowe, Young and geometric Young by the CPI Manual (2004, 2020); similarity linking by
predicted shares, Diewert (2021); time product dummy, de Haan and Krsinich (2014); Geary-Khamis,
Chessa (2016), Lamboray (2017); windows from the link month, Chessa (2016) and Lamboray (2017).
"""

import math
from collections.abc import Callable, Sequence
from typing import Literal, NamedTuple

import numpy as np

from tests.kernels import twins
from tests.kernels.twins import Array

Window = int | Literal["expanding"] | None
Years = Sequence[int]

ARRIVED = 1e-14
TIED = 1e-12
MOST_ROUNDS = 1_000_000


class LinkOutsideWindowError(Exception):
    """A rolling window that does not reach back to the link period of its last period."""


class Weighted(NamedTuple):
    """One matched product: its two prices, and its quantity and turnover in the weight periods."""

    p0: float
    p1: float
    quantity: float
    turnover: float


def lowe(m: list[Weighted]) -> float:
    """Σ p1 qb / Σ p0 qb."""
    return math.fsum(x.p1 * x.quantity for x in m) / math.fsum(x.p0 * x.quantity for x in m)


def young(m: list[Weighted]) -> float:
    """Σ sb (p1/p0)."""
    total = math.fsum(x.turnover for x in m)
    return math.fsum(x.turnover / total * (x.p1 / x.p0) for x in m)


def geometric_young(m: list[Weighted]) -> float:
    """Π (p1/p0)^sb."""
    total = math.fsum(x.turnover for x in m)
    level = 1.0
    for x in m:
        level *= (x.p1 / x.p0) ** (x.turnover / total)
    return level


BASE_WEIGHTED: dict[str, Callable[[list[Weighted]], float]] = {
    "lowe": lowe,
    "young": young,
    "geometric-young": geometric_young,
}


def base_totals(prices: Array, quantities: Array, weight_periods: Sequence[int]) -> list[tuple[float, float]]:
    """Quantity and turnover of every product, added up over the weight periods."""
    totals = []
    for i in range(prices.shape[1]):
        sold = [t for t in weight_periods if not math.isnan(prices[t, i])]
        quantity = math.fsum(float(quantities[t, i]) for t in sold)
        turnover = math.fsum(float(prices[t, i]) * float(quantities[t, i]) for t in sold)
        totals.append((quantity, turnover))
    return totals


def base_weighted(
    prices: Array, quantities: Array, formula: str, weight_periods: Sequence[int], form: str
) -> list[float]:
    """Index series of a formula with the weights of given periods."""
    totals = base_totals(prices, quantities, weight_periods)
    kept = [i for i, (quantity, _) in enumerate(totals) if quantity > 0]

    def link(s: int, t: int) -> float:
        both = [i for i in kept if not math.isnan(prices[s, i]) and not math.isnan(prices[t, i])]
        m = [Weighted(float(prices[s, i]), float(prices[t, i]), *totals[i]) for i in both]
        return BASE_WEIGHTED[formula](m) if m else math.nan

    priced = twins.priced_periods(prices[:, kept])
    out = [math.nan] * len(prices)
    for k, t in enumerate(priced):
        if form == "direct":
            out[t] = link(priced[0], t)
        else:
            out[t] = 1.0 if k == 0 else out[priced[k - 1]] * link(priced[k - 1], t)
    return out


def sato_vartia(m: twins.Matches) -> float:
    """Sato-Vartia where quantities may be zero: the logarithmic mean of zero and any share is zero."""
    shares = zip(twins.base_shares(m), twins.current_shares(m), strict=True)
    means = [twins.logarithmic_mean(a, b) if a > 0 and b > 0 else 0.0 for a, b in shares]
    total = math.fsum(means)
    return twins.geometric(m, [w / total for w in means])


def known(array: Array, period: int, product: int) -> float:
    """The number of a cell, zero where the product is not sold."""
    value = float(array[period, product])
    return 0.0 if math.isnan(value) else value


def value_at(prices: Array, quantities: Array, price_period: int, quantity_period: int) -> float:
    """Σ p q with prices of one period and quantities of another, zero where a product is not sold."""
    products = range(prices.shape[1])
    return math.fsum(known(prices, price_period, i) * known(quantities, quantity_period, i) for i in products)


def dissimilarity(prices: Array, quantities: Array, r: int, t: int) -> float:
    """Sum of squared differences between shares and predicted shares, both ways (Diewert 2021)."""
    terms = []
    for own, other in ((t, r), (r, t)):
        value = value_at(prices, quantities, own, own)
        predicted_value = value_at(prices, quantities, other, own)
        for i in range(prices.shape[1]):
            quantity = known(quantities, own, i)
            share = known(prices, own, i) * quantity / value
            predicted = known(prices, other, i) * quantity / predicted_value
            terms.append((share - predicted) ** 2)
    return math.fsum(terms)


def most_similar(prices: Array, quantities: Array, candidates: list[int], t: int) -> int:
    """The candidate least dissimilar to t, the latest of those that tie."""
    distances = {r: dissimilarity(prices, quantities, r, t) for r in candidates}
    return max(r for r in candidates if distances[r] <= min(distances.values()) + TIED)


def similarity(prices: Array, quantities: Array, window: int | None = None) -> list[float]:
    """Levels one period after the other, each linked by Fisher on the most similar earlier period."""
    priced = twins.priced_periods(prices)
    out = [math.nan] * len(prices)
    for k, t in enumerate(priced):
        if k == 0:
            out[t] = 1.0
            continue
        earlier = [r for r in priced[:k] if window is None or r >= t - window + 1]
        candidates = [r for r in earlier if twins.matches(prices, quantities, r, t)]
        if not candidates:
            raise twins.TwinUnconnectedError([priced[:k], [t]])
        r = most_similar(prices, quantities, candidates, t)
        out[t] = out[r] * twins.fisher(twins.matches(prices, quantities, r, t))
    return out


def expenditure_shares(prices: Array, quantities: Array) -> Array:
    """Shares of expenditure within each period over all its products, zero where not sold."""
    shares = np.zeros(prices.shape)
    for t in range(len(prices)):
        total = value_at(prices, quantities, t, t)
        for i in range(prices.shape[1]):
            spent = known(prices, t, i) * known(quantities, t, i)
            shares[t, i] = spent / total if spent > 0 else 0.0
    return shares


def ones_where_sold(prices: Array) -> Array:
    """One where a product is sold, else zero."""
    return np.where(np.isnan(prices), 0.0, 1.0)


def groups_by_weight(weights: Array, positions: Sequence[int]) -> list[list[int]]:
    """Periods of weight at the positions, split into groups joined by products that weigh in two of them."""
    left = [t for t in positions if any(w > 0 for w in weights[t])]
    groups = []
    while left:
        group = [left.pop(0)]
        for s in group:
            for t in list(left):
                if any(a > 0 and b > 0 for a, b in zip(weights[s], weights[t], strict=True)):
                    group.append(t)
                    left.remove(t)
        groups.append(sorted(group))
    return groups


def one_group(weights: Array, positions: Sequence[int]) -> list[int]:
    """Periods of weight at the positions, refused when they fall apart."""
    groups = groups_by_weight(weights, positions)
    if len(groups) > 1:
        raise twins.TwinUnconnectedError(groups)
    return groups[0] if groups else []


def time_product_dummy(prices: Array, weights: Array, positions: Sequence[int]) -> list[float]:
    """Log levels by weighted least squares of ln p on a dummy for every period and product."""
    periods = one_group(weights, positions)
    cells = [(t, i) for t in periods for i in range(prices.shape[1]) if weights[t, i] > 0]
    products = sorted({i for _, i in cells})
    rows, values = [], []
    for t, i in cells:
        root = math.sqrt(weights[t, i])
        row = [0.0] * (len(periods) + len(products))
        row[periods.index(t)] = root
        row[len(periods) + products.index(i)] = root
        rows.append(row[1:])
        values.append(root * math.log(prices[t, i]))
    if not rows:
        return [math.nan] * len(positions)
    fitted = np.linalg.lstsq(np.array(rows), np.array(values), rcond=None)[0]
    levels = dict(zip(periods, [0.0, *(float(x) for x in fitted)], strict=False))
    return [levels.get(t, math.nan) for t in positions]


def geary_khamis(prices: Array, quantities: Array, positions: Sequence[int]) -> list[float]:
    """Log levels by going round the definition until no level moves."""
    sold = np.nan_to_num(quantities, nan=0.0)
    periods = one_group(sold, positions)
    if not periods:
        return [math.nan] * len(positions)
    products = [i for i in range(prices.shape[1]) if any(sold[t, i] > 0 for t in periods)]
    bought = {t: [float(sold[t, i]) for i in products] for t in periods}
    total = [math.fsum(bought[t][n] for t in periods) for n in range(len(products))]
    turnover = {t: math.fsum(known(prices, t, i) * sold[t, i] for i in products) for t in periods}
    paid = [  # φ p of every product in every period
        {t: bought[t][n] / total[n] * known(prices, t, i) for t in periods} for n, i in enumerate(products)
    ]
    levels = dict.fromkeys(periods, 1.0)
    for _ in range(MOST_ROUNDS):
        worth = [math.fsum(amount / levels[t] for t, amount in row.items()) for row in paid]
        new = {t: turnover[t] / math.fsum(v * q for v, q in zip(worth, bought[t], strict=True)) for t in periods}
        new = {t: level / new[periods[0]] for t, level in new.items()}
        change = max(abs(new[t] / levels[t] - 1) for t in periods)
        levels = new
        if change < ARRIVED:
            return [math.log(levels[t]) if t in levels else math.nan for t in positions]
    raise ArithmeticError("the iteration does not arrive")


def geks(prices: Array, quantities: Array, formula: str, positions: Sequence[int]) -> list[float]:
    """Log levels of GEKS over the positions."""
    inside = list(positions)
    pairs = twins.pair_levels(prices[inside], quantities[inside], formula)
    try:
        return twins.geks(pairs, 0, len(inside))
    except twins.TwinUnconnectedError as apart:
        raise twins.TwinUnconnectedError([[inside[k] for k in group] for group in apart.groups]) from apart


def window_logs(
    prices: Array, quantities: Array, method: str, positions: Sequence[int], weights: Array | None = None
) -> list[float]:
    """Log levels of any multilateral method over the positions, 0 at the first that has a level.

    Parameters
    ----------
    weights
        Weights of the time product dummy, where they are not the expenditure shares.
    """
    if method == "tpd":
        return time_product_dummy(
            prices, expenditure_shares(prices, quantities) if weights is None else weights, positions
        )
    if method == "tpd-unweighted":
        return time_product_dummy(prices, ones_where_sold(prices), positions)
    if method == "geary-khamis":
        return geary_khamis(prices, quantities, positions)
    return geks(prices, quantities, method.removeprefix("geks-"), positions)


def rolling_logs(
    prices: Array, quantities: Array, method: str, window: int, weights: Array | None = None
) -> twins.Levels:
    """Log levels of each rolling window, one row per window."""
    width = min(window, len(prices))
    starts = range(len(prices) - width + 1)
    return [window_logs(prices, quantities, method, range(k, k + width), weights) for k in starts]


def link_period(years: Years, t: int) -> int:
    """The last period of an earlier link year, position 0 if there is none."""
    return max((s for s in range(len(years)) if years[s] < years[t]), default=0)


def from_first(logs: list[float]) -> list[float]:
    """Levels, 1 where the first one is known."""
    first = next((x for x in logs if not math.isnan(x)), math.nan)
    return [math.exp(x - first) for x in logs]


def link_on_month(levels: twins.Levels, years: Years) -> list[float]:
    """Index levels from log levels of rolling windows, each linked on the link period of its last period."""
    width = len(levels[0])
    index = from_first(levels[0])
    for k in range(1, len(levels)):
        t = k + width - 1
        s = link_period(years, t)
        if s < k:
            raise LinkOutsideWindowError(f"period {t} links on {s}")
        index.append(index[s] * math.exp(levels[k][t - k] - levels[k][s - k]))
    return index


def expanding(prices: Array, quantities: Array, method: str, years: Years, weights: Array | None = None) -> list[float]:
    """Index levels from windows that run from the link period to each period in turn."""
    index = [1.0]
    for t in range(1, len(prices)):
        s = link_period(years, t)
        logs = window_logs(prices, quantities, method, range(s, t + 1), weights)
        index.append(index[s] * math.exp(logs[-1] - logs[0]))
    return index


def series(
    prices: Array,
    quantities: Array,
    method: str,
    *,
    window: Window = None,
    splice: str = "mean",
    onto: str = "published",
    years: Years = (),
    weights: Array | None = None,
) -> list[float]:
    """Index of a multilateral method over all periods, windows spliced."""
    if method == "similarity":
        if window == "expanding":
            raise ValueError(window)
        return similarity(prices, quantities, window)
    if window is None:
        return from_first(window_logs(prices, quantities, method, range(len(prices)), weights))
    if window == "expanding":
        return expanding(prices, quantities, method, years, weights)
    levels = rolling_logs(prices, quantities, method, window, weights)
    return link_on_month(levels, years) if splice == "link-month" else twins.splice_levels(levels, splice, onto)


def left_out(prices: Array, segments: Sequence[int]) -> list[Array]:
    """The prices without the columns of each segment in turn."""
    stops = [*segments[1:], prices.shape[1]]
    out = []
    for start, stop in zip(segments, stops, strict=True):
        less = prices.copy()
        less[:, start:stop] = math.nan
        out.append(less)
    return out


def replicates(
    prices: Array,
    quantities: Array,
    method: str,
    segments: Sequence[int],
    *,
    window: Window = None,
    splice: str = "mean",
    onto: str = "published",
    years: Years = (),
) -> list[list[float]]:
    """Indexes without each segment in turn; what is left in a time product dummy keeps its weight."""
    shares = expenditure_shares(prices, quantities)
    out = []
    for less in left_out(prices, segments):
        kept = ~np.isnan(less)
        fewer = np.where(kept, quantities, math.nan)
        weights = np.where(kept, shares, 0.0)
        found = series(less, fewer, method, window=window, splice=splice, onto=onto, years=years, weights=weights)
        out.append(found)
    return out
