"""Kernels and their twins against published figures; citations in tests/reference/README.md."""

from collections.abc import Callable

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.kernels import tolerances, twins
from tests.kernels.variants import GEKS_FORMULAS, Form, rolling_geks
from tests.reference.published import Case, cases, dataset
from tillwright.choices import BILATERAL_FORMULAS
from tillwright.kernels import bilateral

Array = NDArray[np.float64]
FORMS: dict[str, Form] = {
    "fixedbase": "direct",
    "chained": "chained",
    "fb": "direct",
    "ch": "chained",
}
FORMS |= {"chain": "chained", "direct": "direct"}


def covered(prefix: str, formulas: tuple[str, ...]) -> list[Case]:
    """Published cases of one family that the given formulas can compute."""
    return [case for case in cases(prefix) if case.formula in formulas]


def kernel(prices: Array, quantities: Array, case: Case) -> Array:
    """The case computed by the kernels; month to month is the first super-diagonal."""
    if case.linking == "m2m":
        levels = bilateral.pair_levels(prices, quantities, case.formula)
        return np.concatenate(([1.0], np.diagonal(levels, offset=1)))
    return bilateral.series(prices, quantities, case.formula, form=FORMS[case.linking])


def twin(prices: Array, quantities: Array, case: Case) -> Array:
    """The case computed by the loop twins."""
    if case.linking == "m2m":
        pairs = twins.pair_levels(prices, quantities, case.formula)
        return np.array([1.0, *(pairs[t - 1][t] for t in range(1, len(pairs)))])
    compute = twins.direct if FORMS[case.linking] == "direct" else twins.chained
    return np.array(compute(prices, quantities, case.formula))


def check(compute: Callable[[Array, Array, Case], Array], case: Case, base: float) -> None:
    """Compare with the printed figures, quoting the source when they differ."""
    print(case.citation)
    data = dataset(case.id.split("_")[0])
    found = base * compute(data.prices, data.quantities, case)
    np.testing.assert_allclose(found, case.expected, rtol=0, atol=case.tolerance, err_msg=case.citation)


BASES = {"artificial_": 1.0, "chaindrift_": 1.0, "elementary_": 100.0}
FAMILIES = list(BASES)
ALL = tuple(twins.FORMULAS)


@pytest.mark.parametrize(
    ("case", "base"),
    [pytest.param(c, BASES[f], id=c.id) for f in FAMILIES for c in covered(f, BILATERAL_FORMULAS)],
)
def test_kernels_match_published_figures(case: Case, base: float) -> None:
    check(kernel, case, base)


@pytest.mark.parametrize(
    ("case", "base"),
    [pytest.param(c, BASES[f], id=c.id) for f in FAMILIES for c in covered(f, ALL)],
)
def test_twins_match_published_figures(case: Case, base: float) -> None:
    check(twin, case, base)


def test_every_formula_on_offer_has_a_twin() -> None:
    assert set(BILATERAL_FORMULAS) <= set(twins.FORMULAS)


def test_only_the_harmonic_laspeyres_cases_are_left_out() -> None:
    left_out = {c.id for f in FAMILIES for c in cases(f) if c.formula not in ALL}
    assert left_out == {
        "artificial_expenditure",
        "artificial_fixedbase_harm_laspeyres",
        "artificial_chained_harm_laspeyres",
    }


def test_artificial_data_has_the_published_expenditures() -> None:
    (case,) = cases("artificial_expenditure")
    data = dataset("artificial")
    spent = (data.prices * data.quantities).sum(axis=1)
    np.testing.assert_allclose(spent, case.expected, rtol=0, atol=case.tolerance)


@pytest.mark.parametrize("formula", GEKS_FORMULAS)
def test_geks_ends_at_one_in_the_chain_drift_example(formula: str) -> None:
    # Diewert (2021), chain drift paper, Tables 1-2: period 4 repeats period 1, so every
    # transitive index over the four periods ends at one.
    data = dataset("chaindrift")
    pairs = bilateral.pair_levels(data.prices, data.quantities, formula)
    (levels,) = rolling_geks(np.log(pairs), 4)
    assert abs(np.exp(levels[-1]) - 1) <= tolerances.EXACT
    assert levels[0] == 0.0


@pytest.mark.parametrize("formula", ["fisher", "tornqvist"])
def test_chained_superlative_indexes_drift_in_the_chain_drift_example(formula: str) -> None:
    data = dataset("chaindrift")
    chained = bilateral.series(data.prices, data.quantities, formula, form="chained")
    assert chained[-1] < 1 - tolerances.FAILS
