"""Record the belief trees that a search meets, as traces."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from distill.allocation import RULES
from distill.errors import InputError, RefusedError
from distill.rehearse.catalogue import make_simulator
from distill.rehearse.search import Rule, Search, Settings, prior_of
from distill.rehearse.simulator import Simulator, State
from distill.traces import write_trees
from distill.tree import BeliefTree, Floats

__all__ = ["POINTS", "Recorded", "record_traces", "recorded_trees"]

POINTS = (0.0, 0.125, 0.25, 0.5, 0.75)  # shares of the budget spent when a tree is recorded
_DIGITS = 9  # significant digits of a recorded belief: far below what a rollout's noise leaves unsaid
_EXPLORE = 0.2  # share of recorded decisions that are played at random, so that states vary
_EPISODE = 40  # decisions after which a recorded episode starts over

_MOST_IDLE = 100_000  # states without a choice after which none is expected any more


@dataclass(frozen=True)
class Recorded:
    """What a recording wrote."""

    trees: int
    decisions: int
    leaves: tuple[int, int]  # fewest and most
    size: int  # bytes


def record_traces(
    simulator: Simulator | str,
    out: str | os.PathLike[str],
    *,
    decisions: int,
    rollouts: int = 128,
    seed: int = 0,
    rule: Rule | None = None,
    settings: Settings | None = None,
    progress: Callable[[int], None] | None = None,
) -> Recorded:
    """Let the reference search play, and write its belief trees as JSON Lines of `belief-tree/1`.

    out : a `.jsonl` or `.jsonl.gz` file, written in one step. The same arguments give the same bytes.
    The other arguments are those of `recorded_trees`; `progress` is called with the number of
    each decision, from 0, as its trees come in.
    """
    path = str(out)
    if not path.endswith((".jsonl", ".jsonl.gz")):
        raise InputError(path, "must end in .jsonl or .jsonl.gz")  # before the work, not after it
    trees = []
    for decision, tree in recorded_trees(
        simulator, decisions=decisions, rollouts=rollouts, seed=seed, rule=rule, settings=settings
    ):
        trees.append(tree)
        if progress is not None:
            progress(decision)
    write_trees(path, trees)
    leaves = [tree.n_leaves for tree in trees]
    return Recorded(len(trees), decisions, (min(leaves), max(leaves)), Path(path).stat().st_size)


def recorded_trees(
    simulator: Simulator | str,
    *,
    decisions: int,
    rollouts: int = 128,
    seed: int = 0,
    rule: Rule | None = None,
    settings: Settings | None = None,
) -> Iterator[tuple[int, BeliefTree]]:
    """(decision, tree) for each decision of the reference search, at the POINTS of its budget.

    simulator : one that follows the protocol, with its `settings`, or a name of `catalogue.SIMULATORS`.
    decisions : how many. rollouts : budget of each. seed : of everything random.
    rule : how rollouts are given out; None draws one of the named rules for each decision, so that
        the trees are not those of one rule alone.

    Each tree carries `count`, `remaining`, `id` and in `extra` the environment, state, decision and
    rule. The prior comes from pilot rollouts of their own. The search plays the action with
    the largest backed-up mean, one time in five a random one, and restarts at the end of an episode.
    """
    if decisions < 1:
        raise InputError("decisions", "must be at least 1", decisions)
    if rollouts < 1:
        raise InputError("rollouts", "must be at least 1", rollouts)
    if isinstance(simulator, str):
        simulator, usual = make_simulator(simulator)
        settings = settings or usual
    settings = settings or Settings()
    pilot_rng, rng = (np.random.default_rng(s) for s in np.random.SeedSequence(seed).spawn(2))
    prior = prior_of(simulator, settings, pilot_rng)
    points = sorted({int(share * rollouts) for share in POINTS})
    state, played, decision, idle = simulator.start(rng), 0, 0, 0
    while decision < decisions:
        if simulator.is_terminal(state) or played == _EPISODE:
            state, played = simulator.start(rng), 0
        played += 1
        choices = simulator.actions(state)
        if len(choices) == 1:  # nothing to decide
            idle += 1
            if idle > _MOST_IDLE:
                raise RefusedError(f"{simulator.name}: {_MOST_IDLE} states in a row leave no choice")
            state, _ = simulator.step(state, choices[0], rng)
            continue
        idle = 0
        now = rule if rule is not None else RULES[int(rng.integers(len(RULES)))]
        search = Search(simulator, state, settings, prior, rng)
        for stop, point in enumerate([*points, rollouts]):
            search.spend(now, point - search.used, rollouts - search.used, rng)
            if stop < len(points):
                yield decision, _labelled(search, simulator.name, state, decision, now, rollouts - point)
        action = search.best_action()
        if rng.random() < _EXPLORE:
            action = choices[int(rng.random() * len(choices))]
        state, _ = simulator.step(state, action, rng)
        decision += 1


def _labelled(
    search: Search, name: str, state: State, decision: int, rule: Rule, remaining: int
) -> BeliefTree:
    extra: dict[str, Any] = {
        "environment": name,
        "state": _plain(state),
        "decision": decision,
        "rule": rule if isinstance(rule, str) else getattr(rule, "__name__", "custom"),
    }
    tree = search.tree(remaining=remaining, id=f"{name}-{decision}-{search.used}", extra=extra)
    if tree.mean is None:  # win/loss: counts of trials, short as they are
        return tree
    assert tree.var is not None
    assert tree.noise_var is not None
    return replace(tree, mean=_short(tree.mean), var=_short(tree.var), noise_var=_short(tree.noise_var))


def _plain(state: object) -> object:
    """A state as JSON holds it: numbers and text as they are, tuples as arrays, others as text."""
    if isinstance(state, tuple):
        return [_plain(part) for part in state]
    return state if isinstance(state, (int, float, str)) else str(state)


def _short(column: Floats) -> Floats:
    return np.array([float(f"{x:.{_DIGITS}g}") for x in column])
