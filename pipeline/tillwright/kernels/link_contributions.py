"""What each product contributes to a bilateral comparison: parts that add up to its log exactly."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from tillwright.kernels.means import logarithmic_mean, shares
from tillwright.kernels.pairs import Array, Positions
from tillwright.kernels.sato_vartia import weigh


@dataclass(frozen=True, slots=True)
class Link:
    """(K, n) prices and quantities of the two sides of K comparisons, 0 where a product is not matched.

    `weights` (n,) are those of a period of their own; a product without is not matched.
    """

    p0: Array
    q0: Array
    p1: Array
    q1: Array
    weights: Array | None

    @property
    def matched(self) -> Array:
        """1 where a product is priced on both sides."""
        return (self.p0 > 0).astype(np.float64)

    @property
    def logs(self) -> Array:
        """Log price relatives, 0 where not matched."""
        both = self.p0 > 0
        return np.log(np.where(both, self.p1, 1.0)) - np.log(np.where(both, self.p0, 1.0))

    @property
    def relatives(self) -> Array:
        """Price relatives, 0 where not matched."""
        relatives: Array = np.exp(self.logs) * self.matched
        return relatives

    @property
    def inverse(self) -> Array:
        """Inverse price relatives, 0 where not matched."""
        inverse: Array = np.exp(-self.logs) * self.matched
        return inverse


def contribute(
    formula: str,
    prices: Array,
    quantities: Array | None,
    base: Positions,
    current: Positions,
    weights: Array | None = None,
) -> Array:
    """(K, N) contributions of each product to the log index of K comparisons; rows add up to it.

    A geometric mean Π r^w has the parts w·ln r. A ratio of sums A/B = Σ a_i / Σ b_i has the parts
    (a_i − b_i) / L(A, B), since ln(A/B) = (A − B)/L(A, B) with L the logarithmic mean. Fisher and CSWD
    have the mean of the parts of their two sides.

    Parameters
    ----------
    formula : a bilateral formula.
    prices, quantities : (T, N) arrays; NaN = not sold.
    base, current : (K,) positions of the two sides.
    weights : (N,) for formulas with weights of a period of their own; see `kernels.bilateral.series`.

    Returns
    -------
    0 where a product is not priced on both sides.

    Reference: Vartia (1976) and Balk (2008), Price and Quantity Index Numbers, §4.2, for the
    logarithmic mean of sums.
    """
    matched = np.isfinite(prices[base]) & np.isfinite(prices[current])
    if weights is not None:
        matched &= weights > 0

    def side(values: Array | None, rows: Positions) -> Array:
        return np.where(matched, 1.0 if values is None else values[rows], 0.0)

    link = Link(side(prices, base), side(quantities, base), side(prices, current), side(quantities, current), weights)
    return _PARTS[formula](link)


def ratio_parts(above: Array, below: Array) -> Array:
    """(…, n) parts of ln(Σ above / Σ below): (above − below) / L(Σ above, Σ below)."""
    total_above, total_below = above.sum(axis=-1, keepdims=True), below.sum(axis=-1, keepdims=True)
    mean = logarithmic_mean(total_above, total_below)
    parts: Array = (above - below) / np.where(mean > 0, mean, 1.0)
    return parts


def _carli(link: Link) -> Array:
    return ratio_parts(link.relatives, link.matched)


def _harmonic(link: Link) -> Array:
    return ratio_parts(link.matched, link.inverse)


def _laspeyres(link: Link) -> Array:
    return ratio_parts(link.p1 * link.q0, link.p0 * link.q0)


def _paasche(link: Link) -> Array:
    return ratio_parts(link.p1 * link.q1, link.p0 * link.q1)


def _baskets(link: Link, basket: Array) -> Array:
    return ratio_parts(link.p1 * basket, link.p0 * basket)


def _geometric(link: Link, values: Array) -> Array:
    return shares(values) * link.logs


def _arithmetic(link: Link, values: Array) -> Array:
    return ratio_parts(values * link.relatives, values)


def _tornqvist(link: Link) -> Array:
    return 0.5 * (_geometric(link, link.p0 * link.q0) + _geometric(link, link.p1 * link.q1))


def _own_weights(link: Link) -> Array:
    assert link.weights is not None
    return np.where(link.matched > 0, link.weights, 0.0)


_PARTS: dict[str, Callable[[Link], Array]] = {
    "jevons": lambda link: _geometric(link, link.matched),
    "dutot": lambda link: ratio_parts(link.p1, link.p0),
    "carli": _carli,
    "harmonic": _harmonic,
    "cswd": lambda link: 0.5 * (_carli(link) + _harmonic(link)),
    "laspeyres": _laspeyres,
    "paasche": _paasche,
    "fisher": lambda link: 0.5 * (_laspeyres(link) + _paasche(link)),
    "walsh": lambda link: _baskets(link, np.sqrt(link.q0 * link.q1)),
    "marshall-edgeworth": lambda link: _baskets(link, link.q0 + link.q1),
    "geometric-laspeyres": lambda link: _geometric(link, link.p0 * link.q0),
    "geometric-paasche": lambda link: _geometric(link, link.p1 * link.q1),
    "tornqvist": _tornqvist,
    "palgrave": lambda link: _arithmetic(link, shares(link.p1 * link.q1)),
    "sato-vartia": lambda link: weigh(link.p0 * link.q0, link.p1 * link.q1) * link.logs,
    "lowe": lambda link: _baskets(link, _own_weights(link)),
    "young": lambda link: _arithmetic(link, shares(_own_weights(link))),
    "geometric-young": lambda link: _geometric(link, _own_weights(link)),
}
