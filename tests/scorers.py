"""Small fitted estimators and scorer files for tests, made from a rule instead of labels."""

from __future__ import annotations

import functools
from typing import Any

import numpy as np
import onnx
from leaf_tables import rows
from sklearn.ensemble import HistGradientBoostingRegressor
from sklearn.linear_model import Ridge
from sklearn.neural_network import MLPRegressor
from sklearn.pipeline import make_pipeline
from sklearn.preprocessing import StandardScaler

from distill.calibration import UpperBound
from distill.export import export_scorer
from distill.feature_graph import FeatureGraph, FeatureMatrix

KINDS = ("boosting", "dense", "linear")


@functools.cache
def graph() -> FeatureGraph:
    return FeatureGraph()


@functools.cache
def training(n_trees: int = 60) -> FeatureMatrix:
    return graph().matrix(rows(np.random.default_rng(11), n_trees))


@functools.cache
def fitted(kind: str, transform: str = "log_ratio") -> Any:
    """An estimator fitted to a smooth rule of the features."""
    x = training().x.astype(float)
    t = 0.3 * np.sin(x[:, 0]) - 0.2 * x[:, 2] + 0.02 * x[:, 1]
    if transform == "sqrt":
        t = np.exp(t)
    model: Any
    if kind == "boosting":
        model = HistGradientBoostingRegressor(max_iter=12, max_leaf_nodes=8)
    elif kind == "dense":
        net = MLPRegressor(
            hidden_layer_sizes=(8, 8), solver="lbfgs", max_iter=300, max_fun=10**6, random_state=0, tol=0.1
        )
        model = make_pipeline(StandardScaler(), net)
    else:
        model = make_pipeline(StandardScaler(), Ridge())
    return model.fit(training().x, t)


def upper_bound() -> UpperBound:
    """Three bins, split at a threshold of 1, and below it at half the largest spread of the tree."""
    children = [1, 3, -1, -1, -1], [2, 4, -1, -1, -1]
    lists = [0, 3, 0, 0, 0], [1.0, 0.5, 0, 0, 0], *children, [1.0, 1.0, 1.75, 1.5, 1.25]
    nodes = (np.array(x) for x in lists)
    return UpperBound(*nodes, coverage=0.95, trees=40, candidates=800)


def arguments(kind: str = "dense", transform: str = "log_ratio") -> dict[str, Any]:
    """Arguments of export_scorer, by name."""
    x = training().x
    return {
        "estimator": fitted(kind, transform),
        "feature_graph": graph(),
        "transform": transform,
        "ranges": np.stack([x.min(axis=0), x.max(axis=0)], axis=1),
        "upper": upper_bound(),
        "metadata": {"recipe": kind, "family": "rule"},
        "self_test_columns": rows(np.random.default_rng(12), 3, most=10),
    }


@functools.cache
def scorer_bytes(kind: str = "dense", transform: str = "log_ratio") -> bytes:
    return export_scorer(**arguments(kind, transform))


def without_upper_bound(data: bytes) -> bytes:
    """The same scorer as a file of the format before, which had no `voc_high`."""
    model = onnx.load_model_from_string(data)
    kept = [node for node in model.graph.node if "voc_high" not in node.output]
    del model.graph.node[:]
    model.graph.node.extend(kept)
    outputs = [output for output in model.graph.output if output.name != "voc_high"]
    del model.graph.output[:]
    model.graph.output.extend(outputs)
    props = {p.key: p.value for p in model.metadata_props if p.key != "calibration"}
    onnx.helper.set_model_props(model, {**props, "format": "voc-scorer/1"})
    return bytes(model.SerializeToString(deterministic=True))
