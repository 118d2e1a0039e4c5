"""Standard errors of a panel's indexes: groups of products or outlets left out in turn."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from tillwright.api.recipes import Asked
from tillwright.kernels.jackknife import standard_errors
from tillwright.kernels.methods import Failure, Recipe, Years, make_indexes
from tillwright.kernels.pairs import Array, Positions
from tillwright.panels import PanelArrays

SEED = 20
"""Groups are drawn by a generator that always starts here, so that a result can be had again."""


def jackknife(
    arrays: PanelArrays,
    asked: Asked,
    years: Years | None,
    reach: Positions,
    levels: Array,
    groups: int,
    *,
    over: str | None,
) -> dict[str, Array]:
    """Standard errors of index levels and of their changes, each (R, B, T).

    Parameters
    ----------
    levels : (R, B, T) index levels, in whose units the errors are.
    groups : how many groups are left out in turn; `over` the column that is grouped, None = products.

    Returns
    -------
    `standard_error`, `change` in per cent and `change_error` in percentage points; NaN where an index cannot
    be made without some group.
    """
    errors = {name: np.full(levels.shape, np.nan) for name in ("standard_error", "change_error")}
    ends = np.append(arrays.starts[1:], arrays.prices.shape[1])
    clusters = np.arange(arrays.prices.shape[1]) if over is None else _codes(arrays, over)
    for group, (start, end) in enumerate(zip(arrays.starts, ends, strict=True)):
        drawn = draw_groups(clusters[start:end], groups)
        if drawn.max(initial=0) == 0:
            continue
        cut = slice(int(reach[group, 0]), int(reach[group, 1]) + 1)
        order = start + np.argsort(drawn, kind="stable")
        failures: list[Failure] = []
        replicates = 100.0 * make_indexes(
            arrays.prices[cut][:, order],
            None if arrays.values is None else arrays.values[cut][:, order],
            _moved(asked, cut.start),
            segments=np.flatnonzero(np.diff(np.sort(drawn), prepend=-1)),
            leave_out=True,
            years=None if years is None else years[cut],
            failures=failures,
        )
        by_group = replicates.swapaxes(0, 1)
        errors["standard_error"][:, group, cut] = standard_errors(by_group)
        errors["change_error"][:, group, cut] = standard_errors(changes(by_group))
    return {
        "standard_error": errors["standard_error"],
        "change": changes(levels),
        "change_error": errors["change_error"],
    }


def changes(levels: Array) -> Array:
    """(…, T) changes on the period before in per cent; NaN in the first."""
    result = np.full(levels.shape, np.nan)
    result[..., 1:] = 100.0 * (levels[..., 1:] / levels[..., :-1] - 1.0)
    return result


def draw_groups(clusters: Positions, groups: int) -> Positions:
    """(N,) the group of each column: clusters dealt out at random into groups of about equal size."""
    names, which = np.unique(clusters, return_inverse=True)
    dealt: Positions = np.random.default_rng(SEED).permutation(np.arange(len(names)) % groups)[which]
    return dealt


def _codes(arrays: PanelArrays, over: str) -> Positions:
    """(N,) the number of each column's value of `over`, in the order of the values."""
    codes: Positions = arrays.products[over].rank("dense").to_numpy().astype(np.intp)
    return codes


def _moved(asked: Asked, by: int) -> list[Recipe]:
    """The recipes with weight periods counted from a later first period; those before it sold nothing."""
    return [
        replace(recipe, weight_periods=tuple(at - by for at in recipe.weight_periods if at >= by))
        for recipe in asked.recipes
    ]
