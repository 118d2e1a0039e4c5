"""Aggregation against published tables, a loop twin of its definition, and the properties it must have."""

from dataclasses import dataclass

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.kernels import tolerances
from tests.reference.published import Case, cases
from tillwright.kernels.chaining import Aggregate, WeightYear, aggregate, update_weights
from tillwright.kernels.contributions import measure_contributions, percent_change

Array = NDArray[np.float64]

# Headings of the published tables: 0 total, 1 G over A, B, C, 2 H over D, E, then A to E themselves.
PRINTED_PATHS = np.array([[3, 1, 0], [4, 1, 0], [5, 1, 0], [6, 2, 0], [7, 2, 0]])
TOTAL, G, H, ELEMENTARY = 0, 1, 2, slice(3, 8)


@dataclass(frozen=True, slots=True)
class Made:
    """Components under a random tree, over three years of monthly levels."""

    levels: Array
    years: list[WeightYear]
    paths: NDArray[np.intp]
    headings: int

    def result(self) -> Aggregate:
        """What the kernel makes of it."""
        return aggregate(self.levels, self.years, self.paths, self.headings)


def make(seed: int, missing: float = 0.0, *, whole_headings: bool = False) -> Made:
    """A tree of one top, three groups and their leaves; levels are missing at random.

    Every group keeps its first component throughout; if `whole_headings` may be missing, the first group does.
    """
    rng = np.random.default_rng(seed)
    leaves = int(rng.integers(6, 12))
    groups = np.concatenate([[0, 1, 2], rng.integers(0, 3, leaves - 3)])
    levels = np.exp(np.cumsum(rng.normal(0.003, 0.03, (36, leaves)), axis=0)) * 100
    gone = rng.random(levels.shape) < missing
    gone[0] = False
    gone[:, : 1 if whole_headings else 3] = False
    levels[gone] = np.nan
    years = [WeightYear(link, first, last, rng.random(leaves) + 0.1) for link, first, last in YEARS]
    paths = np.column_stack([np.arange(leaves) + 4, groups + 1, np.zeros(leaves, dtype=int)])
    return Made(levels, years, paths, leaves + 4)


YEARS = ((0, 0, 11), (11, 12, 23), (23, 24, 35))


def twin(made: Made) -> tuple[Array, Array]:
    """Index and imputed weight of every heading by loops over the definition in the docstring.

    A heading keeps its chain through links at which everything below it is imputed; what it shows is
    missing in periods in which nothing below it has a level.
    """
    periods, components = made.levels.shape
    index, imputed = np.full((periods, made.headings), np.nan), np.zeros((periods, made.headings))
    below = [[i for i in range(components) if h in made.paths[i]] for h in range(made.headings)]
    chain = dict.fromkeys(range(made.headings), 1.0)
    for year in made.years:
        reached: dict[int, float] = {}
        for t in range(year.first, year.last + 1):
            ratio = [made.levels[t, i] / made.levels[year.link, i] for i in range(components)]
            own: dict[int, float] = {}
            for h in range(made.headings):
                have = [i for i in below[h] if np.isfinite(ratio[i])]
                if have:
                    own[h] = sum(year.weights[i] * ratio[i] for i in have) / sum(year.weights[i] for i in have)
            filled = [
                ratio[i] if np.isfinite(ratio[i]) else own[next(h for h in made.paths[i] if h in own)]
                for i in range(components)
            ]
            for h in range(made.headings):
                total = sum(year.weights[i] for i in below[h])
                reached[h] = chain[h] * sum(year.weights[i] * filled[i] for i in below[h]) / total
                index[t, h] = reached[h] if h in own else np.nan
                imputed[t, h] = sum(year.weights[i] for i in below[h] if not np.isfinite(ratio[i])) / total
        chain = reached
    return index, imputed


def printed_two_stage(case: Case) -> Array:
    """Levels in per cent of all headings of the two-stage table."""
    levels = np.array(case.inputs["elementary_indices_printed"]).T
    years = [WeightYear(0, 0, len(levels) - 1, np.array(case.inputs["weights"]))]
    return 100 * aggregate(levels, years, PRINTED_PATHS, 8).index


def printed_chain(case: Case) -> Array:
    """Levels in per cent of all headings of the chain-linking table: 1998, Nov, Dec, then Jan, Feb, Mar."""
    old, new = np.array(case.inputs["indices_old"]).T, np.array(case.inputs["indices_new"]).T
    levels = np.vstack([old, old[-1] * new[1:] / 100])
    weights = np.array(case.inputs["weights_old"]), np.array(case.inputs["weights_new"])
    years = [WeightYear(0, 0, 2, weights[0]), WeightYear(2, 3, 5, weights[1])]
    return 100 * aggregate(levels, years, PRINTED_PATHS, 8).index


def expect(found: Array, case: Case, inputs_rounded_to: float = 0.0) -> None:
    """Compare with the printed figures; `inputs_rounded_to` is the unit that printed inputs were rounded to."""
    print(case.citation)
    allowed = case.tolerance + inputs_rounded_to / 2
    np.testing.assert_allclose(found, case.expected, rtol=0, atol=allowed, err_msg=case.citation)


def one(prefix: str) -> Case:
    (case,) = cases(prefix)
    return case


# CPI Manual (2004), ch. 9, Table 9.5; from memory, arithmetic confirmed. The elementary indexes are printed to two
# decimals, and a mean of them with weights that sum to 1 carries their rounding on: 99.4675 for the printed 99.46.
@pytest.mark.parametrize(
    ("name", "heading"), [("aggregation_G", G), ("aggregation_H", H), ("aggregation_total", TOTAL)]
)
def test_two_stage_table_of_the_manual(name: str, heading: int) -> None:
    case = one(name)
    expect(printed_two_stage(case)[:, heading], case, inputs_rounded_to=0.01)


# The same table: month-to-month links multiply to the direct elementary indexes.
def test_monthly_links_of_the_manual_multiply_to_its_direct_indexes() -> None:
    case = one("aggregation_m2m")
    levels = np.cumprod(np.array(case.inputs["month_to_month"]).T / 100, axis=0).astype(np.float64)
    years = [WeightYear(max(t - 1, 0), t, t, np.ones(5)) for t in range(len(levels))]
    expect(100 * aggregate(levels, years, PRINTED_PATHS, 8).index[:, ELEMENTARY].T, case)


# PPI Manual (2004), ch. 9, Table 9.8; seen in a published page.
@pytest.mark.parametrize("part", ["old", "new", "chain"])
@pytest.mark.parametrize(("name", "heading"), [("total", TOTAL), ("G", G), ("H", H)])
def test_chain_linking_table_of_the_manual(name: str, heading: int, part: str) -> None:
    case = one(f"chainlink_dec_{name}_{part}")
    series = printed_chain(case)[:, heading]
    expect({"old": series[:3], "new": 100 * series[2:] / series[2], "chain": series}[part], case)


# The same table, its elementary indexes in Jan, Feb, Mar; from memory, arithmetic confirmed.
def test_chain_linked_elementary_indexes_of_the_manual() -> None:
    case = one("chainlink_dec_elementary_chained")
    expect(printed_chain(case)[3:, ELEMENTARY].T, case)


@pytest.mark.parametrize("missing", [0.0, 0.1, 0.5])
@pytest.mark.parametrize("seed", range(4))
def test_aggregation_equals_its_loop_twin(seed: int, missing: float) -> None:
    made = make(seed, missing)
    index, imputed = twin(made)
    # A leaf's own heading may be without a level at a link; that is the next test's matter.
    result, wide = made.result(), slice(0, 4)
    np.testing.assert_allclose(result.index[:, wide], index[:, wide], rtol=tolerances.TWIN)
    np.testing.assert_allclose(result.imputed, imputed, rtol=0, atol=tolerances.TWIN)


@pytest.mark.parametrize("seed", range(4))
def test_headings_with_nothing_at_a_link_go_on_after_the_next(seed: int) -> None:
    made = make(seed, 0.3, whole_headings=True)
    index, _ = twin(made)
    np.testing.assert_allclose(made.result().index, index, rtol=tolerances.TWIN)


def test_a_heading_missing_at_one_link_has_an_index_once_its_components_are_back() -> None:
    # Two leaves of equal weight; the first has no level at the first link (period 1) and follows all items
    # there, so it stands at 1.2 · 1.4/1.2 = 1.4 at the second link (period 2) and moves by 1.5/1.3 after it.
    levels = np.array([[1.0, 1.0], [np.nan, 1.2], [1.3, 1.4], [1.5, 1.4]])
    years = [WeightYear(0, 0, 1, np.ones(2)), WeightYear(1, 2, 2, np.ones(2)), WeightYear(2, 3, 3, np.ones(2))]
    index = aggregate(levels, years, np.array([[1, 0], [2, 0]]), 3).index
    assert np.isnan(index[1:3, 1]).all()
    assert index[3, 1] == pytest.approx(1.4 * 1.5 / 1.3, rel=tolerances.EXACT)


# CPI Manual (2004), ch. 9 and (2020), ch. 8: a Lowe index is a Young index with price-updated weights, so that
# linking it in every period on weights updated to the link leaves it unchanged.
@pytest.mark.parametrize("seed", range(3))
def test_price_updating_is_neutral(seed: int) -> None:
    made = make(seed)
    weights, last = made.years[0].weights, len(made.levels) - 1
    direct = aggregate(made.levels, [WeightYear(0, 0, last, weights)], made.paths, made.headings)
    base = np.array([0])
    linked = [WeightYear(0, 0, 0, weights)]
    linked += [WeightYear(t, t + 1, t + 1, update_weights(weights, made.levels, t, base)) for t in range(last)]
    chained = aggregate(made.levels, linked, made.paths, made.headings)
    np.testing.assert_allclose(chained.index, direct.index, rtol=tolerances.TWIN)


# CPI Manual (2004), ch. 9: weights of a base year refer to the mean prices of that year.
def test_weights_are_updated_from_the_mean_of_the_base_periods() -> None:
    levels = np.array([[1.0, 1.0, np.nan], [3.0, 1.0, np.nan], [4.0, 0.5, np.nan]])
    updated = update_weights(np.array([0.5, 0.3, 0.2]), levels, 2, np.array([0, 1]))
    np.testing.assert_allclose(updated, [0.5 * 4 / 2, 0.3 * 0.5 / 1, 0.2], rtol=tolerances.EXACT)


# CPI Manual (2004), ch. 9: indexes of this kind are consistent in aggregation.
@pytest.mark.parametrize("seed", range(3))
def test_aggregation_in_two_steps_equals_aggregation_in_one(seed: int) -> None:
    made = make(seed)
    once = made.result().index
    inside = np.array([[(made.paths[:, 1] == g + 1)[i] for i in range(len(made.paths))] for g in range(3)])
    years = [WeightYear(y.link, y.first, y.last, inside @ y.weights) for y in made.years]
    twice = aggregate(once[:, 1:4], years, np.array([[1, 0], [2, 0], [3, 0]]), 4).index
    np.testing.assert_allclose(twice, once[:, :4], rtol=tolerances.TWIN)


@pytest.mark.parametrize("missing", [0.0, 0.2])
@pytest.mark.parametrize("seed", range(3))
def test_re_referencing_the_components_leaves_every_heading_unchanged(seed: int, missing: float) -> None:
    made = make(seed, missing)
    factors = np.random.default_rng(seed).uniform(0.01, 100, made.levels.shape[1])
    moved = aggregate(made.levels * factors, made.years, made.paths, made.headings)
    np.testing.assert_allclose(moved.index, made.result().index, rtol=tolerances.TWIN)


@pytest.mark.parametrize("missing", [0.0, 0.2])
@pytest.mark.parametrize("lag", [1, 12])
def test_contributions_add_up_to_the_change_at_every_level(lag: int, missing: float) -> None:
    made = make(5, missing)
    result = made.result()
    contributions = measure_contributions(result.points, result.index[:, 0], lag)[lag:]
    change = percent_change(result.index[:, 0], lag)[lag:]
    leaves = contributions[:, 4:]
    # DESIGN section 3: contributions add up to 1e-9 percentage points before rounding.
    np.testing.assert_allclose(leaves.sum(axis=1), change, rtol=0, atol=1e-9)
    np.testing.assert_allclose(contributions[:, 1:4].sum(axis=1), change, rtol=0, atol=1e-9)
    np.testing.assert_allclose(contributions[:, 0], change, rtol=0, atol=1e-9)
    for group in range(3):
        own = leaves[:, made.paths[:, 1] == group + 1].sum(axis=1)
        np.testing.assert_allclose(own, contributions[:, group + 1], rtol=0, atol=1e-9)


# Ribe (1999): over a link the contribution is a last-year and a this-year term (formulas as in REFERENCE.md).
@pytest.mark.parametrize("seed", range(3))
def test_contributions_over_a_link_equal_the_two_terms_of_ribe(seed: int) -> None:
    made = make(seed)
    result = made.result()
    found = measure_contributions(result.points, result.index[:, 0], 12)[:, 4:]
    total, levels = result.index[:, 0], made.levels
    last_year, this_year = (year.weights / year.weights.sum() for year in made.years[1:])
    link, link_before = 23, 11
    for t in range(24, 36):
        before = t - 12
        last = last_year * (levels[link] - levels[before]) / levels[link_before] * total[link_before] / total[before]
        this = this_year * (levels[t] - levels[link]) / levels[link] * total[link] / total[before]
        np.testing.assert_allclose(found[t], 100 * (last + this), rtol=0, atol=1e-9)


def test_weights_are_shares_and_those_of_a_heading_are_the_sum_of_what_lies_below() -> None:
    made = make(7, 0.1)
    weight = made.result().weight
    assert weight[:, 0] == pytest.approx(1.0, abs=tolerances.EXACT)
    for group in range(3):
        below = weight[:, 4:][:, made.paths[:, 1] == group + 1].sum(axis=1)
        np.testing.assert_allclose(weight[:, group + 1], below, rtol=tolerances.EXACT)
