"""Prices and expected sales of every item, month by month, about a trend that is known.

Rows are items, columns months; `shelf.BEFORE` months run before the first that is compiled.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tests.planted.shelf import AFTER, BEFORE, LEFT_OVER, MONTHS, WHOLE, Item

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]

# A price stands off the trend by 1.2 % (standard deviation) and moves back by four tenths a month, as in tests/sample.
NOISE, PERSISTENCE = 0.012, 0.6
# Twelve items of an aggregate's 150 or so are promoted in a month, best sellers and slow ones alike, as the places in a
# chain's leaflet are planned, and not again within four months: for one or two of a month's 4.35 weeks at 20 to 35 %
# off. They sell two to four times as much in them; shoppers who stocked up buy 15 % less in the month after. None is
# promoted in its first two months nor in its last two: were it fewer months at one end than at the other, items would
# leave dearer than they came, on average, and matched prices would rise by more than the trend.
LEAFLET, REST = 12, 4
WEEKS, DISCOUNT, LIFT, AFTERWARDS = 4.35, (0.2, 0.35), (2.0, 4.0), 0.85
# Shoppers buy 1.5 % more of an item that costs 1 % less: between 1 and 3 in most studies of groceries.
ELASTICITY = 1.5
# Sales of a month vary by 10 % beyond the chance of single purchases.
CHANCE = 0.1
# A chain of four outlets sells some hundred packs a month of the middle item.
USUAL_SALES = 100.0


@dataclass(frozen=True, slots=True)
class Sold:
    """The trend and what follows it, of one aggregate.

    trend : (T,) log of the price level. regular : (N, T) log price per unit of content without promotions and
    clearance. prices : (N, T) average price of a pack in the month. packs : (N, T) expected sales, 0 = absent.
    """

    trend: Floats
    regular: Floats
    prices: Floats
    packs: Floats


def sell(rng: np.random.Generator, items: list[Item], trend: Floats) -> Sold:
    """What one elementary aggregate's items cost and sell."""
    present = _present(items)
    regular = _regular(items, trend, present, _noise(rng, items))
    base = np.array([item.base for item in items])[:, None]
    off_trend = regular - base - trend
    factor, lift = _promote(rng, items)
    _shorten_months(rng, items, lift)
    _clear(items, factor, lift)
    popularity = np.array([item.popularity for item in items])[:, None]
    chance = np.exp(rng.normal(0.0, CHANCE, lift.shape))
    packs = USUAL_SALES * popularity * np.exp(-ELASTICITY * off_trend) * lift * chance * present
    content = np.array([item.pack for item in items])[:, None]
    # Prices end in whole cents; a month's promotion makes an average of two of them.
    prices = np.round(content * np.exp(regular), 2) * factor
    return Sold(trend, regular, prices, packs)


def _present(items: list[Item]) -> Flags:
    month = np.arange(WHOLE) - BEFORE
    first = np.array([item.first for item in items])[:, None]
    last = np.array([item.last for item in items])[:, None]
    flags: Flags = (first <= month) & (month <= last)
    return flags


def _noise(rng: np.random.Generator, items: list[Item]) -> Floats:
    """(N, T) each line's distance from the trend, at rest from the start; a relaunch takes over its predecessor's."""
    lines = 1 + max(item.line for item in items)
    path = np.empty((lines, WHOLE))
    level = rng.normal(0.0, NOISE, lines)
    for month in range(WHOLE):
        path[:, month] = level
        level = PERSISTENCE * level + rng.normal(0.0, NOISE * np.sqrt(1.0 - PERSISTENCE**2), lines)
    return path[[item.line for item in items]]


def _regular(items: list[Item], trend: Floats, present: Flags, noise: Floats) -> Floats:
    """(N, T) log regular price per unit of content.

    Items move with the trend, but for those that will come back in a smaller pack: they hold their price from
    `held_from` on, and the smaller pack stands on the trend again, at about the price of the old one. The prices of
    the others are set so that the shelf as a whole costs what the trend says: the mean distance from the trend,
    weighted by usual turnover, is 0 in every month. So the trend is the price level of these very items, not only of
    the many that they might have been drawn from.
    """
    base = np.array([item.base for item in items])
    usual_turnover = np.array([item.popularity * item.pack * np.exp(item.base) for item in items])
    held_from = np.array([WHOLE if item.held_from is None else max(item.held_from + BEFORE, 0) for item in items])
    distance = np.zeros_like(noise)
    for month in range(WHOLE):
        held = held_from < month
        if month:
            distance[held, month] = distance[held, month - 1] - trend[month] + trend[month - 1]
        weight = present[:, month] * usual_turnover
        sum_held, sum_free = weight[held] @ distance[held, month], weight[~held] @ noise[~held, month]
        distance[~held, month] = noise[~held, month] - (sum_held + sum_free) / weight[~held].sum()
    return base[:, None] + trend + distance


def _promote(rng: np.random.Generator, items: list[Item]) -> tuple[Floats, Floats]:
    """(N, T) factors of promotions on the month's unit value and on its sales."""
    factor, lift = np.ones((len(items), WHOLE)), np.ones((len(items), WHOLE))
    settled = np.array([item.first + BEFORE + 2 for item in items])
    leaving = np.array([item.last + BEFORE - 1 for item in items])
    size = np.array([item.popularity * item.pack * np.exp(item.base) for item in items])
    free_from = np.zeros(len(items), dtype=int)
    for month in range(WHOLE - 1):
        fit = np.flatnonzero((settled <= month) & (month < leaving) & (free_from <= month))
        for some in np.array_split(fit[np.argsort(size[fit])], LEAFLET):
            if len(some):
                place = int(rng.choice(some))
                share = int(rng.integers(1, 3)) / WEEKS
                more, less = float(rng.uniform(*LIFT)), 1.0 - float(rng.uniform(*DISCOUNT))
                sales = 1.0 - share + share * more
                lift[place, month] *= sales
                factor[place, month] = (1.0 - share + share * more * less) / sales
                lift[place, month + 1] *= AFTERWARDS
                free_from[place] = month + 1 + REST
    return factor, lift


def _shorten_months(rng: np.random.Generator, items: list[Item], lift: Floats) -> None:
    """Items come and go on any day: the first and last months are cut short."""
    for place, item in enumerate(items):
        for month in (item.first, item.last):
            if -BEFORE <= month < MONTHS + AFTER:
                lift[place, month + BEFORE] *= rng.uniform(0.2, 1.0)


def _clear(items: list[Item], factor: Floats, lift: Floats) -> None:
    """What is left of an item is sold off in its last month or two, which are whole ones."""
    for place, item in enumerate(items):
        for step in range(item.cleared):
            month = item.last + BEFORE - item.cleared + 1 + step
            if item.first + BEFORE + 1 < month < WHOLE:
                factor[place, month] = item.clearance_price
                lift[place, month] = item.clearance_quantity * LEFT_OVER**step
