"""Classification, survey weights, the outside series and the true price paths."""

import numpy as np
import polars as pl

from tests.sample.market import Market, log_trend
from tests.sample.timeline import MONTHS, YEARS, stream

RENTS = "04.1"
RENT_WEIGHT = 180.0
NODES = {
    "0": "All items",
    "01": "Food and non-alcoholic beverages",
    "01.1": "Food",
    "01.1.1": "Cereals and cereal products",
    "01.1.2": "Live animals, meat and other parts of slaughtered land animals",
    "01.1.3": "Fish and other seafood",
    "01.1.4": "Milk, other dairy products and eggs",
    "01.1.5": "Oils and fats",
    "01.1.6": "Fruits and nuts",
    "01.1.7": "Vegetables, tubers, plantains, cooking bananas and pulses",
    "01.1.8": "Sugar, confectionery and desserts",
    "01.1.9": "Ready-made food and other food products n.e.c.",
    "01.2": "Non-alcoholic beverages",
    "01.2.1": "Fruit and vegetable juices",
    "01.2.2": "Coffee and coffee substitutes",
    "01.2.3": "Tea, mate and other plant products for infusion",
    "01.2.5": "Water",
    "01.2.6": "Soft drinks",
    "02": "Alcoholic beverages, tobacco and narcotics",
    "02.1": "Alcoholic beverages",
    "02.1.2": "Wine",
    "02.1.3": "Beer",
    "04": "Housing, water, electricity, gas and other fuels",
    RENTS: "Actual rentals for housing",
    "05": "Furnishings, household equipment and routine household maintenance",
    "05.6": "Goods and services for routine household maintenance",
    "05.6.1": "Non-durable household goods",
    "09": "Recreation, sport and culture",
    "09.3": "Garden products and pets",
    "09.3.2": "Pets and products for pets",
    "13": "Personal care, social protection and miscellaneous goods and services",
    "13.1": "Personal care",
    "13.1.2": "Other appliances, articles and products for personal care",
}


def headings(market: Market) -> pl.DataFrame:
    """Return the classification: the standard's nodes and the elementary aggregates below them."""
    labels = NODES | {aggregate.code: aggregate.label for aggregate in market.indexed()}
    codes = sorted(labels)
    return pl.DataFrame(
        {
            "heading": codes,
            "parent": [_parent(code) for code in codes],
            "label": [labels[code] for code in codes],
        }
    )


def weights(market: Market) -> pl.DataFrame:
    """Return the survey weights of the leaves, 1000 a year."""
    leaves = [*(aggregate.code for aggregate in market.indexed()), RENTS]
    level = np.array([*(aggregate.weight for aggregate in market.indexed()), RENT_WEIGHT])
    rng = stream("weights")
    frames = []
    for year in YEARS:
        hundredths = np.rint(100_000.0 * level / level.sum()).astype(np.int64)
        hundredths[-1] += 100_000 - hundredths.sum()
        frames.append(pl.DataFrame({"year": [year] * len(leaves), "heading": leaves, "weight": hundredths / 100.0}))
        level = level * np.exp(rng.normal(0.0, 0.04, size=level.size))
    return pl.concat(frames)


def rents() -> pl.DataFrame:
    """Return the rent series from a survey, 2021 = 100, with its yearly steps in January."""
    rng = stream("rents")
    monthly = rng.uniform(0.0012, 0.003, size=len(MONTHS))
    monthly[::12] += 0.008
    index = 101.3 * np.exp(np.cumsum(monthly) - monthly[0])
    return pl.DataFrame({"heading": [RENTS] * len(MONTHS), "period": MONTHS, "index": index.round(2)})


def truth(market: Market) -> pl.DataFrame:
    """Return the true constant-quality price path of every elementary aggregate."""
    paths = [
        pl.DataFrame(
            {
                "ea": [aggregate.code] * len(MONTHS),
                "period": MONTHS,
                "index": (100.0 * np.exp(log_trend(aggregate))).round(6),
            }
        )
        for aggregate in market.indexed()
    ]
    return pl.concat(paths)


def _parent(code: str) -> str:
    if code == "0":
        return ""
    return code.rpartition(".")[0] or "0"
