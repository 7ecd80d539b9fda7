"""Priors for rollouts that win or lose, and the beliefs that a search makes of them."""

from __future__ import annotations

import numpy as np
import pytest
from ladder import CLOSED_FORM, STANDARD_ERRORS

from distill.errors import InputError, RefusedError
from distill.rehearse.gym_tables import GymTable
from distill.rehearse.lookahead import Settings
from distill.rehearse.priors import OddsPrior, Prior, estimate_odds, wins_of
from distill.rehearse.problems import SimulatorProblem
from distill.rehearse.search import Search

ODDS = Settings(depth=1, length=5, win_loss=(-1.0, 3.0))


class Raffle:
    """One decision among ten; each wins 3 or loses 1, with odds from a beta around the round's own mean."""

    name = "raffle"
    discount = 1.0

    def __init__(self, mean: float, trials: float, tree_trials: float = np.inf) -> None:
        self.mean, self.trials, self.tree_trials = mean, trials, tree_trials

    def start(self, rng):
        m, s = self.mean, self.tree_trials
        m = m if np.isinf(s) else rng.beta(s * m, s * (1 - m))
        return (None, tuple(rng.beta(self.trials * m, self.trials * (1 - m), 10)))

    def actions(self, state):
        return range(10) if state[0] is None else (0,)

    def step(self, state, action, rng):
        chosen, odds = state
        if chosen is None:
            return (action, odds), 0.0
        return ("over", odds), 3.0 if rng.random() < odds[chosen] else -1.0

    def is_terminal(self, state):
        return state[0] == "over"


@pytest.mark.parametrize(("mean", "trials"), [(0.5, 2.0), (0.3, 8.0), (0.9, 4.0)])
def test_pilot_recovers_odds(mean, trials):
    """300 rounds: standard errors are about 0.01 of the mean and 5 to 10 % of the trials."""
    prior = estimate_odds(Raffle(mean, trials), ODDS, np.random.default_rng(0), trees=300)
    assert prior.mean == pytest.approx(mean, abs=0.04)
    assert prior.trials == pytest.approx(trials, rel=0.4)
    assert prior.tree_trials > 50  # in truth all rounds share one mean


@pytest.mark.slow
def test_pilot_sees_that_rounds_differ():
    prior = estimate_odds(Raffle(0.4, 5.0, 6.0), ODDS, np.random.default_rng(1), trees=2000)
    assert prior.tree_trials == pytest.approx(6, rel=0.25)


def test_opening_rollouts_move_the_mean_as_far_as_they_tell():
    """Every leaf one trial: 10 wins in 20 against a mean of 0.2 worth 20 trials give (4 + 10) / 40."""
    wins = np.repeat([1.0, 0.0], 10)[:, None]
    alpha, beta = OddsPrior(0.2, 4.0, 20.0).of_tree(wins)
    assert alpha / (alpha + beta) == pytest.approx(14 / 40, rel=CLOSED_FORM)
    assert alpha + beta == pytest.approx(4, rel=CLOSED_FORM)
    # Two trials at a leaf that is worth nothing beforehand tell as much as one.
    twice = OddsPrior(0.2, 1e-9, 20.0).of_tree(np.repeat(wins, 2, axis=1))
    assert twice[0] / sum(twice) == pytest.approx(14 / 40, rel=1e-6)
    assert OddsPrior(0.2, 4.0, 20.0).of_tree(np.zeros((0, 0))) == pytest.approx((0.8, 3.2), rel=CLOSED_FORM)


def test_a_search_counts_wins():
    world = Raffle(0.5, 2.0)
    rng = np.random.default_rng(3)
    search = Search(world, world.start(rng), ODDS, OddsPrior(0.5, 2.0, 50.0), rng)
    before = search.tree()
    assert np.all(before.low == -1)
    assert np.all(before.high == 3)
    search.spend("even", 50, 50, rng)
    after = search.tree()
    assert float((after.alpha + after.beta - before.alpha - before.beta).sum()) == pytest.approx(50)
    assert np.all((after.alpha - before.alpha) % 1 < 1e-9)
    odds = np.array(search.lookahead.starts[0][1])
    mean = after.alpha / (after.alpha + after.beta)
    assert abs(np.mean(mean - odds)) < STANDARD_ERRORS * 0.5 / np.sqrt(50)


def test_terminal_leaves_are_sure():
    lake = GymTable("frozen_lake_4x4", skill=0.9)
    draw = SimulatorProblem(lake, Settings(depth=2, length=100, win_loss=(0.0, 1.0))).draw(2)
    sure = draw.tree.high < 0.5
    assert 0 < sure.sum() < draw.tree.n_leaves  # holes within two moves
    leaf = int(np.flatnonzero(sure)[0])
    assert [draw.roll(leaf) for _ in range(20)] == [0.0] * 20
    assert {draw.roll(int(np.flatnonzero(~sure)[0])) for _ in range(50)} <= {0.0, 1.0}


def test_other_returns_are_refused():
    with pytest.raises(InputError, match=r"raffle: return of a rollout: must be -1 or 3; got 0\.5"):
        wins_of(Raffle(0.5, 1.0), ODDS, np.array([[3.0, 0.5]]))
    with pytest.raises(RefusedError, match="raffle: pilot rollouts all end alike"):
        estimate_odds(Raffle(1 - 1e-12, 1.0), ODDS, np.random.default_rng(0))
    with pytest.raises(InputError, match="win_loss: must be a low and a higher number"):
        Settings(win_loss=(1.0, 1.0))
    with pytest.raises(InputError, match="prior: must be of the kind of beliefs"):
        world, rng = Raffle(0.5, 1.0), np.random.default_rng(0)
        Search(world, world.start(rng), ODDS, Prior(1.0, 1.0, 1.0), rng)
