"""Nodes that the feature graphs of all inputs share, and what such a graph answers; floor 3."""

from __future__ import annotations

import json
from typing import Final, NamedTuple

import numpy as np
import onnx
from numpy.typing import NDArray
from onnx import TensorProto, helper

from distill.closed_form import PEAK
from distill.onnx_nodes import IR_VERSION, OPSET, Nodes, typed
from distill.scorer_inputs import VARIES, InputKind
from distill.tree import Floats

__all__ = [
    "FEATURE_ROWS", "LARGE", "TINY", "FeatureMatrix", "Start", "best_batch", "best_other", "finished", "loss",
    "PHI_SLOPE", "loss_bottom", "midpoints", "moments", "normal_table", "threshold_shift",
]  # fmt: skip

FEATURE_ROWS: Final = "feature_rows"  # the features transposed, shape (d, n)
LARGE: Final = 1e300
TINY: Final = 1e-300
PHI_SLOPE: Final = 0.49999994  # Phi in [6e-8, 1 - 6e-8]: F / Phi stays finite in float32
_BELOW, _ABOVE = 7.0, 3.5  # the table spans the largest m - 7 s to the largest m + 3.5 s
_FAR: Final = 1e9  # standard deviations; Phi is 1 there
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
    own s_k / k at the start value's batch k, a real number; s_k for a fixed batch. first_order : (n,), same
    unit, the start value. batch : (n,), rounded, the k where the start value is largest. leaf_sd : (n,), u,
    standard deviation that the leaf contributes to the root; bounds are told by it, estimates are not.
    """

    x: NDArray[np.float32]
    unit: Floats
    first_order: Floats
    batch: NDArray[np.int64]
    leaf_sd: Floats


def threshold_shift(g: Nodes, y: str, theta: str) -> tuple[str, str, str]:
    """-theta q(y), the slope at the threshold, and q(y) up to its constant factor, negative."""
    a, b, c = _Q_FIT
    slope = g("Sub", g.double(1.0), g("Exp", g("Mul", y, g.double(-b))))
    slope = g.at_least(slope, _SLOPE_FLOOR)
    log_slope = g("Log", slope)
    help_ = g("Div", log_slope, g("Sqrt", g("Sub", g.double(c), log_slope)))
    return g("Mul", g("Mul", help_, theta), g.double(a)), slope, help_


def loss(g: Nodes, z: str) -> str:
    """f(-|z|), within 5 %, relative, however small."""
    bottom = loss_bottom(g, z)
    return g("Div", _bell(g, z), bottom)


def _bell(g: Nodes, z: str) -> str:
    """exp(-z^2 / 2)."""
    return g("Exp", g("Mul", g("Mul", z, z), g.double(-0.5)))


def loss_bottom(g: Nodes, z: str) -> str:
    """exp(-z^2 / 2) / f(-|z|), within 5 %."""
    at_zero, linear, square = (g.double(x) for x in _LOSS_FIT)
    size = g("Abs", z)
    return g("Add", g("Mul", g("Add", g("Mul", size, square), linear), size), at_zero)


def normal_table(g: Nodes, m: str, s: str, points: int, *, tops: bool = False) -> tuple[list[str], str, str]:
    """Ends of each leaf's action table, shape (1, n), and F and R at its points, shape (n, points).

    The table spans the action's largest m - 7 s to its largest m + 3.5 s. tops : with the largest m of
    the action as a third of the ends.
    """
    spans, t = [[-_BELOW], [_ABOVE]], midpoints(points)
    ends_of = [1 - t, t]
    if tops:
        spans, ends_of = [*spans, [0.0]], [*ends_of, np.zeros(points)]
    rows = g("Add", "action", g.constant(np.zeros((len(spans), 1), dtype=np.int64)))
    ends = g("Add", g("Mul", s, g.double(spans)), m)
    ends = g("ScatterElements", g.at_most(ends, -LARGE), rows, ends, axis=1, reduction="max")
    ends = g("Gather", ends, "action", axis=1)
    parts = g.split(ends, len(spans), axis=0)
    z = g.at_most(g("Div", g("Sub", ends, m), s), _FAR)
    z = g("Cast", z, to=TensorProto.FLOAT)
    z = g("Gemm", z, g.single(np.stack(ends_of) / np.sqrt(2)), transA=1)
    phi = g("HardSigmoid", g("Erf", z), alpha=PHI_SLOPE, beta=0.5)
    row = g("Unsqueeze", "action", g.whole(1))
    joint = g("ScatterND", g("HardSigmoid", phi, alpha=0.0, beta=1.0), row, phi, reduction="mul")
    joint = g("Gather", joint, "action")
    return parts, joint, g("Div", joint, phi)


class Start:
    """The start value for a threshold t0, shape (1, n), at the best batch, a given one, or (VARIES) a call's.

    rough : take k = u^2 n / v, u = t0 / s, in place of the fitted peak; only the batch that is told comes
        from the peak then. What that costs is smooth in the features, and learned; a pick takes four nodes
        less.
    """

    def __init__(
        self, g: Nodes, t0: str, s: str, noise: str, batch: int | str | None, *, rough: bool = False
    ) -> None:
        self.g = g
        self.s = s
        self.rate = batch is None
        self.whole = batch == VARIES
        if batch == VARIES:
            self.k = g("Add", g("Mul", t0, g.double(0.0)), "batch_size")
            self.s_k = _moved(g, s, self.k, noise)
            self.told = self.k
        elif batch is not None:
            # "t0" gives the constant its shape.
            self.k = g("Add", g("Mul", t0, g.double(0.0)), g.double(float(batch)))
            self.s_k = _moved(g, s, self.k, noise)
            self.told = self.k
        elif rough:
            u2 = _squared(g, t0, s)
            self.k = _cut_batch(g, u2, noise, 1.0)
            self.s_k = _moved(g, s, self.k, noise)
            self.told = _cut_batch(g, _peak(g, u2), noise, 1.0)
        else:
            self.k, self.s_k = best_batch(g, t0, s, noise)
            self.told = self.k
        self.z = self.cut(g("Div", t0, g.at_least(self.s_k, TINY)))
        self.unit = g("Div", self.s_k, g.at_least(self.k, 1.0)) if self.rate else self.s_k

    def cut(self, z: str) -> str:
        """z within +-40."""
        return self.g("Clip", z, self.g.scalar(-_THRESHOLD_LIMIT), self.g.scalar(_THRESHOLD_LIMIT))

    def value(self, slope: str | None) -> str:
        """unit f(-|z|) slope."""
        g = self.g
        tail = loss(g, self.z)
        return g("Mul", self.unit if slope is None else g("Mul", self.unit, slope), tail)

    def fall(self) -> str:
        """unit exp(-z^2 / 2), the exponent of `value` alone: what it leaves out is smooth in the features."""
        return self.g("Mul", self.unit, _bell(self.g, self.z))

    def model(
        self, value: str, columns: tuple[str, ...], names: tuple[str, ...], kind: InputKind
    ) -> onnx.ModelProto:
        """The graph with its outputs; `columns` are rows, shape (1, n)."""
        rows = self.g("Concat", *columns, axis=0)
        # Half of one rounds the others; beyond 2^52 it would make a whole number another.
        batch = self.told if self.whole else self.g("Add", self.told, self.g.double(0.5))
        return finished(self.g, kind, names, rows, self.unit, value, batch, self.s)


def moments(g: Nodes, low: str, high: str, joint: str, rest: str, points: int) -> tuple[str, str, str]:
    """V, and mean and variance of the siblings' maximum; shape (1, n).

    V = high - integral of F. The siblings' maximum X: E[X - low] = integral of 1 - R,
    E[(X - low)^2] = integral of 2 (x - low) (1 - R).
    """
    t, w = midpoints(points), np.full(points, 1 / points)
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
    # Where the siblings are next to sure, cells may leave it a hair below 0.
    spread2 = g("Sub", g("Mul", width, second), g("Mul", first, first))
    spread2 = g("Clip", spread2, g.scalar(0.0), out="spread2")
    return value, others, spread2


def best_batch(g: Nodes, t0: str, s: str, noise: str, *, least: float = 1.0) -> tuple[str, str]:
    """The best real batch k for a threshold t0, and s_k; shape (1, n).

    s_k f(-|t0| / s_k) / k has a single peak, so the best k from `least` to the rollouts left is the peak cut
    to them. A leaf without variance has noise ratio infinity, hence s_k = 0 exactly.
    """
    k = _cut_batch(g, _peak(g, _squared(g, t0, s)), noise, least)
    return k, _moved(g, s, k, noise)


def _squared(g: Nodes, t0: str, s: str) -> str:
    """u^2, u = t0 / s."""
    u = g("Div", t0, s)
    return g("Mul", u, u)


def _peak(g: Nodes, u2: str) -> str:
    """k v / n where s_k f(-|t0| / s_k) / k peaks."""
    shape = g("Add", g("Div", g.double(PEAK[1]), g("Add", u2, g.double(PEAK[2]))), g.double(PEAK[0]))
    return g("Mul", u2, shape)


def _cut_batch(g: Nodes, ratio: str, noise: str, least: float) -> str:
    """k of k v / n, cut to `least` and the rollouts left."""
    return g("Clip", g("Mul", g.at_least(ratio, _PEAK_FLOOR), noise), g.scalar(least), "remaining")


def _moved(g: Nodes, s: str, k: str, noise: str) -> str:
    """s_k."""
    return g("Mul", s, g("Sqrt", g("Div", k, g("Add", k, noise))))


def best_other(g: Nodes, value: str) -> str:
    """V of the best action other than the leaf's own; shape (1, n), as `value`; -1e300 where there is none.

    By sums and products with the mask of the best action: Where takes three times as long.
    """
    own = g("Equal", "action", g("Gather", "action", g("ArgMax", value, axis=1, keepdims=0)))
    own = g("Cast", own, to=TensorProto.DOUBLE)
    first = g("ReduceMax", value)
    second = g("ReduceMax", g("Sub", value, g("Mul", own, g.double(LARGE))))
    return g("Sub", first, g("Mul", own, g("Sub", first, second)))


def midpoints(points: int) -> Floats:
    """Midpoints of equal cells of [0, 1]."""
    return (np.arange(points) + 0.5) / points


def finished(
    g: Nodes,
    kind: InputKind,
    names: tuple[str, ...],
    rows: str,
    unit: str,
    value: str,
    batch: str,
    leaf_sd: str,
) -> onnx.ModelProto:
    """The nodes as a model of one input kind.

    names : of the features. rows : double, shape (d, n), one row a feature: what is done to each feature
    alone takes a third of the time on rows. unit, value, batch, leaf_sd : double, n numbers in any shape;
    batch is cut to a whole number.
    """
    flat = g.whole(-1)
    g("Reshape", unit, flat, out="unit")
    g("Reshape", value, flat, out="first_order")
    g("Reshape", leaf_sd, flat, out="leaf_sd")
    g("Reshape", g("Cast", batch, to=TensorProto.INT64), flat, out="batch")
    g("Transpose", g("Cast", rows, to=TensorProto.FLOAT, out=FEATURE_ROWS), perm=[1, 0], out="features")
    inputs = [
        typed(name, TensorProto.INT64 if name == "action" else TensorProto.DOUBLE, ["n"])
        for name in kind.columns
    ]
    inputs += [typed(name, TensorProto.DOUBLE, []) for name in kind.scalars]
    outputs = [
        typed("features", TensorProto.FLOAT, ["n", len(names)]),
        typed("unit", TensorProto.DOUBLE, ["n"]),
        typed("first_order", TensorProto.DOUBLE, ["n"]),
        typed("batch", TensorProto.INT64, ["n"]),
        typed("leaf_sd", TensorProto.DOUBLE, ["n"]),
    ]
    graph = helper.make_graph(g.nodes, "features", inputs, outputs, g.initializers)
    model = helper.make_model(graph, opset_imports=[helper.make_opsetid("", OPSET)], ir_version=IR_VERSION)
    model.producer_name = "voc-distill"
    helper.set_model_props(model, {"features": json.dumps(names), "input": kind.name})
    return model
