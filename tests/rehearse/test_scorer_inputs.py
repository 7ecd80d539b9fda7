"""What scorers read of a tree under search: the same as of the tree made anew from its beliefs."""

from __future__ import annotations

import numpy as np
import pytest
from ladder import CLOSED_FORM

from distill.allocation import Search
from distill.backup import Backup
from distill.errors import RefusedError
from distill.rehearse.loop import Budget, decide
from distill.rehearse.problems import TreeProblem
from distill.rehearse.scorer_inputs import ScorerInputs
from distill.rehearse.value_policies import ByScorer
from distill.runtime import Scorer
from distill.scorer_inputs import KINDS, LEAF_TABLE, RECORD, WIN_LOSS_TABLE
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
    assert fits == {LEAF_TABLE: ["gaussian"], WIN_LOSS_TABLE: ["win/loss"], RECORD: list(TREES)}


@pytest.mark.parametrize("tree", TREES)
def test_a_record_scorer_searches_any_tree(tree):
    done = decide(TREES[tree].draw(1), ByScorer(reads(RECORD)), Budget(rollouts=20), np.random.default_rng(0))
    assert done.rollouts == 20
    assert done.regret >= 0
