"""Names, units and versions of everything that crosses a boundary; floor 0, light.

Each format is defined here once. Bump a version when a reader of the old one would misread the new
one, and say in DEVELOPERS.md what changed.
"""

from __future__ import annotations

from typing import Final

TREE_FORMAT: Final = "belief-tree/1"
DATASET_FORMAT: Final = "voc-dataset/1"
SCORER_FORMAT: Final = "voc-scorer/1"
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
SCORER_OUTPUTS: Final = ("voc", "batch", "voc_high", "in_range", "pick", "worth_it")
