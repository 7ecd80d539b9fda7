"""Functions on Gauss-Legendre panels: partial integrals, values, and E_Z of the best of several; floor 2."""

from __future__ import annotations

import math

import numpy as np

from distill.numerics import compiled, gauss_legendre
from distill.tree import Floats

__all__ = ["N", "expected_best", "panel_nodes", "partial_weights", "piecewise_values"]

N = 16  # nodes a panel
_T, _W = gauss_legendre(N)
# Values at the nodes -> Legendre coefficients of the polynomial through them.
_COEFFICIENTS = np.polynomial.legendre.legvander(_T, N - 1).T * _W * (np.arange(N) + 0.5)[:, None]
_LEFT = np.polynomial.legendre.legvander((_T - 1) / 2, N - 1) @ _COEFFICIENTS
_RIGHT = np.polynomial.legendre.legvander((_T + 1) / 2, N - 1) @ _COEFFICIENTS
_ENDS = np.polynomial.legendre.legvander(np.array([-1.0, 1.0]), N - 1) @ _COEFFICIENTS
_EQUAL = 1e-15  # of the values: a lead that is rounding
_NARROW = 1e-10  # a panel with a crossing is halved down to this width


def panel_nodes(edges: Floats) -> Floats:
    """Nodes of every panel, shape (panels, N)."""
    half = np.diff(edges)[:, None] / 2
    return np.asarray(edges[:-1, None] + half * (1 + _T))


def partial_weights(edges: Floats, start: Floats) -> Floats:
    """Row x: weights on all panels' nodes of the integral from start_x to the last edge, x >= first edge."""
    panels = len(edges) - 1
    out = np.tile(np.diff(edges)[:, None] / 2 * _W, (len(start), 1, 1)).reshape(len(start), panels, N)
    p = np.clip(np.searchsorted(edges, start, side="right") - 1, 0, panels - 1)
    half = np.diff(edges)[p] / 2
    u = np.clip((start - edges[p]) / half - 1, -1, 1)
    P = np.polynomial.legendre.legvander(u, N)
    above = np.empty((len(start), N))  # integral of P_k from u to 1
    above[:, 0] = 1 - u
    k = np.arange(1, N)
    above[:, 1:] = (P[:, :-2] - P[:, 2:]) / (2 * k + 1)
    out[np.arange(panels) < p[:, None]] = 0.0
    out[np.arange(len(start)), p] = half[:, None] * (above @ _COEFFICIENTS)
    return out.reshape(len(start), panels * N)


def piecewise_values(edges: Floats, values: Floats, at: Floats) -> Floats:
    """Values at points within the edges, (functions, len(at)); `values` at nodes, (functions, panels, N)."""
    return _evaluate(edges, np.ascontiguousarray(values @ _COEFFICIENTS.T), at)


@compiled
def _evaluate(edges: Floats, series: Floats, at: Floats) -> Floats:
    functions, panels = series.shape[0], series.shape[1]
    out = np.empty((functions, len(at)))
    P = np.empty(N)
    for j in range(len(at)):
        p = min(max(np.searchsorted(edges, at[j], side="right") - 1, 0), panels - 1)
        u = 2 * (at[j] - edges[p]) / (edges[p + 1] - edges[p]) - 1
        P[0], P[1] = 1.0, u
        for k in range(1, N - 1):
            P[k + 1] = ((2 * k + 1) * u * P[k] - k * P[k - 1]) / (k + 1)
        for f in range(functions):
            total = 0.0
            for k in range(N):
                total += series[f, p, k] * P[k]
            out[f, j] = total
    return out


def expected_best(edges: Floats, values: Floats, reference: int) -> float:
    """E[max_a v_a(Z) - v_reference(Z)], Z standard normal within the edges; values (actions, panels, N)."""
    total = 0.0
    open_ = [(edges[p], edges[p + 1], values[:, p]) for p in range(len(edges) - 1)]
    while open_:
        a, b, v = open_.pop()
        # The ends too: lines that cross between the last node and the end would cost 1e-7 of the VOC.
        whole = np.concatenate((v, v @ _ENDS.T), axis=1)
        lead = np.max(whole, axis=0) - whole[np.argmax(whole[:, N // 2])]
        if np.max(lead) <= _EQUAL * np.max(np.abs(whole)) or b - a < _NARROW:
            z = a + (b - a) / 2 * (1 + _T)
            gain = np.max(v, axis=0) - v[reference]
            total += float(np.sum(_W * gain * np.exp(-0.5 * z * z))) * (b - a) / 2
        else:
            middle = (a + b) / 2
            open_ += [(a, middle, v @ _LEFT.T), (middle, b, v @ _RIGHT.T)]
    return total / math.sqrt(2 * math.pi)
