"""The passes of `distill.backup` over flat arrays, compiled; floor 3.

A tree is `node`, float rows over the nodes, and `link`, int rows over the nodes, with the children of node c
at kids[link[FIRST, c] : link[LAST, c]]. `node` holds what an update changes, so that every pass writes in
place:

    node   MEAN, VAR         moments of V_h before the edge into the node
           OTHERS, OTHERS_VAR  moments of the maximum of its siblings, below decision nodes
           GAIN, REWARD      of the edge to the node it hands its moments to
           MOVE, SLOPE, NOW, BEND  of the pass down, which the root action's value carries
    link   ABOVE             that node
           FIRST, LAST       its children in `kids`
           IS_MAX            whether it is a decision node
           LEAF_NODE         of leaf i, in column i
    own    SD, RATIO, MOST   of each leaf: sd at present, noise ratio, gain from the root

The formulas are those of `distill.backup.Backup`, in the same order, so that results differ by roundings.
"""

# mypy: allow-untyped-calls
from __future__ import annotations

import math

import numpy as np

from distill.backup import ABOVE as SDS_ABOVE
from distill.backup import BELOW as SDS_BELOW
from distill.backup import CELLS, FAR, FAR_MOVE, LEAST, LEAST_THETA
from distill.kernels import compiled
from distill.normal_fits_compiled import inverse_gain, norm_cdf, norm_cdf_pdf, norm_pdf, unit_gain
from distill.record_rows import NO_VARIANCE

__all__ = [
    "ABOVE", "BEND", "FIRST", "GAIN", "IS_MAX", "LAST", "LEAF_NODE", "MEAN", "MOST", "MOVE", "NOW", "OTHERS",
    "OTHERS_VAR", "RATIO", "REWARD", "SD", "SLOPE", "VAR", "fill_rows", "pass_down", "refresh_all", "take_in",
]  # fmt: skip

MEAN, VAR, OTHERS, OTHERS_VAR, GAIN, REWARD, MOVE, SLOPE, NOW, BEND = range(10)
ABOVE, FIRST, LAST, IS_MAX, LEAF_NODE = range(5)
SD, RATIO, MOST = range(3)


@compiled
def take_in(leaf, belief, win_loss, horizon, node, link, kids, own, phi):  # type: ignore[no-untyped-def]
    """Moments of a leaf from its belief, and of all nodes above it.

    belief : shape (columns, n_leaves), in the order of `schema`. phi : scratch, (most children + 1, cells).
    """
    c = link[LEAF_NODE, leaf]
    mean, var, ratio = _leaf_moments(belief[:, leaf], win_loss)
    seen = 1.0 if math.isinf(horizon) else horizon / (horizon + ratio)
    node[MEAN, c], node[VAR, c] = mean, var * seen
    own[SD, leaf], own[RATIO, leaf] = math.sqrt(var), ratio
    c = link[ABOVE, c]
    while c != 0:
        _refresh(c, node, link, kids, phi)
        c = link[ABOVE, c]


@compiled
def refresh_all(node, link, kids, phi):  # type: ignore[no-untyped-def]
    """Moments of every node from the leaves'."""
    for c in range(node.shape[1] - 1, 0, -1):
        if link[LAST, c] > link[FIRST, c]:
            _refresh(c, node, link, kids, phi)


@compiled
def _leaf_moments(column, win_loss):  # type: ignore[no-untyped-def]
    """Mean, variance at present and noise ratio of one leaf."""
    if win_loss:
        alpha, beta, low, high = column[0], column[1], column[2], column[3]
        ratio = alpha + beta
        span, share = high - low, alpha / ratio
        return low + span * share, span * span * share * (beta / ratio) / (ratio + 1), ratio
    mean, var, noise = column[0], column[1], column[2]
    return mean, var, NO_VARIANCE if var <= noise / NO_VARIANCE else noise / var


@compiled
def _edge(c, node):  # type: ignore[no-untyped-def]
    """Moments of a node as the one above it sees them."""
    gain = node[GAIN, c]
    return node[REWARD, c] + gain * node[MEAN, c], gain * gain * node[VAR, c]


@compiled
def _refresh(c, node, link, kids, phi):  # type: ignore[no-untyped-def]
    """Moments of one node from its children's."""
    own = kids[link[FIRST, c] : link[LAST, c]]
    if not link[IS_MAX, c]:
        mean, var = 0.0, 0.0
        for k in own:
            m, v = _edge(k, node)
            mean += m
            var += v
    elif len(own) == 1:
        mean, var = _edge(own[0], node)
        node[OTHERS, own[0]], node[OTHERS_VAR, own[0]] = -FAR, 0.0
    elif len(own) == 2:
        m0, v0 = _edge(own[0], node)
        m1, v1 = _edge(own[1], node)
        node[OTHERS, own[0]], node[OTHERS_VAR, own[0]] = m1, v1
        node[OTHERS, own[1]], node[OTHERS_VAR, own[1]] = m0, v0
        mean, var = _of_two(m0, v0, m1, v1) if m0 >= m1 else _of_two(m1, v1, m0, v0)
    else:
        mean, var = _of_many(own, node, phi)
    node[MEAN, c], node[VAR, c] = mean, var


@compiled
def _of_two(m_top, v_top, m_low, v_low):  # type: ignore[no-untyped-def]
    """Clark (1961), eqs. 2 and 3; m_top >= m_low."""
    theta = math.sqrt(v_top + v_low)
    gap = abs(m_top - m_low)
    if theta <= gap * 1e-8 or theta == 0.0:
        return m_top, v_top
    p = gap / theta
    lift = theta * unit_gain(-p)
    weight = norm_cdf(-p)
    square = v_top * (1 - weight) + (v_low + gap * gap) * weight - gap * theta * norm_pdf(p)
    return m_top + lift, max(square - lift * lift, 0.0)


@compiled
def _of_many(own, node, phi):  # type: ignore[no-untyped-def]
    """The table of cells over three children or more; writes the moments of each one's siblings."""
    low, high, top, second_best, sure = -np.inf, -np.inf, -np.inf, -np.inf, True
    for k in own:
        m, v = _edge(k, node)
        s = math.sqrt(max(v, LEAST))
        low, high = max(low, m - SDS_BELOW * s), max(high, m + SDS_ABOVE * s)
        sure = sure and v == 0.0
        second_best = max(second_best, min(m, top))
        top = max(top, m)
    if sure:
        first = True  # of the best ones, the one that a tie goes to
        for k in own:
            best = first and _edge(k, node)[0] == top
            first = first and not best
            node[OTHERS, k], node[OTHERS_VAR, k] = second_best if best else top, 0.0
        return top, 0.0
    width = high - low
    n = len(own)
    joint = phi[n]
    joint[:] = 1.0
    for i in range(n):
        m, v = _edge(own[i], node)
        s = math.sqrt(max(v, LEAST))
        for j in range(CELLS):
            phi[i, j] = max(norm_cdf(((low - m) + width * ((j + 0.5) / CELLS)) / s), LEAST)
            joint[j] *= phi[i, j]
    for i in range(n):
        first_sum, second_sum = 0.0, 0.0
        for j in range(CELLS):
            upper = 1 - joint[j] / phi[i, j]
            first_sum += upper
            second_sum += upper * ((j + 0.5) / CELLS)
        mean, var = _moments(first_sum, second_sum, width)
        node[OTHERS, own[i]], node[OTHERS_VAR, own[i]] = low + mean, var
    first_sum, second_sum = 0.0, 0.0
    for j in range(CELLS):
        first_sum += 1 - joint[j]
        second_sum += (1 - joint[j]) * ((j + 0.5) / CELLS)
    mean, var = _moments(first_sum, second_sum, width)
    return low + mean, var


@compiled
def _moments(first_sum, second_sum, width):  # type: ignore[no-untyped-def]
    """Mean above the table's lower end and variance, from sums of 1 - F and of t (1 - F) over the cells."""
    first = width * (first_sum / CELLS)
    second = 2 * width * width * (second_sum / CELLS)
    second -= width * width / (12 * CELLS**2)
    return first, max(second - first * first, 0.0)


@compiled
def pass_down(actions, order, node, link):  # type: ignore[no-untyped-def]
    """MOVE, SLOPE, NOW and BEND of every node; order : all nodes that carry moments, parents first."""
    best, value, second_best = -1, -np.inf, -FAR
    for a in actions:
        m = _edge(a, node)[0]
        if m > value:
            best, value, second_best = a, m, max(second_best, value)
        else:
            second_best = max(second_best, m)
    for c in order:
        p, gain = link[ABOVE, c], node[GAIN, c]
        mean = node[REWARD, c] + gain * node[MEAN, c]
        if p == 0:
            node[MOVE, c] = ((second_best if c == best else value) - mean) / gain
            node[SLOPE, c], node[NOW, c], node[BEND, c] = gain, gain, 0.0
            continue
        move, slope, now, bend = node[MOVE, p], node[SLOPE, p], node[NOW, p], node[BEND, p]
        others = node[OTHERS, c]
        if link[IS_MAX, p] and others > -FAR:
            theta = math.sqrt(gain * gain * node[VAR, c] + node[OTHERS_VAR, c])
            theta = max(theta, 1e-14 * abs(mean) + LEAST_THETA)
            target = node[MEAN, p] + move
            x = inverse_gain((target - others) / theta)
            at = (mean - others) / theta
            share, density = norm_cdf_pdf(x)
            move = theta * (x - at)
            bend = bend * (share * share) + slope * density / theta
            slope *= share
            now *= norm_cdf(at)
        node[MOVE, c] = move / gain if gain > 0 else move
        node[SLOPE, c], node[NOW, c], node[BEND, c] = slope * gain, now * gain, bend * (gain * gain)


@compiled
def fill_rows(actions, order, node, link, own, out):  # type: ignore[no-untyped-def]
    """The columns of `record_rows.Crossings` in their order, into `out`, shape (8, n_leaves)."""
    pass_down(actions, order, node, link)
    for i in range(out.shape[1]):
        c, sd = link[LEAF_NODE, i], own[SD, i]
        slope = node[SLOPE, c] if len(actions) > 1 else 0.0
        safe = max(slope, LEAST)
        out[0, i] = _cut(node[MOVE, c] / max(sd, LEAST), -FAR_MOVE)
        out[1, i] = slope * sd
        out[2, i] = _cut(node[BEND, c] / safe * sd, 0.0)
        out[3, i] = min(node[NOW, c] / safe, FAR_MOVE) if slope > 0 else 0.0
        out[4, i] = out[5, i] = 0.0
        out[6, i] = own[MOST, i] * sd
        out[7, i] = own[RATIO, i]


@compiled
def _cut(x, least):  # type: ignore[no-untyped-def]
    """x between `least` and FAR_MOVE."""
    return least if x < least else (FAR_MOVE if x > FAR_MOVE else x)
