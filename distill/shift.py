"""Trees unlike those that a scorer was trained on, and what becomes of its picks there; floor 6.

Each shift changes one thing of a base family and keeps the rest, so that a loss has one cause; see
`distill.shifted_families`. Trees with chance nodes or correlated leaves cannot be told to a leaf table: an
agent that took chance nodes for decision nodes, or left correlation out, would fill it as `seen` does, and
that is what is scored; the exact values are those of the tree as it is. Records hold both; there correlation
is left out on purpose, to see what that costs.
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Mapping, Sequence
from typing import Any, Final

import numpy as np

from distill import schema, voc
from distill.candidates import Candidates
from distill.errors import InputError, RefusedError
from distill.family import Family, draw
from distill.feature_graph import FeatureGraph
from distill.metrics import picks
from distill.origins import same_family
from distill.query import Query
from distill.recorded import rows_of
from distill.runtime import Scorer
from distill.scorer_inputs import LEAF_TABLE, RECORD, VARIES, WIN_LOSS_TABLE, InputKind
from distill.shifted_families import GIVEN, out_of_reach, shifted, shifts_of
from distill.terminal import bar
from distill.tree import BeliefTree
from distill.validate import examine, value_of_scorer

__all__ = ["drawn_candidates", "input_of", "measure_shifts", "seen", "shifted", "trees_of"]

# Exact values of correlated leaves cost seconds a tree beyond horizon 0.
_DEAR_SHARE: Final = 0.1


def input_of(scorer: Scorer, family: Family) -> InputKind:
    """The input that a scorer would read such a family by; without a file, the simplest that holds it.

    InputError where the file's input cannot hold the family's beliefs.
    """
    if scorer.kind is None:
        if family.has("chance") or family.has("correlation"):
            return RECORD
        return LEAF_TABLE if family.belief == "gaussian" else WIN_LOSS_TABLE
    needed = {RECORD: family.belief, WIN_LOSS_TABLE: "win_loss"}.get(scorer.kind, "gaussian")
    if family.belief != needed:
        raise InputError(f"{family.name}: belief", f"must be {needed} for this scorer", family.belief)
    return scorer.kind


def seen(tree: BeliefTree, kind: InputKind = LEAF_TABLE, *, blind: bool = False) -> BeliefTree:
    """The tree as an input holds it: leaf tables take chance nodes for decision nodes, and leaves for
    independent; records hold both, and are told that leaves are independent only where `blind`."""
    if kind is not RECORD:
        inner = np.where(tree.kind == schema.CHANCE, schema.DECISION, tree.kind).astype(np.int8)
        tree = dataclasses.replace(tree, kind=inner, prob=np.ones(tree.n_nodes))
    if tree.cov is not None and (blind or kind is not RECORD):
        tree = dataclasses.replace(tree, var=np.ascontiguousarray(np.diag(tree.cov)), cov=None)
    return tree


def drawn_candidates(
    family: Family,
    *,
    trees: int,
    seed: int,
    value: Mapping[str, Any],
    kind: InputKind = LEAF_TABLE,
    blind: bool = False,
    progress: bool = False,
) -> tuple[Candidates, int]:
    """Trees of a family with exact labels of `value`, as an input sees them; and how many no exact method
    prices. RefusedError where that is all of them."""
    given_batch = value["batch"]
    given = None if value["horizon"] == VARIES else float(value["horizon"])
    rows, number, label, batches, error = [], [], [], [], []
    aside = 0
    with bar(family.name, trees, "trees", shown=progress) as advance:
        for i in range(trees):
            tree = draw(family, seed, i)
            advance(1)
            own = math.inf if tree.horizon is None else tree.horizon
            horizon = own if given is None else given
            batch = (tree.batch or 1) if given_batch == VARIES else given_batch
            try:
                priced = voc.price(tree, Query(horizon=horizon, batch=batch, remaining=tree.remaining))
            except RefusedError:
                aside += 1
                continue
            rows.append(rows_of(seen(tree, kind, blind=blind), kind, horizon))
            number.append(np.full(tree.n_leaves, i))
            label.append(priced.voc)
            batches.append(priced.batch.astype(float))
            error.append(priced.error)
    if not rows:
        raise RefusedError(f"{family.name}: no exact method prices any of its trees")
    joined = {name: np.concatenate([row[name] for row in rows]) for name in kind.inputs}
    at, exact, of, off = (np.concatenate(x) for x in (number, label, batches, error))
    return Candidates(joined, at, exact, of, off, is_rate=given_batch is None, kind=kind), aside


def trees_of(family: Family, name: str, kind: InputKind, value: Mapping[str, Any], trees: int) -> int:
    """How many of the trees asked for a shift gets: fewer where exact values are dear."""
    dear = shifted(family, name, kind).has("correlation") and value["horizon"] != 0
    return max(1, round(trees * (_DEAR_SHARE if dear else 1.0)))


def measure_shifts(
    scorer: Scorer,
    family: Family,
    *,
    names: Sequence[str] | None = None,
    trees: int = 1000,
    seed: int = 1,
    n_boot: int = 1000,
    progress: bool = False,
) -> dict[str, Any]:
    """What each shift costs, as JSON values: figures of `examine`, those of the first-order start, and

    `flagged_trees_percent` : trees with some leaf that the scorer says is unlike those of training.
    `loss_flagged_percent` : of all that the picks forgo, what they forgo in such trees: the part of the
    loss that an agent could have known of. None where nothing is forgone.
    `covered_percent` : candidates at or below their upper bound. `aside` : trees that no exact method prices.

    names : of shifts, None for all that the family can take, see `shifted_families.out_of_reach`. Correlated
    leaves get a tenth of the trees beyond horizon 0: their exact values cost seconds each.
    """
    kind, value = input_of(scorer, family), value_of_scorer(scorer)
    known = shifts_of(family, kind)
    if names is None:
        gone = out_of_reach(family, kind)
        names = [name for name in known if name not in gone]
    out = {}
    for name in names:
        changed = shifted(family, name, kind)
        count = trees_of(family, name, kind, value, trees)
        candidates, aside = drawn_candidates(
            changed,
            trees=count,
            seed=seed,
            value=value,
            kind=kind,
            blind=known[name].blind,
            progress=progress,
        )
        found = _measured(scorer, candidates, value, n_boot, seed)
        out[name] = found | {"aside": aside, "changed": known[name].words}
    if GIVEN in out:
        of_training = same_family(family, scorer.facts.get("about", {}).get("data", {}))
        out[GIVEN]["changed"] += f", which is {'' if of_training else 'not known to be '}that of training"
    return out


def _measured(
    scorer: Scorer, candidates: Candidates, value: Mapping[str, Any], n_boot: int, seed: int
) -> dict[str, Any]:
    groups = candidates.groups
    scores = scorer.score(**candidates.columns, tree=candidates.tree)
    lost = groups.highest(candidates.label) - candidates.label[picks(groups, scores.voc)]
    flagged = groups.total((~scores.in_range).astype(float)) > 0
    total = float(lost.sum())
    graph = FeatureGraph.of_value(value, candidates.kind)
    first = graph.matrix({**candidates.columns, "tree": candidates.tree}).first_order
    start = candidates.label[picks(groups, first)]
    best = groups.highest(candidates.label)
    return {
        **examine(scorer, candidates, n_boot=n_boot, seed=seed),
        "first_order_forgone_percent": _percent(float((best - start).sum()), float(best.sum())),
        "covered_percent": 100 * float(np.mean(candidates.label <= scores.voc_high)),
        "flagged_trees_percent": 100 * float(np.mean(flagged)),
        "loss_flagged_percent": _percent(float(lost[flagged].sum()), total),
    }


def _percent(part: float, whole: float) -> float | None:
    return 100 * part / whole if whole > 0 and math.isfinite(part) else None
