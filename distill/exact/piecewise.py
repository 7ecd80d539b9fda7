"""Convex piecewise-linear functions along a line: maximum, sum, expectation; compiled; floor 2.

As leaf means move along a line t -> m + t S e_i, every node's value is a convex piecewise-linear function
of t. Only its rise h(t) = V(t) - V(0) matters to the VOC, so nothing of the size of the tree's values is
ever subtracted here. A function is held as

    its slope at t = 0, and breakpoints t_j, ascending, with slope changes d_j > 0

and for T ~ N(0, tau^2) the expected rise is, in gain form,

    E[h(T)] = sum_j d_j tau f(-|t_j| / tau),   f(z) = z Phi(z) + phi(z),

a sum of positive terms: tiny values keep their relative accuracy. (For one maximum over all leaves this
is the correlated knowledge gradient: Frazier, Powell and Dayanik 2009, section 3.)

Each breakpoint carries bounds on two rounding errors: of the intercept change d_j t_j, and of d_j.
"""

from __future__ import annotations

import numpy as np

from distill import schema
from distill.numerics import compiled, gain, norm_cdf, norm_pdf
from distill.tree import Floats, Ints

__all__ = ["expected_rise", "node_functions", "root_breakpoints", "work_arrays"]

_EPS = 2.0**-52
_REACH = 40.0  # standard deviations: f(-40) is below the smallest double
_DECISION = schema.DECISION
_LEAF = schema.LEAF

# Rows of the work arrays. A breakpoint: where, slope change, error of the intercept change, of the slope
# change. A line adds its function and its place in it, so that neighbours keep their breakpoint as it is.
_T, _D, _ERR_Q, _ERR_D = 0, 1, 2, 3
_SLOPE, _Q, _SLOPE_ERR, _Q_ERR, _OWNER, _PLACE, _BEGIN = 4, 5, 6, 7, 8, 9, 10
_ROWS = 11


@compiled
def root_breakpoints(
    kind: Ints, n_children: Ints, leaf: Ints, gap: Floats, gap_err: Floats, slopes: Floats, sd: Floats
) -> tuple[Ints, Floats]:
    """Breakpoints of the root's rise, in the direction of every leaf's observation.

    kind, n_children, leaf, gap, gap_err : shape (n_nodes,), the nodes in post-order; leaf position of a
        leaf; how far a child of a decision node lies below its best sibling at t = 0 (u), with its error.
    slopes : (n_leaves, n_leaves): [i, l] is how fast leaf l's contribution to the root moves with t when
        leaf i is observed.
    sd : (n_leaves,) largest standard deviation of t to be asked for; what lies 40 of it away is dropped.
    Returns start (n_leaves + 1,), and points (4, total) with rows t, d, error of d t, error of d; those
    of direction i are at start[i]:start[i + 1].
    """
    n_leaves, n_nodes = slopes.shape[0], len(kind)
    start = np.zeros(n_leaves + 1, dtype=np.int64)
    out = np.empty((4, 8 * n_leaves + 64))
    stack, first, point, line, hull = work_arrays(n_nodes, n_leaves)
    for i in range(n_leaves):
        node_functions(
            kind,
            n_children,
            leaf,
            gap,
            gap_err,
            slopes[i],
            _REACH * sd[i],
            n_nodes,
            stack,
            first,
            point,
            line,
            hull,
        )
        a, b = start[i], start[i] + first[1]
        if b > out.shape[1]:
            grown = np.empty((4, 2 * b))
            grown[:, :a] = out[:, :a]
            out = grown
        out[:, a:b] = point[:, : first[1]]
        start[i + 1] = b
    return start, out[:, : start[n_leaves]].copy()


@compiled
def node_functions(
    kind: Ints,
    n_children: Ints,
    leaf: Ints,
    gap: Floats,
    gap_err: Floats,
    slopes: Floats,
    reach: float,
    n_nodes: int,
    stack: Floats,
    first: Ints,
    point: Floats,
    line: Floats,
    hull: Ints,
) -> int:
    """Walk the first n_nodes nodes in post-order; functions left: all roots of the subtrees walked.

    stack (4, n): slope at 0, its error, gap, gap error of each function left; its breakpoints are at
    first[f]:first[f + 1] of point. Breakpoints further out than `reach` are dropped.
    """
    top = 0
    for v in range(n_nodes):
        if kind[v] == _LEAF:
            stack[0, top] = slopes[leaf[v]]
            stack[1, top] = 4 * _EPS * abs(stack[0, top])
            first[top + 1] = first[top]
        else:
            low = top - n_children[v]
            end = first[top]
            if kind[v] == _DECISION:
                end = _maximum(low, top, stack, first, point, line, hull, reach)
            elif top - low > 1:
                _sum(low, top, stack, first, point)
            first[low + 1] = end
            top = low
        stack[2, top], stack[3, top] = gap[v], gap_err[v]
        top += 1
    return top


@compiled
def work_arrays(n_nodes: int, n_leaves: int) -> tuple[Floats, Ints, Floats, Floats, Ints]:
    """stack, first, point, line, hull of `node_functions`."""
    return (
        np.empty((4, n_nodes)),
        np.zeros(n_nodes + 1, dtype=np.int64),
        np.empty((4, n_leaves + 1)),
        np.empty((_ROWS, n_leaves + 1)),
        np.empty(n_leaves + 1, dtype=np.int64),
    )


@compiled
def _sum(low: int, top: int, stack: Floats, first: Ints, point: Floats) -> None:
    """Functions low..top-1 of the stack added into place `low`: slopes add, breakpoints merge."""
    size, a, b = 0.0, first[low], first[top]
    for f in range(low, top):
        size += abs(stack[0, f])
    for f in range(low + 1, top):
        stack[0, low] += stack[0, f]
        stack[1, low] += stack[1, f]
    stack[1, low] += (top - low) * _EPS * size
    order = np.argsort(point[_T, a:b])
    for row in range(4):
        point[row, a:b] = point[row, a:b][order]


@compiled
def _maximum(
    low: int, top: int, stack: Floats, first: Ints, point: Floats, line: Floats, hull: Ints, reach: float
) -> int:
    """The largest of functions low..top-1, each lowered by its gap, put into place `low`; end of its points.

    Upper envelope of all their lines q + s t, in order of slope. Every q is at most 0 (the value at
    t = 0 is the largest), and walking away from t = 0 only lowers it: sums of one sign.
    """
    best = low
    for f in range(low, top):
        if stack[2, f] < stack[2, best]:
            best = f
    n = 0
    for f in range(low, top):
        n = _lines(f, stack, first, point, line, n, stack[0, best], reach)
    order = np.argsort(line[_SLOPE, :n])
    m = 0
    for new in order:
        begin, skip = -np.inf, False
        while m > 0:
            old = hull[m - 1]
            rise = line[_SLOPE, new] - line[_SLOPE, old]
            if rise <= 0:
                if line[_Q, new] <= line[_Q, old]:
                    skip = True
                    break
                begin = -np.inf
                m -= 1
                continue
            if _neighbours(line, old, new):
                begin = line[_T, old]
            else:
                begin = (line[_Q, old] - line[_Q, new]) / rise
            if m > 1 and begin <= line[_BEGIN, m - 1]:
                begin = -np.inf
                m -= 1
                continue
            break
        if not skip:
            line[_BEGIN, m] = begin
            hull[m] = new
            m += 1
    end = first[low]
    base, err = line[_SLOPE, hull[0]], line[_SLOPE_ERR, hull[0]]
    for j in range(1, m):
        old, new, t = hull[j - 1], hull[j], line[_BEGIN, j]
        err = max(err, line[_SLOPE_ERR, new])
        if t < 0:
            base = line[_SLOPE, new]
        if abs(t) >= reach:
            continue
        point[_T, end] = t
        if _neighbours(line, old, new):
            point[_D, end] = line[_D, old]
            point[_ERR_Q, end] = line[_ERR_Q, old]
            point[_ERR_D, end] = line[_ERR_D, old]
        else:
            point[_D, end] = line[_SLOPE, new] - line[_SLOPE, old]
            point[_ERR_Q, end] = (
                line[_Q_ERR, old] + line[_Q_ERR, new] - 2 * _EPS * (line[_Q, old] + line[_Q, new])
            )
            point[_ERR_D, end] = (
                line[_SLOPE_ERR, old]
                + line[_SLOPE_ERR, new]
                + _EPS * (abs(line[_SLOPE, old]) + abs(line[_SLOPE, new]))
            )
        end += 1
    stack[0, low], stack[1, low] = base, err
    return int(end)


@compiled
def _neighbours(line: Floats, old: int, new: int) -> bool:
    """Whether two lines follow each other in one function."""
    return bool(line[_OWNER, old] == line[_OWNER, new] and line[_PLACE, new] == line[_PLACE, old] + 1)


@compiled
def _lines(
    f: int, stack: Floats, first: Ints, point: Floats, line: Floats, n: int, slope: float, reach: float
) -> int:
    """Append the lines of function f, lowered by its gap, to `line` from place n; the new n.

    A line that stays below the tangent (of slope `slope`) of the best function all the way to `reach`
    cannot reach the maximum, and is left out.
    """
    a, b = first[f], first[f + 1]
    middle = a  # breakpoints before it lie left of t = 0
    while middle < b and point[_T, middle] < 0:
        middle += 1
    s, q, s_err, q_err = stack[0, f], -stack[2, f], stack[1, f], stack[3, f]
    for place in range(middle, b + 1):
        if q + abs(s - slope) * reach >= 0:
            n = _add_line(line, n, f, place, s, q, s_err, q_err, point, b)
        if place < b:
            step = point[_D, place] * point[_T, place]
            q -= step
            s += point[_D, place]
            q_err += point[_ERR_Q, place] + 2 * _EPS * (step - q)
            s_err += _EPS * abs(s)
    s, q, s_err, q_err = stack[0, f], -stack[2, f], stack[1, f], stack[3, f]
    for place in range(middle - 1, a - 1, -1):
        step = -point[_D, place] * point[_T, place]
        q -= step
        s -= point[_D, place]
        q_err += point[_ERR_Q, place] + 2 * _EPS * (step - q)
        s_err += _EPS * abs(s)
        if q + abs(s - slope) * reach >= 0:
            n = _add_line(line, n, f, place, s, q, s_err, q_err, point, b)
    return n


@compiled
def _add_line(
    line: Floats,
    n: int,
    f: int,
    place: int,
    s: float,
    q: float,
    s_err: float,
    q_err: float,
    point: Floats,
    b: int,
) -> int:
    """Line q + s t at place n, with the breakpoint to its right-hand neighbour in function f, if any."""
    line[_SLOPE, n], line[_Q, n], line[_SLOPE_ERR, n], line[_Q_ERR, n] = s, q, s_err, q_err
    line[_OWNER, n], line[_PLACE, n] = f, place
    if place < b:
        line[:4, n] = point[:4, place]
    return n + 1


@compiled
def expected_rise(start: Ints, point: Floats, direction: Ints, sd: Floats) -> tuple[Floats, Floats]:
    """E[h(T)], T ~ N(0, sd^2), of the root's rise in given directions; and a bound on its rounding error.

    start, point : from `root_breakpoints`. direction, sd : equal shapes, one entry a value wanted.
    """
    value, error = np.zeros(len(direction)), np.zeros(len(direction))
    for w in range(len(direction)):
        tau = sd[w]
        for j in range(start[direction[w]], start[direction[w] + 1]):
            z = abs(point[_T, j]) / tau
            if z >= _REACH:
                continue
            rise = point[_D, j] * tau * gain(-z)
            value[w] += rise
            error[w] += (
                norm_cdf(-z) * point[_ERR_Q, j]
                + norm_pdf(z) * tau * point[_ERR_D, j]
                + 4 * _EPS * (2 + z * z) * rise
            )
        error[w] *= 2  # second-order terms
    return value, error
