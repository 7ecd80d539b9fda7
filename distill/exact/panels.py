"""Where the panels of a piecewise distribution go: laid out, halved where too wide, merged; floor 2."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from distill.exact.distributions import COEFFICIENTS, Distribution, N, chebyshev, evaluate, fit, nodes_of
from distill.numerics import compiled, gauss_legendre, legendre_antiderivative
from distill.tree import Floats

__all__ = ["held", "lay_out", "resolved"]

TOLERANCE = 1e-11  # of the span, Wasserstein-1, a panel
_FINEST = 1e-11  # of the span: narrower features become atoms
_NOTHING = 1e-60  # mass that no label can tell from none
_MAX_HALVINGS = 8
_EPS = 2.0**-52
_T, _W = gauss_legendre(N)
_CUMULATE = legendre_antiderivative(N)


@compiled
def _greedy_edges(low: float, high: float, breaks: Floats, panels: Floats) -> Floats:
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
        end = a + w if w < stop - a else stop
        if not end > a:  # the scale is below the spacing of doubles: nothing can be resolved there
            end = min(stop, a + abs(a) * 4.5e-16 + 1e-300)
        out.append(end)
        a = end
    return np.array(out)


def lay_out(low: float, high: float, breaks: Floats, panels: Floats) -> tuple[Floats, np.ndarray]:
    """Edges, and which of them are hard; breaks below `low` are dropped, the lowest edge may be one."""
    breaks = breaks[(breaks >= low) & (breaks <= high)]
    if not len(breaks):
        edges = _greedy_edges(low, high, breaks, panels)
        return edges, np.zeros(len(edges), dtype=np.bool_)
    breaks = np.unique(breaks)
    edges = _greedy_edges(low, high, breaks, panels)
    return edges, np.isin(edges, breaks)


def resolved(
    edges: Floats, hard: np.ndarray, density: Callable[[Floats], Floats]
) -> tuple[Floats, np.ndarray, Floats]:
    """Edges halved until the panels hold every density; `density` maps nodes to (curves, nodes) values.

    Returns edges, hard flags and values (curves, P N).
    """
    values = density(nodes_of(edges))
    curves = len(values)
    for _ in range(_MAX_HALVINGS):
        bad = _unresolved(edges, values, TOLERANCE)
        if not bad.any():
            break
        where = np.flatnonzero(bad) + 1
        middle = 0.5 * (edges[where - 1] + edges[where])
        edges, hard = np.insert(edges, where, middle), np.insert(hard, where, False)
        fresh = np.repeat(bad, 1 + bad)
        old, values = values.reshape(curves, -1, N), np.empty((curves, len(fresh), N))
        values[:, ~fresh] = old[:, ~bad]
        at = nodes_of(edges).reshape(-1, N)[fresh].ravel()
        values[:, fresh] = density(at).reshape(curves, -1, N)
        values = values.reshape(curves, -1)
    return edges, hard, values


@compiled
def _unresolved(edges: Floats, values: Floats, tolerance: float) -> np.ndarray:
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
                last += COEFFICIENTS[N - 1, i] * v
                before += COEFFICIENTS[N - 2, i] * v
                largest = max(largest, v)
            tail = abs(last) + abs(before)
            if tail * half * half > tolerance * span and tail > 1e-13 * largest:
                out[p] = True
    return out


@compiled
def collapsed(x: Distribution) -> Distribution:
    """X with what is narrower than 1e-11 of its span turned into atoms, `error` grown by how far that moves.

    Features that fine cannot be kept apart from where they sit in double precision.
    """
    P = len(x.edges) - 1
    finest = _FINEST * (x.edges[P] - x.edges[0])
    if P == 0 or np.min(x.edges[1:] - x.edges[:-1]) > finest:
        return x
    edges = [x.edges[0]]
    flags = [x.hard[0]]
    keep = np.zeros(P, dtype=np.bool_)
    atom_at = []
    atom_mass = []
    moved = 0.0
    p = 0
    atom = 0
    while p < P:
        q = p  # panels p, ..., q - 1 lie within one finest width
        while q < P and x.edges[q + 1] - x.edges[p] <= finest:
            q += 1
        mass = 0.0
        moment = 0.0
        while atom < len(x.atom_at) and x.atom_at[atom] <= x.edges[q]:
            if q == p and x.atom_at[atom] > x.edges[p]:
                break
            mass += x.atom_mass[atom]
            moment += x.atom_mass[atom] * (x.atom_at[atom] - x.edges[p])
            atom += 1
        for r in range(p, q):
            mass += x.panel_mass[r]
            moment += x.panel_moment[r] - x.edges[p] * x.panel_mass[r]
        if q > p:
            moved += mass * (x.edges[q] - x.edges[p])
            inside = max(moment / mass, 0.0) if mass > 0.0 else 0.0
            edges[-1] = min(x.edges[p] + inside, x.edges[q])
            flags[-1] = True
        if mass > 0.0:
            atom_at.append(edges[-1])
            atom_mass.append(mass)
        if q == P:
            break
        keep[q] = True
        edges.append(x.edges[q + 1])
        flags.append(x.hard[q + 1])
        p = q + 1
    while atom < len(x.atom_at):
        atom_at.append(x.atom_at[atom])
        atom_mass.append(x.atom_mass[atom])
        atom += 1
    new_edges = np.array(edges)
    values = np.empty(keep.sum() * N)
    n = 0
    for p in range(P):
        if keep[p]:  # its mass stays, though an edge may have moved
            half = 0.5 * (new_edges[n // N + 1] - new_edges[n // N])
            moved += finest * x.panel_mass[p] * (1.0 if 2.0 * half < 100.0 * finest else 0.01)
            for i in range(N):
                values[n] = x.mass[p * N + i] / (_W[i] * half)
                n += 1
    out = fit(new_edges, np.array(flags), values, np.array(atom_at), np.array(atom_mass), x.spread, 0.0)
    return Distribution(
        out.edges, out.hard, out.density, out.cumulative, out.nodes, out.mass, out.panel_mass,
        out.panel_moment, out.atom_at, out.atom_mass, x.mean, x.spread, max(x.error, out.error) + moved,
    )  # fmt: skip


@compiled
def trimmed(x: Distribution) -> Distribution:
    """X without the panels at either end that carry nothing."""
    P = len(x.edges) - 1
    first, last = 0, P
    while first < last and abs(x.panel_mass[first]) <= _NOTHING:
        if len(x.atom_at) and x.atom_at[0] <= x.edges[first]:
            break
        first += 1
    while last > first and abs(x.panel_mass[last - 1]) <= _NOTHING:
        if len(x.atom_at) and x.atom_at[-1] >= x.edges[last]:
            break
        last -= 1
    if first == 0 and last == P:
        return x
    return Distribution(
        x.edges[first : last + 1], x.hard[first : last + 1], x.density[first:last], x.cumulative[first:last],
        x.nodes[first * N : last * N], x.mass[first * N : last * N], x.panel_mass[first:last],
        x.panel_moment[first:last], x.atom_at, x.atom_mass, x.mean, x.spread, x.error,
    )  # fmt: skip


def held(
    edges: Floats,
    hard: np.ndarray,
    values: Floats,
    atom_at: Floats,
    atom_mass: Floats,
    spread: float,
    error: float,
) -> Distribution:
    """`fit`, then the same distribution on as few panels as hold it; `error` grows by what that leaves out.

    Ends that carry nothing are dropped, features too fine for double precision become atoms.
    """
    return _held(edges, hard, values, atom_at, atom_mass, spread, error, TOLERANCE)


@compiled
def _held(
    edges: Floats,
    hard: np.ndarray,
    values: Floats,
    atom_at: Floats,
    atom_mass: Floats,
    spread: float,
    error: float,
    tolerance: float,
) -> Distribution:
    return _merged(collapsed(trimmed(fit(edges, hard, values, atom_at, atom_mass, spread, error))), tolerance)


@compiled
def _merged(x: Distribution, tolerance: float) -> Distribution:
    """From the left, each panel is the widest tried whose last coefficients are negligible and whose nodes
    find the mass that the finer panels have there, so that no narrow peak slips between nodes.
    """
    P = len(x.edges) - 1
    span = x.edges[P] - x.edges[0]
    values = np.empty(N)
    edges = [x.edges[0]]
    flags = [x.hard[0]]
    p = 0
    while p < P:
        a = edges[-1]
        stop = P
        for q in range(p + 1, P):
            if x.hard[q]:
                stop = q
                break
        w = min(4.0 * (x.edges[p + 1] - a), x.edges[stop] - a)
        while True:
            end = a + w
            if w <= (x.edges[p + 1] - a) * (1 + 1e-9):
                end = x.edges[p + 1]
                break
            if x.edges[stop] - end < 0.1 * w:
                end = x.edges[stop]
            if _one_panel_holds(x, p, a, end, values, tolerance * span):
                break
            w *= 0.8
        while p < P and x.edges[p + 1] <= end:
            p += 1
        edges.append(end)
        flags.append(x.hard[p] if end == x.edges[p] else False)
    if len(edges) > 0.85 * (P + 1):
        return x
    new_edges = np.array(edges)
    out = np.empty((len(edges) - 1) * N)
    q = 0
    for r in range(len(edges) - 1):
        half = 0.5 * (new_edges[r + 1] - new_edges[r])
        for i in range(N):
            at = new_edges[r] + half * (1.0 + _T[i])
            while q < P - 1 and x.edges[q + 1] <= at:
                q += 1
            out[r * N + i] = _on_panel(x, q, at)
    new = fit(new_edges, np.array(flags), out, x.atom_at, x.atom_mass, x.spread, x.error)
    return Distribution(
        new.edges, new.hard, new.density, new.cumulative, new.nodes, new.mass, new.panel_mass,
        new.panel_moment, new.atom_at, new.atom_mass, new.mean, new.spread, x.error + 2.0 * _distance(x, new),
    )  # fmt: skip


@compiled
def _distance(x: Distribution, y: Distribution) -> float:
    """Largest | integral of F_X - F_Y over any interval |, both on the same range; Y's panels the wider."""
    F, _f = evaluate(x, y.nodes)
    G, _g = evaluate(y, y.nodes)
    area = 0.0
    low = 0.0
    high = 0.0
    for p in range(len(y.edges) - 1):
        half = 0.5 * (y.edges[p + 1] - y.edges[p])
        whole = 0.0
        for i in range(N):
            inside = 0.0
            for j in range(N):
                inside += _CUMULATE[i, j] * (F[p * N + j] - G[p * N + j])
            low = min(low, area + half * inside)
            high = max(high, area + half * inside)
            whole += _W[i] * (F[p * N + i] - G[p * N + i])
        area += half * whole
        low = min(low, area)
        high = max(high, area)
    return high - low


@compiled
def _on_panel(x: Distribution, p: int, at: float) -> float:
    """Density at a point of panel p."""
    t = (at - x.edges[p]) / (x.edges[p + 1] - x.edges[p]) * 2.0 - 1.0
    return float(chebyshev(x.density, p, N - 1, t))


@compiled
def _one_panel_holds(x: Distribution, p: int, a: float, b: float, values: Floats, tolerance: float) -> bool:
    """Whether one panel from a (in panel p of X) to b carries the density."""
    half = 0.5 * (b - a)
    mass = 0.0
    q = p
    P = len(x.edges) - 1
    for i in range(N):
        at = a + half * (1.0 + _T[i])
        while q < P - 1 and x.edges[q + 1] <= at:
            q += 1
        values[i] = _on_panel(x, q, at)
        mass += _W[i] * half * values[i]
    last = 0.0
    before = 0.0
    for i in range(N):
        last += COEFFICIENTS[N - 1, i] * values[i]
        before += COEFFICIENTS[N - 2, i] * values[i]
    if (abs(last) + abs(before)) * half * half > tolerance:
        return False
    while q < P - 1 and x.edges[q + 1] < b:
        q += 1
    exact = chebyshev(x.cumulative, q, N, (b - x.edges[q]) / (x.edges[q + 1] - x.edges[q]) * 2.0 - 1.0)
    exact -= chebyshev(x.cumulative, p, N, (a - x.edges[p]) / (x.edges[p + 1] - x.edges[p]) * 2.0 - 1.0)
    # Cumulative values carry the atoms of their panel's left edge; hard edges are never crossed.
    return abs(mass - exact) * (x.edges[P] - x.edges[0]) <= tolerance + 8.0 * _EPS * (x.edges[P] - x.edges[0])
