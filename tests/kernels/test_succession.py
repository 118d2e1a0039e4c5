"""Scores of relaunches against SciPy's normal densities, a loop twin, what must be monotone, and simulated pairs."""

import math
from dataclasses import fields, replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.special import expit
from scipy.stats import mannwhitneyu, norm

from tests.kernels import tolerances
from tillwright.kernels import succession
from tillwright.kernels.pairs import Array
from tillwright.kernels.succession import PRICE, SIZE, TURNOVER, Evidence, Normal, combine, compare_normals, weigh

PIECES = tuple(field.name for field in fields(Evidence))
RATIOS = tuple(name for name in PIECES if name.endswith("ratio"))
SIMULATED = 4_000


def one(**changes: float) -> Evidence:
    """A pair of which nothing is known but what is given."""
    return Evidence(**{name: np.array([changes.get(name, math.nan)]) for name in PIECES})


def score(evidence: Evidence) -> float:
    return float(combine(evidence)[0])


def random_evidence(seed: int, count: int = 200) -> Evidence:
    rng = np.random.default_rng(seed)
    pieces = {name: np.exp(rng.normal(0.0, 0.5, count)) for name in RATIOS}
    pieces["similarity"] = rng.uniform(0.0, 1.0, count)
    pieces["same_brand"] = (rng.random(count) < 0.5).astype(np.float64)
    pieces["gap"] = rng.integers(-3, 6, count).astype(np.float64)
    for values in pieces.values():
        values[rng.random(count) < 0.2] = np.nan
    return Evidence(**pieces)


def twin(evidence: Evidence, at: int) -> float:
    """The score of one pair, written from the docstring of `combine` with SciPy's densities."""
    value = {name: float(getattr(evidence, name)[at]) for name in PIECES}
    log_odds = succession.PRIOR
    if not math.isnan(value["similarity"]):
        words = succession.WORDS_SLOPE * (value["similarity"] - succession.WORDS_TURN)
        log_odds += max(words, succession.WORDS_FLOOR)
    if not math.isnan(value["same_brand"]):
        log_odds += succession.SAME_BRAND if value["same_brand"] == 1 else succession.OTHER_BRAND
    prices = [abs(math.log(value[name])) for name in ("price_ratio", "unit_price_ratio") if not math.isnan(value[name])]
    distances = [(abs(math.log(value["size_ratio"])), SIZE), (abs(math.log(value["turnover_ratio"])), TURNOVER)]
    for distance, normal in [*distances, (min(prices, default=math.nan), PRICE)]:
        if not math.isnan(distance):
            log_odds += max(density_ratio(distance, normal), normal.floor)
    if not math.isnan(value["gap"]):
        log_odds -= succession.GAP_COST * max(value["gap"] - 1, -value["gap"], 0)
    return float(expit(log_odds))


def density_ratio(distance: float, normal: Normal) -> float:
    return float(norm.logpdf(distance, scale=normal.relaunched) - norm.logpdf(distance, scale=normal.unrelated))


@pytest.mark.parametrize("seed", range(5))
def test_scores_equal_the_loop_twin(seed: int) -> None:
    evidence = random_evidence(seed)
    expected = [twin(evidence, at) for at in range(len(evidence.gap))]
    np.testing.assert_allclose(combine(evidence), expected, rtol=0, atol=tolerances.TWIN)


@pytest.mark.parametrize("normal", [SIZE, PRICE, TURNOVER])
def test_a_log_factor_is_the_ratio_of_two_normal_densities_down_to_its_floor(normal: Normal) -> None:
    distances = np.linspace(0.0, 3.0, 301)
    expected = np.array([density_ratio(float(distance), normal) for distance in distances])
    found = compare_normals(distances, normal)
    reached = expected < normal.floor
    assert 0 < reached.sum() < len(reached)
    np.testing.assert_allclose(found[~reached], expected[~reached], rtol=0, atol=tolerances.EXACT)
    assert (found[reached] == normal.floor).all()


def test_nothing_known_leaves_the_prior() -> None:
    assert score(one()) == pytest.approx(float(expit(succession.PRIOR)), abs=tolerances.EXACT)


@pytest.mark.parametrize("name", PIECES)
def test_an_unknown_piece_counts_nothing(name: str) -> None:
    evidence = random_evidence(9)
    gone = replace(evidence, **{name: np.full_like(evidence.gap, np.nan)})
    before, after = weigh(evidence), weigh(gone)
    changed = (before != after).any(axis=1)
    assert changed.sum() == 1
    if name not in {"price_ratio", "unit_price_ratio"}:
        assert (after[changed] == 0).all()


SHARE = st.floats(0.0, 1.0)
DISTANCE = st.floats(0.0, 5.0)
BASE = st.integers(0, 1000)


def both(base: int, name: str, lower: float, higher: float) -> tuple[float, float]:
    """Scores of a random pair that has one or the other value of a piece."""
    evidence = random_evidence(base, count=1)
    low, high = (score(replace(evidence, **{name: np.array([value])})) for value in (lower, higher))
    return low, high


@given(BASE, SHARE, SHARE)
def test_the_score_rises_with_similarity(base: int, one_share: float, other_share: float) -> None:
    low, high = both(base, "similarity", *sorted((one_share, other_share)))
    assert low <= high


@given(BASE, st.sampled_from(RATIOS), DISTANCE, DISTANCE, st.booleans(), st.booleans())
def test_the_score_falls_with_the_distance_of_a_ratio_from_one(
    base: int, name: str, one_log: float, other_log: float, up: bool, other_up: bool
) -> None:
    near, far = sorted((one_log, other_log))
    ratios = [math.exp(log if sign else -log) for log, sign in ((far, up), (near, other_up))]
    low, high = both(base, name, *ratios)
    assert low <= high + tolerances.EXACT


@given(BASE)
def test_the_score_rises_with_the_same_brand(base: int) -> None:
    low, high = both(base, "same_brand", 0.0, 1.0)
    assert low < high


@pytest.mark.parametrize(("gap", "cost"), [(0, 0), (1, 0), (2, 1), (4, 3), (-1, 1), (-2, 2)])
def test_a_period_away_from_the_change_has_one_cost(gap: int, cost: int) -> None:
    found = weigh(one(gap=float(gap))).sum()
    assert found == pytest.approx(-cost * succession.GAP_COST, abs=tolerances.EXACT)


def test_a_price_held_counts_like_a_price_per_unit_held() -> None:
    shrunk_at_same_price = one(price_ratio=1.0, unit_price_ratio=1.25)
    dearer_by_as_much_as_larger = one(price_ratio=1.25, unit_price_ratio=1.0)
    assert score(shrunk_at_same_price) == score(dearer_by_as_much_as_larger) == score(one(price_ratio=1.0))


def test_scores_lie_between_0_and_1_for_the_best_and_the_worst_evidence() -> None:
    best = one(**dict.fromkeys(PIECES, 1.0))
    worst = one(**dict.fromkeys(RATIOS, 1e300), similarity=0.0, same_brand=0.0, gap=100.0)
    assert 0 < score(worst) < 1e-6
    assert 0.99 < score(best) < 1


def test_a_sister_flavour_is_not_made_good_by_all_other_evidence() -> None:
    everything = dict.fromkeys(PIECES, 1.0)
    assert score(one(**everything)) > 0.99
    assert score(one(**everything | {"similarity": 0.7})) < 0.9


def test_no_pairs_have_no_scores() -> None:
    empty = Evidence(*(np.empty(0) for _ in PIECES))
    assert combine(empty).shape == (0,)


@pytest.mark.parametrize(
    "wrong",
    [{"similarity": 1.1}, {"similarity": -0.1}, *({name: bad} for name in RATIOS for bad in (0.0, -1.0))],
)
def test_evidence_that_cannot_be_is_refused(wrong: dict[str, float]) -> None:
    with pytest.raises(ValueError, match=next(iter(wrong))):
        combine(one(**wrong))


def test_evidence_of_different_lengths_is_refused() -> None:
    with pytest.raises(ValueError, match="lengths"):
        combine(replace(one(), gap=np.zeros(2)))


def simulate(rng: np.random.Generator, count: int, *, relaunched: bool) -> Evidence:
    """Evidence on pairs: spreads as documented; one other pair in ten is another pack of the same article."""

    def ratio(normal: Normal) -> Array:
        ratios: Array = np.exp(rng.normal(0.0, normal.relaunched if relaunched else normal.unrelated, count))
        return ratios

    price, size = ratio(PRICE), ratio(SIZE)
    pack = rng.random(count) < (0.0 if relaunched else 0.1)
    kept = 1.0 - 0.4 * rng.beta(1.0, 4.0, count) if relaunched else rng.uniform(0.2, 0.9, count)
    kept = np.where(pack, 1.0 - 0.1 * rng.random(count), kept)
    brand = pack | (rng.random(count) < (0.98 if relaunched else 0.22))
    gap = rng.integers(0, 2, count) if relaunched else rng.integers(-1, 4, count)
    return Evidence(kept, brand.astype(np.float64), size, price, price / size, ratio(TURNOVER), gap.astype(np.float64))


def order_share(true: Array, false: Array) -> float:
    """Share of (relaunch, other) pairs in which the relaunch ranks higher, ties half (Mann and Whitney 1947)."""
    return float(mannwhitneyu(true, false).statistic / (len(true) * len(false)))


@pytest.mark.parametrize("seed", range(5))
def test_scores_part_simulated_relaunches_from_others_better_than_any_piece_alone(seed: int) -> None:
    rng = np.random.default_rng(seed)
    relaunches = simulate(rng, SIMULATED // 20, relaunched=True)
    others = simulate(rng, SIMULATED - SIMULATED // 20, relaunched=False)
    together = order_share(combine(relaunches), combine(others))
    for one_piece, other_piece in zip(weigh(relaunches), weigh(others), strict=True):
        assert together > order_share(one_piece, other_piece)
