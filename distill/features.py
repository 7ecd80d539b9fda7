"""The features as one ONNX graph over the Gaussian leaf table; floor 4.

The trainer runs this graph to make its matrix and a scorer file contains the same nodes, so there is no
second implementation to drift apart. One call covers one tree, so the number of its nodes decides its time.

*Table.* Leaf i counts m_i + s_i Z at the root, m = gain mean + offset, s = |gain| sd. On the midpoints of
equal cells between the action's largest m - 7 s and its largest m + 3.5 s (equal cells converge fastest for
functions that level off on both sides: Goodwin 1949; Trefethen and Weideman 2014),

    F = product over the action's leaves of Phi((x - m_j) / s_j),    R_i = F / Phi((x - m_i) / s_i)

give the action's expected maximum V, and mean mu_i and variance r_i^2 of the maximum of leaf i's siblings.

*Threshold.* With the siblings' maximum taken as normal, the action is worth, if leaf i's mean moves by t,

    G(t) = mu + theta f((m + t - mu) / theta),   f(p) = p Phi(p) + phi(p),   theta^2 = s^2 + r^2

(Clark 1961 for two normals). It meets the rival's value C, the best other action's, at

    t0 = C - m - theta q(y),   y = (C - mu) / theta,   q(y) = y - f^{-1}(y)

Nothing changes the choice where y <= 0: the siblings alone beat the rival.

*Start value.* k rollouts move the mean by s_k Z, s_k^2 = v^2 / (v + n / k). The start of the learner is

    s_k f(-|t0| / s_k) g(y) / k,   g(y) = 1 - exp(-1.97 y), for the slope of G at t0

at k = t0^2 n / v^2, from 1 to the rollouts left: short of the largest over k by 18 % at most, so right in its
exponent however small it is; the learner sees what is left, a factor near 1.
Where a batch is asked for, one for all calls or each call's own, it stands for k, and its whole value is
meant. Both see the same columns: a batch decides nothing but s_k.

*Lean.* The same columns from a table of 8 cells in place of 12, and a start of the exponent alone, s_k
exp(-z^2 / 2) / k: seven nodes less, and a learner that has more to learn.

*Static values.* For h = 0, means are what they will be: the rival of a leaf is the best other leaf, and the
start is exact but for the fit of f. Finite horizons have a module of their own.

onnxruntime takes about 0.3 microseconds a node whatever 64 leaves hold, so every node was weighed.
Differences are taken in double precision; only unit-free numbers are rounded to float32.
"""

from __future__ import annotations

import math
from typing import Final

import onnx

from distill import features_any_horizon
from distill.errors import InputError
from distill.feature_nodes import LARGE, TINY, Start, best_other, moments, normal_table, threshold_shift
from distill.onnx_nodes import Nodes
from distill.scorer_inputs import ANY_BATCH, LEAF_TABLE, VARIES, InputKind

__all__ = ["FEATURE_NAMES", "build_graph"]

FEATURE_NAMES: Final = (
    "threshold",  # t0 / s_k, cut at +-40: how far the leaf must rise to change the choice, or fall
    "sibling_help",  # -q(y) up to a constant factor: what the siblings take off the threshold, in theta
    "step",  # s_k / theta
)
_STATIC_NAMES: Final = ("threshold", "step")
_CELLS, _LEAN_CELLS = 12, 8


def build_graph(
    *,
    points: int | None = None,
    horizon: float = math.inf,
    batch: int | str | None = None,
    lean: bool = False,
) -> onnx.ModelProto:
    """The feature graph of the Gaussian leaf table, one tree a call.

    Inputs, shape (n,) unless said: mean, var, noise_var, gain, offset, cost (double), action (int64,
    0 to n - 1), remaining (double, scalar). Outputs as in FeatureMatrix, named features, unit,
    first_order, batch. points : cells of the table, None for the usual number. horizon, batch : of the value
    that is learned; None is the rate, VARIES the batch that the input `batch_size` (double, scalar) brings
    with each call. Static features have no table: see `_static`; those of finite horizons are made by
    `features_any_horizon`. lean : fewer nodes; InputError for any but an infinite horizon.
    """
    if lean and horizon < math.inf:
        raise InputError("lean", "must be of an infinite horizon", horizon)
    points = points or (_LEAN_CELLS if lean else _CELLS)
    if 0 < horizon < math.inf:
        return features_any_horizon.build_graph(points=points, batch=batch, horizon=horizon)
    g = Nodes("f")
    # Leaves as the root sees them. From the table on, values are rows, shape (1, n).
    m = g("Add", g("Mul", "gain", "mean"), "offset")
    v = g("Max", g("Mul", "var", g("Mul", "gain", "gain")), g.double(TINY))  # keeps infinity, which Clip cuts
    s = g("Sqrt", v)
    noise = g("Div", "noise_var", "var", out="noise_ratio")
    action = g("GreaterOrEqual", "action", g.whole(0))
    g("And", action, g("Greater", "noise_ratio", g.double(0.0)), out="valid")
    if horizon == 0:
        return _static(g, m, s, noise, batch)
    (low, high), joint, rest = normal_table(g, m, s, points)
    value, others, spread2 = moments(g, low, high, joint, rest, points)

    # Threshold t0.
    rival = best_other(g, value)
    theta = g("Sqrt", g("Add", spread2, v))
    y = g("Div", g("Sub", rival, others), theta)
    shift, slope, help_ = threshold_shift(g, y, theta)
    t0 = g("Add", g("Sub", rival, m), shift, out="t0")
    start = Start(g, t0, s, noise, batch, rough=True)
    columns = (start.z, help_, g("Div", start.s_k, theta))
    value = start.fall() if lean else start.value(slope)
    return start.model(value, columns, FEATURE_NAMES, _kind(batch))


def _kind(batch: int | str | None) -> InputKind:
    return ANY_BATCH if batch == VARIES else LEAF_TABLE


def _static(g: Nodes, m: str, s: str, noise: str, batch: int | str | None) -> onnx.ModelProto:
    """For h = 0: the rival of a leaf is the best other leaf, and theta is s."""
    best = g("ReduceMax", m, keepdims=1)
    column = g("Unsqueeze", m, g.whole(1))
    first = g("Unsqueeze", g("ArgMax", m, axis=0, keepdims=1), g.whole(1))
    masked = g("ScatterND", column, first, g.double([[-LARGE]]), reduction="add")
    second = g("ReduceMax", masked)
    is_best = g("LessOrEqual", masked, g.double(-LARGE / 2))
    rival = g("Reshape", g("Where", is_best, second, best), g.whole(-1))
    row = g("Unsqueeze", g("Sub", rival, m), g.whole(0))
    start = Start(g, row, s, noise, batch)
    return start.model(start.value(None), (start.z, g("Div", start.s_k, s)), _STATIC_NAMES, _kind(batch))
