"""Other ways to pick the next rollout, measured on the same trees at their own cost; floor 6.

What an engineer would try first, each as fast as it was cheap to make it: closed forms in NumPy, the rest
compiled. Leaf tables are read as the scorer reads them; peers of a record scorer read the tree itself, as the
agent that searches it holds it, and the first-order closed form reads the record rows. Exact values judge
them. UCT and Thompson sampling pick without a value, so only their picks count. What is not defined for an
input or a value is left out, with the reason.
"""

# mypy: allow-untyped-calls
from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Mapping
from typing import Any, Final

import numpy as np

from distill.candidates import Candidates
from distill.closed_form import static_rates
from distill.fallback import closed_form_values
from distill.feature_graph import FeatureGraph
from distill.metrics import measure
from distill.record_rows import LeafMoments
from distill.scorer_inputs import ANY_BATCH, ANY_HORIZON, LEAF_TABLE, RECORD, WIN_LOSS_TABLE, InputKind
from distill.table_peer_kernels import matched_on_table, sampled_on_table, sampled_wins
from distill.timing import Decision, Timing, correlated, decisions, time_calls, tree_decisions, tree_of
from distill.tree import Floats
from distill.tree_peer_kernels import NODES, SHARES
from distill.tree_peers import (
    CORRELATED_MOMENTS,
    FIRST_ORDER,
    MOMENTS,
    ONE,
    SAMPLES,
    STATIC,
    THOMPSON,
    UCT,
    Held,
    static_of_tree,
    tree_peers,
)

__all__ = ["Peer", "left_out", "measure_peers", "peers", "timed_cases"]

# Leaf table of one tree and the rollouts left -> a score a leaf; the largest is the pick.
Peer = Callable[[Mapping[str, Any], float], Floats]

AS_NORMALS: Final = "static closed form, leaves as normals"  # of win/loss leaves
_NAMES: Final = (FIRST_ORDER, ONE, STATIC, AS_NORMALS, MOMENTS, SAMPLES, UCT, THOMPSON)

_COUNTS: Final = (4, 6, 8, 12, 16, 24, 32, 48, 64)  # samples that Monte Carlo may use
_TIMED: Final = 400
_MOST_TREES: Final = 1000
_CASES: Final = 50
_SECONDS: Final = 5.0  # for the time of one peer
_POOLED: Final = 400


# --- leaf tables -----------------------------------------------------------------------------------


def peers(
    value: Mapping[str, Any], samples: int, seed: int = 0, *, kind: InputKind = LEAF_TABLE
) -> dict[str, Peer]:
    """Name -> peer for a kind of leaf table. value : horizon and batch asked; samples : of Monte Carlo.
    Where the batch varies, each table brings its own.

    UCT is UCB1 over leaves (Auer et al. 2002) with the tree's scale as its unit, a leaf's count being its
    noise variance over its variance, what its prior is worth included. Thompson sampling (1933) draws each
    leaf's value once and takes the best. Win/loss leaves count as normals of the same moments for moment
    matching and one static rate; one rollout's static value is exact for them, and samples are of wins.
    """
    graph = FeatureGraph.of_value(value, kind)
    rng = np.random.default_rng(seed)
    wins = kind is WIN_LOSS_TABLE
    flat = _flat_wins if wins else _flat

    def asked(t: Mapping[str, Any]) -> int | None:
        batch: int | None = value["batch"] if kind is not ANY_BATCH else int(np.ravel(t["batch_size"])[0])
        return batch

    def first_order(t: Mapping[str, Any], left: float) -> Floats:
        return graph.matrix({**t, "remaining": left}).first_order

    def static(t: Mapping[str, Any], left: float, batch: int | None) -> Floats:
        place = {name: t[name] for name in ("mean", "var", "noise_var", "gain", "offset")}
        return static_rates(**place, remaining=left, batch=batch)[0]

    def static_of_one(t: Mapping[str, Any], left: float) -> Floats:
        return static(t, left, 1)

    def static_of_asked(t: Mapping[str, Any], left: float) -> Floats:
        return static(t, left, asked(t))

    def as_normals(t: Mapping[str, Any], left: float) -> Floats:
        return closed_form_values(WIN_LOSS_TABLE, t, left, asked(t))[0]

    def matching(t: Mapping[str, Any], left: float) -> Floats:
        return np.asarray(matched_on_table(*flat(t), int(left), asked(t) or 0, NODES, SHARES))

    def sampled(t: Mapping[str, Any], left: float) -> Floats:
        if not wins:
            return np.asarray(sampled_on_table(rng, *flat(t), int(left), asked(t) or 0, samples))
        low, span = t["offset"] + t["gain"] * t["low"], t["gain"] * (t["high"] - t["low"])
        place = (t["alpha"], t["beta"], low, span, t["action"])
        return np.asarray(sampled_wins(rng, *place, int(left), asked(t) or 0, samples))

    def uct(t: Mapping[str, Any], left: float) -> Floats:
        del left
        m, v, n, _ = flat(t)
        count = np.maximum(n / np.maximum(v, 1e-300), 1e-9)
        return np.asarray(m + math.sqrt(v.max()) * np.sqrt(2 * np.log1p(count.sum()) / count))

    def thompson(t: Mapping[str, Any], left: float) -> Floats:
        del left
        if not wins:
            m, v, _, _ = flat(t)
            return m + np.sqrt(v) * rng.standard_normal(len(m))
        drawn = t["low"] + (t["high"] - t["low"]) * rng.beta(t["alpha"], t["beta"])
        return np.asarray(t["gain"] * drawn + t["offset"])

    return {
        FIRST_ORDER: first_order,
        ONE: _one_trial if wins else static_of_one,
        **({AS_NORMALS: as_normals} if wins else {STATIC: static_of_asked}),
        MOMENTS: matching,
        SAMPLES: sampled,
        UCT: uct,
        THOMPSON: thompson,
    }


def _flat(t: Mapping[str, Any]) -> tuple[Floats, Floats, Floats, Any]:
    """Means, variances and noise at the root, and actions."""
    g = t["gain"]
    return g * t["mean"] + t["offset"], g * g * t["var"], g * g * t["noise_var"], t["action"]


def _flat_wins(t: Mapping[str, Any]) -> tuple[Floats, Floats, Floats, Any]:
    """The same of win/loss leaves, by the moments of their beliefs."""
    found = LeafMoments.of({name: t[name] for name in ("alpha", "beta", "low", "high")}, math.inf)
    v = np.square(t["gain"]) * found.var
    return t["gain"] * found.mean + t["offset"], v, v * found.noise_ratio, t["action"]


def _one_trial(t: Mapping[str, Any], left: float) -> Floats:
    """Static value of one win/loss trial: it counts where a win, or a loss, changes which leaf leads."""
    del left
    total = t["alpha"] + t["beta"]
    low, span = t["offset"] + t["gain"] * t["low"], t["gain"] * (t["high"] - t["low"])
    share = t["alpha"] / total
    m = low + span * share
    if len(m) < 2:
        return np.zeros(len(m))
    top = int(np.argmax(m))
    rival = np.full(len(m), m[top])
    rival[top] = np.max(np.delete(m, top))
    won = low + span * (t["alpha"] + 1) / (total + 1)
    lost = low + span * t["alpha"] / (total + 1)
    gains = np.where(m > rival, (1 - share) * (rival - lost), share * (won - rival))
    return np.asarray(np.maximum(gains, 0.0))


# --- what is measured ------------------------------------------------------------------------------


def left_out(kind: InputKind, value: Mapping[str, Any], *, with_cov: bool = False) -> dict[str, str]:
    """Name -> reason, of the peers that are not defined for an input and a value.

    >>> left_out(LEAF_TABLE, {"horizon": 0.0, "batch": None})["static closed form"]
    'at horizon 0 it is the exact value itself'
    >>> left_out(LEAF_TABLE, {"horizon": "inf", "batch": None})
    {}
    """
    if kind not in (LEAF_TABLE, ANY_HORIZON, ANY_BATCH, WIN_LOSS_TABLE, RECORD):
        return dict.fromkeys(_NAMES, f"no peer reads a {kind.name}")
    if kind is ANY_HORIZON:
        return dict.fromkeys((MOMENTS, SAMPLES), "values the dynamic case only")
    h = float(value["horizon"])
    out = {}
    if h == 0:
        out[STATIC] = "at horizon 0 it is the exact value itself"
        if value["batch"] == 1:
            out[ONE] = out[STATIC]
    if not math.isinf(h):
        out |= dict.fromkeys((MOMENTS, SAMPLES), "values the dynamic case only")
    elif with_cov:
        out[MOMENTS] = CORRELATED_MOMENTS
    return out


def measure_peers(
    candidates: Candidates,
    cases: list[Decision],
    value: Mapping[str, Any],
    equal_us: float,
    *,
    n_boot: int = 1000,
    seed: int = 0,
) -> tuple[dict[str, dict[str, Any]], dict[str, str]]:
    """Figures of each peer's picks, and its time, as JSON values; and why some are left out.

    candidates : labelled ones, of which the first 1,000 trees are judged. cases : decisions to time.
    equal_us : median time that Monte Carlo may take: it uses as many samples as fit, at least four.
    """
    candidates = candidates.of_trees(np.arange(len(candidates.groups.sizes)) < _MOST_TREES)
    if candidates.kind is RECORD:
        trees = list(candidates.trees())
        with_cov = any(tree.cov is not None for tree in trees) or correlated(cases)
    else:
        trees, with_cov = [], False
    missing = left_out(candidates.kind, value, with_cov=with_cov)
    if set(missing) == set(_NAMES):
        return {}, missing
    on_tree = candidates.kind is RECORD
    timed = [Held.of(case.columns, case.remaining, case.tree) for case in cases]
    judged = [
        Held.of(table, left, trees[i] if on_tree else tree_of(table))
        for i, (table, left) in enumerate(_tables(candidates))
    ]

    def with_samples(count: int) -> dict[str, Callable[[Held], Floats]]:
        if on_tree:
            return tree_peers(value, count, seed)
        ours = peers(value, count, seed, kind=candidates.kind)
        found = {name: _on_table(peer) for name, peer in ours.items()}
        if AS_NORMALS in found:  # the exact static value, which win/loss leaves have no closed form of
            found[STATIC] = static_of_tree(value["batch"])
        return found

    samples = _COUNTS[0]
    for more in _COUNTS if SAMPLES not in missing else ():
        if _time(with_samples(more)[SAMPLES], timed).p50 > equal_us:
            break
        samples = more
    out = {}
    for name, peer in with_samples(samples).items():
        if name in missing:
            continue
        found = measure(
            candidates.tree,
            candidates.label,
            np.concatenate([peer(held) for held in judged]),
            weight=candidates.tree_weights,
            cluster=candidates.clusters,
            n_boot=n_boot,
            seed=seed,
        ).to_json()
        kept = ("trees", "forgone_percent", "relative_forgone_percent", "top1_percent")
        out[name] = {key: found[key] for key in kept} | {"latency": _time(peer, timed).to_json()}
    if SAMPLES in out:
        out[SAMPLES]["samples"] = samples
    return out, missing


def timed_cases(candidates: Candidates, value: Mapping[str, Any], n_leaves: int, seed: int) -> list[Decision]:
    """Fifty decisions of `n_leaves` leaves to time a scorer of the candidates' kind and its peers on.

    Leaf tables are pooled from the rows; records from the trees themselves, of which the first 400 serve.
    """
    if candidates.kind is not RECORD:
        pool = {**candidates.columns, "tree": candidates.tree}
        return decisions(pool, n_leaves, _CASES, seed, kind=candidates.kind)
    few = candidates.of_trees(np.arange(len(candidates.groups.sizes)) < _POOLED)
    return tree_decisions(list(few.trees()), n_leaves, _CASES, seed, horizon=float(value["horizon"]))


def _tables(candidates: Candidates) -> Iterator[tuple[dict[str, Any], int]]:
    """Columns and rollouts left of each tree."""
    for a, n in zip(candidates.groups.starts, candidates.groups.sizes, strict=True):
        table = {key: x[a : a + n] for key, x in candidates.columns.items() if key != "remaining"}
        yield table, int(candidates.columns["remaining"][a])


def _on_table(peer: Peer) -> Callable[[Held], Floats]:
    return lambda held: peer(held.columns, held.remaining)


def _time(peer: Callable[[Held], Floats], cases: list[Held]) -> Timing:
    """Time of a pick, from what the agent holds to the position."""
    return time_calls(lambda held: int(np.argmax(peer(held))), cases, calls=_TIMED, seconds=_SECONDS)
