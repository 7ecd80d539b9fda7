"""One decision in closed loop: a policy spends a budget, then the agent acts."""

from __future__ import annotations

import math
import re
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from itertools import pairwise
from typing import Any

import numpy as np

from distill import schema, voc
from distill.allocation import Search as Posterior
from distill.backup import Backup
from distill.errors import InputError, RefusedError
from distill.query import Query
from distill.rehearse.policies import Policy
from distill.rehearse.problems import Draw
from distill.rehearse.search import posterior_means
from distill.tree import BeliefTree, Floats

__all__ = [
    "Budget", "Decided", "decide", "decide_at_prices", "expected_loss", "expected_maxima", "luck_of",
    "posterior_means",
]  # fmt: skip

_NO_ROLLOUTS = Query(batch=None, remaining=0)  # values alone: nothing is left to price


@dataclass(frozen=True)
class Budget:
    """What one decision may cost: `rollouts`, or `seconds` at `rollout_seconds` each, or both.

    busy : whether a rollout really keeps the processor busy for `rollout_seconds`, all on the real clock.
        Otherwise its stated cost is added to the really measured time of choosing: the same sum, without
        the waiting, and less at the mercy of what else the machine does.

    >>> Budget(seconds=0.02, rollout_seconds=0.0)
    Traceback (most recent call last):
    distill.errors.InputError: rollout_seconds: must be above 0 where seconds are limited; got 0.0
    """

    rollouts: int | None = None
    seconds: float | None = None
    rollout_seconds: float = 0.0
    busy: bool = False

    def __post_init__(self) -> None:
        if self.rollouts is None and self.seconds is None:
            raise InputError("budget", "must limit rollouts or seconds")
        if self.rollouts is not None and self.rollouts < 0:
            raise InputError("rollouts", "must be >= 0", self.rollouts)
        if self.seconds is not None and not self.seconds >= 0:
            raise InputError("seconds", "must be >= 0", self.seconds)
        if self.seconds is not None and not self.rollout_seconds > 0:
            raise InputError(
                "rollout_seconds", "must be above 0 where seconds are limited", self.rollout_seconds
            )

    @classmethod
    def parse(cls, text: str) -> Budget:
        """A budget from text: 128 rollouts, 20ms@100us (time, at this cost a rollout), or 20ms@100us!busy.

        >>> Budget.parse("128") == Budget(rollouts=128), str(Budget.parse("20ms@100us!busy"))
        (True, '20ms@100us!busy')
        """
        number = r"(\d+(?:\.\d+)?)"
        timed = re.fullmatch(rf"{number}(ms|s)@{number}(us|ms)(!busy)?", text)
        try:
            if timed is None:
                return cls(rollouts=int(text))
        except ValueError:
            raise InputError(
                "budget", "must be rollouts (128), or time and cost (20ms@100us)", text
            ) from None
        size, unit, cost, cost_unit, busy = timed.groups()
        units = {"s": 1.0, "ms": 1e-3, "us": 1e-6}
        return cls(
            seconds=float(size) * units[unit],
            rollout_seconds=float(cost) * units[cost_unit],
            busy=busy is not None,
        )

    def __str__(self) -> str:
        if self.seconds is None:
            return f"{self.rollouts}"
        cap = "" if self.rollouts is None else f"{self.rollouts} in "
        cost = self.rollout_seconds * 1e6
        return f"{cap}{self.seconds * 1e3:g}ms@{cost:g}us{'!busy' if self.busy else ''}"

    def room(self, spent: int, elapsed: float) -> int:
        """Rollouts that still fit, if choosing cost nothing from now on."""
        room = math.inf if self.rollouts is None else self.rollouts - spent
        if self.seconds is not None:
            room = min(room, _whole((self.seconds - elapsed) / self.rollout_seconds))
        return max(int(room), 0)

    def left(self, spent: int, elapsed: float) -> int:
        """Rollouts that still fit, if choosing goes on costing what it did on average."""
        room = self.room(spent, elapsed)
        if self.seconds is None or not spent or not room:
            return room
        choosing = max(elapsed / spent - self.rollout_seconds, 0.0)
        # At least the next one, which fits if it is chosen fast.
        return max(min(room, _whole((self.seconds - elapsed) / (self.rollout_seconds + choosing))), 1)


@dataclass(frozen=True)
class Decided:
    """What came of one decision. Regrets in value units, times in seconds.

    regret : of the root action with the largest value acted on, by default the expected maximum.
    regret_by_mean : of the one with the largest backed-up mean.
    expected_regret : what `regret` is on average over all that the returns seen leave open: the same mean
        over seeds, with far less noise. nan where the beliefs are not those that the truth was drawn
        from, and where it has no closed form (chance nodes).
    rollouts : spent. choosing : time of the policy and of belief updates.
    stopped : whether the policy stopped before the budget was used.
    choices : made; fallbacks : those of them that the policy's own values did not make.
    """

    regret: float
    regret_by_mean: float
    expected_regret: float
    rollouts: int
    choosing: float
    stopped: bool
    choices: int
    fallbacks: int

    @property
    def measured(self) -> float:
        """The regret to compare by: `expected_regret` where that is known, else `regret`."""
        return self.regret if math.isnan(self.expected_regret) else self.expected_regret


def _whole(rollouts: float) -> int:
    """Rounded down, but the rounding of a sum of rollouts must not lose the last one."""
    return math.floor(rollouts * (1 + 1e-12))


def luck_of(seed: int) -> np.random.Generator:
    """A policy's own luck in the decision of a seed, apart from that of the problem."""
    return np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(3,)))


def decide(
    draw: Draw,
    policy: Policy,
    budget: Budget,
    rng: np.random.Generator,
    *,
    values: Callable[[BeliefTree], Floats] | None = None,
    clock: Callable[[], float] = time.perf_counter,
) -> Decided:
    """Let a policy search one decision, then act.

    values : root action values of a tree, shape (n_actions,), to act on; None takes the expected maxima,
        V_h with h infinite (`expected_maxima`). clock : seconds.

    The clock counts the policy's own time as it is measured, belief updates included, and each rollout
    at the budget's stated cost, however long it really took: so a simulator of any price can be
    rehearsed, and policies differ by nothing but their choices and the time those take. With
    `budget.busy` rollouts really take at least their stated cost, and the clock counts what they took.
    """
    return _searched(draw, policy, budget, rng, values or expected_maxima, clock)[-1]


def decide_at_prices(
    draw: Draw,
    policy: Policy,
    budget: Budget,
    rng: np.random.Generator,
    prices: Sequence[float],
    *,
    values: Callable[[BeliefTree], Floats] | None = None,
    clock: Callable[[], float] = time.perf_counter,
) -> list[Decided]:
    """What `decide` gives at each price of a rollout, from one search; last, what it gives at none.

    policy : one that can `watch`, made without a price. prices : falling, in units of the tree's scale.
    A search with a price makes the choices of one without, until it stops: so the latter passes every
    place where the former end.
    """
    if any(not high > low for high, low in pairwise(prices)):
        raise InputError("prices", "must fall from one to the next", list(prices))
    if prices and getattr(policy, "watch", None) is None:
        raise InputError(f"policy {policy.name}", "has no price to stop at")
    return _searched(draw, policy, budget, rng, values or expected_maxima, clock, prices)


def _searched(
    draw: Draw,
    policy: Policy,
    budget: Budget,
    rng: np.random.Generator,
    values: Callable[[BeliefTree], Floats],
    clock: Callable[[], float],
    prices: Sequence[float] = (),
) -> list[Decided]:
    posterior = Posterior(draw.tree)
    learn = getattr(policy, "observe", None)
    own_beliefs = getattr(policy, "own_beliefs", False)
    rolling = 0.0
    if (expect := getattr(policy, "expect", None)) is not None:
        expect(budget.rollout_seconds)
    spent, elapsed, stopped, choices, fallbacks = 0, 0.0, False, 0, 0

    def ended() -> Decided:
        tree = posterior.tree()
        action = int(np.argmax(values(tree)))
        known = draw.believed and not tree.has_chance
        expected = expected_loss(tree, action) if known else math.nan
        by_mean = draw.regret(int(np.argmax(posterior_means(tree))))
        counts = spent, elapsed - rolling, stopped, choices, fallbacks
        return Decided(draw.regret(action), by_mean, expected, *counts)

    at_prices: list[Decided] = []
    watched: Any = policy  # it has `watch` and `worth` where there are prices
    if prices:
        watched.watch(prices[0])
    started = clock()
    policy.begin(draw.tree)
    elapsed += clock() - started
    while (left := budget.left(spent, elapsed)) > 0:
        started = clock()
        choice = policy.choose(posterior, left, rng)
        elapsed += clock() - started
        if choice is None:
            stopped = True
            break
        over = len(prices) and sum(watched.worth <= price for price in prices[len(at_prices) :])
        if over:
            at_prices += [replace(ended(), stopped=True)] * over
        rollouts = min(choice.rollouts, budget.room(spent, elapsed))
        if rollouts == 0:  # the policy thought the last rollout away
            break
        choices += 1
        fallbacks += choice.fell_back
        started = clock()
        returns = [draw.roll(choice.leaf) for _ in range(rollouts)]
        cost = rollouts * budget.rollout_seconds
        if budget.busy:
            while (took := clock() - started) < cost:
                pass
            cost = took
        rolling += cost
        observed = math.fsum(returns) if draw.tree.belief == "win_loss" else math.fsum(returns) / rollouts
        started = clock()
        posterior.observe(choice.leaf, observed, rollouts)
        if own_beliefs:  # an agent would keep one set of beliefs, not two
            started = clock()
        if learn is not None:
            learn(choice.leaf, observed, rollouts)
        elapsed += clock() - started + cost
        spent += rollouts
    end = ended()
    return [*at_prices, *[end] * (len(prices) - len(at_prices)), end]


def expected_maxima(tree: BeliefTree) -> Floats:
    """Root action values if all uncertainty were resolved before each later decision; (n_actions,).

    Exact under decision nodes; with chance nodes by the backup of moments that an agent would keep, 10 to
    50 times faster than exact values of such trees and within 3 % of the tree's scale.
    """
    return Backup(tree).value if tree.has_chance else voc.price(tree, _NO_ROLLOUTS).value


def expected_loss(tree: BeliefTree, action: int) -> float:
    """E[max_a Q_a] - E[Q_action] under a tree's independent beliefs; decision nodes only, value units.

    The best root action is worth what the best leaf is: all leaves under one action are priced like a
    root action of their own.
    """
    if tree.has_chance:
        raise RefusedError("expected loss: decision nodes only")
    together = replace(
        tree,
        parent=np.concatenate([[-1, 0], tree.parent[1:] + 1]),
        kind=np.concatenate([[schema.DECISION], tree.kind]).astype(np.int8),
        reward=np.concatenate([[0.0], tree.reward]),
        discount=np.concatenate([[1.0], tree.discount]),
        prob=np.concatenate([[1.0], tree.prob]),
    )
    return float(expected_maxima(together)[0] - expected_maxima(tree)[action])
