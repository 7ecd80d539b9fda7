"""What a scorer file reads of a tree under search, for each kind of inputs a file can have."""

from __future__ import annotations

import math
from typing import Any

from distill.allocation import Search as Posterior
from distill.backup_compiled import fast_backup_of
from distill.backup_correlated import CorrelatedBackup
from distill.errors import InputError, RefusedError
from distill.runtime import Scorer, Scores
from distill.scorer_inputs import ANY_BATCH, ANY_HORIZON, LEAF_TABLE, RECORD, WIN_LOSS_TABLE
from distill.tree import BeliefTree, leaf_table

__all__ = ["ScorerInputs"]


class ScorerInputs:
    """The arrays of one decision that a scorer's call takes; those that rollouts do not change are kept.

    A leaf table is the agent's own arrays; a record is kept up to date by a backup of the tree at the
    horizon that the file was trained for: a path to the root after each rollout, or, with `cov`, the whole
    tree. A file for any horizon is asked for the dynamic value, one for any batch for that of one
    rollout: a rehearsed search chooses anew after each. Raises RefusedError for trees that the file
    cannot score: `fit` says so beforehand; InputError where a file of records states no horizon that a
    backup could have.
    """

    def __init__(self, scorer: Scorer, tree: BeliefTree) -> None:
        if not self.fit(scorer, tree):
            raise RefusedError("scorer: the file does not read such trees")
        self._scorer, self._plain = scorer, Scorer.closed_form()
        self._win_loss = tree.mean is None
        self._backup = fast_backup_of(tree, _horizon(scorer)) if scorer.kind is RECORD else None
        self._fixed: dict[str, Any] = {}
        if self._backup is None:
            kept = ("low", "high") if self._win_loss else ("noise_var",)
            table = leaf_table(tree)
            self._fixed = {name: getattr(table, name) for name in ("gain", "offset", "action", "cost", *kept)}
        if scorer.kind is ANY_HORIZON:
            self._fixed["horizon"] = math.inf
        if scorer.kind is ANY_BATCH:
            self._fixed["batch_size"] = 1

    @staticmethod
    def fit(scorer: Scorer, tree: BeliefTree) -> bool:
        """Whether the scorer's inputs can hold the tree; without a file the closed form takes leaf tables."""
        if scorer.kind is RECORD:
            return True
        own = (WIN_LOSS_TABLE,) if tree.mean is None else (LEAF_TABLE, ANY_HORIZON, ANY_BATCH)
        return not tree.has_chance and tree.cov is None and scorer.kind in (None, *own)

    def score(self, posterior: Posterior, remaining: int) -> Scores:
        """One call of the scorer on the beliefs as they are."""
        return self._scorer.score(remaining=remaining, **self._columns(posterior))

    def closed_form(self, posterior: Posterior, remaining: int) -> Scores:
        """What the closed form says of the same arrays."""
        return self._plain.score(remaining=remaining, **self._columns(posterior))

    def _columns(self, posterior: Posterior) -> dict[str, Any]:
        if self._backup is not None:
            return dict(self._backup.rows())
        if self._win_loss:
            alpha, beta = posterior.trials
            return {"alpha": alpha, "beta": beta, **self._fixed}
        mean, var = posterior.moments
        return {"mean": mean, "var": var, **self._fixed}

    def observe(self, posterior: Posterior, leaf: int) -> None:
        """Take in that rollouts have changed the belief of one leaf."""
        if self._backup is None:
            return
        if isinstance(self._backup, CorrelatedBackup):
            now = posterior.tree()
            assert now.mean is not None
            assert now.cov is not None
            self._backup.update(now.mean, now.cov)
        elif self._win_loss:
            alpha, beta = posterior.trials
            self._backup.update(leaf, alpha=float(alpha[leaf]), beta=float(beta[leaf]))
        else:
            mean, var = posterior.moments
            self._backup.update(leaf, mean=float(mean[leaf]), var=float(var[leaf]))


def _horizon(scorer: Scorer) -> float:
    """The h of a file's value; infinite where it states none, as the value by default is the dynamic rate."""
    about = scorer.facts.get("about")
    value = about.get("value") if isinstance(about, dict) else None
    stated = value.get("horizon", "inf") if isinstance(value, dict) else "inf"
    try:
        horizon = float(stated)
    except (TypeError, ValueError):
        horizon = math.nan
    if not horizon >= 0:
        raise InputError("scorer file: about: value: horizon", 'must be a number >= 0 or "inf"', stated)
    return horizon
