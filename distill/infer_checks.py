"""Where recorded trees contradict the model that a family stands on, in plain words; floor 5.

Stages of one decision, recorded as a search went on, test the beliefs: between two records a posterior mean
must move, on average over all leaves, by exactly the variance that went away, E[(m2 - m1)^2] = E[v1 - v2],
whatever rule chose the leaves, because posterior means are martingales. Single records test less. Intervals
behind a verdict cover at 99 %.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, Final

import numpy as np

from distill import schema
from distill.estimates import Estimated, bootstrap, by_group
from distill.infer_beliefs import Prior
from distill.tree import BeliefTree, Floats
from distill.tree_columns import path_gains

__all__ = ["MOST_HORIZONS", "Finding", "findings"]

MOST_HORIZONS: Final = 8  # that a family lists where some are infinite
_ENOUGH: Final = 200  # moves of a leaf's mean, below which nothing is said of their distribution
_FEW_ROLLOUTS: Final = 4  # between two records: more would average a rollout's own shape away
_TAIL: Final = 0.5  # excess kurtosis that counts as far from Gaussian
_SKEW: Final = 0.3
_SURE: Final = 0.99  # coverage of the intervals behind a verdict: an alarm in a hundred is false
_MOST_SHOWN: Final = 2000


@dataclass(frozen=True)
class Finding:
    """about : what was tested. verdict : "fits", "contradicts" or "untold". words : the finding.

    figures : name -> number or estimate. sample : numbers for a picture.
    """

    about: str
    verdict: str
    words: str
    figures: Mapping[str, Any] = field(default_factory=dict)
    sample: Sequence[float] = ()

    def to_json(self) -> dict[str, Any]:
        """Plain values."""
        figures = {k: v.to_json() if isinstance(v, Estimated) else v for k, v in self.figures.items()}
        return {
            "about": self.about,
            "verdict": self.verdict,
            "words": self.words,
            "figures": figures,
            "sample": [float(f"{x:.4g}") for x in self.sample],
        }


@dataclass(frozen=True, eq=False)
class _Moves:
    """What happened between two records of a decision, per leaf with new rollouts unless said otherwise.

    moved, variance : m2 - m1 and v1 - v2. rollouts : new ones. group : decision.
    pairs : over pairs of such leaves under one node, sum of products of moves, and of their sds.
    still_moved : leaves without a new rollout whose mean moved, and still : how many there are.
    wrong_variance, checked : leaves whose variance is not what Bayes' rule leaves, of how many.
    """

    group: int
    moved: Floats
    variance: Floats
    rollouts: Floats
    pairs: tuple[float, float]
    still_moved: int
    still: int
    wrong_variance: int
    checked: int
    noise_changed: bool


def findings(
    trees: Sequence[BeliefTree],
    group: Sequence[int],
    priors: Sequence[Prior] | None,
    rules_assumed: bool,
    seed: int = 0,
) -> list[Finding]:
    """What fits and what does not; `group` numbers the decisions from 0, `priors` as from `prior_of`."""
    moves = list(_stages(trees, group))
    return [
        *_counts(trees),
        *([] if priors is None else _variances(trees, priors)),
        *_drift(moves, seed),
        *([] if priors is None else _gaussian(moves, seed)),
        *_siblings(moves, trees, seed),
        *_structure(trees, priors),
        *_rules(rules_assumed),
    ]


def _stages(trees: Sequence[BeliefTree], group: Sequence[int]) -> Iterator[_Moves]:
    last: dict[int, BeliefTree] = {}
    for g, tree in zip(group, trees, strict=True):
        before = last.get(g)
        last[g] = tree
        same = (
            before is not None
            and before.count is not None
            and tree.count is not None
            and np.array_equal(before.parent, tree.parent)
            and np.array_equal(before.kind, tree.kind)
            and np.all(tree.count >= before.count)
        )
        if same:
            assert before is not None
            yield _between(before, tree, g)


def _between(a: BeliefTree, b: BeliefTree, g: int) -> _Moves:
    assert a.count is not None
    assert b.count is not None
    rollouts = b.count - a.count
    (m1, v1), (m2, v2) = _moments(a), _moments(b)
    moved, gone = m2 - m1, v1 - v2
    tiny = 1e-6 * np.maximum(v1, v2)
    new = (rollouts > 0) & (v1 > 0) & (np.abs(gone) > tiny)
    wrong = checked = 0
    noise_changed = False
    if a.var is not None and b.var is not None:
        assert a.noise_var is not None
        assert b.noise_var is not None
        noise_changed = not np.allclose(a.noise_var, b.noise_var, rtol=1e-6, atol=0)
        expected = a.var * a.noise_var / (a.noise_var + rollouts * a.var)
        checked = len(expected)
        wrong = int(np.count_nonzero(np.abs(b.var - expected) > 1e-4 * expected))
    still = (rollouts == 0) if a.cov is None else np.zeros(len(rollouts), dtype=bool)
    still_moved = int(np.count_nonzero(np.abs(moved[still]) > 1e-6 * (np.sqrt(v1[still]) + 1e-300)))
    parent = a.parent[a.leaf_nodes]
    sd = np.sqrt(np.maximum(gone, 0)) * new
    products = spread = 0.0
    if a.cov is None:  # with a covariance, siblings are meant to move together
        for p in np.unique(parent[new]):
            at = np.flatnonzero((parent == p) & new)
            products += float(np.sum(moved[at])) ** 2 - float(np.sum(moved[at] ** 2))
            spread += float(np.sum(sd[at])) ** 2 - float(np.sum(sd[at] ** 2))
    return _Moves(
        g, moved[new], gone[new], rollouts[new], (products, spread), still_moved,
        int(np.count_nonzero(still)), wrong, checked, noise_changed,
    )  # fmt: skip


def _moments(tree: BeliefTree) -> tuple[Floats, Floats]:
    if tree.mean is not None:
        var = np.diag(tree.cov) if tree.cov is not None else tree.var
        assert var is not None
        return tree.mean, var
    assert tree.alpha is not None
    assert tree.beta is not None
    assert tree.low is not None
    assert tree.high is not None
    total, span = tree.alpha + tree.beta, tree.high - tree.low
    rate = tree.alpha / total
    return tree.low + span * rate, span**2 * rate * (1 - rate) / (total + 1)


# --- single findings -------------------------------------------------------------------------------


def _counts(trees: Sequence[BeliefTree]) -> Iterator[Finding]:
    counts = [t.count for t in trees if t.count is not None]
    if len(counts) < len(trees):
        yield Finding(
            "rollouts so far", "untold",
            f"{len(trees) - len(counts)} of {len(trees)} records have no `count`: their beliefs are taken "
            "for priors, as if no rollout had been spent.",
        )  # fmt: skip
    if not counts:
        return
    all_counts = np.concatenate(counts)
    untried = float(np.mean(all_counts == 0))
    tried = int(np.count_nonzero(all_counts))
    few = tried < _ENOUGH
    yield Finding(
        "enough rollouts", "untold" if few else "fits",
        f"{tried:,} of {len(all_counts):,} recorded leaves have rollouts, {float(all_counts.mean()):.3g} a "
        f"leaf on average" + ("; too few to tell the noise from the beliefs' moves." if few else "."),
        {"untried share": untried, "rollouts a leaf": float(all_counts.mean())},
    )  # fmt: skip


def _variances(trees: Sequence[BeliefTree], priors: Sequence[Prior]) -> Iterator[Finding]:
    impossible = sum(p.impossible for p in priors)
    leaves = sum(t.n_leaves for t in trees)
    unknown = sum(int(np.count_nonzero(np.isnan(p.sd))) for p in priors) - impossible
    if impossible:
        yield Finding(
            "variances against counts", "contradicts",
            f"{impossible:,} of {leaves:,} leaves are less certain than `count` rollouts with their "
            "noise_var leave any prior: count, noise_var or the agent's updates are not as the record says.",
            {"leaves": impossible},
        )  # fmt: skip
    else:
        yield Finding(
            "variances against counts", "fits", "Every variance can come from a prior, count and noise."
        )
    if unknown > 0:
        yield Finding(
            "variances against counts", "untold",
            f"{unknown:,} leaves have so many rollouts that their prior variance is lost in rounding; "
            "they are left out.",
        )  # fmt: skip


def _drift(moves: Sequence[_Moves], seed: int) -> Iterator[Finding]:
    about = "means that move as their variance says"
    if sum(len(m.moved) for m in moves) < 20:
        yield Finding(
            about, "untold",
            "Too few decisions are recorded at several stages (with `count`, and equal `extra` that names "
            "the `decision`): nothing tells whether leaves drift, how rollouts are distributed, or whether "
            "siblings are alike.",
        )  # fmt: skip
        return
    ratio = _grouped(
        moves, {"d": lambda m: np.sum(m.moved**2), "v": lambda m: np.sum(m.variance)}, "d", "v", seed
    )
    figures = {"squared moves over variance gone": ratio}
    if ratio.low > 1:
        words = (
            f"Means move {math.sqrt(ratio.value):.3g} times as far between records as their variances allow: "
            "leaves drift, or noise_var is stated too small."
        )
    elif ratio.high < 1:
        words = (
            f"Means move only {math.sqrt(ratio.value):.3g} times as far between records as their variances "
            "say: noise_var or the prior variance is stated too large."
        )
    else:
        words = "Between records, means move as far as their variances say."
    yield Finding(about, "fits" if ratio.low <= 1 <= ratio.high else "contradicts", words, figures)
    still, moved = sum(m.still for m in moves), sum(m.still_moved for m in moves)
    if moved:
        yield Finding(
            "leaves without new rollouts stay", "contradicts",
            f"{moved:,} of {still:,} leaves without a new rollout have another mean in the next record: they "
            "drift, or something else than their own rollouts moves them.",
            {"leaves": moved},
        )  # fmt: skip
    wrong, checked = sum(m.wrong_variance for m in moves), sum(m.checked for m in moves)
    if wrong:
        yield Finding(
            "variances follow Bayes' rule", "contradicts",
            f"{wrong:,} of {checked:,} variances are not what the record before, noise_var and the new "
            "rollouts leave.",
            {"leaves": wrong},
        )  # fmt: skip
    if any(m.noise_changed for m in moves):
        yield Finding(
            "noise that stays", "contradicts",
            "noise_var of a leaf changes between records of one decision: the agent estimates it as it goes, "
            "and the beliefs do not carry that uncertainty.",
        )  # fmt: skip


def _grouped(
    moves: Sequence[_Moves], sums: Mapping[str, Any], above: str, below: str, seed: int
) -> Estimated:
    """A ratio of sums over moves, drawn again by decision."""
    at = np.unique([m.group for m in moves], return_inverse=True)[1].tolist()
    table = by_group([{name: float(f(m)) for name, f in sums.items()} for m in moves], at)
    return bootstrap(table, lambda s: {"ratio": s[above] / s[below]}, level=_SURE, seed=seed)["ratio"]


def _gaussian(moves: Sequence[_Moves], seed: int) -> Iterator[Finding]:
    about = "noise that is Gaussian"
    few = [(m.rollouts <= _FEW_ROLLOUTS) & (m.variance > 0) for m in moves]
    z = [m.moved[f] / np.sqrt(m.variance[f]) for m, f in zip(moves, few, strict=True)]
    n = sum(len(x) for x in z)
    if n < _ENOUGH:
        if moves:
            yield Finding(
                about, "untold",
                f"Only {n} moves of at most {_FEW_ROLLOUTS} rollouts are recorded; {_ENOUGH} are needed.",
            )  # fmt: skip
        return
    at = np.unique([m.group for m in moves], return_inverse=True)[1].tolist()
    sums = by_group([{f"z{k}": float(np.sum(x**k)) for k in range(5)} for x in z], at)
    shape = bootstrap(sums, _standardised, level=_SURE, seed=seed)
    skew, tail = shape["skewness"], shape["excess kurtosis"]
    far = tail.low > _TAIL or skew.low > _SKEW or skew.high < -_SKEW
    rare = float(np.mean(np.abs(np.concatenate(z)) > 4))
    words = (
        f"Moves of at most {_FEW_ROLLOUTS} rollouts, in units of their sd: skewness {skew.value:.2g} "
        f"[{skew.low:.2g}, {skew.high:.2g}], excess kurtosis {tail.value:.2g} [{tail.low:.2g}, "
        f"{tail.high:.2g}], beyond 4 sd {100 * rare:.2g} % (Gaussian: 0, 0, 0.006 %). "
    )
    words += (
        "Rollouts are far from Gaussian: exact values for the stated beliefs are not exact for this agent."
        if far
        else "Nothing here speaks against Gaussian rollouts."
    )
    shown = np.concatenate(z)
    shown = np.sort(np.random.default_rng(seed).permutation(shown)[:_MOST_SHOWN])
    yield Finding(
        about,
        "contradicts" if far else "fits",
        words,
        {"skewness": skew, "excess kurtosis": tail, "moves": n, "beyond 4 sd, share": rare},
        shown.tolist(),
    )


def _standardised(s: Mapping[str, Any]) -> dict[str, Any]:
    n = s["z0"]
    m1, m2, m3, m4 = (s[f"z{k}"] / n for k in (1, 2, 3, 4))
    var = m2 - m1**2
    third = m3 - 3 * m1 * m2 + 2 * m1**3
    fourth = m4 - 4 * m1 * m3 + 6 * m1**2 * m2 - 3 * m1**4
    return {"skewness": third / var**1.5, "excess kurtosis": fourth / var**2 - 3}


def _siblings(moves: Sequence[_Moves], trees: Sequence[BeliefTree], seed: int) -> Iterator[Finding]:
    about = "independent siblings"
    spread = sum(m.pairs[1] for m in moves)
    if any(t.cov is not None for t in trees) or spread <= 0:
        return
    r = _grouped(moves, {"p": lambda m: m.pairs[0], "s": lambda m: m.pairs[1]}, "p", "s", seed)
    alike = not r.low <= 0 <= r.high
    words = (
        f"Leaves under one node move together (correlation {r.value:.2g} [{r.low:.2g}, {r.high:.2g}] of "
        "their moves), and the beliefs take them for independent."
        if alike
        else f"Leaves under one node move independently (correlation {r.value:.2g} [{r.low:.2g}, "
        f"{r.high:.2g}])."
    )
    yield Finding(about, "contradicts" if alike else "fits", words, {"correlation": r})


def _structure(trees: Sequence[BeliefTree], priors: Sequence[Prior] | None) -> Iterator[Finding]:
    lone = sum(int(np.count_nonzero(np.bincount(t.parent[1:]) == 1)) for t in trees)
    if lone:
        yield Finding(
            "inner nodes with a choice", "contradicts",
            f"{lone:,} inner nodes have a single child; the family's have at least two.",
        )  # fmt: skip
    uneven = sum(map(_is_uneven, trees))
    if uneven:
        yield Finding(
            "one discount a tree", "contradicts",
            f"Leaves of {uneven:,} of {len(trees):,} trees are discounted otherwise than by one discount for "
            "every edge; the family has one a tree, under which the geometric mean of its leaves' gains is "
            "the recorded one.",
        )  # fmt: skip
    sure = 0 if priors is None else sum(int(np.count_nonzero(p.sd == 0)) for p in priors)
    if sure:
        yield Finding(
            "uncertain leaves", "contradicts",
            f"{sure:,} leaves are sure (variance 0), ends of the game as a rule; the family draws such "
            "leaves at random places, with means like any other's.",
            {"leaves": sure},
        )  # fmt: skip
    misfit = max((p.misfit for p in priors or () if p.shared is not None), default=0.0)
    if misfit > 0.01:
        yield Finding(
            "correlation from ancestors", "contradicts",
            f"Correlations differ by up to {misfit:.2g} from what nodes above two leaves, sharing in equal "
            "parts, would give; the family keeps the best fit.",
            {"largest difference": misfit},
        )  # fmt: skip
    horizons = {math.inf if t.horizon is None else t.horizon for t in trees}
    if math.inf in horizons and len(horizons) > MOST_HORIZONS:
        yield Finding(
            "a range of horizons", "contradicts",
            "Some records state a finite horizon and others none or an infinite one, in more than "
            f"{MOST_HORIZONS} values, which no range holds; the family leaves it out.",
        )  # fmt: skip


def _is_uneven(tree: BeliefTree) -> bool:
    """Whether one discount for every edge gives other gains, or counts rewards on the way otherwise."""
    logs, edges = path_gains(tree)
    if not np.allclose(logs, edges * (logs.sum() / edges.sum()), rtol=1e-9, atol=1e-9):
        return True
    on_the_way = np.any(tree.reward[tree.kind != schema.LEAF])
    return bool(on_the_way) and not np.allclose(tree.discount[1:], tree.discount[1], rtol=1e-9)


def _rules(assumed: bool) -> Iterator[Finding]:
    if assumed:
        yield Finding(
            "rule of the search", "untold",
            "No `extra.rule` names the rule that gave out rollouts; the family mixes even, UCT, Thompson and "
            "static rate in equal parts.",
        )  # fmt: skip
