"""Attributes of products as a design, and what regressions on it say as tables."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
import polars as pl

from tillwright.kernels.attributes import Design, Missing, code_attributes
from tillwright.kernels.hedonic import Hedonic
from tillwright.tables import Types

_COEFFICIENTS: Types = {
    "name": pl.String,
    "coefficient": pl.Float64,
    "standard_error": pl.Float64,
    "t": pl.Float64,
}
_FIT: Types = {
    **dict.fromkeys(("observations", "left_out", "unpredicted", "parameters", "degrees_of_freedom"), pl.Int64),
    "adjusted_r2": pl.Float64,
    "dropped": pl.List(pl.String),
}


def make_design(
    attributes: pl.DataFrame,
    numeric: Sequence[str],
    logs: Sequence[str],
    categorical: Sequence[str],
    *,
    missing: Missing = "category",
) -> Design:
    """The design of the products in the rows: numbers as they are or as logs, texts as dummies.

    A number that is null leaves its product out; those to take logs of are positive or null.
    """
    numbers = {name: attributes[name].to_numpy() for name in numeric}
    numbers |= {f"ln {name}": np.log(attributes[name].to_numpy()) for name in logs}
    texts = {name: np.array(attributes[name].to_list(), dtype=object) for name in categorical}
    return code_attributes(numbers, texts, missing=missing)


def list_coefficients(fits: Sequence[Hedonic], times: pl.Series | None) -> pl.DataFrame:
    """name, coefficient, standard error and t of every regression, with its time before them where it has one."""
    return _stack(fits, _coefficients, _COEFFICIENTS, times)


def list_fits(fits: Sequence[Hedonic], times: pl.Series | None) -> pl.DataFrame:
    """One row per regression: counts of prices, degrees of freedom, fit, and columns that say nothing new."""
    return _stack(fits, _describe, _FIT, times)


def _coefficients(fit: Hedonic) -> pl.DataFrame:
    ratios = np.full(len(fit.names), np.nan)
    np.divide(fit.coefficients, fit.standard_errors, out=ratios, where=fit.standard_errors > 0)
    columns = (pl.Series(fit.names, dtype=pl.String), fit.coefficients, fit.standard_errors, ratios)
    return pl.DataFrame(dict(zip(_COEFFICIENTS, columns, strict=True)))


def _describe(fit: Hedonic) -> pl.DataFrame:
    observations = int(fit.observations.sum())
    unpredicted = int((~np.isfinite(fit.predicted[fit.observations > 0])).any(axis=0).sum())
    row = (
        observations,
        fit.left_out,
        unpredicted,
        observations - fit.degrees_of_freedom,
        fit.degrees_of_freedom,
        fit.adjusted_r2,
        list(fit.dropped),
    )
    return pl.DataFrame([row], schema=_FIT, orient="row")


def _stack(
    fits: Sequence[Hedonic], tell: Callable[[Hedonic], pl.DataFrame], schema: Types, times: pl.Series | None
) -> pl.DataFrame:
    parts = [tell(fit) for fit in fits]
    rows = pl.concat(parts) if parts else pl.DataFrame(schema=schema)
    if times is None:
        return rows
    at = np.repeat(np.arange(len(parts)), [part.height for part in parts])
    return pl.concat([pl.DataFrame({times.name: times[at]}), rows], how="horizontal")
