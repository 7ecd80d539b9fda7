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
from distill.estimates import bootstrap, by_group, field_text, number_text, same_or_spread
from distill.infer_beliefs import NOTHING, Beliefs, normal_text
from distill.tree import BeliefTree

__all__ = ["win_loss_beliefs"]

_SQRT3 = math.sqrt(3.0)


def win_loss_beliefs(trees: Sequence[BeliefTree], group: Sequence[int], seed: int = 0) -> Beliefs:
    """Unit, strength, win rate, low, span, rewards and costs; `group` numbers the decisions."""
    rows = []
    strengths, lows, spans = [], [], []
    for tree in trees:
        assert tree.alpha is not None
        assert tree.beta is not None
        assert tree.low is not None
        assert tree.high is not None
        total = tree.alpha + tree.beta
        s = total - (0 if tree.count is None else tree.count)
        good = s > 1e-9 * total
        if not np.all(good):
            raise InputError(
                "traces",
                "must not hold a win/loss leaf whose alpha + beta is at most its count of rollouts",
                tree.id,
            )
        rate = tree.alpha / total
        square = rate**2 + rate * (1 - rate) / (total + 1)
        span = tree.high - tree.low
        level = float(np.mean(np.log(span)))
        strengths.append(s)
        lows.append(tree.low / math.exp(level))
        spans.append(np.log(span) - level)
        assert tree.cost is not None
        cost = math.log(float(np.mean(tree.cost))) if np.all(tree.cost > 0) else 0.0
        reward = tree.reward[1:] / math.exp(level)
        rows.append(
            {
                "t": 1.0, "n": float(tree.n_leaves), "L": level, "LL": level**2,
                "free": tree.n_leaves - 1.0, "L within": float(np.sum(spans[-1] ** 2)),
                "1/n": 1 / tree.n_leaves, "r1": float(rate.sum()),
                "r2": float(np.sum((square * (s + 1) - rate) / s)),
                "s": float(np.sum(np.log(s))), "ss": float(np.sum(np.log(s) ** 2)),
                "low": float(lows[-1].sum()), "C": cost, "CC": cost**2, "LC": level * cost,
                "r": float(reward.sum()), "rr": float(reward @ reward), "n r": float(len(reward)),
            }
        )  # fmt: skip
    sums = by_group(rows, group)
    found = bootstrap(sums, _win_loss_spreads, seed=seed)
    if not any(np.any(t.cost) for t in trees):  # type: ignore[arg-type]
        for name in [name for name in found if name.startswith("cost")]:
            del found[name]
    mean, sd = found["win rate"].value, found["win rate, sd"]
    spread = _SQRT3 * sd.value
    rate_text = number_text(mean)
    if sd.low > 0:
        ends = np.clip([mean - spread, mean + spread], 1e-6, 1 - 1e-6)
        rate_text = f"[{number_text(ends[0])}, {number_text(ends[1])}]"
    prior = {
        "scale": same_or_spread(found["span, typical"].value, found["unit, spread of log between trees"]),
        "strength": field_text(np.concatenate(strengths).round(6)),
        "win_rate": rate_text,
        "low": field_text(np.concatenate(lows).round(9)),
        "span": same_or_spread(1.0, found["span, spread of log between leaves"]),
    }
    toml = {"prior": prior, "edge": {"reward": normal_text(found["reward"], found["reward, sd"])}}
    if "cost, typical" in found:
        toml["cost"] = {
            "tree": same_or_spread(found["cost, typical"].value, found["cost, spread of log between trees"])
        }
    return Beliefs(found, toml)


def _win_loss_spreads(s: Mapping[str, Any]) -> dict[str, Any]:
    t, n = s["t"], s["n"]
    within = np.where(s["free"] > 0, s["L within"] / np.maximum(s["free"], 1), 0.0)
    unit = np.maximum(s["LL"] / t - (s["L"] / t) ** 2 - within * s["1/n"] / t, 0)
    cost = s["CC"] / t - (s["C"] / t) ** 2
    rate, reward = s["r1"] / n, s["r"] / s["n r"]
    strength = s["s"] / n

    def root(v: Any) -> Any:
        return np.sqrt(np.where(v < NOTHING, 0.0, v))

    return {
        "span, typical": np.exp(s["L"] / t),
        "unit, spread of log between trees": root(unit),
        "span, spread of log between leaves": root(within),
        "strength, typical": np.exp(strength),
        "strength, spread of log": root(s["ss"] / n - strength**2),
        "win rate": rate,
        "win rate, sd": root(s["r2"] / n - rate**2),
        "value of a loss": s["low"] / n,
        "reward": reward,
        "reward, sd": root(s["rr"] / s["n r"] - reward**2),
        "cost, typical": np.exp((s["C"] - s["L"]) / t),
        "cost, spread of log between trees": root(cost - unit),
    }
