"""What a scorer file may hold, checked on its bytes before anything runs it; floor 2, light.

A file from elsewhere could make onnxruntime allocate terabytes, loop for ever or read other files. So
only what a scorer needs is let in: two operator sets at fixed versions, a short list of operators, fixed
names, types and shapes of inputs and outputs, finite constants inside the file, shapes that grow with
the leaves but not faster, and tree ensembles whose every index points where it may.

Files of the format before, which lack the output `voc_high`, are read as well.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from distill import schema
from distill.errors import ScorerFileError
from distill.onnx_reader import BOOL, DOUBLE, INT64, Model, Node, ValueInfo, read_model
from distill.scorer_inputs import KINDS, LEAF_TABLE, InputKind
from distill.scorer_shapes import OPERATORS, check_shapes

__all__ = ["FORMAT", "MAX_BYTES", "check"]

FORMAT: Final = schema.SCORER_FORMAT
_WITHOUT_BOUND: Final = "voc-scorer/1"
MAX_BYTES: Final = 16 * 2**20
_MAX_METADATA: Final = 4 * 2**20
_MAX_NODES: Final = 1000
_MAX_CASES: Final = 100

_IR_VERSION: Final = 10
_FIRST_BYTE: Final = b"\x08"  # every writer puts ir_version, field 1 as a whole number, first
_OPSETS: Final = ({"": 18}, {"": 18, "ai.onnx.ml": 5})
_METADATA: Final = ("format", "about", "features", "ranges", "self_test", "transform")
_OPTIONAL: Final = ("measured", "calibration", "input")
_TEXTS: Final = ("format", "input", "transform")
_OUTPUTS: Final[dict[str, tuple[int, tuple[str, ...]]]] = {
    "voc": (DOUBLE, ("n",)),
    "batch": (INT64, ("n",)),
    "voc_high": (DOUBLE, ("n",)),
    "in_range": (BOOL, ("n",)),
    "pick": (INT64, ()),
    "worth_it": (BOOL, ()),
}


_Ends = Mapping[str, tuple[int, tuple[str, ...]]]


def _inputs(kind: InputKind) -> _Ends:
    ends: dict[str, tuple[int, tuple[str, ...]]] = dict.fromkeys(kind.floats, (DOUBLE, ("n",)))
    if kind.has_action:
        ends["action"] = (INT64, ("n",))
    return {**ends, **dict.fromkeys(kind.scalars, (DOUBLE, ()))}


def check(data: bytes) -> dict[str, Any]:
    """Refuse bytes that are no scorer file, with the reason as ScorerFileError; returns the metadata.

    The metadata come with their JSON texts parsed. Takes well under a second whatever the bytes are.
    """
    if len(data) > MAX_BYTES:
        raise ScorerFileError(f"must be at most {MAX_BYTES} bytes; got {len(data)} or more")
    try:
        model = read_model(data)
    except ScorerFileError as e:
        if data[:1] == _FIRST_BYTE:
            raise
        raise ScorerFileError(f"is no ONNX file, as train and ship leave them ({e})") from None
    if model.ir_version != _IR_VERSION:
        raise ScorerFileError(f"ir_version must be {_IR_VERSION}; got {model.ir_version}")
    if len(dict(model.opsets)) != len(model.opsets) or dict(model.opsets) not in _OPSETS:
        raise ScorerFileError(f"operator sets must be one of {_OPSETS}; got {model.opsets}")
    facts = _facts(model)
    inputs = _inputs(KINDS[facts["input"]])
    outputs = {k: x for k, x in _OUTPUTS.items() if k != "voc_high" or facts["format"] == FORMAT}
    _check_ends(model, inputs, outputs)
    _check_constants(model, inputs)
    _check_nodes(model, inputs, outputs, len(facts["features"]))
    check_shapes(model)
    return facts


def _facts(model: Model) -> dict[str, Any]:
    """Metadata with JSON values parsed."""
    for name in _METADATA:
        if name not in model.metadata:
            raise ScorerFileError(f"metadata {name!r}: is missing; this is no scorer file")
    size = sum(len(text) for text in model.metadata.values())
    if size > _MAX_METADATA:
        raise ScorerFileError(f"metadata must be at most {_MAX_METADATA} characters; got {size}")
    facts: dict[str, Any] = {"input": LEAF_TABLE.name}  # what files say nothing of it read
    for name, text in model.metadata.items():
        if name not in _METADATA + _OPTIONAL:
            raise ScorerFileError(f"metadata {name!r}: has no place in a scorer file")
        if name in _TEXTS:
            facts[name] = text
            continue
        try:
            facts[name] = json.loads(text, parse_constant=_no_constant)
        except (ValueError, RecursionError):
            raise ScorerFileError(f"metadata {name!r}: must be JSON of finite numbers") from None
    if facts["format"] not in (FORMAT, _WITHOUT_BOUND):
        raise ScorerFileError(f"format must be {FORMAT!r}; got {facts['format'][:40]!r}")
    if facts["input"] not in KINDS:
        raise ScorerFileError(f"metadata 'input': must be one of {', '.join(KINDS)}")
    names = facts["features"]
    if not isinstance(names, list) or not names or not all(isinstance(x, str) for x in names):
        raise ScorerFileError("metadata 'features': must be a list of names")
    cases = facts["self_test"]
    if not isinstance(cases, list) or not 1 <= len(cases) <= _MAX_CASES:
        raise ScorerFileError(f"metadata 'self_test': must hold 1 to {_MAX_CASES} cases")
    return facts


def _no_constant(name: str) -> float:
    raise ValueError(name)


def _check_ends(model: Model, inputs: _Ends, outputs: _Ends) -> None:
    """Inputs and outputs are exactly those of a scorer, in any order."""
    for found, allowed, kind in ((model.inputs, inputs, "input"), (model.outputs, outputs, "output")):
        seen: set[str] = set()
        for info in found:
            if info.name not in allowed or info.name in seen:
                raise ScorerFileError(f"{kind} {info.name!r}: has no place in a scorer file")
            seen.add(info.name)
            _check_end(info, allowed[info.name], kind)
        for name in allowed:
            if name not in seen:
                raise ScorerFileError(f"{kind} {name!r}: is missing")


def _check_end(info: ValueInfo, allowed: tuple[int, tuple[str, ...]], kind: str) -> None:
    if (info.element, info.shape) != allowed:
        raise ScorerFileError(
            f"{kind} {info.name!r}: must have element type {allowed[0]} and shape {allowed[1]}; "
            f"got {info.element} and {info.shape}"
        )


def _check_constants(model: Model, inputs: _Ends) -> None:
    for name, array in model.constants.items():
        if name in inputs or name in _OUTPUTS:
            raise ScorerFileError(f"initializer {name!r}: must not stand for an input or output")
        if array.dtype.kind == "f" and not np.all(np.isfinite(array)):
            raise ScorerFileError(f"initializer {name!r}: must be finite")


def _check_nodes(model: Model, inputs: _Ends, outputs: _Ends, n_features: int) -> None:
    """Allowed operators, every input known before it is read, every output new."""
    if len(model.nodes) > _MAX_NODES:
        raise ScorerFileError(f"must have at most {_MAX_NODES} nodes; got {len(model.nodes)}")
    known = {*inputs, *model.constants}
    for node in model.nodes:
        name = f"{node.domain}:{node.op}" if node.domain else node.op
        if name not in OPERATORS:
            raise ScorerFileError(f"operator {name!r}: is not allowed in a scorer file")
        for value in node.inputs:
            if value not in known:
                raise ScorerFileError(f"operator {name!r} reads {value!r}, which is not computed before it")
        for value in node.outputs:
            if not value or value in known:
                raise ScorerFileError(f"operator {name!r} writes {value!r}, which must be a new name")
            known.add(value)
        if node.op == "TreeEnsemble":
            _check_ensemble(node, n_features)
    for value in outputs:
        if value not in known:
            raise ScorerFileError(f"output {value!r}: is not computed")


def _check_ensemble(node: Node, n_features: int) -> None:
    """Every index of a tree ensemble points where it may; trees have no cycle; values are finite."""
    a = node.attributes
    for name, value in (("aggregate_function", 1), ("post_transform", 0), ("n_targets", 1)):
        if a.get(name) != value:
            raise ScorerFileError(f"TreeEnsemble {name}: must be {value}")
    # Bounds are told by one more than the features; `scorer_shapes` knows the width that is there.
    inner = _column(a, "nodes_featureids", None, 0, n_features + 1)
    n = len(inner)
    leaves = len(_column(a, "leaf_targetids", None, 0, 1))
    _column(a, "tree_roots", None, 0, n)
    _column(a, "nodes_missing_value_tracks_true", n, 0, 2)
    for side in ("true", "false"):
        is_leaf = _column(a, f"nodes_{side}leafs", n, 0, 2).astype(bool)
        child = _column(a, f"nodes_{side}nodeids", n, 0, max(n, leaves))
        if np.any(child[is_leaf] >= leaves) or np.any(child[~is_leaf] >= n):
            raise ScorerFileError(f"TreeEnsemble nodes_{side}nodeids: must point to a node or leaf there is")
        if np.any(child[~is_leaf] <= np.flatnonzero(~is_leaf)):
            raise ScorerFileError(f"TreeEnsemble nodes_{side}nodeids: must point onward, to a later node")
    for name, size, kind in (
        ("nodes_splits", n, "f"),
        ("leaf_weights", leaves, "f"),
        ("nodes_modes", n, "u"),
    ):
        column = a.get(name)
        if not isinstance(column, np.ndarray) or column.shape != (size,) or column.dtype.kind != kind:
            raise ScorerFileError(f"TreeEnsemble {name}: must have {size} values")
        if np.any(np.isnan(column)) if name == "nodes_splits" else not np.all(np.isfinite(column)):
            raise ScorerFileError(f"TreeEnsemble {name}: must be finite")
    if np.any(a["nodes_modes"] != 0):
        raise ScorerFileError("TreeEnsemble nodes_modes: must be 0, x <= split")
    known = {"aggregate_function", "post_transform", "n_targets", "nodes_featureids", "leaf_targetids"}
    known |= {"tree_roots", "nodes_missing_value_tracks_true", "nodes_splits", "leaf_weights", "nodes_modes"}
    known |= {f"nodes_{side}{what}" for side in ("true", "false") for what in ("leafs", "nodeids")}
    for name in a:
        if name not in known:
            raise ScorerFileError(f"TreeEnsemble {name}: has no place in a scorer file")


def _column(
    attributes: dict[str, Any], name: str, size: int | None, least: int, above: int
) -> NDArray[np.int64]:
    """A list of whole numbers from `least` to `above` - 1."""
    column = attributes.get(name)
    if not isinstance(column, np.ndarray) or column.dtype.kind != "i" or column.ndim != 1:
        raise ScorerFileError(f"TreeEnsemble {name}: must be a list of whole numbers")
    if len(column) == 0 or (size is not None and len(column) != size):
        raise ScorerFileError(f"TreeEnsemble {name}: must have {size or 'some'} values; got {len(column)}")
    if column.min() < least or column.max() >= above:
        raise ScorerFileError(f"TreeEnsemble {name}: must be from {least} to {above - 1}")
    return column
