"""Distribution of the best leaf of one root action, left-one-out for every leaf, on panels; floor 2.

The leaves of an action are independent normals N(d_j, rho_j^2) and perhaps a sure value `cut`, below which
the maximum cannot fall. Its distribution function is F(x) = prod_j Phi((x - d_j) / rho_j) for x >= cut, and
the rest of the action, without leaf i, has F / Phi_i. Everything later is an integral of such functions
against normal kernels, so they are tabulated once at Gauss-Legendre nodes of panels that resolve them:

- a panel is at most `REACH` times the smallest rho_j of the leaves that still vary on it;
- where many leaves make F steeper than each of them, panels shrink until the logarithm bends little.

Logarithms of F / Phi_i are sums of non-positive terms over the other leaves (prefix plus suffix), so they
keep relative accuracy in both tails: 1 - F = -expm1(log F).
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from distill.numerics import compiled, gain, gauss_legendre, log_norm_cdf
from distill.tree import Floats

__all__ = ["LEFT", "N", "NODES", "WEIGHTS", "Grid", "build", "expected_gain"]

N = 16  # Gauss-Legendre nodes a panel
NODES, WEIGHTS = gauss_legendre(N)
REACH = 2.0  # panel length in standard deviations: products of three such functions to about 1e-14
LEFT = 12.5  # standard deviations left of a mean beyond which Phi < 4e-36 is taken as 0
_BEND = 2.5  # most that log F may bend over a panel
_NOTHING = -85.0  # log F below which the rest of an action plays no part

Cube = NDArray[np.float64]


class Grid(NamedTuple):
    """Panels of one action. edges (P + 1,); log_cdf and log_rest (P, leaves, N), at nodes of each panel.

    log_cdf[p, j] = log Phi_j, log_rest[p, j] = sum of the others. Left of edges[0] every rest is 0, right
    of edges[-1] it is 1.
    """

    edges: Floats
    log_cdf: Cube
    log_rest: Cube


@compiled
def build(d: Floats, rho: Floats, cut: float, right: float) -> Grid:
    """The panels of an action with leaves N(d_j, rho_j^2), rho_j > 0, and the largest sure value `cut`.

    cut is -inf without a sure leaf. Beyond `right` standard deviations above its mean a leaf is taken as
    decided (Phi = 1): 9 keeps absolute rounding, 12.5 keeps relative accuracy of 1 - F down to 1e-35.
    """
    m = len(d)
    start, join, top = _start(d, rho, cut)
    stop = start
    for j in range(m):
        stop = max(stop, d[j] + right * rho[j])
    room = 16
    edges = np.empty(room + 1)
    logs = np.empty((room, m, N))
    edges[0] = start
    p = 0
    longest = math.inf
    while edges[p] < stop:
        if p == room:
            edges, logs = _more_room(edges, logs)
            room = len(logs)
        a = edges[p]
        b = min(stop, a + longest)
        for j in range(m):
            if a < d[j] + right * rho[j] and (j != top or a >= join):
                b = min(b, a + REACH * rho[j])
        if a < join < b:
            b = join
        if stop - b < 0.1 * (b - a):
            b = stop
        while True:
            bend, end = _tabulate(d, rho, right, a, b, top if b <= join else -1, logs[p])
            if bend <= _BEND or end < _NOTHING or b - a <= 1e-12 * abs(a):
                break
            b = a + (b - a) * max(0.25, math.sqrt(2.0 / bend))
            longest = 0.0
        if longest < math.inf:
            longest = 2.5 * (b - a)
        p += 1
        edges[p] = b
    return Grid(edges[: p + 1].copy(), logs[:p].copy(), _all_but_one(logs, p))


@compiled
def _all_but_one(logs: Cube, n: int) -> Cube:
    """Of the first n panels: for each leaf the sum over the others, prefix plus suffix."""
    m = logs.shape[1]
    rest = np.empty((n, m, N))
    for p in range(n):
        for q in range(N):
            after = 0.0
            for j in range(m - 1, -1, -1):
                rest[p, j, q] = after
                after += logs[p, j, q]
            before = 0.0
            for j in range(m):
                rest[p, j, q] += before
                before += logs[p, j, q]
    return rest


@compiled
def _start(d: Floats, rho: Floats, cut: float) -> tuple[float, float, int]:
    """Where the grid starts; where leaf `top`, the last to come alive from the left, does so; that leaf.

    Left of `start` every rest vanishes: no matter which leaf is left out, another one is above.
    """
    first = cut
    second = cut
    top = -1
    stop = cut
    for j in range(len(d)):
        low = d[j] - LEFT * rho[j]
        stop = max(stop, d[j] + 9.0 * rho[j])
        if low > first:
            second = first
            first = low
            top = j
        elif low > second:
            second = low
    start = second
    high = stop
    for _ in range(8):
        middle = 0.5 * (start + high)
        total = 0.0
        least = 0.0
        for j in range(len(d)):
            one = log_norm_cdf((middle - d[j]) / rho[j])
            total += one
            least = min(least, one)
        if total - least < _NOTHING:
            start = middle
        else:
            high = middle
    return start, first, top


@compiled
def _tabulate(
    d: Floats, rho: Floats, right: float, a: float, b: float, skip: int, out: NDArray[np.float64]
) -> tuple[float, float]:
    """log Phi_j at the nodes of [a, b]; returns how much their sum bends, and the sum near b.

    `skip` is left out of the sum, and so is the smallest term near b: some leaf is always left out.
    """
    half = 0.5 * (b - a)
    middle = 0.5 * (a + b)
    total = np.zeros(N)
    least = 0.0
    for j in range(len(d)):
        decided = (a - d[j]) / rho[j] >= right
        for q in range(N):
            out[j, q] = 0.0 if decided else log_norm_cdf((middle + half * NODES[q] - d[j]) / rho[j])
            if j != skip:
                total[q] += out[j, q]
        if j != skip:
            least = min(least, out[j, N - 1])
    bend = 0.5 * (total[N // 2 - 1] + total[N // 2] - total[0] - total[N - 1])
    return bend, total[N - 1] - least


@compiled
def _more_room(edges: Floats, logs: Cube) -> tuple[Floats, Cube]:
    p, m, _ = logs.shape
    more_edges = np.empty(2 * p + 1)
    more_logs = np.empty((2 * p, m, N))
    for q in range(p + 1):
        more_edges[q] = edges[q]
    for q in range(p):
        for j in range(m):
            for n in range(N):
                more_logs[q, j, n] = logs[q, j, n]
    return more_edges, more_logs


@compiled
def expected_gain(grid: Grid, d: Floats, rho: Floats, cut: float) -> tuple[float, float]:
    """(mean of the leaf with the largest mean, or `cut` where that is larger; E max - it).

    E max - d_k = integral of Phi_k (1 - F_rest,k), positive throughout: the gain keeps relative accuracy.
    """
    k = 0
    for j in range(len(d)):
        if d[j] > d[k]:
            k = j
    sure = cut >= d[k]
    total = 0.0
    for p in range(len(grid.edges) - 1):
        half = 0.5 * (grid.edges[p + 1] - grid.edges[p])
        for n in range(N):
            rest = grid.log_rest[p, k, n]
            if sure:
                total += half * WEIGHTS[n] * -math.expm1(rest + grid.log_cdf[p, k, n])
            else:
                total += half * WEIGHTS[n] * math.exp(grid.log_cdf[p, k, n]) * -math.expm1(rest)
    if sure:
        return cut, total + (grid.edges[0] - cut)
    return d[k], total + rho[k] * gain((grid.edges[0] - d[k]) / rho[k])
