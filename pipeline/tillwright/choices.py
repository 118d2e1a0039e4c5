"""The named choices of plans, commands and functions, each in one place."""

from __future__ import annotations

from typing import Literal, TypeAlias, get_args

from tillwright.kernels.attributes import Missing
from tillwright.kernels.hedonic import Errors, Regressions
from tillwright.kernels.imputation import Elementary, Run

PeriodKind: TypeAlias = Literal["month", "week", "quarter"]
MonthRule: TypeAlias = Literal["calendar", "whole-weeks", "first-weeks"]
Returns: TypeAlias = Literal["net", "refuse"]
ItemCode: TypeAlias = Literal["any", "gtin"]
StratumRole: TypeAlias = Literal["feed", "region", "outlet", "household_group"]
Bilateral: TypeAlias = Literal[
    "jevons",
    "dutot",
    "carli",
    "harmonic",
    "cswd",
    "laspeyres",
    "paasche",
    "fisher",
    "tornqvist",
    "walsh",
    "marshall-edgeworth",
    "geometric-laspeyres",
    "geometric-paasche",
    "palgrave",
    "sato-vartia",
]
BaseWeighted: TypeAlias = Literal["lowe", "young", "geometric-young"]
Geks: TypeAlias = Literal["geks-jevons", "geks-fisher", "geks-tornqvist", "geks-walsh"]
Multilateral: TypeAlias = Geks | Literal["tpd", "tpd-unweighted", "geary-khamis", "similarity"]
Method: TypeAlias = Bilateral | Multilateral
Form: TypeAlias = Literal["chained", "direct"]
Splice: TypeAlias = Literal["movement", "window", "half", "mean", "link-month"]
Window: TypeAlias = int | Literal["expanding", "all"]
Onto: TypeAlias = Literal["published", "recalculated"]
Unconnected: TypeAlias = Literal["refuse", "blank"]
HedonicMethod: TypeAlias = Literal["time-dummy", "imputation", "geks-imputation"]
CompiledHedonicMethod: TypeAlias = Literal["time-dummy", "geks-imputation"]
Thin: TypeAlias = Literal["refuse", "blank"]
ImputationRun: TypeAlias = Run
Screen: TypeAlias = Literal["extreme", "clearance", "small", "imputation"]
WeightSource: TypeAlias = Literal["file", "turnover"]
WeightFormula: TypeAlias = Literal["lowe", "young"]
Gate: TypeAlias = Literal[
    "refused-share", "turnover-swing", "missing-outlets", "overlap", "replacement", "index-failed"
]

BILATERAL_FORMULAS: tuple[Bilateral, ...] = get_args(Bilateral)
GEKS_METHODS: tuple[Geks, ...] = get_args(Geks)
BASE_WEIGHTED_FORMULAS: tuple[BaseWeighted, ...] = get_args(BaseWeighted)
MULTILATERAL_METHODS: tuple[Multilateral, ...] = (
    *GEKS_METHODS,
    "tpd",
    "tpd-unweighted",
    "geary-khamis",
    "similarity",
)
PLACE_METHODS: tuple[Multilateral, ...] = (*GEKS_METHODS, "tpd", "tpd-unweighted", "geary-khamis")
METHODS: tuple[Method | BaseWeighted, ...] = (*BILATERAL_FORMULAS, *BASE_WEIGHTED_FORMULAS, *MULTILATERAL_METHODS)
FORMS: tuple[Form, ...] = get_args(Form)
SPLICES: tuple[Splice, ...] = get_args(Splice)
ONTO: tuple[Onto, ...] = get_args(Onto)
UNCONNECTED: tuple[Unconnected, ...] = get_args(Unconnected)
HEDONIC_METHODS: tuple[HedonicMethod, ...] = get_args(HedonicMethod)
REGRESSIONS: tuple[Regressions, ...] = get_args(Regressions)
COEFFICIENT_ERRORS: tuple[Errors, ...] = get_args(Errors)
MISSING: tuple[Missing, ...] = get_args(Missing)
THIN: tuple[Thin, ...] = get_args(Thin)
IMPUTED_METHODS: tuple[Elementary, ...] = get_args(Elementary)

# The order is that of precedence: what one screen sets aside, the next does not see.
SCREENS: tuple[Screen, ...] = get_args(Screen)
NO_NET_SALES = "no-net-sales"
SCREEN_REASONS: dict[Screen, str] = {
    "extreme": "extreme-relative",
    "clearance": "clearance",
    "small": "small-sales",
    "imputation": "class-mean",
}

# The order is that of precedence: a refused line carries the first rule it breaks.
REFUSAL_RULES: tuple[str, ...] = (
    "broken-row",
    "missing-key",
    "unreadable-date",
    "unreadable-number",
    "non-finite",
    "quantity-not-positive",
    "turnover-not-positive",
    "unit-price-limits",
    "outside-announced-period",
    "malformed-item-code",
    "duplicate-line",
)
