"""What scorers read of a tree under search: the same as of the tree made anew from its beliefs."""

from __future__ import annotations

import math

import numpy as np
import pytest
from dense_trees import two_level
from ladder import CLOSED_FORM

from distill.allocation import Search
from distill.backup import Backup, backup_of
from distill.errors import InputError, RefusedError
from distill.rehearse.loop import Budget, decide
from distill.rehearse.problems import TreeProblem
from distill.rehearse.scorer_inputs import ScorerInputs
from distill.rehearse.value_policies import ByScorer
from distill.runtime import Scorer
from distill.scorer_inputs import ANY_BATCH, ANY_HORIZON, KINDS, LEAF_TABLE, RECORD, WIN_LOSS_TABLE
from distill.tree import leaf_table

TREES = {
    "gaussian": TreeProblem(3, 2, 2),
    "win/loss": TreeProblem(3, 2, 2, noise_var=None),
    "chance": TreeProblem(2, 2, 3, chance=True),
    "win/loss, chance": TreeProblem(2, 2, 3, noise_var=None, chance=True),
}


def reads(kind):
    """A scorer of one kind of inputs; having no file, it answers by the closed form."""
    return Scorer({"input": kind.name})


@pytest.mark.parametrize(("tree", "kind"), [(t, k) for t in TREES for k in KINDS.values()])
def test_columns_follow_the_beliefs(tree, kind, monkeypatch):
    draw = TREES[tree].draw(0)
    scorer = reads(kind)
    if not ScorerInputs.fit(scorer, draw.tree):
        with pytest.raises(RefusedError, match="the file does not read such trees"):
            ScorerInputs(scorer, draw.tree)
        return
    inputs, search = ScorerInputs(scorer, draw.tree), Search(draw.tree)
    for leaf in [0, 3, 3, 5, 1, 0, 2, 4]:
        search.observe(leaf, draw.roll(leaf))
        inputs.observe(search, leaf)
    seen = {}
    monkeypatch.setattr(scorer, "score", lambda **columns: seen.update(columns))
    inputs.score(search, 7)
    assert seen.pop("remaining") == 7
    if kind is ANY_HORIZON:
        assert seen.pop("horizon") == math.inf
    if kind is ANY_BATCH:
        assert seen.pop("batch_size") == 1
    now = search.tree()
    table = None if kind is RECORD else leaf_table(now)
    wanted = Backup(now).rows() if table is None else {name: getattr(table, name) for name in kind.columns}
    assert set(seen) == set(wanted) == set(kind.columns)
    for name, column in wanted.items():
        assert np.allclose(seen[name], column, rtol=CLOSED_FORM, atol=0), name


def test_every_kind_takes_the_trees_that_it_can_hold():
    fits = {
        kind: [name for name, p in TREES.items() if ScorerInputs.fit(reads(kind), p.draw(0).tree)]
        for kind in KINDS.values()
    }
    assert fits == {
        LEAF_TABLE: ["gaussian"],
        ANY_HORIZON: ["gaussian"],
        ANY_BATCH: ["gaussian"],
        WIN_LOSS_TABLE: ["win/loss"],
        RECORD: list(TREES),
    }


@pytest.mark.parametrize("tree", TREES)
def test_a_record_scorer_searches_any_tree(tree):
    done = decide(TREES[tree].draw(1), ByScorer(reads(RECORD)), Budget(rollouts=20), np.random.default_rng(0))
    assert done.rollouts == 20
    assert done.regret >= 0


def test_a_files_own_horizon_is_the_backups():
    """Rows at h = 2 differ from those at infinity, and are those of a backup at h = 2, rollouts taken in."""
    draw = TREES["chance"].draw(0)
    search = Search(draw.tree)
    about = {"value": {"horizon": 2.0, "batch": None}}
    inputs = ScorerInputs(Scorer({"input": RECORD.name, "about": about}), draw.tree)
    search.observe(1, draw.roll(1))
    inputs.observe(search, 1)
    found, wanted = inputs._columns(search), Backup(search.tree(), 2.0).rows()
    for name, column in wanted.items():
        assert np.allclose(found[name], column, rtol=CLOSED_FORM, atol=0), name
    assert not np.allclose(found["crossing"], Backup(search.tree()).rows()["crossing"])


@pytest.mark.parametrize("horizon", ["soon", -1, None])
def test_a_horizon_that_is_none_is_one_clear_error(horizon):
    scorer = Scorer({"input": RECORD.name, "about": {"value": {"horizon": horizon}}})
    with pytest.raises(InputError, match="about: value: horizon: must be a number >= 0"):
        ScorerInputs(scorer, TREES["chance"].draw(0).tree)


def test_correlated_leaves_are_read_by_records_only():
    """What one leaf shows moves all rows: they are those of the posterior made anew, to rounding."""
    cov = 0.5 + 0.5 * np.eye(4)
    tree = two_level([[0.0, 0.2], [0.1, 0.3]], cov)
    assert [k.name for k in KINDS.values() if ScorerInputs.fit(reads(k), tree)] == ["record"]
    search, inputs = Search(tree), ScorerInputs(reads(RECORD), tree)
    first = inputs._columns(search)
    for leaf, observed in [(0, 1.0), (3, -0.5), (0, 0.7)]:
        search.observe(leaf, observed)
        inputs.observe(search, leaf)
    found, wanted = inputs._columns(search), backup_of(search.tree()).rows()
    for name, column in wanted.items():
        assert np.allclose(found[name], column, rtol=CLOSED_FORM, atol=0), name
    assert (found["noise_ratio"] > first["noise_ratio"]).all()  # leaves without a rollout too
