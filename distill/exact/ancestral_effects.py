"""Covariance from effects that leaves share with their ancestors: found from `cov` alone; floor 2.

Where every node adds an effect of its own to all leaves below it, and rollouts have been seen since, the
leaves are a Gaussian tree: each inner node v has a hidden standard normal theta_v, and given theta of its
parent a node is independent of everything outside. So for leaves l, l' that meet at v

    Cov(Y_l, Y_l') = kappa_lv kappa_l'v,   kappa_lv = Cov(Y_l, theta_v),   kappa_lv = rho_c kappa_lc

where c is v's child above l and rho_c = Corr(theta_c, theta_v): off-diagonal blocks have rank one. The
loadings follow from the blocks, bottom up; whether they give the covariance back is the test.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from distill import schema
from distill.tree import BeliefTree, Floats, Ints

__all__ = ["Effects", "find_effects"]

_SAME = 1e-9  # correlations closer than this are taken as equal
_ROUNDED = 16 * 2.0**-52  # a share of a leaf's variance that rounding of `cov` may have left over


@dataclass(frozen=True)
class Effects:
    """Hidden effects of one tree, and how leaves load on them.

    rho : (n_nodes,) correlation of an inner node's effect with its parent's.
    loading : (n_leaves,) covariance of the leaf with its parent's effect, in the unit of the leaf.
    rest : (n_leaves,) standard deviation of the leaf given that effect.
    """

    rho: Floats
    loading: Floats
    rest: Floats


def find_effects(tree: BeliefTree, cov: Floats) -> Effects | None:
    """Effects that give back `cov` (n_leaves, n_leaves) to rounding, or None where there are none."""
    n, n_leaves = tree.n_nodes, tree.n_leaves
    sd = np.sqrt(np.maximum(np.diag(cov), 0))
    unit = np.where(sd > 0, sd, 1.0)
    C = cov / unit[:, None] / unit  # correlations
    below = _leaves_below(tree)
    kids: list[list[int]] = [[] for _ in range(n)]
    for c in range(1, n):
        kids[tree.parent[c]].append(c)
    kappa: list[Floats] = [np.empty(0)] * n  # of the node's own effect, over the leaves below
    rho = np.zeros(n)
    loading = np.zeros(n_leaves)
    for v in range(n - 1, -1, -1):
        if tree.kind[v] == schema.LEAF:
            kappa[v] = np.sqrt(np.diag(C)[below[v]])
            continue
        parts = _loadings([kappa[c] for c in kids[v]], _directions(C, below, kids[v], n_leaves), C,
                          [below[c] for c in kids[v]], _outward(C, below[v], n_leaves))  # fmt: skip
        if parts is None:
            return None
        kappa[v] = np.concatenate(parts)
        order = np.argsort(np.concatenate([below[c] for c in kids[v]]))
        kappa[v] = kappa[v][order]
        for c, part in zip(kids[v], parts, strict=True):
            if tree.kind[c] == schema.LEAF:
                loading[below[c]] = part
                continue
            size = float(kappa[c] @ kappa[c])
            rho[c] = float(part @ kappa[c]) / size if size > 0 else 0.0
            if abs(rho[c]) > 1 + _SAME or np.max(np.abs(part - rho[c] * kappa[c])) > _SAME:
                return None
        for i, c in enumerate(kids[v]):
            for j in range(i):
                block = C[np.ix_(below[c], below[kids[v][j]])]
                if np.max(np.abs(block - np.outer(parts[i], parts[j]))) > _SAME:
                    return None
    for v in range(1, tree.n_nodes):
        # A leaf alone below a node is not tied to the node's effect: only the product of both ties is given.
        if tree.kind[v] != schema.LEAF and len(below[v]) == 1 < len(below[tree.parent[v]]):
            tie = math.sqrt(min(abs(rho[v]), 1.0))
            if abs(loading[below[v][0]]) > 1 - _SAME:
                loading[below[v]] *= tie
                rho[v] = math.copysign(tie, rho[v])
    rest = np.diag(C) - loading**2
    if np.min(rest) < -_SAME:
        return None
    rest[rest <= _ROUNDED] = 0.0
    return Effects(np.clip(rho, -1, 1), loading * sd, np.sqrt(np.maximum(rest, 0)) * sd)


def _leaves_below(tree: BeliefTree) -> list[Ints]:
    """Leaf positions below each node, ascending."""
    lists: list[list[int]] = [[] for _ in range(tree.n_nodes)]
    for i, v in enumerate(tree.leaf_nodes.tolist()):
        while v >= 0:
            lists[v].append(i)
            v = int(tree.parent[v])
    return [np.array(x, dtype=np.int64) for x in lists]


def _outward(C: Floats, inside: Ints, n_leaves: int) -> Floats | None:
    """Unit direction in which the leaves inside go with those outside; None where they do not."""
    outside = np.ones(n_leaves, dtype=bool)
    outside[inside] = False
    block = C[np.ix_(inside, np.flatnonzero(outside))]
    if block.size == 0 or np.max(np.abs(block)) <= _SAME:
        return None
    column = block[:, int(np.argmax(np.einsum("ij,ij->j", block, block)))]
    return np.asarray(column / np.linalg.norm(column))


def _directions(C: Floats, below: list[Ints], kids: list[int], n_leaves: int) -> list[Floats | None]:
    return [_outward(C, below[c], n_leaves) for c in kids]


def _loadings(
    own: list[Floats], w: list[Floats | None], C: Floats, leaves: list[Ints], outward: Floats | None
) -> list[Floats] | None:
    """Loadings of every child's leaves on the node's effect: n_c w_c, from the blocks n_c n_d w_c w_d^T."""
    k = len(own)
    N = np.zeros((k, k))
    for i in range(k):
        for j in range(i):
            w_i, w_j = w[i], w[j]
            if w_i is not None and w_j is not None:
                N[i, j] = N[j, i] = w_i @ C[np.ix_(leaves[i], leaves[j])] @ w_j
    joined = np.flatnonzero(np.max(np.abs(N), axis=1) > _SAME)
    size = np.zeros(k)
    if len(joined) < 2:
        # At most one child goes with the outside: the node's effect is that child's own.
        linked = [c for c in range(k) if w[c] is not None]
        if len(linked) > 1:
            return None
        return [own[c] if c in linked else np.zeros(len(own[c])) for c in range(k)]
    first = int(joined[np.argmax(np.abs(N[joined]).max(axis=1))])
    sign = np.where(N[first] < 0, -1.0, 1.0)
    N = np.abs(N)
    others = [int(c) for c in joined if c != first]
    if len(others) > 1:
        a, b = max(
            ((a, b) for x, a in enumerate(others) for b in others[:x]),
            key=lambda pair: min(N[first, pair[0]], N[first, pair[1]], N[pair]),
        )
        if N[a, b] <= _SAME:
            return None
        size[first] = math.sqrt(N[first, a] * N[first, b] / N[a, b])
    else:
        other = others[0]
        share = [np.linalg.norm(own[c]) for c in (first, other)]
        if outward is not None:
            everyone = np.concatenate(leaves)
            place = np.searchsorted(np.sort(everyone), everyone)
            parts = np.split(outward[place], np.cumsum([len(x) for x in leaves])[:-1])
            share = [np.linalg.norm(parts[c]) for c in (first, other)]
        if min(share) == 0:
            return None
        size[first] = math.sqrt(N[first, other] * share[0] / share[1])
    if size[first] == 0:
        return None
    for c in others:
        size[c] = N[first, c] / size[first]
    out = []
    for c in range(k):
        w_c = w[c]
        out.append(np.zeros(len(own[c])) if w_c is None else sign[c] * size[c] * w_c)
    return out
