"""Win/loss beliefs of a family from recorded posteriors; floor 5.

Strength before the first rollout is alpha + beta now minus count. Prior win rates r follow from martingales,
as prior means of Gaussian leaves do: E[p'] = r and E[p'^2 + V'] = E[p^2] = r (1 - r) / (s + 1) + r^2 for the
posterior mean p' and variance V' of a rate with prior strength s, so ((p'^2 + V')(s + 1) - p') / s has mean
r^2, whatever rule chose the leaves.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from distill.errors import InputError
from distill.estimates import Estimated, bootstrap, by_group, field_text, number_text, same_or_spread
from distill.infer_beliefs import NOTHING, Beliefs, normal_text, uniform_moment
from distill.tree import BeliefTree, Floats
from distill.tree_columns import EdgeRewards, edge_rewards

__all__ = ["win_loss_beliefs"]

_SQRT3 = math.sqrt(3.0)
_UNIT = "unit, spread of log between trees"


def win_loss_beliefs(trees: Sequence[BeliefTree], group: Sequence[int], seed: int = 0) -> Beliefs:
    """Unit, strength, win rate, low, span, rewards and costs; `group` numbers the decisions."""
    rows = [_row(tree) for tree in trees]
    spreads = _spreads(by_group(rows, [0] * len(rows)))
    centre = math.log(float(spreads["span, typical"][0]))
    unit, leaf = (float(spreads[key][0]) ** 2 for key in (_UNIT, "span, spread of log between leaves"))
    strengths = []
    for row, tree, rewards in zip(rows, trees, edge_rewards(trees)[0], strict=True):
        # The level of a tree is its unit's, and that of its few spans: as much of it as is likely the unit's.
        noise = leaf * row["1/n"]
        share = unit / (unit + noise) if unit + noise > 0 else 0.0
        norm = math.exp(centre + share * (row["L"] - centre))
        rest = math.sqrt(unit * (1 - share))  # sd of log of unit / norm
        first, second = uniform_moment(1, rest), uniform_moment(2, rest)
        row |= _values(tree, rewards, norm * first, second / first**2)
        strengths.append(_strength(tree))
    found = bootstrap(by_group(rows, group), lambda s: {**_spreads(s), **_moments(s)}, seed=seed)
    if not any(np.any(t.cost) for t in trees):  # type: ignore[arg-type]
        for name in [name for name in found if name.startswith("cost")]:
            del found[name]
    prior = {
        "scale": same_or_spread(found["span, typical"].value, found[_UNIT]),
        "strength": field_text(np.concatenate(strengths).round(6)),
        "win_rate": _uniform_text(found["win rate"].value, found["win rate, sd"], (1e-6, 1 - 1e-6)),
        "low": _uniform_text(found["value of a loss"].value, found["value of a loss, sd"]),
        "span": same_or_spread(1.0, found["span, spread of log between leaves"]),
    }
    toml = {"prior": prior, "edge": {"reward": normal_text(found["reward"], found["reward, sd"])}}
    if "cost, typical" in found:
        toml["cost"] = {
            "tree": same_or_spread(found["cost, typical"].value, found["cost, spread of log between trees"])
        }
    return Beliefs(found, toml)


def _strength(tree: BeliefTree) -> Floats:
    """alpha + beta before the first rollout."""
    assert tree.alpha is not None
    assert tree.beta is not None
    total = tree.alpha + tree.beta
    out: Floats = total - (0 if tree.count is None else tree.count)
    if not np.all(out > 1e-9 * total):
        rule = "must not hold a win/loss leaf whose alpha + beta is at most its count of rollouts"
        raise InputError("traces", rule, tree.id)
    return out


def _row(tree: BeliefTree) -> dict[str, float]:
    """What one tree adds to the sums: levels of logs, and win rates."""
    s = _strength(tree)
    assert tree.alpha is not None
    assert tree.beta is not None
    assert tree.low is not None
    assert tree.high is not None
    assert tree.cost is not None
    total, logs = tree.alpha + tree.beta, np.log(tree.high - tree.low)
    rate = tree.alpha / total
    square = rate**2 + rate * (1 - rate) / (total + 1)
    level = float(np.mean(logs))
    cost = math.log(float(np.mean(tree.cost))) if np.all(tree.cost > 0) else 0.0
    return {
        "t": 1.0, "n": float(tree.n_leaves), "1/n": 1 / tree.n_leaves, "free": tree.n_leaves - 1.0,
        "L": level, "LL": level**2, "L within": float(np.sum((logs - level) ** 2)),
        "r1": float(rate.sum()), "r2": float(np.sum((square * (s + 1) - rate) / s)),
        "s": float(np.sum(np.log(s))), "ss": float(np.sum(np.log(s) ** 2)),
        "C": cost, "CC": cost**2,
    }  # fmt: skip


def _values(tree: BeliefTree, rewards: EdgeRewards, norm: float, square: float) -> dict[str, float]:
    """Sums of rewards and of the values of a loss in units of `norm`; squares are too large by `square`."""
    assert tree.low is not None
    low, reward = tree.low / norm, rewards.values / norm
    return {
        "low": float(low.sum()), "low2": float(low @ low) / square,
        "r": float(reward.sum()), "rr": float(reward @ reward) / square, "n r": float(len(reward)),
        "w r": rewards.weights, "ww r": rewards.squares,
    }  # fmt: skip


def _spreads(s: Mapping[str, Any]) -> dict[str, Any]:
    t, n = s["t"], s["n"]
    within = np.where(s["free"] > 0, s["L within"] / np.maximum(s["free"], 1), 0.0)
    unit = np.maximum(s["LL"] / t - (s["L"] / t) ** 2 - within * s["1/n"] / t, 0)
    cost = s["CC"] / t - (s["C"] / t) ** 2
    rate, strength = s["r1"] / n, s["s"] / n
    return {
        "span, typical": np.exp(s["L"] / t),
        _UNIT: _root(unit),
        "span, spread of log between leaves": _root(within),
        "strength, typical": np.exp(strength),
        "strength, spread of log": _root(s["ss"] / n - strength**2),
        "win rate": rate,
        "win rate, sd": _root(s["r2"] / n - rate**2),
        "cost, typical": np.exp((s["C"] - s["L"]) / t),
        "cost, spread of log between trees": _root(cost - unit),
    }


def _moments(s: Mapping[str, Any]) -> dict[str, Any]:
    low, value = s["low"] / s["n"], s["r"] / s["n r"]
    return {
        "value of a loss": low,
        "value of a loss, sd": _root(s["low2"] / s["n"] - low**2),
        "reward": s["r"] / s["w r"],
        "reward, sd": _root((s["rr"] / s["n r"] - value**2) * (s["n r"] / s["ww r"])),
    }


def _root(v: Any) -> Any:
    return np.sqrt(np.where(v < NOTHING, 0.0, v))


def _uniform_text(mean: float, sd: Estimated, limits: tuple[float, float] = (-math.inf, math.inf)) -> str:
    """A uniform field of this mean and spread, within limits; a number where nothing is spread."""
    if not sd.low > 0:
        return number_text(mean)
    ends = np.clip([mean - _SQRT3 * sd.value, mean + _SQRT3 * sd.value], *limits)
    return f"[{number_text(ends[0])}, {number_text(ends[1])}]"
