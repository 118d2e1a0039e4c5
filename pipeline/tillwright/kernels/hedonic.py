"""Hedonic indexes: log prices regressed on periods and attributes of products."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal, TypeAlias

import numpy as np
from numpy.typing import NDArray

from tillwright.errors import TooFewObservations
from tillwright.kernels.attributes import Basis, find_basis, find_complete
from tillwright.kernels.network import Flags
from tillwright.kernels.pairs import Array, Positions
from tillwright.kernels.time_product_dummy import dummy_weights

Errors: TypeAlias = Literal["classical", "HC1"]
Regressions: TypeAlias = Literal["period", "pooled"]

# Common practice: with fewer prices one odd product turns coefficients. Degrees of freedom are checked besides.
LEAST_OBSERVATIONS = 20
# An attribute that a regression cannot tell from others must agree with them in a product to be predicted to
# this share of its size: a hundred times what `attributes.COLLINEAR` lets pass as rounding, for it adds up.
AGREEING = 1e-7
# Log prices that differ by less are the same: no price is known to twelve digits, and rounding stays below.
SAME = 1e-12
# An observation of this leverage is fitted by a parameter of its own; its residual is rounding.
FULL_LEVERAGE = 1.0 - 1e-9


@dataclass(frozen=True, slots=True)
class Hedonic:
    """A regression ln p[t,i] = π_t + z_i·β + ε over T periods; P of them have observations.

    `index` (T,) is exp(π_t − π_first), NaN in periods without observations, and `level_errors` (T,) the standard
    errors of its log. `coefficients` and `standard_errors` (K',) belong to `names`; `dropped` are the attributes that
    say nothing new. `adjusted_r2` is NaN where prices do not vary. `degrees_of_freedom` are those of the residuals,
    observations − P − K'. `observations` (T,) counts prices that weigh in the regression, `left_out` those
    without all attributes or without weight. (T, N) arrays of log prices: `predicted`, NaN where the regression cannot
    tell; `residuals`, actual less predicted; `standardized`, residuals over their own standard deviation
    σ·√((1 − h)/w), h the leverage, NaN where nothing is left to vary.
    """

    index: Array
    level_errors: Array
    names: tuple[str, ...]
    coefficients: Array
    standard_errors: Array
    dropped: tuple[str, ...]
    adjusted_r2: float
    degrees_of_freedom: int
    observations: NDArray[np.int64]
    left_out: int
    predicted: Array
    residuals: Array
    standardized: Array


@dataclass(frozen=True, slots=True)
class Imputed:
    """(T, T) `log_pairs` of double-imputation indexes and the regressions that the predictions come from.

    `periods` are the rows of cross-sections, one each; all T where there is one regression over all.
    """

    log_pairs: Array
    periods: Positions
    regressions: tuple[Hedonic, ...]


def time_dummy(
    prices: Array,
    quantities: Array | None,
    design: Array,
    names: Sequence[str],
    *,
    errors: Errors = "classical",
    least: int = LEAST_OBSERVATIONS,
) -> Hedonic:
    """Time dummy hedonic index and its regression; of one period it is a cross-section.

    Least squares of ln p[t,i] = π_t + z_i·β, weighted by expenditure shares s[t,i] within each period over the
    products with known attributes, or unweighted. Period dummies are taken out as weighted means, attributes
    that are then combinations of those to their left are dropped.

    Parameters
    ----------
    prices, quantities : (T, N) arrays, currency per unit and units; NaN = not sold. A quantity of 0 weighs
        nothing. None = unweighted.
    design : (N, K) attributes of the products as numbers, see `kernels.attributes`; a product with a NaN is left out.
    names : of the K columns.
    errors : "classical" for errors of variance σ²/w; "HC1" whatever their variances, times n / degrees of freedom.
    least : fewest observations to make a regression of.

    Raises
    ------
    TooFewObservations : fewer than `least`, or no more than there are parameters.

    Reference: Court (1939); de Haan & Krsinich (2014), weighted by expenditure shares; Diewert, Heravi & Silver
    (2009); HC1, MacKinnon & White (1985).
    """
    complete = find_complete(design)
    known = np.where(complete[:, None], design, 0.0)
    usable = np.where(complete, prices, np.nan)
    weights = dummy_weights(usable, quantities)
    with np.errstate(under="ignore"):
        sample = _gather(usable, weights, known)
        basis = find_basis(sample.attributes, sample.lengths)
        fit = _fit(sample, basis, errors, least)
        standardized = _standardize(sample, basis, fit)
    levels = _spread(fit.levels, sample.present, len(prices))
    predicted = levels[:, None] + known[:, basis.kept] @ fit.coefficients
    predicted[~(complete & _find_predictable(sample, basis, known, len(prices)))] = np.nan
    return Hedonic(
        index=np.exp(_spread(fit.levels - fit.levels[:1], sample.present, len(prices))),
        level_errors=_spread(fit.level_errors, sample.present, len(prices)),
        names=tuple(names[position] for position in basis.kept),
        coefficients=fit.coefficients,
        standard_errors=fit.coefficient_errors,
        dropped=tuple(names[position] for position in basis.dropped),
        adjusted_r2=_adjust_r2(sample, fit),
        degrees_of_freedom=fit.freedom,
        observations=(weights > 0).sum(axis=1),
        left_out=int(np.isfinite(prices).sum()) - len(sample.logs),
        predicted=predicted,
        residuals=np.log(prices) - predicted,
        standardized=standardized,
    )


def double_imputation_tornqvist(
    prices: Array,
    quantities: Array,
    design: Array,
    names: Sequence[str],
    base: int,
    current: int,
    *,
    weighted: bool = True,
    least: int = LEAST_OBSERVATIONS,
) -> float:
    """Index of period `current` relative to `base`, base 1, from a cross-section regression in each.

    See `impute_pairs`, whose arguments these are; `base` and `current` are rows.
    """
    pair = [base, current]
    imputed = impute_pairs(prices[pair], quantities[pair], design, names, weighted=weighted, least=least)
    return float(np.exp(imputed.log_pairs[0, 1]))


def impute_pairs(
    prices: Array,
    quantities: Array,
    design: Array,
    names: Sequence[str],
    *,
    regressions: Regressions = "period",
    weighted: bool = True,
    errors: Errors = "classical",
    least: int = LEAST_OBSERVATIONS,
    thin: list[TooFewObservations] | None = None,
) -> Imputed:
    """(T, T) log double-imputation Törnqvist levels of period t (column) relative to period s (row).

    Σ_i ½(s[s,i] + s[t,i])·(ln p̂[t,i] − ln p̂[s,i]) over the products sold in s or t. Both prices of a product sold
    in both are actual. Of one that enters or exits both are predicted, the observed one too, so that what the
    regression leaves out of that product cancels; absent, its quantity is 0 and its weight half its share. Shares
    are of actual expenditure. An unmatched product that either regression cannot predict is left out, shares
    being of what is left. With every product matched this is the Törnqvist index. It satisfies time reversal, so
    `kernels.geks.window_levels` makes it transitive.

    Parameters
    ----------
    prices, quantities, design, names, errors, least : as for `time_dummy`; quantities are needed.
    regressions : "period" predicts from a cross-section in each period, "pooled" from one time dummy
        regression over all T, whose coefficients stay the same.
    weighted : whether regressions are weighted by expenditure shares; the index always is.
    thin : collects periods with too few prices for their cross-section, in which nothing counts as sold then;
        None = raise.

    Returns
    -------
    A period without turnover has no cross-section. Log levels are NaN where one side has nothing that can be
    compared; 0 on the diagonal of every period with turnover.

    Raises
    ------
    TooFewObservations : as for `time_dummy`; `period` is the row of a cross-section.

    Reference: double imputation, Hill & Melser (2008), de Haan (2010), CPI Manual (2020) ch. 6 and Eurostat (2013),
    Handbook on Residential Property Prices Indices, ch. 5; in GEKS, de Haan & Krsinich (2014). From memory.
    """
    weighing = quantities if weighted else None
    periods = np.arange(len(prices))
    if regressions == "pooled":
        fits = [time_dummy(prices, weighing, design, names, errors=errors, least=least)]
        predicted = fits[0].predicted
    else:
        fits, predicted = [], np.full(prices.shape, np.nan)
        sold = np.flatnonzero((np.where(np.isfinite(prices), quantities, 0.0) > 0).any(axis=1))
        if len(sold) == 0:
            raise TooFewObservations(0, 0, least)
        few = []
        for row in sold:
            here = slice(row, row + 1)
            try:
                fit = time_dummy(
                    prices[here],
                    None if weighing is None else weighing[here],
                    design,
                    names,
                    errors=errors,
                    least=least,
                )
            except TooFewObservations as error:
                problem = TooFewObservations(error.observations, error.parameters, error.least, period=int(row))
                if thin is None:
                    raise problem from None
                thin.append(problem)
                few.append(row)
                continue
            fits.append(fit)
            predicted[here] = fit.predicted
        periods = np.setdiff1d(sold, few).astype(np.intp)
        if few:
            prices = prices.copy()
            prices[few] = np.nan
    return Imputed(_log_pairs(prices, quantities, predicted), periods, tuple(fits))


def _log_pairs(prices: Array, quantities: Array, predicted: Array) -> Array:
    """Each side of every pair as matrix products: what was sold in s, at its relatives from s to t."""
    sold, able = np.isfinite(prices), np.isfinite(predicted)
    m, turnover = sold.astype(np.float64), np.where(sold, prices * quantities, 0.0)
    centre = np.where(sold, np.log(prices), 0.0).sum(axis=0) / np.maximum(sold.sum(axis=0), 1)
    actual = np.where(sold, np.log(prices) - centre, 0.0)
    guess = np.where(able, predicted - centre, 0.0)
    absent = (able & ~sold).astype(np.float64)
    predictable = turnover * able
    weight = turnover @ m.T + predictable @ absent.T
    change = turnover @ actual.T - (turnover * actual) @ m.T
    change += predictable @ (absent * guess).T - (predictable * guess) @ absent.T
    side = np.full(weight.shape, np.nan)
    np.divide(change, weight, out=side, where=weight > 0)
    logs: Array = 0.5 * (side - side.T)
    return logs


@dataclass(frozen=True, slots=True)
class _Sample:
    """R observations in order of period, with weighted means of their period taken out.

    `present` (P,) are the rows of the periods that have any, `starts` (P,) their first observations, `at` (R,) the
    period of each among those, `totals` (P,) sums of weights. `logs` (R,) and `attributes` (R, K) have their
    `mean_logs` (P,) and `means` (P, K) taken out and are times `roots` (R,) of the weights. `lengths` (K,) are those
    of the weighted attributes before. `variation` is the weighted sum of squares of logs about their mean.
    """

    periods: Positions
    products: Positions
    shape: tuple[int, int]
    present: Positions
    starts: Positions
    at: Positions
    roots: Array
    totals: Array
    logs: Array
    mean_logs: Array
    attributes: Array
    means: Array
    lengths: Array
    variation: float

    def is_rounding(self, squares: float) -> bool:
        """Whether a weighted sum of squares of logs is nothing but rounding."""
        return squares <= SAME**2 * float(self.totals.sum())


@dataclass(frozen=True, slots=True)
class _Fit:
    """Estimates: of P levels and K' coefficients, the weighted residuals (R,), their variance σ²."""

    levels: Array
    level_errors: Array
    coefficients: Array
    coefficient_errors: Array
    residuals: Array
    variance: float
    freedom: int


def _gather(prices: Array, weights: Array, known: Array) -> _Sample:
    periods, products = np.nonzero(weights > 0)
    present, starts, at = np.unique(periods, return_index=True, return_inverse=True)
    weight, logs, attributes = weights[periods, products], np.log(prices[periods, products]), known[products]
    totals = _sum(weight, starts)
    mean_logs = _sum(weight * logs, starts) / totals
    means = _sum(weight[:, None] * attributes, starts) / totals[:, None]
    roots = np.sqrt(weight)
    overall = (weight @ logs) / weight.sum() if len(logs) else 0.0
    return _Sample(
        periods=periods,
        products=products,
        shape=(prices.shape[0], prices.shape[1]),
        present=present,
        starts=starts,
        at=at,
        roots=roots,
        totals=totals,
        logs=roots * (logs - mean_logs[at]),
        mean_logs=mean_logs,
        attributes=roots[:, None] * (attributes - means[at]),
        means=means,
        lengths=np.sqrt((weight[:, None] * attributes**2).sum(axis=0)),
        variation=float(weight @ (logs - overall) ** 2),
    )


def _fit(sample: _Sample, basis: Basis, errors: Errors, least: int) -> _Fit:
    count = len(sample.logs)
    parameters = len(sample.present) + len(basis.kept)
    if count < least or count <= parameters:
        raise TooFewObservations(count, parameters, least)
    along = basis.vectors.T @ sample.logs
    residuals = sample.logs - basis.vectors @ along
    if sample.is_rounding(float(residuals @ residuals)):
        residuals = np.zeros(count)
    freedom = count - parameters
    variance = float(residuals @ residuals) / freedom
    squares = residuals**2 * (count / freedom) if errors == "HC1" else np.full(count, variance)
    inverse = np.linalg.inv(basis.triangle).astype(np.float64)
    coefficients = inverse @ along
    coefficient_errors, level_errors = _find_errors(sample, basis, inverse, squares)
    levels = sample.mean_logs - sample.means[:, basis.kept] @ coefficients
    return _Fit(levels, level_errors, coefficients, coefficient_errors, residuals, variance, freedom)


def _find_errors(sample: _Sample, basis: Basis, inverse: Array, squares: Array) -> tuple[Array, Array]:
    """(K',) standard errors of coefficients and (P,) of levels against the first, from `squares` (R,).

    Those are what is expected of the squared weighted residuals: σ² of all, or each its own. An estimate is
    Σ_r a[r]·√w[r]·ε[r], so its variance is Σ_r a[r]²·squares[r]; of a level a[r] is √w[r]/W of its own period,
    less that of the first, less v[r]·`moves`, with v the vectors of the basis.
    """
    vectors = basis.vectors
    meat = vectors.T @ (vectors * squares[:, None])
    moves = (sample.means - sample.means[:1])[:, basis.kept] @ inverse
    own = _sum(sample.roots**2 * squares, sample.starts) / sample.totals**2
    with_own = _sum(vectors * (sample.roots * squares)[:, None], sample.starts) / sample.totals[:, None]
    variances = own + own[:1] + np.einsum("pk,kl,pl->p", moves, meat, moves)
    variances -= 2.0 * ((with_own - with_own[:1]) * moves).sum(axis=1)
    variances[:1] = 0.0
    of_coefficients = np.einsum("ik,kl,il->i", inverse, meat, inverse)
    return np.sqrt(of_coefficients), np.sqrt(np.maximum(variances, 0.0))


def _standardize(sample: _Sample, basis: Basis, fit: _Fit) -> Array:
    leverage = sample.roots**2 / sample.totals[sample.at] + (basis.vectors**2).sum(axis=1)
    spread = np.sqrt(fit.variance * np.maximum(1.0 - leverage, 0.0))
    ratios = np.full(len(spread), np.nan)
    np.divide(fit.residuals, spread, out=ratios, where=(leverage < FULL_LEVERAGE) & (spread > 0))
    standardized = np.full(sample.shape, np.nan)
    standardized[sample.periods, sample.products] = ratios
    return standardized


def _find_predictable(sample: _Sample, basis: Basis, known: Array, periods: int) -> Flags:
    """(T, N) whether a product's dropped attributes are, in that period, what its kept ones make them there.

    Otherwise its price depends on something that the regression has not seen apart from the rest.
    """
    predictable = np.ones((periods, len(known)), dtype=bool)
    kept = known[:, basis.kept]
    for number, position in enumerate(basis.dropped):
        combined = basis.combined[:, number]
        shift = sample.means[:, position] - sample.means[:, basis.kept] @ combined
        apart = known[:, position] - kept @ combined
        size = np.abs(known[:, position]).max(initial=0.0)
        predictable[sample.present] &= np.abs(apart - shift[:, None]) <= AGREEING * size
    return predictable


def _adjust_r2(sample: _Sample, fit: _Fit) -> float:
    """1 − (1 − R²)·(n − 1)/df, R² about the weighted mean of all log prices."""
    if sample.is_rounding(sample.variation):
        return float("nan")
    unexplained = fit.variance * fit.freedom / sample.variation
    return 1.0 - unexplained * (len(sample.logs) - 1) / fit.freedom


def _sum(values: Array, starts: Positions) -> Array:
    """Sums over the observations of each period."""
    if len(starts) == 0:
        return np.zeros((0, *values.shape[1:]))
    sums: Array = np.add.reduceat(values, starts, axis=0)
    return sums


def _spread(values: Array, present: Positions, periods: int) -> Array:
    """(T,) array of the values of the P periods present, NaN in the others."""
    spread = np.full(periods, np.nan)
    spread[present] = values
    return spread
