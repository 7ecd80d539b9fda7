"""The cold store: its model against its steps, its optimum against plain recursion."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
from ladder import CLOSED_FORM, STANDARD_ERRORS

from distill.errors import InputError
from distill.rehearse.cold_store import CAPACITY, CHARGE, ColdStore, Door, Job, Shift
from distill.rehearse.optimum import solve


def test_steps_follow_the_model():
    """Frequencies of 4,000 steps against the model's odds, each within its standard error."""
    store, rng = ColdStore(), np.random.default_rng(0)
    shift = Shift(0, 2, CAPACITY - 5, (Job(4, 14, 3, 20, 6.0), Job(6, 1, 2, 9, 3.0)))
    for action in store.actions(shift):
        ways = store.outcomes(shift, action)
        assert sum(w.prob for w in ways) == pytest.approx(1, rel=CLOSED_FORM)
        seen = [store.step(shift, action, rng) for _ in range(4000)]
        assert set(seen) <= {(w.state, w.reward) for w in ways}
        for way in ways:
            share = np.mean([s == (way.state, way.reward) for s in seen])
            slack = STANDARD_ERRORS * np.sqrt(way.prob * (1 - way.prob) / 4000)
            assert abs(share - way.prob) <= slack


def test_a_doors_wait_is_a_cut_geometric():
    """Expected wait at one crossing: sum of P(wait >= w) = (1 - p)^w over w from 1 to the patience."""
    store = ColdStore(doors=(Door(5, 0.25, 3),))
    shift = Shift(0, 4, CAPACITY, (Job(0, 4, 5, 99, 1.0),))
    ways = store.outcomes(shift, 0)
    expected = sum(0.75**w for w in (1, 2, 3))
    assert sum(w.prob * (w.state.clock - 3) for w in ways) == pytest.approx(expected, rel=CLOSED_FORM)


@pytest.mark.parametrize("seed", range(4))
def test_optimum_against_plain_recursion(seed):
    store = ColdStore(jobs=3)
    shift = store.start(np.random.default_rng(seed))

    @cache
    def value(s):
        return max(q(s, a) for a in store.actions(s)) if s.jobs else 0.0

    def q(s, a):
        return sum(w.prob * (w.reward + value(w.state)) for w in store.outcomes(s, a))

    optimum = solve(store, [shift])
    assert optimum.values[shift] == pytest.approx(value(shift), rel=CLOSED_FORM)
    expected = [q(shift, a) for a in store.actions(shift)]
    assert optimum.action_values[shift] == pytest.approx(expected, rel=CLOSED_FORM)


def test_the_battery_always_reaches_the_charger():
    store, rng = ColdStore(jobs=8, skill=0.0), np.random.default_rng(1)
    charged = 0
    for _ in range(60):
        shift = store.start(rng)
        while not store.is_terminal(shift):
            action = store.advise(shift, rng)
            after, _ = store.step(shift, action, rng)
            assert after.clock > shift.clock
            assert after.energy >= after.cell
            charged += action == CHARGE
            shift = after
    assert charged > 20


def test_lateness_costs():
    store = ColdStore(jobs=1, doors=())
    rewards = [
        store.outcomes(Shift(clock, 0, CAPACITY, (Job(0, 0, 10, 20, 8.0),)), 0)[0].reward
        for clock in (0, 8, 18, 28, 99)
    ]
    assert rewards == pytest.approx([7.5, 7.5, 3.5, -0.5, -0.5], rel=CLOSED_FORM)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"jobs": 0}, "jobs: must be at least 1; got 0"),
        ({"skill": 2}, "skill: must be from 0 to 1; got 2"),
        ({"doors": (Door(3, 0.0, 1),)}, "doors: must open with odds above 0"),
    ],
)
def test_bad_arguments_name_the_rule(arguments, message):
    with pytest.raises(InputError, match=message):
        ColdStore(**arguments)
    with pytest.raises(InputError, match="action: must be a waiting job"):
        ColdStore().outcomes(Shift(0, 0, 9, (Job(0, 1, 2, 3, 4.0),)), 7)
