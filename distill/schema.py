"""Names, units and versions of everything that crosses a boundary; floor 0, light.

Each format is defined here once. Bump a version when a reader of the old one would misread the new
one, and say in DEVELOPERS.md what changed.
"""

from __future__ import annotations

from typing import Final

TREE_FORMAT: Final = "belief-tree/1"
DATASET_FORMAT: Final = "voc-dataset/1"
AUDIT_FORMAT: Final = "voc-audit/1"
SCORER_FORMAT: Final = "voc-scorer/2"  # 2: with the output voc_high
FAMILY_FORMAT: Final = "tree-family/1"

# Node kinds: the names in records, and their codes in arrays.
KINDS: Final = ("decision", "chance", "leaf")
DECISION: Final = 0
CHANCE: Final = 1
LEAF: Final = 2

# Leaf columns by belief kind, in record order.
GAUSSIAN_COLUMNS: Final = ("mean", "var", "noise_var")
WIN_LOSS_COLUMNS: Final = ("alpha", "beta", "low", "high")
RECORD_KEYS: Final = (
    "format", "parent", "kind", "reward", "discount", "prob",
    *GAUSSIAN_COLUMNS, *WIN_LOSS_COLUMNS,
    "count", "cost", "cov", "horizon", "batch", "remaining", "id", "extra",
)  # fmt: skip

# The largest magnitude of a utility, and of a variance, that a record may hold: their squares and
# sums over a tree stay far inside double precision's range.
MAX_UTILITY: Final = 1e100
MAX_VARIANCE: Final = 1e200
MAX_ROLLOUTS: Final = 2**53  # whole numbers beyond are not exact in double precision

# Leaf table: column -> unit. `u` is the tree's unit of utility.
LEAF_TABLE_UNITS: Final = {
    "mean": "u (before gain)",
    "var": "u^2 (before gain)",
    "noise_var": "u^2 a rollout (before gain)",
    "gain": "1; product of the discounts from the root",
    "offset": "u; discounted rewards from the root",
    "action": "0-based position of the root action",
    "cost": "u a rollout",
}
# Record: one row a candidate, filled by `distill.backup`; chance nodes and correlation. A move of 1 is one
# standard deviation of the leaf, with all that it moves beside the leaf.
RECORD_VERSION: Final = 1
RECORD_UNITS: Final = {
    "crossing": "1; move at which another action becomes the best; below 0: as the leaf falls",
    "slope": "u; at the crossing, how fast the other action gains on the best one, a move of 1",
    "bend": "1; d log(slope) / d move at the crossing; above 0 where further moves gain ever faster",
    "now": "1; the same slope at present, over `slope`",
    "other_crossing": "1; the crossing of lesser value, on the other side of 0; 0 where there is none",
    "other_slope": "u; slope there; 0 where there is none",
    "spread": "u; the most that a move of 1 can change the difference of two actions, however far it goes",
    "noise_ratio": "1; noise variance of one rollout over the leaf's variance, alpha + beta for win/loss",
    "cost": "u a rollout",
}
