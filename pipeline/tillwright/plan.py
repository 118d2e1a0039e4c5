"""The sections of a plan as frozen objects: everything a compile depends on.

`plan_file` reads and checks them.  Relative paths are relative to the plan's folder.
"""

from __future__ import annotations

import glob
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date
from pathlib import Path
from typing import Annotated, Any, Literal, TypeAlias

from pydantic import BaseModel, ConfigDict, Discriminator, Field, Tag

from tillwright.choices import (
    BILATERAL_FORMULAS,
    IMPUTED_METHODS,
    SCREENS,
    CompiledHedonicMethod,
    Form,
    Gate,
    ImputationRun,
    ItemCode,
    Method,
    MonthRule,
    Onto,
    PeriodKind,
    Returns,
    Screen,
    Splice,
    StratumRole,
    WeightFormula,
    WeightSource,
)
from tillwright.kernels.attributes import Missing
from tillwright.kernels.hedonic import LEAST_OBSERVATIONS, Regressions
from tillwright.kernels.imputation import Elementary
from tillwright.kernels.recipes import Recipe
from tillwright.periods import parse_period

DATE_ROLES = ("sold_at", "week", "month")
ITEM_FACTS = ("brand", "description", "size", "category")
Share = Annotated[float, Field(ge=0)]
Bounds = Annotated[tuple[Annotated[float, Field(gt=0)], Annotated[float, Field(gt=0)]], Field()]


class _Section(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid", strict=False)


class Scope(_Section):
    """[plan]: what is compiled, and in which periods."""

    title: str
    currency: str
    start: str
    period: PeriodKind = "month"
    reference: str = ""
    month_rule: MonthRule = "calendar"
    weeks: Annotated[int, Field(ge=1, le=4)] = 3

    @property
    def first_day(self) -> date:
        """First day of the first period."""
        return parse_period(self.start, self.period)


class Columns(_Section):
    """[feed.columns]: the source column that plays each role."""

    item: str
    quantity: str
    turnover: str
    sold_at: str | None = None
    week: str | None = None
    month: str | None = None
    outlet: str | None = None
    line_id: str | None = None
    region: str | None = None
    household_group: str | None = None
    description: str | None = None
    brand: str | None = None
    size: str | None = None
    category: str | None = None

    @property
    def date_role(self) -> str:
        """The one role of `DATE_ROLES` that is mapped."""
        return next(role for role in DATE_ROLES if getattr(self, role) is not None)


class RuleLimits(_Section):
    """feed.limits: bounds of the rules that have any."""

    unit_price: Bounds | None = None


class GateLimits(_Section):
    """feed.gates: the largest value that does not hold the release."""

    refused_share: Share = 0.02
    turnover_swing: Share = 0.5
    missing_outlets: Annotated[int, Field(ge=0)] = 0


class Feed(_Section):
    """[[feed]]: one retailer's stream of files, and how to read it."""

    name: Annotated[str, Field(pattern=r"^[a-z0-9][a-z0-9_-]*$")]
    files: str
    columns: Columns
    timezone: str = "UTC"
    stamped_in: str | None = None
    replaces: str = "same-name"
    announced: str | None = None
    returns: Returns = "net"
    item_code: ItemCode = "any"
    item_part: str | None = None
    turnover_less: tuple[str, ...] = ()
    encoding: Literal["utf-8", "utf-16", "latin-1"] = "utf-8"
    delimiter: Annotated[str, Field(min_length=1, max_length=1)] = ","
    decimal: Literal[".", ","] = "."
    limits: RuleLimits = RuleLimits()
    gates: GateLimits = GateLimits()


class MasterColumns(_Section):
    """[item_master.columns]."""

    item: str
    description: str | None = None
    brand: str | None = None
    size: str | None = None
    category: str | None = None


class ItemMaster(_Section):
    """[[item_master]]: what is known of a feed's items."""

    feed: str
    file: str
    columns: MasterColumns
    attributes: tuple[str, ...] = ()


class Classification(_Section):
    """[classification]: the tree of headings and where items belong in it."""

    headings: str
    assignment: str
    stratum: tuple[StratumRole, ...] = ()


class Weights(_Section):
    """[weights]: what headings weigh, year by year."""

    source: WeightSource = "file"
    file: str | None = None
    formula: WeightFormula = "lowe"
    price_update: bool = True
    link_month: Annotated[int, Field(ge=1, le=12)] = 12


class ProductOverride(_Section):
    """[[products.override]]: other choices for a heading and everything below it."""

    heading: str
    by: tuple[str, ...] | None = None
    unit_pricing: bool | None = None


@dataclass(frozen=True, slots=True)
class Definition:
    """What makes items one product: "item", or attributes of theirs; and whether sizes are units of it."""

    by: tuple[str, ...]
    unit_pricing: bool


class Products(_Section):
    """[products]: which items are one product."""

    by: Annotated[tuple[str, ...], Field(min_length=1)] = ("item",)
    unit_pricing: bool = False
    override: tuple[ProductOverride, ...] = ()
    candidates: tuple[tuple[str, ...], ...] = ()

    def definition(self, ancestry: Sequence[str]) -> Definition:
        """The definition for an elementary aggregate; the nearest override on its way up wins.

        `ancestry` lists the aggregate itself first, then its parents up to the root.
        """
        by, unit_pricing = self.by, self.unit_pricing
        for heading in reversed(ancestry):
            for override in self.override:
                if override.heading == heading:
                    by = override.by or by
                    unit_pricing = unit_pricing if override.unit_pricing is None else override.unit_pricing
        return Definition(by, unit_pricing)


class SuccessionRules(_Section):
    """[successions]: when an item that arrives is taken for the relaunch of one that leaves."""

    accept: Annotated[float, Field(gt=0, le=1)] = 0.9
    ask: Annotated[float, Field(gt=0, le=1)] = 0.6
    lead: Annotated[float, Field(ge=0, le=1)] = 0.2
    gap: Annotated[int, Field(ge=0)] = 3
    overlap: Annotated[int, Field(ge=0)] = 1


class Clearance(_Section):
    """screening.clearance: how far price and quantity fall where a product is sold off before it goes."""

    price_fall: Annotated[float, Field(gt=0)] = 0.7
    quantity_fall: Annotated[float, Field(gt=0)] = 0.5
    ahead: Annotated[int, Field(ge=1)] = 2


class SmallSales(_Section):
    """screening.small: the greater the factor, the fewer products sell too little to be used."""

    factor: Annotated[float, Field(gt=0, allow_inf_nan=False)] = 1.25


class Imputation(_Section):
    """screening.imputation: from which price, and for how many periods in a row, missing ones are moved on."""

    run: ImputationRun = "short"
    limit: Annotated[int, Field(ge=1)] = 3


def _off_or_set(value: Any) -> str:
    """The member of a union of "off" and a table that a value is held against; messages leave it out."""
    return "<off>" if isinstance(value, str) else "<set>"


_Off: TypeAlias = Annotated[Literal["off"], Tag("<off>")]
_Either = Discriminator(_off_or_set)


class Screening(_Section):
    """[screening]: which unit values are set aside, and which missing prices are filled in."""

    extreme: Bounds | Literal["off"] = (0.25, 4.0)
    clearance: Annotated[_Off | Annotated[Clearance, Tag("<set>")], _Either] = "off"
    small: Annotated[_Off | Annotated[SmallSales, Tag("<set>")], _Either] = "off"
    imputation: Annotated[_Off | Annotated[Imputation, Tag("<set>")], _Either] = "off"

    @property
    def on(self) -> tuple[Screen, ...]:
        """The screens that are on, in order of precedence."""
        return tuple(screen for screen in SCREENS if getattr(self, screen) != "off")

    def without(self, screen: Screen) -> Screening:
        """The same with one screen off."""
        return self.model_copy(update={screen: "off"})


WindowLength: TypeAlias = Annotated[int, Field(ge=2)] | Literal["expanding"]


class IndexOverride(_Section):
    """[[index.override]]: other choices for a heading and everything below it."""

    heading: str
    method: Method | None = None
    form: Form | None = None
    window: WindowLength | None = None
    splice: Splice | None = None
    onto: Onto | None = None


class IndexChoice(_Section):
    """[index]: how elementary aggregates are compiled."""

    method: Method = "geks-tornqvist"
    form: Form = "chained"
    window: WindowLength = 25
    splice: Splice = "mean"
    onto: Onto = "published"
    override: tuple[IndexOverride, ...] = ()

    def recipe(self, ancestry: list[str], method: str | None = None) -> Recipe:
        """The recipe for an elementary aggregate; the nearest override on its way up wins.

        `ancestry` lists the aggregate itself first, then its parents up to the root. A `method` takes the place of
        the plan's, whose windows and splices it keeps.
        """
        nearer = [
            override for heading in reversed(ancestry) for override in self.override if override.heading == heading
        ]
        return self.overridden(*nearer, method=method)

    def overridden(self, *overrides: IndexOverride, method: str | None = None) -> Recipe:
        """The recipe under overrides, the last of which wins; `method` takes the place of theirs."""
        choice: dict[str, Any] = {name: getattr(self, name) for name in ("method", "form", "window", "splice", "onto")}
        for override in overrides:
            choice |= override.model_dump(exclude={"heading"}, exclude_none=True)
        choice["method"] = method or choice["method"]
        if choice["method"] in BILATERAL_FORMULAS:
            return Recipe(choice["method"], form=choice["form"])
        return Recipe(**choice)


class HedonicChoice(_Section):
    """[[hedonic]]: elementary aggregates that are adjusted for quality, by the attributes of their products."""

    heading: str
    method: CompiledHedonicMethod = "geks-imputation"
    numeric: tuple[str, ...] = ()
    logs: tuple[str, ...] = ()
    categorical: tuple[str, ...] = ()
    regressions: Regressions = "period"
    weighted: bool = True
    missing: Missing = "category"
    least: Annotated[int, Field(ge=1)] = LEAST_OBSERVATIONS

    @property
    def attributes(self) -> tuple[str, ...]:
        """The names of all attributes, in the order of the design."""
        return (*self.numeric, *self.logs, *self.categorical)


class OutsideSeries(_Section):
    """[[outside_series]]: indexes collected elsewhere, aggregated alongside."""

    file: str


class Release(_Section):
    """[release]: how figures are shown."""

    rounding: Annotated[int, Field(ge=0, le=6)] = 1


class Answer(_Section):
    """[[answer]]: a person's answer to a breached gate."""

    gate: Gate
    on: str
    by: Annotated[str, Field(min_length=1)]
    why: Annotated[str, Field(min_length=1)]
    feed: str | None = None


class Plan(_Section):
    """A whole plan, read from the file `source`."""

    plan: Scope
    feed: Annotated[tuple[Feed, ...], Field(min_length=1)]
    classification: Classification
    weights: Weights = Weights()
    products: Products = Products()
    successions: SuccessionRules | None = None
    screening: Screening = Screening()
    index: IndexChoice = IndexChoice()
    hedonic: tuple[HedonicChoice, ...] = ()
    release: Release = Release()
    item_master: tuple[ItemMaster, ...] = ()
    outside_series: tuple[OutsideSeries, ...] = ()
    answer: tuple[Answer, ...] = ()
    source: Annotated[Path, Field(exclude=True)] = Path("plan.toml")

    @property
    def folder(self) -> Path:
        """The folder that relative paths are relative to."""
        return self.source.parent

    def hedonic_of(self, ancestry: Sequence[str]) -> HedonicChoice | None:
        """How an elementary aggregate is adjusted for quality, if it is; the nearest heading on its way up wins."""
        return next((choice for heading in ancestry for choice in self.hedonic if choice.heading == heading), None)

    def elementary_formula(self, ancestry: Sequence[str]) -> Elementary | None:
        """The formula of an elementary aggregate that prices can be imputed for, None where it has another method."""
        if self.hedonic_of(ancestry) is not None:
            return None
        method = self.index.recipe(list(ancestry)).method
        return next((formula for formula in IMPUTED_METHODS if formula == method), None)

    def has(self, *sections: str) -> bool:
        """Whether these sections are usable; one that `examine_plan` found wrong is not."""
        return all(getattr(self, section) is not None for section in sections)

    def resolve(self, relative: str) -> Path:
        """A path of the plan as a path of the file system."""
        return self.folder / relative

    def delivery_files(self, feed: Feed) -> list[Path]:
        """Files of a feed that exist now, sorted by path."""
        found = glob.glob(str(self.resolve(feed.files)), recursive=True)  # noqa: PTH207 - may be absolute
        return sorted(path for path in map(Path, found) if path.is_file())
