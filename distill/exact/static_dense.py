"""Static VOC (h = 0) with dependent leaves, on decision and chance trees; floor 2.

Observing the mean of k rollouts at leaf i moves the leaf means along a line: m' = m + t S e_i with
t ~ N(0, 1 / (S_ii + n_i / k)). Along it the root maximum is convex piecewise linear, so the expectation
is a finite sum (see `piecewise`). The line does not depend on k: its breakpoints are found once a leaf,
and any number of batches is then cheap. O(n log n) a candidate on a tree of n leaves.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from distill import schema
from distill.errors import RefusedError
from distill.exact.best_batch import best_batch
from distill.exact.piecewise import expected_rise, root_breakpoints
from distill.query import Priced, Query
from distill.tree import BeliefTree, Floats, Ints

__all__ = ["METHOD", "price"]

METHOD = "static dense, closed form"

_LONG = np.longdouble
_EPS = float(np.finfo(np.float64).eps)
_LONG_EPS = float(np.finfo(_LONG).eps)


def price(tree: BeliefTree, query: Query) -> Priced:
    """Static VOC or rate of every leaf of a Gaussian tree, with `cov` or without, any node kinds.

    Error bounds cover the rounding of every breakpoint; relative accuracy is kept where means, rewards
    and covariances are taken as exact. Where S_li exceeds sqrt(S_ii S_ll) by rounding it is cut to it, so
    a leaf of zero variance has VOC 0. Raises RefusedError for another horizon and for win/loss leaves.

    >>> from distill.record import from_record
    >>> t = from_record({"format": "belief-tree/1", "parent": [-1, 0, 0],
    ...     "kind": ["decision", "leaf", "leaf"], "mean": [None, 0, 0],
    ...     "cov": [[1, -1], [-1, 1]], "noise_var": [None, 3, 3]})
    >>> price(t, Query(horizon=0)).voc.round(6)  # m' = +-Z/2, and E|Z|/2 = 0.398942
    array([0.398942, 0.398942])
    """
    if tree.mean is None or tree.noise_var is None:
        raise RefusedError("static dense pricing is for Gaussian leaves; this tree has win/loss leaves")
    if query.horizon != 0:
        raise RefusedError(f"static dense pricing is for horizon 0, not {query.horizon:g}")
    assert tree.var is not None or tree.cov is not None
    cov = np.diag(tree.var) if tree.cov is None else tree.cov
    program = _compile(tree)
    var, noise, n = np.diag(cov), tree.noise_var, tree.n_leaves
    most = query.remaining if query.rate else query.batch
    assert most is not None

    def sd_of_t(leaf: Ints, k: Ints | int) -> Floats:
        with np.errstate(divide="ignore"):  # only where n / k underflows, and then S_ii = 0: no breakpoints
            return np.asarray(1 / np.sqrt(var[leaf] + noise[leaf] / k))

    leaves = np.arange(n)
    start, point = root_breakpoints(
        program.kind,
        program.n_children,
        program.leaf,
        program.gap,
        program.gap_err,
        _directions(cov) * program.gain,
        sd_of_t(leaves, max(most, 1)),
    )

    def voc_at(leaf: Ints, k: Ints | int) -> tuple[Floats, Floats]:
        voc, err = expected_rise(start, point, leaf, sd_of_t(leaf, k))
        return voc, err

    if query.rate:
        # As a function of the spread s of the posterior mean, VOC = E[h(s Z)] is convex.
        ratio = np.divide(noise, var, out=np.ones(n), where=var > 0)
        voc, batch, error = best_batch(voc_at, n, most, noise_ratio=ratio, rel_tol=1e-9)
    else:
        voc, error = voc_at(leaves, most)
        batch = np.full(n, most, dtype=np.int64)
    return Priced(voc, batch, program.value, error, METHOD)


def _directions(cov: Floats) -> Floats:
    """Row i: the change of every leaf mean along leaf i's line; |S_li| at most sqrt(S_ii S_ll)."""
    sd = np.sqrt(np.maximum(np.diag(cov), 0))
    most = sd[:, None] * sd
    return np.where(np.abs(cov) > most * (1 + 1e-12), np.sign(cov) * most, cov)


@dataclass(frozen=True)
class _Program:
    """The tree in post-order, with the gaps of every child at the current means.

    A decision node under a decision node is merged into it, a chance node under a chance node too.
    """

    kind: Ints
    n_children: Ints
    leaf: Ints
    gap: Floats
    gap_err: Floats
    gain: Floats  # (n_leaves,), product of discounts and probabilities from the root
    value: Floats  # (n_actions,), the static values


def _compile(tree: BeliefTree) -> _Program:
    assert tree.mean is not None
    n, parent, kind = tree.n_nodes, tree.parent.tolist(), tree.kind.tolist()
    reward, discount, prob = (list(map(_LONG, c.tolist())) for c in (tree.reward, tree.discount, tree.prob))
    position = np.full(n, -1, dtype=np.int64)
    position[tree.leaf_nodes] = np.arange(tree.n_leaves)

    # Contribution of each node to the root at the current means, in extended precision: gaps between
    # siblings are then good to double precision even where the values are 12 decades larger.
    zero = _LONG(0)
    gain, roundings = [_LONG(1)] * n, [1] * n
    for c in range(1, n):
        p = parent[c]
        gain[c] = gain[p] * discount[c] * prob[c]
        roundings[c] = roundings[p] + 2
    worth: list[np.longdouble] = [zero] * n  # without the reward of the edge into the node
    here: list[np.longdouble] = [zero] * n  # with it
    slip: list[np.longdouble] = [zero] * n  # bound on the rounding behind them
    seen = [False] * n
    for v in range(n - 1, -1, -1):
        if kind[v] == schema.LEAF:
            worth[v] = gain[v] * _LONG(tree.mean[position[v]])
            slip[v] = roundings[v] * _LONG_EPS * abs(worth[v])
        if v == 0:
            break
        p = parent[v]
        edge = gain[p] * prob[v] * reward[v]
        here[v] = worth[v] + edge
        slip[v] += _LONG_EPS * (roundings[v] * abs(edge) + abs(here[v]))
        if kind[p] == schema.DECISION:
            worth[p] = max(worth[p], here[v]) if seen[p] else here[v]
            slip[p] = max(slip[p], slip[v])
        else:
            worth[p] += here[v]
            slip[p] += slip[v] + _LONG_EPS * abs(worth[p])
        seen[p] = True

    # The group that a node is merged into, and its gap to the best member of that group.
    group = list(range(n))
    gap, err = [zero] * n, [zero] * n
    children: list[list[int]] = [[] for _ in range(n)]
    for c in range(1, n):
        p = parent[c]
        if kind[p] == schema.DECISION:
            gap[c] = worth[p] - here[c]
            err[c] = slip[p] + slip[c] + _LONG_EPS * gap[c]
        if group[p] != p:
            gap[c], err[c] = gap[c] + gap[p], err[c] + err[p]
        if kind[c] == kind[p]:
            group[c] = group[p]
        else:
            children[group[p]].append(c)
    order = _post_order(children)
    as_floats = lambda column: np.array([float(column[v]) for v in order])  # noqa: E731
    gaps = as_floats(gap)
    return _Program(
        kind=np.array([kind[v] for v in order], dtype=np.int64),
        n_children=np.array([len(children[v]) for v in order], dtype=np.int64),
        leaf=position[order],
        gap=gaps,
        gap_err=as_floats(err) + _EPS * gaps,
        gain=np.array([float(gain[v]) for v in tree.leaf_nodes]),
        value=np.array([float(here[a]) for a in tree.action_nodes]),
    )


def _post_order(children: list[list[int]]) -> list[int]:
    """Children before parents, each node's subtree in one piece; iterative, for trees of any depth."""
    order, stack = [], [0]
    while stack:
        v = stack.pop()
        order.append(v)
        stack.extend(children[v])
    return order[::-1]
