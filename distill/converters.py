"""Fitted scikit-learn regressors as ONNX nodes, written by skl2onnx through converters of our own; floor 5.

Why our own: the stock converter writes tree ensembles in float32 for ai.onnx.ml 1 and fails or is
silently wrong for some losses; here a boosting ensemble becomes one double `TreeEnsemble` of ai.onnx.ml 5,
which repeats scikit-learn bit for bit. The standard scaler in front of a network or a linear model is
folded into its first layer, which saves its nodes.
"""

from __future__ import annotations

import copy
from collections.abc import Callable
from typing import Any, Final

import numpy as np
import onnx
from numpy.typing import NDArray
from onnx import helper, numpy_helper
from skl2onnx import convert_sklearn
from skl2onnx.common.data_types import DoubleTensorType, FloatTensorType
from sklearn.ensemble import HistGradientBoostingRegressor
from sklearn.linear_model import ElasticNet, Lasso, LinearRegression, Ridge
from sklearn.neural_network import MLPRegressor
from sklearn.pipeline import Pipeline
from sklearn.preprocessing import StandardScaler
from sklearn.utils.validation import check_is_fitted

from distill.errors import ExportError
from distill.onnx_nodes import IR_VERSION, ML_OPSET, OPSET
from distill.tree import Floats, Ints

__all__ = ["convert", "folded", "single_tree"]

_SKL2ONNX_ML: Final = 3
_LINEAR: Final = (LinearRegression, Ridge, Lasso, ElasticNet)
_ACTIVATIONS: Final = {"relu": "Relu", "tanh": "Tanh", "logistic": "Sigmoid", "identity": None}


def convert(estimator: Any, n_features: int) -> onnx.ModelProto:
    """A model with input `x` of shape (n, n_features) and output of shape (n, 1).

    Boosting takes and gives double, networks and linear models float32. Raises ExportError for an
    estimator, a loss or a part of a pipeline that would not be repeated exactly.
    """
    estimator = folded(estimator)
    if int(estimator.n_features_in_) != n_features:
        raise ExportError(f"the estimator has {estimator.n_features_in_} features, the graph {n_features}")
    boosting = isinstance(estimator, HistGradientBoostingRegressor)
    kind = DoubleTensorType if boosting else FloatTensorType
    kinds = (HistGradientBoostingRegressor, MLPRegressor, *_LINEAR)
    model = convert_sklearn(
        estimator,
        initial_types=[("x", kind([None, n_features]))],
        # skl2onnx knows ai.onnx.ml up to 3; the version that our nodes need is declared below.
        target_opset={"": OPSET, "ai.onnx.ml": _SKL2ONNX_ML},
        custom_conversion_functions={k: _CONVERTERS.get(k, _write_layers) for k in kinds},
        custom_shape_calculators=dict.fromkeys(kinds, _one_output),
    )
    del model.opset_import[:]
    model.opset_import.append(helper.make_opsetid("", OPSET))
    if boosting:
        model.opset_import.append(helper.make_opsetid("ai.onnx.ml", ML_OPSET))
    model.ir_version = IR_VERSION
    return model


def folded(estimator: Any) -> Any:
    """The estimator without its pipeline: the scaler goes into the first layer. Unfitted ones are refused.

    Raises ExportError for anything but boosting, or a network or linear model behind at most one scaler.
    """
    steps = [step for _, step in estimator.steps] if isinstance(estimator, Pipeline) else [estimator]
    model = steps[-1]
    if not isinstance(model, (HistGradientBoostingRegressor, MLPRegressor, *_LINEAR)):
        raise ExportError(f"no converter for {type(model).__name__}")
    check_is_fitted(model)
    outputs = np.size(model.intercept_) if isinstance(model, _LINEAR) else getattr(model, "n_outputs_", 1)
    if outputs != 1:
        raise ExportError(f"the estimator must have one output; it has {outputs}")
    for scaler in reversed(steps[:-1]):
        if isinstance(model, HistGradientBoostingRegressor) or not isinstance(scaler, StandardScaler):
            raise ExportError(f"no converter for {type(scaler).__name__} before {type(model).__name__}")
        model = _fold(scaler, model)
    return model


def _fold(scaler: StandardScaler, model: Any) -> Any:
    """The model of (x - mean) / scale as a model of x: W / scale, and b - (mean / scale) W."""
    n = scaler.n_features_in_
    mean = np.zeros(n) if scaler.mean_ is None else np.asarray(scaler.mean_, dtype=float)
    scale = np.ones(n) if scaler.scale_ is None else np.asarray(scaler.scale_, dtype=float)
    model = copy.deepcopy(model)
    if isinstance(model, MLPRegressor):
        W = np.asarray(model.coefs_[0], dtype=float) / scale[:, None]
        model.coefs_[0] = W
        model.intercepts_[0] = np.asarray(model.intercepts_[0], dtype=float) - mean @ W
    else:
        W = np.ravel(model.coef_).astype(float) / scale
        model.coef_ = W
        model.intercept_ = float(np.ravel(model.intercept_)[0]) - float(mean @ W)
    return model


def single_tree(feature: Ints, split: Floats, left: Ints, right: Ints, value: Floats) -> dict[str, Any]:
    """Attributes of a double `TreeEnsemble` that holds one tree, root first; left = right = -1 at a leaf.

    A row goes left where x[feature] <= split, and right where it is NaN.
    """
    kinds = [("is_leaf", "i8"), ("value", "f8"), ("feature_idx", "i8"), ("num_threshold", "f8")]
    kinds += [("missing_go_to_left", "i8"), ("left", "i8"), ("right", "i8")]
    nodes = np.zeros(len(value), dtype=kinds)
    nodes["is_leaf"], nodes["value"] = left < 0, value
    nodes["feature_idx"], nodes["num_threshold"] = feature, split
    nodes["left"], nodes["right"] = left, right
    flat = _FlatTrees()
    flat.add(nodes, 0.0)
    return flat.attributes()


def _one_output(operator: Any) -> None:
    rows = operator.inputs[0].type.shape[0]
    operator.outputs[0].type = type(operator.inputs[0].type)([rows, 1])


def _write_layers(scope: Any, operator: Any, container: Any) -> None:
    """A network or linear model: Gemm and activation a layer."""
    model = operator.raw_operator
    current = operator.inputs[0].full_name
    layers, activation = _layers(model)
    for i, (W, b) in enumerate(layers):
        last = i == len(layers) - 1
        names = [scope.get_unique_variable_name(f"{kind}{i}") for kind in ("weights", "bias")]
        for name, value in zip(names, (W, b), strict=True):
            _initializer(container, name, np.asarray(value, dtype=np.float32))
        out = operator.outputs[0].full_name if last else scope.get_unique_variable_name(f"layer{i}")
        container.add_node(
            "Gemm", [current, *names], out, op_version=13, name=scope.get_unique_operator_name("Gemm")
        )
        current = out
        if not last and activation:
            current = scope.get_unique_variable_name(f"active{i}")
            container.add_node(
                activation, out, current, op_version=13, name=scope.get_unique_operator_name(activation)
            )


def _layers(model: Any) -> tuple[list[tuple[Floats, Floats]], str | None]:
    if not isinstance(model, MLPRegressor):
        return [(np.reshape(model.coef_, (-1, 1)), np.reshape(model.intercept_, 1))], None
    if model.activation not in _ACTIVATIONS:
        raise ExportError(f"no converter for activation {model.activation!r}")
    if model.out_activation_ != "identity":
        raise ExportError(f"no converter for output activation {model.out_activation_!r}")
    return list(zip(model.coefs_, model.intercepts_, strict=True)), _ACTIVATIONS[model.activation]


def _initializer(container: Any, name: str, value: NDArray[Any]) -> None:
    tensor = numpy_helper.from_array(np.ascontiguousarray(value), name)
    container.add_initializer(name, tensor.data_type, list(value.shape), tensor)


def _write_boosting(scope: Any, operator: Any, container: Any) -> None:
    """A boosting ensemble as one double TreeEnsemble.

    The operator has no base value, so the baseline goes into the first tree's leaves: the sum starts
    with baseline + first tree in scikit-learn too, and stays the same bit for bit.
    """
    model = operator.raw_operator
    if model.loss not in ("squared_error", "absolute_error", "quantile"):
        raise ExportError(f"no converter for loss {model.loss!r}: its output passes through a link function")
    baseline = float(np.ravel(model._baseline_prediction)[0])
    trees = [predictors[0].nodes for predictors in model._predictors]
    if not trees:
        raise ExportError("the ensemble has no tree")
    flat = _FlatTrees()
    for i, nodes in enumerate(trees):
        if np.any(nodes["is_categorical"]):
            raise ExportError("no converter for categorical features")
        flat.add(nodes, baseline if i == 0 else 0.0)
    container.add_node(
        "TreeEnsemble",
        operator.inputs[0].full_name,
        operator.outputs[0].full_name,
        op_domain="ai.onnx.ml",
        op_version=_SKL2ONNX_ML,
        name=scope.get_unique_operator_name("TreeEnsemble"),
        **flat.attributes(),
    )


class _FlatTrees:
    """Inner nodes and leaves of all trees in the operator's layout."""

    def __init__(self) -> None:
        self.roots: list[int] = []
        self.feature: list[int] = []
        self.split: list[float] = []
        self.missing_left: list[int] = []
        self.child: tuple[list[int], list[int]] = ([], [])
        self.child_is_leaf: tuple[list[int], list[int]] = ([], [])
        self.weight: list[float] = []

    def add(self, nodes: NDArray[Any], baseline: float) -> None:
        """Append one tree; a tree of one leaf becomes a split with that leaf on both sides."""
        inner = np.flatnonzero(nodes["is_leaf"] == 0)
        leaves = np.flatnonzero(nodes["is_leaf"])
        first_inner, first_leaf = len(self.feature), len(self.weight)
        self.roots.append(first_inner)
        self.weight.extend((baseline + nodes["value"][leaves]).tolist())
        if not len(inner):
            self._split(0, 0.0, 0, (first_leaf, first_leaf), (1, 1))
            return
        at = np.empty(len(nodes), dtype=np.int64)
        at[inner] = first_inner + np.arange(len(inner))
        at[leaves] = first_leaf + np.arange(len(leaves))
        if at[0] != first_inner:
            raise ExportError("a tree whose root is not its first node")
        for node in nodes[inner]:
            children = (int(node["left"]), int(node["right"]))
            self._split(
                int(node["feature_idx"]),
                float(node["num_threshold"]),
                int(node["missing_go_to_left"]),
                (int(at[children[0]]), int(at[children[1]])),
                (int(nodes["is_leaf"][children[0]]), int(nodes["is_leaf"][children[1]])),
            )

    def _split(
        self, feature: int, split: float, missing_left: int, child: tuple[int, int], is_leaf: tuple[int, int]
    ) -> None:
        self.feature.append(feature)
        self.split.append(split)
        self.missing_left.append(missing_left)
        for side in (0, 1):
            self.child[side].append(child[side])
            self.child_is_leaf[side].append(is_leaf[side])

    def attributes(self) -> dict[str, Any]:
        """Attributes of the operator; mode 0 is x <= split, aggregate 1 is the sum."""

        def tensor(name: str, kind: int, values: list[Any]) -> onnx.TensorProto:
            return helper.make_tensor(name, kind, [len(values)], values)

        double = onnx.TensorProto.DOUBLE
        return {
            "aggregate_function": 1,
            "n_targets": 1,
            "post_transform": 0,
            "tree_roots": self.roots,
            "nodes_featureids": self.feature,
            "nodes_modes": tensor("modes", onnx.TensorProto.UINT8, [0] * len(self.feature)),
            "nodes_splits": tensor("splits", double, self.split),
            "nodes_missing_value_tracks_true": self.missing_left,
            "nodes_truenodeids": self.child[0],
            "nodes_trueleafs": self.child_is_leaf[0],
            "nodes_falsenodeids": self.child[1],
            "nodes_falseleafs": self.child_is_leaf[1],
            "leaf_targetids": [0] * len(self.weight),
            "leaf_weights": tensor("weights", double, self.weight),
        }


_CONVERTERS: Final[dict[type, Callable[[Any, Any, Any], None]]] = {
    HistGradientBoostingRegressor: _write_boosting,
}
