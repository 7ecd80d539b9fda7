"""Distributions of node values as piecewise polynomials with atoms: built and evaluated; floor 2.

A tree of decision and chance nodes over independent normal leaves makes distributions of one class: a few
atoms, and between breakpoints a smooth density. Sure values cut a maximum off below (an atom, and a density
that jumps there); everything else is analytic at the scale of the leaves that shape it. So a distribution
is held on panels, each as wide as the local scale allows, with 16 Gauss-Legendre nodes and the Chebyshev
series of the density through them.

Where a density is all but 0 the polynomial may swing a little below it. It is left so: cut at 0 it would
have more mass, far out, than the distribution whose error is known.

A maximum is a product of distribution functions at common nodes (`thresholds`), a sum a product of
characteristic functions (`sums`) or, where atoms and jumps meet, a convolution (`convolution`).

The `error` of a distribution bounds its distance from the true one, where distance is the largest
| integral of F - G over any interval |: the swing of H(y) = E (y - X)^+ - E (y - Y)^+. Interpolation errors
swing to and fro and hardly add up there, as they do in the area between F and G (Wasserstein-1), which is an
upper bound. With W independent of both,

    max(X, W)   H'(b) - H'(a) = integral of F_W dH over [a, b], an average of H(b) - H(w), w in [a, b],
                with weights that sum to F_W(b)
    X + W       H'(y) = E H(y - W)

so a maximum and a sum swing no more than their arguments do: bounds add on the way up, and an expectation,
an expected maximum with anything, or the difference of two such, is off by at most `error`.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from distill.numerics import compiled, gauss_legendre
from distill.tree import Floats

__all__ = [
    "COEFFICIENTS", "N", "REACH", "WIDTH", "Distribution", "chebyshev", "evaluate", "fit", "near_nodes",
    "node_room", "nodes_of", "reflected", "shifted",
]  # fmt: skip

N = 16  # nodes a panel
WIDTH = 2.5  # panel width in standard deviations of the narrowest active normal
REACH = 8.6  # standard deviations kept on either side of a normal: 4e-18 lies beyond
_EPS = 2.0**-52

_T, _W = gauss_legendre(N)
# Values at the nodes -> Chebyshev coefficients of the polynomial through them.
COEFFICIENTS = np.linalg.inv(np.polynomial.chebyshev.chebvander(_T, N - 1))


class Distribution(NamedTuple):
    """Atoms and a piecewise polynomial density; a plain tuple of arrays, so that compiled code takes it.

    edges : (P + 1,) ascending panel edges; nothing lies below the first, the total is 1 at the last.
    hard : (P + 1,) whether the density jumps or an atom sits there.
    density : (P, N) Chebyshev coefficients of the density on each panel.
    cumulative : (P, N + 1) the same of the distribution function, atoms at or left of the panel included.
    nodes, mass : (P N,) quadrature: E g(X) = sum mass g(nodes) + atoms.
    panel_mass, panel_moment : (P,) integrals of f and x f over each panel.
    atom_at, atom_mass : (K,) ascending; each sits on an edge.
    mean : expectation. spread : Lipschitz bound of the value in standard normals, so that
        P(|X - mean| > t) <= 2 exp(-t^2 / (2 spread^2)) (Gaussian concentration).
    error : bound on the distance from the true distribution (see above), same unit as the values.
    """

    edges: Floats
    hard: np.ndarray
    density: Floats
    cumulative: Floats
    nodes: Floats
    mass: Floats
    panel_mass: Floats
    panel_moment: Floats
    atom_at: Floats
    atom_mass: Floats
    mean: float
    spread: float
    error: float


def nodes_of(edges: Floats) -> Floats:
    """The quadrature nodes of every panel, flat, shape (P N,)."""
    half = 0.5 * np.diff(edges)
    return ((edges[:-1] + half)[:, None] + half[:, None] * _T).ravel()


@compiled
def fit(
    edges: Floats,
    hard: np.ndarray,
    values: Floats,
    atom_at: Floats,
    atom_mass: Floats,
    spread: float,
    error: float,
) -> Distribution:
    """The distribution with density `values` (P N,) at the nodes of `edges`, scaled to a total of 1.

    `error` is inherited. Added are what the interpolation on each panel leaves out, judged from its last
    coefficients, how far the total was off, and rounding.

    What is left out has its zeros at the nodes, about c P_16(t): F swings by c / 33 of half a panel, H by
    c / 33^2 of its square or 0.9 / N^2 of the coefficient of T_16; both are back at 0 at the panel's end,
    so the largest panel counts. What 16 nodes miss of the panel's mass, far smaller, does add up.
    """
    P = len(edges) - 1
    total = atom_mass.sum()
    for p in range(P):
        half = 0.5 * (edges[p + 1] - edges[p])
        for i in range(N):
            total += values[p * N + i] * _W[i] * half
    error += abs(1.0 - total) * max(edges[P] - edges[0], spread)
    error += 2.0 * _EPS * max(abs(edges[0]), abs(edges[P]))
    if total > 0.0:
        values = values / total
        atom_mass = atom_mass / total
    density, cumulative = np.empty((P, N)), np.empty((P, N + 1))
    nodes, mass = np.empty(P * N), np.empty(P * N)
    panel_mass, panel_moment = np.zeros(P), np.zeros(P)
    below = 0.0
    mean = 0.0
    swing = 0.0
    missed = 0.0
    atom = 0
    for p in range(P):
        half = 0.5 * (edges[p + 1] - edges[p])
        mid = edges[p] + half
        while atom < len(atom_at) and atom_at[atom] <= edges[p]:
            below += atom_mass[atom]
            atom += 1
        for k in range(N):
            c = 0.0
            for i in range(N):
                c += COEFFICIENTS[k, i] * values[p * N + i]
            density[p, k] = c
        for i in range(N):
            j = p * N + i
            nodes[j] = mid + half * _T[i]
            mass[j] = values[j] * _W[i] * half
            panel_mass[p] += mass[j]
            panel_moment[p] += mass[j] * nodes[j]
        _antiderivative(density[p], half, below, cumulative[p])
        below += panel_mass[p]
        mean += panel_moment[p]
        tail = abs(density[p, N - 1]) + abs(density[p, N - 2])
        swing = max(swing, tail * half * half / (N * N))
        if tail > 0.0:  # coefficients fall geometrically: those at 2 N are about tail^2 over the largest
            missed += half * tail * min(8.0 * tail / np.max(np.abs(density[p])), 1.0)
    error += swing + missed * max(edges[P] - edges[0], 0.0)
    for a in range(len(atom_at)):
        mean += atom_at[a] * atom_mass[a]
    return Distribution(
        edges, hard, density, cumulative, nodes, mass, panel_mass, panel_moment, atom_at, atom_mass, mean,
        spread, error,
    )  # fmt: skip


@compiled
def _antiderivative(density: Floats, half: float, start: float, out: Floats) -> None:
    """Chebyshev coefficients of F: T_k integrates to T_(k+1) / (2 (k+1)) - T_(k-1) / (2 (k-1))."""
    out[:] = 0.0
    out[1] = density[0] - 0.5 * density[2]
    out[2] = 0.25 * density[1]
    for k in range(2, N):
        out[k + 1] += density[k] / (2.0 * (k + 1))
        if k > 2:
            out[k - 1] -= density[k] / (2.0 * (k - 1))
    left = 0.0  # the value at -1, where T_k = (-1)^k
    for k in range(1, N + 1):
        out[k] *= half
        left += out[k] if k % 2 == 0 else -out[k]
    out[0] = start - left


def shifted(x: Distribution, by: float) -> Distribution:
    """X + by."""
    if by == 0.0:
        return x
    return x._replace(
        edges=x.edges + by,
        nodes=x.nodes + by,
        panel_moment=x.panel_moment + by * x.panel_mass,
        atom_at=x.atom_at + by,
        mean=x.mean + by,
        error=x.error + _EPS * (abs(x.mean) + abs(by)),
    )


def reflected(x: Distribution) -> Distribution:
    """-X."""
    values = (x.mass.reshape(-1, N) / (_W * 0.5 * np.diff(x.edges)[:, None])).ravel()[::-1].copy()
    mirrored = fit(
        -x.edges[::-1].copy(), x.hard[::-1].copy(), values, -x.atom_at[::-1].copy(), x.atom_mass[::-1].copy(),
        x.spread, 0.0,
    )  # fmt: skip
    return mirrored._replace(mean=-x.mean, error=x.error)


@compiled
def chebyshev(c: Floats, p: int, top: int, t: float) -> float:
    """sum over k <= top of c[p, k] T_k(t), by Clenshaw's recurrence."""
    t2 = 2.0 * t
    b1 = 0.0
    b2 = 0.0
    for k in range(top, 0, -1):
        b1, b2 = c[p, k] + t2 * b1 - b2, b1
    return c[p, 0] + t * b1 - b2


@compiled
def evaluate(x: Distribution, at: Floats) -> tuple[Floats, Floats]:
    """Distribution function (atoms included) and density at ascending points, each of the shape of `at`."""
    F = np.empty(len(at))
    f = np.empty(len(at))
    P = len(x.edges) - 1
    p = -1
    for j in range(len(at)):
        while p < P and at[j] >= x.edges[p + 1]:
            p += 1
        if p < 0:
            F[j] = 0.0
            f[j] = 0.0
        elif p == P:
            F[j] = 1.0
            f[j] = 0.0
        else:
            t = (at[j] - x.edges[p]) / (x.edges[p + 1] - x.edges[p]) * 2.0 - 1.0
            F[j] = min(max(chebyshev(x.cumulative, p, N, t), 0.0), 1.0)
            f[j] = chebyshev(x.density, p, N - 1, t)
    return F, f


@compiled
def near_nodes(
    x: Distribution, y: float, sd: float, up: float, d: Floats, m: Floats
) -> tuple[int, float, float]:
    """Quadrature of X fine enough for functions of scale `sd` around y.

    Fills d with y - node, m with masses, for nodes between y - REACH sd and y + up sd, atoms among them,
    and returns their number with the mass and the first moment about y of all that lies below. Distances,
    not nodes: they keep their digits where sd is tiny beside y.
    """
    low, high = y - REACH * sd, y + up * sd
    n = 0
    mass = 0.0
    moment = 0.0
    for a in range(len(x.atom_at)):
        if low <= x.atom_at[a] <= high:
            d[n] = y - x.atom_at[a]
            m[n] = x.atom_mass[a]
            n += 1
        elif x.atom_at[a] < low:
            mass += x.atom_mass[a]
            moment += x.atom_mass[a] * (x.atom_at[a] - y)
    for p in range(len(x.edges) - 1):
        left, right = x.edges[p], x.edges[p + 1]
        if left >= high:
            break
        if right <= low:
            mass += x.panel_mass[p]
            moment += x.panel_moment[p] - y * x.panel_mass[p]
        elif right - left <= 3.0 * sd:
            for i in range(p * N, (p + 1) * N):
                d[n] = y - x.nodes[i]
                m[n] = x.mass[i]
                n += 1
        else:
            scale = 2.0 / (right - left)
            if left < low:
                half = 0.5 * (low - left)
                for i in range(N):
                    v = left + half + half * _T[i]
                    part = _W[i] * half * chebyshev(x.density, p, N - 1, (v - left) * scale - 1.0)
                    mass += part
                    moment += part * (v - y)
            start, end = min(y - left, REACH * sd), max(y - right, -up * sd)
            pieces = math.ceil((start - end) / (3.0 * sd))
            half = 0.5 * (start - end) / pieces
            for k in range(pieces):
                mid = start - (2 * k + 1) * half
                for i in range(N):
                    d[n] = mid - half * _T[i]
                    u = min(max((y - d[n] - left) * scale - 1.0, -1.0), 1.0)
                    m[n] = _W[i] * half * chebyshev(x.density, p, N - 1, u)
                    n += 1
    return n, mass, moment


@compiled
def node_room(x: Distribution, up: float) -> int:
    """How many nodes `near_nodes` may write."""
    P = len(x.edges) - 1
    return len(x.atom_at) + N * (2 * P + math.ceil((REACH + up) / 3.0) + 2)
