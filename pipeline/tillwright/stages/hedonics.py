"""Stage 5 where the plan adjusts for quality: attributes of products, and the index made with them."""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date

import polars as pl

from tillwright.errors import TooFewObservations, UnconnectedPeriods
from tillwright.kernels.attributes import Design
from tillwright.kernels.hedonic_series import Regressing, make_series
from tillwright.kernels.recipes import Recipe, Years
from tillwright.panels import Array, PanelArrays
from tillwright.plan import ITEM_FACTS, HedonicChoice
from tillwright.stages.context import Context
from tillwright.stages.regressions import list_coefficients, list_fits, make_design
from tillwright.tables import TABLES

# How the item master's JSON writes them.
TRUTHS = {"true": "1", "false": "0"}


@dataclass(frozen=True, slots=True)
class Adjustment:
    """How the elementary aggregate of one group of a panel is adjusted: windows and splices, and its N products."""

    choice: HedonicChoice
    recipe: Recipe
    design: Design

    def __str__(self) -> str:
        return f"hedonic {self.recipe}"


@dataclass(frozen=True, slots=True)
class Adjusted:
    """(T,) `index`, base 1, what was passed over, and rows of `hedonic_coefficients` and `hedonic_fit`."""

    index: Array
    problems: tuple[TooFewObservations | UnconnectedPeriods, ...]
    coefficients: pl.DataFrame
    fit: pl.DataFrame


def find_adjustments(context: Context, arrays: PanelArrays) -> list[Adjustment | None]:
    """What the plan says of each group by ea and stratum of a panel; None = it is not adjusted."""
    if not context.plan.hedonic:
        return [None] * len(arrays.starts)
    attributes = _read_attributes(context, arrays.periods[-1])
    found: list[Adjustment | None] = []
    for ea, cut in zip(arrays.keys["ea"], arrays.cuts, strict=True):
        ancestry = context.references.tree.ancestry(ea)
        choice = context.plan.hedonic_of(ancestry)
        if choice is None:
            found.append(None)
            continue
        products = arrays.products[cut].join(attributes, on=["ea", "product"], how="left", maintain_order="left")
        found.append(Adjustment(choice, context.plan.index.recipe(ancestry, choice.method), _design(products, choice)))
    return found


def adjust(
    prices: Array, quantities: Array, adjustment: Adjustment, *, periods: pl.Series, years: Years, key: tuple[str, str]
) -> Adjusted:
    """The hedonic index of one elementary aggregate and stratum, its `key`.

    With regressions by period, or a time dummy, which is regressed within each window, only the first window is made
    anew by further periods; pooled regressions revise the whole series: see `kernels.hedonic_series`. New attributes
    of a product, such as those of an item that continues another, change earlier periods too.

    Parameters
    ----------
    prices, quantities : (T, N) arrays; NaN = not sold.
    periods : their T labels; of a regression the tables name the last that it is over.
    years : (T,) link years.
    """
    choice = adjustment.choice
    regressing = Regressing(choice.regressions, choice.weighted, least=choice.least)
    made = make_series(prices, quantities, adjustment.design, adjustment.recipe, regressing, years=years)
    ends = periods[[end - 1 for _, end in made.spans]].alias("period")
    ea, stratum = (pl.lit(name).alias(column) for name, column in zip(key, ("ea", "stratum"), strict=True))
    coefficients, fit = (tell(made.regressions, ends) for tell in (list_coefficients, list_fits))
    return Adjusted(
        made.index, made.problems, coefficients.select(ea, stratum, pl.all()), fit.select(ea, stratum, pl.all())
    )


def write_diagnostics(context: Context, adjusted: Sequence[Adjusted]) -> None:
    """Write `hedonic_coefficients` and `hedonic_fit`, without rows where nothing is adjusted."""
    for name, parts in (
        ("hedonic_coefficients", [one.coefficients for one in adjusted]),
        ("hedonic_fit", [one.fit for one in adjusted]),
    ):
        frame = pl.concat(parts) if parts else pl.DataFrame(schema=TABLES[name].columns)
        context.workspace.write(name, frame.with_columns(pl.col(pl.Float64).fill_nan(None)))


def _read_attributes(context: Context, last: date) -> pl.DataFrame:
    """ea, product, every attribute that the plan names as text, and `size_amount`, of products sold until `last`.

    A product that several items make has the attributes of its latest item: that sold last, of several the one that
    came last. Its size is that of what it is priced in: of items that continue another, the first of their line.
    """
    workspace = context.workspace
    products = workspace.read("products").filter(pl.col("ea").is_not_null())
    wanted = [
        ea for ea in products["ea"].unique().sort() if context.plan.hedonic_of(context.references.tree.ancestry(ea))
    ]
    by_unit = [ea for ea in wanted if context.definition(ea).unit_pricing]
    latest = (
        products.filter(pl.col("ea").is_in(wanted))
        .join(workspace.read("items"), on=["feed", "item"])
        .filter(pl.col("first_period") <= last)
        .sort(pl.min_horizontal("last_period", pl.lit(last)), "first_period", "feed", "item")
        .unique(["ea", "product"], keep="last", maintain_order=True)
    )
    units = pl.when(pl.col("ea").is_in(by_unit)).then(1.0).otherwise("units_per_item")
    told = [json.loads(text) if text else {} for text in latest["attributes"]]
    names = dict.fromkeys(
        name for choice in context.plan.hedonic for name in choice.attributes if name not in ITEM_FACTS
    )
    return latest.select(
        "ea",
        "product",
        *ITEM_FACTS,
        "size_measure",
        pl.col("size_amount") / units,
        *(pl.Series(name, [_text(one.get(name)) for one in told], pl.String).alias(_own(name)) for name in names),
    )


def _design(products: pl.DataFrame, choice: HedonicChoice) -> Design:
    """The design of products, given as `_read_attributes` has them.

    A number that cannot be read, or that has no log, is missing, and its product is left out of regressions.
    """
    columns = [products[name if name in ITEM_FACTS else _own(name)].alias(name) for name in choice.categorical]
    columns += [_numbers(products, name).alias(name) for name in (*choice.numeric, *choice.logs)]
    attributes = pl.DataFrame(columns).with_columns(
        pl.when(pl.col(name) > 0).then(pl.col(name)).alias(name) for name in choice.logs
    )
    return make_design(attributes, choice.numeric, choice.logs, choice.categorical, missing=choice.missing)


def _own(name: str) -> str:
    """The column of an item master's attribute, which may be called like any other."""
    return f"attribute {name}"


def _text(value: object) -> str | None:
    """A value of the item master's JSON as text; None where there is nothing."""
    if value is None or isinstance(value, str):
        return (value or "").strip() or None
    return json.dumps(value)


def _numbers(products: pl.DataFrame, name: str) -> pl.Series:
    """An attribute as numbers, null where it is none; sizes in the measure that most products have."""
    if name != "size":
        return products[_own(name)].replace(TRUTHS).cast(pl.Float64, strict=False)
    measures = products["size_measure"].drop_nulls().value_counts(sort=False).sort("count", "size_measure")
    commonest = measures["size_measure"][-1] if measures.height else ""
    return products.select(pl.when(pl.col("size_measure") == commonest).then("size_amount")).to_series()
