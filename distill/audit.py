"""A shipped scorer re-checked against exact labels on recorded trees; floor 7.

A seeded sample of the trees is labelled exactly, as the scorer's own value asks. What its picks lose now is
held against what its sheet promised: the verdict is "worse" only where the interval of today's loss lies
above the promised interval by more than the margin. Drift is told apart from loss: trees may look
different and be scored as well as ever.
"""

from __future__ import annotations

import dataclasses
import json
import math
import os
from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from distill import voc
from distill.candidates import LEAF_COLUMNS, Candidates
from distill.errors import DistillError, InputError, RefusedError
from distill.estimates import two_sample
from distill.family import Family, draw, load_family
from distill.feature_graph import FeatureGraph
from distill.files import sha256_of, write_atomic
from distill.labelling import Asked
from distill.metrics import picks
from distill.query import Priced, Query
from distill.runtime import Scorer
from distill.sample_data import family_path
from distill.scorer_inputs import LEAF_TABLE
from distill.sheet import SHEET_FORMAT
from distill.traces import BadLines, read_many, write_trees
from distill.tree import BeliefTree, Floats, leaf_table
from distill.tree_columns import COLUMNS, decision_key, tree_columns
from distill.validate import examine, sample_pairs

__all__ = ["AUDIT_FORMAT", "WORTH_ADDING", "Audit", "audit", "sample_trees", "write_audit"]

AUDIT_FORMAT: Final = "voc-audit/1"
WORTH_ADDING: Final = "worth-adding.jsonl.gz"
_JUDGED: Final = {
    "forgone_percent": "forgone share",
    "relative_forgone_percent": "relative forgone",
    "stop_loss_percent": "stop loss",
}
_LEAST_DECISIONS: Final = 20  # below it, a bootstrap interval says nothing
_LOST: Final = 0.01  # share of a tree's best value, above which the tree is worth adding
_REFERENCE: Final = 1000  # trees drawn to stand for training
_ONE_PERCENT: Final = 1.628  # Kolmogorov's distribution: distances above it x sqrt(1/n + 1/m) are no chance
_QUARTILES: Final = (0.05, 0.25, 0.5, 0.75, 0.95)


@dataclass(frozen=True)
class Audit:
    """figures : what was found, as JSON values. worth_adding : recorded trees that training should see."""

    figures: dict[str, Any]
    worth_adding: list[BeliefTree]

    @property
    def worse(self) -> bool:
        """Whether the scorer loses more than its sheet promised."""
        return bool(self.figures["worse"])


def audit(
    scorer: str | os.PathLike[str],
    traces: Sequence[str | os.PathLike[str]],
    *,
    trees: int = 500,
    margin: float = 0.5,
    seed: int = 0,
    family: Family | None = None,
    n_boot: int = 1000,
    bad: BadLines | None = None,
) -> Audit:
    """Hold a scorer file with its sheet against recorded trees.

    trees : how many are labelled, a seeded sample. margin : percentage points above the promise that are
    let pass. family : what the scorer was trained on, for drift; by default the one of its metadata, where
    it comes with the tool. bad : takes in bad records; None raises the first.
    The same files and seed give the same figures. Raises InputError where sheet and file do not belong
    together, or the sample holds fewer than 20 decisions that the scorer can be asked about.
    """
    path = Path(scorer)
    sheet = _read_sheet(path)
    loaded = Scorer.load(path)
    if loaded.kind is not None and loaded.kind.name != LEAF_TABLE.name:
        raise RefusedError(f"{path}: reads a {loaded.kind.name}; audit asks scorers of the {LEAF_TABLE.name}")
    sample, total = sample_trees(read_many(traces, bad or BadLines(strict=True)), trees, seed)
    asked = _asked(sheet["value"])
    candidates, kept, aside = _label(sample, asked)
    clusters = candidates.clusters
    decisions = len(kept) if clusters is None else len(np.unique(clusters))
    if decisions < _LEAST_DECISIONS:
        why = "; ".join(f"{n} {reason}" for reason, n in aside.items())
        raise InputError(
            ", ".join(str(t) for t in traces),
            f"must hold at least {_LEAST_DECISIONS} decisions that the scorer can be asked about"
            + (f" (aside: {why})" if why else ""),
            decisions,
        )
    now = examine(loaded, candidates, n_boot=n_boot, seed=seed)
    judged = {key: _judge(now[key], sheet["accuracy"][key], margin) for key in _JUDGED}
    worst = [name for key, name in _JUDGED.items() if judged[key]["worse"]]
    scores = loaded.score(**candidates.columns, tree=candidates.tree)
    chosen = _worth_adding(candidates, scores.voc, scores.in_range)
    reference = family or _trained_family(loaded.facts)
    figures = {
        "format": AUDIT_FORMAT,
        "scorer": {"name": path.name, "sha256": sheet["file"]["sha256"], "recipe": sheet["recipe"]},
        "value": sheet["value"],
        "traces": [Path(t).name for t in traces],
        "seed": seed,
        "trees": {
            "recorded": total, "sampled": len(sample), "judged": len(kept), "decisions": decisions,
            "aside": dict(aside), "worth adding": len(chosen),
        },
        "margin": margin,
        "judged": judged,
        "worse": bool(worst),
        "verdict": _verdict(worst, judged, margin, len(kept)),
        "now": now,
        "promised": sheet["accuracy"],
        "out_of_range_percent": 100 - now["in_range_percent"],
        "bound": _bound(loaded, candidates, scores),
        "drift": _drift([sample[i] for i in kept], candidates, loaded.facts, reference, decisions),
        "pairs": sample_pairs(loaded, candidates, seed=seed),
    }  # fmt: skip
    return Audit(figures, [sample[kept[i]] for i in chosen])


def write_audit(found: Audit, out: str | os.PathLike[str]) -> None:
    """Write audit.json and, where there are any, the trees worth adding, into the folder `out`."""
    folder = Path(out)
    write_atomic(folder / "audit.json", (json.dumps(found.figures, indent=1) + "\n").encode())
    if found.worth_adding:
        write_trees(folder / WORTH_ADDING, found.worth_adding)
    else:
        (folder / WORTH_ADDING).unlink(missing_ok=True)  # of an earlier audit


# --- what is judged --------------------------------------------------------------------------------


def _read_sheet(scorer: Path) -> dict[str, Any]:
    path = scorer.with_suffix(".json")
    try:
        sheet = json.loads(path.read_bytes())
    except OSError as e:
        raise InputError(str(path), f"must be the scorer's sheet, readable ({e.strerror})") from None
    except (ValueError, RecursionError) as e:
        raise InputError(str(path), f"must be valid JSON ({e})") from None
    if not isinstance(sheet, dict) or sheet.get("format") != SHEET_FORMAT:
        raise InputError(f"{path}: format", f"must be {SHEET_FORMAT!r}")
    try:
        promised = {key: sheet["accuracy"][key] for key in _JUDGED}
        sound = all(
            e["value"] is None or all(type(e[k]) in (int, float) for k in ("value", "low", "high"))
            for e in promised.values()
        )
        _asked(sheet["value"])
        sha = sheet["file"]["sha256"]
        sound = sound and isinstance(sheet["recipe"], str) and isinstance(sha, str)
    except (KeyError, TypeError, ValueError, AttributeError):
        sound = False
    if not sound:
        raise InputError(str(path), "must be a sheet as ship writes it, with value, accuracy and file")
    if scorer.is_file() and sha256_of(scorer) != sha:
        raise InputError(str(path), f"must be the sheet of {scorer.name}: it states another SHA-256")
    return sheet


def _asked(value: Mapping[str, Any]) -> Asked:
    batch = value["batch"]
    return Asked(horizon=float(value["horizon"]), batch=None if batch is None else int(batch))


def sample_trees(
    found: Iterable[tuple[str, BeliefTree]], most: int, seed: int
) -> tuple[list[BeliefTree], int]:
    """At most `most` trees of a stream, and how many it held.

    Each is as likely to be kept as any other (Vitter 1985, algorithm R); they stay in order.
    """
    rng = np.random.default_rng([seed, 0xA0D17])
    kept: list[tuple[int, BeliefTree]] = []
    total = 0
    for _, tree in found:
        if len(kept) < most:
            kept.append((total, tree))
        else:
            at = int(rng.integers(0, total + 1))
            if at < most:
                kept[at] = (total, tree)
        total += 1
    return [tree for _, tree in sorted(kept, key=lambda pair: pair[0])], total


def _label(trees: Sequence[BeliefTree], asked: Asked) -> tuple[Candidates, list[int], Counter[str]]:
    """Exact labels; positions of the labelled trees, and why others were left aside, by reason."""
    aside: Counter[str] = Counter()
    queries: dict[Query, list[int]] = {}
    for i, tree in enumerate(trees):
        try:
            if tree.belief != "gaussian":
                raise RefusedError("win/loss leaves, which this scorer does not read")
            leaf_table(tree)
            query = dataclasses.replace(asked.query(tree), remaining=tree.remaining)
            if tree.remaining is None:
                raise InputError("remaining", "is missing")
            queries.setdefault(query, []).append(i)
        except DistillError as e:
            aside[str(e)] += 1
    priced: dict[int, Priced] = {}
    for query, group in queries.items():
        for i, answer in zip(group, _price([trees[i] for i in group], query), strict=True):
            if isinstance(answer, Priced):
                priced[i] = answer
            else:
                aside[answer] += 1
    kept = sorted(priced)
    if not kept:
        why = "; ".join(f"{n} {reason}" for reason, n in aside.items())
        raise InputError("traces", f"must hold a tree that the scorer can be asked about (aside: {why})")
    return _candidates(trees, kept, priced, asked.batch is None), kept, aside


def _price(trees: list[BeliefTree], query: Query) -> list[Priced | str]:
    try:
        return list(voc.price_many(trees, query))
    except RefusedError as e:
        if len(trees) > 1:
            return [answer for tree in trees for answer in _price([tree], query)]
        return [str(e)]


def _candidates(
    trees: Sequence[BeliefTree], kept: Sequence[int], priced: Mapping[int, Priced], is_rate: bool
) -> Candidates:
    tables = [leaf_table(trees[i]) for i in kept]
    sizes = [len(t.gain) for t in tables]
    columns = {
        name: np.concatenate([getattr(t, name) for t in tables])
        for name in LEAF_COLUMNS
        if name != "remaining"
    }
    columns["remaining"] = np.repeat([float(trees[i].remaining or 0) for i in kept], sizes)
    keys = [decision_key(trees[i]) for i in kept]
    decision = None
    if any(key is not None for key in keys):
        numbers: dict[str, int] = {}
        names = [key if key is not None else f"tree {i}" for i, key in zip(kept, keys, strict=True)]
        decision = np.array([numbers.setdefault(name, len(numbers)) for name in names], dtype=np.uint64)
    return Candidates(
        columns,
        np.repeat(np.arange(len(kept)), sizes),
        np.concatenate([priced[i].voc for i in kept]),
        np.concatenate([priced[i].batch for i in kept]).astype(float),
        np.concatenate([priced[i].error for i in kept]),
        is_rate,
        None if decision is None else np.repeat(decision, sizes),
    )


# --- the verdict -----------------------------------------------------------------------------------


def _judge(now: Mapping[str, Any], promised: Mapping[str, Any], margin: float) -> dict[str, Any]:
    """Worse only where both intervals are known and today's lies above the promised one and the margin."""
    low, high = now.get("low"), promised.get("high")
    worse = low is not None and high is not None and low > high + margin
    return {"now": dict(now), "promised": dict(promised), "worse": worse}


def _verdict(worst: Sequence[str], judged: Mapping[str, Mapping[str, Any]], margin: float, trees: int) -> str:
    told = []
    for key, name in _JUDGED.items():
        now, promised = judged[key]["now"], judged[key]["promised"]
        if now["value"] is None:
            told.append(f"{name} not defined on these trees")
        else:
            told.append(f"{name} {_interval(now)} %, promised {_interval(promised)} %")
    head = f"worse than promised in {' and '.join(worst)}" if worst else "as promised"
    return f"{head}: {'; '.join(told)}; margin {margin:g} points, {trees:,} trees"


def _interval(e: Mapping[str, Any]) -> str:
    if e.get("low") is None:
        return "-" if e["value"] is None else f"{e['value']:.3g}"
    return f"{e['value']:.3g} [{e['low']:.3g}, {e['high']:.3g}]"


def _bound(scorer: Scorer, candidates: Candidates, scores: Any) -> dict[str, Any] | None:
    """How often the exact value lies at or below the file's upper bound, where it has one."""
    stated = scorer.facts.get("calibration")
    if not isinstance(stated, dict):
        return None
    inside = scores.in_range
    held = (
        float(np.mean((candidates.label <= scores.voc_high + candidates.error)[inside]))
        if inside.any()
        else None
    )
    return {"held_percent": None if held is None else 100 * held, "stated": stated}


def _worth_adding(candidates: Candidates, score: Floats, in_range: NDArray[np.bool_]) -> list[int]:
    """Trees where the pick loses more than a hundredth, a stop goes wrong, or a leaf is out of range."""
    groups = candidates.groups
    best, got = groups.highest(candidates.label), candidates.label[picks(groups, score)]
    lost = best - got > _LOST * best
    cost = candidates.columns["cost"] * (1 if candidates.is_rate else candidates.batch)
    goes = groups.highest(score - cost) > 0
    stop = goes != (groups.highest(candidates.label - cost) > 0)
    outside = groups.total((~in_range).astype(float)) > 0
    return [int(i) for i in np.flatnonzero(lost | stop | outside)]


# --- drift -----------------------------------------------------------------------------------------


def _trained_family(facts: Mapping[str, Any]) -> Family | None:
    """The family that the scorer was trained on, where its metadata names one that comes with the tool."""
    data = facts.get("about", {}).get("data", {})
    try:
        family = load_family(family_path(str(data.get("source"))))
    except DistillError:
        return None
    return family if family.sha256 == data.get("source_sha256") else None


def _drift(
    trees: Sequence[BeliefTree],
    candidates: Candidates,
    facts: Mapping[str, Any],
    family: Family | None,
    decisions: int,
) -> dict[str, Any]:
    """Column -> quantiles now and in training, their distance, and what chance alone would give.

    Training is stood for by trees of its family, drawn from the seed of its dataset.
    """
    seed = int(facts.get("about", {}).get("data", {}).get("seed") or 0)
    seen = {**tree_columns(trees), **_features(candidates)}
    trained: dict[str, Floats] = {}
    if family is not None:
        drawn = [draw(family, seed, i) for i in range(_REFERENCE)]
        drawn = [t for t in drawn if t.belief == "gaussian" and t.cov is None and not t.has_chance]
        if drawn:
            none = [np.zeros(t.n_leaves) for t in drawn]
            unlabelled = {i: Priced(x, x.astype(np.int64), x, x, "") for i, x in enumerate(none)}
            rows = _candidates(drawn, range(len(drawn)), unlabelled, True)
            trained = {**tree_columns(drawn), **_features(rows)}
    n, m = decisions, _REFERENCE
    chance = _ONE_PERCENT * math.sqrt(1 / n + 1 / m)
    ranges = facts.get("ranges", {})
    columns: dict[str, Any] = {}
    for name, x in seen.items():
        if not np.any(np.isfinite(x)):
            continue
        columns[name] = {"meaning": COLUMNS.get(name, f"feature {name}, median leaf"), "now": _quantiles(x)}
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
        "reference": None if family is None else family.name,
        "at": list(_QUARTILES),
        "chance": chance,
        "columns": columns,
    }


def _features(candidates: Candidates) -> dict[str, Floats]:
    """Feature -> its median over the leaves of each tree."""
    graph = FeatureGraph()
    x = graph.matrix({**candidates.columns, "tree": candidates.tree}).x
    groups = candidates.groups
    parts = np.split(np.asarray(x, dtype=float), groups.starts[1:])
    medians = np.array([np.median(p, axis=0) for p in parts])
    return dict(zip(graph.names, medians.T, strict=True))


def _quantiles(x: Floats) -> list[float]:
    x = x[np.isfinite(x)]
    return [float(f"{q:.6g}") for q in np.quantile(x, _QUARTILES)] if len(x) else []
