"""Beliefs of a family from recorded posteriors: what was believed before the first rollout; floor 4.

A recorded leaf holds the posterior after `count` rollouts of a search that chose where to look. The prior
variance follows exactly: 1/v0 = 1/v' - count/n (with a covariance S0 = (I - S' K)^-1 S', K = diag(count/n));
for win/loss leaves alpha + beta before is alpha + beta now minus count. The prior mean does not: it is
known only through the posterior mean m', with E[(m' - m0)(m' - m0)^T | m0] = S0 - E[S']. That identity, and
E[m' | m0] = m0, hold for any rule that looks only at what it has seen, because posterior means are
martingales (optional stopping, Doob 1953, chapter VII); weighting leaves by their counts would break it,
since leaves that look good are tried more. So all moments here are unweighted over leaves, and no
correction for selection is needed, as long as the agent's beliefs are Bayes' rule for its own model.

What cannot be told apart is joined: only the product of prior.scale and prior.sd is seen, so the unit is
the typical prior standard deviation (geometric mean). How much of its spread between trees is a common
unit of everything (prior.scale) follows from its covariance with the noise, since a family draws
prior.tree_sd and noise.tree_sd independently.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np

from distill import schema
from distill.errors import InputError
from distill.estimates import Estimated, bootstrap, by_group, field_text, number_text, same_or_spread
from distill.tree import BeliefTree, Floats, Ints
from distill.tree_columns import EdgeRewards, edge_rewards

__all__ = ["NOTHING", "Beliefs", "Prior", "gaussian_beliefs", "normal_text", "prior_of", "uniform_moment"]

_LEAST_ROOM: Final = 1e-6  # 1 - v' count / n: below it, rounding in the record hides the prior variance
NOTHING: Final = 1e-10  # variance of a logarithm that rounding in the records can make of none
_SQRT3: Final = math.sqrt(3.0)


@dataclass(frozen=True, eq=False)
class Prior:
    """What one recorded tree says of its Gaussian prior, per leaf.

    sd : prior standard deviation, NaN where it cannot be told. drop : prior minus present covariance, over
    leaves twice, or its diagonal for independent leaves. impossible : leaves whose variance is larger than
    any prior leaves after `count` rollouts of that noise. shared : the family's correlation, None without.
    misfit : largest difference of a correlation from that of ancestral effects.
    """

    sd: Floats
    drop: Floats
    impossible: int = 0
    shared: float | None = None
    misfit: float = 0.0


@dataclass(frozen=True)
class Beliefs:
    """parameters : name -> estimate. toml : section -> field -> text of the family file."""

    parameters: dict[str, Estimated]
    toml: dict[str, dict[str, str]]


def prior_of(tree: BeliefTree) -> Prior:
    """The Gaussian prior that led to a recorded tree; without `count`, the recorded belief itself."""
    assert tree.noise_var is not None
    pull = np.zeros(tree.n_leaves) if tree.count is None else tree.count / tree.noise_var
    if tree.cov is None:
        assert tree.var is not None
        room = 1.0 - tree.var * pull
        impossible = room <= -1e-9
        known = room > _LEAST_ROOM
        before = np.where(known, tree.var / np.where(known, room, 1), np.nan)
        return Prior(np.sqrt(before), before - tree.var, int(np.count_nonzero(impossible)))
    n = tree.n_leaves
    try:
        before = np.linalg.solve(np.eye(n) - tree.cov * pull, tree.cov)
        before = (before + before.T) / 2
    except np.linalg.LinAlgError:
        before = np.full((n, n), np.nan)
    sound = bool(np.all(np.isfinite(before)) and np.all(np.diag(before) >= np.diag(tree.cov) * (1 - 1e-6)))
    if not sound:
        return Prior(np.full(n, np.nan), np.full((n, n), np.nan), impossible=n)
    sd = np.sqrt(np.diag(before))
    shared, misfit = _ancestral(tree, before, sd)
    return Prior(sd, before - tree.cov, 0, shared, misfit)


def _ancestral(tree: BeliefTree, cov: Floats, sd: Floats) -> tuple[float, float]:
    """Share of variance that inner nodes above the leaves make up, by least squares over pairs of leaves."""
    parent = tree.parent.tolist()
    inner = np.flatnonzero(tree.kind != schema.LEAF)[1:]
    above = np.zeros((tree.n_leaves, len(inner)))
    for i, leaf in enumerate(tree.leaf_nodes.tolist()):
        v = parent[leaf]
        while v > 0:
            above[i, np.searchsorted(inner, v)] = 1
            v = parent[v]
    deep = np.maximum(above.sum(axis=1), 1)
    pattern = above @ above.T / np.sqrt(np.outer(deep, deep))
    off = ~np.eye(tree.n_leaves, dtype=bool) & (np.outer(sd, sd) > 0)
    seen = cov[off] / np.outer(sd, sd)[off]
    expected = pattern[off]
    if not np.any(expected > 0):
        return math.nan, float(np.max(np.abs(seen), initial=0.0))
    shared = float(np.clip(seen @ expected / (expected @ expected), 0, 1))
    return shared, float(np.max(np.abs(seen - shared * expected)))


# --- Gaussian leaves -------------------------------------------------------------------------------


def gaussian_beliefs(
    trees: Sequence[BeliefTree], group: Sequence[int], priors: Sequence[Prior], seed: int = 0
) -> Beliefs:
    """Unit, prior, noise, rewards and costs; `group` numbers the decisions, `priors` from `prior_of`."""
    sure = [p.sd == 0 for p in priors]
    usable = [i for i, p in enumerate(priors) if np.any(p.sd > 0)]
    if not usable:
        raise InputError("traces", "must hold some leaf with a prior variance above 0 that can be told")
    member = np.unique([group[i] for i in usable], return_inverse=True)[1].tolist()
    logs = [_log_levels(trees[i], priors[i]) for i in usable]
    sums = by_group(logs, member)
    spreads = bootstrap(sums, _log_spreads, seed=seed)
    unit, unit_spread = spreads["prior sd, typical"], spreads["unit, spread of log between trees"]
    level = spreads["prior sd, spread of log between trees"].value
    whole = math.hypot(unit_spread.value, level)
    follow = unit_spread.value**2 / whole**2 if whole > 0 and unit_spread.low > 0 else 0.0
    centre = math.log(unit.value)
    rewards, at_leaves = edge_rewards(trees)
    moments = []
    for i, row in zip(usable, logs, strict=True):
        norm = math.exp(centre + follow * (row["L"] - centre))
        moments.append({**row, **_moments(trees[i], priors[i], rewards[i], norm)})
    sums = by_group(moments, member)
    found = bootstrap(sums, lambda s: {**_log_spreads(s), **_spreads(s, follow, centre)}, seed=seed)
    if not any(np.any(trees[i].cost) for i in usable):  # type: ignore[arg-type]
        for name in [name for name in found if name.startswith("cost")]:
            del found[name]
    alike = None if at_leaves else np.concatenate([rewards[i].values for i in usable])
    toml = _gaussian_toml(found, np.concatenate(sure), alike)
    shares = [(g, priors[i].shared) for g, i in zip(member, usable, strict=True)]
    known = [(g, s) for g, s in shares if s is not None and math.isfinite(s)]
    if known:
        toml["correlation"] = {"shared": field_text([round(s, 6) for _, s in known])}
        at = np.unique([g for g, _ in known], return_inverse=True)[1].tolist()
        sums = by_group([{"s": s, "n": 1.0} for _, s in known], at)
        found |= bootstrap(sums, lambda s: {"correlation, shared part": s["s"] / s["n"]}, seed=seed)
    return Beliefs(found, toml)


def _log_levels(tree: BeliefTree, prior: Prior) -> dict[str, float]:
    """Levels of a tree's logs of prior sd (L), noise sd (N) and cost (C), squares and spreads within."""
    assert tree.noise_var is not None
    assert tree.cost is not None
    kept = prior.sd > 0
    row: dict[str, float] = {"t": 1.0, "1/n": 1 / np.count_nonzero(kept), "n": float(np.count_nonzero(kept))}
    columns = {"L": np.log(prior.sd[kept]), "N": np.log(tree.noise_var[kept]) / 2}
    costs = tree.cost[kept]
    columns["C"] = np.log(costs) if np.all(costs > 0) else np.zeros(len(costs))
    means = {name: float(x.mean()) for name, x in columns.items()}
    for name, x in columns.items():
        row |= {
            name: means[name],
            name * 2: means[name] ** 2,
            f"{name} within": float(np.sum((x - x.mean()) ** 2)),
        }
    row |= {"LN": means["L"] * means["N"], "free": row["n"] - 1.0}
    return row


def _log_spreads(s: Mapping[str, Any]) -> dict[str, Any]:
    t = s["t"]

    def within(x: str) -> Any:
        return np.where(s["free"] > 0, s[f"{x} within"] / np.maximum(s["free"], 1), 0.0)

    def cov(a: str, b: str, both: str) -> Any:
        return s[both] / t - s[a] / t * (s[b] / t)

    def between(x: str) -> Any:
        return cov(x, x, x * 2) - within(x) * s["1/n"] / t

    def root(v: Any) -> Any:
        return np.sqrt(np.where(v < NOTHING, 0.0, v))  # what rounding leaves of nothing

    unit = cov("L", "N", "LN")  # the unit is what prior sd and noise sd have in common
    return {
        "prior sd, typical": np.exp(s["L"] / t),
        "unit, spread of log between trees": root(unit),
        "prior sd, spread of log between trees": root(between("L") - unit),
        "prior sd, spread of log between leaves": root(within("L")),
        "noise sd, typical": np.exp((s["N"] - s["L"]) / t),
        "noise sd, spread of log between trees": root(between("N") - unit),
        "noise sd, spread of log between leaves": root(within("N")),
        "cost, typical": np.exp((s["C"] - s["L"]) / t),
        "cost, spread of log between trees": root(between("C") - unit),
        "cost, spread of log between leaves": root(within("C")),
    }


def _moments(tree: BeliefTree, prior: Prior, rewards: EdgeRewards, norm: float) -> dict[str, float]:
    """Sums of first and second moments of prior means and rewards, in units of `norm`."""
    assert tree.mean is not None
    kept = np.isfinite(prior.sd) & (prior.sd > 0)
    x = tree.mean[kept] / norm
    drop = prior.drop if prior.drop.ndim == 2 else np.diag(prior.drop)
    extra = drop[np.ix_(kept, kept)] / norm**2
    action = _actions(tree)[kept]
    same = action[:, None] == action
    own = np.diag(extra)
    # Half squared differences: what all leaves of a tree share moves no decision, and drops out.
    half = ((x[:, None] - x) ** 2 - own[:, None] - own + 2 * extra) / 2
    n = len(x)
    reward = rewards.values / norm
    return {
        "x": float(x.sum()),
        "same": float(half[same].sum()) / n,
        "n same": (np.count_nonzero(same) - n) / n,
        "other": float(half[~same].sum()) / n,
        "n other": np.count_nonzero(~same) / n,
        "r": float(reward.sum()),
        "rr": float(reward @ reward),
        "n r": float(len(reward)),
        "w r": rewards.weights,
        "ww r": rewards.squares,
    }


def _spreads(s: Mapping[str, Any], follow: float, centre: float) -> dict[str, Any]:
    """Prior means and rewards in units of the scale: moments over those of scale / norm, itself spread.

    follow, centre : a tree's norm is exp(centre + follow (its level - centre)).
    """
    logs = _log_spreads(s)
    unit_off = np.exp((1 - follow) * (s["L"] / s["t"] - centre))  # the unit is an estimate too
    unit = logs["unit, spread of log between trees"] ** 2
    leaf = logs["prior sd, spread of log between leaves"] ** 2
    level = logs["prior sd, spread of log between trees"] ** 2
    rest = unit * (1 - follow) ** 2 + follow**2 * (level + leaf * s["1/n"] / s["t"])
    square, first = (uniform_moment(k, np.sqrt(rest)) * unit_off**k for k in (2, 1))
    same, other = s["same"] / s["n same"], s["other"] / s["n other"]
    # With one leaf an action, or one action a tree, the two spreads cannot be told apart.
    lone, single = s["n same"] == 0, s["n other"] == 0
    between_actions = np.where(lone | single, 0.0, (other - same) / square)
    between_leaves = np.where(lone, np.where(single, 0.0, other), same) / square
    # Values are weighted sums over edges: a mean goes with the weights, a variance with their squares.
    r, value = s["r"] / s["w r"], s["r"] / s["n r"]
    spread = np.maximum(s["rr"] / s["n r"] / square - (value / first) ** 2, 0) * (s["n r"] / s["ww r"])
    return {
        "prior mean": s["x"] / s["n"] / first,
        "prior mean, sd between actions": np.sqrt(np.maximum(between_actions, 0)),
        "prior mean, sd between leaves": np.sqrt(np.maximum(between_leaves, 0)),
        "reward": r / first,
        "reward, sd": np.sqrt(spread),
    }


def uniform_moment(power: int, log_sd: Any) -> Any:
    """E[exp(power x)] for x uniform around 0 with this standard deviation."""
    a = np.maximum(power * _SQRT3 * log_sd, 1e-9)
    return np.sinh(a) / a


def _actions(tree: BeliefTree) -> Ints:
    action = np.arange(tree.n_nodes)
    for c, p in enumerate(tree.parent.tolist()):
        if p > 0:
            action[c] = action[p]
    return np.asarray(action[tree.leaf_nodes])


def normal_text(mean: Estimated | None, sd: Estimated) -> str:
    """A normal field; a number where nothing is spread."""
    at = 0.0 if mean is None else mean.value
    spread = sd.value > 1e-9
    return f"{{ normal = [{number_text(at)}, {number_text(sd.value)}] }}" if spread else number_text(at)


def _gaussian_toml(
    found: Mapping[str, Estimated], sure: Any, rewards: Floats | None
) -> dict[str, dict[str, str]]:
    """rewards : those of single edges; None where they are not known one by one."""
    prior = {
        "scale": same_or_spread(found["prior sd, typical"].value, found["unit, spread of log between trees"]),
        "action": normal_text(None, found["prior mean, sd between actions"]),
        "mean": normal_text(found["prior mean"], found["prior mean, sd between leaves"]),
        "tree_sd": same_or_spread(1.0, found["prior sd, spread of log between trees"]),
        "sd": same_or_spread(1.0, found["prior sd, spread of log between leaves"]),
    }
    if np.any(sure):
        prior["sd"] = _with_sure(found["prior sd, spread of log between leaves"].value, float(np.mean(sure)))
    noise = found["noise sd, typical"].value
    toml = {
        "prior": prior,
        "noise": {
            "tree_sd": same_or_spread(1.0, found["noise sd, spread of log between trees"]),
            "sd": same_or_spread(noise, found["noise sd, spread of log between leaves"]),
        },
    }
    same_unit = found["unit, spread of log between trees"].low <= 0
    if rewards is not None and len(np.unique(rewards)) <= 8 and same_unit:
        toml["edge"] = {"reward": field_text(np.round(rewards / found["prior sd, typical"].value, 9))}
    else:
        toml["edge"] = {"reward": normal_text(found["reward"], found["reward, sd"])}
    if "cost, typical" in found:
        toml["cost"] = {
            "tree": same_or_spread(found["cost, typical"].value, found["cost, spread of log between trees"]),
            "leaf": same_or_spread(1.0, found["cost, spread of log between leaves"]),
        }
    return toml


def _with_sure(spread: float, share: float) -> str:
    """Leaf sd as a choice: 0 for sure leaves, else nine middle points of a log-uniform."""
    points = np.exp(_SQRT3 * spread * np.linspace(-1, 1, 19)[1::2]) if spread > 1e-6 else np.ones(1)
    weights = [share, *np.full(len(points), (1 - share) / len(points))]
    numbers = ", ".join(number_text(x) for x in [0.0, *points])
    return f"{{ choice = [{numbers}], weights = [{', '.join(number_text(w) for w in weights)}] }}"
