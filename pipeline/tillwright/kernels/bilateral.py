"""Bilateral and elementary indexes: matrices over all pairs of periods, chained and direct series."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Literal

import numpy as np

from tillwright.kernels import sato_vartia
from tillwright.kernels.formulas import BASE_WEIGHTED, PRICES_ONLY, SATO_VARTIA, log_levels, wanted_pairs
from tillwright.kernels.network import Flags
from tillwright.kernels.pairs import (
    Array,
    PairSum,
    Positions,
    make_fields,
    sum_all_pairs,
    sum_listed_pairs,
    sum_others,
    sum_segments,
)


def log_pair_levels(prices: Array, quantities: Array | None, formula: str, *, span: int | None = None) -> Array:
    """(T, T) log index levels of period t (column) relative to period s (row).

    Parameters
    ----------
    prices, quantities : (T, N) arrays; NaN = not sold. Quantities may be None for formulas in
        `PRICES_ONLY`. A product with a price and a quantity of 0 counts where it needs no weight.
    formula : one of `BILATERAL`, but for those in `BASE_WEIGHTED`.
    span : the largest distance in periods between the two sides; None = every pair.

    Returns
    -------
    NaN where no product is priced in both periods, or beyond `span`; 0 on the diagonal of every
    priced period.
    """
    if formula == SATO_VARTIA:
        assert quantities is not None
        base, current = np.divmod(np.arange(len(prices) ** 2), max(len(prices), 1))
        logs = sato_vartia.log_levels(prices, quantities, base, current).reshape(len(prices), len(prices))
        return _within(logs, span)
    return logs_of_pairs(formula, sum_all_pairs(prices, quantities, wanted_pairs(formula), span), span)


def pair_levels(prices: Array, quantities: Array | None, formula: str, *, span: int | None = None) -> Array:
    """(T, T) index levels of period t (column) relative to period s (row), base 1.

    The exponential of `log_pair_levels`, which see.
    """
    levels: Array = np.exp(log_pair_levels(prices, quantities, formula, span=span))
    return levels


def logs_of_pairs(formula: str, pair_sum: PairSum, span: int | None = None) -> Array:
    """(…, T, T) log levels of all pairs from their sums, of the fields in `wanted_pairs`.

    As `log_pair_levels` returns them.
    """
    levels = log_levels(formula, pair_sum)
    priced = pair_sum(*wanted_pairs(formula)[0]).diagonal(axis1=-2, axis2=-1) > 0
    diagonal = np.arange(levels.shape[-1])
    levels[..., diagonal, diagonal] = np.where(priced, 0.0, np.nan)
    return _within(levels, span)


def series(
    prices: Array,
    quantities: Array | None,
    formula: str,
    *,
    form: Literal["chained", "direct"] = "chained",
    weights: Array | None = None,
) -> Array:
    """(T,) index of one formula, the first priced period = 1.

    Parameters
    ----------
    prices, quantities : (T, N) arrays; NaN = not sold.
    formula : one of `BILATERAL`.
    form : "direct" compares every period with the first priced one; "chained" multiplies the
        links between consecutive priced periods.
    weights : (N,) for formulas in `BASE_WEIGHTED`: quantities for "lowe", turnover for the others, of the
        period that gives the weights; products without any are left out.

    Returns
    -------
    NaN in a period without any product, which a chain steps over; in a direct index also where
    the period shares no product with the first; in a chained index from the first link without a
    common product onwards.
    """
    segments = np.zeros(1, dtype=np.intp)
    result: Array = series_of_segments(prices, quantities, [formula], segments, form=form, weights=weights)[0, 0]
    return result


def series_of_segments(
    prices: Array,
    quantities: Array | None,
    formulas: Sequence[str],
    segments: Positions,
    *,
    form: Literal["chained", "direct"],
    weights: Array | None = None,
    leave_out: bool = False,
) -> Array:
    """(F, B, T) indexes of F formulas and B segments of columns, sharing their sums over products.

    The formulas must ask for the same kind of weight: all of `PRICES_ONLY`, all of `BASE_WEIGHTED` with the
    same `weights`, or all others but "sato-vartia", which comes alone. Arguments as for `series` and
    `kernels.pairs.sum_all_pairs`.
    """
    present = _present(prices, quantities, formulas[0], weights, segments)
    if leave_out:
        present = sum_others(present)
    priced = present > 0
    base = _compared_with(priced, form)
    segment, current = np.nonzero(base >= 0)
    codes, at = np.unique(base[segment, current] * priced.shape[1] + current, return_inverse=True)
    pairs = np.divmod(codes, priced.shape[1])
    if formulas[0] == SATO_VARTIA:
        logs = [_sato_vartia(prices, quantities, pairs, segments, leave_out=leave_out)]
    else:
        wanted = [pair for formula in formulas for pair in wanted_pairs(formula)]
        pair_sum = sum_listed_pairs(
            prices, quantities, wanted, *pairs, weights=weights, segments=segments, leave_out=leave_out
        )
        logs = [log_levels(formula, pair_sum) for formula in formulas]
    result = np.zeros((len(formulas), *priced.shape))
    for position, links in enumerate(logs):
        result[position, segment, current] = links[segment, at]
    if form == "chained":
        np.cumsum(result, axis=-1, out=result)
    levels: Array = np.exp(np.where(priced, result, np.nan))
    return levels


def _present(
    prices: Array, quantities: Array | None, formula: str, weights: Array | None, segments: Positions
) -> Array:
    """(B, T) above 0 where a segment has something to compare."""
    field = make_fields(prices, quantities, weights)
    return sum_segments(field("m" if formula in PRICES_ONLY | BASE_WEIGHTED else "x"), segments)


def _compared_with(priced: Flags, form: str) -> Positions:
    """(B, T) the priced period that each is compared with, −1 = none."""
    periods = np.arange(priced.shape[1])
    if form == "direct":
        base = np.broadcast_to(priced.argmax(axis=1)[:, None], priced.shape)
    else:
        last = np.maximum.accumulate(np.where(priced, periods, -1), axis=1)
        base = np.concatenate([np.full((len(priced), 1), -1), last[:, :-1]], axis=1)
    return np.where(priced & (base < periods), base, -1)


def _sato_vartia(
    prices: Array,
    quantities: Array | None,
    pairs: tuple[Positions, Positions],
    segments: Positions,
    *,
    leave_out: bool,
) -> Array:
    assert quantities is not None
    if not leave_out:
        return sato_vartia.log_levels(prices, quantities, *pairs, segments)
    of_column = np.repeat(np.arange(len(segments)), np.diff(np.append(segments, prices.shape[1])))
    kept = [of_column != segment for segment in range(len(segments))]
    return np.concatenate([sato_vartia.log_levels(prices[:, use], quantities[:, use], *pairs) for use in kept])


def _within(levels: Array, span: int | None) -> Array:
    """The same levels, NaN for pairs further than `span` periods apart."""
    if span is None:
        return levels
    periods = np.arange(levels.shape[-1])
    near = np.abs(np.subtract.outer(periods, periods)) <= span
    return np.where(near, levels, np.nan)
