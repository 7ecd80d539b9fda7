"""Win/loss VOC slowly and obviously: enumeration in fractions, adaptive quadrature; floor 2.

Shares no code with the fast methods. Fractions make the enumerated results exact for the doubles given.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Sequence
from fractions import Fraction

from scipy.integrate import quad
from scipy.special import betainc, betaincinv

from distill import schema
from distill.errors import RefusedError
from distill.tree import BeliefTree

__all__ = [
    "beliefs",
    "beta_binomial",
    "expected_max_of_whole_betas",
    "root_action_values",
    "value_now",
    "voc",
]

Number = Fraction | float
Belief = tuple[Fraction, Fraction]


def beta_binomial(a: Fraction, b: Fraction, k: int) -> list[Fraction]:
    """P(x wins in k trials), x = 0 ... k, p ~ Beta(a, b); exact.

    >>> beta_binomial(Fraction(1), Fraction(1), 2)
    [Fraction(1, 3), Fraction(1, 3), Fraction(1, 3)]
    """
    up, down, both = [Fraction(1)], [Fraction(1)], Fraction(1)
    for s in range(k):
        up.append(up[-1] * (a + s))
        down.append(down[-1] * (b + s))
        both *= a + b + s
    return [math.comb(k, x) * up[x] * down[k - x] / both for x in range(k + 1)]


def root_action_values(tree: BeliefTree, leaf: Sequence[Number]) -> list[Number]:
    """Q_a of every root action, in child order, when the leaves are worth exactly `leaf`."""
    value: list[Number] = [Fraction(0)] * tree.n_nodes
    children: list[list[int]] = [[] for _ in range(tree.n_nodes)]
    for c, p in enumerate(tree.parent.tolist()):
        if p >= 0:
            children[p].append(c)
    for node, x in zip(tree.leaf_nodes.tolist(), leaf, strict=True):
        value[node] = x

    def edge(c: int) -> Number:
        return Fraction(float(tree.reward[c])) + Fraction(float(tree.discount[c])) * value[c]

    for node in reversed(range(tree.n_nodes)):
        if tree.kind[node] == schema.CHANCE:
            value[node] = sum((Fraction(float(tree.prob[c])) * edge(c) for c in children[node]), Fraction(0))
        elif tree.kind[node] == schema.DECISION and node:
            value[node] = max(edge(c) for c in children[node])
    return [edge(c) for c in children[0]]


def voc(tree: BeliefTree, horizon: float, leaf: int, k: int) -> float:
    """VOC_h(leaf, k): enumerates the k + 1 outcomes; see `value_now` for what each V_h costs.

    Whole h: exact until the last rounding. Infinite h: about 1e-11 of the tree's values.
    """
    before = beliefs(tree)
    now = max(value_now(tree, horizon, before))
    a, b = before[leaf]
    gain: Number = Fraction(0)
    for x, odds in enumerate(beta_binomial(a, b, k)):
        after = [*before[:leaf], (a + x, b + k - x), *before[leaf + 1 :]]
        gain = gain + odds * (max(value_now(tree, horizon, after)) - now)
    return float(gain)


def beliefs(tree: BeliefTree) -> list[Belief]:
    """(alpha, beta) of every leaf, as exact fractions of the doubles."""
    assert tree.alpha is not None
    assert tree.beta is not None
    return [(Fraction(a), Fraction(b)) for a, b in zip(tree.alpha.tolist(), tree.beta.tolist(), strict=True)]


def value_now(tree: BeliefTree, horizon: float, held: Sequence[Belief] | None = None) -> list[Number]:
    """V_h of every root action, under the beliefs `held` (the tree's own by default).

    h whole: joint enumeration of (h + 1)^leaves outcomes in fractions, any tree. h infinite: adaptive
    quadrature over a product of beta CDFs, decision nodes only.
    """
    held = beliefs(tree) if held is None else held
    if horizon == math.inf:
        return [_expected_max(tree, action, held) for action in tree.action_nodes.tolist()]
    h = int(horizon)
    outcomes = []
    for i, (a, b) in enumerate(held):
        odds = beta_binomial(a, b, h)
        outcomes.append([(odds[s], _worth(tree, i, (a + s) / (a + b + h))) for s in range(h + 1)])
    total: list[Number] = [Fraction(0)] * len(tree.action_nodes)
    for joint in itertools.product(*outcomes):
        weight = math.prod((w for w, _ in joint), start=Fraction(1))
        values = root_action_values(tree, [x for _, x in joint])
        total = [t + weight * v for t, v in zip(total, values, strict=True)]
    return total


def _worth(tree: BeliefTree, leaf: int, p: Fraction) -> Fraction:
    assert tree.low is not None
    assert tree.high is not None
    low, high = Fraction(float(tree.low[leaf])), Fraction(float(tree.high[leaf]))
    return low + (high - low) * p


def _expected_max(tree: BeliefTree, action: int, held: Sequence[Belief]) -> Fraction:
    """E[max] = top - integral of the product of CDFs, over the affine terms of an action's leaves."""
    if tree.has_chance:
        raise RefusedError("the oracle integrates E[max] under decision nodes only")
    laws: list[tuple[float, float, float, float]] = []
    for i, node in enumerate(tree.leaf_nodes.tolist()):
        gain, offset, c = Fraction(1), Fraction(0), node
        while c > 0:
            gain = gain * Fraction(float(tree.discount[c]))
            offset = Fraction(float(tree.reward[c])) + Fraction(float(tree.discount[c])) * offset
            last, c = c, int(tree.parent[c])
        if last == action:
            low, high = (float(offset + gain * _worth(tree, i, Fraction(p))) for p in (0, 1))
            laws.append((float(held[i][0]), float(held[i][1]), low, high))
    bottom, top = max(law[2] for law in laws), max(law[3] for law in laws)
    cuts = {bottom, top}
    for a, b, low, high in laws:  # where a law's mass sits, or the adaptive rule may step over it
        ranks = (0.0, 1e-12, 1e-6, 1e-3, 0.1, 0.5, 0.9, 1 - 1e-3, 1 - 1e-6, 1.0)
        cuts.update(low + (high - low) * float(betaincinv(a, b, rank)) for rank in ranks)
    edges = sorted(c for c in cuts if bottom <= c <= top)

    def all_below(y: float) -> float:
        below = 1.0
        for a, b, low, high in laws:
            below *= float(betainc(a, b, min(max((y - low) / (high - low), 0.0), 1.0)))
        return below

    # full_output: a piece whose error estimate misses 1e-13 is no reason to warn, the sum is good to 1e-11.
    pieces = [
        quad(all_below, left, right, epsabs=1e-13, epsrel=1e-12, limit=200, full_output=True)
        for left, right in itertools.pairwise(edges)
    ]
    if sum(piece[1] for piece in pieces) > 1e-10 * max(1.0, abs(top), abs(bottom)):
        raise RefusedError("the oracle's adaptive quadrature did not converge")
    return Fraction(top) - sum((Fraction(piece[0]) for piece in pieces), Fraction(0))


def expected_max_of_whole_betas(leaves: Sequence[tuple[int, int]]) -> Fraction:
    """E[max p_j], p_j ~ Beta(a_j, b_j) with whole exponents: the CDFs are polynomials, all in fractions.

    >>> expected_max_of_whole_betas([(1, 1), (2, 2), (5, 5)])
    Fraction(1997, 2860)
    """
    product = [Fraction(1)]
    for a, b in leaves:
        n = a + b - 1  # I_y(a, b) = sum over j >= a of C(n, j) y^j (1 - y)^(n - j)
        law = [Fraction(0)] * (n + 1)
        for j in range(a, n + 1):
            for i in range(n - j + 1):
                law[j + i] += math.comb(n, j) * math.comb(n - j, i) * (-1) ** i
        longer = [Fraction(0)] * (len(product) + n)
        for i, x in enumerate(product):
            for j in range(a, n + 1):
                longer[i + j] += x * law[j]
        product = longer
    return 1 - sum((c / (i + 1) for i, c in enumerate(product)), Fraction(0))
