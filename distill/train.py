"""From labelled trees to one scorer file and its sheet; floor 6.

dataset -> split by tree -> feature matrix (the ONNX graph that the file will contain) -> a front of
learners -> each exported, validated from its file on held-out trees and timed -> the chosen one shipped.
"""

from __future__ import annotations

import json
import math
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
from numpy.typing import NDArray

from distill import __version__
from distill.break_even import break_even
from distill.calibration import bin_columns, calibrated
from distill.candidates import Candidates, Split, split_by_tree
from distill.errors import InputError
from distill.export import export_scorer, mapped_back
from distill.feature_graph import FeatureGraph, FeatureMatrix
from distill.files import read_json, sha256_of, write_atomic
from distill.learners import BoostingLearner, DenseLearner, LinearLearner
from distill.metrics import Groups
from distill.peers import measure_peers, timed_cases
from distill.runtime import Scorer
from distill.scorer_inputs import RECORD, VARIES
from distill.sheet import FRONT_FILE, FRONT_FORMAT
from distill.slices import tree_facts
from distill.terminal import bar
from distill.timing import Decision, Timing, time_backup, time_exact, time_scorer
from distill.tree import Floats
from distill.validate import baselines, examine, sample_pairs

__all__ = ["RECIPES", "Recipe", "row_weights", "train", "what_pays"]

_LEAVES = 64  # of the decision whose latency the sheet states
_EXACT_SECONDS = 30.0  # for the time of one exact method: those of correlated leaves take seconds a call
_SELF_TEST_TREES = 8
_LEAST_WEIGHT = 1e-3
_RANGE_MARGIN = 0.05


@dataclass(frozen=True)
class Recipe:
    """One scorer of the front: its name, how to make its learner from a seed, and if on lean features."""

    name: str
    make: Callable[[int], Any]
    lean: bool = False

    @property
    def file(self) -> str:
        """Name of its scorer file."""
        return self.name.replace(" ", "-") + ".onnx"


def _boosting(n_trees: int, n_leaves: int) -> Recipe:
    def make(seed: int) -> BoostingLearner:
        return BoostingLearner(target=_TARGET, n_trees=n_trees, n_leaves=n_leaves, random_state=seed)

    return Recipe(f"boosting {n_trees}x{n_leaves}", make)


def _dense(*layers: int, lean: bool = False) -> Recipe:
    def make(seed: int) -> DenseLearner:
        return DenseLearner(target=_TARGET, layers=layers, random_state=seed)

    return Recipe(f"{'lean ' * lean}dense {'-'.join(map(str, layers))}", make, lean)


# The ratio to the first-order value serves tiny values as well as large ones; sqrt serves large ones only.
_TARGET = "log_ratio"
RECIPES: Mapping[str, Recipe] = {
    recipe.name: recipe
    for recipe in (
        Recipe("linear", lambda seed: LinearLearner(target=_TARGET, random_state=seed)),
        _boosting(25, 8),
        _boosting(100, 31),
        _boosting(300, 31),
        _dense(16, 16, lean=True),
        _dense(8, 8),
        _dense(16, 16),
        _dense(32, 32),
    )
}


def row_weights(groups: Groups, label: Floats) -> Floats:
    """Weight of each row in training, the square of its value over the best of its tree, plus 0.001.

    An error d of a log-ratio moves a value by d x value, so these weights make squared error that of the
    value as a share of the best: a candidate counts as far as its tree could pick it, and trees count
    alike, whatever their unit. The small rest keeps candidates of little worth from being scored high.
    """
    best = groups.spread(groups.highest(label))
    share = np.where(best > 0, label / np.where(best > 0, best, 1), 0.0)
    return np.asarray(np.square(share) + _LEAST_WEIGHT)


def train(
    dataset: str | os.PathLike[str],
    out: str | os.PathLike[str],
    *,
    seed: int = 0,
    recipes: Sequence[str] | None = None,
    n_boot: int = 1000,
    progress: bool = False,
) -> dict[str, Any]:
    """Train every recipe on a labelled dataset; leave one scorer file each, and `front.json`, in `out`.

    recipes : names in RECIPES, None for all that there are for the dataset's value. Returns what `front.json`
    holds: accuracy of each file on held-out trees, its decision latency, the closed forms on the same trees,
    and the exact methods' time in the same run. The same dataset, seed and versions give the same .onnx
    bytes with any number of threads. What an earlier training left in `out` is replaced when all is done, and
    stays as it was where this one is stopped. Raises InputError on a dataset too small to split, a lean
    recipe for a value that has none, or a folder that holds the files of something else.
    """
    started = time.perf_counter()
    out = Path(out)
    chosen = _recipes(recipes)
    data, about = Candidates.read(dataset)
    if recipes is None and not FeatureGraph.has_lean(about["value"], data.kind):
        chosen = [recipe for recipe in chosen if not recipe.lean]
    split = split_by_tree(data, seed)
    _check_folder(out, chosen)
    out.mkdir(parents=True, exist_ok=True)
    with (
        tempfile.TemporaryDirectory(dir=out, prefix=".training-") as made,
        bar("features", 2 + 2 * len(chosen), "steps", shown=progress) as advance,
    ):
        graph = FeatureGraph.of_value(about["value"], data.kind)
        first_order = graph.matrix({**split.held_out.columns, "tree": split.held_out.tree}).first_order
        given = {
            lean: _Given.of(
                FeatureGraph.of_value(about["value"], data.kind, lean=True) if lean else graph, split
            )
            for lean in {recipe.lean for recipe in chosen}
        }
        cases = timed_cases(split.held_out, about["value"], _LEAVES, seed)
        facts = tree_facts(split.held_out)
        scorers: list[dict[str, Any]] = []
        for recipe in chosen:
            advance(1, f"train {recipe.name}")
            path = Path(made) / recipe.file
            fit_seconds = _fit_and_export(recipe, split, given[recipe.lean], about, seed, path)
            advance(1, f"validate {recipe.name}")
            scorers.append(_examine(recipe, path, split, facts, cases, fit_seconds, n_boot, seed))
        advance(1, "closed forms and exact methods")
        beside = baselines(split.held_out, first_order, n_boot=n_boot, seed=seed)
        equal = min(e["latency"]["p50_us"] for e in scorers)
        rivals, no_rivals = measure_peers(
            split.held_out, cases, about["value"], equal, n_boot=n_boot, seed=seed
        )
        exact = _exact_times(cases, about["value"])
        backup = time_backup(cases, horizon=float(about["value"]["horizon"])) if data.kind is RECORD else {}
        advance(1)
        files = {recipe.file: (Path(made) / recipe.file).read_bytes() for recipe in chosen}
    _mark_front(scorers)
    exact_times = {name: t.to_json() for name, t in exact.items()}
    on_front = {e["recipe"]: e for e in scorers if e["on_front"]}
    front = {
        "format": FRONT_FORMAT,
        **about,
        "parts": {
            name: {"trees": len(c.groups.sizes), "candidates": len(c.tree)} for name, c in vars(split).items()
        },
        "seed": seed,
        "scorers": scorers,
        "beside": beside,
        "leaves": _LEAVES,
        "peers": rivals,
        "peers_left_out": no_rivals,
        "exact": exact_times,
        "backup": {name: t.to_json() for name, t in backup.items()},
        "break_even": what_pays(on_front, rivals, exact_times),
        "features": list(graph.names),
        "made_with": _made_with(),
        "train_seconds": round(time.perf_counter() - started, 2),
    }
    for name, content in files.items():
        write_atomic(out / name, content)
    write_atomic(out / FRONT_FILE, (json.dumps(front, indent=1, allow_nan=False) + "\n").encode())
    return front


def _check_folder(out: Path, recipes: Sequence[Recipe]) -> None:
    """Refuse a folder with a foreign front, or with scorer files that no training left there."""
    path = out / FRONT_FILE
    if path.exists():
        front = read_json(path)
        found = front.get("format") if isinstance(front, dict) else front
        if found != FRONT_FORMAT:
            raise InputError(f"{path}: format", f"must be {FRONT_FORMAT!r}; choose another folder", found)
    for file in (out / recipe.file for recipe in recipes):
        if file.exists() and (not path.exists() or file.with_suffix(".json").exists()):
            raise InputError(str(file), "must be an earlier training's to be replaced; choose another folder")


# --- one recipe ------------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class _Given:
    """What a learner is given: a feature graph, and its matrix of the parts `fit` and `choose`."""

    graph: FeatureGraph
    fit: FeatureMatrix
    choose: FeatureMatrix

    @classmethod
    def of(cls, graph: FeatureGraph, split: Split) -> _Given:
        parts = (graph.matrix({**c.columns, "tree": c.tree}) for c in (split.fit, split.choose))
        return cls(graph, *parts)


def _fit_and_export(
    recipe: Recipe,
    split: Split,
    given: _Given,
    about: Mapping[str, Any],
    seed: int,
    path: Path,
) -> float:
    """Fit on the part `fit`, calibrate on `choose`, write the scorer file; seconds that the fit took."""
    data, matrix = split.fit, given.fit
    learner = recipe.make(seed)
    start = time.perf_counter()
    usable = matrix.unit > 0
    y = np.where(usable, data.label / np.where(usable, matrix.unit, 1), 0.0)
    first = np.where(usable, matrix.first_order / np.where(usable, matrix.unit, 1), 0.0)
    weight = row_weights(data.groups, data.label) * usable * (1 if data.weight is None else data.weight)
    learner.fit(matrix.x, y, sample_weight=weight, first_order=first)
    seconds = time.perf_counter() - start
    ranges = _ranges(matrix.x)

    def scored(m: FeatureMatrix, rows: Candidates) -> tuple[Floats, Floats, Floats]:
        x = np.clip(m.x, ranges[:, 0], ranges[:, 1])
        t = np.asarray(learner.model_.predict(x), dtype=float)
        voc = mapped_back(t, m.unit, m.first_order, learner.target)
        return bin_columns(x, m.leaf_sd, rows.groups), rows.label, voc

    upper = calibrated(
        *scored(given.choose, split.choose),
        len(split.choose.groups.sizes),
        training=scored(matrix, data),
        weight=split.choose.weight,
    )
    test = split.choose.of_trees(np.arange(len(split.choose.groups.sizes)) < _SELF_TEST_TREES)
    export_scorer(
        learner.model_,
        given.graph,
        transform=learner.target,
        ranges=ranges,
        upper=upper,
        metadata={"recipe": recipe.name, "seed": seed, **about},
        self_test_columns={**test.columns, "tree": test.tree},
        path=path,
    )
    return seconds


def _ranges(x: NDArray[np.float32]) -> NDArray[np.float32]:
    """Least and largest of each feature, widened by a share of the span; shape (d, 2).

    A leaf a hair beyond the rows of training is no stranger, and the closed form would serve it worse.
    """
    low, high = x.min(axis=0), x.max(axis=0)
    margin = _RANGE_MARGIN * (high - low)
    return np.stack([low - margin, high + margin], axis=1)


def _examine(
    recipe: Recipe,
    path: Path,
    split: Split,
    facts: Mapping[str, Floats],
    cases: Sequence[Any],
    fit_seconds: float,
    n_boot: int,
    seed: int,
) -> dict[str, Any]:
    """What the scorer file is worth: accuracy on two parts, latency, size."""
    scorer = Scorer.load(path)
    return {
        "recipe": recipe.name,
        "file": path.name,
        "sha256": sha256_of(path),
        "held_out": examine(scorer, split.held_out, facts=facts, n_boot=n_boot, seed=seed),
        "choose": examine(scorer, split.choose, n_boot=n_boot, seed=seed),
        "pairs": sample_pairs(scorer, split.held_out, seed=seed),
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


def what_pays(
    scorers: Mapping[str, Mapping[str, Any]],
    rivals: Mapping[str, Mapping[str, Any]],
    exact: Mapping[str, Mapping[str, float]],
) -> dict[str, Any]:
    """At what cost of a rollout each scorer, peer and the exact value learned pays; see `break_even`.

    Empty where no tree defines a forgone share.
    """
    measured = {
        name: (e["held_out"]["forgone_percent"]["value"], e["latency"]) for name, e in scorers.items()
    }
    measured |= {name: (m["forgone_percent"]["value"], m["latency"]) for name, m in rivals.items()}
    if exact:
        learned = list(exact)[-1]
        measured[f"exact {learned}"] = (0.0, exact[learned])
    if not measured or any(forgone is None for forgone, _ in measured.values()):
        return {}
    return break_even({name: (forgone, t["p50_us"]) for name, (forgone, t) in measured.items()})


def _exact_times(cases: Sequence[Decision], value: Mapping[str, Any]) -> dict[str, Timing]:
    """Time of the exact methods of the horizon learned: of the value learned, or one rollout and the rate."""
    batch = value["batch"]
    if value["horizon"] == VARIES:  # each case has its own
        h, kind = math.inf, "any-horizon"
    else:
        h = float(value["horizon"])
        kind = {math.inf: "dynamic", 0.0: "static"}.get(h, f"horizon {h:g}")
    if batch == VARIES:
        return {f"{kind} VOC of each call's batch": time_exact(cases, horizon=h, seconds=_EXACT_SECONDS)}
    one = batch or 1
    of = "" if one == 1 else f" of {one} rollouts"
    out = {f"{kind} VOC{of}": time_exact(cases, horizon=h, batch=one, seconds=_EXACT_SECONDS)}
    if batch is None:
        out[f"{kind} rate"] = time_exact(cases, horizon=h, seconds=_EXACT_SECONDS)
    return out


def _made_with() -> dict[str, str]:
    return {
        "voc-distill": __version__,
        "python": platform.python_version(),
        "numpy": np.__version__,
        "scikit-learn": sklearn.__version__,
        "onnxruntime": onnxruntime.__version__,
        "machine": f"{platform.machine()}, {os.cpu_count()} cores",
    }
