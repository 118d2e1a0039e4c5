"""From what a call asks for to recipes: every combination that makes a difference, once."""

from __future__ import annotations

import itertools
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from numbers import Integral
from typing import Any

import numpy as np
import polars as pl

from tillwright.api.frames import check_choice, check_number, position_of
from tillwright.choices import (
    BASE_WEIGHTED_FORMULAS,
    BILATERAL_FORMULAS,
    FORMS,
    ONTO,
    SPLICES,
    Form,
    Onto,
    Splice,
    Window,
)
from tillwright.errors import CallError
from tillwright.kernels.recipes import Recipe, Years
from tillwright.periods import link_years

FORMULAS = (*BILATERAL_FORMULAS, *BASE_WEIGHTED_FORMULAS)
SETTINGS = ("method", "form", "window", "splice", "onto")
WINDOW_WORDS = ("all", "expanding")
OneOrMore = Sequence[Any] | Any


@dataclass(frozen=True, slots=True)
class Asked:
    """The recipes of a call, and which of their settings its result tells apart by a column."""

    recipes: list[Recipe]
    shown: list[str]

    def describe(self) -> pl.DataFrame:
        """One row per recipe with the settings shown, as text; null where one does not apply."""
        rows = [_settings(recipe) for recipe in self.recipes]
        return pl.DataFrame({name: pl.Series([row[name] for row in rows], dtype=pl.String) for name in self.shown})


def ask(
    methods: OneOrMore,
    allowed: Sequence[str],
    *,
    form: Form | Sequence[Form] = "chained",
    window: Window | Sequence[Window | None] | None = None,
    splice: Splice | Sequence[Splice] = "mean",
    onto: Onto | Sequence[Onto] = "published",
    name: str = "method",
) -> Asked:
    """Recipes of every combination of the settings given, each that makes a difference once.

    Raises
    ------
    CallError : a value that is not allowed, or an empty list.
    """
    given: dict[str, Any] = {name: methods, "form": form, "window": window, "splice": splice, "onto": onto}
    lists: dict[str, list[Any]] = {key: list(value) if _is_list(value) else [value] for key, value in given.items()}
    for key, values in lists.items():
        if not values:
            raise CallError(f"{key} is an empty list; name at least one.")
    for key, choices in ((name, allowed), ("form", FORMS), ("splice", SPLICES), ("onto", ONTO)):
        for value in lists[key]:
            check_choice(key, value, choices)
    for value in lists["window"]:
        _check_window(value)
    lists["window"] = [None if value == "all" else value for value in lists["window"]]
    if "expanding" in lists["window"] and "link-month" not in lists["splice"]:
        raise CallError(f"window 'expanding' takes the splice 'link-month'; splice is '{lists['splice'][0]}'.")
    recipes = (_recipe(*values) for values in itertools.product(*lists.values()))
    return Asked(
        list(dict.fromkeys(recipe for recipe in recipes if recipe is not None)),
        [shown for shown, value in zip(SETTINGS, given.values(), strict=True) if _is_list(value)],
    )


def place_in_time(asked: Asked, periods: pl.Series, weight_period: OneOrMore | None, link_month: int) -> Asked:
    """The same with the positions of the weight periods filled in.

    Raises
    ------
    CallError : a formula that needs weights of a period has none given, or one that the panel lacks.
    """
    weighted = [recipe.method for recipe in asked.recipes if recipe.method in BASE_WEIGHTED_FORMULAS]
    check_number("link_month", link_month, 1, 12)
    if not weighted:
        return asked
    if weight_period is None or (_is_list(weight_period) and not len(weight_period)):
        raise CallError(
            f"'{weighted[0]}' takes its weights from a period of its own: name it with weight_period, or several "
            "whose sales are added up."
        )
    given = weight_period if _is_list(weight_period) else [weight_period]
    positions = [position_of("weight_period", label, periods) for label in given]
    return Asked([_weighted(recipe, tuple(sorted(set(positions)))) for recipe in asked.recipes], asked.shown)


def years_of(asked: Asked, periods: pl.Series, link_month: int) -> Years | None:
    """(T,) link years, if any of the recipes needs them.

    Raises
    ------
    CallError : the labels of the periods do not tell their month.
    """
    if not any(recipe.needs_years for recipe in asked.recipes):
        return None
    years = link_years(periods.to_list(), link_month)
    if years is None:
        raise CallError(
            f"splice 'link-month' needs periods that tell their month: dates, 2024-03, 2024-Q1, 2024-W07 or 202403. "
            f"Column '{periods.name}' holds '{periods[0]}'."
        )
    return np.array(years, dtype=np.int64)


def _recipe(method: str, form: Form, window: Any, splice: Splice, onto: Onto) -> Recipe | None:
    """The recipe with what does not apply at its default; None where the settings exclude each other."""
    if method in FORMULAS:
        return Recipe(method, form=form)
    if method == "similarity":
        return Recipe(method, window=None if window in {None, "expanding"} else int(window))
    if window is None:
        return Recipe(method)
    if window == "expanding":
        return Recipe(method, window=window, splice=splice) if splice == "link-month" else None
    return Recipe(method, window=int(window), splice=splice, onto="published" if splice == "link-month" else onto)


def _settings(recipe: Recipe) -> dict[str, Any]:
    """The settings of a recipe, None where one does not apply."""
    linked = recipe.is_spliced and recipe.splice != "link-month"
    return {
        "method": recipe.method,
        "form": recipe.form if recipe.is_bilateral else None,
        "window": None if recipe.is_bilateral else str(recipe.window or "all"),
        "splice": recipe.splice if recipe.is_spliced else None,
        "onto": recipe.onto if linked else None,
    }


def _weighted(recipe: Recipe, positions: tuple[int, ...]) -> Recipe:
    if recipe.method not in BASE_WEIGHTED_FORMULAS:
        return recipe
    return Recipe(recipe.method, form=recipe.form, weight_periods=positions)


def _check_window(window: Any) -> None:
    if window is None or (isinstance(window, str) and window in WINDOW_WORDS):
        return
    whole = isinstance(window, Integral) and not isinstance(window, bool)
    if not whole or int(window) < 2:
        raise CallError(
            f"window is {window}; allowed: a number of periods, at least 2, 'expanding', or 'all' for one over all."
        )


def _is_list(value: object) -> bool:
    return not isinstance(value, str) and isinstance(value, Iterable)
