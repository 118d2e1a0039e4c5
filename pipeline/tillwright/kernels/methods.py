"""Any methods by their names: indexes out of (T, N) panels, many at once where asked."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, replace

import numpy as np

from tillwright.errors import UnconnectedPeriods
from tillwright.kernels import geary_khamis, geks, similarity, time_product_dummy
from tillwright.kernels.bilateral import logs_of_pairs, series_of_segments
from tillwright.kernels.formulas import BASE_WEIGHTED, PRICES_ONLY, SATO_VARTIA, wanted_pairs
from tillwright.kernels.pairs import Array, Pair, PairSum, Positions, sum_all_pairs, sum_others, sum_segments
from tillwright.kernels.recipes import (
    Recipe,
    Years,
    join_windows,
    known,
    links_of,
    period_weights,
    window_length,
    windows_of,
)

# Matrices over all pairs of periods are made for so many numbers (8 MB) at a time.
HELD = 1 << 20


@dataclass(frozen=True, slots=True)
class Failure:
    """A recipe with windows that fall apart in a segment, both by position, and the first of them."""

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
    segments : (B,) first columns of the segments, each a panel of its own and none empty; None = one.
    leave_out : instead, entry b is the index on all columns but those of segment b: the replicates of a
        delete-a-group jackknife. See `kernels.time_product_dummy` for what its weights are then.
    failures : collects recipes and segments with windows that fall apart, with the first of them; such
        windows are passed over, and levels that come from no other are NaN. None = raise.

    Raises
    ------
    UnconnectedPeriods, CallError : as for `make_index`.
    """
    starts = np.zeros(1, dtype=np.intp) if segments is None else segments
    panel = _Panel(prices, quantities, starts, leave_out, None)
    many = max(HELD // max(len(prices), 1) ** 2, 1)
    if leave_out or len(starts) <= many:
        return _compile(panel, recipes, years, failures)
    parts = []
    for low in range(0, len(starts), many):
        found: list[Failure] | None = None if failures is None else []
        members = np.arange(low, min(low + many, len(starts)))
        parts.append(_compile(panel.part(members), recipes, years, found))
        for failure in found or ():
            failures.append(replace(failure, segment=low + failure.segment))  # type: ignore[union-attr]
    return np.concatenate(parts, axis=1)


def _compile(panel: _Panel, recipes: Sequence[Recipe], years: Years | None, failures: list[Failure] | None) -> Array:
    result = np.full((len(recipes), len(panel.segments), len(panel.prices)), np.nan)
    kinds: dict[str, list[int]] = {"bilateral": [], "rolling": [], "expanding": []}
    for at, recipe in enumerate(recipes):
        expands = recipe.is_spliced and recipe.window == "expanding"
        kinds["bilateral" if recipe.is_bilateral else "expanding" if expands else "rolling"].append(at)
    if kinds["bilateral"]:
        _bilateral(panel, [recipes[at] for at in kinds["bilateral"]], kinds["bilateral"], result)
    if kinds["rolling"]:
        links = None if years is None else links_of(years)
        made, found = _multilateral(
            replace(panel, links=links), [recipes[at] for at in kinds["rolling"]], collect=failures is not None
        )
        _place(made, found, kinds["rolling"], np.arange(len(panel.segments)), result, failures)
    if kinds["expanding"]:
        _expanding(panel, [recipes[at] for at in kinds["expanding"]], kinds["expanding"], years, result, failures)
    return result


def _place(
    made: Array,
    found: list[Failure],
    positions: list[int],
    segments: Positions,
    into: Array,
    failures: list[Failure] | None,
) -> None:
    """Put the indexes of some recipes and segments where they belong, and their failures."""
    into[np.ix_(np.array(positions), segments)] = made
    if failures is not None:
        failures += [
            Failure(positions[failure.recipe], int(segments[failure.segment]), failure.reason) for failure in found
        ]


def _expanding(
    panel: _Panel,
    recipes: list[Recipe],
    positions: list[int],
    years: Years | None,
    into: Array,
    failures: list[Failure] | None,
) -> None:
    """Segments whose link months are the same go together: where nothing is sold in one, an earlier period serves."""
    sold = np.isfinite(panel.prices)
    if panel.quantities is not None:
        sold &= panel.quantities > 0
    counts = sum_segments(sold.astype(np.float64), panel.segments)
    priced = (sum_others(counts) if panel.leave_out else counts) > 0
    links, kinds = np.unique([links_of(known(years), row) for row in priced], axis=0, return_inverse=True)
    for kind, link in enumerate(links):
        members = np.flatnonzero(kinds == kind)
        alone = panel if panel.leave_out or len(links) == 1 else panel.part(members)
        made, found = _multilateral(replace(alone, links=link), recipes, collect=failures is not None)
        if panel.leave_out and len(links) > 1:
            made = made[:, members]
            found = [
                replace(one, segment=int(np.searchsorted(members, one.segment)))
                for one in found
                if one.segment in members
            ]
        _place(made, found, positions, members, into, failures)


@dataclass(frozen=True, slots=True)
class _Panel:
    prices: Array
    quantities: Array | None
    segments: Positions
    leave_out: bool
    links: Positions | None

    def part(self, segments: Positions) -> _Panel:
        """Some of the segments, each as it is."""
        sizes = np.diff(np.append(self.segments, self.prices.shape[1]))[segments]
        columns = np.concatenate(
            [self.segments[at] + np.arange(size) for at, size in zip(segments, sizes, strict=True)]
        )
        values = None if self.quantities is None else self.quantities.take(columns, axis=1)
        return replace(
            self, prices=self.prices.take(columns, axis=1), quantities=values, segments=np.cumsum(sizes) - sizes
        )


def _bilateral(panel: _Panel, recipes: list[Recipe], positions: list[int], into: Array) -> None:
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


def _multilateral(panel: _Panel, recipes: list[Recipe], *, collect: bool) -> tuple[Array, list[Failure]]:
    """(R, B, T) indexes and, if they are to be collected, the first window that falls apart of each."""
    sums = _shared_sums(panel, recipes)
    pairs: dict[str, Array] = {}
    fitted: dict[tuple[str, object], tuple[Array, list[UnconnectedPeriods]]] = {}
    made = np.full((len(recipes), len(panel.segments), len(panel.prices)), np.nan)
    failures = []
    for at, recipe in enumerate(recipes):
        key = (recipe.method, _window_key(recipe, panel))
        if key not in fitted:
            apart: list[UnconnectedPeriods] = []
            fitted[key] = _fit(panel, recipe, sums, pairs, apart if collect else None), apart
        levels, apart = fitted[key]
        if recipe.method == "similarity":
            made[at] = np.exp(levels)
        else:
            windows = windows_of(recipe, len(panel.prices), panel.links)
            made[at] = join_windows(levels, windows, recipe, panel.links)
        first = {reason.segment: reason for reason in reversed(apart)}
        failures += [Failure(at, segment, reason) for segment, reason in sorted(first.items())]
    return made, failures


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
    windows = windows_of(recipe, len(panel.prices), panel.links)
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
    return windows_of(recipe, len(panel.prices), panel.links).length - 1


def _window_key(recipe: Recipe, panel: _Panel) -> object:
    return recipe.window if recipe.window == "expanding" else window_length(recipe, len(panel.prices))


_FITTED: dict[str, Callable[..., Array]] = {
    "tpd": time_product_dummy.window_levels,
    "tpd-unweighted": time_product_dummy.window_levels,
    "geary-khamis": geary_khamis.window_levels,
}
