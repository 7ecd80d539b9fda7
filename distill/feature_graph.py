"""Feature graphs at work: the same nodes in training as in a scorer file; floor 4."""

from __future__ import annotations

import json
from collections.abc import Mapping
from itertools import pairwise
from typing import Any

import numpy as np
import onnx
import onnxruntime as ort
from numpy.typing import NDArray

from distill import features, features_any_horizon, features_record, features_win_loss
from distill.errors import InputError
from distill.feature_nodes import FeatureMatrix
from distill.scorer_inputs import ANY_BATCH, ANY_HORIZON, KINDS, LEAF_TABLE, RECORD, WIN_LOSS_TABLE, InputKind

__all__ = ["FeatureGraph", "FeatureMatrix"]


class FeatureGraph:
    """The feature graph in a session with one thread.

    model : a graph as `build_graph` of one of the feature modules makes it; None builds that of the Gaussian
    leaf table. kind : what it reads. names : of its columns.
    """

    def __init__(self, model: onnx.ModelProto | None = None) -> None:
        self.model = features.build_graph() if model is None else model
        about = {p.key: p.value for p in self.model.metadata_props}
        self.kind: InputKind = KINDS[about["input"]]
        self.names: tuple[str, ...] = tuple(json.loads(about["features"]))
        options = ort.SessionOptions()
        options.intra_op_num_threads = options.inter_op_num_threads = 1
        options.enable_mem_reuse = False  # a tenth faster
        self._session = ort.InferenceSession(
            self.model.SerializeToString(deterministic=True), options, providers=["CPUExecutionProvider"]
        )

    @classmethod
    def of_value(
        cls, value: Mapping[str, Any], kind: InputKind = LEAF_TABLE, *, lean: bool = False
    ) -> FeatureGraph:
        """The graph for a dataset's `value`: its horizon, and its batch or None for the rate; or VARIES.

        lean : the one with fewer nodes; InputError where there is none, see `has_lean`.
        """
        batch = value["batch"]
        if lean:
            if not cls.has_lean(value, kind):
                raise InputError(
                    "lean features", "are those of dynamic values of a Gaussian leaf table", kind.name
                )
            return cls(features.build_graph(batch=batch, lean=True))
        if kind is ANY_HORIZON:
            return cls(features_any_horizon.build_graph(batch=batch))
        if kind is RECORD:
            return cls(features_record.build_graph(batch=batch))
        horizon = float(value["horizon"])
        build = features_win_loss.build_graph if kind is WIN_LOSS_TABLE else features.build_graph
        return cls(build(horizon=horizon, batch=batch))

    @staticmethod
    def has_lean(value: Mapping[str, Any], kind: InputKind) -> bool:
        """Whether there are lean features too."""
        return kind in (LEAF_TABLE, ANY_BATCH) and value["horizon"] == "inf"

    def matrix(self, columns: Mapping[str, Any]) -> FeatureMatrix:
        """Features of every row, tree by tree, exactly as a scorer meets them.

        columns : the inputs of its kind, each of length n; those of `kind.scalars` may be scalars. `tree`
        (whole numbers, equal ones side by side) says which rows belong together; without it all do.
        Raises InputError for a missing column, unequal lengths or a split tree.
        """
        names = ["features", "unit", "first_order", "batch", "leaf_sd"]
        parts = [self._session.run(names, feed) for feed in self.table(columns)]
        if not parts:
            none = np.empty(0)
            x = np.empty((0, len(self.names)), np.float32)
            return FeatureMatrix(x, none, none, none.astype(np.int64), none)
        return FeatureMatrix(*(np.concatenate(part) for part in zip(*parts, strict=True)))

    def table(self, columns: Mapping[str, Any]) -> list[dict[str, NDArray[Any]]]:
        """The graph's inputs, one dictionary a tree; columns and errors as for `matrix`."""
        table = {}
        for name in self.kind.inputs:
            if name not in columns:
                raise InputError(name, "is missing")
            dtype = np.int64 if name == "action" else np.float64
            table[name] = np.ascontiguousarray(columns[name], dtype=dtype)
        n = table[self.kind.floats[0]].size
        for name in self.kind.scalars:
            if table[name].size == 1:
                table[name] = np.full(n, table[name].item())
        for name, column in table.items():
            if column.shape != (n,):
                raise InputError(name, f"must have {n} rows, as {self.kind.floats[0]!r}", column.shape)
        feeds = []
        for a, b in pairwise(_tree_starts(columns.get("tree"), n)):
            feed = {name: column[a:b] for name, column in table.items()}
            feed |= {name: feed[name][:1].reshape(()) for name in self.kind.scalars}
            feeds.append(feed)
        return feeds


def _tree_starts(tree: Any, n: int) -> list[int]:
    """First row of each tree, and n at the end."""
    if tree is None:
        return [0, n] if n else [0]
    tree = np.asarray(tree)
    if tree.shape != (n,):
        raise InputError("tree", f"must have {n} rows, one a leaf", tree.shape)
    starts = [0, *(np.flatnonzero(tree[1:] != tree[:-1]) + 1).tolist()] if n else []
    if len(np.unique(tree)) != len(starts):
        raise InputError("tree", "rows of one tree must be side by side")
    return [*starts, n]
