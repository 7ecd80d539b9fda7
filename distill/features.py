"""The features as one ONNX graph over the Gaussian leaf table; floor 4.

The trainer runs this graph to make its matrix and a scorer file contains the same nodes, so there is no
second implementation to drift apart. One call covers one tree. Per action a a table of

    F_a(x) = product over its leaves of Phi((x - m_i) / s_i)        m = gain mean + offset, s = gain sd

on Gauss-Legendre points between the largest m - c s and the largest m + c s gives the action's expected
maximum V_a, and F_a / Phi_i, the leaves' leave-one-out maxima and influences w_i = d V_a / d m_i.
The first-order rate takes V_a as linear in the leaf's posterior mean:

    max over k of  w s_k f(-gap / (w s_k)) / k,   f(z) = z Phi(z) + phi(z),   s_k^2 = v^2 / (v + n / k)

with gap the distance of V_a to the best other action (the idea of KG(*), Frazier and Powell 2010).
Differences are taken in double precision; only unit-free numbers are rounded to float32.
"""

from __future__ import annotations

from collections.abc import Mapping
from itertools import pairwise
from typing import Any, Final, NamedTuple

import numpy as np
import onnx
import onnxruntime as ort
from numpy.typing import NDArray
from onnx import TensorProto, helper

from distill.closed_form import LOSS_A, LOSS_B, LOSS_P, LOSS_Q, PEAK
from distill.errors import InputError
from distill.onnx_nodes import IR_VERSION, OPSET, Nodes, typed
from distill.tree import Floats

__all__ = ["FEATURE_NAMES", "INPUTS", "FeatureGraph", "FeatureMatrix", "build_graph"]

INPUTS: Final = ("mean", "var", "noise_var", "gain", "offset", "action", "cost", "remaining")

FEATURE_NAMES: Final = (
    "best",  # 1 where the leaf's action is the best one
    "influence",  # w, d V_a / d m_i
    "first_z",  # gap / (w s_k)
    "first_root",  # sqrt(w f(-first_z)), the square root of the first-order rate over the unit
    "own_loss",  # sqrt((V_a - V_a without the leaf) / s_k)
    "own_lead",  # (m_i - V_a without the leaf) / s_k
    "rest_gap",  # (rival - V_a without the leaf) / s_k
    "leaf_gap",  # (rival - m_i) / s_k
    "resolved",  # s_k^2 / v, the share of the leaf's variance that k rollouts resolve
    "log_batch",  # log k
    "log_noise",  # log(n / v)
    "log_budget",  # log(R v / n), R rollouts left
    "log_spread",  # log of the action's grid width / s_k
)

_REACH: Final = 4.0  # c: the table spans the largest m - c s to the largest m + c s
_LARGE: Final = 1e300
_TINY: Final = 1e-300
_Z_LIMIT: Final = 40.0  # exp(-z^2 / 2) is 0 in double precision
_RATIO_LIMIT: Final = 1e18  # of noise to variance, either way
_FAR: Final = 1e9  # standard deviations; Phi is 1 there
_FEATURE_LIMIT: Final = 40.0
_PHI_SLOPE: Final = 0.49999994  # Phi in [6e-8, 1 - 6e-8]: F / Phi stays finite in float32


class FeatureMatrix(NamedTuple):
    """What the graph says of each row.

    x : (n, d) float32, unit-free, columns FEATURE_NAMES. unit : (n,), u a rollout, the leaf's own
    s_k / k at the first-order best batch k. first_order : (n,), u a rollout, the first-order rate.
    batch : (n,), k.
    """

    x: NDArray[np.float32]
    unit: Floats
    first_order: Floats
    batch: NDArray[np.int64]


def build_graph(*, points: int = 12) -> onnx.ModelProto:
    """The feature graph of the Gaussian leaf table, one tree a call.

    Inputs, shape (n,) unless said: mean, var, noise_var, gain, offset, cost (double), action (int64,
    0 to n - 1), remaining (double, shape (1,)). Outputs as in FeatureMatrix, named features, unit,
    first_order, batch. points : Gauss-Legendre points of the table.
    """
    g = Nodes("f")
    one, tiny, column = g.double(1.0), g.double(_TINY), g.whole(1)
    # Leaves as the root sees them, means relative to the largest.
    m = g("Add", g("Mul", "gain", "mean"), "offset")
    m = g("Sub", m, g("ReduceMax", m))
    sd = g("Mul", "gain", g("Sqrt", "var"))
    row = g("Unsqueeze", "action", column)

    # The table: each action's edges, z of each leaf at each point, Phi.
    m_column = g("Unsqueeze", m, column)
    reach = g("Mul", g("Unsqueeze", sd, column), g.double([[-_REACH, _REACH]]))
    edges = g("Add", m_column, reach)
    edges = g("ScatterND", g("Min", edges, g.double(-_LARGE)), row, edges, reduction="max")
    edges = g("Gather", edges, "action")
    scaled = g("Div", g("Sub", edges, m_column), g("Unsqueeze", g("Max", sd, tiny), column))
    scaled = g("Cast", g("Min", scaled, g.double(_FAR)), to=TensorProto.FLOAT)
    abscissa, share = np.polynomial.legendre.leggauss(points)
    t, weight = (abscissa + 1) / 2, g.single(share[:, None] / 2)
    z = g("MatMul", scaled, g.single(np.stack([1 - t, t]) / np.sqrt(2)))
    phi = g("Add", g("Mul", g("Erf", z), g.single(_PHI_SLOPE)), g.single(0.5))
    joint = g("ScatterND", g("Max", phi, g.single(1.0)), row, phi, reduction="mul")
    joint = g("Gather", joint, "action")
    rest = g("Div", joint, phi)

    # Expected maximum of the action, its loss without the leaf, and the leaf's influence.
    flat = g.whole(-1)

    def total(table: str, weights: str) -> str:
        """Weighted sum of each row, as a double column of shape (n,)."""
        return g("Cast", g("Reshape", g("MatMul", table, weights), flat), to=TensorProto.DOUBLE)

    low, high = (g("Reshape", edge, flat) for edge in g.split(edges, 2, axis=1))
    width = g("Sub", high, low)
    value = g("Sub", high, g("Mul", width, total(joint, weight)))
    loss = g("Mul", width, total(g("Sub", rest, joint), weight))
    mass = g("Gemm", phi, *map(g.single, _steps(points)))
    influence = total(g("Mul", rest, mass), g.single(np.ones((points, 1))))

    # The best other action, and the gap to it.
    best = g("Equal", "action", g("Gather", "action", g("ArgMax", value, keepdims=1)))
    second = g("ReduceMax", g("Where", best, g.double(-_LARGE), value))
    rival = g("Where", best, second, g("ReduceMax", value))
    gap = g("Abs", g("Sub", value, rival))

    # First-order best batch: k v / n = u^2 (a + b / (u^2 + c)), u = gap / (w sd), fitted to within 0.4 %
    # of the best rate; then between 1 and the rollouts left, which is right as the peak is single.
    noise = g("Div", "noise_var", g("Max", "var", tiny))
    noise = g("Max", g("Min", noise, g.double(_RATIO_LIMIT)), g.double(1 / _RATIO_LIMIT))
    u = g("Div", gap, g("Max", g("Mul", influence, sd), tiny))
    u2 = g("Mul", u, u)
    shape = g("Add", g("Div", g.double(PEAK[1]), g("Add", u2, g.double(PEAK[2]))), g.double(PEAK[0]))
    k = g("Mul", g("Mul", u2, shape), noise)
    k = g("Floor", g("Add", g("Min", g("Max", k, one), "remaining"), g.double(0.5)))
    k_safe = g("Max", k, one)
    resolved = g("Div", k, g("Add", k, noise))
    s = g("Mul", sd, g("Sqrt", resolved))
    s_safe = g("Max", s, tiny)
    unit = g("Div", s, k_safe, out="unit")

    # f(-z), z = gap / (w s).
    z1 = g("Min", g("Div", gap, g("Max", g("Mul", influence, s), tiny)), g.double(_Z_LIMIT))
    z_column = g("Unsqueeze", z1, column)
    bottom = g("Add", g("Mul", g("Add", z_column, g.double(LOSS_P)), z_column), g.double(LOSS_Q))
    root = 1 / np.sqrt(2 * np.pi)
    top_a, top_b = (g.double(np.multiply(c, root)) for c in (LOSS_A, LOSS_B))
    top = g("Add", g("Mul", z_column, top_b), top_a)
    tail = g("Reshape", g("MatMul", g("Div", top, bottom), g.double(np.ones((len(LOSS_P), 1)))), flat)
    f = g("Mul", tail, g("Exp", g("Mul", g("Mul", z1, z1), g.double(-0.5))))
    ratio = g("Mul", influence, f)
    g("Mul", unit, ratio, out="first_order")
    g("Cast", k, to=TensorProto.INT64, out="batch")

    columns = (
        g("Cast", best, to=TensorProto.DOUBLE),
        influence,
        z1,
        g("Sqrt", ratio),
        g("Sqrt", g("Div", loss, s_safe)),
        g("Div", g("Sub", m, g("Sub", value, loss)), s_safe),
        g("Div", g("Sub", rival, g("Sub", value, loss)), s_safe),
        g("Div", g("Sub", rival, m), s_safe),
        resolved,
        g("Log", k_safe),
        g("Log", noise),
        g("Log", g("Div", g("Max", "remaining", one), noise)),
        g("Log", g("Max", g("Div", width, s_safe), tiny)),
    )
    assert len(columns) == len(FEATURE_NAMES)
    stacked = g("Reshape", g("Concat", *columns, axis=0), g.whole(len(columns), -1))
    limit = _FEATURE_LIMIT
    stacked = g("Max", g("Min", stacked, g.double(limit)), g.double(-limit))
    g("Transpose", g("Cast", stacked, to=TensorProto.FLOAT), perm=[1, 0], out="features")

    inputs = [typed(name, TensorProto.DOUBLE, ["n"]) for name in INPUTS]
    inputs[INPUTS.index("action")] = typed("action", TensorProto.INT64, ["n"])
    inputs[INPUTS.index("remaining")] = typed("remaining", TensorProto.DOUBLE, [1])
    outputs = [
        typed("features", TensorProto.FLOAT, ["n", len(FEATURE_NAMES)]),
        typed("unit", TensorProto.DOUBLE, ["n"]),
        typed("first_order", TensorProto.DOUBLE, ["n"]),
        typed("batch", TensorProto.INT64, ["n"]),
    ]
    graph = helper.make_graph(g.nodes, "features", inputs, outputs, g.initializers)
    model = helper.make_model(graph, opset_imports=[helper.make_opsetid("", OPSET)], ir_version=IR_VERSION)
    model.producer_name = "voc-distill"
    return model


def _steps(points: int) -> tuple[Floats, Floats]:
    """(D, d) so that phi @ D + d is the mass of dPhi that falls to each point, by the trapezoid rule."""
    D = np.zeros((points, points))
    for j in range(points):
        D[min(j + 1, points - 1), j] += 0.5
        D[max(j - 1, 0), j] -= 0.5
    D[0, 0] += 1.0  # all mass below the first point
    D[-1, -1] -= 1.0
    last = np.zeros(points)
    last[-1] = 1.0
    return D, last


class FeatureGraph:
    """The feature graph in a session with one thread.

    model : a graph with the inputs and outputs of `build_graph`; None builds the default one.
    """

    def __init__(self, model: onnx.ModelProto | None = None) -> None:
        self.model = build_graph() if model is None else model
        options = ort.SessionOptions()
        options.intra_op_num_threads = options.inter_op_num_threads = 1
        self._session = ort.InferenceSession(
            self.model.SerializeToString(deterministic=True), options, providers=["CPUExecutionProvider"]
        )

    @property
    def names(self) -> tuple[str, ...]:
        """Column names of `x`."""
        return FEATURE_NAMES

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
            feed["remaining"] = feed["remaining"][:1]
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
