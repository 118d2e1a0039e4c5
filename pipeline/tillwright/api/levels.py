"""Index levels of all groups of a panel, and their jackknife replicates."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from tillwright.api.recipes import Asked
from tillwright.errors import CallError, UnconnectedPeriods
from tillwright.kernels.jackknife import standard_errors
from tillwright.kernels.methods import Failure, make_indexes
from tillwright.kernels.pairs import Array, Positions
from tillwright.kernels.recipes import Recipe, Years, links_of
from tillwright.panels import PanelArrays

SEED = 20
"""Groups are drawn by a generator that always starts here, so that a result can be had again."""


@dataclass(frozen=True, slots=True)
class Part:
    """Recipes and groups, by position, that are compiled together over the periods of `cut`."""

    recipes: Positions
    groups: Positions
    cut: slice


def reach_of(products: np.ndarray) -> Positions:
    """(B, 2) first and last period with a product of each group, from its (B, T) counts."""
    sold = products > 0
    return np.stack([sold.argmax(axis=1), sold.shape[1] - 1 - sold[:, ::-1].argmax(axis=1)], axis=1)


def list_parts(recipes: list[Recipe], reach: Positions, periods: int) -> Iterator[Part]:
    """What can be compiled together.

    Rolling windows begin where a group does, so groups that begin and end alike go together; nothing else depends
    on empty periods around a group, so all go together.
    """
    rolling = np.array([recipe.is_spliced and recipe.window != "expanding" for recipe in recipes])
    if not rolling.all():
        yield Part(np.flatnonzero(~rolling), np.arange(len(reach)), slice(0, periods))
    if rolling.any():
        for first, last in np.unique(reach, axis=0):
            members = np.flatnonzero((reach == (first, last)).all(axis=1))
            yield Part(np.flatnonzero(rolling), members, slice(int(first), int(last) + 1))


def make_levels(arrays: PanelArrays, asked: Asked, years: Years | None, reach: Positions, *, blank: bool) -> Array:
    """(R, B, T) index levels, the first priced period = 100.

    Raises
    ------
    UnconnectedPeriods : unless `blank`, windows of some group fall apart; the first is named, the others counted.
    CallError : windows do not reach their link month.
    """
    _check_links(asked, years, reach)
    levels = np.full((len(asked.recipes), len(reach), len(arrays.periods)), np.nan)
    apart: dict[int, UnconnectedPeriods] = {}
    for part in list_parts(asked.recipes, reach, len(arrays.periods)):
        columns, starts = columns_of(arrays, part.groups)
        failures: list[Failure] = []
        made = make_indexes(
            *take(arrays, part.cut, columns),
            [asked.recipes[at] for at in part.recipes],
            segments=starts,
            years=None if years is None else years[part.cut],
            failures=failures,
        )
        levels[np.ix_(part.recipes, part.groups, np.arange(part.cut.start, part.cut.stop))] = 100.0 * made
        for failure in reversed(failures):
            group = int(part.groups[failure.segment])
            apart[group] = failure.reason.labelled(arrays.periods.to_list()[part.cut.start :], name_of(arrays, group))
    if apart and not blank:
        raise _told(apart)
    return levels


def jackknife(
    arrays: PanelArrays, asked: Asked, years: Years | None, reach: Positions, clusters: Positions, groups: int
) -> Iterator[tuple[int, Positions, Array]]:
    """For each group of the panel its position, the G groups left out in turn, and (R, G, T) levels without each.

    Parameters
    ----------
    clusters : (N,) what is left out together, by number: products, or the outlets that columns belong to.
    groups : how many random groups of clusters there are; as many as clusters where those are fewer.

    Returns
    -------
    A group with one cluster is passed over. Levels are NaN where an index cannot be made without some group.
    """
    for group, cut in enumerate(arrays.cuts):
        dealt = deal(clusters[cut], groups)
        if len(dealt.left_out) < 2:
            continue
        levels = np.full((len(asked.recipes), len(dealt.left_out), len(arrays.periods)), np.nan)
        for part in list_parts(asked.recipes, reach[group : group + 1], len(arrays.periods)):
            failures: list[Failure] = []
            made = make_indexes(
                *take(arrays, part.cut, cut.start + dealt.order),
                [asked.recipes[at] for at in part.recipes],
                segments=dealt.segments,
                leave_out=True,
                years=None if years is None else years[part.cut],
                failures=failures,
            )
            levels[part.recipes, :, part.cut] = 100.0 * made
        # Without its first period a series would be 100 elsewhere, and no replicate of the same index.
        begin = np.isfinite(levels).any(axis=1).argmax(axis=1)
        levels[~np.isfinite(levels[np.arange(len(levels)), :, begin])] = np.nan
        yield group, dealt.left_out, levels


def errors_of(
    arrays: PanelArrays,
    asked: Asked,
    years: Years | None,
    reach: Positions,
    levels: Array,
    clusters: Positions,
    groups: int,
) -> dict[str, Array]:
    """Standard errors of index levels and of their changes, each (R, B, T), and the number of groups left out.

    Returns
    -------
    `standard_error`, `change` in per cent, `change_error` in percentage points; NaN where an index cannot be made
    without some group.
    """
    errors = {name: np.full(levels.shape, np.nan) for name in ("standard_error", "change_error")}
    used = np.zeros(levels.shape, dtype=np.int64)
    for group, left_out, replicates in jackknife(arrays, asked, years, reach, clusters, groups):
        by_group = replicates.swapaxes(0, 1)
        used[:, group] = len(left_out)
        errors["standard_error"][:, group] = standard_errors(by_group)
        errors["change_error"][:, group] = standard_errors(changes(by_group))
    return {
        "standard_error": errors["standard_error"],
        "change": changes(levels),
        "change_error": errors["change_error"],
        "groups": used,
    }


def changes(levels: Array) -> Array:
    """(…, T) changes on the period before in per cent; NaN in the first."""
    result = np.full(levels.shape, np.nan)
    result[..., 1:] = 100.0 * (levels[..., 1:] / levels[..., :-1] - 1.0)
    return result


@dataclass(frozen=True, slots=True)
class Dealt:
    """Columns dealt out into groups.

    `order` (N,) puts each group together, `segments` (G,) are the first columns of the groups in that order, `left_out`
    (G,) their numbers.
    """

    order: Positions
    segments: Positions
    left_out: Positions


def deal(clusters: Positions, groups: int) -> Dealt:
    """Clusters of (N,) columns, given by number, dealt out at random into groups of about equal size."""
    names, which = np.unique(clusters, return_inverse=True)
    drawn = np.random.default_rng(SEED).permutation(np.arange(len(names)) % groups)[which]
    left_out = np.unique(drawn)
    return Dealt(np.argsort(drawn, kind="stable"), np.searchsorted(np.sort(drawn), left_out), left_out)


def clusters_of(arrays: PanelArrays, over: str | None) -> Positions:
    """(N,) the number of each column's value of `over`, in the order of the values; of the column itself if None."""
    if over is None:
        return np.arange(arrays.prices.shape[1])
    codes: Positions = arrays.products[over].rank("dense").to_numpy().astype(np.intp)
    return codes


def columns_of(arrays: PanelArrays, groups: Positions) -> tuple[Positions | slice, Positions]:
    """The columns of some groups of a panel, and where each group starts among them."""
    if len(groups) == len(arrays.starts):
        return slice(None), arrays.starts
    sizes = (arrays.ends - arrays.starts)[groups]
    return np.concatenate([np.arange(arrays.starts[at], arrays.ends[at]) for at in groups]), np.cumsum(sizes) - sizes


def take(arrays: PanelArrays, cut: slice, columns: Positions | slice) -> tuple[Array, Array | None]:
    """Prices and quantities of some columns over some periods."""
    if isinstance(columns, slice):
        return arrays.prices[cut, columns], None if arrays.values is None else arrays.values[cut, columns]
    values = None if arrays.values is None else arrays.values[cut].take(columns, axis=1)
    return arrays.prices[cut].take(columns, axis=1), values


def name_of(arrays: PanelArrays, group: int) -> str:
    """A group as messages name it; empty without `by`."""
    names = arrays.keys.row(group, named=True) if arrays.keys.width else {}
    return ", ".join(f"{name} {value}" for name, value in names.items())


def _told(apart: dict[int, UnconnectedPeriods]) -> UnconnectedPeriods:
    """The error of the first group, with the number of others."""
    first = apart[min(apart)]
    more = f" So do those of {len(apart) - 1} more groups." if len(apart) > 1 else ""
    hint = f"{more} With unconnected 'blank', such windows are passed over and their levels left empty."
    return UnconnectedPeriods(first.groups, first.where, hint=hint)


def _check_links(asked: Asked, years: Years | None, reach: Positions) -> None:
    """Raise CallError for windows that do not reach the link month in some group."""
    lengths = [recipe.window for recipe in asked.recipes if recipe.needs_years and isinstance(recipe.window, int)]
    if not lengths or years is None:
        return
    needed = 0
    for first, last in np.unique(reach, axis=0):
        window = min(*lengths, int(last - first) + 1)
        links = links_of(years[first : last + 1])
        ends = np.arange(window, len(links))
        needed = max(needed, int((ends - links[ends]).max(initial=0)) + 1)
    if min(lengths) < needed:
        raise CallError(
            f"window is {min(lengths)}, which does not reach the link month; splice 'link-month' takes a window of at "
            f"least {needed} periods here."
        )
