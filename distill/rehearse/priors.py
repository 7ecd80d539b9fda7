"""What pilot rollouts say about the leaves of a simulator's trees, before any tree is searched."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.optimize import brentq
from scipy.special import digamma, polygamma

from distill.errors import InputError, RefusedError
from distill.rehearse.lookahead import Lookahead, Settings
from distill.rehearse.simulator import Simulator, State
from distill.tree import Floats

__all__ = ["OddsPrior", "Prior", "estimate_odds", "estimate_prior", "returns_of", "wins_of"]

_SAME = 1e-10  # returns that differ by less, as a share of the largest, differ by rounding
_MOST_WEIGHT = 1e6  # degrees of freedom beyond which trees are taken to share one noise
_TRIALS = (0.5, 1000.0)  # fewest and most trials that a prior of odds is worth


@dataclass(frozen=True)
class Prior:
    """What pilot rollouts say about the leaves of a tree, before any tree is searched.

    var : variance of leaf values within a tree, u^2.
    noise_var : typical variance of one rollout, u^2; noise_weight : how many observations the pilot's
        figure is worth against a tree's own (degrees of freedom, inf where trees do not differ).
    """

    var: float
    noise_var: float
    noise_weight: float


def estimate_prior(
    simulator: Simulator,
    settings: Settings,
    rng: np.random.Generator,
    *,
    trees: int = 40,
    leaves: int = 8,
    rollouts: int = 6,
) -> Prior:
    """Empirical Bayes from pilot rollouts on trees met by random play.

    One-way random effects by the method of moments (Searle, Casella and McCulloch 1992, section 3.6):
    within a leaf the pooled variance of its rollouts; between leaves of a tree the variance of their
    averages less noise / rollouts, kept at or above a hundredth of the noise of one rollout. Noise
    differs between trees as a scaled inverse chi square, whose weight comes from the spread of the
    logarithms of the trees' noise estimates (Smyth 2004, section 6.2).

    Raises RefusedError where rollouts do not vary.
    """
    noise, between, freedom, top = [], [], [], 0.0
    for returns in _pilot(simulator, settings, rng, trees, leaves, rollouts):
        top = max(top, float(np.abs(returns).max()))
        within = float(returns.var(axis=1, ddof=1).mean())
        noise.append(within)
        between.append(float(returns.mean(axis=1).var(ddof=1)) - within / rollouts)
        freedom.append(len(returns) * (rollouts - 1))
    typical = float(np.average(noise, weights=freedom)) if noise else 0.0
    if not typical > (_SAME * top) ** 2:
        raise RefusedError(f"{simulator.name}: pilot rollouts do not vary; one at each leaf tells all")
    weight = _noise_weight(np.array(noise), np.array(freedom, dtype=float), typical)
    return Prior(max(float(np.mean(between)), typical / 100), typical, weight)


@dataclass(frozen=True)
class OddsPrior:
    """What pilot rollouts say about the odds of winning at the leaves of a tree.

    mean : odds over all trees. trials : how many trials the odds of a tree are worth as the prior of one
        of its leaves; tree_trials : how many the pilot's mean is worth as the prior of a tree's odds.
    """

    mean: float
    trials: float
    tree_trials: float

    def of_tree(self, wins: Floats) -> tuple[float, float]:
        """alpha, beta of every leaf of a tree where `wins`, shape (leaves, rollouts), were seen first.

        Rollouts at one leaf repeat each other: they count as size / (1 + (rollouts - 1) c), with c the
        correlation of two of them, 1 / (trials + 1) (the design effect, Kish 1965, section 5.4).
        """
        told = wins.size / (1 + (wins.shape[1] - 1) / (self.trials + 1)) if wins.size else 0.0
        seen = float(wins.mean()) if wins.size else 0.0
        odds = (self.tree_trials * self.mean + told * seen) / (self.tree_trials + told)
        return self.trials * odds, self.trials * (1 - odds)


def estimate_odds(
    simulator: Simulator,
    settings: Settings,
    rng: np.random.Generator,
    *,
    trees: int = 40,
    leaves: int = 8,
    rollouts: int = 6,
) -> OddsPrior:
    """Empirical Bayes for rollouts that win or lose, on trees met by random play.

    The same moments as `estimate_prior`: with W the variance of trials at a leaf and B that of odds
    between the leaves of a tree, both averaged over trees, beta beliefs have W / B trials; the spread
    between trees, less what B and W explain of it, gives `tree_trials` in the same way.

    Raises RefusedError where every rollout wins or every one loses.
    """
    within, between, means = [], [], []
    for returns in _pilot(simulator, settings, rng, trees, leaves, rollouts):
        wins = wins_of(simulator, settings, returns)
        w = float(wins.var(axis=1, ddof=1).mean())
        within.append(w)
        between.append(float(wins.mean(axis=1).var(ddof=1)) - w / rollouts)
        means.append(float(wins.mean()))
    mean = float(np.mean(means)) if means else 0.0
    if not 0 < mean < 1:
        raise RefusedError(f"{simulator.name}: pilot rollouts all end alike; one at each leaf tells all")
    W, B = float(np.mean(within)), float(np.mean(between))
    trials = _bounded(W, B)
    apart = float(np.var(means, ddof=1)) - max(B, 0.0) / leaves - W / (leaves * rollouts)
    return OddsPrior(mean, trials, _bounded(mean * (1 - mean) - apart, apart))


def _bounded(noise: float, spread: float) -> float:
    """noise / spread, within the trials that a prior may be worth."""
    least, most = _TRIALS
    return min(max(noise / spread, least), most) if spread > noise / most else most


def wins_of(simulator: Simulator, settings: Settings, returns: Floats) -> Floats:
    """Returns as 1 and 0; InputError where one is neither of `settings.win_loss`."""
    assert settings.win_loss is not None
    low, high = settings.win_loss
    won = returns == high
    if not np.all(won | (returns == low)):
        odd = float(returns[~won & (returns != low)].flat[0])
        raise InputError(f"{simulator.name}: return of a rollout", f"must be {low:g} or {high:g}", odd)
    return np.asarray(won, dtype=np.float64)


def returns_of(
    simulator: Simulator, tree: Lookahead, leaves: Any, rollouts: int, length: int, rng: np.random.Generator
) -> Floats:
    """Returns of `rollouts` at each of some leaves, shape (leaves, rollouts)."""
    return np.array(
        [[tree.rollout(simulator, int(i), rng, length) for _ in range(rollouts)] for i in leaves]
    ).reshape(len(leaves), rollouts)


def _pilot(
    simulator: Simulator, settings: Settings, rng: np.random.Generator, trees: int, leaves: int, rollouts: int
) -> Iterator[Floats]:
    """Returns of pilot rollouts, (at most `leaves`, rollouts), tree by tree that has two open leaves."""
    for state in _wander(simulator, rng, trees):
        tree = settings.tree(simulator, state, rng)
        open_leaves = np.flatnonzero(~tree.sure)
        if len(open_leaves) >= 2:
            chosen = rng.permutation(open_leaves)[:leaves]
            yield returns_of(simulator, tree, chosen, rollouts, settings.length, rng)


def _wander(simulator: Simulator, rng: np.random.Generator, n: int) -> list[State]:
    """States met by random play, restarted at the end of each episode and after 20 steps at most."""
    found: list[State] = []
    while len(found) < n:
        state = simulator.start(rng)
        for _ in range(20):
            if simulator.is_terminal(state) or len(found) == n:
                break
            found.append(state)
            choices = simulator.actions(state)
            state, _ = simulator.step(state, choices[int(rng.random() * len(choices))], rng)
    return found


def _noise_weight(noise: Floats, freedom: Floats, typical: float) -> float:
    """Weight (degrees of freedom) of the inverse chi square behind many trees' noise estimates.

    The logarithm of an estimate with d degrees of freedom varies by trigamma(d / 2), that of the tree's
    own noise by trigamma(weight / 2): the weight solves for what the first leaves over. Trees whose
    rollouts hardly vary at all say nothing about the others and are left out.
    """
    told = noise > 1e-6 * typical
    if np.count_nonzero(told) < 3:
        return np.inf
    half = freedom[told] / 2
    logs = np.log(noise[told]) - digamma(half) + np.log(half)
    excess = float(np.var(logs, ddof=1) - np.mean(polygamma(1, half)))
    if excess <= polygamma(1, _MOST_WEIGHT / 2):
        return np.inf
    return 2 * float(brentq(lambda x: polygamma(1, x) - excess, 1e-4, _MOST_WEIGHT / 2, xtol=1e-12))
