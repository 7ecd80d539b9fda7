"""Static and win/loss VOC in fractions or with 50 digits, quick enough for tens of thousands of labels.

Written from the definition, a function of one number at a time; nothing is shared with the package.
"""

from __future__ import annotations

from bisect import bisect_left
from collections.abc import Callable
from fractions import Fraction
from itertools import pairwise
from typing import Any

import mpmath as mp
import numpy as np

from distill import schema
from distill.oracle.win_loss import beliefs, beta_binomial
from distill.tree import BeliefTree

Line = tuple[Any, Any]  # value at 0, slope, 50 digits
DIGITS = 50


def _fold(tree: BeliefTree, leaf_value: Any, edge: Callable, best: Callable, mean: Callable) -> Any:
    """The root's value from the leaves' by the definition, in whatever algebra is given."""
    children: list[list[int]] = [[] for _ in range(tree.n_nodes)]
    for c in range(1, tree.n_nodes):
        children[int(tree.parent[c])].append(c)
    value: list[Any] = [None] * tree.n_nodes
    for v, x in zip(tree.leaf_nodes.tolist(), leaf_value, strict=True):
        value[v] = x
    for v in range(tree.n_nodes - 1, -1, -1):
        if not children[v]:
            continue
        options = [
            edge(mp.mpf(float(tree.reward[c])), mp.mpf(float(tree.discount[c])), value[c])
            for c in children[v]
        ]
        if tree.kind[v] == schema.CHANCE:
            value[v] = mean([mp.mpf(float(tree.prob[c])) for c in children[v]], options)
        else:
            value[v] = best(options)
    return value[0]


def root_along(tree: BeliefTree, lines: list[Line]) -> list[Line]:
    """The root maximum as a function of t, leaf j being worth a_j + b_j t: its lines, slopes ascending."""

    def edge(r: Any, g: Any, envelope: list[Line]) -> list[Line]:
        return [(r + g * a, g * b) for a, b in envelope]

    def mean(p: list[Any], envelopes: list[list[Line]]) -> list[Line]:
        """Every bend of any child bends the sum."""
        bends = sorted({t for e in envelopes for t in _bends(e)})
        at = [_bends(e) for e in envelopes]
        out = []
        for q in range(len(bends) + 1):
            pick = [
                e[bisect_left(b, bends[q]) if q < len(bends) else -1]
                for e, b in zip(envelopes, at, strict=True)
            ]
            out.append(
                (
                    sum((x * a for x, (a, _) in zip(p, pick, strict=True)), mp.mpf(0)),
                    sum((x * b for x, (_, b) in zip(p, pick, strict=True)), mp.mpf(0)),
                )
            )
        return upper(out)

    return _fold(
        tree, [[one] for one in lines], edge, lambda options: upper([one for e in options for one in e]), mean
    )


def upper(lines: list[Line]) -> list[Line]:
    """The lines that are largest somewhere, slopes ascending."""
    out: list[Line] = []
    for a, b in sorted(lines, key=lambda one: (one[1], one[0])):
        if out and out[-1][1] == b:
            out.pop()
        # The middle one goes where the new line passes the one before it no later than the middle does.
        while len(out) > 1:
            (a0, b0), (a1, b1) = out[-2:]
            if (a0 - a) * (b1 - b0) > (a0 - a1) * (b - b0):
                break
            out.pop()
        out.append((a, b))
    return out


def _bends(envelope: list[Line]) -> list[Any]:
    return [(a0 - a1) / (b1 - b0) for (a0, b0), (a1, b1) in pairwise(envelope)]


def static_voc(tree: BeliefTree, leaf: int, k: int) -> mp.mpf:
    """E[root(m + S e_i t)] - root(m), t ~ N(0, 1 / (S_ii + n_i / k)), the inputs exact."""
    assert tree.mean is not None
    assert tree.noise_var is not None
    cov = np.diag(tree.var) if tree.cov is None else tree.cov
    if cov[leaf, leaf] == 0:
        return mp.mpf(0)
    with mp.workdps(DIGITS):
        lines = [
            (mp.mpf(m), mp.mpf(c)) for m, c in zip(tree.mean.tolist(), cov[:, leaf].tolist(), strict=True)
        ]
        envelope = root_along(tree, lines)
        sd = 1 / mp.sqrt(mp.mpf(float(cov[leaf, leaf])) + mp.mpf(float(tree.noise_var[leaf])) / k)
        total = mp.mpf(0)
        for t, ((_, b0), (_, b1)) in zip(_bends(envelope), pairwise(envelope), strict=True):
            z = abs(t) / sd
            # phi(z) - z (1 - Phi(z)) loses 2 log10(z) digits
            total += (b1 - b0) * sd * (mp.npdf(z) - z * mp.erfc(z / mp.sqrt(2)) / 2)
        return total


def win_loss_voc(tree: BeliefTree, horizon: int, k: int) -> list[Fraction]:
    """VOC_h of every leaf of a flat win/loss tree (decision nodes, gains and offsets), exact; h whole."""
    held = beliefs(tree)
    assert tree.low is not None
    assert tree.high is not None
    low = [Fraction(float(x)) for x in tree.low]
    width = [Fraction(float(b)) - Fraction(float(a)) for a, b in zip(tree.low, tree.high, strict=True)]
    # As an affine function of its own value each leaf offers gain x + offset at the root.
    gain, offset, action = [], [], []
    for v in tree.leaf_nodes.tolist():
        g, q = Fraction(1), Fraction(0)
        while v > 0:
            g, q = (
                g * Fraction(float(tree.discount[v])),
                (Fraction(float(tree.reward[v])) + Fraction(float(tree.discount[v])) * q),
            )
            last, v = v, int(tree.parent[v])
        gain.append(g)
        offset.append(q)
        action.append(tree.action_nodes.tolist().index(last))

    def law(i: int, a: Fraction, b: Fraction) -> list[tuple[Fraction, Fraction]]:
        odds = beta_binomial(a, b, horizon)
        return [
            (offset[i] + gain[i] * (low[i] + width[i] * (a + s) / (a + b + horizon)), p)
            for s, p in enumerate(odds)
        ]

    laws = [law(i, a, b) for i, (a, b) in enumerate(held)]
    mates = [[j for j in range(len(held)) if action[j] == a] for a in range(len(tree.action_nodes))]
    now = [expected_largest([laws[j] for j in group]) for group in mates]
    out = []
    for i, (a, b) in enumerate(held):
        own = action[i]
        rival = max((v for q, v in enumerate(now) if q != own), default=None)
        before = now[own] if rival is None else max(now[own], rival)
        others = [laws[j] for j in mates[own] if j != i]
        voc = Fraction(0)
        for x, odds in enumerate(beta_binomial(a, b, k)):
            after = expected_largest([law(i, a + x, b + k - x), *others])
            voc += odds * ((after if rival is None else max(after, rival)) - before)
        out.append(voc)
    return out


def expected_largest(laws: list[list[tuple[Fraction, Fraction]]]) -> Fraction:
    """E[max] of independent discrete laws of (value, odds): the product of their distribution functions."""
    at = sorted({x for law in laws for x, _ in law})
    total, before = Fraction(0), Fraction(0)
    sums, place = [Fraction(0)] * len(laws), [0] * len(laws)
    ordered = [sorted(law) for law in laws]
    for x in at:
        product = Fraction(1)
        for j, law in enumerate(ordered):
            while place[j] < len(law) and law[place[j]][0] <= x:
                sums[j] += law[place[j]][1]
                place[j] += 1
            product *= sums[j]
        total += x * (product - before)
        before = product
    return total
