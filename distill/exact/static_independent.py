"""Static VOC (h = 0) of independent Gaussian leaves on any tree, in closed form; floor 2.

As a function of one leaf's mean x the root maximum is max(C, A x + B): one kink, where A is the product
of discounts and probabilities on the way. With D = |A m + B - C| and s = v / sqrt(v + n / k), the standard
deviation of the posterior mean after k rollouts,

    VOC(k) = A s f(-D / (A s)),    f(z) = z Phi(z) + phi(z).

`root_gaps` finds A and D of all leaves in O(nodes).

The rate max_k VOC(k) / k has one peak over real k > 0: with z = D / (A s) the derivative has the sign of
n / (2 (k v + n)) - f(-z) / phi(z), and both terms are monotone in k, the first falling, the second rising.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from distill import schema
from distill.errors import RefusedError
from distill.exact.root_gaps import gap_room, root_gaps
from distill.numerics import compiled, gain, gain_ratio, norm_cdf
from distill.query import Priced, Query
from distill.tree import BeliefTree, Floats, Ints

__all__ = ["METHOD", "price", "price_many"]

METHOD = "static independent, closed form"

_LEAF = schema.LEAF
_EPS = 2.220446049250313e-16


def price(tree: BeliefTree, query: Query) -> Priced:
    """Static VOC or rate of every leaf of a tree with independent Gaussian leaves, any node kinds.

    `error` bounds all rounding, the inputs taken as exact: a few units in the last place of the VOC.
    Raises RefusedError for another horizon, for `cov` and for win/loss leaves.

    >>> from distill.record import from_record
    >>> t = from_record({"format": "belief-tree/1", "parent": [-1, 0, 0],
    ...     "kind": ["decision", "leaf", "leaf"], "mean": [None, 0, 0],
    ...     "var": [None, 1, 0], "noise_var": [None, 3, 1]})
    >>> price(t, Query(horizon=0)).voc.round(6)  # s = 1/2: s f(0)
    array([0.199471, 0.      ])
    """
    return price_many([tree], query)[0]


def price_many(trees: Sequence[BeliefTree], query: Query) -> list[Priced]:
    """`price` of every tree in one compiled call; the way to price many small trees fast."""
    if query.horizon != 0:
        raise RefusedError(f"static independent pricing is for horizon 0, not {query.horizon:g}")
    for tree in trees:
        if tree.var is None:
            what = "dependent leaves ('cov')" if tree.cov is not None else "win/loss leaves"
            raise RefusedError(f"static independent pricing is for independent Gaussian leaves, not {what}")
    if not trees:
        return []
    node_start = _starts([len(t.parent) for t in trees])
    leaf_start = _starts([len(t.mean) for t in trees])  # type: ignore[arg-type]

    def column(name: str) -> Any:
        return np.concatenate([getattr(tree, name) for tree in trees])

    most = query.remaining if query.rate else query.batch
    assert most is not None
    n_leaves = leaf_start[-1]
    voc, error = np.empty(n_leaves), np.empty(n_leaves)
    batch = np.empty(n_leaves, dtype=np.int64)
    value = np.empty(node_start[-1])
    value_start = np.empty(len(trees) + 1, dtype=np.int64)
    _price_packed(
        node_start, leaf_start, column("parent"), column("kind"), column("reward"), column("discount"),
        column("prob"), column("mean"), column("var"), column("noise_var"), float(most), query.rate,
        voc, batch, error, value, value_start,
    )  # fmt: skip
    ends, value_ends = leaf_start.tolist(), value_start.tolist()
    return [
        Priced(voc[a:b], batch[a:b], value[c:d], error[a:b], METHOD)
        for a, b, c, d in zip(ends, ends[1:], value_ends, value_ends[1:], strict=False)
    ]


def _starts(lengths: list[int]) -> Ints:
    return np.concatenate([[0], np.cumsum(lengths)]).astype(np.int64)


@compiled
def _price_packed(
    node_start: Ints,
    leaf_start: Ints,
    parent: Ints,
    kind: NDArray[np.int8],
    reward: Floats,
    discount: Floats,
    prob: Floats,
    mean: Floats,
    var: Floats,
    noise_var: Floats,
    most: float,
    rate: bool,
    voc: Floats,
    batch: Ints,
    error: Floats,
    value: Floats,
    value_start: Ints,
) -> None:
    """Price trees that lie one after the other in the columns; the last five arrays are filled.

    most : the batch, or with `rate` the rollouts left. value, value_start : V_0 of the root actions of
    tree t at value[value_start[t] : value_start[t + 1]].
    """
    widest = 0
    for t in range(len(node_start) - 1):
        widest = max(widest, node_start[t + 1] - node_start[t])
    found = gap_room(widest)
    slope, gap, depth, total = found.slope, found.gap, found.depth, found.total
    value_start[0] = 0
    for t in range(len(node_start) - 1):
        a, b = node_start[t], node_start[t + 1]
        leaf, last = leaf_start[t], leaf_start[t + 1]
        largest = root_gaps(
            parent[a:b], kind[a:b], reward[a:b], discount[a:b], prob[a:b], mean[leaf:last], found
        )
        at = value_start[t]
        for c in range(1, b - a):
            if parent[a + c] == 0:
                value[at] = total[c, 0]
                at += 1
            if kind[a + c] == _LEAF:
                d = abs(gap[c])
                k = most
                if rate:
                    k = _best_batch(slope[c], d, var[leaf], noise_var[leaf], most)
                if k == 0.0:
                    voc[leaf] = 0.0
                    error[leaf] = 0.0
                else:
                    voc[leaf] = _voc(slope[c], d, var[leaf], noise_var[leaf], k)
                    slack = largest * depth[c] * _EPS * _EPS  # of the double-double differences
                    error[leaf] = _error(
                        voc[leaf], slope[c], d, var[leaf], noise_var[leaf], k, depth[c], slack
                    )
                    if rate:
                        voc[leaf] /= k
                        error[leaf] /= k
                batch[leaf] = int(k)
                leaf += 1
        value_start[t + 1] = at


@compiled
def _spread(A: float, v: float, n: float, k: float) -> float:
    """A s: standard deviation of the leaf's posterior mean after k rollouts, as felt at the root."""
    if v == 0.0:
        return 0.0
    return A * (v / math.sqrt(v + n / k))


@compiled
def _voc(A: float, d: float, v: float, n: float, k: float) -> float:
    s = _spread(A, v, n, k)
    if s == 0.0 or d == math.inf:
        return 0.0
    return s * gain(-d / s)


@compiled
def _error(voc: float, A: float, d: float, v: float, n: float, k: float, depth: int, slack: float) -> float:
    """Bound on the rounding of `_voc`: relative errors of d, s and the gain, and the slack of d.

    A relative error e of d or of s moves the VOC by at most (3 + z^2) e of itself, z = d / s: the Mills
    ratio R(z) < 4 / (3 z + sqrt(z^2 + 8)) gives z Phi(-z) and phi(z) <= (3 + z^2) f(-z). A shift of d by x
    moves it by at most x Phi(-z).
    """
    s = _spread(A, v, n, k)
    if s == 0.0 or d == math.inf:
        return 0.0
    z = d / s
    if voc == 0.0:
        return 5e-324
    return voc * (3.0 + z * z) * (8 + 2 * depth) * _EPS + slack * A * norm_cdf(-z) + 5e-324


@compiled
def _best_batch(A: float, d: float, v: float, n: float, remaining: float) -> float:
    """Smallest whole k <= remaining of greatest VOC(k) / k; 0 without rollouts, 1 where every VOC is 0."""
    if remaining == 0.0:
        return 0.0
    if remaining == 1.0 or _voc(A, d, v, n, remaining) == 0.0:
        return 1.0
    if not _climbs(A, d, v, n, 1.0):
        return 1.0
    low = 1.0
    high = remaining
    if not _climbs(A, d, v, n, high):
        while high - low > 1.0:
            middle = min(max(math.floor(math.sqrt(low) * math.sqrt(high)), low + 1.0), high - 1.0)
            if _climbs(A, d, v, n, middle):
                low = middle
            else:
                high = middle
    else:
        low = high - 1.0
    return low if _voc(A, d, v, n, low) * high >= _voc(A, d, v, n, high) * low else high


@compiled
def _climbs(A: float, d: float, v: float, n: float, k: float) -> bool:
    """Whether VOC(k) / k still rises at k: n / (2 (k v + n)) > f(-z) / phi(z)."""
    s = _spread(A, v, n, k)
    return 2.0 * (1.0 + k * (v / n)) * gain_ratio(d / s) < 1.0
