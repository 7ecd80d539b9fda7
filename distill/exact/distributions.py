"""Distributions of node values as piecewise polynomials with atoms: built, evaluated, added; floor 2.

A tree of decision and chance nodes over independent normal leaves makes distributions of one class: a few
atoms, and between breakpoints a smooth density. Sure values cut a maximum off below (an atom, and a density
that jumps there); everything else is analytic at the scale of the leaves that shape it. So a distribution
is held on panels, each as wide as the local scale allows, with 16 Gauss-Legendre nodes and the Chebyshev
series of the density through them.

    sum          f_(X+Y)(z) = sum over atoms + integral f_X(x) f_Y(z - x) dx, panel by panel, split where a
                 jump or a finer panel of the other density falls inside
    plus normal  the same with the normal density, panels split to the normal's scale
    maximum      product of distribution functions at common nodes (in `thresholds`)

Densities are never negative, and every sum above has positive terms.

The `error` of a distribution bounds its distance from the true one in the Wasserstein-1 metric (the area
between distribution functions). A maximum and a sum move by no more than their arguments do, so bounds add
on the way up, and an expectation or an expected maximum with anything is off by at most `error`.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import NamedTuple

import numpy as np
from numba import njit

from distill.numerics import gauss_legendre
from distill.tree import Floats

__all__ = [
    "N", "REACH", "WIDTH", "Distribution", "add", "add_normal", "evaluate", "fit", "lay_out", "near_nodes",
    "node_room", "nodes_of", "reflected", "resolved", "shifted",
]  # fmt: skip

N = 16  # nodes a panel
WIDTH = 2.5  # panel width in standard deviations of the narrowest active normal
REACH = 8.6  # standard deviations kept on either side of a normal: 4e-18 lies beyond
_SPLIT = 0.6  # a panel is split where the other density has panels narrower than this share of it
_MAX_HALVINGS = 8
_PANEL_TOLERANCE = 1e-12  # of the span, Wasserstein-1, a panel
_EPS = 2.0**-52

_T, _W = gauss_legendre(N)
# Chebyshev coefficients of the polynomial through values at the nodes, and of its antiderivative.
_COEFFICIENTS = np.linalg.inv(np.polynomial.chebyshev.chebvander(_T, N - 1))


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
    error : Wasserstein-1 bound, same unit as the values.
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


def fit(
    edges: Floats,
    hard: np.ndarray,
    values: Floats,
    atom_at: Floats,
    atom_mass: Floats,
    spread: float,
    error: float,
) -> Distribution:
    """The distribution with density `values` (P, N) at the nodes of `edges`; `error` is inherited.

    Adds to `error` what the interpolation on each panel leaves out (its last coefficients), the total mass
    that is missing or too much, and rounding.
    """
    values = values.reshape(-1, N)
    half = 0.5 * np.diff(edges)
    mid = edges[:-1] + half
    density = values @ _COEFFICIENTS.T
    mass = values * _W * half[:, None]
    panel_mass = mass.sum(axis=1)
    moment = (mass * _T).sum(axis=1) * half + panel_mass * mid
    cumulative = _antiderivative(density, half, panel_mass, edges, atom_at, atom_mass)
    tail = np.abs(density[:, -1]) + np.abs(density[:, -2])
    total = panel_mass.sum() + atom_mass.sum()
    width = float(edges[-1] - edges[0])
    error += float((tail * half * half).sum()) + abs(1.0 - total) * max(width, spread)
    error += 2.0 * _EPS * max(abs(edges[0]), abs(edges[-1]))
    mean = float(moment.sum() + (atom_at * atom_mass).sum() + (1.0 - total) * edges[-1])
    nodes = (mid[:, None] + half[:, None] * _T).ravel()
    return Distribution(
        edges, hard, density, cumulative, nodes, mass.ravel(), panel_mass, moment, atom_at, atom_mass,
        mean, spread, error,
    )  # fmt: skip


def _antiderivative(
    density: Floats, half: Floats, panel_mass: Floats, edges: Floats, atom_at: Floats, atom_mass: Floats
) -> Floats:
    """Chebyshev coefficients of F: T_k integrates to T_(k+1) / (2 (k+1)) - T_(k-1) / (2 (k-1))."""
    out = np.zeros((len(density), N + 1))
    k = np.arange(2, N)
    out[:, 1] = density[:, 0] - 0.5 * density[:, 2]
    out[:, 2] = 0.25 * density[:, 1]
    out[:, k + 1] += density[:, k] / (2.0 * (k + 1))
    out[:, k[1:] - 1] -= density[:, k[1:]] / (2.0 * (k[1:] - 1))
    out *= half[:, None]
    start = np.concatenate(([0.0], np.cumsum(panel_mass)[:-1])) if len(panel_mass) else panel_mass
    atoms = np.concatenate(([0.0], np.cumsum(atom_mass)))[np.searchsorted(atom_at, edges[:-1], side="right")]
    signs = np.where(np.arange(N + 1) % 2 == 0, 1.0, -1.0)
    out[:, 0] = start + atoms - out[:, 1:] @ signs[1:]
    return out


def resolved(
    edges: Floats, hard: np.ndarray, density: Callable[[Floats], Floats]
) -> tuple[Floats, np.ndarray, Floats]:
    """Edges halved until the panels hold every density; `density` maps nodes to (curves, nodes) values.

    Returns edges, hard flags and values (curves, P N).
    """
    values = density(nodes_of(edges))
    for _ in range(_MAX_HALVINGS):
        bad = unresolved_panels(edges, values)
        if not bad.any():
            break
        middle = 0.5 * (edges[:-1] + edges[1:])[bad]
        where = np.flatnonzero(bad) + 1
        edges, hard = np.insert(edges, where, middle), np.insert(hard, where, False)
        values = density(nodes_of(edges))
    return edges, hard, values


@njit(cache=True, error_model="numpy")
def unresolved_panels(edges: Floats, values: Floats) -> np.ndarray:
    """Panels whose last coefficients say that 16 nodes are too few, shape (P,)."""
    P = len(edges) - 1
    out = np.zeros(P, dtype=np.bool_)
    span = edges[P] - edges[0]
    for p in range(P):
        half = 0.5 * (edges[p + 1] - edges[p])
        if half < 1e-14 * span:
            continue
        for c in range(len(values)):
            last = 0.0
            before = 0.0
            largest = 0.0
            for i in range(N):
                v = values[c, p * N + i]
                last += _COEFFICIENTS[N - 1, i] * v
                before += _COEFFICIENTS[N - 2, i] * v
                largest = max(largest, v)
            tail = abs(last) + abs(before)
            if tail * half * half > _PANEL_TOLERANCE * span and tail > 1e-13 * largest:
                out[p] = True
    return out


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
    signs = np.where(np.arange(N) % 2 == 0, 1.0, -1.0)
    density = x.density[::-1] * signs
    edges, atom_at, atom_mass = -x.edges[::-1], -x.atom_at[::-1], x.atom_mass[::-1]
    panel_mass = x.panel_mass[::-1].copy()
    cumulative = _antiderivative(density, 0.5 * np.diff(edges), panel_mass, edges, atom_at, atom_mass)
    return Distribution(
        edges, x.hard[::-1].copy(), np.ascontiguousarray(density), cumulative, -x.nodes[::-1],
        x.mass[::-1].copy(), panel_mass, -x.panel_moment[::-1], atom_at, atom_mass.copy(),
        -x.mean, x.spread, x.error,
    )  # fmt: skip


def add(x: Distribution, y: Distribution) -> Distribution:
    """The distribution of X + Y, X and Y independent."""
    spread = math.hypot(x.spread, y.spread)
    mean = x.mean + y.mean
    reach = REACH * spread
    low = max(x.edges[0] + y.edges[0], mean - reach)
    high = max(min(x.edges[-1] + y.edges[-1], mean + reach), low)
    breaks = (x.edges[x.hard][:, None] + y.edges[y.hard]).ravel()
    edges, hard = lay_out(low, high, breaks, _sum_panels(x.edges, y.edges))
    atom_at = (x.atom_at[:, None] + y.atom_at).ravel()
    atom_mass = (x.atom_mass[:, None] * y.atom_mass).ravel()
    order = np.argsort(atom_at, kind="stable")
    order = order[(atom_at[order] >= low) & (atom_at[order] <= high)]
    atom_at, atom_mass = atom_at[order], atom_mass[order]
    edges, hard, values = resolved(edges, hard, lambda at: _sum_density(x, y, at)[None])
    return fit(edges, hard, values, atom_at, atom_mass, spread, x.error + y.error)


def add_normal(x: Distribution, sd: float) -> Distribution:
    """The distribution of X + sd Z, Z standard normal and independent, sd > 0: no atoms are left."""
    spread = math.hypot(x.spread, sd)
    reach = REACH * spread
    low = max(x.edges[0] - REACH * sd, x.mean - reach)
    high = max(min(x.edges[-1] + REACH * sd, x.mean + reach), low)
    panels = _normal_sum_panels(x.edges, sd)
    edges, hard = lay_out(low, high, np.empty(0), panels)
    edges, hard, values = resolved(edges, hard, lambda at: _normal_sum_density(x, sd, at)[None])
    return fit(edges, hard, values, np.empty(0), np.empty(0), spread, x.error)


# ---------------------------------------------------------------- where panels go


@njit(cache=True, error_model="numpy")
def greedy_edges(low: float, high: float, breaks: Floats, panels: Floats) -> Floats:
    """Panel edges from low to high, as wide as allowed, never across a break.

    breaks : ascending. panels : (Q, 3) rows (from, to, width): a panel that reaches into [from, to] is at
        most `width` wide, or ends at `from`.
    """
    out = [low]
    a = low
    b = 0
    while a < high:
        while b < len(breaks) and breaks[b] <= a:
            b += 1
        stop = breaks[b] if b < len(breaks) and breaks[b] < high else high
        w = stop - a
        for q in range(len(panels)):
            if panels[q, 1] > a and panels[q, 0] < a + w:
                w = min(w, max(panels[q, 2], panels[q, 0] - a))
        # Even panels up to the stop where the rest of the way asks for no more than this width.
        n = math.ceil((stop - a) / w * (1 - 1e-9))
        end = stop if n <= 1 else a + w
        if not end > a:  # the scale is below the spacing of doubles: nothing can be resolved there
            end = min(stop, a + abs(a) * 4.5e-16 + 1e-300)
        out.append(end)
        a = end
    return np.array(out)


def lay_out(low: float, high: float, breaks: Floats, panels: Floats) -> tuple[Floats, np.ndarray]:
    """Edges, and which of them are hard; breaks below `low` are dropped, the lowest edge may be one."""
    breaks = np.unique(breaks[(breaks >= low) & (breaks <= high)])
    edges = greedy_edges(low, high, breaks, panels)
    return edges, np.isin(edges, breaks)


def _sum_panels(x: Floats, y: Floats) -> Floats:
    """Each pair of panels spreads over the sum of both intervals and is as smooth as the wider one."""
    low = (x[:-1, None] + y[:-1]).ravel()
    high = (x[1:, None] + y[1:]).ravel()
    width = np.maximum(np.diff(x)[:, None], np.diff(y)).ravel()
    return np.column_stack((low, high, width))


def _normal_sum_panels(x: Floats, sd: float) -> Floats:
    width = np.maximum(np.diff(x), WIDTH * sd)
    panels = np.column_stack((x[:-1] - REACH * sd, x[1:] + REACH * sd, width))
    rest = np.array(
        [[x[0] - REACH * sd, x[-1] + REACH * sd, max(WIDTH * sd, float(np.max(width, initial=0)))]]
    )
    return np.concatenate((panels, rest))


# ---------------------------------------------------------------- evaluation


@njit(cache=True, error_model="numpy")
def chebyshev(c: Floats, p: int, top: int, t: float) -> float:
    """sum over k <= top of c[p, k] T_k(t), by Clenshaw's recurrence."""
    t2 = 2.0 * t
    b1 = 0.0
    b2 = 0.0
    for k in range(top, 0, -1):
        b1, b2 = c[p, k] + t2 * b1 - b2, b1
    return c[p, 0] + t * b1 - b2


@njit(cache=True, error_model="numpy")
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
            f[j] = max(chebyshev(x.density, p, N - 1, t), 0.0)
    return F, f


@njit(cache=True, error_model="numpy")
def _density_at(x: Distribution, at: float) -> float:
    P = len(x.edges) - 1
    if not (x.edges[0] <= at <= x.edges[P]) or P == 0:
        return 0.0
    p = min(np.searchsorted(x.edges, at, side="right") - 1, P - 1)
    t = (at - x.edges[p]) / (x.edges[p + 1] - x.edges[p]) * 2.0 - 1.0
    return max(chebyshev(x.density, p, N - 1, t), 0.0)


@njit(cache=True, error_model="numpy")
def _sum_density(x: Distribution, y: Distribution, at: Floats) -> Floats:
    """Density of X + Y at ascending points."""
    P, Q = len(x.edges) - 1, len(y.edges) - 1
    out = np.zeros(len(at))
    for j in range(len(at)):
        z = at[j]
        total = 0.0
        for a in range(len(x.atom_at)):
            total += x.atom_mass[a] * _density_at(y, z - x.atom_at[a])
        for a in range(len(y.atom_at)):
            total += y.atom_mass[a] * _density_at(x, z - y.atom_at[a])
        q = Q - 1  # panel of Y that holds z - (left edge of X's panel), from above
        for p in range(P):
            left, right = x.edges[p], x.edges[p + 1]
            if z - left <= y.edges[0]:
                break
            if z - right >= y.edges[Q]:
                continue
            while q > 0 and y.edges[q] >= z - left:
                q -= 1
            # Panels q, q - 1, ..., r of Y meet this one.
            r = q
            split = y.hard[q + 1] and z - left > y.edges[q + 1]
            finest = y.edges[q + 1] - y.edges[q]
            while r > 0 and y.edges[r] > z - right:
                split = split or y.hard[r]
                r -= 1
                finest = min(finest, y.edges[r + 1] - y.edges[r])
            split = split or (y.hard[0] and z - right < y.edges[0])
            if split or finest < _SPLIT * (right - left):
                for s in range(q, r - 1, -1):
                    u = max(left, z - y.edges[s + 1])
                    v = min(right, z - y.edges[s])
                    if v > u:
                        total += _product_integral(x, p, y, s, z, u, v)
            else:
                s = q
                for i in range(p * N, (p + 1) * N):
                    v = z - x.nodes[i]
                    while s > 0 and v < y.edges[s]:
                        s -= 1
                    if y.edges[0] <= v <= y.edges[Q]:
                        t = (v - y.edges[s]) / (y.edges[s + 1] - y.edges[s]) * 2.0 - 1.0
                        total += x.mass[i] * max(chebyshev(y.density, s, N - 1, t), 0.0)
        out[j] = total
    return out


@njit(cache=True, error_model="numpy")
def _product_integral(
    x: Distribution, p: int, y: Distribution, s: int, z: float, u: float, v: float
) -> float:
    """Integral over [u, v] of f_X(t) f_Y(z - t), panel p of X, panel s of Y: exact for polynomials."""
    half = 0.5 * (v - u)
    total = 0.0
    x_scale = 2.0 / (x.edges[p + 1] - x.edges[p])
    y_scale = 2.0 / (y.edges[s + 1] - y.edges[s])
    for i in range(N):
        t = u + half + half * _T[i]
        f = chebyshev(x.density, p, N - 1, (t - x.edges[p]) * x_scale - 1.0)
        g = chebyshev(y.density, s, N - 1, (z - t - y.edges[s]) * y_scale - 1.0)
        total += _W[i] * max(f, 0.0) * max(g, 0.0)
    return half * total


@njit(cache=True, error_model="numpy")
def near_nodes(
    x: Distribution, y: float, sd: float, up: float, t: Floats, m: Floats
) -> tuple[int, float, float]:
    """Quadrature of X fine enough for functions of scale `sd` around y.

    Fills t, m with nodes and masses between y - REACH sd and y + up sd, atoms among them, and returns
    their number with the mass and the first moment about y of all that lies below.
    """
    low, high = y - REACH * sd, y + up * sd
    n = 0
    mass = 0.0
    moment = 0.0
    for a in range(len(x.atom_at)):
        if low <= x.atom_at[a] <= high:
            t[n] = x.atom_at[a]
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
                t[n] = x.nodes[i]
                m[n] = x.mass[i]
                n += 1
        else:
            scale = 2.0 / (right - left)
            if left < low:
                half = 0.5 * (low - left)
                for i in range(N):
                    v = left + half + half * _T[i]
                    d = _W[i] * half * max(chebyshev(x.density, p, N - 1, (v - left) * scale - 1.0), 0.0)
                    mass += d
                    moment += d * (v - y)
            a, end = max(left, low), min(right, high)
            pieces = math.ceil((end - a) / (3.0 * sd))
            half = 0.5 * (end - a) / pieces
            for k in range(pieces):
                mid = a + (2 * k + 1) * half
                for i in range(N):
                    v = mid + half * _T[i]
                    t[n] = v
                    m[n] = _W[i] * half * max(chebyshev(x.density, p, N - 1, (v - left) * scale - 1.0), 0.0)
                    n += 1
    return n, mass, moment


@njit(cache=True, error_model="numpy")
def node_room(x: Distribution, up: float) -> int:
    """How many nodes `near_nodes` may write."""
    P = len(x.edges) - 1
    return len(x.atom_at) + N * (2 * P + math.ceil((REACH + up) / 3.0) + 2)


@njit(cache=True, error_model="numpy")
def _normal_sum_density(x: Distribution, sd: float, at: Floats) -> Floats:
    """Density of X + sd Z at each point."""
    room = node_room(x, REACH)
    t = np.empty(room)
    m = np.empty(room)
    out = np.empty(len(at))
    for j in range(len(at)):
        n, _mass, _moment = near_nodes(x, at[j], sd, REACH, t, m)
        total = 0.0
        for i in range(n):
            z = (at[j] - t[i]) / sd
            total += m[i] * math.exp(-0.5 * z * z)
        out[j] = total * (0.3989422804014327 / sd)
    return out
