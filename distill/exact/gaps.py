"""Trees with dependent leaves in the form that methods walk: post-order, with gaps for values; floor 2.

What leaves contribute to the root moves only a little around the current means, while the values
themselves may be 12 decades larger. So a tree is kept as gaps: how far each child of a decision node lies
below its best sibling. With x_l = gain_l (X_l - m_l) the rise of a node over its current contribution is

    leaf: x_l;   chance: sum over children;   decision: max over children of (rise - gap).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from distill import schema
from distill.exact import double_double as dd
from distill.numerics import compiled
from distill.tree import BeliefTree, Floats, Ints

__all__ = ["PostOrder", "post_order"]

_EPS = 2.0**-52
_DD_EPS = 2.0**-100  # relative rounding of a few double-double operations
_DECISION, _CHANCE, _LEAF = schema.DECISION, schema.CHANCE, schema.LEAF


@dataclass(frozen=True)
class PostOrder:
    """The nodes in post-order, siblings in order; columns of shape (n_kept,) unless said.

    kind, leaf : as in schema; leaf position, -1 on inner nodes.
    n_children : after merging.
    gap, gap_err : under a decision node, how far the node's contribution to the root lies below its best
        sibling's (u, >= 0), with a bound on its rounding; 0 under a chance node.
    gain : (n_leaves,) product of discounts and probabilities from the root.
    value : (n_actions,) static value of each root action.
    action : (n_leaves,) root action of each leaf.
    """

    kind: Ints
    n_children: Ints
    leaf: Ints
    gap: Floats
    gap_err: Floats
    gain: Floats
    value: Floats
    action: Ints


def post_order(tree: BeliefTree, merge_root: bool = True) -> PostOrder:
    """The tree at its current means, node under like node merged into it.

    merge_root : whether root actions that are decision nodes are merged into the root; False keeps every
        root action's value apart. Gaps are differences of values carried to about 32 digits.
    """
    assert tree.mean is not None
    order, n_children, leaf, gap, gap_err, gain, value, action = _walk(
        merge_root, tree.parent, tree.kind.astype(np.int64), tree.reward, tree.discount, tree.prob, tree.mean
    )
    return PostOrder(
        kind=tree.kind[order].astype(np.int64),
        n_children=n_children[order],
        leaf=leaf[order],
        gap=gap[order],
        gap_err=gap_err[order],
        gain=gain[tree.leaf_nodes],
        value=value[tree.action_nodes],
        action=action[tree.leaf_nodes],
    )


@compiled
def _walk(
    merge_root: bool, parent: Ints, kind: Ints, reward: Floats, discount: Floats, prob: Floats, mean: Floats
) -> tuple[Ints, Ints, Ints, Floats, Floats, Floats, Floats, Ints]:
    """Order of the nodes that stay, then over all nodes the columns of PostOrder and r + g V."""
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
    action, n_actions = np.full(n, -1), 0
    next_sibling, first_child = np.full(n, -1), np.full(n, -1)
    for c in range(1, n):
        p = parent[c]
        top = group[p]
        gain[c] = gain[p] * discount[c] * prob[c]
        depth[c] = depth[p] + 1
        action[c] = action[p]
        if p == 0:
            action[c] = n_actions
            n_actions += 1
        if kind[p] == _DECISION:
            behind = dd.subtract(best[p, 0], best[p, 1], total[c, 0], total[c, 1])
            gap[c] = gain[p] * behind + (gap[p] if top != p else 0.0)
            gap_err[c] = gain[p] * (slip[c] + slip[p]) + (gap_err[p] if top != p else 0.0)
        if kind[c] == kind[p] and (merge_root or p > 0):
            group[c] = top
    for c in range(n - 1, 0, -1):
        gap_err[c] += (4 * depth[c] + 2) * _EPS * gap[c]
        if group[c] == c:
            top = group[parent[c]]
            n_children[top] += 1
            next_sibling[c] = first_child[top]
            first_child[top] = c
    order = np.empty(n, dtype=np.int64)
    stack = np.empty(n, dtype=np.int64)
    stack[0] = 0
    waiting, done = 1, n
    while waiting > 0:  # a parent, then its children from the last to the first; written from the back
        waiting -= 1
        v = stack[waiting]
        done -= 1
        order[done] = v
        c = first_child[v]
        while c >= 0:
            stack[waiting] = c
            waiting += 1
            c = next_sibling[c]
    return order[done:], n_children, leaf, gap, gap_err, gain, total[:, 0].copy(), action
