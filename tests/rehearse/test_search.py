"""The prior that pilot rollouts give, and the search's bookkeeping."""

from __future__ import annotations

import numpy as np
import pytest
from ladder import CLOSED_FORM

from distill.errors import RefusedError
from distill.rehearse.gym_tables import GymTable
from distill.rehearse.search import Prior, Search, Settings, estimate_prior


class Lottery:
    """One decision among ten: each action's value is drawn once, each rollout adds noise of its round."""

    name = "lottery"
    discount = 1.0

    def __init__(self, spread: float, noise: float, weight: float = np.inf) -> None:
        self.spread, self.noise, self.weight = spread, noise, weight

    def start(self, rng):
        noise = self.noise if np.isinf(self.weight) else self.noise * self.weight / rng.chisquare(self.weight)
        return (None, tuple(rng.normal(0, self.spread, 10)), float(np.sqrt(noise)))

    def actions(self, state):
        return range(10) if state[0] is None else (0,)

    def step(self, state, action, rng):
        chosen, values, noise = state
        if chosen is None:
            return (action, values, noise), 0.0
        return ("over", values, noise), values[chosen] + noise * rng.standard_normal()

    def is_terminal(self, state):
        return state[0] == "over"


@pytest.mark.parametrize(("spread", "noise"), [(1.0, 4.0), (3.0, 1.0), (100.0, 1e4)])
def test_pilot_recovers_prior_variance_and_noise(spread, noise):
    """400 trees of 8 leaves and 6 rollouts: standard errors are about 2 % of noise, 3 to 5 % of variance."""
    world = Lottery(spread, noise)
    prior = estimate_prior(world, Settings(depth=1, length=5), np.random.default_rng(0), trees=800)
    assert prior.noise_var == pytest.approx(noise, rel=0.06)
    assert prior.var == pytest.approx(spread**2, rel=0.2)
    assert prior.noise_weight > 200  # in truth all rounds share one noise


def test_pilot_sees_that_rounds_differ_in_noise():
    world = Lottery(1.0, 4.0, weight=8.0)
    prior = estimate_prior(world, Settings(depth=1, length=5), np.random.default_rng(1), trees=2000)
    assert prior.noise_weight == pytest.approx(8, rel=0.2)


def test_nothing_to_search_is_refused():
    with pytest.raises(RefusedError, match="lottery: pilot rollouts do not vary"):
        estimate_prior(Lottery(1.0, 0.0), Settings(depth=1, length=5), np.random.default_rng(0))


def test_noise_is_shrunk_between_the_pilots_and_the_trees_own():
    world, rng = Lottery(1.0, 9.0), np.random.default_rng(2)
    state, settings = world.start(rng), Settings(depth=1, length=5, opening=(10, 40))
    by_weight = {
        weight: Search(world, state, settings, Prior(1.0, 1.0, weight), np.random.default_rng(3))
        .tree()
        .noise_var[0]
        for weight in (1e-9, 390.0, np.inf)
    }
    assert by_weight[1e-9] == pytest.approx(9, rel=0.2)  # 390 degrees of freedom: 7 % standard error
    assert by_weight[390.0] == pytest.approx((by_weight[1e-9] + 1) / 2, rel=1e-6)
    assert by_weight[np.inf] == 1.0


def test_terminal_leaves_are_sure():
    taxi = GymTable("taxi", discount=0.98)
    before_the_end = next(s for s, q in taxi.optimum().action_values.items() if max(q) == 20)
    search = Search(
        taxi, before_the_end, Settings(depth=1, length=10), Prior(1.0, 1.0, np.inf), np.random.default_rng(0)
    )
    tree = search.tree()
    assert search.lookahead.sure.sum() == 1
    assert np.array_equal(tree.var == 0, search.lookahead.sure)
    search.spend("even", 60, 60, np.random.default_rng(1))
    assert search.used == search.tree().count.sum() == 60
    assert np.array_equal(search.tree().mean[search.lookahead.sure], [0.0])
    assert search.best_action() == 5  # set the passenger down


def test_posterior_mean_is_the_precision_weighted_average():
    """With the rollouts replayed by hand from the same random numbers."""
    world, settings, prior = Lottery(1.0, 4.0), Settings(depth=1, length=5), Prior(2.0, 4.0, np.inf)
    state = world.start(np.random.default_rng(4))
    search = Search(world, state, settings, prior, np.random.default_rng(5))
    start_mean = search.tree().mean[3]
    search.spend(lambda *_: 3, 7, 7, np.random.default_rng(6))
    rng = np.random.default_rng(6)
    returns = [search.lookahead.rollout(world, 3, rng, 5) for _ in range(7)]
    expected = (start_mean / 2 + sum(returns) / 4) / (1 / 2 + 7 / 4)
    assert search.tree().mean[3] == pytest.approx(expected, rel=CLOSED_FORM)
    assert search.tree().var[3] == pytest.approx(1 / (1 / 2 + 7 / 4), rel=CLOSED_FORM)
