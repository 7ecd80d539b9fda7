"""A shipped scorer re-checked against exact labels on recorded trees; floor 7.

Scorers of every input: leaf tables, win/loss leaf tables, records. A seeded sample of the trees is labelled
exactly, as the scorer's own value asks. What its picks lose now is held against what its sheet promised: the
verdict is "worse" only where the interval of today's loss lies above the promised interval by more than the
margin. Drift is told apart from loss: trees may look different and be scored as well as ever.
"""

from __future__ import annotations

import json
import os
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from distill.candidates import Candidates
from distill.drift import drift, trained_family, training
from distill.errors import InputError
from distill.family import Family
from distill.files import sha256_of, write_atomic
from distill.generate import held
from distill.labelling import OWN_BATCH, Asked
from distill.metrics import picks
from distill.recorded import label
from distill.runtime import Scorer
from distill.schema import AUDIT_FORMAT
from distill.scorer_inputs import LEAF_TABLE, VARIES
from distill.sheet import SHEET_FORMAT
from distill.sources import tree_key
from distill.traces import BadLines, read_many, write_trees
from distill.tree import BeliefTree, Floats
from distill.validate import examine, sample_pairs

__all__ = ["WORTH_ADDING", "Audit", "audit", "sample_trees", "write_audit"]

WORTH_ADDING: Final = "worth-adding.jsonl.gz"
_JUDGED: Final = {
    "forgone_percent": "forgone share",
    "relative_forgone_percent": "relative forgone",
    "stop_loss_percent": "stop loss",
}
_LEAST_DECISIONS: Final = 20  # below it, a bootstrap interval says nothing
_LOST: Final = 0.01  # share of a tree's best value, above which the tree is worth adding


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
    dataset: str | os.PathLike[str] | None = None,
    n_boot: int = 1000,
    bad: BadLines | None = None,
    progress: bool = False,
) -> Audit:
    """Hold a scorer file with its sheet against recorded trees.

    trees : how many are labelled, a seeded sample. margin : percentage points above the promise that are
    let pass. family : what the scorer was trained on, for drift; by default the one of its metadata, where
    it comes with the tool. bad : takes in bad records; None raises the first.
    dataset : what the scorer was trained on; trees that it holds already are not worth adding. The scorer
    file does not hold its training trees, so without it they cannot be told.
    Trees that the scorer's input cannot hold go aside, counted by reason.
    The same files and seed give the same figures. Raises InputError where sheet and file do not belong
    together, or the sample holds fewer than 20 decisions that the scorer can be asked about.
    """
    path = Path(scorer)
    sheet = _read_sheet(path)
    loaded = Scorer.load(path)
    known = None if dataset is None else held(dataset)
    kind = loaded.kind or LEAF_TABLE
    family = family or trained_family(loaded.facts)
    reference = None if family is None else training(family, loaded.facts, kind)
    sample, total = sample_trees(read_many(traces, bad or BadLines(strict=True)), trees, seed)
    found = label(sample, kind, _asked(sheet["value"]), progress=progress)
    candidates, kept, aside = found.candidates, found.kept, found.aside
    clusters = candidates.clusters
    decisions = len(kept) if clusters is None else len(np.unique(clusters))
    if decisions < _LEAST_DECISIONS:
        why = "; ".join(f"{n} {reason}" for reason, n in aside.items())
        raise InputError(
            ", ".join(str(t) for t in traces),
            f"a sample of {len(sample)} trees must hold at least {_LEAST_DECISIONS} decisions that the "
            "scorer can be asked about" + (f" (aside: {why})" if why else ""),
            decisions,
        )
    now = examine(loaded, candidates, n_boot=n_boot, seed=seed)
    judged = {key: _judge(now[key], sheet["accuracy"][key], margin) for key in _JUDGED}
    worst = [name for key, name in _JUDGED.items() if judged[key]["worse"]]
    scores = loaded.score(**candidates.columns, tree=candidates.tree)
    chosen = _worth_adding(candidates, scores.voc, scores.in_range)
    new = [i for i in chosen if known is None or tree_key(sample[kept[i]]) not in known]
    figures = {
        "format": AUDIT_FORMAT,
        "scorer": {
            "name": path.name, "sha256": sheet["file"]["sha256"], "recipe": sheet["recipe"],
            "input": kind.name,
        },
        "value": sheet["value"],
        "traces": [Path(t).name for t in traces],
        "seed": seed,
        "trees": {
            "recorded": total, "sampled": len(sample), "judged": len(kept), "decisions": decisions,
            "aside": dict(aside), "worth adding": len(new),
            "in the dataset already": None if known is None else len(chosen) - len(new),
        },
        "margin": margin,
        "judged": judged,
        "worse": bool(worst),
        "verdict": _verdict(worst, judged, margin, len(kept)),
        "now": now,
        "promised": sheet["accuracy"],
        "out_of_range_percent": 100 - now["in_range_percent"],
        "bound": _bound(loaded, candidates, scores),
        "drift": drift(
            [sample[i] for i in kept], candidates, loaded.facts, sheet["value"], reference, decisions
        ),
        "label_error_percent": _label_error(candidates),
        "pairs": sample_pairs(loaded, candidates, seed=seed),
    }  # fmt: skip
    return Audit(figures, [sample[kept[i]] for i in new])


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
    horizon = None if value["horizon"] == VARIES else float(value["horizon"])
    return Asked(horizon, None if batch is None else OWN_BATCH if batch == VARIES else int(batch))


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


def _label_error(candidates: Candidates) -> float | None:
    """Error bound of the exact values, the largest of each tree, in percent of the trees' best values."""
    best = float(candidates.groups.highest(candidates.label).sum())
    return 100 * float(candidates.groups.highest(candidates.error).sum()) / best if best > 0 else None


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
