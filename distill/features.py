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

    max over k of  s_k f(-|t0| / s_k) g(y) / k,   g(y) = 1 - exp(-1.97 y), for the slope of G at t0

which is right in its exponent however small it is; the learner sees what is left, a factor near 1.
Where a fixed batch is asked for, it stands for k, and its whole value is meant.

*Other horizons.* For h = 0, means are what they will be: the rival of a leaf is the best other leaf, and
the start is exact but for the fit of f. For finite h the table holds M_h, of variance v^2 / (v + n / h).
An action that is best also gains by being known better after k + h rollouts than after h,

    theta_k f(p) - theta_0 f(p) ~ phi((m - mu) / theta_k) (theta_k - theta_0) / k

which is added to the start; where siblings alone beat the rival, the threshold is theirs, mu - m.

onnxruntime takes about 0.3 microseconds a node whatever 64 leaves hold, so every node was weighed.
Differences are taken in double precision; only unit-free numbers are rounded to float32.
"""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from itertools import pairwise
from typing import Any, Final, NamedTuple

import numpy as np
import onnx
import onnxruntime as ort
from numpy.typing import NDArray
from onnx import TensorProto, helper

from distill.closed_form import PEAK
from distill.errors import InputError
from distill.onnx_nodes import IR_VERSION, OPSET, Nodes, typed
from distill.tree import Floats

__all__ = ["FEATURE_NAMES", "INPUTS", "FeatureGraph", "FeatureMatrix", "build_graph"]

INPUTS: Final = ("mean", "var", "noise_var", "gain", "offset", "action", "cost", "remaining")

FEATURE_NAMES: Final = (
    "threshold",  # t0 / s_k, cut at +-40: how far the leaf must rise to change the choice, or fall
    "sibling_help",  # -q(y) up to a constant factor: what the siblings take off the threshold, in theta
    "step",  # s_k / theta
)
_STATIC_NAMES: Final = ("threshold", "step")
_FINITE_NAMES: Final = (
    *FEATURE_NAMES,
    "above_siblings",  # (m - mu) / theta_k, cut at +-40
    "lead",  # of the action over its best rival, in theta, cut at +-40
)

_BELOW, _ABOVE = 7.0, 3.5  # the table spans the largest m - 7 s to the largest m + 3.5 s
_PHI_SLOPE: Final = 0.49999994  # Phi in [6e-8, 1 - 6e-8]: F / Phi stays finite in float32
_FAR: Final = 1e9  # standard deviations; Phi is 1 there
_LARGE: Final = 1e300
_TINY: Final = 1e-300
_THRESHOLD_LIMIT: Final = 40.0  # exp(-z^2 / 2) is 0 in double precision
_PEAK_FLOOR: Final = 1e-30  # keeps 0 x infinity away where a leaf has no variance
_SLOPE_FLOOR: Final = 1e-300  # where the siblings alone beat the rival: below the least value of any tree
_SPREAD_FLOOR: Final = 1e-6  # of the table's width squared: above the rounding of float32 sums

# q(y) = y - f^{-1}(y) as a v / sqrt(v + c), v = -log(1 - exp(-b y)); fitted by least squares to the exact
# inverse, absolute error at most 0.006 for f^{-1}(y) from -8 up. (a, b, c).
_Q_FIT: Final = (np.sqrt(1.94647), 1.96789, 4.0114)
# f(-z) exp(z^2 / 2) as 1 / (a + z (b + c z)); within 5 % for every z from 0 to 30, exact at 0.
_LOSS_FIT: Final = tuple(np.sqrt(2 * np.pi) * np.array([1.0, 0.93642524, 0.92409791]))


class FeatureMatrix(NamedTuple):
    """What the graph says of each row.

    x : (n, d) float32, unit-free, columns as `FeatureGraph.names`. unit : (n,), u a rollout, the leaf's
    own s_k / k at the start value's best batch k, a real number; s_k for a fixed batch. first_order :
    (n,), same unit, the start value. batch : (n,), k rounded.
    """

    x: NDArray[np.float32]
    unit: Floats
    first_order: Floats
    batch: NDArray[np.int64]


def build_graph(*, points: int = 16, horizon: float = math.inf, batch: int | None = None) -> onnx.ModelProto:
    """The feature graph of the Gaussian leaf table, one tree a call.

    Inputs, shape (n,) unless said: mean, var, noise_var, gain, offset, cost (double), action (int64,
    0 to n - 1), remaining (double, scalar). Outputs as in FeatureMatrix, named features, unit,
    first_order, batch. points : cells of the table. horizon, batch : of the value that is learned; None
    is the rate. `static` features have no table: see `_static`.
    """
    g = Nodes("f")
    # Leaves as the root sees them. From the table on, values are rows, shape (1, n).
    m = g("Add", g("Mul", "gain", "mean"), "offset")
    v = g("Max", g("Mul", "var", g("Mul", "gain", "gain")), g.double(_TINY))
    s = g("Sqrt", v)
    noise = g("Div", "noise_var", "var", out="noise_ratio")
    if horizon == 0:
        return _static(g, m, s, noise, batch)
    known = v if math.isinf(horizon) else _learned(g, v, noise, horizon)
    value, others, spread2 = _moments(g, *_table(g, m, s if known == v else g("Sqrt", known), points), points)

    # The best other action.
    best = g("Equal", "action", g("Gather", "action", g("ArgMax", value, axis=1, keepdims=0)))
    second = g("ReduceMax", g("Where", best, g.double(-_LARGE), value))
    rival = g("Where", best, second, g("ReduceMax", value))

    # Threshold t0.
    theta = g("Sqrt", g("Add", spread2, known))
    a, b, c = _Q_FIT
    y = g("Div", g("Sub", rival, others), theta)
    slope = g("Sub", g.double(1.0), g("Exp", g("Mul", y, g.double(-b))))
    slope = g("Max", slope, g.double(_SLOPE_FLOOR))
    log_slope = g("Log", slope)
    help_ = g("Div", log_slope, g("Sqrt", g("Sub", g.double(c), log_slope)))
    t0 = g("Mul", g("Mul", help_, theta), g.double(a))
    t0 = g("Add", g("Sub", rival, m), t0, out="t0")

    if math.isinf(horizon):
        start = _Start(g, t0, s, noise, batch)
        value = start.value(slope)
        return start.model(value, (start.z, help_, g("Div", start.s_k, theta)), FEATURE_NAMES)

    alone = g("LessOrEqual", y, g.double(0.0))
    above = g("Sub", m, others)
    start = _Start(g, g("Where", alone, g("Sub", g.double(0.0), above), t0), s, noise, batch)
    later = _learned(g, v, noise, horizon, start.k)
    theta_k = g("Sqrt", g("Add", spread2, later))
    above = start.cut(g("Div", above, theta_k))
    own = g("Exp", g("Mul", g("Mul", above, above), g.double(-0.5)))
    own = g("Mul", g("Mul", own, g("Sub", theta_k, theta)), g.double(1 / math.sqrt(2 * math.pi)))
    lead = start.cut(g("Div", g("Sub", value, rival), theta))
    own = g("Where", g("GreaterOrEqual", lead, g.double(0.0)), own, g.double(0.0))
    if batch is None:
        own = g("Div", own, g("Max", start.k, g.double(1.0)))
    total = g("Add", start.value(slope), g("Max", own, g.double(0.0)))
    return start.model(total, (start.z, help_, g("Div", start.s_k, theta), above, lead), _FINITE_NAMES)


def _static(g: Nodes, m: str, s: str, noise: str, batch: int | None) -> onnx.ModelProto:
    """For h = 0: the rival of a leaf is the best other leaf, and theta is s."""
    best = g("ReduceMax", m, keepdims=1)
    column = g("Unsqueeze", m, g.whole(1))
    first = g("Unsqueeze", g("ArgMax", m, axis=0, keepdims=1), g.whole(1))
    masked = g("ScatterND", column, first, g.double([[-_LARGE]]), reduction="add")
    second = g("ReduceMax", masked)
    is_best = g("LessOrEqual", masked, g.double(-_LARGE / 2))
    rival = g("Reshape", g("Where", is_best, second, best), g.whole(-1))
    row = g("Unsqueeze", g("Sub", rival, m), g.whole(0))
    start = _Start(g, row, s, noise, batch)
    return start.model(start.value(None), (start.z, g("Div", start.s_k, s)), _STATIC_NAMES)


def _learned(g: Nodes, v: str, noise: str, horizon: float, k: str | None = None) -> str:
    """Variance of M_h, or of M_(k + h): v^2 / (v + n / h); shape of v, or of k."""
    h = g.double(horizon) if k is None else g("Add", k, g.double(horizon))
    return g("Mul", v, g("Div", h, g("Add", noise, h)))


class _Start:
    """The start value for a threshold t0, shape (1, n), at the best batch or a given one."""

    def __init__(self, g: Nodes, t0: str, s: str, noise: str, batch: int | None) -> None:
        self.g = g
        self.rate = batch is None
        if batch is None:
            self.k, self.s_k = _best_batch(g, t0, s, noise)
        else:
            # "t0" gives the constant its shape.
            self.k = g("Add", g("Mul", t0, g.double(0.0)), g.double(float(batch)))
            self.s_k = g("Mul", s, g("Sqrt", g("Div", self.k, g("Add", self.k, noise))))
        self.z = self.cut(g("Div", t0, g("Max", self.s_k, g.double(_TINY))))
        self.unit = g("Div", self.s_k, g("Max", self.k, g.double(1.0))) if self.rate else self.s_k

    def cut(self, z: str) -> str:
        """z within +-40."""
        return self.g("Clip", z, self.g.scalar(-_THRESHOLD_LIMIT), self.g.scalar(_THRESHOLD_LIMIT))

    def value(self, slope: str | None) -> str:
        """unit f(-|z|) slope."""
        g = self.g
        at_zero, linear, square = (g.double(x) for x in _LOSS_FIT)
        size = g("Abs", self.z)
        bottom = g("Add", g("Mul", g("Add", g("Mul", size, square), linear), size), at_zero)
        tail = g("Div", g("Exp", g("Mul", g("Mul", self.z, self.z), g.double(-0.5))), bottom)
        return g("Mul", self.unit if slope is None else g("Mul", self.unit, slope), tail)

    def model(self, value: str, columns: tuple[str, ...], names: tuple[str, ...]) -> onnx.ModelProto:
        """The graph with its outputs."""
        g, flat = self.g, self.g.whole(-1)
        g("Reshape", self.unit, flat, out="unit")
        g("Reshape", value, flat, out="first_order")
        whole = g("Cast", g("Add", self.k, g.double(0.5)), to=TensorProto.INT64)
        g("Reshape", whole, flat, out="batch")
        stacked = g("Cast", g("Concat", *columns, axis=0), to=TensorProto.FLOAT)
        g("Transpose", stacked, perm=[1, 0], out="features")
        return _model(g, names)


def _table(g: Nodes, m: str, s: str, points: int) -> tuple[str, str, str, str]:
    """Ends of each leaf's action table, shape (1, n), and F and R at its points, shape (n, points)."""
    row = g("Unsqueeze", "action", g.whole(1))
    ends = g("Add", g("Mul", s, g.double([[-_BELOW], [_ABOVE]])), m)
    ends = g("Transpose", ends, perm=[1, 0])
    ends = g("ScatterND", g("Min", ends, g.double(-_LARGE)), row, ends, reduction="max")
    ends = g("Transpose", g("Gather", ends, "action"), perm=[1, 0])
    low, high = g.split(ends, 2, axis=0)
    z = g("Min", g("Div", g("Sub", ends, m), s), g.double(_FAR))
    z = g("Cast", z, to=TensorProto.FLOAT)
    t = _midpoints(points)
    z = g("Gemm", z, g.single(np.stack([1 - t, t]) / np.sqrt(2)), transA=1)
    phi = g("Add", g("Mul", g("Erf", z), g.single(_PHI_SLOPE)), g.single(0.5))
    joint = g("ScatterND", g("Max", phi, g.single(1.0)), row, phi, reduction="mul")
    joint = g("Gather", joint, "action")
    return low, high, joint, g("Div", joint, phi)


def _moments(g: Nodes, low: str, high: str, joint: str, rest: str, points: int) -> tuple[str, str, str]:
    """V, and mean and variance of the siblings' maximum; shape (1, n).

    V = high - integral of F. The siblings' maximum X: E[X - low] = integral of 1 - R,
    E[(X - low)^2] = integral of 2 (x - low) (1 - R).
    """
    t, w = _midpoints(points), np.full(points, 1 / points)
    weights = np.zeros((3, 2 * points))
    weights[0, :points] = w
    weights[1, points:] = -w
    weights[2, points:] = -2 * w * t
    # Midpoints overstate the last integral by h^2 / 12, from its slope at the lower end.
    constant = np.array([[0.0], [w.sum()], [2 * w @ t - 1 / (12 * points**2) + _SPREAD_FLOOR]])
    both = g("Concat", joint, rest, axis=1)
    sums = g("Gemm", g.single(weights), both, g.single(constant), transB=1)
    width = g("Sub", high, low)
    sums = g("Mul", g("Cast", sums, to=TensorProto.DOUBLE), width)
    below, first, second = g.split(sums, 3, axis=0)
    value = g("Sub", high, below, out="value")
    others = g("Add", low, first, out="others")
    spread2 = g("Sub", g("Mul", width, second), g("Mul", first, first), out="spread2")
    return value, others, spread2


def _best_batch(g: Nodes, t0: str, s: str, noise: str) -> tuple[str, str]:
    """The best real batch k for a threshold t0, and s_k; shape (1, n).

    s_k f(-|t0| / s_k) / k has a single peak, so the best k within 1 and the rollouts left is the peak cut
    to them. A leaf without variance has noise ratio infinity, hence s_k = 0 exactly.
    """
    u = g("Div", t0, s)
    u2 = g("Mul", u, u)
    shape = g("Add", g("Div", g.double(PEAK[1]), g("Add", u2, g.double(PEAK[2]))), g.double(PEAK[0]))
    peak = g("Max", g("Mul", u2, shape), g.double(_PEAK_FLOOR))
    k = g("Clip", g("Mul", peak, noise), g.scalar(1.0), "remaining")
    resolved = g("Div", k, g("Add", k, noise))
    return k, g("Mul", s, g("Sqrt", resolved))


def _midpoints(points: int) -> Floats:
    """Midpoints of equal cells of [0, 1]."""
    return (np.arange(points) + 0.5) / points


def _model(g: Nodes, names: tuple[str, ...]) -> onnx.ModelProto:
    inputs = [typed(name, TensorProto.DOUBLE, ["n"]) for name in INPUTS]
    inputs[INPUTS.index("action")] = typed("action", TensorProto.INT64, ["n"])
    inputs[INPUTS.index("remaining")] = typed("remaining", TensorProto.DOUBLE, [])
    outputs = [
        typed("features", TensorProto.FLOAT, ["n", len(names)]),
        typed("unit", TensorProto.DOUBLE, ["n"]),
        typed("first_order", TensorProto.DOUBLE, ["n"]),
        typed("batch", TensorProto.INT64, ["n"]),
    ]
    graph = helper.make_graph(g.nodes, "features", inputs, outputs, g.initializers)
    model = helper.make_model(graph, opset_imports=[helper.make_opsetid("", OPSET)], ir_version=IR_VERSION)
    model.producer_name = "voc-distill"
    helper.set_model_props(model, {"features": json.dumps(names)})
    return model


class FeatureGraph:
    """The feature graph in a session with one thread.

    model : a graph as `build_graph` makes it; None builds the default one.
    """

    def __init__(self, model: onnx.ModelProto | None = None) -> None:
        self.model = build_graph() if model is None else model
        options = ort.SessionOptions()
        options.intra_op_num_threads = options.inter_op_num_threads = 1
        options.enable_mem_reuse = False  # a tenth faster
        self._session = ort.InferenceSession(
            self.model.SerializeToString(deterministic=True), options, providers=["CPUExecutionProvider"]
        )

    @classmethod
    def of_value(cls, value: Mapping[str, Any]) -> FeatureGraph:
        """The graph for a dataset's `value`: its horizon, and its batch or None for the rate."""
        return cls(build_graph(horizon=float(value["horizon"]), batch=value["batch"]))

    @property
    def names(self) -> tuple[str, ...]:
        """Column names of `x`."""
        return tuple(json.loads(self.model.metadata_props[0].value))

    def matrix(self, columns: Mapping[str, Any]) -> FeatureMatrix:
        """Features of every row, tree by tree, exactly as a scorer meets them.

        columns : the names in INPUTS, each of length n; `remaining` may be a scalar. `tree` (whole
        numbers, equal ones side by side) says which rows belong together; without it all do.
        Raises InputError for a missing column, unequal lengths or a split tree.
        """
        names = ["features", "unit", "first_order", "batch"]
        parts = [self._session.run(names, feed) for feed in self.table(columns)]
        if not parts:
            none = np.empty(0)
            x = np.empty((0, len(self.names)), np.float32)
            return FeatureMatrix(x, none, none, none.astype(np.int64))
        return FeatureMatrix(*(np.concatenate(part) for part in zip(*parts, strict=True)))

    @staticmethod
    def table(columns: Mapping[str, Any]) -> list[dict[str, NDArray[Any]]]:
        """The graph's inputs, one dictionary a tree; columns and errors as for `matrix`."""
        table = {}
        for name in INPUTS:
            if name not in columns:
                raise InputError(name, "is missing")
            dtype = np.int64 if name == "action" else np.float64
            table[name] = np.ascontiguousarray(columns[name], dtype=dtype)
        n = table["mean"].size
        if table["remaining"].size == 1:
            table["remaining"] = np.full(n, table["remaining"].item())
        for name, column in table.items():
            if column.shape != (n,):
                raise InputError(name, f"must have {n} rows, as 'mean'", column.shape)
        feeds = []
        for a, b in pairwise(_tree_starts(columns.get("tree"), n)):
            feed = {name: column[a:b] for name, column in table.items()}
            feed["remaining"] = feed["remaining"][:1].reshape(())
            feeds.append(feed)
        return feeds


def _tree_starts(tree: Any, n: int) -> list[int]:
    """First row of each tree, and n at the end."""
    if tree is None:
        return [0, n] if n else [0]
    tree = np.asarray(tree)
    if tree.shape != (n,):
        raise InputError("tree", f"must have {n} rows, as 'mean'", tree.shape)
    starts = [0, *(np.flatnonzero(tree[1:] != tree[:-1]) + 1).tolist()] if n else []
    if len(np.unique(tree)) != len(starts):
        raise InputError("tree", "rows of one tree must be side by side")
    return [*starts, n]
