"""Any methods by their names: indexes out of (T, N) panels, many at once where asked."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from typing import Literal, TypeAlias

import numpy as np
from numpy.typing import NDArray

from tillwright.errors import CallError, UnconnectedPeriods
from tillwright.kernels import geary_khamis, geks, similarity, time_product_dummy
from tillwright.kernels.bilateral import logs_of_pairs, series_of_segments
from tillwright.kernels.formulas import BASE_WEIGHTED, BILATERAL, PRICES_ONLY, SATO_VARTIA, wanted_pairs
from tillwright.kernels.pairs import Array, Pair, PairSum, Positions, sum_all_pairs
from tillwright.kernels.splicing import splice
from tillwright.kernels.windows import Windows

Years: TypeAlias = NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Recipe:
    """What an index is made by; fields that a method does not use are ignored.

    `window` counts periods, None = one window over all of them, "expanding" = from the last link month
    on. `weight_periods` are the positions of the periods that give formulas with weights of their own
    those weights.
    """

    method: str
    form: Literal["chained", "direct"] = "chained"
    window: int | Literal["expanding"] | None = None
    splice: Literal["movement", "window", "half", "mean", "link-month"] = "mean"
    onto: Literal["published", "recalculated"] = "published"
    weight_periods: tuple[int, ...] = ()

    @property
    def needs_quantities(self) -> bool:
        """Whether the method weighs products."""
        return self.method.removeprefix("geks-") not in PRICES_ONLY | {"tpd-unweighted"}

    @property
    def is_bilateral(self) -> bool:
        """Whether the method compares two periods at a time, without windows."""
        return self.method in BILATERAL

    @property
    def is_spliced(self) -> bool:
        """Whether windows are linked into a series."""
        return not self.is_bilateral and self.window is not None and self.method != "similarity"

    @property
    def needs_years(self) -> bool:
        """Whether link months have to be known."""
        return self.is_spliced and self.splice == "link-month"

    def __str__(self) -> str:
        if self.is_bilateral:
            return f"{self.method}, {self.form}"
        if self.window is None:
            return f"{self.method}, one window"
        if self.method == "similarity":
            return f"{self.method}, window {self.window}"
        if self.window == "expanding":
            return f"{self.method}, window expanding from the link month"
        if self.splice == "link-month":
            return f"{self.method}, window {self.window}, linked on the link month"
        return f"{self.method}, window {self.window}, {self.splice} splice onto {self.onto}"


@dataclass(frozen=True, slots=True)
class Failure:
    """A recipe that has no index in a segment, both by position, and why."""

    recipe: int
    segment: int
    reason: UnconnectedPeriods


def make_index(prices: Array, quantities: Array | None, recipe: Recipe, *, years: Years | None = None) -> Array:
    """(T,) index, the first priced period = 1; NaN where the method has no level.

    Parameters
    ----------
    prices, quantities : (T, N) arrays, currency per unit and units; NaN = not sold.
    years : (T,) the year that each period belongs to, ending in its link month; for recipes that
        link on it.

    Raises
    ------
    UnconnectedPeriods : a multilateral window without a chain of common products.
    CallError : the recipe does not fit the panel.

    Reference: `kernels.bilateral`, `kernels.geks`, `kernels.time_product_dummy`, `kernels.geary_khamis`,
    `kernels.similarity`, `kernels.splicing`.
    """
    index: Array = make_indexes(prices, quantities, [recipe], years=years)[0, 0]
    return index


def make_indexes(
    prices: Array,
    quantities: Array | None,
    recipes: Sequence[Recipe],
    *,
    segments: Positions | None = None,
    leave_out: bool = False,
    years: Years | None = None,
    failures: list[Failure] | None = None,
) -> Array:
    """(R, B, T) indexes of R recipes on B segments of columns; what recipes have in common is computed once.

    Sums over products are shared by all formulas, bilateral matrices by all windows, the levels of
    windows by all splices.

    Parameters
    ----------
    prices, quantities, years : as for `make_index`.
    segments : (B,) ascending first columns of the segments, each a panel of its own; None = one.
    leave_out : instead, entry b is the index on all columns but those of segment b: the replicates of a
        delete-a-group jackknife. See `kernels.time_product_dummy` for what its weights are then.
    failures : collects recipes and segments with a window that falls apart, whose index is NaN then;
        None = raise.

    Raises
    ------
    UnconnectedPeriods, CallError : as for `make_index`.
    """
    starts = np.zeros(1, dtype=np.intp) if segments is None else segments
    result = np.full((len(recipes), len(starts), len(prices)), np.nan)
    compilers = (
        (_bilateral, [at for at, recipe in enumerate(recipes) if recipe.is_bilateral]),
        (_multilateral, [at for at, recipe in enumerate(recipes) if not recipe.is_bilateral]),
    )
    panel = _Panel(prices, quantities, starts, leave_out, years)
    for compile_, positions in compilers:
        if positions:
            compile_(panel, [recipes[at] for at in positions], positions, result, failures)
    return result


@dataclass(frozen=True, slots=True)
class _Panel:
    prices: Array
    quantities: Array | None
    segments: Positions
    leave_out: bool
    years: Years | None


def _bilateral(
    panel: _Panel, recipes: list[Recipe], positions: list[int], into: Array, _: list[Failure] | None
) -> None:
    together: dict[tuple[object, object], list[int]] = {}
    for at, recipe in enumerate(recipes):
        together.setdefault((recipe.form, _weighing(recipe)), []).append(at)
    for members in together.values():
        first = recipes[members[0]]
        weighted = first.method in BASE_WEIGHTED
        made = series_of_segments(
            panel.prices,
            panel.quantities,
            [recipes[at].method for at in members],
            panel.segments,
            form=first.form,
            weights=period_weights(panel.prices, panel.quantities, first) if weighted else None,
            leave_out=panel.leave_out,
        )
        into[[positions[at] for at in members]] = made


def _weighing(recipe: Recipe) -> object:
    """What weights a bilateral formula takes: those that take the same share their sums."""
    if recipe.method in BASE_WEIGHTED:
        return recipe.method == "lowe", recipe.weight_periods
    if recipe.method in PRICES_ONLY:
        return "prices"
    return recipe.method if recipe.method == SATO_VARTIA else "both periods"


def period_weights(prices: Array, quantities: Array | None, recipe: Recipe) -> Array:
    """(N,) quantities (Lowe) or turnover (Young) of the periods that give the weights, 0 = not sold in them."""
    if not recipe.weight_periods or quantities is None:
        raise CallError(f"'{recipe.method}' takes its weights from a period of its own, and none is given.")
    rows = list(recipe.weight_periods)
    values = quantities[rows] if recipe.method == "lowe" else prices[rows] * quantities[rows]
    weights: Array = np.nansum(values, axis=0)
    return weights


def _multilateral(
    panel: _Panel, recipes: list[Recipe], positions: list[int], into: Array, failures: list[Failure] | None
) -> None:
    sums = _shared_sums(panel, recipes)
    pairs: dict[str, Array] = {}
    fitted: dict[tuple[str, object], tuple[Array, list[UnconnectedPeriods]]] = {}
    for at, recipe in zip(positions, recipes, strict=True):
        key = (recipe.method, _window_key(recipe, panel))
        if key not in fitted:
            apart: list[UnconnectedPeriods] = []
            fitted[key] = _fit(panel, recipe, sums, pairs, apart if failures is not None else None), apart
        levels, apart = fitted[key]
        into[at] = np.exp(levels) if recipe.method == "similarity" else _splice(panel, recipe, levels)
        for reason in apart:
            into[at, reason.segment] = np.nan
        if failures is not None:
            failures += [Failure(at, reason.segment, reason) for reason in {r.segment: r for r in apart}.values()]


def _fit(
    panel: _Panel,
    recipe: Recipe,
    sums: PairSum | None,
    pairs: dict[str, Array],
    apart: list[UnconnectedPeriods] | None,
) -> Array:
    """(B, K, W) log levels of all windows; (B, T) of similarity linking, which has none."""
    if recipe.method == "similarity":
        assert sums is not None
        reach = None if recipe.window is None else window_length(recipe, len(panel.prices)) - 1
        return similarity.link(sums, reach, apart=apart).levels
    windows = windows_of(recipe, len(panel.prices), panel.years)
    if recipe.method.startswith("geks-"):
        assert sums is not None
        formula = recipe.method.removeprefix("geks-")
        if formula not in pairs:
            pairs[formula] = logs_of_pairs(formula, sums)
        return geks.window_levels(pairs[formula], windows, apart=apart)
    quantities = None if recipe.method == "tpd-unweighted" else panel.quantities
    return _FITTED[recipe.method](
        panel.prices, quantities, windows, segments=panel.segments, leave_out=panel.leave_out, apart=apart
    )


def _splice(panel: _Panel, recipe: Recipe, levels: Array) -> Array:
    """(B, T) series from the levels of windows."""
    windows = windows_of(recipe, len(panel.prices), panel.years)
    links = None
    if recipe.needs_years:
        rows = np.arange(levels.shape[1]) - windows.before
        links = np.clip(links_of(panel.years)[rows + windows.length - 1] - rows, 0, windows.length - 2)
    index: Array = splice(levels, splice=recipe.splice, onto=recipe.onto, links=links)
    return index[:, windows.before :]


def _shared_sums(panel: _Panel, recipes: Iterable[Recipe]) -> PairSum | None:
    """Sums for all pairs of periods that any of the recipes asks for."""
    wanted: list[Pair] = []
    reach = 0
    for recipe in recipes:
        if recipe.method.startswith("geks-"):
            wanted += wanted_pairs(recipe.method.removeprefix("geks-"))
        elif recipe.method == "similarity":
            wanted += [*similarity.WANTED, *wanted_pairs("fisher")]
        else:
            continue
        reach = max(reach, _reach(recipe, panel))
    if not wanted:
        return None
    span = None if reach >= len(panel.prices) - 1 else reach
    return sum_all_pairs(
        panel.prices, panel.quantities, wanted, span, segments=panel.segments, leave_out=panel.leave_out
    )


def _reach(recipe: Recipe, panel: _Panel) -> int:
    """The largest distance in periods that a recipe compares over."""
    if recipe.method == "similarity":
        return window_length(recipe, len(panel.prices)) - 1
    return windows_of(recipe, len(panel.prices), panel.years).length - 1


def _window_key(recipe: Recipe, panel: _Panel) -> object:
    return recipe.window if recipe.window == "expanding" else window_length(recipe, len(panel.prices))


def window_length(recipe: Recipe, periods: int) -> int:
    """Periods in a window of the recipe, none longer than the panel."""
    return periods if recipe.window is None or recipe.window == "expanding" else min(recipe.window, periods)


def windows_of(recipe: Recipe, periods: int, years: Years | None) -> Windows:
    """The windows of a multilateral recipe over T periods.

    Raises CallError where the windows and the link months do not fit each other.
    """
    if recipe.needs_years and years is None:
        raise CallError("Linking on the link month needs periods that tell their month, such as 2024-03 or dates.")
    if recipe.window == "expanding":
        if recipe.splice != "link-month":
            raise CallError(f"An expanding window is linked on its link month; splice is '{recipe.splice}'.")
        return Windows.expanding(links_of(years))
    windows = Windows.rolling(periods, window_length(recipe, periods))
    if recipe.needs_years:
        ends = np.arange(windows.length, periods)
        reach = int((ends - links_of(years)[ends]).max(initial=0)) + 1
        if reach > windows.length:
            raise CallError(
                f"A window of {windows.length} periods does not reach the link month; it takes at least {reach}."
            )
    return windows


def links_of(years: Years | None) -> Positions:
    """(T,) position of the last period of an earlier year, 0 where there is none."""
    assert years is not None
    links: Positions = np.maximum(np.searchsorted(years, years, side="left") - 1, 0).astype(np.intp)
    return links


_FITTED: dict[str, Callable[..., Array]] = {
    "tpd": time_product_dummy.window_levels,
    "tpd-unweighted": time_product_dummy.window_levels,
    "geary-khamis": geary_khamis.window_levels,
}
