"""Which leaf gets the next rollout: four allocation rules on one posterior; floor 2.

even          the leaf with the fewest rollouts, ties at random
uct           down from the root to the child with the largest backed-up mean + c sqrt(ln N / N_child);
              children without a rollout first (Kocsis and Szepesvari 2006, section 2.3)
thompson      one draw of every leaf value from its belief, then the leaf that the best plan under that
              draw reaches (Thompson 1933)
static_rate   the leaf whose static value of k rollouts, divided by k, is largest over k = 1, 2, 4, ...
              up to the rollouts left (a coarse grid of KG(*), Frazier and Powell 2010)

Chance nodes on the way down are passed by drawing a child with its probability. With `cov`, rules
`thompson` and `static_rate` look at each leaf's own mean and variance; posterior updates use all of `cov`.
These rules make trees like those a search meets and drive the reference search; exact values of
computation come from `distill.voc`.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from distill import schema
from distill.allocation_rules import RULES, Belief, Topology, observe, pick, run, scale
from distill.beliefs import dense_gaussian_update, win_loss_mean, win_loss_noise_var, win_loss_var
from distill.errors import InputError
from distill.tree import BeliefTree, Floats

__all__ = ["RULES", "Search"]


class Search:
    """A belief tree under search: picks leaves by rule, and takes in what their rollouts returned.

    tree : the tree to start from; its `count` is kept (0 where unknown). It is copied, not changed.

    >>> from distill.record import from_record
    >>> t = from_record({"format": "belief-tree/1", "parent": [-1, 0, 0],
    ...                  "kind": ["decision", "leaf", "leaf"], "mean": [None, 0, 1],
    ...                  "var": [None, 4, 0], "noise_var": [None, 1, 1]})
    >>> s = Search(t)
    >>> s.pick("static_rate", np.random.default_rng(0), remaining=5)
    0
    >>> s.observe(0, 2.5)
    >>> s.tree().mean.tolist(), s.tree().count.tolist()
    ([2.0, 1.0], [1.0, 0.0])
    """

    def __init__(self, tree: BeliefTree) -> None:
        self._from = tree
        n = tree.n_leaves
        none, empty = np.zeros(0), np.zeros((0, 0))
        count = np.zeros(n, dtype=np.int64) if tree.count is None else tree.count.astype(np.int64)
        if tree.mean is not None:
            assert tree.noise_var is not None
            cov = empty if tree.cov is None else tree.cov.copy()
            var = np.diag(cov).copy() if tree.var is None else tree.var.copy()
            self._belief = Belief(
                tree.mean.copy(), var, tree.noise_var.copy(), none, none, none, none, cov, count, np.zeros(n)
            )
        else:
            assert tree.alpha is not None
            assert tree.beta is not None
            assert tree.low is not None
            assert tree.high is not None
            shape = (tree.alpha.copy(), tree.beta.copy(), tree.low.copy(), tree.high.copy())
            moments = (win_loss_mean(*shape), win_loss_var(*shape), win_loss_noise_var(*shape))
            self._belief = Belief(*moments, *shape, empty, count, np.zeros(n))
        self._visits = count.copy()
        self._topology = _topology(tree)
        self._scale = scale(self._topology, self._belief.var)

    @property
    def moments(self) -> tuple[Floats, Floats]:
        """Posterior mean and variance of each leaf value, shape (n_leaves,); not to be written to."""
        return self._belief.mean, self._belief.var

    @property
    def compiled(self) -> tuple[Topology, Belief, float]:
        """Tree, posterior and scale as the compiled rules take them; not to be written to."""
        return self._topology, self._belief, self._scale

    @property
    def trials(self) -> tuple[Floats, Floats]:
        """alpha and beta of each win/loss leaf, shape (n_leaves,), else empty; not to be written to."""
        return self._belief.alpha, self._belief.beta

    def pick(
        self, rule: str, rng: np.random.Generator, *, remaining: int = 1, exploration: float = 1.0
    ) -> int:
        """Position of the leaf that `rule` rolls out next.

        remaining : rollouts left, which bounds the batches that `static_rate` considers.
        exploration : UCT's constant c, in units of the scale that the tree had at the start.
        """
        c = exploration * self._scale
        return int(pick(_rule(rule), rng, self._topology, self._belief, remaining, c))

    def observe(self, leaf: int, observed: float, rollouts: int = 1) -> None:
        """Take in `rollouts` at one leaf: `observed` is their average, for win/loss leaves the wins."""
        observe(self._belief, leaf, observed, rollouts)

    def run(
        self,
        truth: Floats,
        weights: Mapping[str, float],
        rng: np.random.Generator,
        *,
        rollouts: int,
        budget: int,
        batch: int = 1,
        switch: float = 0.0,
        exploration: float = 1.0,
    ) -> None:
        """Search with simulated rollouts around known true leaf values.

        truth : shape (n_leaves,); true values in u, or win probabilities for win/loss leaves.
        weights : rule -> weight; a rule is drawn at the start, and again before a pick with
            probability `switch`.
        rollouts : how many to spend, of `budget` in all. batch : rollouts a pick.
        Raises InputError for an unknown rule, and where no rule has a weight above 0.
        """
        for rule in weights:
            _rule(rule)
        if not any(w > 0 for w in weights.values()) or any(w < 0 for w in weights.values()):
            raise InputError("weights", "must be >= 0 and give some rule more than 0", dict(weights))
        share = np.cumsum([weights.get(name, 0.0) for name in RULES])
        c = exploration * self._scale
        run(rng, self._topology, self._belief, truth, share, rollouts, budget, batch, switch, c)

    def tree(self, **scalars: Any) -> BeliefTree:
        """The posterior as a BeliefTree; `scalars` (remaining, id, ...) replace those of the start."""
        t, b = self._from, self._belief
        fields: dict[str, Any] = {"count": b.visits.astype(float), "cost": t.cost}
        for name in ("horizon", "batch", "remaining", "id", "extra"):
            fields[name] = scalars.get(name, getattr(t, name))
        if len(b.alpha):
            fields |= {"alpha": b.alpha.copy(), "beta": b.beta.copy(), "low": t.low, "high": t.high}
        else:
            fields |= {"mean": b.mean.copy(), "var": b.var.copy(), "noise_var": t.noise_var}
            if t.cov is not None:
                assert t.mean is not None
                assert t.noise_var is not None
                # All rollouts at once, from the covariance of the start: rank-one steps lose digits.
                rollouts = b.visits - self._visits
                average = b.returns / np.maximum(rollouts, 1)
                posterior = dense_gaussian_update(t.mean, t.cov, t.noise_var, rollouts, average)
                fields |= {"mean": posterior[0], "var": None, "cov": posterior[1]}
        return BeliefTree(t.parent, t.kind, t.reward, t.discount, t.prob, **fields)


def _rule(name: str) -> int:
    if name not in RULES:
        raise InputError("rule", f"must be one of {', '.join(RULES)}", name)
    return RULES.index(name)


def _topology(tree: BeliefTree) -> Topology:
    n = tree.n_nodes
    order = np.argsort(tree.parent[1:], kind="stable") + 1
    first = np.zeros(n + 1, dtype=np.int64)
    np.cumsum(np.bincount(tree.parent[1:], minlength=n), out=first[1:])
    decision = tree.kind == schema.DECISION
    return Topology(
        tree.parent, decision, tree.reward, tree.discount, tree.prob, first, order, tree.leaf_nodes
    )
