"""Recorded trees as rows of each input, with the exact labels of what a scorer is asked."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from builders import bush, chance_record, flat_record, win_loss_record

from distill import voc
from distill.backup import backup_of
from distill.errors import InputError, RefusedError
from distill.labelling import Asked
from distill.query import Query
from distill.record import from_record
from distill.recorded import label, refused, rows_of, unlabelled
from distill.scorer_inputs import LEAF_TABLE, RECORD, WIN_LOSS_TABLE, InputKind
from distill.tree import BeliefTree, leaf_table


def correlated() -> BeliefTree:
    tree = from_record(flat_record(remaining=5))
    assert tree.var is not None
    cov = np.diag(tree.var)
    return replace(tree, var=None, cov=cov)


TREES: dict[str, BeliefTree] = {
    "flat": from_record(flat_record(remaining=5)),
    "chance": from_record(chance_record(remaining=6)),
    "wins": from_record(win_loss_record(remaining=7)),
    "cov": correlated(),
}


@pytest.mark.parametrize(
    ("kind", "held"),
    [(LEAF_TABLE, {"flat"}), (WIN_LOSS_TABLE, {"wins"}), (RECORD, set(TREES))],
    ids=lambda x: getattr(x, "name", ""),
)
def test_each_input_holds_its_own_trees(kind: InputKind, held: set[str]) -> None:
    assert {name for name, tree in TREES.items() if refused(tree, kind) is None} == held
    for name, tree in TREES.items():
        if name in held:
            rows = rows_of(tree, kind, math.inf)
            assert tuple(rows) == kind.inputs
            assert all(x.shape == (tree.n_leaves,) for x in rows.values())
            assert set(rows["remaining"]) == {tree.remaining}
        else:
            with pytest.raises(RefusedError, match=r"leaf table cannot hold|does not read"):
                rows_of(tree, kind, math.inf)


def test_rows_are_those_of_the_leaf_table_and_of_the_backup() -> None:
    table = leaf_table(TREES["wins"])
    for name, x in rows_of(TREES["wins"], WIN_LOSS_TABLE, 2.0).items():
        if name != "remaining":
            np.testing.assert_array_equal(x, getattr(table, name))
    for h in (0.0, 2.0, math.inf):
        for tree in TREES.values():
            rows = rows_of(tree, RECORD, h)
            for name, x in backup_of(tree, h).rows().items():
                np.testing.assert_array_equal(rows[name], x)
    deep = bush([[0.0, 0.2], [0.1, 0.3]], [[1.0, 1.0], [1.0, 2.0]])
    near, far = (rows_of(deep, RECORD, h) for h in (1.0, 9.0))
    assert any(np.any(near[name] != far[name]) for name in RECORD.columns)


@pytest.mark.parametrize("batch", [None, 2])
def test_labels_are_those_of_the_engine_in_order(batch: int | None) -> None:
    mixed = [TREES["flat"], TREES["wins"], TREES["chance"], replace(TREES["flat"], remaining=None)]
    found = label(mixed, RECORD, Asked(horizon=0.0, batch=batch))
    assert found.kept == [0, 1, 2]
    assert dict(found.aside) == {"remaining: is missing": 1}
    assert found.candidates.kind is RECORD
    assert found.candidates.is_rate == (batch is None)
    for position, i in enumerate(found.kept):
        own = found.candidates.tree == position
        exact = voc.price(mixed[i], Query(horizon=0.0, batch=batch, remaining=mixed[i].remaining))
        np.testing.assert_array_equal(found.candidates.label[own], exact.voc)
        np.testing.assert_array_equal(found.candidates.batch[own], exact.batch)
        np.testing.assert_array_equal(found.candidates.error[own], exact.error)


def test_what_no_method_prices_is_aside_with_its_reason() -> None:
    """Win/loss horizons are whole; Gaussian ones are not."""
    found = label([TREES["flat"], TREES["wins"]], RECORD, Asked(horizon=2.5))
    assert found.kept == [0]
    assert sum(found.aside.values()) == 1
    assert "whole" in next(iter(found.aside))
    with pytest.raises(InputError, match=r"can be asked about .aside: 1 Gaussian leaves"):
        label([TREES["flat"]], WIN_LOSS_TABLE, Asked(horizon=math.inf))
    with pytest.raises(InputError, match="horizon: must be given"):
        label([TREES["flat"]], LEAF_TABLE, Asked())


def test_stages_of_one_decision_share_a_number() -> None:
    def named(**extra: Any) -> BeliefTree:
        return replace(TREES["wins"], extra=extra)

    trees = [named(decision=3), named(decision=4), named(note=1), named(decision=3)]
    asked = Asked(horizon=0.0)
    found = label(trees, WIN_LOSS_TABLE, asked).candidates
    assert found.clusters is not None
    assert found.clusters.tolist() == [0, 1, 2, 0]
    assert label([TREES["wins"]], WIN_LOSS_TABLE, asked).candidates.decision is None


def test_rows_without_labels() -> None:
    trees = [TREES["wins"], replace(TREES["wins"], remaining=None)]
    found = unlabelled(trees, WIN_LOSS_TABLE, math.inf)
    assert found.groups.sizes.tolist() == [t.n_leaves for t in trees]
    assert not found.label.any()
    assert set(found.columns["remaining"]) == {7.0, 0.0}
