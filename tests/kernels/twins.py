"""Slow twins of the index kernels, written from the published definitions.

Plain loops over products, pairs and windows; nothing here imports Tillwright. Prices and
quantities are (T, N), NaN = not sold. Definitions: CPI Manual (2004, 2020) for the bilateral
formulas; Ivancic, Diewert and Fox (2011) for GEKS; the splices by Ivancic, Diewert and Fox
(2011), Krsinich (2016), de Haan (2015), Diewert and Fox (2017), onto the published series by
Chessa (2019).
"""

import math
from collections.abc import Callable
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Levels = list[list[float]]


class Match(NamedTuple):
    """One product priced in both periods: base and current price and quantity."""

    p0: float
    q0: float
    p1: float
    q1: float

    @property
    def relative(self) -> float:
        """Price relative p1 / p0."""
        return self.p1 / self.p0


Matches = list[Match]


class TwinUnconnectedError(Exception):
    """A window whose priced periods fall apart into groups."""

    def __init__(self, groups: list[list[int]]) -> None:
        super().__init__(f"unconnected groups {groups}")
        self.groups = groups


def matches(prices: Array, quantities: Array, base: int, current: int) -> Matches:
    """Products priced in both periods."""
    found = []
    for i in range(prices.shape[1]):
        p0, p1 = float(prices[base, i]), float(prices[current, i])
        if not math.isnan(p0) and not math.isnan(p1):
            found.append(Match(p0, float(quantities[base, i]), p1, float(quantities[current, i])))
    return found


def base_shares(m: Matches) -> list[float]:
    """Shares of expenditure in the base period over the matched products."""
    total = math.fsum(x.p0 * x.q0 for x in m)
    return [x.p0 * x.q0 / total for x in m]


def current_shares(m: Matches) -> list[float]:
    """Shares of expenditure in the current period over the matched products."""
    total = math.fsum(x.p1 * x.q1 for x in m)
    return [x.p1 * x.q1 / total for x in m]


def geometric(m: Matches, weights: list[float]) -> float:
    """Π r^w."""
    level = 1.0
    for x, weight in zip(m, weights, strict=True):
        level *= x.relative**weight
    return level


def jevons(m: Matches) -> float:
    """Π r^(1/n)."""
    return geometric(m, [1 / len(m)] * len(m))


def dutot(m: Matches) -> float:
    """mean(p1) / mean(p0)."""
    return (math.fsum(x.p1 for x in m) / len(m)) / (math.fsum(x.p0 for x in m) / len(m))


def carli(m: Matches) -> float:
    """mean(r)."""
    return math.fsum(x.relative for x in m) / len(m)


def harmonic(m: Matches) -> float:
    """1 / mean(1/r)."""
    return len(m) / math.fsum(1 / x.relative for x in m)


def cswd(m: Matches) -> float:
    """√(Carli · harmonic)."""
    return math.sqrt(carli(m) * harmonic(m))


def laspeyres(m: Matches) -> float:
    """Σ p1 q0 / Σ p0 q0."""
    return math.fsum(x.p1 * x.q0 for x in m) / math.fsum(x.p0 * x.q0 for x in m)


def paasche(m: Matches) -> float:
    """Σ p1 q1 / Σ p0 q1."""
    return math.fsum(x.p1 * x.q1 for x in m) / math.fsum(x.p0 * x.q1 for x in m)


def fisher(m: Matches) -> float:
    """√(Laspeyres · Paasche)."""
    return math.sqrt(laspeyres(m) * paasche(m))


def tornqvist(m: Matches) -> float:
    """Π r^((s0 + s1)/2)."""
    return geometric(m, [(a + b) / 2 for a, b in zip(base_shares(m), current_shares(m), strict=True)])


def walsh(m: Matches) -> float:
    """Σ p1 √(q0 q1) / Σ p0 √(q0 q1)."""
    above = math.fsum(x.p1 * math.sqrt(x.q0 * x.q1) for x in m)
    return above / math.fsum(x.p0 * math.sqrt(x.q0 * x.q1) for x in m)


def marshall_edgeworth(m: Matches) -> float:
    """Σ p1 (q0 + q1) / Σ p0 (q0 + q1)."""
    above = math.fsum(x.p1 * (x.q0 + x.q1) for x in m)
    return above / math.fsum(x.p0 * (x.q0 + x.q1) for x in m)


def geometric_laspeyres(m: Matches) -> float:
    """Π r^s0."""
    return geometric(m, base_shares(m))


def geometric_paasche(m: Matches) -> float:
    """Π r^s1."""
    return geometric(m, current_shares(m))


def palgrave(m: Matches) -> float:
    """Σ s1 r."""
    return math.fsum(w * x.relative for x, w in zip(m, current_shares(m), strict=True))


def logarithmic_mean(a: float, b: float) -> float:
    """(b - a) / (ln b - ln a), a where a = b; written as a·(e^x - 1)/x, x = ln(b/a)."""
    x = math.log(b / a)
    return a if x == 0 else a * math.expm1(x) / x


def sato_vartia(m: Matches) -> float:
    """Π r^w, w proportional to the logarithmic mean of s0 and s1."""
    means = [logarithmic_mean(a, b) for a, b in zip(base_shares(m), current_shares(m), strict=True)]
    total = math.fsum(means)
    return geometric(m, [w / total for w in means])


FORMULAS: dict[str, Callable[[Matches], float]] = {
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
    "sato-vartia": sato_vartia,
}


def pair_levels(prices: Array, quantities: Array, formula: str, span: int | None = None) -> Levels:
    """Level of t relative to s for every pair; NaN where nothing is common or beyond the span."""
    rows = []
    for s in range(len(prices)):
        row = []
        for t in range(len(prices)):
            m = matches(prices, quantities, s, t)
            beyond = span is not None and abs(s - t) > span
            row.append(math.nan if beyond or not m else FORMULAS[formula](m))
        rows.append(row)
    return rows


def priced_periods(prices: Array) -> list[int]:
    """Periods in which at least one product is priced."""
    return [t for t in range(len(prices)) if any(not math.isnan(p) for p in prices[t])]


def direct(prices: Array, quantities: Array, formula: str) -> list[float]:
    """Every period against the first priced one."""
    priced = priced_periods(prices)
    out = [math.nan] * len(prices)
    for t in priced:
        m = matches(prices, quantities, priced[0], t)
        out[t] = FORMULAS[formula](m) if m else math.nan
    return out


def chained(prices: Array, quantities: Array, formula: str) -> list[float]:
    """Product of the links between consecutive priced periods, NaN from a missing link on."""
    priced = priced_periods(prices)
    out = [math.nan] * len(prices)
    level = 1.0
    for k, t in enumerate(priced):
        if k > 0:
            m = matches(prices, quantities, priced[k - 1], t)
            level = level * FORMULAS[formula](m) if m else math.nan
        out[t] = level
    return out


def connected_groups(pairs: Levels, priced: list[int]) -> list[list[int]]:
    """Priced periods split into groups joined by the pairs that exist."""
    groups: list[list[int]] = []
    left = list(priced)
    while left:
        group = [left.pop(0)]
        for s in group:
            for t in list(left):
                if not math.isnan(pairs[s][t]):
                    group.append(t)
                    left.remove(t)
        groups.append(sorted(group))
    return groups


def geks_complete(pairs: Levels, periods: list[int]) -> list[float]:
    """Logs of the geometric mean over all l of P(0, l) P(l, t), for t in `periods`."""
    out = []
    for t in periods:
        paths = [math.log(pairs[periods[0]][x]) + math.log(pairs[x][t]) for x in periods]
        out.append(math.fsum(paths) / len(paths))
    return out


def geks_least_squares(pairs: Levels, periods: list[int]) -> list[float]:
    """Log levels fitted to the equations ln P(s, t) = x(t) - x(s) of the pairs that exist."""
    rows, values = [], []
    for a, s in enumerate(periods):
        for b, t in enumerate(periods):
            if a < b and not math.isnan(pairs[s][t]):
                row = [0.0] * len(periods)
                row[a], row[b] = -1.0, 1.0
                rows.append(row)
                values.append(math.log(pairs[s][t]))
    if not rows:
        return [0.0] * len(periods)
    design = np.array(rows)[:, 1:]  # x = 0 at the first period
    fitted = np.linalg.lstsq(design, np.array(values), rcond=None)[0]
    return [0.0, *(float(x) for x in fitted)]


def geks(pairs: Levels, start: int, stop: int) -> list[float]:
    """Log GEKS levels of one window, 0 at its first priced period, NaN where nothing is sold."""
    priced = [t for t in range(start, stop) if not math.isnan(pairs[t][t])]
    groups = connected_groups(pairs, priced)
    if len(groups) > 1:
        raise TwinUnconnectedError(groups)
    complete = not any(math.isnan(pairs[s][t]) for s in priced for t in priced)
    fit = geks_complete if complete else geks_least_squares
    levels = dict(zip(priced, fit(pairs, priced), strict=True))
    return [levels.get(t, math.nan) for t in range(start, stop)]


def window_levels(pairs: Levels, window: int) -> Levels:
    """Log GEKS levels of each rolling window, one row per window."""
    width = min(window, len(pairs))
    return [geks(pairs, k, k + width) for k in range(len(pairs) - width + 1)]


def unconnected_groups(pairs: Levels, window: int) -> tuple[tuple[int, ...], ...]:
    """Groups of the first rolling window that falls apart; empty when all windows hang together."""
    try:
        window_levels(pairs, window)
    except TwinUnconnectedError as apart:
        return tuple(tuple(group) for group in apart.groups)
    return ()


def link_periods(splice: str, t: int, width: int) -> list[int]:
    """Periods on which the window ending in t is linked."""
    if splice == "movement":
        return [t - 1]
    if splice == "window":
        return [t - width + 1]
    if splice == "half":
        return [t - width // 2]
    return list(range(t - width + 1, t))


def splice_levels(levels: Levels, splice: str, onto: str) -> list[float]:
    """Index levels from log levels of rolling windows, each window spliced on in turn."""
    width = len(levels[0])
    first = next((x for x in levels[0] if not math.isnan(x)), math.nan)
    index = [math.exp(x - first) for x in levels[0]]
    for k in range(1, len(levels)):
        t = k + width - 1
        new = {k + j: math.exp(x) for j, x in enumerate(levels[k])}
        old = {k - 1 + j: math.exp(x) for j, x in enumerate(levels[k - 1])}
        links = link_periods(splice, t, width)
        if onto == "recalculated":
            steps = [(new[t] / new[s]) / (old[t - 1] / old[s]) for s in links]
            candidates = [index[t - 1] * step for step in steps]
        else:
            candidates = [index[s] * new[t] / new[s] for s in links]
        index.append(math.prod(c ** (1 / len(candidates)) for c in candidates))
    return index
