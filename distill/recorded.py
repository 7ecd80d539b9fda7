"""Recorded trees as the labelled rows that a scorer of some kind would be asked about; floor 5.

Trees that its input cannot hold, and those that no exact method prices, go aside with the reason.
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from distill import voc
from distill.backup import backup_of
from distill.candidates import Candidates
from distill.errors import DistillError, InputError, RefusedError
from distill.labelling import OWN_BATCH, Asked
from distill.query import Priced, Query
from distill.scorer_inputs import ANY_BATCH, RECORD, WIN_LOSS_TABLE, InputKind
from distill.terminal import bar
from distill.tree import BeliefTree, leaf_table
from distill.tree_columns import decision_key

__all__ = ["Labels", "decision_numbers", "label", "refused", "rows_of", "unlabelled"]

Row = Mapping[str, NDArray[np.float64] | NDArray[np.int64]]


@dataclass(frozen=True, eq=False)
class Labels:
    """candidates : the rows. kept : position of each row's tree among those given, a number a tree.
    aside : reason -> how many trees were left aside for it."""

    candidates: Candidates
    kept: list[int]
    aside: Counter[str]


def refused(tree: BeliefTree, kind: InputKind) -> str | None:
    """Why an input cannot hold a tree; None where it can.

    >>> from distill.record import from_record
    >>> from distill.scorer_inputs import LEAF_TABLE
    >>> coins = from_record({"format": "belief-tree/1", "parent": [-1, 0], "kind": ["decision", "leaf"],
    ...     "alpha": [None, 1], "beta": [None, 1], "low": [None, 0], "high": [None, 1]})
    >>> refused(coins, LEAF_TABLE)
    'win/loss leaves, which this scorer does not read'
    >>> refused(coins, RECORD)
    """
    if kind is RECORD:
        return None
    wanted = "win_loss" if kind is WIN_LOSS_TABLE else "gaussian"
    if tree.belief != wanted:
        found = "win/loss" if tree.belief == "win_loss" else "Gaussian"
        return f"{found} leaves, which this scorer does not read"
    if tree.has_chance:
        return f"chance nodes, which a {kind.name} cannot hold"
    if tree.cov is not None:
        return f"correlated leaves, which a {kind.name} cannot hold"
    return None


def rows_of(tree: BeliefTree, kind: InputKind, horizon: float | None) -> Row:
    """The inputs of one tree as a scorer of `kind` takes them, each of shape (n_leaves,).

    horizon : of the scorer's value, at which a backup fills records; None takes the tree's own, infinite
    where it states none. A tree without `remaining` has 0 left, one without `batch` rolls out one by one.
    Raises RefusedError where the input cannot hold the tree.
    """
    h = horizon if horizon is not None else math.inf if tree.horizon is None else tree.horizon
    why = refused(tree, kind)
    if why is not None:
        raise RefusedError(why)
    if kind is RECORD:
        columns = backup_of(tree, h).rows()
    else:
        table = leaf_table(tree)
        columns = {name: getattr(table, name) for name in kind.columns}
    scalars = {"remaining": float(tree.remaining or 0), "horizon": h, "batch_size": float(tree.batch or 1)}
    return {**columns, **{name: np.full(tree.n_leaves, scalars[name]) for name in kind.scalars}}


def label(trees: Sequence[BeliefTree], kind: InputKind, asked: Asked, *, progress: bool = False) -> Labels:
    """Exact labels of what a scorer of `kind` is asked, tree by tree.

    asked : with a horizon, or for scorers of any horizon without, and for those of any batch with the tree's
    own; every tree brings its own `remaining`.
    Raises InputError where no tree is left.
    """
    if asked.horizon is None and "horizon" not in kind.varies:
        raise InputError("horizon", "must be given: it is one for a scorer")
    if (asked.batch == OWN_BATCH) != ("batch_size" in kind.varies):
        raise InputError(
            "batch", f"must be the tree's own for a {ANY_BATCH.name} and for no other input", asked.batch
        )
    aside: Counter[str] = Counter()
    queries: dict[Query, list[int]] = {}
    rows: dict[int, Row] = {}
    for i, tree in enumerate(trees):
        try:
            if tree.remaining is None:
                raise InputError("remaining", "is missing")
            query = replace(asked.query(tree), remaining=tree.remaining)
            rows[i] = rows_of(tree, kind, asked.horizon)
            queries.setdefault(query, []).append(i)
        except DistillError as e:
            aside[str(e)] += 1
    priced: dict[int, Priced] = {}
    with bar("exact labels", len(rows), "trees", shown=progress) as advance:
        for query, group in queries.items():
            for i, answer in zip(group, _price([trees[i] for i in group], query), strict=True):
                if isinstance(answer, Priced):
                    priced[i] = answer
                else:
                    aside[answer] += 1
            advance(len(group))
    kept = sorted(priced)
    if not kept:
        why = "; ".join(f"{n} {reason}" for reason, n in aside.items())
        raise InputError("traces", f"must hold a tree that the scorer can be asked about (aside: {why})")
    joined = _joined([rows[i] for i in kept], [priced[i] for i in kept], kind, asked.batch is None)
    decision = decision_numbers([trees[i] for i in kept])
    if decision is not None:
        joined = replace(joined, decision=joined.groups.spread(decision))
    return Labels(joined, kept, aside)


def unlabelled(trees: Sequence[BeliefTree], kind: InputKind, horizon: float | None) -> Candidates:
    """Rows of trees that the input holds, with labels of 0: for what depends on the trees alone."""
    none = [np.zeros(t.n_leaves) for t in trees]
    blank = [Priced(x, x.astype(np.int64), x, x, "") for x in none]
    return _joined([rows_of(t, kind, horizon) for t in trees], blank, kind, True)


def decision_numbers(trees: Sequence[BeliefTree]) -> NDArray[np.uint64] | None:
    """A number a tree, the same for stages of one decision; None where no record names its decision."""
    keys = [decision_key(tree) for tree in trees]
    if not any(key is not None for key in keys):
        return None
    numbers: dict[str, int] = {}
    names = [key if key is not None else f"tree {i}" for i, key in enumerate(keys)]
    return np.array([numbers.setdefault(name, len(numbers)) for name in names], dtype=np.uint64)


def _price(trees: list[BeliefTree], query: Query) -> list[Priced | str]:
    try:
        return list(voc.price_many(trees, query))
    except (InputError, RefusedError) as e:  # such as a horizon that win/loss leaves cannot have
        if len(trees) > 1:
            return [answer for tree in trees for answer in _price([tree], query)]
        return [str(e)]


def _joined(rows: Sequence[Row], priced: Sequence[Priced], kind: InputKind, is_rate: bool) -> Candidates:
    return Candidates(
        {name: np.concatenate([row[name] for row in rows]) for name in kind.inputs},
        np.repeat(np.arange(len(rows)), [len(row["remaining"]) for row in rows]),
        np.concatenate([p.voc for p in priced]),
        np.concatenate([p.batch for p in priced]).astype(float),
        np.concatenate([p.error for p in priced]),
        is_rate,
        kind=kind,
    )
