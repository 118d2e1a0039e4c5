"""Levels of places in a network, from what is known between pairs of them.

Both solutions eliminate one node after the other and use no subtraction on what links the nodes, so
that they keep their digits where only a trickle of turnover links one part of a window to another.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from tillwright.kernels.pairs import Array

Flags = NDArray[np.bool_]


def fit_levels(weights: Array, flows: Array) -> Array:
    """(..., n) levels π that minimise Σ_{s<t} w[s,t]·(y[s,t] − (π_t − π_s))², the first one 0.

    Eliminating node k joins its neighbours by weights w[s,k]·w[k,t]/W_k (star to mesh).

    Parameters
    ----------
    weights : (..., n, n) symmetric weights, 0 = the pair says nothing; the diagonal is not read.
    flows : (..., n, n) w·y, antisymmetric.

    Returns
    -------
    0 at nodes without any weight.

    Reference: normal equations of weighted least squares as a graph Laplacian (Rao 2005; elimination
    without cancellation as in Grassmann, Taksar & Heyman 1985).
    """
    weights, flows = weights.copy(), flows.copy()
    size = weights.shape[-1]
    levels = np.zeros(weights.shape[:-1])
    for k in range(size - 1, 0, -1):
        link, flow = weights[..., :k, k], flows[..., :k, k]
        part = link / _or_one(link.sum(axis=-1))[..., None]
        weights[..., :k, :k] += link[..., :, None] * part[..., None, :]
        flows[..., :k, :k] += flow[..., :, None] * part[..., None, :] - part[..., :, None] * flow[..., None, :]
    for k in range(1, size):
        link = weights[..., :k, k]
        pull = (link * levels[..., :k] + flows[..., :k, k]).sum(axis=-1)
        levels[..., k] = pull / _or_one(link.sum(axis=-1))
    return levels


def balance(rates: Array) -> Array:
    """(..., n) positive u with Σ_t c[s,t]·u_t = u_s·Σ_t c[t,s] for every s, up to a common factor.

    The stationary vector of a Markov chain with rates c[s,t] from t to s, every entry of it to
    nearly full relative precision.

    Parameters
    ----------
    rates : (..., n, n), not negative; the diagonal is not read. A node without rates gets 1.

    Reference: Grassmann, Taksar & Heyman (1985), Operations Research 33.
    """
    rates = rates.copy()
    size = rates.shape[-1]
    leaving = np.ones(rates.shape[:-1])
    for k in range(size - 1, 0, -1):
        leaving[..., k] = _or_one(rates[..., :k, k].sum(axis=-1))
        onward = rates[..., :k, k] / leaving[..., k, None]
        rates[..., :k, :k] += onward[..., :, None] * rates[..., k, None, :k]
    levels = np.ones(rates.shape[:-1])
    for k in range(1, size):
        arriving = (rates[..., k, :k] * levels[..., :k]).sum(axis=-1)
        levels[..., k] = np.where(arriving > 0, arriving / leaving[..., k], 1.0)
    return levels


def find_groups(linked: Flags, present: Flags) -> list[list[list[int]]]:
    """For each of B networks, the groups of nodes that no link joins, where there is more than one.

    Parameters
    ----------
    linked : (B, n, n) symmetric; present : (B, n), nodes to look at.

    Returns
    -------
    A list of B lists: empty where the present nodes hang together, else the positions of each group in the
    order of their first members.
    """
    both = present[:, :, None] & present[:, None, :]
    reach = (linked & both) | np.eye(linked.shape[-1], dtype=bool)
    found: list[list[list[int]]] = [[] for _ in reach]
    open_ones = np.flatnonzero((~reach & both).any(axis=(1, 2)))
    if open_ones.size == 0:
        return found
    closed = reach[open_ones].astype(np.float32)
    for _ in range(max(int(np.ceil(np.log2(reach.shape[-1]))), 1)):
        closed = ((closed @ closed) > 0).astype(np.float32)
    for position, joined in zip(open_ones, closed > 0, strict=True):
        here = present[position]
        leaders = joined.argmax(axis=1)
        groups = [np.flatnonzero((leaders == leader) & here).tolist() for leader in np.unique(leaders[here])]
        found[position] = groups if len(groups) > 1 else []
    return found


def _or_one(values: Array) -> Array:
    return np.where(values > 0, values, 1.0)
