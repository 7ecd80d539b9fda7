"""Policies that spend rollouts by their value: priced exactly, or by a scorer file."""

from __future__ import annotations

import math
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np

from distill.allocation import Search as Posterior
from distill.errors import InputError
from distill.query import Priced, Query
from distill.rehearse.policies import Choice
from distill.runtime import Scorer
from distill.tree import BeliefTree, leaf_table

__all__ = ["ByScorer", "ByValue"]


class ByValue:
    """The candidate with the best value of computation, by any function that prices trees.

    price : (tree, query) -> Priced, for instance `distill.voc.price`.
    horizon : 0 static, inf dynamic. rate : best VOC a rollout over batches, else of one rollout.
    commit : spend the rate's whole batch before choosing again; else one rollout at a time.
    rollout_price : value units; the search stops where no candidate is worth more a rollout.
    Where no value stands out from 0 the static rate decides, so that late rollouts keep an order. Such
    choices are marked: a policy that mostly falls back is the static rate under another name.
    """

    def __init__(
        self,
        price: Callable[[BeliefTree, Query], Priced],
        *,
        horizon: float = math.inf,
        rate: bool = True,
        commit: bool = False,
        rollout_price: float = 0.0,
        name: str = "",
    ) -> None:
        if not rollout_price >= 0:
            raise InputError("rollout_price", "must be >= 0", rollout_price)
        self._price = price
        self.horizon = horizon
        self.rate = rate
        self.commit = commit
        self.rollout_price = rollout_price
        words = {0.0: "static", math.inf: "dynamic"}.get(horizon, f"horizon{horizon:g}")
        self.name = name or f"exact_{words}_{'rate' if rate else 'voc'}"

    def begin(self, tree: BeliefTree) -> None:
        """Nothing to prepare."""

    def choose(self, posterior: Posterior, remaining: int, rng: np.random.Generator) -> Choice | None:
        """The best candidate, or None where none is worth `rollout_price`."""
        query = Query(horizon=self.horizon, batch=None if self.rate else 1, remaining=remaining)
        priced = self._price(posterior.tree(), query)
        best = int(np.argmax(priced.voc))
        if self.rollout_price > 0 and priced.voc[best] <= self.rollout_price:
            return None
        if not priced.voc[best] > priced.error[best]:
            return Choice(posterior.pick("static_rate", rng, remaining=remaining), fell_back=True)
        return Choice(best, int(priced.batch[best]) if self.commit else 1)


class ByScorer:
    """Rollouts by a shipped scorer, from the arrays that an agent keeps anyway.

    scorer : a `distill.runtime.Scorer`, or the path of its file, which is then loaded at first use.
    commit : share of the batch that the rate assumes which is spent before scoring again; 0 is one
        rollout at a time. spread : how many of the leaves with the best values get a rollout each (or
        their share of a batch) from one scoring, so that its time is shared; 1 is the best one only.
    rollout_price : value units; the search stops where no leaf is worth more a rollout.
    Where the file says 0 of every leaf the static rate decides, as for `ByValue`.
    """

    def __init__(
        self,
        scorer: Scorer | str | Path,
        *,
        name: str = "",
        commit: float = 0.0,
        spread: int = 1,
        rollout_price: float = 0.0,
    ) -> None:
        if not rollout_price >= 0:
            raise InputError("rollout_price", "must be >= 0", rollout_price)
        if not 0 <= commit <= 1:
            raise InputError("commit", "must be from 0 to 1", commit)
        if spread < 1:
            raise InputError("spread", "must be at least 1", spread)
        self._path = None if isinstance(scorer, Scorer) else Path(scorer)
        self._scorer = scorer if isinstance(scorer, Scorer) else None
        self.commit = commit
        self.spread = spread
        self.rollout_price = rollout_price
        words = [name or (self._path.stem if self._path else "scorer")]
        words += [f"commit{commit:g}"] if commit else []
        words += [f"spread{spread}"] if spread > 1 else []
        self.name = "-".join(words)
        self._fixed: dict[str, Any] = {}
        self._queue: list[Choice] = []

    def __getstate__(self) -> dict[str, Any]:
        """A loaded file stays in its process; another one loads it again."""
        if self._path is None:
            raise InputError("scorer", "must be given as a path to be used by several workers")
        return {**self.__dict__, "_scorer": None}

    @property
    def scorer(self) -> Scorer:
        """The scorer, loaded."""
        if self._scorer is None:
            assert self._path is not None
            self._scorer = Scorer.load(self._path)
        return self._scorer

    def begin(self, tree: BeliefTree) -> None:
        """The columns of the leaf table that rollouts do not change."""
        self._queue = []
        table = leaf_table(tree)
        self._fixed = {
            "noise_var": table.noise_var,
            "gain": table.gain,
            "offset": table.offset,
            "action": table.action,
            "cost": table.cost,
        }

    def choose(self, posterior: Posterior, remaining: int, rng: np.random.Generator) -> Choice | None:
        """What an earlier scoring still has to give, else one call of the scorer."""
        if self._queue:
            return self._queue.pop()
        mean, var = posterior.moments
        scores = self.scorer.score(mean=mean, var=var, remaining=remaining, **self._fixed)
        best = scores.pick
        top = float(scores.voc[best])
        if self.rollout_price > 0 and top <= self.rollout_price:
            return None
        if not top > 0:
            return Choice(posterior.pick("static_rate", rng, remaining=remaining), fell_back=True)
        if self.spread > 1:
            order = np.argsort(scores.voc)
            best_few = order[-self.spread :]
            self._queue = [self._choice(int(i), scores) for i in best_few if scores.voc[i] > 0]
            return self._queue.pop()
        return self._choice(best, scores)

    def _choice(self, leaf: int, scores: Any) -> Choice:
        return Choice(leaf, max(int(self.commit * scores.batch[leaf]), 1) if self.commit else 1)
