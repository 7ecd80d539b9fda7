"""From labelled trees to one scorer file and its sheet; floor 6.

dataset -> split by tree -> feature matrix (the ONNX graph that the file will contain) -> a front of
learners -> each exported, validated from its file on held-out trees and timed -> the chosen one shipped.
"""

from __future__ import annotations

import os
import platform
import tempfile
import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import onnxruntime
import sklearn
from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeElapsedColumn

from distill import __version__
from distill.candidates import Candidates, Split, split_by_tree
from distill.errors import InputError
from distill.export import export_scorer
from distill.features import FEATURE_NAMES, FeatureGraph, FeatureMatrix
from distill.files import sha256_of, write_atomic
from distill.learners import BoostingLearner, DenseLearner, LinearLearner
from distill.metrics import Groups
from distill.runtime import Scorer
from distill.sheet import SHEET_FORMAT, write_sheet
from distill.timing import Timing, decisions, time_exact, time_scorer
from distill.tree import Floats
from distill.validate import baselines, examine

__all__ = ["RECIPES", "Recipe", "row_weights", "train"]

_LEAVES = 64  # of the decision whose latency the sheet states
_SELF_TEST_TREES = 8


@dataclass(frozen=True)
class Recipe:
    """One scorer of the front: its name, and how to make its learner from a seed."""

    name: str
    make: Callable[[int], Any]


def _boosting(n_trees: int, n_leaves: int) -> Recipe:
    def make(seed: int) -> BoostingLearner:
        return BoostingLearner(n_trees=n_trees, n_leaves=n_leaves, monotone=MONOTONE, random_state=seed)

    return Recipe(f"boosting {n_trees}x{n_leaves}", make)


# The value never falls as the first-order value of the same candidate grows, all else equal.
MONOTONE = tuple(int(name == "first_root") for name in FEATURE_NAMES)
RECIPES: Mapping[str, Recipe] = {
    recipe.name: recipe
    for recipe in (
        Recipe("linear", lambda seed: LinearLearner(random_state=seed)),
        _boosting(25, 8),
        _boosting(100, 31),
        _boosting(300, 31),
        Recipe("dense 32-32", lambda seed: DenseLearner(layers=(32, 32), random_state=seed)),
    )
}


def row_weights(groups: Groups, label: Floats) -> Floats:
    """Weight of each row in training: a candidate matters as far as its tree could pick it.

    A row counts by its value over the best of its tree; trees count alike, whatever their unit.
    """
    best = groups.spread(groups.highest(label))
    return np.asarray(np.where(best > 0, label / np.where(best > 0, best, 1), 0.0) + 0.02)


def train(
    dataset: str | os.PathLike[str],
    out: str | os.PathLike[str],
    *,
    seed: int = 0,
    recipes: Sequence[str] | None = None,
    latency_us: float | None = None,
    n_boot: int = 1000,
    progress: bool = True,
) -> dict[str, Any]:
    """Train the front on a labelled dataset, ship the chosen scorer as `out`, and return its sheet.

    out : the scorer file, .onnx; the sheet goes beside it as .json and .md. latency_us : take the most
    accurate scorer whose median decision over 64 leaves fits; None takes the most accurate. recipes :
    names in RECIPES, None for all. The same dataset, seed and versions give the same .onnx bytes with
    any number of threads. Raises InputError on a dataset too small to split or a budget that none meets.
    """
    started = time.perf_counter()
    out = Path(out)
    if out.suffix != ".onnx":
        raise InputError("out", "must end in .onnx", str(out))
    chosen_recipes = _recipes(recipes)
    data, about = Candidates.read(dataset)
    split = split_by_tree(data, seed)
    graph = FeatureGraph()
    with _bar(progress) as bar, tempfile.TemporaryDirectory() as folder:
        task = bar.add_task("features", total=2 + 2 * len(chosen_recipes))
        matrices = [
            graph.matrix({**c.columns, "tree": c.tree}) for c in (split.fit, split.choose, split.held_out)
        ]
        bar.advance(task)
        cases = decisions({**split.held_out.columns, "tree": split.held_out.tree}, _LEAVES, 50, seed)
        front: list[dict[str, Any]] = []
        for recipe in chosen_recipes:
            bar.update(task, description=f"train {recipe.name}")
            path = Path(folder) / f"{len(front)}.onnx"
            fit_seconds = _fit_and_export(recipe, split, matrices[0], graph, about, seed, path)
            bar.advance(task)
            bar.update(task, description=f"validate {recipe.name}")
            front.append(_examine(recipe, path, split, cases, fit_seconds, n_boot, seed))
            bar.advance(task)
        _mark_front(front)
        best = _choose(front, latency_us)
        bar.update(task, description="exact methods and closed forms")
        beside = baselines(split.held_out, matrices[2].first_order, n_boot=n_boot, seed=seed)
        exact = {"dynamic VOC": time_exact(cases, rate=False), "dynamic rate": time_exact(cases, rate=True)}
        bar.advance(task)
        data_bytes = (Path(folder) / f"{front.index(best)}.onnx").read_bytes()
    write_atomic(out, data_bytes)
    sheet = _sheet(out, about, split, front, best, beside, exact, seed, latency_us)
    sheet["train_seconds"] = round(time.perf_counter() - started, 2)
    write_sheet(sheet, out)
    return sheet


# --- one recipe ------------------------------------------------------------------------------------


def _fit_and_export(
    recipe: Recipe,
    split: Split,
    matrix: FeatureMatrix,
    graph: FeatureGraph,
    about: Mapping[str, Any],
    seed: int,
    path: Path,
) -> float:
    """Fit on the part `fit`, write the scorer file; seconds that the fit took."""
    data = split.fit
    learner = recipe.make(seed)
    start = time.perf_counter()
    usable = matrix.unit > 0
    y = np.where(usable, data.label / np.where(usable, matrix.unit, 1), 0.0)
    first = np.where(usable, matrix.first_order / np.where(usable, matrix.unit, 1), 0.0)
    weight = row_weights(data.groups, data.label) * usable
    learner.fit(matrix.x, y, sample_weight=weight, first_order=first)
    seconds = time.perf_counter() - start
    test = split.choose.of_trees(np.arange(len(split.choose.groups.sizes)) < _SELF_TEST_TREES)
    export_scorer(
        learner.model_,
        graph,
        transform=learner.target,
        ranges=np.stack([matrix.x.min(axis=0), matrix.x.max(axis=0)], axis=1),
        metadata={"recipe": recipe.name, "seed": seed, **about},
        self_test_columns={**test.columns, "tree": test.tree},
        path=path,
    )
    return seconds


def _examine(
    recipe: Recipe, path: Path, split: Split, cases: Sequence[Any], fit_seconds: float, n_boot: int, seed: int
) -> dict[str, Any]:
    """What the scorer file is worth: accuracy on two parts, latency, size."""
    scorer = Scorer.load(path)
    return {
        "recipe": recipe.name,
        "held_out": examine(scorer, split.held_out, n_boot=n_boot, seed=seed),
        "choose": examine(scorer, split.choose, n_boot=n_boot, seed=seed),
        "latency": time_scorer(scorer, cases).to_json(),
        "bytes": path.stat().st_size,
        "fit_seconds": round(fit_seconds, 2),
    }


# --- the front -------------------------------------------------------------------------------------


def _recipes(names: Sequence[str] | None) -> list[Recipe]:
    if names is None:
        return list(RECIPES.values())
    for name in names:
        if name not in RECIPES:
            raise InputError("recipes", f"must be among {', '.join(RECIPES)}", name)
    if not names:
        raise InputError("recipes", "must name at least one")
    return [RECIPES[name] for name in dict.fromkeys(names)]


def _cost_and_loss(entry: Mapping[str, Any]) -> tuple[float, float]:
    return entry["latency"]["p50_us"], entry["choose"]["forgone_percent"]["value"]


def _mark_front(front: list[dict[str, Any]]) -> None:
    """Mark the scorers that no other beats in both forgone share and median latency."""
    points = [_cost_and_loss(e) for e in front]
    for entry, (us, loss) in zip(front, points, strict=True):
        entry["on_front"] = not any(u <= us and x <= loss and (u, x) != (us, loss) for u, x in points)


def _choose(front: Sequence[dict[str, Any]], latency_us: float | None) -> dict[str, Any]:
    """The most accurate scorer within the budget, judged on the part `choose`, not on the held-out trees."""
    fitting = [e for e in front if latency_us is None or _cost_and_loss(e)[0] <= latency_us]
    if not fitting:
        fastest = min(_cost_and_loss(e)[0] for e in front)
        raise InputError(
            "latency", f"must be at least {fastest:.1f} us, the fastest scorer trained", latency_us
        )
    return min(fitting, key=lambda e: (_cost_and_loss(e)[1], _cost_and_loss(e)[0]))


# --- what is said about it --------------------------------------------------------------------------


def _sheet(
    out: Path,
    about: Mapping[str, Any],
    split: Split,
    front: Sequence[dict[str, Any]],
    best: dict[str, Any],
    beside: Mapping[str, Any],
    exact: Mapping[str, Timing],
    seed: int,
    latency_us: float | None,
) -> dict[str, Any]:
    p50 = best["latency"]["p50_us"]
    return {
        "format": SHEET_FORMAT,
        "file": {"name": out.name, "sha256": sha256_of(out), "bytes": best["bytes"]},
        "recipe": best["recipe"],
        "chosen": "most accurate" if latency_us is None else f"most accurate within {latency_us:g} us",
        "value": about["value"],
        "data": {
            **about["data"],
            "parts": {
                name: {"trees": len(c.groups.sizes), "candidates": len(c.tree)}
                for name, c in vars(split).items()
            },
        },
        "seed": seed,
        "accuracy": best["held_out"],
        "beside": beside,
        "decision": {
            "leaves": _LEAVES,
            "scorer": best["latency"],
            "exact": {name: t.to_json() for name, t in exact.items()},
            "times_faster": {name: t.p50 / p50 for name, t in exact.items()},
        },
        "front": front,
        "features": list(FEATURE_NAMES),
        "made_with": {
            "voc-distill": __version__,
            "python": platform.python_version(),
            "numpy": np.__version__,
            "scikit-learn": sklearn.__version__,
            "onnxruntime": onnxruntime.__version__,
            "machine": f"{platform.machine()}, {os.cpu_count()} cores",
        },
    }


def _bar(shown: bool) -> Progress:
    return Progress(
        TextColumn("{task.description}"),
        BarColumn(),
        MofNCompleteColumn(),
        TimeElapsedColumn(),
        console=Console(stderr=True),
        disable=not shown,
        transient=True,
    )
