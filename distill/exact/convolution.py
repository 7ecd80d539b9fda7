"""Sums of two distributions panel by panel: right whatever atoms, jumps and scales meet; floor 2.

    f_(X+Y)(z) = sum over atoms + integral of f_X(x) f_Y(z - x) dx

X's own quadrature serves where Y is smooth across its panels; where a jump or a much finer panel of Y falls
into one, the panel is split at Y's edges, and polynomial times polynomial is integrated exactly.
"""

from __future__ import annotations

import math

import numpy as np

from distill.exact.distributions import (
    REACH,
    WIDTH,
    Distribution,
    N,
    chebyshev,
    near_nodes,
    node_room,
    shifted,
)
from distill.exact.panels import held, lay_out, resolved
from distill.numerics import compiled, gauss_legendre
from distill.tree import Floats

__all__ = ["convolved", "convolved_with_normal"]

_SPLIT = 0.6  # a panel is split where the other density has panels narrower than this share of it
_T, _W = gauss_legendre(N)


def convolved(x: Distribution, y: Distribution) -> Distribution:
    """The distribution of X + Y, X and Y independent."""
    center = x.mean + y.mean
    x, y = shifted(x, -x.mean), shifted(y, -y.mean)  # fine features of either are kept apart near 0 only
    spread = math.hypot(x.spread, y.spread)
    reach = REACH * spread
    low = max(x.edges[0] + y.edges[0], -reach)
    high = max(min(x.edges[-1] + y.edges[-1], reach), low)
    breaks = (x.edges[x.hard][:, None] + y.edges[y.hard]).ravel()
    edges, hard = lay_out(low, high, breaks, _sum_panels(x, y))
    atom_at = (x.atom_at[:, None] + y.atom_at).ravel()
    atom_mass = (x.atom_mass[:, None] * y.atom_mass).ravel()
    order = np.argsort(atom_at, kind="stable")
    order = order[(atom_at[order] >= low) & (atom_at[order] <= high)]
    atom_at, atom_mass = atom_at[order], atom_mass[order]
    edges, hard, values = resolved(edges, hard, lambda at: _sum_density(x, y, at)[None])
    out = held(edges, hard, values[0], atom_at, atom_mass, spread, x.error + y.error)
    return shifted(out, center)


def convolved_with_normal(x: Distribution, sd: float) -> Distribution:
    """The distribution of X + sd Z, Z standard normal and independent, sd > 0: no atoms are left."""
    spread = math.hypot(x.spread, sd)
    reach = REACH * spread
    low = max(x.edges[0] - REACH * sd, x.mean - reach)
    high = max(min(x.edges[-1] + REACH * sd, x.mean + reach), low)
    panels = _normal_sum_panels(x, sd)
    edges, hard = lay_out(low, high, np.empty(0), panels)
    edges, hard, values = resolved(edges, hard, lambda at: _normal_sum_density(x, sd, at)[None])
    return held(edges, hard, values[0], np.empty(0), np.empty(0), spread, x.error)


def _sum_panels(x: Distribution, y: Distribution) -> Floats:
    """Each pair of panels spreads over the sum of both intervals, as smooth as both together.

    A hard edge counts as a panel of width 0: the other density shows there at its own scale.
    """
    a = _with_hard_edges(x)
    b = _with_hard_edges(y)
    low = (a[:, None, 0] + b[:, 0]).ravel()
    high = (a[:, None, 1] + b[:, 1]).ravel()
    width = np.hypot((a[:, 1] - a[:, 0])[:, None], b[:, 1] - b[:, 0]).ravel()
    return np.column_stack((low, high, width))[width > 0]


def _with_hard_edges(x: Distribution) -> Floats:
    hard = x.edges[x.hard]
    return np.column_stack((np.append(x.edges[:-1], hard), np.append(x.edges[1:], hard)))


def _normal_sum_panels(x: Distribution, sd: float) -> Floats:
    a = _with_hard_edges(x)
    width = np.hypot(a[:, 1] - a[:, 0], WIDTH * sd)
    return np.column_stack((a[:, 0] - REACH * sd, a[:, 1] + REACH * sd, width))


@compiled
def _density_at(x: Distribution, at: float) -> float:
    P = len(x.edges) - 1
    if not (x.edges[0] <= at <= x.edges[P]) or P == 0:
        return 0.0
    p = min(int(np.searchsorted(x.edges, at, side="right")) - 1, P - 1)
    t = (at - x.edges[p]) / (x.edges[p + 1] - x.edges[p]) * 2.0 - 1.0
    return float(chebyshev(x.density, p, N - 1, t))


@compiled
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
                        total += x.mass[i] * chebyshev(y.density, s, N - 1, t)
        out[j] = total
    return out


@compiled
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
        total += _W[i] * f * g
    return half * total


@compiled
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
            z = t[i] / sd
            total += m[i] * math.exp(-0.5 * z * z)
        out[j] = total * (0.3989422804014327 / sd)
    return out
