"""What one leaf's posterior mean is worth against the rest of its root action; floor 2.

Leave leaf i out of its action: W, the best of the rest, has distribution function F. Then
G(x) = E max(x, W) is convex with slope F, and the curve D(x) = G(x) - c, c the best rival action, is all
that a look at leaf i depends on. It is tabulated from the panels of `action_grid`, in the form that cancels
least:

    from the right   D(x) = (x - c) + integral from x to infinity of (1 - F)
    from the left    D(x) = (integral from -infinity to x of F) - kappa,   kappa = c - E W

The second keeps relative accuracy where the leaf is far below the rest and kappa is tiny.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from distill.exact.action_grid import NODES, WEIGHTS, Grid, N
from distill.numerics import compiled, gain, legendre_antiderivative, norm_cdf
from distill.tree import Floats

__all__ = ["Nodes", "Rest", "gather", "nodes_for", "rest_of", "tail_at", "value_at"]

_UNDECIDED = -83.0  # log F below which the rest is taken as above for sure
_CUMULATE = legendre_antiderivative(N)
_SERIES = np.linalg.inv(np.polynomial.chebyshev.chebvander(NODES, N - 1))  # node values to Chebyshev series
_EXTRA = 120  # pieces that windows may add to those of the grid; at most 70 are known of


class Rest(NamedTuple):
    """The curve D of one leaf.

    edges (P + 1,); at the nodes of each panel, (P, N): F, its complement S = 1 - F, log F, and `area`,
    which is D less (x - c) or, from the left, D plus kappa. Left of the panels F = 0, right of them F = 1.
    series (3, P, N), Chebyshev, of log F, area and S without its trend, are made when first needed; `made`
    (2, P) says where the first two and the third are. `loose` (3,) is how far the last coefficients of any
    of them let an interpolated F (relative), D (absolute) and S (relative) be off.
    """

    edges: Floats
    F: NDArray[np.float64]
    S: NDArray[np.float64]
    logs: NDArray[np.float64]
    area: NDArray[np.float64]
    series: NDArray[np.float64]
    made: NDArray[np.bool_]
    loose: Floats
    from_left: bool
    c: float
    kappa: float
    total: float  # area at the last edge: 0, or from the left that of all panels


class Nodes(NamedTuple):
    """Quadrature nodes over a stretch of the curve, filled by `gather`; x, w, D, F, S of equal length."""

    x: Floats
    w: Floats
    D: Floats
    F: Floats
    S: Floats


@compiled
def nodes_for(grid: Grid) -> Nodes:
    """Room for any stretch over a grid."""
    n = (len(grid.edges) + _EXTRA) * N
    return Nodes(np.empty(n), np.empty(n), np.empty(n), np.empty(n), np.empty(n))


@compiled
def rest_of(grid: Grid, i: int, mu: float, rho: float, c: float, lead: float) -> Rest:
    """The curve of leaf i ~ N(mu, rho^2) against rival value c; lead = c - V(action), taken exactly."""
    P = len(grid.edges) - 1
    p0 = 0
    while p0 < P and grid.log_rest[p0, i, N - 1] < _UNDECIDED:
        p0 += 1
    n = P - p0
    edges = grid.edges[p0:]
    F = np.empty((n, N))
    S = np.empty((n, N))
    logs = np.empty((n, N))
    area = np.empty((n, N))
    above = 0.0  # integral of S over all panels
    for p in range(n):
        half = 0.5 * (edges[p + 1] - edges[p])
        for j in range(N):
            one = grid.log_rest[p0 + p, i, j]
            logs[p, j] = one
            if one < -0.7:
                F[p, j] = math.exp(one)
                S[p, j] = 1.0 - F[p, j]
            else:
                S[p, j] = -math.expm1(one)
                F[p, j] = 1.0 - S[p, j]
            above += half * WEIGHTS[j] * S[p, j]
    kappa = c - (edges[0] + above)
    from_left = kappa < 1e-3 * (abs(c) + abs(edges[0]) + above)
    if from_left:
        kappa = lead + _shortfall(edges, F, mu, rho)
        running = 0.0
        for p in range(n):
            half = 0.5 * (edges[p + 1] - edges[p])
            running = _cumulate(F[p], half, running, area[p], True)
    else:
        running = 0.0
        for p in range(n - 1, -1, -1):
            half = 0.5 * (edges[p + 1] - edges[p])
            running = _cumulate(S[p], half, running, area[p], False)
    series = np.empty((3, n, N))
    made = np.zeros((2, n), dtype=np.bool_)
    total = running if from_left else 0.0
    return Rest(edges, F, S, logs, area, series, made, np.zeros(3), from_left, c, kappa, total)


@compiled
def _shortfall(edges: Floats, F: NDArray[np.float64], mu: float, rho: float) -> float:
    """E (X - W)^+ = integral of F P(X > x): how far E W lies below the value of the action, X = leaf i."""
    total = rho * gain((mu - edges[len(edges) - 1]) / rho)
    for p in range(len(edges) - 1):
        half = 0.5 * (edges[p + 1] - edges[p])
        for j in range(N):
            x = 0.5 * (edges[p] + edges[p + 1]) + half * NODES[j]
            total += half * WEIGHTS[j] * F[p, j] * norm_cdf((mu - x) / rho)
    return total


@compiled
def _cumulate(f: Floats, half: float, running: float, out: Floats, from_left: bool) -> float:
    """Integral of f from one end of its panel to each node, plus `running`; returns that to the other end."""
    whole = 0.0
    for j in range(N):
        whole += WEIGHTS[j] * f[j]
    for j in range(N):
        part = 0.0
        for q in range(N):
            part += _CUMULATE[j, q] * f[q]
        out[j] = running + half * (part if from_left else whole - part)
    return running + half * whole


@compiled
def gather(
    rest: Rest,
    out: Nodes,
    a: float,
    b: float,
    fine_a: float,
    fine_b: float,
    fine: float,
    coarse: float,
    tails: bool,
) -> int:
    """Quadrature nodes of the curve over [a, b]; returns how many. S is filled if `tails`.

    Pieces are no longer than `coarse`, and than `fine` where they meet [fine_a, fine_b]. Panels that are
    short enough are taken whole, also where they reach beyond [a, b]; others are cut and interpolated.
    """
    n = len(rest.edges) - 1
    low = rest.edges[0]
    high = rest.edges[n]
    count = 0
    if a < low:
        count = _cut(rest, out, count, -1, a, min(b, low), fine_a, fine_b, fine, coarse, tails)
    for p in range(n):
        left = rest.edges[p]
        right = rest.edges[p + 1]
        if right <= a or left >= b:
            continue
        meets = right > fine_a and left < fine_b
        if right - left <= (fine if meets else coarse):
            half = 0.5 * (right - left)
            middle = 0.5 * (right + left)
            for j in range(N):
                x = middle + half * NODES[j]
                out.x[count] = x
                out.w[count] = half * WEIGHTS[j]
                out.F[count] = rest.F[p, j]
                out.S[count] = rest.S[p, j]
                out.D[count] = (
                    rest.area[p, j] - rest.kappa if rest.from_left else rest.area[p, j] + (x - rest.c)
                )
                count += 1
        else:
            count = _cut(
                rest, out, count, p, max(a, left), min(b, right), fine_a, fine_b, fine, coarse, tails
            )
    if b > high:
        count = _cut(rest, out, count, n, max(a, high), b, fine_a, fine_b, fine, coarse, tails)
    return count


@compiled
def _cut(
    rest: Rest,
    out: Nodes,
    count: int,
    p: int,
    a: float,
    b: float,
    fine_a: float,
    fine_b: float,
    fine: float,
    coarse: float,
    tails: bool,
) -> int:
    """Pieces of [a, b], all inside panel p (-1 and n: left and right of all)."""
    first = min(max(fine_a, a), b)
    second = min(max(fine_b, first), b)
    for part in range(3):
        left = a if part == 0 else (first if part == 1 else second)
        right = first if part == 0 else (second if part == 1 else b)
        if not right > left:
            continue
        longest = fine if part == 1 else coarse
        pieces = max(1, math.ceil((right - left) / longest - 1e-9))
        half = 0.5 * (right - left) / pieces
        for piece in range(pieces):
            middle = left + half * (2 * piece + 1)
            for j in range(N):
                x = middle + half * NODES[j]
                out.x[count] = x
                out.w[count] = half * WEIGHTS[j]
                out.D[count], out.F[count] = value_at(rest, p, x)
                if tails:
                    out.S[count] = tail_at(rest, p, x)
                count += 1
    return count


@compiled
def value_at(rest: Rest, p: int, x: float) -> tuple[float, float]:
    """D(x) and F(x) for x in panel p (-1 and n: left and right of all panels)."""
    n = len(rest.edges) - 1
    if p < 0:
        return -rest.kappa, 0.0
    if p >= n:
        if rest.from_left:
            return (rest.total - rest.kappa) + (x - rest.edges[n]), 1.0
        return x - rest.c, 1.0
    if not rest.made[0, p]:
        for k in range(N):
            logs = 0.0
            area = 0.0
            for j in range(N):
                logs += _SERIES[k, j] * rest.logs[p, j]
                area += _SERIES[k, j] * rest.area[p, j]
            rest.series[0, p, k] = logs
            rest.series[1, p, k] = area
        for q in range(2):
            rest.loose[q] = max(rest.loose[q], _left_out(rest.series[q, p]))
        rest.made[0, p] = True
    t = (2.0 * x - rest.edges[p] - rest.edges[p + 1]) / (rest.edges[p + 1] - rest.edges[p])
    logs = 0.0
    area = 0.0
    before = t
    now = 1.0
    for k in range(N):
        logs += rest.series[0, p, k] * now
        area += rest.series[1, p, k] * now
        before, now = now, 2.0 * t * now - before
    return area - rest.kappa if rest.from_left else area + (x - rest.c), math.exp(min(logs, 0.0))


@compiled
def _left_out(series: Floats) -> float:
    """About what a series leaves out: on these panels coefficients fall by a factor of 5 and more."""
    return 0.4 * max(abs(series[N - 1]), 0.2 * abs(series[N - 2]))


@compiled
def tail_at(rest: Rest, p: int, x: float) -> float:
    """S(x) = 1 - F(x) with relative accuracy, for x in panel p as in `value_at`.

    S is freed of its exponential trend over the panel before it is interpolated.
    """
    n = len(rest.edges) - 1
    if p < 0 or p >= n:
        return 1.0 if p < 0 else 0.0
    last = max(rest.S[p, N - 1], 1e-300)
    trend = math.log(last / max(rest.S[p, 0], 1e-300)) / (NODES[N - 1] - NODES[0])
    if not rest.made[1, p]:
        least = math.inf
        for k in range(N):
            one = 0.0
            for j in range(N):
                freed = rest.S[p, j] * math.exp(trend * (NODES[N - 1] - NODES[j]))
                one += _SERIES[k, j] * freed
                least = min(least, freed)
            rest.series[2, p, k] = one
        rest.loose[2] = max(rest.loose[2], _left_out(rest.series[2, p]) / max(least, 1e-300))
        rest.made[1, p] = True
    t = (2.0 * x - rest.edges[p] - rest.edges[p + 1]) / (rest.edges[p + 1] - rest.edges[p])
    total = 0.0
    before = t
    now = 1.0
    for k in range(N):
        total += rest.series[2, p, k] * now
        before, now = now, 2.0 * t * now - before
    return max(total * math.exp(trend * (t - NODES[N - 1])), 0.0)
