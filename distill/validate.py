"""A scorer file against exact labels: what its picks lose, beside the closed forms; floor 6."""

from __future__ import annotations

import os
from collections.abc import Mapping, Sequence
from typing import Any, Final

import numpy as np

from distill.candidates import Candidates, split_by_tree
from distill.errors import InputError
from distill.fallback import spreads
from distill.feature_graph import FeatureGraph
from distill.metrics import measure, random_forgone
from distill.origins import share_origin
from distill.peers import measure_peers, timed_cases
from distill.query import Query
from distill.runtime import Scorer
from distill.scorer_inputs import RECORD
from distill.slices import Scored, calibration, forgone_by_slice, stop_curve, tree_facts
from distill.timing import time_scorer, tree_of
from distill.tree import Floats
from distill.voc import price

__all__ = ["baselines", "examine", "sample_pairs", "static_values", "validate", "value_of_scorer"]

TIMED_LEAVES: Final = 64  # of the decision whose latency is stated
_BOOT_OF_PARTS: Final = 200  # draws of the bootstrap for the many figures of slices, bins and prices


def examine(
    scorer: Scorer,
    candidates: Candidates,
    *,
    facts: Mapping[str, Floats] | None = None,
    prices: Sequence[float] = (),
    n_boot: int = 1000,
    seed: int = 0,
) -> dict[str, Any]:
    """What the picks of a scorer file lose on labelled candidates: figures with intervals, as JSON values.

    Candidates go through `Scorer.score` tree by tree, with guard and fallback, as in an agent. prices : u
    a rollout, for the stop loss. n_boot, seed : of the bootstrap over trees. facts : what trees are sliced
    by, from `tree_facts`; with them come `slices`, `calibration` and `stop_curve`, see `distill.slices`.
    """
    scores = scorer.score(**candidates.columns, tree=candidates.tree)
    found = _measured(candidates, scores.voc, prices, n_boot, seed)
    found["in_range_percent"] = 100 * float(np.mean(scores.in_range))
    if facts is None:
        return found
    scored = Scored.of(candidates, scores.voc, scores.voc_high)
    n_boot = min(n_boot, _BOOT_OF_PARTS)
    slices = forgone_by_slice(scored, facts, n_boot=n_boot, seed=seed)
    stated = scorer.facts.get("calibration", {}).get("coverage")
    return {
        **found,
        "calibration": {"stated": stated, **calibration(scored, slices, n_boot=n_boot, seed=seed)},
        "slices": slices,
        "stop_curve": stop_curve(scored, n_boot=n_boot, seed=seed),
    }


def sample_pairs(
    scorer: Scorer, candidates: Candidates, *, limit: int = 600, least: float = 1e-8, seed: int = 0
) -> dict[str, Any]:
    """Exact and predicted values side by side, for a picture, as JSON values; four digits each.

    Values are shares of the tree's scale (a rollout, where the label is a rate). A random `limit` of the
    candidates where one of the two reaches `least`, from trees drawn at random; `candidates` and `smaller`
    count those that do and do not in the trees drawn. A predicted value below 0 counts as 0.
    """
    rng = np.random.default_rng(seed)
    sizes = candidates.groups.sizes
    order = rng.permutation(len(sizes))
    before = np.cumsum(sizes[order]) - sizes[order]
    keep = np.zeros(len(sizes), dtype=bool)
    keep[order[before < 8 * limit]] = True  # some to spare: many candidates are worth next to nothing
    drawn = candidates.of_trees(keep)
    groups, columns = drawn.groups, drawn.columns
    scale = groups.spread(groups.highest(spreads(drawn.kind, columns)))
    uncertain = scale > 0
    unit = np.where(uncertain, scale, 1)
    exact = drawn.label / unit
    predicted = np.maximum(scorer.score(**columns, tree=drawn.tree).voc / unit, 0)
    shown = np.flatnonzero(uncertain & (np.maximum(exact, predicted) >= least))
    chosen = np.sort(rng.permutation(shown)[:limit])
    return {
        "exact": [float(f"{x:.4g}") for x in exact[chosen]],
        "predicted": [float(f"{x:.4g}") for x in predicted[chosen]],
        "least": least,
        "trees": len(groups.sizes),
        "candidates": len(shown),
        "smaller": len(exact) - len(shown),
    }


def static_values(candidates: Candidates) -> Floats:
    """The static value of each row, a rate where the label is one: it costs almost nothing; shape (n,)."""
    groups = candidates.groups
    trees = candidates.trees() if candidates.kind is RECORD else iter(())
    rates = []
    for a, n in zip(groups.starts, groups.sizes, strict=True):
        table = {name: x[a : a + n] for name, x in candidates.columns.items()}
        batch = None if candidates.is_rate else int(candidates.batch[a])
        query = Query(horizon=0.0, batch=batch, remaining=int(table["remaining"][0]))
        tree = next(trees) if candidates.kind is RECORD else tree_of(table)
        rates.append(price(tree, query).voc)
    return np.concatenate(rates)


def baselines(
    candidates: Candidates,
    first_order: Floats,
    *,
    prices: Sequence[float] = (),
    n_boot: int = 1000,
    seed: int = 0,
) -> dict[str, dict[str, Any]]:
    """The same figures for picks that cost almost nothing, on the same trees.

    static closed form : the exact value if no rollout followed. first-order closed form : the scorer's own
    starting point. random pick : its expectation, without interval.
    """
    share, relative = random_forgone(candidates.tree, candidates.label, weight=candidates.tree_weights)
    return {
        "static closed form": _measured(candidates, static_values(candidates), prices, n_boot, seed),
        "first-order closed form": _measured(candidates, first_order, prices, n_boot, seed),
        "random pick": {
            "forgone_percent": {"value": None if np.isnan(share) else share},
            "relative_forgone_percent": {"value": None if np.isnan(relative) else relative},
        },
    }


def _measured(
    candidates: Candidates, score: Floats, prices: Sequence[float], n_boot: int, seed: int
) -> dict[str, Any]:
    return measure(
        candidates.tree,
        candidates.label,
        score,
        weight=candidates.tree_weights,
        cluster=candidates.clusters,
        cost=candidates.columns["cost"],
        prices=prices,
        rollouts=1.0 if candidates.is_rate else candidates.batch,
        n_boot=n_boot,
        seed=seed,
    ).to_json()


def value_of_scorer(scorer: Scorer) -> dict[str, Any]:
    """What a scorer scores: `horizon`, and `batch` or None for the rate; the dynamic rate without a file."""
    value: dict[str, Any] = scorer.facts.get("about", {}).get("value", {"horizon": "inf", "batch": None})
    return value


def validate(
    scorer: str | os.PathLike[str] | Scorer,
    dataset: str | os.PathLike[str],
    *,
    prices: Sequence[float] = (),
    n_boot: int = 1000,
    seed: int = 0,
    with_peers: bool = False,
) -> dict[str, Any]:
    """A scorer file against the exact labels of a dataset, as JSON values.

    `part` says which trees: "held_out" where the dataset draws on the trees that the scorer was trained
    on, else "all". `accuracy` is as from `examine`; `beside` has the closed forms on the same trees; `pairs`
    is as from `sample_pairs`. with_peers : also time the scorer on decisions of 64 leaves (`latency`) and
    measure what else could pick on the same trees, within the scorer's time where that can be chosen
    (`peers`, and `peers_left_out` with reasons).
    Raises InputError where the dataset's value is another than the scorer was trained on.
    """
    if not isinstance(scorer, Scorer):
        scorer = Scorer.load(scorer)
    candidates, about = Candidates.read(dataset, like=scorer.kind)
    trained, asked = scorer.facts.get("about", {}), value_of_scorer(scorer)
    if asked != about["value"]:
        raise InputError(f"{dataset}: value", f"must be the scorer's, {asked}", about["value"])
    if scorer.kind is not None and scorer.kind is not candidates.kind:
        raise InputError(
            f"{dataset}: input", f"must be the scorer's, {scorer.kind.name}", candidates.kind.name
        )
    # The split goes by what a tree holds, so it serves whatever else stands in either dataset.
    same_trees = share_origin(trained.get("data", {}).get("drawn_from", ()), about["data"]["drawn_from"])
    if same_trees:
        candidates = split_by_tree(candidates, trained["seed"]).held_out
    graph = FeatureGraph.of_value(about["value"], candidates.kind)
    first_order = graph.matrix({**candidates.columns, "tree": candidates.tree}).first_order
    beside: dict[str, Any] = {}
    if with_peers:
        cases = timed_cases(candidates, about["value"], TIMED_LEAVES, seed)
        latency = time_scorer(scorer, cases)
        rivals, gone = measure_peers(candidates, cases, about["value"], latency.p50, n_boot=n_boot, seed=seed)
        beside = {"latency": latency.to_json(), "peers": rivals, "peers_left_out": gone}
    return {
        **about,
        **beside,
        "part": "held_out" if same_trees else "all",
        "accuracy": examine(
            scorer, candidates, facts=tree_facts(candidates), prices=prices, n_boot=n_boot, seed=seed
        ),
        "beside": baselines(candidates, first_order, prices=prices, n_boot=n_boot, seed=seed),
        "pairs": sample_pairs(scorer, candidates, seed=seed),
    }
