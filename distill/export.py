"""One ONNX file: the feature graph, the estimator behind it, and the decision; floor 5.

    t = estimator(features)        the learner's transform of value / unit
    voc = first_order exp(t)       transform "log_ratio", t cut at +-20
    voc = unit max(t, 0)^2         transform "sqrt", and at least 1e-4 first_order, so that candidates
                                   which the learner sees as worthless keep an order
    voc_high = factor voc                  one factor a bin of the features, see `calibration`
    pick = first argmax of voc - cost,  worth_it = max of voc - cost > 0
    of the value of a batch: so many times the cost in place of cost, as for the exact net value

What the estimator sees is cut to the ranges of its training rows; `in_range` says where nothing was cut.
Before anything is written, the file's own answers are held against the estimator's.
"""

from __future__ import annotations

import json
import os
from collections.abc import Mapping
from typing import Any, Final

import numpy as np
import onnx
import onnxruntime as ort
from numpy.typing import NDArray
from onnx import TensorProto, helper
from sklearn.ensemble import HistGradientBoostingRegressor

from distill import scorer_file
from distill.calibration import LEAST_SD, UpperBound, bin_columns
from distill.converters import convert, folded, single_tree
from distill.errors import ExportError
from distill.feature_graph import FeatureGraph, FeatureMatrix
from distill.feature_nodes import FEATURE_ROWS
from distill.files import write_atomic
from distill.metrics import Groups
from distill.onnx_nodes import IR_VERSION, ML_OPSET, OPSET, Nodes, typed
from distill.scorer_inputs import InputKind
from distill.tree import Floats

__all__ = ["TRANSFORMS", "export_scorer", "mapped_back"]

TRANSFORMS: Final = ("sqrt", "log_ratio")
_LOG_RATIO_LIMIT: Final = 20.0
_FLOOR: Final = 1e-4
_DENSE_PARITY: Final = 1e-5  # of the largest t: networks and linear models run in float32
_PARITY_ROWS: Final = 20_000


def mapped_back(t: Floats, unit: Floats, first_order: Floats, transform: str) -> Floats:
    """Value of a learned t, u a rollout; see the module's table. All of shape (n,).

    >>> mapped_back(np.array([0.5, -1.0]), np.array([2.0, 2.0]), np.array([0.1, 0.1]), "sqrt").tolist()
    [0.5, 1e-05]
    """
    if transform == "sqrt":
        return np.maximum(unit * np.square(np.maximum(t, 0.0)), _FLOOR * first_order)
    return np.asarray(first_order * np.exp(np.clip(t, -_LOG_RATIO_LIMIT, _LOG_RATIO_LIMIT)))


def export_scorer(
    estimator: Any,
    feature_graph: FeatureGraph,
    *,
    transform: str,
    ranges: Any,
    upper: UpperBound,
    metadata: Mapping[str, Any],
    self_test_columns: Mapping[str, Any],
    path: str | os.PathLike[str] | None = None,
) -> bytes:
    """The scorer file as bytes, also written to `path` (atomically) if given.

    estimator : a fitted HistGradientBoostingRegressor, MLPRegressor or linear model, the last two also
        behind a StandardScaler in a Pipeline; it maps feature rows to t.
    transform : one of TRANSFORMS. ranges : (d, 2), least and largest of each feature that is in range.
    upper : the calibrated factor of `voc_high`.
    metadata : JSON values (family, dataset hash, recipe, ...), kept in the file as they are.
    self_test_columns : rows as for FeatureGraph.matrix; a few trees. Parity with the estimator is checked
        on them and on random rows within the ranges, and the file carries them with their answers.

    The same arguments give the same bytes. Raises ExportError where the estimator cannot be converted
    exactly, an argument is not usable, or the file does not repeat the estimator; nothing is written then.
    """
    if transform not in TRANSFORMS:
        raise ExportError(f"transform must be one of {', '.join(TRANSFORMS)}; got {transform!r}")
    limits = np.asarray(ranges, dtype=np.float32)
    if limits.shape != (len(feature_graph.names), 2):
        raise ExportError(f"ranges must have shape ({len(feature_graph.names)}, 2); got {limits.shape}")
    if not np.all(np.isfinite(limits)) or np.any(limits[:, 0] > limits[:, 1]):
        raise ExportError("ranges must be finite, least before largest")
    converted = convert(estimator, len(feature_graph.names))
    _check_estimator(estimator, converted, limits)
    model = _assemble(feature_graph.model, converted, transform, limits, upper, _batch_of(metadata))
    session = _session(model)
    matrix = feature_graph.matrix(self_test_columns)
    table = feature_graph.table(self_test_columns)
    answers, cases = _answers(session, feature_graph.kind, table)
    sizes = [len(feed[feature_graph.kind.floats[0]]) for feed in table]
    groups = Groups.of(np.repeat(np.arange(len(table)), sizes))
    _check_file(estimator, transform, limits, upper, matrix, answers, groups)
    _set_metadata(model, feature_graph, transform, limits, upper, metadata, cases)
    onnx.checker.check_model(model, full_check=True)
    data: bytes = model.SerializeToString(deterministic=True)
    scorer_file.check(data)
    if path is not None:
        write_atomic(path, data)
    return data


def _assemble(
    features: onnx.ModelProto,
    converted: onnx.ModelProto,
    transform: str,
    limits: NDArray[np.float32],
    upper: UpperBound,
    batch: int,
) -> onnx.ModelProto:
    """Feature nodes as they are, the estimator's nodes, and the decision, as one model."""
    boosting = converted.graph.node[0].op_type == "TreeEnsemble"
    g = Nodes("s")
    low, high = (g.single(limits[:, i : i + 1]) for i in (0, 1))
    rows = g("Max", g("Min", FEATURE_ROWS, high), low)
    outside = g("ReduceL1", g("Sub", FEATURE_ROWS, rows), g.whole(0), keepdims=0)
    inside = g("LessOrEqual", outside, g.single(0.0))
    g("And", inside, "valid", out="in_range")
    clipped = g("Transpose", rows, perm=[1, 0])
    x = g("Cast", clipped, to=TensorProto.DOUBLE)

    renamed, t = _renamed(converted, x if boosting else rows)
    if not boosting:  # the first layer reads rows as they are
        renamed.node[0].attribute.append(helper.make_attribute("transA", 1))
    tail = Nodes("d")
    t = tail("Reshape", t, tail.whole(-1))
    if not boosting:
        t = tail("Cast", t, to=TensorProto.DOUBLE)
    if transform == "sqrt":
        t = tail("Max", t, tail.double(0.0))
        voc = tail("Mul", "unit", tail("Mul", t, t))
        tail("Max", voc, tail("Mul", "first_order", tail.double(_FLOOR)), out="voc")
    else:
        t = tail("Clip", t, tail.scalar(-_LOG_RATIO_LIMIT), tail.scalar(_LOG_RATIO_LIMIT))
        tail("Mul", "first_order", tail("Exp", t), out="voc")
    largest = tail("Max", tail("ReduceMax", "leaf_sd"), tail.double(LEAST_SD))
    share = tail("Reshape", tail("Div", "leaf_sd", largest), tail.whole(-1, 1))
    tree = single_tree(upper.feature, upper.split, upper.left, upper.right, upper.factor)
    factor = tail("TreeEnsemble", tail("Concat", x, share, axis=1), domain="ai.onnx.ml", **tree)
    tail("Mul", "voc", tail("Reshape", factor, tail.whole(-1)), out="voc_high")
    cost = "cost"
    if "batch_size" in {x.name for x in features.graph.input}:
        cost = tail("Mul", cost, "batch_size")
    elif batch > 1:
        cost = tail("Mul", cost, tail.double(float(batch)))
    net = tail("Sub", "voc", cost)
    tail("ArgMax", net, axis=0, keepdims=0, out="pick")
    tail("Greater", tail("ReduceMax", net, keepdims=0), tail.scalar(0.0), out="worth_it")

    nodes = [*features.graph.node, *g.nodes, *renamed.node, *tail.nodes]
    initializers = [*features.graph.initializer, *g.initializers, *renamed.initializer, *tail.initializers]
    outputs = [
        typed("voc", TensorProto.DOUBLE, ["n"]),
        typed("batch", TensorProto.INT64, ["n"]),
        typed("voc_high", TensorProto.DOUBLE, ["n"]),
        typed("in_range", TensorProto.BOOL, ["n"]),
        typed("pick", TensorProto.INT64, []),
        typed("worth_it", TensorProto.BOOL, []),
    ]
    nodes = _needed(nodes, {output.name for output in outputs})
    read = {name for node in nodes for name in node.input}
    initializers = [tensor for tensor in initializers if tensor.name in read]
    graph = helper.make_graph(nodes, "scorer", list(features.graph.input), outputs, initializers)
    opsets = [helper.make_opsetid("", OPSET), helper.make_opsetid("ai.onnx.ml", ML_OPSET)]
    model = helper.make_model(graph, opset_imports=opsets, ir_version=IR_VERSION)
    model.producer_name = "voc-distill"
    return model


def _batch_of(metadata: Mapping[str, Any]) -> int:
    """Rollouts that a scored value is of: those of a batch that all calls share, else 1."""
    value = metadata.get("value")
    batch = value.get("batch") if isinstance(value, dict) else None
    return batch if isinstance(batch, int) else 1


def _needed(nodes: list[onnx.NodeProto], wanted: set[str]) -> list[onnx.NodeProto]:
    """The nodes that some of the wanted values come from, in order."""
    wanted, kept = set(wanted), []
    for node in reversed(nodes):
        if wanted.intersection(node.output):
            wanted.update(node.input)
            kept.append(node)
    return kept[::-1]


def _renamed(converted: onnx.ModelProto, x: str) -> tuple[onnx.GraphProto, str]:
    """The estimator's graph reading `x`, every other name prefixed; and the name of its output."""
    graph = onnx.GraphProto()
    graph.CopyFrom(converted.graph)

    def name_of(name: str) -> str:
        return x if name == graph.input[0].name else f"e_{name}"

    for node in graph.node:
        node.input[:] = [name_of(name) for name in node.input]
        node.output[:] = [name_of(name) for name in node.output]
        node.name = node.output[0]
    for tensor in graph.initializer:
        tensor.name = name_of(tensor.name)
    return graph, name_of(graph.output[0].name)


def _session(model: onnx.ModelProto) -> Any:
    options = ort.SessionOptions()
    options.intra_op_num_threads = options.inter_op_num_threads = 1
    options.log_severity_level = 3
    data = model.SerializeToString(deterministic=True)
    return ort.InferenceSession(data, options, providers=["CPUExecutionProvider"])


# --- parity ----------------------------------------------------------------------------------------


def _check_estimator(estimator: Any, converted: onnx.ModelProto, limits: NDArray[np.float32]) -> None:
    """The converted nodes against the estimator on random rows within the ranges, and on every split."""
    rng = np.random.default_rng(0)
    rows = rng.uniform(limits[:, 0], limits[:, 1], (_PARITY_ROWS, len(limits))).astype(np.float32)
    x = rows
    if isinstance(folded(estimator), HistGradientBoostingRegressor):
        x = rows.astype(np.float64)
        for predictors in estimator._predictors:
            inner = predictors[0].nodes[predictors[0].nodes["is_leaf"] == 0]
            at = rng.integers(len(x), size=len(inner))
            x[at, inner["feature_idx"]] = inner["num_threshold"]
        x[rng.random(x.shape) < 0.001] = np.nan
    got = _session(converted).run(None, {"x": x})[0].ravel()
    _compare(estimator, x, got, "random rows")


def _compare(estimator: Any, x: NDArray[Any], got: NDArray[Any], where: str) -> None:
    expected = np.asarray(estimator.predict(x), dtype=float).ravel()
    if not np.all(np.isfinite(expected)):
        raise ExportError(f"the estimator is not finite on {where}")
    off = float(np.max(np.abs(got - expected)))
    boosting = isinstance(folded(estimator), HistGradientBoostingRegressor)
    allowed = 0.0 if boosting else _DENSE_PARITY * max(1.0, float(np.max(np.abs(expected))))
    if not off <= allowed:
        raise ExportError(
            f"the file differs from the estimator by {off:.3g} on {where}; allowed {allowed:.3g}"
        )


def _check_file(
    estimator: Any,
    transform: str,
    limits: NDArray[np.float32],
    upper: UpperBound,
    matrix: FeatureMatrix,
    answers: Mapping[str, NDArray[Any]],
    groups: Groups,
) -> None:
    """The assembled file's `voc` against the estimator's through the transform, and `voc_high` above it."""
    x = np.clip(matrix.x, limits[:, 0], limits[:, 1])
    t = np.asarray(estimator.predict(x), dtype=float)
    expected = mapped_back(t, matrix.unit, matrix.first_order, transform)
    boosting = isinstance(folded(estimator), HistGradientBoostingRegressor)
    slope = _DENSE_PARITY * max(1.0, float(np.max(np.abs(t), initial=0.0)))
    low, high = (mapped_back(t + d, matrix.unit, matrix.first_order, transform) for d in (-slope, slope))
    rounding = 4 * np.finfo(float).eps * expected
    allowed = rounding if boosting else high - low + rounding
    off = np.abs(answers["voc"] - expected)
    if not np.all(off <= allowed):
        row = int(np.argmax(off - allowed))
        raise ExportError(
            f"the file gives {answers['voc'][row]!r} where the estimator gives {expected[row]!r} "
            f"on self-test row {row}"
        )
    told_by = bin_columns(x, matrix.leaf_sd, groups)
    if np.any(answers["voc_high"] != answers["voc"] * upper.of(told_by)):
        raise ExportError("the file's upper bounds differ from the calibrated ones on the self-test rows")
    if np.any(answers["batch"] != matrix.batch):
        raise ExportError("the file's batches differ from the feature graph's on the self-test rows")


def _answers(
    session: Any, kind: InputKind, table: list[dict[str, NDArray[Any]]]
) -> tuple[dict[str, NDArray[Any]], list[dict[str, Any]]]:
    """The file's own answers on the self-test rows, whole and tree by tree."""
    names = [o.name for o in session.get_outputs()]
    whole: dict[str, list[NDArray[Any]]] = {name: [] for name in names}
    cases = []
    for feed in table:
        out = dict(zip(names, session.run(names, feed), strict=True))
        for name in names:
            whole[name].append(np.atleast_1d(out[name]))
        cases.append(
            {
                "inputs": kind.to_json(feed),
                "outputs": {name: out[name].tolist() for name in names},
            }
        )
    if not cases:
        raise ExportError("self_test_columns must hold at least one row")
    return {name: np.concatenate(parts) for name, parts in whole.items()}, cases


# --- metadata --------------------------------------------------------------------------------------


def _json(value: Any) -> str:
    try:
        return json.dumps(value, sort_keys=True, allow_nan=False, separators=(",", ":"))
    except (TypeError, ValueError) as e:
        raise ExportError(f"metadata must be finite JSON values ({e})") from None


def _set_metadata(
    model: onnx.ModelProto,
    feature_graph: FeatureGraph,
    transform: str,
    limits: NDArray[np.float32],
    upper: UpperBound,
    metadata: Mapping[str, Any],
    cases: list[dict[str, Any]],
) -> None:
    names = feature_graph.names
    props = {
        "format": scorer_file.FORMAT,
        "about": _json(dict(metadata)),
        "calibration": _json(upper.facts()),
        "features": _json(list(names)),
        "input": feature_graph.kind.name,
        "ranges": _json({name: [float(a), float(b)] for name, (a, b) in zip(names, limits, strict=True)}),
        "self_test": _json(cases),
        "transform": transform,
    }
    helper.set_model_props(model, props)
