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
from distill.exact import double_double as dd
from distill.exact.best_batch import best_batch
from distill.exact.piecewise import expected_rise, root_breakpoints
from distill.numerics import compiled
from distill.query import Priced, Query
from distill.tree import BeliefTree, Floats, Ints

__all__ = ["METHOD", "price"]

METHOD = "static dense, closed form"

_EPS = 2.0**-52
_DD_EPS = 2.0**-100  # relative rounding of a few double-double operations
_DECISION, _CHANCE, _LEAF = schema.DECISION, schema.CHANCE, schema.LEAF


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
    cov = tree.cov
    if cov is None:
        assert tree.var is not None
        cov = np.diag(tree.var)
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
    """The tree in post-order, with the gap of every child at the current means.

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
    order, n_children, leaf, gap, gap_err, gain, value = _post_order(
        tree.parent, tree.kind.astype(np.int64), tree.reward, tree.discount, tree.prob, tree.mean
    )
    return _Program(
        kind=tree.kind[order].astype(np.int64),
        n_children=n_children[order],
        leaf=leaf[order],
        gap=gap[order],
        gap_err=gap_err[order],
        gain=gain[tree.leaf_nodes],
        value=value[tree.action_nodes],
    )


@compiled
def _post_order(
    parent: Ints, kind: Ints, reward: Floats, discount: Floats, prob: Floats, mean: Floats
) -> tuple[Ints, Ints, Ints, Floats, Floats, Floats, Floats]:
    """Node order with children first, each subtree in one piece, merged nodes left out; and node columns.

    Returns order, then over all nodes: number of children after merging, leaf position, gap and its
    error, gain, and r + g V of the edge.
    """
    n = len(parent)
    leaf = np.full(n, -1)
    at = len(mean)
    best = np.zeros((n, 2))  # V in double-double arithmetic: gaps stay exact to double precision
    total = np.zeros((n, 2))  # r + g V
    slip = np.zeros(n)  # bound on the rounding of V, then of r + g V
    seen = np.zeros(n, dtype=np.bool_)
    for c in range(n - 1, 0, -1):
        if kind[c] == _LEAF:
            at -= 1
            leaf[c] = at
            best[c, 0] = mean[at]
        hi, lo = dd.scale(best[c, 0], best[c, 1], discount[c])
        hi, lo = dd.add(hi, lo, reward[c], 0.0)
        total[c, 0], total[c, 1] = hi, lo
        slip[c] += _DD_EPS * (abs(best[c, 0]) + abs(reward[c]))
        p = parent[c]
        if kind[p] == _CHANCE:
            hi, lo = dd.scale(hi, lo, prob[c])
            hi, lo = dd.add(best[p, 0], best[p, 1], hi, lo)
            slip[p] += prob[c] * slip[c] + _DD_EPS * (abs(total[c, 0]) + abs(hi))
            best[p, 0], best[p, 1] = hi, lo
        else:
            if not seen[p] or hi > best[p, 0] or (hi == best[p, 0] and lo > best[p, 1]):
                best[p, 0], best[p, 1] = hi, lo
            slip[p] = max(slip[p], slip[c])
        seen[p] = True
    gain = np.ones(n)
    depth = np.zeros(n, dtype=np.int64)
    group = np.arange(n)
    gap, gap_err = np.zeros(n), np.zeros(n)
    n_children = np.zeros(n, dtype=np.int64)
    next_sibling, first_child = np.full(n, -1), np.full(n, -1)
    for c in range(1, n):
        p = parent[c]
        top = group[p]
        gain[c] = gain[p] * discount[c] * prob[c]
        depth[c] = depth[p] + 1
        if kind[p] == _DECISION:
            behind = dd.subtract(best[p, 0], best[p, 1], total[c, 0], total[c, 1])
            gap[c] = gain[p] * behind + (gap[p] if top != p else 0.0)
            gap_err[c] = gain[p] * (slip[c] + slip[p]) + (gap_err[p] if top != p else 0.0)
        if kind[c] == kind[p]:
            group[c] = top
        else:
            n_children[top] += 1
            next_sibling[c] = first_child[top]
            first_child[top] = c
    for c in range(1, n):
        gap_err[c] += (4 * depth[c] + 2) * _EPS * gap[c]
    order = np.empty(n, dtype=np.int64)
    stack = np.empty(n, dtype=np.int64)
    stack[0] = 0
    waiting, done = 1, n
    while waiting > 0:  # parents before children, written from the back
        waiting -= 1
        v = stack[waiting]
        done -= 1
        order[done] = v
        c = first_child[v]
        while c >= 0:
            stack[waiting] = c
            waiting += 1
            c = next_sibling[c]
    return order[done:], n_children, leaf, gap, gap_err, gain, total[:, 0].copy()
