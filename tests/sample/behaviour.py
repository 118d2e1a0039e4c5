"""Prices and expected demand of a chain's items, week by week."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tests.sample.assortment import LAST_WEEK, WEEK_MONTH, Item
from tests.sample.market import demand_season, log_trend
from tests.sample.timeline import MONTHS, stream

WEEKS = LAST_WEEK + 1
REPRICING = 0.6
NOISE = 0.012
PERSISTENCE = 0.6
GOLDEN = 0.5 * (5**0.5 - 1)
PROMOTED = 0.4
ROTATION = 24
DIP = (0.55, 0.7, 0.85)
RAMP = (0.4, 0.6, 0.8)

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Behaviour:
    """What shoppers of one chain met: rows items, columns months or weeks."""

    items: tuple[Item, ...]
    regular: Floats  # (item, month) shelf price
    factor: Floats  # (item, week) promotion and clearance factor on it
    demand: Floats  # (item, week) expected demand, popularity 1 in an ordinary week
    promotions: int


def behaviour(items: tuple[Item, ...]) -> Behaviour:
    """Return prices and expected demand of a chain's items."""
    regular = np.empty((len(items), len(MONTHS)))
    factor = np.ones((len(items), WEEKS))
    demand = np.zeros((len(items), WEEKS))
    promotions = 0
    for row, item in enumerate(items):
        rng = stream("behaviour", item.feed, item.code)
        trend = log_trend(item.aggregate)
        regular[row] = _regular(item, trend, rng)
        lift = np.ones(WEEKS)
        promotions += _promote(item, row * GOLDEN % 1.0, factor[row], lift, rng)
        relative = regular[row] / (item.base * np.exp(trend))
        response = (relative[WEEK_MONTH] * factor[row]) ** -item.aggregate.elasticity
        _clear(item, factor[row], lift, rng)
        season = demand_season(item.aggregate)[WEEK_MONTH]
        chance = np.exp(rng.normal(0.0, 0.12, size=WEEKS))
        demand[row] = item.popularity * response * lift * season * chance * _shelf_life(item)
    return Behaviour(items, regular, factor, demand, promotions)


def _regular(item: Item, trend: Floats, rng: np.random.Generator) -> Floats:
    """Return the shelf price per month: the trend, followed at irregular repricings, plus noise."""
    noise = _noise(0.0 if item.predecessor else float(rng.normal(0.0, NOISE)), rng)
    first = int(WEEK_MONTH[item.first_week])
    if item.predecessor:
        noise = noise - noise[first]
    frequency = 1.0 if item.aggregate.price_season else REPRICING
    reprices = rng.random(len(MONTHS)) < frequency
    reprices[[0, first]] = True
    prices = item.base * np.exp(trend + noise)
    if item.held_from >= 0:
        prices[item.held_from :] = item.base * np.exp(trend[item.held_from])
        reprices[item.held_from :] = True
    latest = np.maximum.accumulate(np.where(reprices, np.arange(len(MONTHS)), 0))
    path: Floats = prices[latest]
    return path


def _noise(start: float, rng: np.random.Generator) -> Floats:
    shocks = rng.normal(0.0, NOISE * np.sqrt(1.0 - PERSISTENCE**2), size=len(MONTHS))
    path = np.empty(len(MONTHS))
    level = start
    for month, shock in enumerate(shocks):
        path[month] = level
        level = PERSISTENCE * level + shock
    return path


def _promote(item: Item, turn: float, factor: Floats, lift: Floats, rng: np.random.Generator) -> int:
    """Write promotions into `factor` and the dips after them into `lift`; return how many.

    `turn` in [0, 1) is the item's place in the chain's rotation, so that about as many run in any week.
    """
    if rng.random() > PROMOTED:
        return 0
    count = 0
    earliest = item.first_week + 4 if item.first_week else 0
    latest = item.last_week - 8 if item.ending else WEEKS
    for planned in range(round(turn * ROTATION), latest - 1, ROTATION):
        week = planned + int(rng.integers(-1, 2))
        length = int(rng.integers(2, 4))
        price = 1.0 - rng.uniform(0.2, 0.4)
        if week < earliest:
            continue
        factor[week : week + length] = price
        after = lift[week + length : week + length + len(DIP)]
        after[:] = DIP[: after.size]
        count += 1
    return count


def _clear(item: Item, factor: Floats, lift: Floats, rng: np.random.Generator) -> None:
    """Write the clearance before an exit: price and quantity fall together."""
    if item.ending != "clearance":
        return
    length = int(rng.integers(2, 5))
    weeks = slice(item.last_week - length + 1, item.last_week + 1)
    factor[weeks] = rng.uniform(0.5, 0.65)
    lift[weeks] = 0.3


def _shelf_life(item: Item) -> Floats:
    present = np.zeros(WEEKS)
    present[item.first_week : item.last_week + 1] = 1.0
    if item.first_week and not item.predecessor:
        present[item.first_week : item.first_week + len(RAMP)] = RAMP
    return present
