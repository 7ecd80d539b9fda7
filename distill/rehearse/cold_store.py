"""Rimhold, an invented cold store: a pallet shuttle picks its next job, and has 20 ms to think.

The shuttle Lemming runs along one aisle of 16 cells: the dock (cells 0-4), the chill room (5-10) and
the deep freeze (11-15). A job takes a pallet from one cell to another before it is due. Between the
zones stand doors that open at random: Lemming waits in front of a closed one. Driving costs energy;
the charger stands at cell 0. One tick is a cell's drive, about 2 s.

Chance is only in the doors, and every action takes time, so no state comes back: small shifts can be
solved exactly by `optimum.solve`.
"""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise
from typing import Final, NamedTuple

import numpy as np

from distill.errors import InputError
from distill.rehearse.simulator import Action, Outcome, State

__all__ = ["CHARGE", "ColdStore", "Door", "Job", "Shift"]

CHARGE: Final = -1  # the action of driving to the charger; the others are job numbers

CELLS: Final = 16
HANDLING: Final = 2  # ticks to take a pallet up and set it down
CAPACITY: Final = 80  # cells that a full battery drives
CHARGE_SPEED: Final = 8  # cells' worth of energy a tick
ENERGY_PRICE: Final = 0.05  # value units a cell
GRACE: Final = 20  # ticks after the due time in which a job's worth falls to 0


class Door(NamedTuple):
    """Between `cell` - 1 and `cell`: opens in each tick with odds `opens`, after `patience` ticks surely."""

    cell: int
    opens: float
    patience: int


class Job(NamedTuple):
    """One pallet: where it stands, where it belongs, when it is due (ticks), what that is worth."""

    number: int
    pick: int
    drop: int
    due: int
    worth: float


class Shift(NamedTuple):
    """The state: time in ticks, the shuttle's cell, its energy in cells, the jobs that wait."""

    clock: int
    cell: int
    energy: int
    jobs: tuple[Job, ...]


DOORS: Final = (Door(5, 0.6, 3), Door(11, 0.35, 5))


class ColdStore:
    """The cold store as a Modelled and Advised simulator; value units are the store's money.

    jobs : how many wait when a shift begins. doors : by cell; none makes every step sure.
    skill : share of rollout steps that follow the rule of thumb "earliest due date first" (Jackson
        1955); the rest are uniformly random.

    A job done `late` ticks after it is due brings worth x max(0, 1 - late / GRACE), less energy. It is
    on offer only if the battery then still reaches the charger.

    >>> store = ColdStore(jobs=1, doors=())
    >>> job = Job(0, pick=2, drop=12, due=20, worth=8.0)
    >>> store.outcomes(Shift(0, 0, CAPACITY, (job,)), 0)
    [Outcome(prob=1.0, state=Shift(clock=14, cell=12, energy=68, jobs=()), reward=7.4)]
    """

    name = "cold_store"
    discount = 1.0

    def __init__(self, *, jobs: int = 8, doors: Sequence[Door] = DOORS, skill: float = 0.8) -> None:
        if jobs < 1:
            raise InputError("jobs", "must be at least 1", jobs)
        for door in doors:
            if not 0 < door.opens <= 1 or door.patience < 0:
                raise InputError("doors", "must open with odds above 0 and at most 1, patience >= 0", door)
        if not 0 <= skill <= 1:
            raise InputError("skill", "must be from 0 to 1", skill)
        self.jobs = jobs
        self.doors = tuple(doors)
        self.skill = skill
        self._waits = {door: _wait_odds(door) for door in self.doors}
        self._wait_cache: dict[tuple[int, ...], list[float]] = {}

    def start(self, rng: np.random.Generator) -> Shift:
        """A new shift: random jobs, the shuttle at the dock with a random charge."""
        jobs = []
        for number in range(self.jobs):
            pick, drop = (int(c) for c in rng.choice(CELLS, size=2, replace=False))
            due = int(rng.integers(12, 12 + 16 * self.jobs))
            jobs.append(Job(number, pick, drop, due, float(rng.integers(2, 13))))
        return Shift(0, 0, int(rng.integers(CAPACITY // 2, CAPACITY + 1)), tuple(jobs))

    def actions(self, state: State) -> list[Action]:
        """Numbers of the jobs that the battery allows, then CHARGE unless it is full."""
        shift = _shift(state)
        possible: list[Action] = [
            job.number
            for job in shift.jobs
            if abs(shift.cell - job.pick) + abs(job.pick - job.drop) + job.drop <= shift.energy
        ]
        return possible if shift.energy == CAPACITY else [*possible, CHARGE]

    def is_terminal(self, state: State) -> bool:
        """Whether no job waits."""
        return not _shift(state).jobs

    def outcomes(self, state: State, action: Action) -> list[Outcome]:
        """One for each number of ticks that doors may hold the shuttle up."""
        shift = _shift(state)
        route = self._route(shift, action)
        return [
            Outcome(odds, *_after(shift, action, route, wait))
            for wait, odds in enumerate(self._wait_of(route))
            if odds > 0
        ]

    def step(self, state: State, action: Action, rng: np.random.Generator) -> tuple[Shift, float]:
        """Drive the action's route; waits at doors are drawn."""
        shift = _shift(state)
        route = self._route(shift, action)
        odds = self._wait_of(route)
        wait, u = 0, rng.random()
        while wait < len(odds) - 1 and u >= odds[wait]:
            u -= odds[wait]
            wait += 1
        return _after(shift, action, route, wait)

    def advise(self, state: State, rng: np.random.Generator) -> Action:
        """The possible job that is due first, with probability `skill`; charge when there is none."""
        choices = self.actions(state)
        if rng.random() >= self.skill:
            return choices[int(rng.random() * len(choices))]
        due = {job.number: job.due for job in _shift(state).jobs}
        return min(choices, key=lambda action: due.get(action, 10**9))

    def _route(self, shift: Shift, action: Action) -> tuple[int, ...]:
        if action == CHARGE:
            return (shift.cell, 0)
        for job in shift.jobs:
            if job.number == action:
                return (shift.cell, job.pick, job.drop)
        raise InputError("action", f"must be a waiting job or {CHARGE}", action)

    def _wait_of(self, route: tuple[int, ...]) -> list[float]:
        """Odds of each number of ticks that the doors on a route cost: a sum of independent waits."""
        if route not in self._wait_cache:
            odds = np.ones(1)
            for a, b in pairwise(route):
                for door in self.doors:
                    if min(a, b) < door.cell <= max(a, b):
                        odds = np.convolve(odds, self._waits[door])
            self._wait_cache[route] = odds.tolist()
        return self._wait_cache[route]


def _wait_odds(door: Door) -> list[float]:
    """P(wait = w) = p (1 - p)^w for w below the patience, and what is left at it."""
    closed = 1 - door.opens
    return [*(door.opens * closed**w for w in range(door.patience)), closed**door.patience]


def _after(shift: Shift, action: Action, route: tuple[int, ...], wait: int) -> tuple[Shift, float]:
    driven = sum(abs(b - a) for a, b in pairwise(route))
    energy = shift.energy - driven
    spent = ENERGY_PRICE * driven
    if action == CHARGE:
        ticks = driven + wait - (energy - CAPACITY) // CHARGE_SPEED  # whole ticks, rounded up
        return Shift(shift.clock + ticks, 0, CAPACITY, shift.jobs), -spent
    clock = shift.clock + driven + HANDLING + wait
    job = next(j for j in shift.jobs if j.number == action)
    share = max(0.0, 1 - max(0, clock - job.due) / GRACE)
    waiting = tuple(j for j in shift.jobs if j.number != action)
    return Shift(clock, job.drop, energy, waiting), job.worth * share - spent


def _shift(state: State) -> Shift:
    assert isinstance(state, Shift)
    return state
