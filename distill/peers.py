"""Other ways to pick the next rollout, measured on the same trees at their own cost; floor 5.

What an engineer would try first, each as fast as it was cheap to make it: closed forms in NumPy, the rest
compiled. All read the same leaf table as the scorer; exact values judge them. UCT and Thompson sampling
pick without a value, so only their picks count.
"""

# mypy: allow-untyped-calls
from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from typing import Any, Final

import numpy as np

from distill.candidates import Candidates
from distill.closed_form import PEAK, static_rates
from distill.feature_graph import FeatureGraph
from distill.kernels import compiled
from distill.metrics import measure
from distill.numerics import gain, norm_cdf, norm_pdf
from distill.scorer_inputs import LEAF_TABLE, RECORD
from distill.timing import Decision, Timing, decisions, time_calls, tree_decisions
from distill.tree import Floats

__all__ = ["Peer", "measure_peers", "peers", "timed_cases"]

# Leaf table of one tree and the rollouts left -> a score a leaf; the largest is the pick.
Peer = Callable[[Mapping[str, Any], float], Floats]

_NODES, _WEIGHTS = np.polynomial.hermite_e.hermegauss(9)
_SHARES: Final = _WEIGHTS / _WEIGHTS.sum()
_SAMPLES: Final = (4, 6, 8, 12, 16, 24, 32, 48, 64)
_TIMED: Final = 400
_MOST_TREES: Final = 1000
_CASES: Final = 50
_POOLED: Final = 400


def peers(value: Mapping[str, Any], samples: int, seed: int = 0) -> dict[str, Peer]:
    """Name -> peer. value : horizon and batch that are asked. samples : of the Monte Carlo peer.

    UCT is UCB1 over leaves (Auer et al. 2002) with the tree's scale as its unit, a leaf's count being its
    noise variance over its variance, what its prior is worth included. Thompson sampling (1933) draws each
    leaf's value once and takes the best.
    """
    graph = FeatureGraph.of_value(value)
    batch: int | None = value["batch"]
    rng = np.random.default_rng(seed)

    def first_order(t: Mapping[str, Any], left: float) -> Floats:
        return graph.matrix({**t, "remaining": left}).first_order

    def static(one: int | None) -> Peer:
        def scored(t: Mapping[str, Any], left: float) -> Floats:
            place = {name: t[name] for name in ("mean", "var", "noise_var", "gain", "offset")}
            return static_rates(**place, remaining=left, batch=one)[0]

        return scored

    def matching(t: Mapping[str, Any], left: float) -> Floats:
        return np.asarray(_matched(*_flat(t), int(left), batch or 0, _NODES, _SHARES))

    def sampled(t: Mapping[str, Any], left: float) -> Floats:
        return np.asarray(_sampled(rng, *_flat(t), int(left), batch or 0, samples))

    def uct(t: Mapping[str, Any], left: float) -> Floats:
        del left
        m, v, n, _ = _flat(t)
        count = np.maximum(n / np.maximum(v, 1e-300), 1e-9)
        return np.asarray(m + math.sqrt(v.max()) * np.sqrt(2 * np.log1p(count.sum()) / count))

    def thompson(t: Mapping[str, Any], left: float) -> Floats:
        del left
        m, v, _, _ = _flat(t)
        return m + np.sqrt(v) * rng.standard_normal(len(m))

    return {
        "first-order closed form": first_order,
        "static VOC of one rollout": static(1),
        "static closed form": static(batch),
        "moment matching with quadrature": matching,
        "Monte Carlo in equal time": sampled,
        "UCT": uct,
        "Thompson sampling": thompson,
    }


def measure_peers(
    candidates: Candidates,
    cases: list[Decision],
    value: Mapping[str, Any],
    equal_us: float,
    *,
    n_boot: int = 1000,
    seed: int = 0,
) -> dict[str, dict[str, Any]]:
    """Figures of each peer's picks, and its time, as JSON values.

    Empty but for the dynamic value of independent Gaussian leaf tables, which is what these read.
    candidates : labelled ones, of which the first 1,000 trees are judged. cases : decisions to time.
    equal_us : median time that Monte Carlo may take: it uses as many samples as fit.
    """
    if candidates.kind is not LEAF_TABLE or not math.isinf(float(value["horizon"])):
        return {}
    candidates = candidates.of_trees(np.arange(len(candidates.groups.sizes)) < _MOST_TREES)
    name = "Monte Carlo in equal time"
    samples = _SAMPLES[0]
    for more in _SAMPLES:
        if _time(peers(value, more, seed)[name], cases).p50 > equal_us:
            break
        samples = more
    out = {}
    for name, peer in peers(value, samples, seed).items():
        scores = []
        for a, n in zip(candidates.groups.starts, candidates.groups.sizes, strict=True):
            table = {key: x[a : a + n] for key, x in candidates.columns.items() if key != "remaining"}
            scores.append(peer(table, float(candidates.columns["remaining"][a])))
        found = measure(
            candidates.tree,
            candidates.label,
            np.concatenate(scores),
            weight=candidates.tree_weights,
            cluster=candidates.clusters,
            n_boot=n_boot,
            seed=seed,
        ).to_json()
        kept = ("forgone_percent", "relative_forgone_percent", "top1_percent")
        out[name] = {key: found[key] for key in kept} | {"latency": _time(peer, cases).to_json()}
    out["Monte Carlo in equal time"]["samples"] = samples
    return out


def timed_cases(candidates: Candidates, value: Mapping[str, Any], n_leaves: int, seed: int) -> list[Decision]:
    """Fifty decisions of `n_leaves` leaves to time a scorer of the candidates' kind and its peers on.

    Leaf tables are pooled from the rows; records from the trees themselves, of which the first 400 serve.
    """
    if candidates.kind is not RECORD:
        pool = {**candidates.columns, "tree": candidates.tree}
        return decisions(pool, n_leaves, _CASES, seed, kind=candidates.kind)
    few = candidates.of_trees(np.arange(len(candidates.groups.sizes)) < _POOLED)
    return tree_decisions(list(few.trees()), n_leaves, _CASES, seed, horizon=float(value["horizon"]))


def _time(peer: Peer, cases: list[Decision]) -> Timing:
    """Time of a pick, from arrays to position."""
    return time_calls(lambda case: int(np.argmax(peer(case.columns, case.remaining))), cases, calls=_TIMED)


def _flat(t: Mapping[str, Any]) -> tuple[Floats, Floats, Floats, Any]:
    """Means, variances and noise at the root, and actions."""
    g = t["gain"]
    return g * t["mean"] + t["offset"], g * g * t["var"], g * g * t["noise_var"], t["action"]


# --- kernels ---------------------------------------------------------------------------------------


@compiled
def _best_other(value: Floats, own: int) -> float:
    """The largest value of another action; -inf where there is none."""
    rival = -np.inf
    for a in range(len(value)):
        if a != own:
            rival = max(rival, value[a])
    return rival


@compiled
def _larger(m1, v1, m2, v2):  # type: ignore[no-untyped-def]
    """Mean and variance of the larger of two independent normals (Clark 1961, eqs. 1-6)."""
    theta = math.sqrt(v1 + v2)
    if theta <= 0.0:
        return max(m1, m2), 0.0
    p = (m1 - m2) / theta
    mean = m2 + theta * gain(p)
    upper, density = norm_cdf(p), norm_pdf(p)
    square = (m1 * m1 + v1) * upper + (m2 * m2 + v2) * (1.0 - upper) + (m1 + m2) * theta * density
    return mean, max(square - mean * mean, 0.0)


@compiled
def _peak(gap, v, n, left):  # type: ignore[no-untyped-def]
    """The best whole batch for a static gap, by the fit of the closed form."""
    if v <= 0.0:
        return 1.0
    u2 = gap * gap / v
    k = u2 * (PEAK[0] + PEAK[1] / (u2 + PEAK[2])) * n / v
    return max(1.0, min(float(left), math.floor(k + 0.5)))


@compiled
def _matched(m, v, noise, action, left, batch, nodes, shares):  # type: ignore[no-untyped-def]
    """Dynamic value by moments: every maximum is taken for a normal, the outcome by quadrature.

    Siblings' maxima come from running maxima from both ends. The batch is that of the threshold to the
    rival, unless one is given.
    """
    n_leaves = len(m)
    n_actions = action.max() + 1
    before = np.full((n_leaves, 2), -np.inf)
    after = np.full((n_leaves, 2), -np.inf)
    for order, out in ((1, before), (-1, after)):
        so_far = np.full((n_actions, 2), -np.inf)
        for j in range(n_leaves):
            i = j if order == 1 else n_leaves - 1 - j
            a = action[i]
            out[i, 0], out[i, 1] = so_far[a, 0], so_far[a, 1]
            if so_far[a, 0] == -np.inf:
                so_far[a, 0], so_far[a, 1] = m[i], v[i]
            else:
                so_far[a, 0], so_far[a, 1] = _larger(so_far[a, 0], so_far[a, 1], m[i], v[i])
        value = so_far[:, 0]
    scores = np.zeros(n_leaves)
    for i in range(n_leaves):
        rival = _best_other(value, action[i])
        if v[i] <= 0.0 or rival == -np.inf or (left < 1 and batch == 0):
            continue
        if before[i, 0] == -np.inf:
            mu, r2 = after[i, 0], after[i, 1]
        elif after[i, 0] == -np.inf:
            mu, r2 = before[i, 0], before[i, 1]
        else:
            mu, r2 = _larger(before[i, 0], before[i, 1], after[i, 0], after[i, 1])
        k = float(batch) if batch > 0 else _peak(rival - m[i], v[i], noise[i], left)
        s2 = v[i] * v[i] / (v[i] + noise[i] / k)
        total, mean = 0.0, 0.0
        for j in range(len(nodes)):
            x = m[i] + math.sqrt(s2) * nodes[j]
            g = x if mu == -np.inf else _larger(x, max(v[i] - s2, 0.0), mu, r2)[0]
            total += shares[j] * max(g, rival)
            mean += shares[j] * g
        scores[i] = max(total - max(mean, rival), 0.0) / (1.0 if batch > 0 else k)
    return scores


@compiled
def _sampled(rng, m, v, noise, action, left, batch, samples):  # type: ignore[no-untyped-def]
    """Dynamic value by samples: leaf values drawn once, shared by all candidates and outcomes.

    An even number of outcomes in opposite pairs; where all candidates come to 0, the most uncertain leads.
    """
    n_leaves, n_actions = len(m), action.max() + 1
    x = np.empty((samples, n_leaves))
    top = np.full((samples, n_actions, 2), -np.inf)
    value = np.zeros(n_actions)
    for s in range(samples):
        for i in range(n_leaves):
            x[s, i] = rng.standard_normal()
            y = m[i] + math.sqrt(v[i]) * x[s, i]
            a = action[i]
            if y > top[s, a, 0]:
                top[s, a, 1], top[s, a, 0] = top[s, a, 0], y
            elif y > top[s, a, 1]:
                top[s, a, 1] = y
        for a in range(n_actions):
            value[a] += top[s, a, 0] / samples
    outcomes = np.empty(samples)
    for o in range(0, samples - 1, 2):
        outcomes[o] = rng.standard_normal()
        outcomes[o + 1] = -outcomes[o]
    scores = np.zeros(n_leaves)
    for i in range(n_leaves):
        rival = _best_other(value, action[i])
        if v[i] <= 0.0 or rival == -np.inf or (left < 1 and batch == 0):
            continue
        k = float(batch) if batch > 0 else _peak(rival - m[i], v[i], noise[i], left)
        s2 = v[i] * v[i] / (v[i] + noise[i] / k)
        moved, rest = math.sqrt(s2), math.sqrt(max(v[i] - s2, 0.0))
        total, mean = 0.0, 0.0
        for o in range(samples):
            g = 0.0
            for s in range(samples):
                own = m[i] + math.sqrt(v[i]) * x[s, i]
                siblings = top[s, action[i], 1] if own == top[s, action[i], 0] else top[s, action[i], 0]
                g += max(siblings, m[i] + moved * outcomes[o] + rest * x[s, i]) / samples
            total += max(g, rival) / samples
            mean += g / samples
        scores[i] = max(total - max(mean, rival), 0.0) / (1.0 if batch > 0 else k)
        scores[i] += 1e-12 * moved
    return scores
