"""The invented market, read from `aggregates.toml` and `wording.toml`."""

import re
import tomllib
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tests.sample.timeline import MONTHS, stream

FEEDS = ("brindlow", "kestrin", "ombray")
HERE = Path(__file__).parent
PACK = re.compile(r"(?:(?P<count>\d+)x)?(?P<amount>[\d.]+)(?P<unit>g|kg|ml|l|pc)")


@dataclass(frozen=True, slots=True)
class Pack:
    """What one unit of an item holds: `count` pieces of `amount` `unit`."""

    count: int
    amount: float
    unit: str

    @property
    def content(self) -> float:
        """Total content in g, ml or pieces."""
        return self.count * self.amount * (1000.0 if self.unit in ("kg", "l") else 1.0)

    @classmethod
    def parse(cls, text: str) -> "Pack":
        """Read `6x330ml`."""
        match = PACK.fullmatch(text)
        if match is None:
            raise ValueError(text)
        return cls(int(match["count"] or 1), float(match["amount"]), match["unit"])


@dataclass(frozen=True, slots=True)
class Aggregate:
    """One elementary aggregate; `code` is empty for goods outside the index."""

    code: str
    label: str
    rates: tuple[float, ...]
    price: tuple[float, float]
    price_season: float
    demand_season: float
    peak: int
    elasticity: float
    packs: tuple[Pack, ...]
    fat: tuple[str, ...]
    slots: dict[str, int]
    weight: float
    churn: float
    relaunch: bool
    weighed: bool
    deposit: float
    kind: dict[str, str]
    variants: tuple[dict[str, str], ...]
    category: dict[str, str]


@dataclass(frozen=True, slots=True)
class Chain:
    """One retailer."""

    feed: str
    own_label: str
    price_level: float
    outlets: dict[str, float]


@dataclass(frozen=True, slots=True)
class Market:
    """Everything invented by hand."""

    aggregates: tuple[Aggregate, ...]
    chains: tuple[Chain, ...]
    brands: tuple[str, ...]

    def indexed(self) -> tuple[Aggregate, ...]:
        """Return the elementary aggregates of the index."""
        return tuple(aggregate for aggregate in self.aggregates if aggregate.code)

    def chain(self, feed: str) -> Chain:
        """Return the chain behind a feed."""
        return next(chain for chain in self.chains if chain.feed == feed)


def read_market() -> Market:
    """Read the two market files."""
    numbers = tomllib.loads((HERE / "aggregates.toml").read_text(encoding="utf-8"))
    wording = tomllib.loads((HERE / "wording.toml").read_text(encoding="utf-8"))
    return Market(
        aggregates=tuple(
            _aggregate(block, wording["words"][block["code"] or "none"]) for block in numbers["aggregate"]
        ),
        chains=tuple(Chain(**block) for block in wording["chain"]),
        brands=tuple(wording["brands"]),
    )


def log_trend(aggregate: Aggregate) -> NDArray[np.float64]:
    """Return the log of the true price level per month, 0 in the first."""
    monthly = np.repeat(np.array(aggregate.rates) / 12.0, 12)[1:]
    shocks = stream("trend", aggregate.code).normal(0.0, 0.003, size=len(MONTHS) - 1)
    level = np.concatenate([[0.0], np.cumsum(monthly + shocks - shocks.mean())])
    phase = 2.0 * np.pi * (np.arange(len(MONTHS)) + 1 - aggregate.peak) / 12.0
    season = aggregate.price_season * np.cos(phase)
    path: NDArray[np.float64] = level + season - season[0]
    return path


def demand_season(aggregate: Aggregate) -> NDArray[np.float64]:
    """Return the seasonal factor of demand per month."""
    phase = 2.0 * np.pi * (np.arange(len(MONTHS)) + 1 - aggregate.peak) / 12.0
    factor: NDArray[np.float64] = np.exp(aggregate.demand_season * np.cos(phase))
    return factor


def _aggregate(block: dict[str, Any], words: dict[str, Any]) -> Aggregate:
    price_season, swing, peak = block["season"]
    return Aggregate(
        code=block["code"],
        label=block["label"],
        rates=tuple(block["rates"]),
        price=(block["price"][0], block["price"][1]),
        price_season=price_season,
        demand_season=swing,
        peak=peak,
        elasticity=block["elasticity"],
        packs=tuple(Pack.parse(text) for text in block["packs"]),
        fat=tuple(block.get("fat", ())),
        slots=dict(zip(FEEDS, block["slots"], strict=True)),
        weight=block["weight"],
        churn=block.get("churn", 0.36),
        relaunch=block.get("relaunch", False),
        weighed=block.get("weighed", False),
        deposit=block.get("deposit", 0.0),
        kind=_by_feed(words["kind"]),
        variants=tuple(_by_feed(text) for text in words["variants"]),
        category=_by_feed(words["category"]),
    )


def _by_feed(text: str) -> dict[str, str]:
    return dict(zip(FEEDS, text.split("|"), strict=True))
