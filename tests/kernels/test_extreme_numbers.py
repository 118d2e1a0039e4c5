"""Multilateral and base-weighted methods on extreme numbers, against 150-digit arithmetic.

Prices over 24 decades, quantities over twelve, links of next to no turnover, lone products: valid
input never gives NaN, and levels are right to EXTREME.
"""

import decimal
import itertools
import math
from collections.abc import Callable, Iterator
from decimal import Decimal
from typing import Literal

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.kernels import twins_windows
from tests.kernels.variants import FORMS, VARIANTS, Form, Onto, Splice
from tillwright.choices import BILATERAL_FORMULAS
from tillwright.kernels.methods import make_index
from tillwright.kernels.recipes import Recipe

Array = NDArray[np.float64]
Sold = tuple[Array, Array]
Row = dict[int, Decimal]
Table = list[Row]
Base = Literal["lowe", "young", "geometric-young"]

EXTREME = 1e-8
"""Relative error allowed where float64 has to reckon with shares down to 1e-36."""
DIGITS = 150

GEKS_METHODS = ("geks-jevons", "geks-fisher", "geks-tornqvist", "geks-walsh")
WINDOWED = (*GEKS_METHODS, "tpd", "tpd-unweighted", "geary-khamis")
ALL = (*WINDOWED, "similarity")
QUANTITY_METHODS = ("geks-fisher", "geks-tornqvist", "geks-walsh", "tpd", "geary-khamis", "similarity")
BASE_WEIGHTED: tuple[Base, ...] = ("lowe", "young", "geometric-young")
ONE, ZERO = Decimal(1), Decimal(0)
TIED = Decimal("1e-12")

each_method = pytest.mark.parametrize("method", ALL)
each_seed = pytest.mark.parametrize("seed", range(8))


@pytest.fixture(autouse=True)
def many_digits() -> Iterator[None]:
    """Decimal arithmetic with DIGITS digits."""
    with decimal.localcontext() as context:
        context.prec = DIGITS
        yield


# Exact twins


def table(array: Array, sold: NDArray[np.bool_]) -> Table:
    """The cells that are sold, one dictionary by product for every period."""
    return [
        {i: Decimal(float(row[i])) for i in np.flatnonzero(there).tolist()}
        for row, there in zip(array, sold, strict=True)
    ]


def solve(matrix: list[list[Decimal]], right: list[Decimal]) -> list[Decimal]:
    """Gaussian elimination with the largest pivot."""
    size = len(right)
    rows = [[*row, value] for row, value in zip(matrix, right, strict=True)]
    for k in range(size):
        pivot = max(range(k, size), key=lambda n: abs(rows[n][k]))
        rows[k], rows[pivot] = rows[pivot], rows[k]
        for n in range(k + 1, size):
            factor = rows[n][k] / rows[k][k]
            rows[n] = [a - factor * b for a, b in zip(rows[n], rows[k], strict=True)]
    found = [ZERO] * size
    for k in reversed(range(size)):
        rest = sum((rows[k][n] * found[n] for n in range(k + 1, size)), ZERO)
        found[k] = (rows[k][size] - rest) / rows[k][k]
    return found


def shares_of(prices: Row, quantities: Row) -> Row:
    """Expenditure shares of one period."""
    total = sum((prices[i] * quantities[i] for i in prices), ZERO)
    return {i: prices[i] * quantities[i] / total for i in prices}


def dummies(prices: Table, weights: Table) -> list[Decimal]:
    """Levels by the normal equations of period and product dummies."""
    products = sorted({i for row in weights for i, w in row.items() if w > 0})
    periods = len(prices)
    place = {i: periods - 1 + n for n, i in enumerate(products)}
    size = periods - 1 + len(products)
    matrix = [[ZERO] * size for _ in range(size)]
    right = [ZERO] * size
    for t, row in enumerate(weights):
        for i, weight in row.items():
            if weight == 0:
                continue
            where = [place[i]] if t == 0 else [t - 1, place[i]]
            for a in where:
                right[a] += weight * prices[t][i].ln()
                for b in where:
                    matrix[a][b] += weight
    return [ONE, *(x.exp() for x in solve(matrix, right)[: periods - 1])]


def geary_khamis(prices: Table, quantities: Table) -> list[Decimal]:
    """Levels whose inverses x solve Σ v q_t = x_t Σ p_t q_t, v = Σ φ p x, x = 1 in the first period."""
    periods = range(len(prices))
    total: Row = {}
    for row in quantities:
        for i, q in row.items():
            total[i] = total.get(i, ZERO) + q
    matrix = [[ZERO] * len(prices) for _ in periods]
    for t in periods:
        matrix[t][t] += sum((prices[t][i] * q for i, q in quantities[t].items()), ZERO)
        for z in periods:
            for i, q in quantities[t].items():
                if i in quantities[z] and total[i] > 0:
                    matrix[t][z] -= q * quantities[z][i] / total[i] * prices[z][i]
    inverse = solve([row[1:] for row in matrix[1:]], [-row[0] for row in matrix[1:]])
    return [ONE, *(1 / x for x in inverse)]


def fisher(prices: Table, quantities: Table, s: int, t: int) -> Decimal:
    """√(Laspeyres · Paasche) over matched products."""
    both = prices[s].keys() & prices[t].keys()

    def value(z: int, y: int) -> Decimal:
        return sum((prices[z][i] * quantities[y][i] for i in both), ZERO)

    return (value(t, s) / value(s, s) * value(t, t) / value(s, t)).sqrt()


def walsh(prices: Table, quantities: Table, s: int, t: int) -> Decimal:
    """Σ p_t √(q_s q_t) / Σ p_s √(q_s q_t) over matched products."""
    roots = {i: (quantities[s][i] * quantities[t][i]).sqrt() for i in prices[s].keys() & prices[t].keys()}
    above = sum((prices[t][i] * root for i, root in roots.items()), ZERO)
    return above / sum((prices[s][i] * root for i, root in roots.items()), ZERO)


def geometric(prices: Table, s: int, t: int, weights: Row) -> Decimal:
    """Π r^w."""
    return sum((w * (prices[t][i] / prices[s][i]).ln() for i, w in weights.items()), ZERO).exp()


def jevons(prices: Table, quantities: Table, s: int, t: int) -> Decimal:
    """Π r^(1/n) over matched products."""
    both = prices[s].keys() & prices[t].keys() & quantities[s].keys()
    return geometric(prices, s, t, dict.fromkeys(both, ONE / len(both)))


def tornqvist(prices: Table, quantities: Table, s: int, t: int) -> Decimal:
    """Π r^((s0 + s1)/2) over matched products."""
    both = prices[s].keys() & prices[t].keys()
    first, second = (shares_of({i: prices[z][i] for i in both}, quantities[z]) for z in (s, t))
    return geometric(prices, s, t, {i: (first[i] + second[i]) / 2 for i in both})


PAIRS: dict[str, Callable[[Table, Table, int, int], Decimal]] = {
    "geks-jevons": jevons,
    "geks-fisher": fisher,
    "geks-tornqvist": tornqvist,
    "geks-walsh": walsh,
}


def geks(prices: Table, quantities: Table, method: str) -> list[Decimal]:
    """Levels fitted to the pairs that exist; all pairs with the same weight."""
    periods = range(len(prices))
    size = len(prices)
    matrix = [[ZERO] * size for _ in periods]
    right = [ZERO] * size
    for s, t in itertools.combinations(periods, 2):
        if not prices[s].keys() & prices[t].keys():
            continue
        value = PAIRS[method](prices, quantities, s, t).ln()
        for a, b, sign in ((s, t, -1), (t, s, 1)):
            matrix[a][a] += 1
            matrix[a][b] -= 1
            right[a] += sign * value
    return [ONE, *(x.exp() for x in solve([row[1:] for row in matrix[1:]], right[1:]))]


def dissimilarity(prices: Table, quantities: Table, r: int, t: int) -> Decimal:
    """Diewert's (2021) sum of squared differences between shares and predicted shares."""
    terms = []
    for own, other in ((t, r), (r, t)):
        shares = shares_of(prices[own], quantities[own])
        both = prices[own].keys() & prices[other].keys()
        total = sum((prices[other][i] * quantities[own][i] for i in both), ZERO)
        terms += [
            (share - (prices[other][i] * quantities[own][i] / total if i in both else ZERO)) ** 2
            for i, share in shares.items()
        ]
    return sum(terms, ZERO)


def similarity(prices: Table, quantities: Table) -> list[Decimal]:
    """Each period linked on the most similar earlier one."""
    levels = [ONE]
    for t in range(1, len(prices)):
        candidates = [r for r in range(t) if prices[r].keys() & prices[t].keys()]
        distances = {r: dissimilarity(prices, quantities, r, t) for r in candidates}
        r = max(r for r in candidates if distances[r] <= min(distances.values()) + TIED)
        levels.append(levels[r] * fisher(prices, quantities, r, t))
    return levels


def exact(panel: Sold, method: str) -> list[float]:
    """The index over one window, rounded once at the end."""
    sold = ~np.isnan(panel[0])
    prices, quantities = table(panel[0], sold), table(panel[1], sold)
    if method == "tpd":
        levels = dummies(prices, [shares_of(p, q) for p, q in zip(prices, quantities, strict=True)])
    elif method == "tpd-unweighted":
        levels = dummies(prices, [dict.fromkeys(row, ONE) for row in prices])
    elif method == "geary-khamis":
        levels = geary_khamis(prices, quantities)
    elif method == "similarity":
        levels = similarity(prices, quantities)
    else:
        levels = geks(prices, quantities, method)
    return [float(x) for x in levels]


def hold(panel: Sold, method: str) -> None:
    """Whether the kernel is finite and right to EXTREME."""
    found = make_index(*panel, Recipe(method))
    assert np.isfinite(found).all()
    np.testing.assert_allclose(found, exact(panel, method), rtol=EXTREME, atol=0)


@each_method
def test_exact_twins_are_the_loop_twins_on_ordinary_numbers(method: str) -> None:
    rng = np.random.default_rng(5)
    noise = rng.normal(0, 0.3, (5, 6))
    sold = rng.random(noise.shape) < 0.7
    sold[:, 0] = True
    prices, quantities = np.where(sold, np.exp(noise), math.nan), np.where(sold, np.exp(-2 * noise), math.nan)
    expected = twins_windows.series(prices, quantities, method)
    np.testing.assert_allclose(exact((prices, quantities), method), expected, rtol=1e-12)


# Twenty-four decades


def decades(rng: np.random.Generator, low: float, high: float, shape: tuple[int, ...]) -> Array:
    """Numbers with a uniform decimal exponent."""
    return np.asarray(10.0 ** rng.uniform(low, high, shape))


def across_products(seed: int) -> Sold:
    """Products whose prices are decades apart, and move by some tens of per cent."""
    rng = np.random.default_rng(seed)
    prices = decades(rng, -11.5, 11.5, (5,)) * np.exp(rng.normal(0, 0.3, (6, 5)))
    return prices, decades(rng, -6, 6, (6, 5))


def everywhere(seed: int) -> Sold:
    """Prices that move by up to 24 decades."""
    rng = np.random.default_rng(100 + seed)
    return decades(rng, -12, 12, (5, 4)), decades(rng, -6, 6, (5, 4))


def with_gaps(panel: Sold, seed: int) -> Sold:
    """The panel with a third of its cells not sold, all periods joined by the first product."""
    sold = np.random.default_rng(seed).random(panel[0].shape) < 0.67
    sold[:, 0] = True
    return np.where(sold, panel[0], math.nan), np.where(sold, panel[1], math.nan)


@each_seed
@each_method
def test_products_that_are_decades_apart(method: str, seed: int) -> None:
    hold(across_products(seed), method)


@each_seed
@each_method
def test_products_that_are_decades_apart_with_gaps(method: str, seed: int) -> None:
    hold(with_gaps(across_products(seed), seed), method)


@each_seed
@each_method
def test_prices_that_move_by_decades(method: str, seed: int) -> None:
    hold(everywhere(seed), method)


@each_seed
@pytest.mark.parametrize(("splice", "onto"), VARIANTS)
@pytest.mark.parametrize("method", WINDOWED)
def test_splices_stay_finite_over_decades(method: str, splice: Splice, onto: Onto, seed: int) -> None:
    for panel in (across_products(seed), everywhere(seed)):
        found = make_index(*panel, Recipe(method, window=3, splice=splice, onto=onto))
        assert np.isfinite(found).all()
        assert (found > 0).all()


@pytest.mark.parametrize("form", FORMS)
@each_seed
@pytest.mark.parametrize("formula", BASE_WEIGHTED)
def test_base_weighted_formulas_over_decades(formula: Base, seed: int, form: Form) -> None:
    for panel in (across_products(seed), everywhere(seed)):
        found = make_index(*panel, Recipe(formula, form=form, weight_periods=(1, 2)))
        expected = twins_windows.base_weighted(*panel, formula, (1, 2), form)
        np.testing.assert_allclose(found, expected, rtol=EXTREME, atol=0)


@pytest.mark.parametrize("form", FORMS)
@each_seed
@pytest.mark.parametrize("formula", BILATERAL_FORMULAS)
def test_bilateral_formulas_stay_finite_over_decades(formula: str, seed: int, form: Form) -> None:
    for panel in (across_products(seed), everywhere(seed)):
        found = make_index(*panel, Recipe(formula, form=form))
        assert np.isfinite(found).all()
        assert (found > 0).all()


# Weak links


def weakly_linked(share: float, seed: int, bridge: tuple[int, ...]) -> Sold:
    """Two blocks of three periods and three products, joined by one product of next to no turnover."""
    rng = np.random.default_rng(seed)
    prices, quantities = np.exp(rng.normal(0, 0.3, (6, 7))), np.exp(rng.normal(0, 0.3, (6, 7)))
    for unsold in ((slice(0, 3), slice(3, 6)), (slice(3, 6), slice(0, 3))):
        prices[unsold] = math.nan
    prices[[t for t in range(6) if t not in bridge], 6] = math.nan
    quantities[:, 6] *= share
    return prices, np.where(np.isnan(prices), math.nan, quantities)


@each_seed
@pytest.mark.parametrize("bridge", [(2, 3), (0, 5), (0, 1, 2, 3, 4, 5)], ids=["adjacent", "ends", "all"])
@pytest.mark.parametrize("share", [1e-3, 1e-6, 1e-9])
@each_method
def test_blocks_joined_by_one_product_of_next_to_no_turnover(
    method: str, share: float, bridge: tuple[int, ...], seed: int
) -> None:
    if method == "similarity" and bridge == (0, 5):
        pytest.skip("period 3 has no earlier period with a product in common")
    hold(weakly_linked(share, seed, bridge), method)


# Lone products and products that nobody buys


@each_method
def test_one_product_only_is_its_price(method: str) -> None:
    prices = np.array([[1e-12], [3e12], [2.0], [1e-12]])
    quantities = np.array([[1e6], [1e-6], [1.0], [5.0]])
    np.testing.assert_allclose(make_index(prices, quantities, Recipe(method)), prices[:, 0] / 1e-12, rtol=EXTREME)
    for splice, onto in VARIANTS:
        found = make_index(prices, quantities, Recipe(method, window=2, splice=splice, onto=onto))
        np.testing.assert_allclose(found, prices[:, 0] / 1e-12, rtol=EXTREME)


@each_seed
@each_method
def test_periods_of_one_product(method: str, seed: int) -> None:
    prices, quantities = across_products(seed)
    prices[2, 1:] = math.nan
    prices[4, :-1] = math.nan
    hold((prices, np.where(np.isnan(prices), math.nan, quantities)), method)


@each_method
def test_one_period_is_one(method: str) -> None:
    found = make_index(np.array([[1e-12, 1e12]]), np.array([[1e6, 1e-6]]), Recipe(method))
    np.testing.assert_array_equal(found, [1.0])


@each_seed
@pytest.mark.parametrize("method", QUANTITY_METHODS)
def test_product_that_nobody_buys_does_not_weigh(method: str, seed: int) -> None:
    prices, quantities = across_products(seed)
    quantities[:, 2] = 0.0
    others = [0, 1, 3, 4]
    for window in (None, 3):
        found = make_index(prices, quantities, Recipe(method, window=window))
        without = make_index(prices[:, others], quantities[:, others], Recipe(method, window=window))
        np.testing.assert_allclose(found, without, rtol=EXTREME, atol=0)
    hold((prices, quantities), method)


@pytest.mark.parametrize("method", ["geks-jevons", "tpd-unweighted"])
def test_price_of_a_product_that_nobody_buys_counts_in_methods_on_prices_alone(method: str) -> None:
    prices, quantities = across_products(1)
    plain = make_index(prices, quantities, Recipe(method))
    quantities[:, 2] = 0.0
    np.testing.assert_allclose(make_index(prices, quantities, Recipe(method)), plain, rtol=EXTREME, atol=0)
