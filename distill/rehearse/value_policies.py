"""Policies that spend rollouts by their value: priced exactly, or by a scorer file."""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any, Final

import numpy as np

from distill.allocation import Search as Posterior
from distill.errors import InputError
from distill.query import Priced, Query, scale_of
from distill.rehearse.policies import Choice
from distill.rehearse.scorer_inputs import ScorerInputs
from distill.runtime import Scorer
from distill.tree import BeliefTree

__all__ = ["ByScorer", "ByValue"]

_TELLING: Final = 4  # scorings of as many leaves, of which the fastest tells what one takes
_REST: Final = 4  # rollouts by the static rate before a choice worth nothing is looked at again
_SURE: Final = 1e-20  # variance of a leaf that is known, as a share of the largest
# Rollouts by the static rate between looks at whether to stop: at least, and looks a decision at most.
_LOOK: Final = 8
_LOOKS: Final = 128


class _Thrifty:
    """Stops where no candidate is worth its price: `rollout_price` value units, or `stop` x the tree's scale.

    The scale is that of the beliefs before the first rollout, so that one `stop` suits problems whose
    values differ by orders of magnitude. After `watch` it never stops but tells, after each choice, what
    the best rollout is `worth` in units of that scale: infinite where it was not looked at.
    """

    def __init__(self, rollout_price: float, stop: float) -> None:
        for name, value in (("rollout_price", rollout_price), ("stop", stop)):
            if not 0 <= value < math.inf:
                raise InputError(name, "must be >= 0 and finite", value)
        self.rollout_price = rollout_price
        self.stop = stop
        self.worth = math.inf
        self._price = rollout_price  # from which down rollouts are looked at
        self._watched = 0.0
        self._scale = 1.0

    def watch(self, most: float) -> None:
        """Go on at any price, from the next decision on; `worth` is told where it is at most `most`."""
        self._watched = most

    def _set_price(self, tree: BeliefTree) -> None:
        self.worth = math.inf
        stop = self._watched or self.stop
        if stop > 0:
            self._scale = scale_of(tree)
            self._price = self.rollout_price + stop * self._scale

    def _too_dear(self, value: float) -> bool:
        return self._price > 0 and value <= self._price

    def _is_over(self, value: float) -> bool:
        """Whether to stop, where the best rollout is worth `value`."""
        if not self._too_dear(value):
            return False
        if self._watched:
            self.worth = value / self._scale
        return not self._watched


class ByValue(_Thrifty):
    """The candidate with the best value of computation, by any function that prices trees.

    price : (tree, query) -> Priced, for instance `distill.voc.price`.
    horizon : 0 static, inf dynamic. rate : best VOC a rollout over batches, else of one rollout.
    commit : spend the rate's whole batch before choosing again; else one rollout at a time.
    rollout_price, stop : what a rollout costs, in value units and in units of the tree's scale; the
        search stops where no candidate is worth more a rollout.
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
        stop: float = 0.0,
        name: str = "",
    ) -> None:
        super().__init__(rollout_price, stop)
        self._pricing = price
        self.horizon = horizon
        self.rate = rate
        self.commit = commit
        words = {0.0: "static", math.inf: "dynamic"}.get(horizon, f"horizon{horizon:g}")
        self.name = name or f"exact_{words}_{'rate' if rate else 'voc'}{f'-stop{stop:g}' if stop else ''}"

    def begin(self, tree: BeliefTree) -> None:
        """What a rollout costs on this tree."""
        self._set_price(tree)

    def choose(self, posterior: Posterior, remaining: int, rng: np.random.Generator) -> Choice | None:
        """The best candidate, or None where none is worth its price."""
        self.worth = math.inf
        query = Query(horizon=self.horizon, batch=None if self.rate else 1, remaining=remaining)
        priced = self._pricing(posterior.tree(), query)
        best = int(np.argmax(priced.voc))
        if self._is_over(float(priced.voc[best])):
            return None
        if not priced.voc[best] > priced.error[best]:
            return Choice(posterior.pick("static_rate", rng, remaining=remaining), fell_back=True)
        return Choice(best, int(priced.batch[best]) if self.commit else 1)


class ByScorer(_Thrifty):
    """Rollouts by a shipped scorer, from the arrays that an agent keeps anyway.

    scorer : a `distill.runtime.Scorer`, or the path of its file, which is then loaded at first use.
    late : the static rate chooses until this many rollouts an uncertain leaf are left. A value of one leaf
        takes the rest of the tree as it is, which is nearly true of the last rollouts and wrong of the
        first of many. 0 scores from the start. every : before those, every so-manyeth rollout is the
        scorer's too, so that neither value's blind spots go unseen; 0 none.
    share : where a rollout's cost is known (see `expect`) and a scoring takes more than this share of it,
        the static rate, which costs next to nothing, chooses: what a scoring gains and what its time would
        have bought both grow with the number of scorings, so that fewer of them do not pay either. The
        fastest scoring so far of as many leaves counts. 0 scores at any cost.
    rollout_price, stop : as for `ByValue`; with `late`, the static rate too must find rollouts too dear.
        While the static rate chooses, there are looks before every eighth rollout, or 128 a decision.
    Where the file says 0 of every leaf the static rate chooses the next 4 rollouts. Its choices are marked.
    """

    def __init__(
        self,
        scorer: Scorer | str | Path,
        *,
        name: str = "",
        late: float = 0.0,
        every: int = 0,
        share: float = 0.0,
        rollout_price: float = 0.0,
        stop: float = 0.0,
    ) -> None:
        super().__init__(rollout_price, stop)
        for what, value in (("late", late), ("every", every), ("share", share)):
            if not 0 <= value < math.inf:
                raise InputError(what, "must be >= 0 and finite", value)
        self._path = None if isinstance(scorer, Scorer) else Path(scorer)
        self._scorer = scorer if isinstance(scorer, Scorer) else None
        self.late = late
        self.every = every
        self.share = share
        words = [name or (self._path.stem if self._path else "scorer")]
        if not name:
            words += [f"late{late:g}"] if late else []
            words += [f"every{every}"] if every else []
            words += [f"share{share:g}"] if share else []
            words += [f"stop{stop:g}"] if stop else []
        self.name = "-".join(words)
        self._inputs: ScorerInputs | None = None
        self._changed: set[int] = set()  # leaves whose rollouts the inputs have not taken in
        self._last = math.inf  # rollouts left from which on the scorer chooses
        self._resting = 0
        self._until_look = 0
        self._look = 0
        self._early = 0  # rollouts before the last ones
        self._rollout_seconds = 0.0
        self._leaves = 0
        # By number of leaves: scorings so far, and seconds of the fastest of them.
        self._scorings: dict[int, int] = {}
        self._fastest: dict[int, float] = {}

    def __getstate__(self) -> dict[str, Any]:
        """A loaded file stays in its process; another one loads it again."""
        if self._path is None:
            raise InputError("scorer", "must be given as a path to be used by several workers")
        return {**self.__dict__, "_scorer": None, "_inputs": None, "_scorings": {}, "_fastest": {}}

    @property
    def scorer(self) -> Scorer:
        """The scorer, loaded."""
        if self._scorer is None:
            assert self._path is not None
            self._scorer = Scorer.load(self._path)
        return self._scorer

    def suits(self, tree: BeliefTree) -> bool:
        """Whether the file can score such trees."""
        return ScorerInputs.fit(self.scorer, tree)

    def expect(self, rollout_seconds: float) -> None:
        """What one rollout will cost, 0 where that is not known; told before a decision begins."""
        self._rollout_seconds = rollout_seconds

    def begin(self, tree: BeliefTree) -> None:
        """A new decision; what the scorer reads is laid out when it is first asked."""
        self._resting = self._until_look = self._look = self._early = 0
        self._inputs, self._changed = None, set()
        self._set_price(tree)
        self._leaves = tree.n_leaves
        if self.late:
            self._last = self.late * _uncertain(tree)

    def choose(self, posterior: Posterior, remaining: int, rng: np.random.Generator) -> Choice | None:
        """The scorer's choice where its turn is, else the static rate's."""
        self.worth = math.inf
        if not self._look:
            self._look = max(_LOOK, remaining // _LOOKS)
        if self._resting:
            self._resting -= 1
            return self._static(posterior, remaining, rng)
        scores_now = self._is_due(remaining) and not self._takes_too_long()
        if not scores_now:
            if not self._price:
                return self._static(posterior, remaining, rng)
            if self._until_look:
                self._until_look -= 1
                return self._static(posterior, remaining, rng)
            self._until_look = self._look - 1
        if self._inputs is None:  # once a decision: no part of what each scoring takes
            self._inputs = ScorerInputs(self.scorer, posterior.tree())
            self._changed.clear()
        started = time.perf_counter()
        scores = self._up_to_date(self._inputs, posterior).score(posterior, remaining)
        took = time.perf_counter() - started
        nth = self._scorings[self._leaves] = self._scorings.get(self._leaves, 0) + 1
        if nth > 1:  # the first of as many leaves makes its buffers
            self._fastest[self._leaves] = min(took, self._fastest.get(self._leaves, math.inf))
        best = int(scores.pick)
        top = float(scores.voc[best])
        if self._too_dear(top) and self._is_over(max(top, self._second_opinion(posterior, remaining))):
            return None
        if not scores_now:
            return self._static(posterior, remaining, rng)
        if not top > 0:
            self._resting = _REST - 1
            return self._static(posterior, remaining, rng)
        return Choice(best)

    def _static(self, posterior: Posterior, remaining: int, rng: np.random.Generator) -> Choice:
        """The static rate's choice."""
        return Choice(posterior.pick("static_rate", rng, remaining=remaining), fell_back=True)

    def _is_due(self, remaining: int) -> bool:
        """Whether the rollout is one of those that are the scorer's."""
        if remaining <= self._last:
            return True
        self._early += 1
        return self.every > 0 and self._early % self.every == 0

    def _takes_too_long(self) -> bool:
        """Whether a scoring would take more than its share of a rollout's time."""
        most = self.share * self._rollout_seconds
        if most <= 0 or self._scorings.get(self._leaves, 0) < _TELLING:
            return False
        return self._fastest[self._leaves] > most

    def _up_to_date(self, inputs: ScorerInputs, posterior: Posterior) -> ScorerInputs:
        """What the scorer reads, with all rollouts taken in."""
        for leaf in self._changed:
            inputs.observe(posterior, leaf)
        self._changed.clear()
        return inputs

    def _second_opinion(self, posterior: Posterior, remaining: int) -> float:
        """The closed form's best value, which still tells leaves apart where a dynamic one says nothing."""
        assert self._inputs is not None
        return float(self._inputs.closed_form(posterior, remaining).voc.max()) if self.late else 0.0

    def observe(self, leaf: int, observed: float, rollouts: int) -> None:
        """The beliefs have taken the rollouts in already; what the scorer reads will when it is asked."""
        del observed, rollouts
        self._changed.add(leaf)


def _uncertain(tree: BeliefTree) -> int:
    """How many leaves are not known."""
    if tree.low is not None and tree.high is not None:
        var = np.square(tree.high - tree.low)
    else:
        found = tree.var if tree.cov is None else np.diag(tree.cov)
        assert found is not None
        var = found
    return int(np.count_nonzero(var > _SURE * var.max()))
