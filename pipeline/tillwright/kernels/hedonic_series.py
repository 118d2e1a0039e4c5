"""Hedonic indexes as series: over all periods, or over windows that are spliced."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from tillwright.errors import TooFewObservations, UnconnectedPeriods
from tillwright.kernels.attributes import Design
from tillwright.kernels.geks import window_levels
from tillwright.kernels.hedonic import LEAST_OBSERVATIONS, Errors, Hedonic, Regressions, impute_pairs, time_dummy
from tillwright.kernels.pairs import Array
from tillwright.kernels.recipes import Recipe, Years, join_windows, links_for, priced_periods, windows_of

TIME_DUMMY, IMPUTATION, GEKS_IMPUTATION = "time-dummy", "imputation", "geks-imputation"


@dataclass(frozen=True, slots=True)
class Regressing:
    """How log prices are regressed on attributes; see `kernels.hedonic`."""

    regressions: Regressions = "period"
    weighted: bool = True
    errors: Errors = "classical"
    least: int = LEAST_OBSERVATIONS


@dataclass(frozen=True, slots=True)
class HedonicSeries:
    """(T,) `index`, the first priced period = 1, and the regressions behind it.

    `spans` are the periods that each regression is over, from its first to before its last number. `problems` are
    those of periods and windows that were passed over.
    """

    index: Array
    regressions: tuple[Hedonic, ...]
    spans: tuple[tuple[int, int], ...]
    problems: tuple[TooFewObservations | UnconnectedPeriods, ...]


def make_series(
    prices: Array,
    quantities: Array | None,
    design: Design,
    recipe: Recipe,
    regressing: Regressing,
    *,
    years: Years | None = None,
) -> HedonicSeries:
    """Hedonic index over windows that are spliced.

    Parameters
    ----------
    prices, quantities : (T, N) arrays; NaN = not sold. Quantities may be None for an unweighted time dummy.
    design : attributes of the N products.
    recipe : its method is "time-dummy": a regression over each window, of which the index is read off; or
        "geks-imputation": double-imputation Törnqvist indexes between all periods of a window, made transitive;
        or "imputation", of the recipe's form and without windows.
    regressing : with regressions by period, imputed prices of a period rest on that period alone, so that
        only the first window is ever made anew, as long as the attributes stay. A pooled one is over all T periods:
        each further period changes all coefficients and so revises the whole series. A time dummy is regressed within
        its window, and what has been spliced stands.
    years : (T,) link years, for the splice "link-month".

    Returns
    -------
    A period with too few prices for a regression of its own has no level, as if nothing had been sold in it; a window
    whose regression has too few, or whose periods share nothing to compare, is passed over.

    Raises
    ------
    CallError : windows that do not reach their link month.

    Reference: `kernels.hedonic`, `kernels.geks`, `kernels.splicing`; rolling time dummies, Shimizu, Takatsuji, Ono &
    Nishimura (2010); Eurostat (2013), Handbook on Residential Property Prices Indices, ch. 5. From memory.
    """
    if recipe.method == TIME_DUMMY:
        return _dummies(prices, quantities, design, recipe, regressing, years)
    assert quantities is not None
    thin: list[TooFewObservations] = []
    try:
        made = impute_pairs(
            prices,
            quantities,
            design.columns,
            design.names,
            regressions=regressing.regressions,
            weighted=regressing.weighted,
            errors=regressing.errors,
            least=regressing.least,
            thin=thin,
        )
    except TooFewObservations as problem:
        return HedonicSeries(np.full(len(prices), np.nan), (), (), (problem,))
    whole = (0, len(prices))
    pooled = regressing.regressions == "pooled"
    spans = (whole,) if pooled else tuple((int(period), int(period) + 1) for period in made.periods)
    apart: list[UnconnectedPeriods] = []
    if recipe.method == IMPUTATION:
        index = np.exp(_compare(made.log_pairs, recipe.form))
    else:
        links = links_for(recipe, prices, quantities, years)
        windows = windows_of(recipe, len(prices), links)
        index = join_windows(window_levels(made.log_pairs, windows, apart=apart), windows, recipe, links)
    return HedonicSeries(index, made.regressions, spans, (*thin, *apart))


def _dummies(
    prices: Array,
    quantities: Array | None,
    design: Design,
    recipe: Recipe,
    regressing: Regressing,
    years: Years | None,
) -> HedonicSeries:
    links = links_for(recipe, prices, quantities, years)
    windows = windows_of(recipe, len(prices), links)
    weighing = quantities if regressing.weighted else None
    levels = np.full((len(windows.skipped), windows.length), np.nan)
    fits, spans, thin = [], [], []
    for row, skipped in enumerate(windows.skipped):
        start, end = row - windows.before + int(skipped), row - windows.before + windows.length
        if end - start == 1 < len(prices):
            levels[row, skipped:] = np.where(priced_periods(prices, quantities)[start:end], 0.0, np.nan)
            continue
        try:
            fit = time_dummy(
                prices[start:end],
                None if weighing is None else weighing[start:end],
                design.columns,
                design.names,
                errors=regressing.errors,
                least=regressing.least,
            )
        except TooFewObservations as problem:
            thin.append(problem)
            continue
        levels[row, skipped:] = np.log(fit.index)
        fits.append(fit)
        spans.append((start, end))
    return HedonicSeries(join_windows(levels, windows, recipe, links), tuple(fits), tuple(spans), tuple(thin))


def _compare(log_pairs: Array, form: str) -> Array:
    """(T,) log levels by comparison with the period before, or with the first."""
    at = np.flatnonzero(np.isfinite(log_pairs.diagonal()))
    logs = np.full(len(log_pairs), np.nan)
    if form == "direct":
        logs[at] = log_pairs[at[:1], at]
    else:
        logs[at[:1]] = 0.0
        logs[at[1:]] = np.cumsum(log_pairs[at[:-1], at[1:]])
    return logs
