"""Columns of a rehearsal's Parquet files: type, meaning and unit."""

from __future__ import annotations

from typing import Final

import pyarrow as pa

from distill.dataset_columns import Described
from distill.rehearse.findings import GROUPS

__all__ = ["CELL_COLUMNS"]

_F64, _TEXT = pa.float64(), pa.string()
_BEST: Final = {
    "rival": (_TEXT, "the one of them with the smallest mean regret"),
    "ratio": (_F64, "1; measured over that rival's, on the same decisions; null where the rival has none"),
    "low": (_F64, "1; lower end of the ratio's 95 % interval, decisions resampled in pairs"),
    "high": (_F64, "1; upper end of it"),
}

# Column -> (type, meaning and unit). `u` is the problem's own unit of value.
CELL_COLUMNS: Final[Described] = {
    "problem": (_TEXT, "what was searched"),
    "kind": (_TEXT, "leaves: Gaussian or win/loss, and whether there are chance nodes"),
    "regret_against": (_TEXT, "exact optimum, or rollouts at each leaf that tell what actions are worth"),
    "regret_error": (_F64, "u; standard error of a decision's regret that these leave; 0 for the optimum"),
    "budget": (_TEXT, "what a decision might cost: rollouts, or time at the cost of a rollout"),
    "rollout_seconds": (_F64, "s; stated cost of a rollout, 0 where rollouts are limited"),
    "timed": (pa.bool_(), "whether time was limited"),
    "policy": (_TEXT, "who chose the rollouts"),
    "decisions": (pa.int64(), "decisions behind the row's means"),
    "measured": (_F64, "u; mean of what is compared: the expected regret where known, else the regret"),
    "regret": (_F64, "u; mean loss of the chosen action against the best one"),
    "regret_by_mean": (_F64, "u; the same, had the action with the largest backed-up mean been chosen"),
    "expected_regret": (_F64, "u; mean regret over all that the rollouts seen leave open; null if unknown"),
    "rollouts": (_F64, "mean number spent a decision"),
    "choosing_us": (_F64, "us; time of choosing a rollout, belief update included"),
    "choosing_share": (_F64, "1; share of all time that went into choosing; null where rollouts cost none"),
    "fallback_share": (_F64, "1; share of choices that another rule made; null where none was made"),
    "stopped_share": (_F64, "1; share of decisions in which the search stopped early"),
    "low": (_F64, "u; lower end of the 95 % interval of measured, decisions resampled"),
    "high": (_F64, "u; upper end of it"),
    **{
        f"{group}_{key}": (kind, f"{what}; against the best of the group {group}")
        for group in GROUPS
        for key, (kind, what) in _BEST.items()
    },
}
