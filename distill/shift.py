"""Trees unlike those that a scorer was trained on, and what becomes of its picks there; floor 6.

Each shift changes one thing of a base family and keeps the rest, so that a loss has one cause. Trees with
chance nodes or correlated leaves cannot be told to a leaf table: an agent that took chance nodes for
decision nodes, or left correlation out, would fill it as `seen` does, and that is what is scored; the exact
values are those of the tree as it is.
"""

from __future__ import annotations

import dataclasses
import math
import tomllib
from collections.abc import Callable, Mapping, Sequence
from typing import Any, Final

import numpy as np

from distill import schema, voc
from distill.candidates import LEAF_COLUMNS, Candidates
from distill.errors import InputError, RefusedError
from distill.family import Family, draw, parse_family
from distill.feature_graph import FeatureGraph
from distill.metrics import picks
from distill.query import Query
from distill.runtime import Scorer
from distill.scorer_inputs import LEAF_TABLE
from distill.terminal import bar
from distill.tree import BeliefTree, leaf_table
from distill.validate import examine, value_of_scorer

__all__ = ["SHIFTS", "drawn_candidates", "measure_shifts", "seen", "shifted"]

_Text = dict[str, Any]

# Shifts whose exact values cost seconds a tree, and the share of the trees asked for that they get.
_DEAR: Final = {"correlation": 0.1}


def _times(section: str, key: str, factor: float, default: float = 1) -> Callable[[_Text], None]:
    """Multiply all numbers of a field; a normal distribution keeps its shape."""

    def change(family: _Text) -> None:
        def scaled(x: Any) -> Any:
            if isinstance(x, dict):
                return {kind: y if kind == "weights" else scaled(y) for kind, y in x.items()}
            return [scaled(y) for y in x] if isinstance(x, list) else x * factor

        part = family.setdefault(section, {})
        part[key] = scaled(part.get(key, default))

    return change


def _nothing(family: _Text) -> None:
    del family


def _one_level_deeper(family: _Text) -> None:
    def deeper(x: Any) -> Any:
        if isinstance(x, dict):
            return {kind: y if kind == "weights" else deeper(y) for kind, y in x.items()}
        return [deeper(y) for y in x] if isinstance(x, list) else x + 1

    family["shape"]["depth"] = deeper(family["shape"].get("depth", 2))


def _wider_means(family: _Text) -> None:
    for key in ("action", "mean"):
        _times("prior", key, 4.0, 0)(family)


def _chance(family: _Text) -> None:
    family["chance"] = {"share": 0.5}


def _correlation(family: _Text) -> None:
    family["correlation"] = {"shared": [0.3, 0.7]}


# Name -> what changes, in words, and the change of the parsed file.
SHIFTS: Final[Mapping[str, tuple[str, Callable[[_Text], None]]]] = {
    "as trained": ("nothing; fresh trees of the family", _nothing),
    "noise x4": ("noise of a rollout: standard deviation times 4", _times("noise", "tree_sd", 4.0)),
    "noise /4": ("noise of a rollout: standard deviation divided by 4", _times("noise", "tree_sd", 0.25)),
    "leaves x4": ("four times the leaves of each action", _times("shape", "leaves", 4)),
    "one level deeper": ("every action one level deeper", _one_level_deeper),
    "wider means": ("prior means spread 4 times as wide beside the leaves' uncertainty", _wider_means),
    "unit x1000": ("all values in a unit a thousand times smaller", _times("prior", "scale", 1000.0)),
    "chance nodes": ("half of the inner nodes are chance nodes; taken for decision nodes", _chance),
    "correlation": ("leaves share 0.3 to 0.7 of their variance; taken for independent", _correlation),
}


def shifted(family: Family, name: str) -> Family:
    """The family with one thing changed; its text says which. InputError for an unknown name, or where the
    changed family breaks a rule, such as one on the number of leaves."""
    if name not in SHIFTS:
        raise InputError("shift", f"must be one of {', '.join(SHIFTS)}", name)
    words, change = SHIFTS[name]
    text = tomllib.loads(family.text)
    change(text)
    text["name"] = f"{family.name}, {name}"[:80]
    text["description"] = f"Derived from {family.name}: {words}."
    return parse_family(_toml(text).encode(), text["name"])


def _toml(family: Mapping[str, Any]) -> str:
    """A family's parsed text as TOML again: texts first, then a section each."""

    def value(x: Any) -> str:
        if isinstance(x, dict):
            return "{ " + ", ".join(f"{key} = {value(y)}" for key, y in x.items()) + " }"
        if isinstance(x, list):
            return "[" + ", ".join(value(y) for y in x) + "]"
        return repr(x)

    def text(x: str) -> str:
        quoted = x.replace("\\", "\\\\").replace('"', '\\"')
        return '"' + "".join(c if c.isprintable() else f"\\U{ord(c):08x}" for c in quoted) + '"'

    lines = [f"{key} = {text(x)}" for key, x in family.items() if isinstance(x, str)]
    for section, fields in family.items():
        if isinstance(fields, dict):
            lines += ["", f"[{section}]", *(f"{key} = {value(x)}" for key, x in fields.items())]
    return "\n".join(lines) + "\n"


def seen(tree: BeliefTree) -> BeliefTree:
    """The tree as a leaf table can hold it: chance nodes as decision nodes, leaves as independent."""
    kind = np.where(tree.kind == schema.CHANCE, schema.DECISION, tree.kind).astype(np.int8)
    var = tree.var if tree.cov is None else np.ascontiguousarray(np.diag(tree.cov))
    return dataclasses.replace(tree, kind=kind, prob=np.ones(tree.n_nodes), var=var, cov=None)


def drawn_candidates(
    family: Family, *, trees: int, seed: int, value: Mapping[str, Any], progress: bool = False
) -> tuple[Candidates, int]:
    """Trees of a family with exact labels of `value`, as seen by a leaf table; and how many no exact
    method prices. InputError for a family of win/loss leaves."""
    if family.belief != "gaussian":
        raise InputError(f"{family.name}: belief", "must be gaussian for this scorer", family.belief)
    horizon, batch = float(value["horizon"]), value["batch"]
    columns: dict[str, list[Any]] = {name: [] for name in LEAF_COLUMNS}
    number, label, batches, error = [], [], [], []
    aside = 0
    with bar(family.name, trees, "trees", shown=progress) as advance:
        for i in range(trees):
            tree = draw(family, seed, i)
            advance(1)
            try:
                priced = voc.price(tree, Query(horizon=horizon, batch=batch, remaining=tree.remaining))
            except RefusedError:
                aside += 1
                continue
            table = leaf_table(seen(tree))
            n = len(table.gain)
            for name in LEAF_COLUMNS:
                own = np.full(n, float(tree.remaining or 0)) if name == "remaining" else getattr(table, name)
                columns[name].append(own)
            number.append(np.full(n, i))
            label.append(priced.voc)
            batches.append(priced.batch.astype(float))
            error.append(priced.error)
    if not number:
        raise RefusedError(f"{family.name}: no exact method prices any of its trees")
    joined = {name: np.concatenate(parts) for name, parts in columns.items()}
    at, exact, of, off = (np.concatenate(x) for x in (number, label, batches, error))
    return Candidates(joined, at, exact, of, off, is_rate=batch is None), aside


def measure_shifts(
    scorer: Scorer,
    family: Family,
    *,
    names: Sequence[str] = tuple(SHIFTS),
    trees: int = 1000,
    seed: int = 1,
    n_boot: int = 1000,
    progress: bool = False,
) -> dict[str, Any]:
    """What each shift costs, as JSON values: figures of `examine`, those of the first-order start, and

    `flagged_trees_percent` : trees with some leaf that the scorer says is unlike those of training.
    `loss_flagged_percent` : of all that the picks forgo, what they forgo in such trees: the part of the
    loss that an agent could have known of. None where nothing is forgone.
    `covered_percent` : candidates at or below their upper bound.
    Correlated leaves get a tenth of the trees: their exact values cost seconds each.
    """
    if scorer.kind is not None and scorer.kind is not LEAF_TABLE:
        raise InputError("scorer: input", f"must be the {LEAF_TABLE.name} for shifts", scorer.kind.name)
    value = value_of_scorer(scorer)
    return {
        name: _measured(scorer, shifted(family, name), value, _trees(name, trees), seed, n_boot, progress)
        | {"changed": SHIFTS[name][0]}
        for name in names
    }


def _trees(name: str, trees: int) -> int:
    return max(1, round(trees * _DEAR.get(name, 1.0)))


def _measured(
    scorer: Scorer,
    family: Family,
    value: Mapping[str, Any],
    trees: int,
    seed: int,
    n_boot: int,
    progress: bool,
) -> dict[str, Any]:
    candidates, aside = drawn_candidates(family, trees=trees, seed=seed, value=value, progress=progress)
    groups = candidates.groups
    scores = scorer.score(**candidates.columns, tree=candidates.tree)
    lost = groups.highest(candidates.label) - candidates.label[picks(groups, scores.voc)]
    flagged = groups.total((~scores.in_range).astype(float)) > 0
    total = float(lost.sum())
    first = FeatureGraph.of_value(value).matrix({**candidates.columns, "tree": candidates.tree}).first_order
    start = candidates.label[picks(groups, first)]
    best = groups.highest(candidates.label)
    return {
        **examine(scorer, candidates, n_boot=n_boot, seed=seed),
        "first_order_forgone_percent": _percent(float((best - start).sum()), float(best.sum())),
        "covered_percent": 100 * float(np.mean(candidates.label <= scores.voc_high)),
        "flagged_trees_percent": 100 * float(np.mean(flagged)),
        "loss_flagged_percent": _percent(float(lost[flagged].sum()), total),
        "aside": aside,
    }


def _percent(part: float, whole: float) -> float | None:
    return 100 * part / whole if whole > 0 and math.isfinite(part) else None
