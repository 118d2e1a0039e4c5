"""What each product contributes to a movement of an index, by any method, adding up to it exactly."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from tillwright.errors import CallError, NoLevel
from tillwright.kernels import geary_khamis, similarity, time_product_dummy
from tillwright.kernels.bilateral import log_pair_levels
from tillwright.kernels.formulas import BASE_WEIGHTED, wanted_pairs
from tillwright.kernels.link_contributions import contribute, ratio_parts
from tillwright.kernels.methods import HELD, Failure, make_indexes
from tillwright.kernels.pairs import Array, Positions, make_fields, sum_all_pairs
from tillwright.kernels.recipes import Recipe, Years, links_for, period_weights, window_length, windows_of
from tillwright.kernels.windows import Windows


@dataclass(frozen=True, slots=True)
class Decomposition:
    """Log contributions to `change` = ln I(end) − ln I(start): of N products, and of the splice."""

    products: Array
    splice: float
    change: float

    def in_points(self) -> Decomposition:
        """The same in percentage points of the relative change: 100·(e^change − 1)."""
        factor = 100.0 if self.change == 0 else 100.0 * float(np.expm1(self.change)) / self.change
        return Decomposition(self.products * factor, self.splice * factor, self.change * factor)


def decompose(
    prices: Array,
    quantities: Array | None,
    recipe: Recipe,
    start: int,
    end: int,
    *,
    years: Years | None = None,
    pass_over: bool = False,
) -> Decomposition:
    """Contributions of (N,) products to the movement from period `start` to a later period `end`.

    The movement is taken apart within the window that ends in `end`, or the first window where that
    one stands; where `start` lies before it, from the window's first period on, and the rest of the way
    in the same manner. What the spliced series moved beyond that is the splice's own. Within a window:

        GEKS              g·b with b_t = Σ_s ln P(s,t) and g the rows of the least-squares solution: for a complete
                          window the mean over s of the contributions to ln P(s,end) less those to ln P(s,start);
                          for Törnqvist on a complete panel ½(s_ti + s̄_i)(ln p_ti − mean ln p_i)
        TPD               s_ti·ln(p_ti/v_i), v the fitted prices of products
        Geary–Khamis      the parts of ln(Σ p_t q_t / Σ v q_t) as in `kernels.link_contributions`

    at `end` less at `start`, the index scaled to 1 at `start`. Bilateral indexes and similarity linking
    add up the contributions to their links.

    Parameters
    ----------
    prices, quantities : (T, N) arrays; NaN = not sold.
    years : as for `kernels.methods.make_index`.
    pass_over : windows that fall apart are passed over, as with `failures` in `kernels.methods.make_indexes`.

    Returns
    -------
    Products that are in neither period contribute where they link other periods to these.

    Raises
    ------
    NoLevel : the index has none in one of the periods.
    CallError : `start` is not before `end`.
    UnconnectedPeriods : as for `kernels.methods.make_index`.

    Reference: Webster & Tarnow-Mordi (2019), Decomposing multilateral price indexes into the
    contributions of individual commodities, for GEKS–Törnqvist and TPD; `kernels.link_contributions`.
    """
    if not start < end:
        raise CallError(f"A movement goes from an earlier period to a later one, not from {start} to {end}.")
    failures: list[Failure] | None = [] if pass_over else None
    index = make_indexes(prices, quantities, [recipe], years=years, failures=failures)[0, 0]
    change = float(np.log(index[end]) - np.log(index[start]))
    if not np.isfinite(change):
        raise NoLevel("The index has no level in one of the two periods.")
    if recipe.is_bilateral:
        products = _along_links(prices, quantities, recipe, start, end)
    elif recipe.method == "similarity":
        products = _along_similarity(prices, quantities, recipe, start, end)
    else:
        products = _through_windows(prices, quantities, recipe, (start, end), index, years)
    return Decomposition(products, change - float(products.sum()) if recipe.is_spliced else 0.0, change)


def _along_links(prices: Array, quantities: Array | None, recipe: Recipe, start: int, end: int) -> Array:
    """Contributions of a bilateral index: those of the links from `start` to `end`."""
    weights = period_weights(prices, quantities, recipe) if recipe.method in BASE_WEIGHTED else None
    sold = np.isfinite(prices) if weights is None else np.isfinite(prices) & (weights > 0)
    if weights is None and recipe.needs_quantities and quantities is not None:
        sold &= quantities > 0
    priced = np.flatnonzero(sold.any(axis=1))
    if recipe.form == "direct":
        base = np.full(2, priced[0])
        later, earlier = contribute(recipe.method, prices, quantities, base, np.array([end, start]), weights)
        direct: Array = later - earlier
        return direct
    steps = priced[(priced >= start) & (priced <= end)]
    total = np.zeros(prices.shape[1])
    many = max(HELD // max(prices.shape[1], 1), 1)
    for low in range(0, len(steps) - 1, many):
        base, current = steps[:-1][low : low + many], steps[1:][low : low + many]
        total += contribute(recipe.method, prices, quantities, base, current, weights).sum(axis=0)
    return total


def _along_similarity(prices: Array, quantities: Array | None, recipe: Recipe, start: int, end: int) -> Array:
    reach = None if recipe.window is None else window_length(recipe, len(prices)) - 1
    wanted = [*similarity.WANTED, *wanted_pairs("fisher")]
    sums = sum_all_pairs(prices, quantities, wanted, segments=np.zeros(1, dtype=np.intp))
    to = similarity.link(sums, reach, apart=[]).to[0]
    total = np.zeros(prices.shape[1])
    for sign, period in ((1.0, end), (-1.0, start)):
        at = period
        while to[at] >= 0:
            total += sign * contribute("fisher", prices, quantities, to[at : at + 1], np.array([at]))[0]
            at = int(to[at])
    return total


def _through_windows(
    prices: Array,
    quantities: Array | None,
    recipe: Recipe,
    movement: tuple[int, int],
    index: Array,
    years: Years | None,
) -> Array:
    links = links_for(recipe, prices, quantities, years)
    windows = windows_of(recipe, len(prices), links)
    total = np.zeros(prices.shape[1])
    start, end = movement
    while end > start:
        periods = _window_ending(windows, end)
        known = periods[np.isfinite(index[periods])]
        first = start if start >= periods[0] else int(known[0])
        if first == end:
            break
        places = np.searchsorted(periods, [first, end])
        total += _within_window(
            prices[periods],
            None if quantities is None else quantities[periods],
            recipe.method,
            int(places[0]),
            int(places[1]),
        )
        end = first
    return total


def _window_ending(windows: Windows, end: int) -> Positions:
    """Positions of the periods of the window that gave period `end` its level."""
    row = max(end + windows.before - windows.length + 1, 0)
    first = row - windows.before
    return np.arange(first + int(windows.skipped[row]), first + windows.length)


def _within_window(prices: Array, quantities: Array | None, method: str, start: int, end: int) -> Array:
    """Contributions to the movement within one window, given as a panel of its own."""
    if method.startswith("geks-"):
        return _geks(prices, quantities, method.removeprefix("geks-"), start, end)
    if method == "geary-khamis":
        assert quantities is not None
        return _geary_khamis(prices, quantities, start, end)
    return _dummies(prices, None if method == "tpd-unweighted" else quantities, start, end)


def _geks(prices: Array, quantities: Array | None, formula: str, start: int, end: int) -> Array:
    pairs = log_pair_levels(prices, quantities, formula)
    linked = np.isfinite(pairs)
    priced = np.flatnonzero(linked.diagonal())
    laplacian = np.diag(linked.sum(axis=1)) - linked.astype(np.float64)
    size = len(priced)
    if linked[np.ix_(priced, priced)].all():
        gains = np.zeros(len(prices))
        gains[end], gains[start] = 1.0 / size, -1.0 / size
    else:
        inverse = np.zeros(linked.shape)
        inverse[np.ix_(priced, priced)] = np.linalg.inv(laplacian[np.ix_(priced, priced)] + 1.0 / size)
        gains = inverse[end] - inverse[start]
    total = np.zeros(prices.shape[1])
    for period in np.flatnonzero(gains):
        others = np.flatnonzero(linked[:, period])
        parts = contribute(formula, prices, quantities, others, np.full(len(others), period))
        total += gains[period] * parts.sum(axis=0)
    return total


def _dummies(prices: Array, quantities: Array | None, start: int, end: int) -> Array:
    whole = Windows.rolling(len(prices), len(prices))
    ((levels,),) = time_product_dummy.window_levels(prices, quantities, whole)
    weights = time_product_dummy.dummy_weights(prices, quantities)
    levels = np.where(np.isfinite(levels), levels - levels[start], 0.0)[:, None]
    logs = make_fields(prices, quantities)("l")
    totals = weights.sum(axis=0)
    effects = (weights * (logs - levels)).sum(axis=0) / np.where(totals > 0, totals, 1.0)
    sold = weights[[start, end]]
    shares = sold / sold.sum(axis=1, keepdims=True)
    before, after = shares * (logs[[start, end]] - effects)
    parts: Array = after - before
    return parts


def _geary_khamis(prices: Array, quantities: Array, start: int, end: int) -> Array:
    whole = Windows.rolling(len(prices), len(prices))
    ((levels,),) = geary_khamis.window_levels(prices, quantities, whole)
    deflators = np.exp(np.where(np.isfinite(levels), levels - levels[start], 0.0))[:, None]
    field = make_fields(prices, quantities)
    sold = field("q").sum(axis=0)
    means = (field("x") / deflators).sum(axis=0) / np.where(sold > 0, sold, 1.0)
    before, after = ratio_parts(field("x")[[start, end]], means * field("q")[[start, end]])
    parts: Array = after - before
    return parts
