"""Columns of a dataset's files: type, meaning and unit, and how a Parquet file tells them; floor 0."""

from __future__ import annotations

import json
from collections.abc import Mapping
from typing import Final

import pyarrow as pa

__all__ = [
    "ASIDE_LABELS",
    "CANDIDATE_COLUMNS",
    "FLOATS",
    "LEAF_COLUMNS",
    "TREE_COLUMNS",
    "TREE_LABELS",
    "Described",
    "described_columns",
    "described_schema",
]

Described = dict[str, tuple[pa.DataType, str]]

_I32, _I64, _F64, _TEXT = pa.int32(), pa.int64(), pa.float64(), pa.string()
FLOATS = pa.list_(_F64)

# Column -> (type, meaning and unit). `u` is the tree's unit of utility.
LEAF_COLUMNS: Final = {
    "mean": "u; posterior mean of the leaf value",
    "var": "u^2; posterior variance of the leaf value (diagonal of the covariance, where there is one)",
    "noise_var": "u^2; variance of one rollout around the leaf value",
    "alpha": "1; Beta belief over the win probability",
    "beta": "1; Beta belief over the win probability",
    "low": "u; value of a loss",
    "high": "u; value of a win",
    "count": "rollouts so far",
    "cost": "u a rollout",
}
_WEIGHT: Final = "1; how many of the source's trees this one stands for, against the average; 1 where all do"
TREE_COLUMNS: Final[Described] = {
    "tree": (_I64, "number of the tree in this dataset"),
    "weight": (_F64, _WEIGHT),
    "source": (_TEXT, "what the tree comes from: a family, or recorded trees"),
    "draw": (_I64, "number of the tree in its source"),
    "parent": (pa.list_(_I32), "per node: its parent, -1 for the root; parents come before children"),
    "kind": (pa.list_(pa.int8()), "per node: 0 decision, 1 chance, 2 leaf"),
    "reward": (FLOATS, "u; per node: reward of the edge into it"),
    "discount": (FLOATS, "1; per node: discount of the edge into it"),
    "prob": (FLOATS, "1; per node: probability of the edge into it, 1 unless under a chance node"),
    **{name: (FLOATS, f"per leaf, in node order: {what}") for name, what in LEAF_COLUMNS.items()},
    "cov": (FLOATS, "u^2; leaves x leaves, row by row: covariance of the leaf values; then var is null"),
    "horizon": (_F64, "rollouts a leaf still receives; the record's, null if it gave none"),
    "batch": (_I64, "rollouts a candidate; the record's, null if it gave none"),
    "remaining": (_I64, "rollouts left; the record's, null if it gave none"),
    "id": (_TEXT, "the record's id, as JSON"),
    "extra": (_TEXT, "the record's extra, as JSON"),
}
TREE_LABELS: Final[Described] = {
    "value": (FLOATS, "u; per root action, in child order: exact value V_h"),
    "method": (_TEXT, "name of the exact method"),
}
ASIDE_LABELS: Final[Described] = {
    "reason": (_TEXT, "why the tree is not among the labelled ones"),
    "label": (
        FLOATS,
        "per leaf: the value reached, beyond the tolerance; null where no method prices the tree",
    ),
    "error": (FLOATS, "per leaf: bound on the absolute error of label; null with it"),
}
CANDIDATE_COLUMNS: Final[Described] = {
    "tree": (_I64, "number of the tree in this dataset"),
    "weight": (_F64, _WEIGHT),
    "leaf": (_I32, "0-based position of the leaf, in node order"),
    "action": (_I32, "0-based position of the leaf's root action, in child order"),
    "gain": (_F64, "1; product of the discounts from the root; null where a leaf table cannot hold the tree"),
    "offset": (_F64, "u; discounted rewards from the root; null where a leaf table cannot hold the tree"),
    **{name: (_F64, what) for name, what in LEAF_COLUMNS.items()},
    "remaining": (_I64, "rollouts left, as the label assumes; null where neither record nor query gave it"),
    "horizon": (_F64, "rollouts a leaf still receives, as the label assumes; 0 static, inf dynamic"),
    "batch": (_I64, "rollouts of the candidate; null where the label is a rate"),
    "label": (_F64, "exact VOC, u; where batch is null the rate, u a rollout"),
    "label_batch": (_I64, "rollouts that the label assumes: the batch, or the best one of the rate"),
    "error": (_F64, "bound on the absolute error of label, same unit"),
}


def described_columns() -> dict[str, dict[str, str]]:
    """File kind -> column -> meaning and unit, as the Parquet metadata has them."""
    kinds = {
        "trees": TREE_COLUMNS | TREE_LABELS,
        "candidates": CANDIDATE_COLUMNS,
        "aside": TREE_COLUMNS | ASIDE_LABELS,
    }
    return {kind: {name: what for name, (_, what) in columns.items()} for kind, columns in kinds.items()}


def described_schema(columns: Described, about: Mapping[str, str]) -> pa.Schema:
    """A Parquet schema that tells each column's meaning and unit, in its field and all together.

    about : what else stands in the file's metadata.
    """
    told = {name: what for name, (_, what) in columns.items()}
    fields = [
        pa.field(name, kind, metadata={"description": told[name]}) for name, (kind, _) in columns.items()
    ]
    return pa.schema(fields, metadata={**about, "columns": json.dumps(told)})
