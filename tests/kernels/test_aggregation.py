"""Aggregation against published tables, a loop twin of its definition, and the properties it must have."""

from dataclasses import dataclass, replace
from math import isfinite

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.kernels import tolerances
from tests.reference.published import Case, cases
from tillwright.kernels.chaining import Aggregate, WeightYear, aggregate, update_weights

Array = NDArray[np.float64]

AS_THEY_STAND = np.array([], dtype=np.intp)
# Headings of the published tables: 0 total, 1 G over A, B, C, 2 H over D, E, then A to E themselves.
PRINTED_PATHS = np.array([[3, 1, 0], [4, 1, 0], [5, 1, 0], [6, 2, 0], [7, 2, 0]])
TOTAL, G, H, ELEMENTARY = 0, 1, 2, slice(3, 8)

# The smallest tree: all items over M and S, each a heading of its own.
M, TWO_PATHS, HALVES = 1, np.array([[1, 0], [2, 0]]), np.array([50.0, 50.0])

LINKS = ((0, 0, 11), (11, 12, 23), (23, 24, 35))
PERIODS = 36
BASES = {
    "as they stand": (AS_THEY_STAND, AS_THEY_STAND, AS_THEY_STAND),
    "mean of the year before": (AS_THEY_STAND, np.arange(12), np.arange(12, 24)),
    "first period": (np.array([0]), np.array([0]), np.array([0])),
}
MISSING = ("nothing", "gaps", "most", "late starts", "early ends", "links", "a heading", "whole periods", "all kinds")


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


def make_tree(rng: np.random.Generator, components: int) -> tuple[NDArray[np.intp], int]:
    """Paths of components, some alone below a heading, some sharing it, some under a group at once; and H."""
    above = {1: [0], 2: [0], 3: [1, 0], 4: [3, 1, 0]}
    lines: list[list[int]] = []
    headings = len(above) + 1
    for i in range(components):
        group = 1 + i if i < 4 else int(rng.integers(0, 5))
        ancestry = [group, *above[group]] if group else [0]
        kind = rng.random() if i >= 4 else 1.0
        if kind < 0.6:
            lines.append(lines[-1] if kind < 0.3 else ancestry)
        else:
            lines.append([headings, *ancestry])
            headings += 1
    depth = max(map(len, lines))
    return np.array([line + [0] * (depth - len(line)) for line in lines]), headings


def find_missing(rng: np.random.Generator, kind: str, paths: NDArray[np.intp]) -> NDArray[np.bool_]:
    """(T, L) where there is no level."""
    shape, period = (PERIODS, len(paths)), np.arange(PERIODS)[:, None]
    kinds = {
        "nothing": np.zeros(shape, dtype=bool),
        "gaps": rng.random(shape) < 0.2,
        "late starts": period < rng.integers(-15, 30, len(paths)),
        "early ends": period > rng.integers(5, 60, len(paths)),
        "links": np.isin(period, [link for link, _, _ in LINKS]) & (rng.random(shape) < 0.5),
        "a heading": np.broadcast_to((paths == rng.integers(1, 5)).any(axis=1), shape),
        "whole periods": np.broadcast_to(np.isin(period, [7, 11, 30]), shape),
    }
    kinds["all kinds"] = np.logical_or.reduce(list(kinds.values()))
    kinds["most"] = rng.random(shape) < 0.7
    return kinds[kind]


def make(seed: int, missing: str = "nothing", base: str = "as they stand") -> Made:
    """A random tree with random levels and weights."""
    rng = np.random.default_rng(seed)
    components = int(rng.integers(6, 14))
    paths, headings = make_tree(rng, components)
    levels = np.exp(np.cumsum(rng.normal(0.003, 0.03, (PERIODS, components)), axis=0)) * 100
    levels[find_missing(rng, missing, paths)] = np.nan
    pairs = zip(LINKS, BASES[base], strict=True)
    years = [WeightYear(*link, rng.random(components) + 0.1, periods) for link, periods in pairs]
    return Made(levels, years, paths, headings)


def with_own_headings(made: Made) -> Made:
    """The same with a heading for every component, numbered from `made.headings` on."""
    components = len(made.paths)
    paths = np.column_stack([made.headings + np.arange(components), made.paths])
    return replace(made, paths=paths, headings=made.headings + components)


def below(made: Made, heading: int) -> list[int]:
    """Components below a heading."""
    return [i for i, line in enumerate(made.paths.tolist()) if heading in line]


def carry(year: WeightYear, complete: Array) -> list[float]:
    """Weights of a year at prices of its link."""
    base = year.base.tolist() or [year.link]
    means = [sum(complete[b, i] for b in base) / len(base) for i in range(len(year.weights))]
    return [float(w * complete[year.link, i] / means[i]) for i, w in enumerate(year.weights)]


def movement(made: Made, complete: Array, year: WeightYear, i: int, t: int) -> float:
    """M(t) of the nearest heading above component i that has one."""
    weights, link = carry(year, complete), complete[year.link]
    for h in made.paths[i].tolist():
        total = moved = 0.0
        for j in below(made, h):
            if isfinite(made.levels[t - 1, j]) and isfinite(made.levels[t, j]):
                v = float(weights[j] * complete[t - 1, j] / link[j])
                total, moved = total + v, moved + v * float(made.levels[t, j] / made.levels[t - 1, j])
        if total > 0:
            return moved / total
    return 1.0


def complete_levels(made: Made) -> Array:
    """C of every component; before its first level it is kept at 1 in the first period, then put right."""
    complete = np.ones_like(made.levels)
    for year in made.years:
        for t in range(year.first, year.last + 1):
            for i, level in enumerate(made.levels[t].tolist()):
                has, new = isfinite(level), not any(map(isfinite, made.levels[:t, i]))
                if t > 0 and (new or not has):
                    complete[t, i] = complete[t - 1, i] * movement(made, complete, year, i, t)
                if has and new:
                    complete[:t, i] *= level / complete[t, i]
                if has:
                    complete[t, i] = level
    return complete


def twin(made: Made) -> Aggregate:
    """Every result by loops over the definition in the docstring."""
    complete = complete_levels(made)
    index, weight, imputed, points = (np.zeros((len(complete), made.headings)) for _ in range(4))
    index[0] = 1
    for year in made.years:
        weights = carry(year, complete)
        for t in range(year.first, year.last + 1):
            relative = complete[t] / complete[year.link]
            for h in range(made.headings):
                of_h = sum(weights[i] for i in below(made, h))
                ratio = sum(weights[i] * relative[i] for i in below(made, h)) / of_h
                index[t, h] = index[year.link, h] * ratio
                weight[t, h] = of_h / sum(weights)
                imputed[t, h] = sum(weights[i] for i in below(made, h) if not isfinite(made.levels[t, i])) / of_h
                points[t, h] = points[year.link, h] + index[year.link, 0] * (ratio - 1) * of_h / sum(weights)
    for h in range(made.headings):
        if not any(map(isfinite, made.levels[:, below(made, h)].ravel())):
            index[:, h] = np.nan
    return Aggregate(index, weight, imputed, points)


def printed_two_stage(case: Case) -> Array:
    """Levels in per cent of all headings of the two-stage table."""
    levels = np.array(case.inputs["elementary_indices_printed"]).T
    years = [WeightYear(0, 0, len(levels) - 1, np.array(case.inputs["weights"]), AS_THEY_STAND)]
    return 100 * aggregate(levels, years, PRINTED_PATHS, 8).index


def printed_chain(case: Case) -> Array:
    """Levels in per cent of all headings of the chain-linking table: 1998, Nov, Dec, then Jan, Feb, Mar."""
    old, new = np.array(case.inputs["indices_old"]).T, np.array(case.inputs["indices_new"]).T
    levels = np.vstack([old, old[-1] * new[1:] / 100])
    weights = np.array(case.inputs["weights_old"]), np.array(case.inputs["weights_new"])
    years = [WeightYear(0, 0, 2, weights[0], AS_THEY_STAND), WeightYear(2, 3, 5, weights[1], AS_THEY_STAND)]
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
@pytest.mark.parametrize(("name", "heading"), [("total", TOTAL), ("G", G), ("H", H)])
def test_two_stage_table_of_the_manual(name: str, heading: int) -> None:
    case = one(f"aggregation_{name}")
    expect(printed_two_stage(case)[:, heading], case, inputs_rounded_to=0.01)


# The same table: month-to-month links multiply to the direct elementary indexes.
def test_monthly_links_of_the_manual_multiply_to_its_direct_indexes() -> None:
    case = one("aggregation_m2m")
    levels = np.cumprod(np.array(case.inputs["month_to_month"]).T / 100, axis=0).astype(np.float64)
    years = [WeightYear(max(t - 1, 0), t, t, np.ones(5), AS_THEY_STAND) for t in range(len(levels))]
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


@pytest.mark.parametrize("base", BASES)
@pytest.mark.parametrize("missing", MISSING)
@pytest.mark.parametrize("seed", range(3))
def test_aggregation_equals_its_loop_twin(seed: int, missing: str, base: str) -> None:
    made = make(seed, missing, base)
    expected, result = twin(made), made.result()
    np.testing.assert_allclose(result.index, expected.index, rtol=tolerances.TWIN)
    np.testing.assert_allclose(result.weight, expected.weight, rtol=tolerances.TWIN)
    np.testing.assert_allclose(result.imputed, expected.imputed, rtol=0, atol=tolerances.TWIN)
    np.testing.assert_allclose(result.points, expected.points, rtol=0, atol=tolerances.TWIN)


def two(m: list[float], s: list[float], *years: WeightYear) -> Aggregate:
    """Result for M and S under all items."""
    return aggregate(np.array([m, s]).T, list(years), TWO_PATHS, 3)


# The next four: missing prices by the class mean, short run, CPI Manual (2020), ch. 6; arithmetic in the comments.
def test_a_missing_component_moves_with_the_others_and_comes_back_at_its_own_level() -> None:
    # 60/40: M rises by half, 0.6 · 1.5 + 0.4 = 1.3; then it is carried by S, which stands still.
    result = two([1, 1.5, np.nan, 1.5], [1, 1, 1, 1], WeightYear(0, 0, 3, np.array([60.0, 40.0]), AS_THEY_STAND))
    expected = [[1.0, 1.3, 1.3, 1.3], [1.0, 1.5, 1.5, 1.5]]
    np.testing.assert_allclose(result.index[:, [TOTAL, M]].T, expected, rtol=tolerances.EXACT)
    np.testing.assert_allclose(result.imputed[:, TOTAL], [0, 0, 0.6, 0], rtol=0, atol=tolerances.EXACT)


@pytest.mark.parametrize("base", [AS_THEY_STAND, np.array([0])])
def test_a_component_missing_at_the_link_comes_back_at_its_own_level(base: NDArray[np.intp]) -> None:
    # S stands still, so M is 1 at the link; half of M's doubling after it is 1.5.
    years = WeightYear(0, 0, 1, HALVES, AS_THEY_STAND), WeightYear(1, 2, 3, HALVES, base)
    index = two([1, np.nan, 1, 2], [1, 1, 1, 1], *years).index[:, [TOTAL, M]].T
    np.testing.assert_allclose(index, [[1.0, 1.0, 1.0, 1.5], [1.0, 1.0, 1.0, 2.0]], rtol=tolerances.EXACT)


def test_a_component_missing_at_one_link_has_its_own_levels_at_the_next_and_after() -> None:
    # At the first link (period 1) M is carried to 1.2 by S; from the second (period 2) on its own levels hold.
    years = [WeightYear(link, link + 1 if link else 0, link + 1, HALVES, AS_THEY_STAND) for link in range(3)]
    index = two([1, np.nan, 1.3, 1.5], [1, 1.2, 1.4, 1.4], *years).index
    np.testing.assert_allclose(index[:, M], [1, 1.2, 1.3, 1.5], rtol=tolerances.EXACT)


def test_the_first_level_of_a_late_component_counts_as_having_moved_with_the_others() -> None:
    # S rises to 1.2 and 1.5 while M is not there yet; 10 in period 2 is therefore 10/1.5 in period 0.
    year = WeightYear(0, 0, 3, HALVES, AS_THEY_STAND)
    index = two([np.nan, np.nan, 10, 20], [1, 1.2, 1.5, 1.5], year).index[:, [TOTAL, M]].T
    np.testing.assert_allclose(index, [[1.0, 1.2, 1.5, 2.25], [1.0, 1.2, 1.5, 3.0]], rtol=tolerances.EXACT)


@pytest.mark.parametrize("missing", MISSING)
def test_a_single_component_has_its_own_levels_wherever_it_has_any(missing: str) -> None:
    made = make(6, missing, "mean of the year before")
    index = with_own_headings(made).result().index[:, made.headings :]
    for own, levels in zip(index.T, made.levels.T, strict=True):
        ratio = (own / levels)[np.isfinite(levels)]
        np.testing.assert_allclose(ratio, ratio[:1].repeat(len(ratio)), rtol=tolerances.TWIN)
        assert np.isfinite(own).all() == bool(len(ratio))


# CPI Manual (2004), ch. 9 and (2020), ch. 8: a Lowe index is a Young index with price-updated weights, so that
# linking it in every period on weights updated to the link leaves it unchanged. Weights of missing components are
# updated by the movement that carries their levels.
@pytest.mark.parametrize("missing", MISSING)
@pytest.mark.parametrize("seed", range(3))
def test_price_updating_is_neutral(seed: int, missing: str) -> None:
    made, base = make(seed, missing), np.array([0])
    weights = made.years[0].weights
    direct = replace(made, years=[WeightYear(0, 0, PERIODS - 1, weights, AS_THEY_STAND)])
    stretches = [(max(t - 1, 0), t, t) for t in range(PERIODS)]
    by_base, complete = [WeightYear(*s, weights, base) for s in stretches], complete_levels(direct)
    updated = [WeightYear(*s, update_weights(weights, complete, s[0], base), AS_THEY_STAND) for s in stretches]
    for years in (by_base, updated):
        linked = replace(made, years=years).result()
        np.testing.assert_allclose(linked.index, direct.result().index, rtol=tolerances.TWIN)


# CPI Manual (2004), ch. 9: weights of a base year refer to the mean prices of that year.
def test_weights_are_updated_from_the_mean_of_the_base_periods_and_stand_without_any() -> None:
    levels, weights = np.array([[1.0, 1.0], [3.0, 1.0], [4.0, 0.5]]), np.array([0.5, 0.3])
    updated = update_weights(weights, levels, 2, np.array([0, 1]))
    np.testing.assert_allclose(updated, [0.5 * 4 / 2, 0.3 * 0.5 / 1], rtol=tolerances.EXACT)
    np.testing.assert_array_equal(update_weights(weights, levels, 2, AS_THEY_STAND), weights)


# Class mean as above: what is carried by its heading's movement keeps its share of the heading.
def test_updating_weights_is_neutral_to_a_component_imputed_by_the_same_movement() -> None:
    # A rises to 1.4, B stands still, M is missing at the link and carried to their mean, 1.2.
    levels, weights = np.array([[1.0, 1.0, 1.0], [1.4, 1.0, np.nan], [1.4, 1.0, 1.8]]), np.array([0.25, 0.25, 0.5])
    carried = update_weights(weights, np.array([[1.0, 1.0, 1.0], [1.4, 1.0, 1.2]]), 1, np.array([0]))
    np.testing.assert_allclose(carried, [0.35, 0.25, 0.6], rtol=tolerances.EXACT)
    years = [WeightYear(0, 0, 1, weights, AS_THEY_STAND), WeightYear(1, 2, 2, weights, np.array([0]))]
    result = aggregate(levels, years, np.array([[1, 0], [2, 0], [3, 0]]), 4)
    np.testing.assert_allclose(result.weight[2], [1, 0.35 / 1.2, 0.25 / 1.2, 0.5], rtol=tolerances.EXACT)
    # All items: 0.25 · 1.4 + 0.25 + 0.5 · 1.8, as if there were no link.
    np.testing.assert_allclose(result.index[:, TOTAL], [1, 1.2, 1.5], rtol=tolerances.EXACT)


# CPI Manual (2004), ch. 9: indexes of this kind are consistent in aggregation.
@pytest.mark.parametrize("missing", [kind for kind in MISSING if kind not in {"a heading", "all kinds"}])
def test_aggregation_in_two_steps_equals_aggregation_in_one(missing: str) -> None:
    made = with_own_headings(make(1, missing))
    once = made.result().index
    below_top = np.array([line[line > 0][-1] for line in made.paths])
    own = np.unique(below_top)
    years = [replace(y, weights=np.array([y.weights[below_top == h].sum() for h in own])) for y in made.years]
    paths = np.column_stack([np.arange(len(own)) + 1, np.zeros(len(own), dtype=int)])
    twice = aggregate(once[:, own], years, paths, len(own) + 1).index
    np.testing.assert_allclose(twice, once[:, [0, *own]], rtol=tolerances.TWIN)


@pytest.mark.parametrize("base", BASES)
@pytest.mark.parametrize("missing", MISSING)
def test_re_referencing_the_components_leaves_every_heading_unchanged(missing: str, base: str) -> None:
    made = make(2, missing, base)
    factors = np.random.default_rng(2).uniform(0.01, 100, made.levels.shape[1])
    moved = replace(made, levels=made.levels * factors).result()
    np.testing.assert_allclose(moved.index, made.result().index, rtol=tolerances.TWIN)


@pytest.mark.parametrize("base", BASES)
def test_weights_are_shares_and_those_of_a_heading_are_the_sum_of_what_lies_below(base: str) -> None:
    made = make(7, "gaps", base)
    weight = with_own_headings(made).result().weight
    assert weight[:, TOTAL] == pytest.approx(1.0, abs=tolerances.EXACT)
    for h in range(made.headings):
        parts = weight[:, made.headings :][:, below(made, h)].sum(axis=1)
        np.testing.assert_allclose(weight[:, h], parts, rtol=tolerances.EXACT)


def test_heading_that_weighs_nothing_in_a_year_has_the_level_of_its_component() -> None:
    """The limit of the definition as the weight goes to 0."""
    years = [WeightYear(0, 0, 1, np.array([1.0, 0.0]), AS_THEY_STAND)]
    found = aggregate(np.array([[1.0, 1.0], [2.0, 3.0]]), years, np.array([[1, 0], [2, 0]]), 3)
    np.testing.assert_allclose(found.index, [[1.0, 1.0, 1.0], [2.0, 2.0, 3.0]], rtol=tolerances.EXACT)
