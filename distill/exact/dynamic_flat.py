"""Dynamic VOC, or with any horizon h > 0, of independent Gaussian leaves under decision nodes; floor 2.

On such a tree every leaf is an affine term of its root action, so V_h(a) = E[max of independent normals].
A look at leaf i with k rollouts leaves its mean at y ~ N(mu, s^2) and its later mean at
x ~ N(mu, tau^2), with (all times the leaf's gain)

    s^2 = v^2 / (v + n / k),   sigma^2 = v'^2 / (v' + n / h),  v' = v n / (k v + n),   tau^2 = s^2 + sigma^2,

and tau^2 = v^2 / (v + n / (h + k)). The rest is in `action_grid` (the distribution of the best leaf of an
action), `rest_of_action` (one leaf against the rest) and `one_look` (the integral).
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from distill import schema
from distill.errors import RefusedError
from distill.exact import double_double as dd
from distill.exact.action_grid import Grid, N, build, expected_gain
from distill.exact.flat_rate import best_rate
from distill.exact.looks import Looks, later_sd, voc_at
from distill.exact.rest_of_action import nodes_for, rest_of
from distill.numerics import compiled
from distill.query import Priced, Query
from distill.tree import BeliefTree, Floats, Ints

__all__ = ["METHOD", "price"]

METHOD = "independent maximum, quadrature"

_LEAF = schema.LEAF
_EPS = 2.220446049250313e-16


def price(tree: BeliefTree, query: Query) -> Priced:
    """VOC or rate of every leaf of a decision-only tree with independent Gaussian leaves, horizon > 0.

    Raises RefusedError for horizon 0, chance nodes, `cov` and win/loss leaves.

    >>> from distill.record import from_record
    >>> t = from_record({"format": "belief-tree/1", "parent": [-1, 0, 0],
    ...     "kind": ["decision", "leaf", "leaf"], "mean": [None, 0, 0],
    ...     "var": [None, 1, 1], "noise_var": [None, 3, 1]})
    >>> price(t, Query()).voc.round(6)  # s f(0) with s = 1/2 and 1/sqrt 2: single leaves are static
    array([0.199471, 0.282095])
    """
    if not query.horizon > 0:
        raise RefusedError("dynamic pricing is for horizons above 0")
    if tree.var is None or tree.has_chance:
        raise RefusedError("dynamic flat pricing is for independent Gaussian leaves under decision nodes")
    assert tree.mean is not None
    assert tree.noise_var is not None
    n = len(tree.mean)
    most = query.remaining if query.rate else query.batch
    assert most is not None
    voc, error = np.empty(n), np.empty(n)
    batch = np.empty(n, dtype=np.int64)
    plain = np.ascontiguousarray  # for other layouts the kernel would be compiled anew
    value = _price(
        plain(tree.parent), plain(tree.kind), plain(tree.reward), plain(tree.discount), plain(tree.mean),
        plain(tree.var), plain(tree.noise_var), float(query.horizon), float(most), query.rate,
        voc, batch, error,
    )  # fmt: skip
    return Priced(voc, batch, value, error, METHOD)


@compiled
def _flatten(
    parent: Ints, kind: NDArray[np.int8], reward: Floats, discount: Floats, mean: Floats
) -> tuple[Floats, Floats, Ints, float]:
    """Of each leaf: its mean at the root less the largest one, its gain, its action; and that largest mean.

    Totals are carried to 32 digits, so that small differences of values at 1e12 survive.
    """
    n = len(parent)
    m = len(mean)
    gains = np.empty((n, 2))
    offsets = np.zeros((n, 2))
    action = np.empty(n, dtype=np.int64)
    totals = np.empty((m, 2))
    leaf_gain = np.empty(m)
    leaf_action = np.empty(m, dtype=np.int64)
    gains[0, 0] = 1.0
    gains[0, 1] = 0.0
    n_actions = 0
    i = 0
    top = 0
    for c in range(1, n):
        p = parent[c]
        if p == 0:
            action[c] = n_actions
            n_actions += 1
        else:
            action[c] = action[p]
        hi, lo = dd.scale(gains[p, 0], gains[p, 1], reward[c])
        hi, lo = dd.add(offsets[p, 0], offsets[p, 1], hi, lo)
        offsets[c, 0] = hi
        offsets[c, 1] = lo
        hi, lo = dd.scale(gains[p, 0], gains[p, 1], discount[c])
        gains[c, 0] = hi
        gains[c, 1] = lo
        if kind[c] == _LEAF:
            hi, lo = dd.scale(hi, lo, mean[i])
            hi, lo = dd.add(offsets[c, 0], offsets[c, 1], hi, lo)
            totals[i, 0] = hi
            totals[i, 1] = lo
            leaf_gain[i] = gains[c, 0]
            leaf_action[i] = action[c]
            if hi > totals[top, 0] or (hi == totals[top, 0] and lo > totals[top, 1]):
                top = i
            i += 1
    below = np.empty(m)
    for i in range(m):
        below[i] = dd.subtract(totals[i, 0], totals[i, 1], totals[top, 0], totals[top, 1])
    return below, leaf_gain, leaf_action, totals[top, 0]


@compiled
def _price(
    parent: Ints,
    kind: NDArray[np.int8],
    reward: Floats,
    discount: Floats,
    mean: Floats,
    var: Floats,
    noise_var: Floats,
    h: float,
    most: float,
    rate: bool,
    voc: Floats,
    batch: Ints,
    error: Floats,
) -> Floats:
    """Fills voc, batch and error of one tree, and returns V_h of its root actions."""
    d, leaf_gain, leaf_action, top = _flatten(parent, kind, reward, discount, mean)
    m = len(mean)
    n_actions = 0
    unit = 0.0
    for i in range(m):
        n_actions = max(n_actions, leaf_action[i] + 1)
        unit = max(unit, leaf_gain[i] * math.sqrt(var[i]))
        voc[i] = 0.0
        error[i] = 0.0
        batch[i] = int(min(most, 1.0) if rate else most)
    # A power of two near the tree's scale, so that scaling utilities by powers of two changes no digit.
    unit = 2.0 ** math.floor(math.log2(unit)) if unit > 0.0 else 1.0
    members = np.empty(m, dtype=np.int64)  # the uncertain leaves, action by action
    starts = np.zeros(n_actions + 1, dtype=np.int64)
    cuts = np.full(n_actions, -math.inf)
    for i in range(m):
        d[i] /= unit
        leaf_gain[i] /= unit
        if var[i] > 0.0:
            starts[leaf_action[i] + 1] += 1
        else:
            cuts[leaf_action[i]] = max(cuts[leaf_action[i]], d[i])
    starts = np.cumsum(starts)
    filled = starts.copy()
    for i in range(m):
        if var[i] > 0.0:
            members[filled[leaf_action[i]]] = i
            filled[leaf_action[i]] += 1
    centre = d[members[: starts[n_actions]]]
    rho = np.empty(len(centre))
    for q in range(len(centre)):
        i = members[q]
        rho[q] = later_sd(leaf_gain[i], var[i], noise_var[i], h)
    grids = []
    value = np.empty((n_actions, 2))  # the largest mean of an action, and what choosing later adds
    slack = np.empty(n_actions)
    for a in range(n_actions):
        one = slice(starts[a], starts[a + 1])
        grid, value[a, 0], value[a, 1], slack[a] = _action(centre[one], rho[one], cuts[a], h)
        grids.append(grid)
    out = np.empty(n_actions)
    for a in range(n_actions):
        out[a] = top + unit * (value[a, 0] + value[a, 1])
    if most == 0.0:
        return out
    for a in range(n_actions):
        rival = _best_other(value, a)
        lead = 0.0 if rival < 0 else (value[rival, 0] - value[a, 0]) + (value[rival, 1] - value[a, 1])
        c = value[a, 0] + value[a, 1] if rival < 0 else value[rival, 0] + value[rival, 1]
        alone = starts[a + 1] - starts[a] == 1 and cuts[a] == -math.inf
        grid = grids[a]
        nodes = nodes_for(grid)
        for q in range(starts[a], starts[a + 1]):
            i = members[q]
            rest = rest_of(grid, q - starts[a], centre[q], rho[q], c, lead)
            loose = slack[a] + (slack[rival] if rival >= 0 else 0.0)
            loose += _EPS * (abs(rest.edges[0]) + abs(centre[q]))  # rounding of where the curve and leaf lie
            looks = Looks(
                rest, nodes, leaf_gain[i], var[i], noise_var[i], h, centre[q], rho[q], c, loose,
                lead < 0.0, alone, rival >= 0,
            )  # fmt: skip
            if rate:
                k, one_voc, one_error = best_rate(looks, most)
            else:
                k = most
                one_voc, one_error, _, _ = voc_at(looks, k)
            voc[i] = one_voc * unit
            error[i] = one_error * unit
            batch[i] = int(k)
    return out


@compiled
def _action(d: Floats, rho: Floats, cut: float, h: float) -> tuple[Grid, float, float, float]:
    """(panels, largest mean, E max - it, error bound of the value) of one action."""
    m = len(d)
    largest = cut
    for j in range(m):
        largest = max(largest, d[j])
    if m == 0 or (m == 1 and cut == -math.inf):
        empty = np.empty((0, m, N))
        return Grid(np.full(1, largest), empty, empty), largest, 0.0, 4.0 * _EPS * abs(largest)
    loose = 0.0
    for j in range(m):  # a spread below the spacing of coordinates is widened to it
        least = max(1e-13 * abs(d[j]), 1e-290)
        if rho[j] < least:
            rho[j] = least
            loose = max(loose, least)
    grid = build(d, rho, cut, 9.0 if h == math.inf else 12.5)
    base, added = expected_gain(grid, d, rho, cut)
    return grid, base, added, loose + 2.0 * _EPS * abs(base) + 3e-15 * added


@compiled
def _best_other(value: Floats, a: int) -> int:
    best = -1
    for b in range(len(value)):
        if b != a and (best < 0 or (value[b, 0] - value[best, 0]) + (value[b, 1] - value[best, 1]) > 0.0):
            best = b
    return best
