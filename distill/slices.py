"""Where a scorer is good and where it is not: by slice of trees, by size of its scores, by price; floor 5.

All figures count trees as the unit that is drawn again, as `metrics` does. Scores, bounds and exact values
are taken in the unit of each tree's scale, so that trees of any unit stand side by side.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from distill.calibration import live
from distill.candidates import Candidates
from distill.fallback import spreads
from distill.metrics import Groups, measure, picks, ratio_over_trees, stop_loss
from distill.scorer_inputs import SCALAR_OF
from distill.shards import read_trees
from distill.tree import BeliefTree, Floats, Ints

__all__ = ["PRICES", "Scored", "calibration", "forgone_by_slice", "stop_curve", "tree_facts"]

PRICES: Final = tuple(10.0 ** (e / 2) for e in range(-12, 1))  # a rollout, in units of the tree's scale
_PARTS: Final = 4
_LEAST: Final = 500  # candidates of a slice whose coverage is judged
_BINS: Final = tuple(10.0 ** np.arange(-10, 1))  # of scores, in units of the tree's scale


@dataclass(frozen=True, eq=False)
class Scored:
    """Candidates with what a scorer says of them, in units of their tree's scale; trees without uncertainty
    have unit 1. exact, score, high, rollouts : (n,). rollouts : that a value pays for, 1 for a rate."""

    candidates: Candidates
    exact: Floats
    score: Floats
    high: Floats
    rollouts: Floats | float

    @classmethod
    def of(cls, candidates: Candidates, score: Floats, high: Floats | None = None) -> Scored:
        """From values in the candidates' own unit."""
        groups = candidates.groups
        scale = groups.highest(spreads(candidates.kind, candidates.columns))
        unit = groups.spread(np.where(scale > 0, scale, 1.0))
        high = np.full(len(unit), np.inf) if high is None else high
        rollouts = 1.0 if candidates.is_rate else candidates.batch
        return cls(candidates, candidates.label / unit, score / unit, high / unit, rollouts)

    @property
    def groups(self) -> Groups:
        """The rows grouped by tree."""
        return self.candidates.groups

    def over_trees(self, part: Floats, whole: Floats, n_boot: int, seed: int) -> dict[str, float | None]:
        """Sum of `part` over sum of `whole`, both a number a row, as an estimate."""
        groups = self.groups
        return ratio_over_trees(
            groups.total(part),
            groups.total(whole),
            weight=self.candidates.tree_weights,
            cluster=self.candidates.clusters,
            n_boot=n_boot,
            seed=seed,
        ).to_json()


# --- by slice of trees -----------------------------------------------------------------------------


def tree_facts(candidates: Candidates) -> dict[str, Floats]:
    """What trees are sliced by, a number a tree: leaves, rollouts left, noise of a rollout over the leaf's
    variance (median), the gap between the best two actions over the scale, the horizon or batch where it
    varies, and, where the dataset's folder is known, depth (edges to the deepest leaf) and visits (rollouts
    so far)."""
    groups, columns = candidates.groups, candidates.columns
    facts = {
        "leaves": groups.sizes.astype(float),
        "rollouts left": np.asarray(columns["remaining"], dtype=float)[groups.starts],
    }
    if {"mean", "noise_var"} <= columns.keys():
        ratio = columns["noise_var"] / np.maximum(columns["var"], 1e-300)
        mean = columns["gain"] * columns["mean"] + columns["offset"]
        sd = spreads(candidates.kind, columns)
        noise, gap = np.zeros(len(groups.starts)), np.zeros(len(groups.starts))
        for t, (a, n) in enumerate(zip(groups.starts, groups.sizes, strict=True)):
            rows = slice(a, a + n)
            noise[t] = np.median(ratio[rows])
            gap[t] = _gap(mean[rows], columns["action"][rows]) / max(sd[rows].max(), 1e-300)
        facts |= {"noise": noise, "gap": gap}
    for key, name in SCALAR_OF.items():
        if name in candidates.kind.varies:
            facts[key] = np.asarray(columns[name], dtype=float)[groups.starts]
    if candidates.folder is not None:
        wanted = {int(i): t for t, i in enumerate(groups.ids)}
        depth, visits = np.zeros(len(wanted)), np.zeros(len(wanted))
        for number, tree in read_trees(candidates.folder):
            place = wanted.get(int(number))
            if place is not None:
                depth[place] = _depth(tree)
                visits[place] = 0.0 if tree.count is None else float(np.sum(tree.count))
        facts |= {"depth": depth, "visits": visits}
    return facts


def _gap(mean: Floats, action: Ints) -> float:
    """Between the best two actions, each counted by its best mean; 0 for a single action."""
    best = np.full(int(action.max()) + 1, -np.inf)
    np.maximum.at(best, action, mean)
    top = np.sort(best[np.isfinite(best)])
    return float(top[-1] - top[-2]) if len(top) > 1 else 0.0


def _depth(tree: BeliefTree) -> int:
    depth = np.zeros(tree.n_nodes, dtype=np.int64)
    for node, parent in enumerate(tree.parent.tolist()):
        if parent >= 0:
            depth[node] = depth[parent] + 1
    return int(depth.max())


def _parts(x: Floats) -> Iterator[tuple[str, NDArray[np.bool_]]]:
    """Up to four parts of about as many trees each, with the ends of their values."""
    shares = np.arange(1, _PARTS) / _PARTS
    if np.isinf(x).any():  # there is no middle between a finite number and infinity
        edges = np.unique(np.quantile(x, shares, method="lower"))
    else:
        edges = np.unique(np.quantile(x, shares))
    part = np.searchsorted(edges, x, side="left")
    for one in np.unique(part):
        rows = part == one
        low, high = float(x[rows].min()), float(x[rows].max())
        yield (f"{low:.3g}" if low == high else f"{low:.3g} to {high:.3g}"), rows


def forgone_by_slice(
    scored: Scored, facts: Mapping[str, Floats], *, n_boot: int = 200, seed: int = 0
) -> list[dict[str, Any]]:
    """Both shares forgone and the coverage of the upper bound in each slice, as JSON values."""
    inside = scored.exact <= scored.high
    out = []
    for name, x in facts.items():
        for label, trees in _parts(x):
            candidates = scored.candidates.of_trees(trees)
            rows = scored.groups.spread(trees)
            found = measure(
                candidates.tree,
                candidates.label,
                scored.score[rows],
                weight=candidates.tree_weights,
                cluster=candidates.clusters,
                n_boot=n_boot,
                seed=seed,
            ).to_json()
            out.append(
                {
                    "by": name,
                    "slice": label,
                    "trees": int(trees.sum()),
                    "candidates": int(rows.sum()),
                    "forgone_percent": found["forgone_percent"],
                    "relative_forgone_percent": found["relative_forgone_percent"],
                    "covered_percent": 100 * float(np.average(inside[rows], weights=candidates.weight)),
                }
            )
    return out


# --- calibration -----------------------------------------------------------------------------------


def calibration(
    scored: Scored, slices: Sequence[Mapping[str, Any]] = (), *, n_boot: int = 200, seed: int = 0
) -> dict[str, Any]:
    """How often the upper bound holds, and how exact values compare with scores of each size; JSON values.

    `covered_percent` counts all candidates, `covered_live_percent` those not 0 in both value and score.
    `bins` : by size of the score; mean exact value, mean score, and how often the bound holds there.
    `worst_slice` : of those with 500 candidates or more, the one where the bound holds least often.
    """
    inside = (scored.exact <= scored.high).astype(float)
    alive = live(scored.exact, scored.score).astype(float)
    percent = 100 * inside
    which = np.searchsorted(_BINS, scored.score)
    bins = []
    for i in range(1, len(_BINS) + 1):
        rows = which == i
        if np.any(rows):
            bins.append(
                {
                    "from": _BINS[i - 1],
                    "to": _BINS[i] if i < len(_BINS) else None,
                    "candidates": int(rows.sum()),
                    "mean_exact": float(scored.exact[rows].mean()),
                    "mean_score": float(scored.score[rows].mean()),
                    "covered_percent": float(percent[rows].mean()),
                }
            )
    judged = [s for s in slices if s["candidates"] >= _LEAST]
    worst = min(judged, key=lambda s: s["covered_percent"], default=None)
    return {
        "covered_percent": scored.over_trees(percent, np.ones_like(percent), n_boot, seed),
        "covered_live_percent": scored.over_trees(percent * alive, alive, n_boot, seed),
        "bins": bins,
        "worst_slice": None
        if worst is None
        else {key: worst[key] for key in ("by", "slice", "candidates", "covered_percent")},
    }


# --- stopping --------------------------------------------------------------------------------------


def stop_curve(
    scored: Scored, *, prices: Sequence[float] = PRICES, n_boot: int = 200, seed: int = 0
) -> list[dict[str, Any]]:
    """Value lost a tree by stopping or going on wrongly, at each price of a rollout, as JSON values.

    Prices and losses are in units of the tree's scale. `value`, `low`, `high` : by the scorer.
    `stop_at_once`, `go_on` : by an agent that never rolls out, and one that always does, where the scorer
    picks.
    """
    groups = scored.groups
    one = np.zeros(groups.n_rows)
    one[groups.starts] = 1.0
    out = []
    for price in prices:
        cost: Floats = np.multiply(price, scored.rollouts) * np.ones(groups.n_rows)
        net = scored.exact - cost
        best = np.maximum(groups.highest(net), 0.0)
        pick = picks(groups, scored.score - cost)
        losses = {
            "": stop_loss(groups, scored.exact, scored.score, price, scored.rollouts),
            "stop_at_once": best,
            "go_on": np.where(groups.highest(net) <= 0, -net[pick], 0.0),
        }
        spread = {name: np.where(one > 0, groups.spread(x), 0.0) for name, x in losses.items()}
        found = {name: scored.over_trees(x, one, n_boot, seed) for name, x in spread.items()}
        others = {name: e["value"] for name, e in found.items() if name}
        out.append({"price": price, **found[""], **others})
    return out
