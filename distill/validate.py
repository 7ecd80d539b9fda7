"""A scorer file against exact labels: what its picks lose, beside the closed forms; floor 6."""

from __future__ import annotations

import os
from collections.abc import Sequence
from typing import Any

import numpy as np

from distill.candidates import Candidates, split_by_tree
from distill.errors import InputError
from distill.features import FeatureGraph
from distill.metrics import measure, random_forgone
from distill.query import Query
from distill.runtime import Scorer
from distill.timing import tree_of
from distill.tree import Floats
from distill.voc import price

__all__ = ["baselines", "examine", "static_rates", "validate"]


def examine(
    scorer: Scorer, candidates: Candidates, *, prices: Sequence[float] = (), n_boot: int = 1000, seed: int = 0
) -> dict[str, Any]:
    """What the picks of a scorer file lose on labelled candidates: figures with intervals, as JSON values.

    Candidates go through `Scorer.score` tree by tree, with guard and fallback, as in an agent. prices : u
    a rollout, for the stop loss. n_boot, seed : of the bootstrap over trees.
    """
    scores = scorer.score(**candidates.columns, tree=candidates.tree)
    rollouts = 1.0 if candidates.is_rate else candidates.batch
    found = measure(
        candidates.tree,
        candidates.label,
        scores.voc,
        cluster=candidates.clusters,
        prices=prices,
        rollouts=rollouts,
        n_boot=n_boot,
        seed=seed,
    )
    return {**found.to_json(), "in_range_percent": 100 * float(np.mean(scores.in_range))}


def static_rates(candidates: Candidates) -> Floats:
    """The static closed form's rate of each row: the baseline that costs almost nothing; shape (n,)."""
    groups = candidates.groups
    rates = []
    for a, n in zip(groups.starts, groups.sizes, strict=True):
        table = {name: x[a : a + n] for name, x in candidates.columns.items()}
        query = Query(horizon=0.0, batch=None, remaining=int(table["remaining"][0]))
        rates.append(price(tree_of(table), query).voc)
    return np.concatenate(rates)


def baselines(
    candidates: Candidates, first_order: Floats, *, n_boot: int, seed: int
) -> dict[str, dict[str, object]]:
    """The same figures for picks that cost almost nothing, on the same trees.

    static closed form : the exact rate with no rollout to follow. first-order closed form : the
    scorer's own starting point. random pick : its expectation, without interval.
    """
    share, relative = random_forgone(candidates.tree, candidates.label)

    def of(score: Floats) -> dict[str, object]:
        return measure(
            candidates.tree, candidates.label, score, cluster=candidates.clusters, n_boot=n_boot, seed=seed
        ).to_json()

    return {
        "static closed form": of(static_rates(candidates)),
        "first-order closed form": of(first_order),
        "random pick": {
            "forgone_percent": {"value": share},
            "relative_forgone_percent": {"value": relative},
        },
    }


def validate(
    scorer: str | os.PathLike[str] | Scorer,
    dataset: str | os.PathLike[str],
    *,
    prices: Sequence[float] = (),
    n_boot: int = 1000,
    seed: int = 0,
) -> dict[str, Any]:
    """A scorer file against the exact labels of a dataset, as JSON values.

    `part` says which trees: "held_out" where the dataset draws on the trees that the scorer was trained
    on, else "all". `accuracy` is as from `examine`; `beside` has the closed forms on the same trees.
    Raises InputError where the dataset's value is another than the scorer was trained on.
    """
    if not isinstance(scorer, Scorer):
        scorer = Scorer.load(scorer)
    candidates, about = Candidates.read(dataset)
    trained = scorer.facts.get("about", {})
    if trained.get("value", about["value"]) != about["value"]:
        raise InputError(f"{dataset}: value", f"must be the scorer's, {trained['value']}", about["value"])
    same_trees = trained.get("data") and all(
        trained["data"][key] == about["data"][key] for key in ("source_sha256", "seed")
    )
    if same_trees:
        candidates = split_by_tree(candidates, trained["seed"]).held_out
    first_order = FeatureGraph().matrix({**candidates.columns, "tree": candidates.tree}).first_order
    return {
        **about,
        "part": "held_out" if same_trees else "all",
        "accuracy": examine(scorer, candidates, prices=prices, n_boot=n_boot, seed=seed),
        "beside": baselines(candidates, first_order, n_boot=n_boot, seed=seed),
    }
