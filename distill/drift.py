"""How recorded trees differ from those that a scorer was trained on, column by column; floor 6.

Training is stood for by trees drawn from its family, from the seed of its dataset. Columns are what a tree
looks like in a few numbers, and the scorer's own features.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np

from distill.candidates import Candidates
from distill.errors import DistillError, InputError
from distill.estimates import two_sample
from distill.family import Family, draw, load_family
from distill.feature_graph import FeatureGraph
from distill.origins import same_family
from distill.recorded import refused, unlabelled
from distill.sample_data import family_path
from distill.scorer_inputs import RECORD, VARIES, InputKind
from distill.tree import BeliefTree, Floats
from distill.tree_columns import COLUMNS, tree_columns

__all__ = ["Training", "drift", "trained_family", "training"]

_REFERENCE: Final = 1000  # trees drawn to stand for training
_ONE_PERCENT: Final = 1.628  # Kolmogorov's distribution: distances above it x sqrt(1/n + 1/m) are no chance
_QUARTILES: Final = (0.05, 0.25, 0.5, 0.75, 0.95)
# Of trees of win/loss leaves, whose means and spreads hide where the beliefs stand.
_WIN_LOSS: Final = {
    "win rate": "alpha / (alpha + beta), median leaf",
    "belief strength": "log10 of alpha + beta, median leaf",
    "span": "log10 of high - low, median leaf",
}
# Feature of some input -> what it says of a leaf. A batch: the one of the start value, or the one asked for.
_FEATURES: Final = {
    "threshold": "how far a leaf must rise to change the choice, or fall, over what the batch moves it",
    "sibling_help": "what the other leaves of the action take off that distance",
    "step": "what the batch moves a leaf, over the spread of what its action is worth",
    "above_siblings": "how far a leaf is above the others of its action, over the spread of the two",
    "lead": "how far the leaf's action is above its best rival, over the spread of what it is worth",
    "known": "what is learned of the action without the batch, over what is learned with it",
    "resolved": "share of the leaf's standard deviation that the batch reveals",
    "small_or_many": "log of the best value a rollout of up to 8 rollouts over that of more",
    "large_batch": "log of the best batch where many rollouts add up",
    "trials": "alpha + beta, at most 60",
    "odds": "of the result, win or loss, that leads towards a change of choice",
    "left": "log of the rollouts left over the best batch",
    "bend": "how the difference of the two actions bends where the choice changes",
    "slope_now": "log of the slope of that difference at present over the one where the choice changes",
    "slope_share": "log of the slope where the choice changes over the largest there can be",
    "other_side": "share of the value that comes from moves the other way",
} | {f"batch_of_{k}": f"log of the value a rollout of {k} over the best of such" for k in range(1, 9)}


def trained_family(facts: Mapping[str, Any]) -> Family | None:
    """The family that the scorer was trained on, where its metadata names one that comes with the tool."""
    data = facts.get("about", {}).get("data", {})
    try:
        family = load_family(family_path(str(data.get("source"))))
    except DistillError:
        return None
    return family if same_family(family, data) else None


@dataclass(frozen=True, eq=False)
class Training:
    """What stands for training: trees drawn from the family of that name."""

    name: str
    trees: list[BeliefTree]


def training(family: Family, facts: Mapping[str, Any], kind: InputKind) -> Training:
    """Trees of the family, from the seed of the scorer's dataset, that its input can hold.

    facts : the scorer file's metadata. Raises InputError where none is left.
    """
    seed = int(facts.get("about", {}).get("data", {}).get("seed") or 0)
    drawn = [draw(family, seed, i) for i in range(_REFERENCE)]
    held = [tree for tree in drawn if refused(tree, kind) is None]
    if not held:
        raise InputError(
            "family", f"must be what the scorer was trained on: it reads a {kind.name}", family.name
        )
    return Training(family.name, held)


def drift(
    trees: Sequence[BeliefTree],
    candidates: Candidates,
    facts: Mapping[str, Any],
    value: Mapping[str, Any],
    reference: Training | None,
    decisions: int,
) -> dict[str, Any]:
    """Column -> quantiles now and in training, their distance, and what chance alone would give.

    trees : those of the candidates, in order. facts : the scorer file's metadata. value : the
    horizon and batch that it scores. reference : what it was trained on; without, nothing is compared.
    decisions : how many of the trees are independent.
    """
    kind = candidates.kind
    graph = FeatureGraph.of_value(value, kind)
    seen = _columns(trees, candidates, graph)
    trained: dict[str, Floats] = {}
    drawn = reference.trees if reference is not None else []
    if drawn:
        h = value["horizon"]
        rows = unlabelled(drawn, kind, None if h == VARIES else float(h))
        trained = _columns(drawn, rows, graph)
    chance = _ONE_PERCENT * math.sqrt(1 / decisions + 1 / max(len(drawn), 1))
    ranges = facts.get("ranges", {})
    columns: dict[str, Any] = {}
    for name, x in seen.items():
        if not np.any(np.isfinite(x)):
            continue
        columns[name] = {"meaning": _meaning(name, kind), "now": _quantiles(x)}
        if name in trained:
            distance = two_sample(x, trained[name])
            columns[name] |= {
                "training": _quantiles(trained[name]),
                "distance": distance,
                "drifted": distance > chance,
            }
        if name in ranges:
            columns[name]["range"] = list(ranges[name])
    return {
        "reference": None if reference is None else reference.name,
        "at": list(_QUARTILES),
        "chance": chance,
        "columns": columns,
    }


def _meaning(name: str, kind: InputKind) -> str:
    told = COLUMNS.get(name) or _WIN_LOSS.get(name)
    row = "candidate" if kind is RECORD else "leaf"
    return told or f"feature of the median {row}: {_FEATURES.get(name, name)}"


def _columns(trees: Sequence[BeliefTree], candidates: Candidates, graph: FeatureGraph) -> dict[str, Floats]:
    return {**tree_columns(trees), **_win_loss(trees), **_features(candidates, graph)}


def _win_loss(trees: Sequence[BeliefTree]) -> dict[str, Floats]:
    """One number a tree; NaN of Gaussian trees."""
    rows = [_win_loss_row(tree) for tree in trees]
    return {name: np.array([float(f"{row[i]:.6g}") for row in rows]) for i, name in enumerate(_WIN_LOSS)}


def _win_loss_row(tree: BeliefTree) -> tuple[float, ...]:
    if tree.alpha is None or tree.beta is None or tree.low is None or tree.high is None:
        return (math.nan,) * len(_WIN_LOSS)
    total = tree.alpha + tree.beta
    return (
        float(np.median(tree.alpha / total)),
        float(np.median(np.log10(total))),
        float(np.median(np.log10(tree.high - tree.low))),
    )


def _features(candidates: Candidates, graph: FeatureGraph) -> dict[str, Floats]:
    """Feature -> its median over the leaves of each tree."""
    x = graph.matrix({**candidates.columns, "tree": candidates.tree}).x
    parts = np.split(np.asarray(x, dtype=float), candidates.groups.starts[1:])
    medians = np.array([np.median(p, axis=0) for p in parts])
    return dict(zip(graph.names, medians.T, strict=True))


def _quantiles(x: Floats) -> list[float]:
    x = x[np.isfinite(x)]
    return [float(f"{q:.6g}") for q in np.quantile(x, _QUARTILES)] if len(x) else []
