"""What one decision costs: a scorer's call, a backup, and the exact methods on the same trees; floor 5.

A decision is what an agent does: raw arrays of the leaves in, the pick out, on one thread. A scorer of
records takes rows that a backup keeps up to date, which has its own time.
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from distill import schema
from distill.backup import Backup, backup_of
from distill.backup_compiled import CompiledBackup
from distill.backup_correlated import CorrelatedBackup
from distill.beliefs import gaussian_var_update
from distill.errors import InputError
from distill.fallback import spreads
from distill.metrics import Groups
from distill.pooled_trees import pooled
from distill.query import Query
from distill.runtime import Scorer
from distill.scorer_inputs import LEAF_TABLE, InputKind
from distill.tree import BeliefTree
from distill.voc import price

__all__ = [
    "Decision",
    "Timing",
    "correlated",
    "decisions",
    "time_backup",
    "time_calls",
    "time_exact",
    "time_scorer",
    "tree_decisions",
    "tree_of",
]

T = TypeVar("T")

# Powers of the unit of utility in which columns count; 0 for the others.
_POWERS = {
    **dict.fromkeys(("mean", "offset", "cost", "low", "high"), 1),
    **dict.fromkeys(("var", "noise_var"), 2),
}
_LEAST_CALLS = 3  # of an exact method, however long it takes


@dataclass(frozen=True)
class Timing:
    """Microseconds a decision over repeated calls, and how many there were."""

    p50: float
    p99: float
    calls: int

    def to_json(self) -> dict[str, float]:
        """Plain numbers for a sheet."""
        return {"p50_us": self.p50, "p99_us": self.p99, "calls": self.calls}


@dataclass(frozen=True, eq=False)
class Decision:
    """One decision to time: a scorer's columns and the rollouts left, and the same as a tree."""

    columns: Mapping[str, Any]
    remaining: int
    tree: BeliefTree


def decisions(
    columns: Mapping[str, NDArray[Any]],
    n_leaves: int,
    count: int,
    seed: int,
    *,
    kind: InputKind = LEAF_TABLE,
) -> list[Decision]:
    """Decisions of exactly `n_leaves` leaves, pooled from the rows of leaf tables.

    columns : candidate rows of many trees, of an input kind, with `tree` and `remaining`. Each decision
    pools trees drawn at random, each in units of its own scale and joined action by action, until it has
    enough leaves, so its leaves are such as the scorer meets; `remaining` comes from the first.
    """
    if not kind.has_action:
        raise InputError("kind", "must be a leaf table; records are pooled as trees", kind.name)
    rng = np.random.default_rng(seed)
    groups = Groups.of(columns["tree"])
    columns = _in_units_of_scale(columns, groups, kind)
    out = []
    for _ in range(count):
        rows: list[int] = []
        while len(rows) < n_leaves:
            t = int(rng.integers(len(groups.starts)))
            rows.extend(range(groups.starts[t], groups.starts[t] + groups.sizes[t]))
        at = np.array(rows[:n_leaves])
        at = at[np.argsort(columns["action"][at], kind="stable")]
        arrays: dict[str, Any] = {name: np.ascontiguousarray(columns[name][at]) for name in kind.columns}
        arrays["action"] = np.unique(arrays["action"], return_inverse=True)[1].astype(np.int64)
        arrays |= {name: float(columns[name][rows[0]]) for name in kind.varies}
        remaining = max(1, int(columns["remaining"][rows[0]]))
        out.append(Decision(arrays, remaining, tree_of(arrays)))
    return out


def tree_decisions(
    trees: Sequence[BeliefTree], n_leaves: int, count: int, seed: int, *, horizon: float = math.inf
) -> list[Decision]:
    """Decisions of exactly `n_leaves` leaves for scorers of records, pooled from trees of any kind.

    Each pools trees drawn at random, see `distill.pooled_trees`; its record rows come from its own backup
    at `horizon`.
    """
    rng = np.random.default_rng(seed)
    out = []
    for _ in range(count):
        tree = pooled(trees, n_leaves, rng)
        out.append(Decision(backup_of(tree, horizon).rows(), tree.remaining or 1, tree))
    return out


def _in_units_of_scale(
    columns: Mapping[str, NDArray[Any]], groups: Groups, kind: InputKind
) -> dict[str, NDArray[Any]]:
    """The same rows with each tree's scale as its unit of utility."""
    scale = groups.highest(spreads(kind, columns))
    unit = groups.spread(np.where(scale > 0, scale, 1.0))
    return {name: x / unit ** _POWERS[name] if name in _POWERS else x for name, x in columns.items()}


def tree_of(arrays: Mapping[str, NDArray[Any]]) -> BeliefTree:
    """Root, one decision node an action, and the leaves with gain and offset on their edges.

    arrays : columns of a leaf table, Gaussian or win/loss.
    """
    beliefs: dict[str, Any] = {
        name: np.array(arrays[name])
        for name in (*schema.GAUSSIAN_COLUMNS, *schema.WIN_LOSS_COLUMNS)
        if name in arrays
    }
    n, n_actions = len(arrays["action"]), int(arrays["action"].max()) + 1
    inner = 1 + n_actions
    return BeliefTree(
        parent=np.r_[-1, np.zeros(n_actions), arrays["action"] + 1].astype(np.int64),
        kind=np.r_[np.full(inner, schema.DECISION), np.full(n, schema.LEAF)].astype(np.int8),
        reward=np.r_[np.zeros(inner), arrays["offset"]],
        discount=np.r_[np.ones(inner), arrays["gain"]],
        prob=np.ones(inner + n),
        cost=np.array(arrays["cost"]),
        **beliefs,
    )


def time_scorer(scorer: Scorer, cases: Sequence[Decision], *, calls: int = 2000) -> Timing:
    """Time of `scorer.pick` on the cases in turn, after a warm-up."""

    def pick(case: Decision) -> None:
        scorer.pick(**case.columns, remaining=case.remaining)

    return _timed(pick, cases, calls, warm_up=200)


def time_exact(
    cases: Sequence[Decision],
    *,
    horizon: float = math.inf,
    batch: int | None = None,
    calls: int = 20,
    seconds: float = math.inf,
) -> Timing:
    """Time of the exact value of every candidate on the same cases; batch None is the rate.

    A case that has a horizon or a batch of its own is asked for that one.

    seconds : after which no further call begins, beyond the first three.
    """

    def act(case: Decision) -> None:
        h, k = float(case.columns.get("horizon", horizon)), case.columns.get("batch_size", batch)
        query = Query(horizon=h, batch=None if k is None else int(k), remaining=case.remaining)
        price(case.tree, query)

    return _timed(act, cases, calls, warm_up=1, seconds=seconds)


def time_backup(
    cases: Sequence[Decision], *, horizon: float = math.inf, calls: int = 200
) -> dict[str, Timing]:
    """Time of what an agent spends to have record rows, on the same cases, as parts of a decision.

    "after one rollout" : the leaf's new belief taken in and the rows of all candidates read. "one path" :
    the first half of that. "whole tree" : a backup made anew, with its rows. "after one rollout, compiled" :
    the same by `distill.backup_compiled`. Correlated leaves have no path: every leaf moves, so there all
    beliefs are taken in; and nothing of it is compiled.
    """
    kept: dict[int, Backup | CorrelatedBackup] = {id(case): backup_of(case.tree, horizon) for case in cases}
    fast = {} if correlated(cases) else {id(case): CompiledBackup(case.tree, horizon) for case in cases}
    turn = 0

    def take_in(
        case: Decision, backups: Mapping[int, Backup | CorrelatedBackup] = kept
    ) -> Backup | CorrelatedBackup:
        nonlocal turn
        turn += 1
        backup, tree = backups[id(case)], case.tree
        if isinstance(backup, CorrelatedBackup):
            backup.update(np.asarray(tree.mean), np.asarray(tree.cov))
        else:
            # A belief as a rollout leaves it; each call starts from the case's own.
            leaf = turn % tree.n_leaves
            backup.update(leaf, **_after_one(tree, leaf))
        return backup

    path = "all beliefs" if correlated(cases) else "one path"
    found = {
        path: _timed(take_in, cases, calls, warm_up=5),
        "after one rollout": _timed(lambda case: take_in(case).rows(), cases, calls, warm_up=5),
        "whole tree": _timed(lambda case: backup_of(case.tree, horizon).rows(), cases, calls, warm_up=5),
    }
    if fast:
        name = "after one rollout, compiled"
        found[name] = _timed(lambda case: take_in(case, fast).rows(), cases, calls, warm_up=5)
    return found


def correlated(cases: Sequence[Decision]) -> bool:
    """Whether any of the cases has correlated leaves."""
    return any(case.tree.cov is not None for case in cases)


def _after_one(tree: BeliefTree, leaf: int) -> dict[str, float]:
    """A leaf's belief after one rollout that returned what was expected."""
    if tree.mean is None:
        assert tree.alpha is not None
        assert tree.beta is not None
        return {"alpha": float(tree.alpha[leaf]) + 1.0, "beta": float(tree.beta[leaf])}
    assert tree.var is not None
    assert tree.noise_var is not None
    var = gaussian_var_update(float(tree.var[leaf]), float(tree.noise_var[leaf]), 1)
    return {"mean": float(tree.mean[leaf]), "var": float(var)}


def time_calls(
    act: Callable[[T], Any],
    cases: Sequence[T],
    *,
    calls: int = 2000,
    warm_up: int = 20,
    seconds: float = math.inf,
) -> Timing:
    """Time of anything that is done with a decision, on the cases in turn, after a warm-up."""
    return _timed(act, cases, calls, warm_up, seconds)


def _timed(
    act: Callable[[T], Any],
    cases: Sequence[T],
    calls: int,
    warm_up: int,
    seconds: float = math.inf,
) -> Timing:
    for i in range(warm_up):
        act(cases[i % len(cases)])
    spent = np.empty(calls)
    total, done = 0.0, 0
    for i in range(calls):
        case = cases[i % len(cases)]
        start = time.perf_counter_ns()
        act(case)
        spent[i] = time.perf_counter_ns() - start
        total, done = total + spent[i], i + 1
        if total > 1e9 * seconds and done >= _LEAST_CALLS:
            break
    p50, p99 = np.percentile(spent[:done], [50, 99]) / 1e3
    return Timing(float(p50), float(p99), done)
