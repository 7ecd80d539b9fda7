"""How good a scorer's picks are, measured against exact labels, by tree; floor 4.

Every figure is a ratio of two sums over trees, so one bootstrap over trees serves them all: a tree,
never a candidate, is the unit that is drawn again (or a cluster of trees). Candidates of one tree stand
together.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from distill.errors import InputError
from distill.tree import Floats, Ints

__all__ = [
    "Estimate",
    "Groups",
    "Metrics",
    "measure",
    "picks",
    "random_forgone",
    "ratio_over_trees",
    "stop_loss",
]

_CHUNK = 4_000_000  # draws held in memory at once by the bootstrap


@dataclass(frozen=True)
class Groups:
    """Candidate rows grouped by tree: rows `starts[t]` to `starts[t] + sizes[t]` belong to tree t.

    >>> Groups.of([7, 7, 3, 3, 3]).sizes
    array([2, 3])
    """

    starts: Ints
    sizes: Ints
    ids: Ints

    @classmethod
    def of(cls, tree: Sequence[int] | NDArray[np.integer]) -> Groups:
        """Groups of a `tree` column; the rows of one tree must stand together."""
        column = np.asarray(tree, dtype=np.int64)
        if column.ndim != 1 or len(column) == 0:
            raise InputError("tree", "must be a column of at least one row", column.shape)
        starts = np.flatnonzero(np.r_[True, column[1:] != column[:-1]])
        ids = column[starts]
        if len(np.unique(ids)) != len(ids):
            raise InputError("tree", "must hold the candidates of one tree in rows that stand together")
        return cls(starts, np.diff(np.r_[starts, len(column)]), ids)

    @property
    def n_rows(self) -> int:
        """Number of candidates."""
        return int(self.sizes.sum())

    def spread(self, per_tree: NDArray[Any]) -> NDArray[Any]:
        """A value a tree, repeated over the tree's rows."""
        return np.repeat(per_tree, self.sizes)

    def total(self, x: Floats) -> Floats:
        """Sum over each tree's rows."""
        return np.asarray(np.add.reduceat(x, self.starts))

    def highest(self, x: Floats) -> Floats:
        """Largest of each tree's rows."""
        return np.asarray(np.maximum.reduceat(x, self.starts))


@dataclass(frozen=True)
class Estimate:
    """A figure with its bootstrap interval."""

    value: float
    low: float
    high: float

    def __str__(self) -> str:
        return f"{self.value:.3g} [{self.low:.3g}, {self.high:.3g}]"

    def to_json(self) -> dict[str, float | None]:
        """Plain numbers; None for what no tree defines."""
        return {key: None if np.isnan(x) else x for key, x in vars(self).items()}


@dataclass(frozen=True)
class Metrics:
    """What `measure` returns; shares in percent, over trees.

    forgone : 100 x sum(best - VOC of the pick) / sum(best).
    relative_forgone : 100 x mean(1 - VOC of the pick / best), trees with best > 0.
    top1 : 100 x share of trees whose pick has the best VOC (ties count as agreement).
    rank_correlation : mean Spearman correlation within trees, where it is defined.
    stop_share : 100 x sum(stop loss at the leaves' own cost) / sum of the best net values above 0; where no
        cost is given, rollouts are free.
    stop_loss : price -> value lost a tree, u; empty when no price was asked for.
    n_trees, n_candidates : what was measured.
    n_zero : trees whose best VOC is 0; they count in neither share.
    level : coverage of the intervals.
    """

    forgone: Estimate
    relative_forgone: Estimate
    top1: Estimate
    rank_correlation: Estimate
    stop_share: Estimate
    stop_loss: Mapping[float, Estimate]
    n_trees: int
    n_candidates: int
    n_zero: int
    level: float

    def to_json(self) -> dict[str, object]:
        """Plain numbers for a sheet; None for a figure that no tree defines."""
        return {
            "forgone_percent": self.forgone.to_json(),
            "relative_forgone_percent": self.relative_forgone.to_json(),
            "top1_percent": self.top1.to_json(),
            "rank_correlation": self.rank_correlation.to_json(),
            "stop_loss_percent": self.stop_share.to_json(),
            "stop_loss": [{"price": p, **e.to_json()} for p, e in self.stop_loss.items()],
            "trees": self.n_trees,
            "candidates": self.n_candidates,
            "trees_with_best_zero": self.n_zero,
            "interval_level": self.level,
        }


def picks(groups: Groups, score: Floats) -> Ints:
    """Row that each tree's pick stands on: the highest score, the first on ties; shape (n_trees,).

    >>> picks(Groups.of([0, 0, 0, 1, 1]), np.array([1.0, 3.0, 3.0, 5.0, 2.0]))
    array([1, 3])
    """
    is_top = score == groups.spread(groups.highest(score))
    row = np.where(is_top, np.arange(len(score)), len(score))
    return np.asarray(np.minimum.reduceat(row, groups.starts))


def stop_loss(
    groups: Groups, exact: Floats, score: Floats, price: Floats | float, rollouts: Floats | float = 1.0
) -> Floats:
    """Value lost by each tree where the scorer stops and exact VOC goes on, or the other way round, u.

    price : u a rollout, one or one a row. rollouts : rollouts that each row's value pays for; 1 for a rate.
    Where both go on, a wrong pick is the forgone share's matter and costs nothing here. Stopping
    wrongly loses the best net value; going on wrongly loses what the pick costs beyond its value.

    >>> stop_loss(Groups.of([0, 1, 2]), np.array([3.0, 1.0, 3.0]), np.array([1.0, 3.0, 3.0]), price=2.0)
    array([1., 1., 0.])
    """
    cost: Floats = np.multiply(price, rollouts)
    exact_net, score_net = exact - cost, score - cost
    best = groups.highest(exact_net)
    pick = picks(groups, score_net)
    goes = score_net[pick] > 0
    return np.where(goes & (best <= 0), -exact_net[pick], np.where(~goes & (best > 0), best, 0.0))


def measure(
    tree: Sequence[int] | NDArray[np.integer],
    exact: Floats,
    score: Floats,
    *,
    weight: Floats | None = None,
    cluster: Sequence[int] | NDArray[np.integer] | None = None,
    cost: Floats | float = 0.0,
    prices: Sequence[float] = (),
    rollouts: Floats | float = 1.0,
    n_boot: int = 1000,
    level: float = 0.95,
    seed: int = 0,
) -> Metrics:
    """Measure a scorer's picks against exact values.

    tree : tree of each row; a tree's rows stand together. exact : exact VOC or rate, u, >= 0.
    score : what the scorer gives; any scale serves, except for `prices`. weight : one a tree, in order
    of first appearance (for samples drawn towards close calls). cluster : one a tree; trees of one cluster,
    such as the stages of one decision, are drawn again together. cost : u a rollout at each row, for the
    stop loss; prices : the same for all rows. rollouts : as in `stop_loss`.
    Intervals are percentile bootstrap intervals over trees; the same seed gives the same interval.
    Raises InputError on unequal lengths, a negative or non-finite exact value, or a NaN score.

    >>> m = measure([0, 0, 1, 1], np.array([4.0, 1.0, 0.0, 6.0]), np.array([9.0, 8.0, 7.0, 6.0]))
    >>> m.forgone.value, m.relative_forgone.value, m.top1.value
    (60.0, 50.0, 50.0)
    """
    groups = Groups.of(tree)
    exact = _column("exact", exact, groups.n_rows)
    score = _column("score", score, groups.n_rows)
    if np.any(exact < 0) or not np.all(np.isfinite(exact)):
        raise InputError("exact", "must be finite and >= 0")
    w = np.ones(len(groups.starts)) if weight is None else _column("weight", weight, len(groups.starts))
    if np.any(w < 0) or not np.all(np.isfinite(w)) or not np.any(w > 0):
        raise InputError("weight", "must be finite, >= 0 and not all 0")

    best, got = groups.highest(exact), exact[picks(groups, score)]
    positive = best > 0
    best_net = groups.highest(exact - np.multiply(cost, rollouts))
    rho, defined = rank_correlation(groups, exact, score)
    columns: list[tuple[NDArray[Any], NDArray[Any]]] = [
        (best - got, best),
        (np.where(positive, 1 - got / np.where(positive, best, 1), 0.0), positive),
        (got == best, np.ones_like(best)),
        (np.where(defined, rho, 0.0), defined),
        (stop_loss(groups, exact, score, cost, rollouts), np.maximum(best_net, 0)),
        *((stop_loss(groups, exact, score, p, rollouts), np.ones_like(best)) for p in prices),
    ]
    numerators = np.stack([w * a for a, _ in columns], axis=1)
    denominators = np.stack([w * b for _, b in columns], axis=1)
    numerators, denominators = _clustered(numerators, denominators, cluster)
    forgone, relative, top1, rank, stop, *losses = _bootstrap(numerators, denominators, n_boot, level, seed)
    return Metrics(
        _percent(forgone),
        _percent(relative),
        _percent(top1),
        rank,
        _percent(stop),
        dict(zip(map(float, prices), losses, strict=True)),
        len(groups.starts),
        groups.n_rows,
        int(np.count_nonzero(~positive)),
        level,
    )


def ratio_over_trees(
    part: Floats,
    whole: Floats,
    *,
    weight: Floats | None = None,
    cluster: Sequence[int] | NDArray[np.integer] | None = None,
    n_boot: int = 1000,
    level: float = 0.95,
    seed: int = 0,
) -> Estimate:
    """Sum of `part` over sum of `whole`, a number a tree each; interval, weight and cluster as in `measure`.

    >>> ratio_over_trees(np.array([1.0, 2.0]), np.array([2.0, 4.0]), n_boot=10)
    Estimate(value=0.5, low=0.5, high=0.5)
    """
    w = np.ones(len(part)) if weight is None else _column("weight", weight, len(part))
    pair = _clustered((w * part)[:, None], (w * whole)[:, None], cluster)
    return _bootstrap(*pair, n_boot, level, seed)[0]


def random_forgone(
    tree: Sequence[int] | NDArray[np.integer], exact: Floats, *, weight: Floats | None = None
) -> tuple[float, float]:
    """Forgone share and relative forgone, in percent, that a pick at random is expected to leave.

    weight : one a tree, as in `measure`.

    >>> random_forgone([0, 0, 1], np.array([4.0, 0.0, 6.0]))
    (20.0, 25.0)
    """
    groups = Groups.of(tree)
    best, mean = groups.highest(exact), groups.total(exact) / groups.sizes
    w = np.ones(len(best)) if weight is None else _column("weight", weight, len(best))
    some = (best > 0) & (w > 0)
    if not np.any(some):
        return float("nan"), float("nan")
    share = float(100 * np.sum(w * (best - mean)) / np.sum(w * best))
    return share, float(100 * np.average(1 - mean[some] / best[some], weights=w[some]))


def rank_correlation(groups: Groups, exact: Floats, score: Floats) -> tuple[Floats, NDArray[np.bool_]]:
    """Spearman's correlation within each tree (ties take their mean rank), and where it is defined.

    It is not defined for a tree of one candidate, or whose exact values or scores are all equal.
    """
    a, b = _ranks(groups, exact), _ranks(groups, score)
    middle: Floats = groups.spread((groups.sizes + 1) / 2)
    a, b = a - middle, b - middle
    size = np.sqrt(groups.total(a * a) * groups.total(b * b))
    defined = size > 0
    rho = groups.total(a * b) / np.where(defined, size, 1)
    return np.where(defined, rho, np.nan), defined


def _ranks(groups: Groups, x: Floats) -> Floats:
    """1-based rank within each tree; equal values share their mean rank."""
    tree = groups.spread(np.arange(len(groups.starts)))
    order = np.lexsort((x, tree))
    xs, ts = x[order], tree[order]
    new = np.r_[True, (xs[1:] != xs[:-1]) | (ts[1:] != ts[:-1])]
    run_start = np.flatnonzero(new)
    run_length = np.diff(np.r_[run_start, len(x)])
    mean_position = run_start + (run_length - 1) / 2
    ranks = np.empty(len(x))
    ranks[order] = np.repeat(mean_position, run_length) - groups.spread(groups.starts) + 1
    return ranks


def _clustered(
    numerators: Floats, denominators: Floats, cluster: Sequence[int] | NDArray[np.integer] | None
) -> tuple[Floats, Floats]:
    """Rows of a cluster summed, so that they are drawn again together."""
    if cluster is None:
        return numerators, denominators
    member = np.unique(np.asarray(cluster), return_inverse=True)[1]
    if member.shape != (len(numerators),):
        raise InputError("cluster", f"must have shape ({len(numerators)},)", member.shape)
    return _sums(numerators, member), _sums(denominators, member)


def _sums(columns: Floats, member: Ints) -> Floats:
    """Sums of the rows of each cluster."""
    out = np.zeros((int(member.max()) + 1, columns.shape[1]))
    np.add.at(out, member, columns)
    return out


def _bootstrap(
    numerators: Floats, denominators: Floats, n_boot: int, level: float, seed: int
) -> list[Estimate]:
    """Ratio of column sums with percentile intervals over rows drawn again with replacement."""
    n = len(numerators)
    both = np.hstack([numerators, denominators])
    rng = np.random.default_rng(seed)
    sums = np.empty((n_boot, both.shape[1]))
    step = max(1, _CHUNK // n)
    for start in range(0, n_boot, step):
        rows = min(step, n_boot - start)
        drawn = rng.integers(0, n, size=(rows, n)) + n * np.arange(rows)[:, None]
        counts = np.bincount(drawn.ravel(), minlength=rows * n).reshape(rows, n)
        # einsum, not BLAS: the same bits with any number of threads.
        sums[start : start + rows] = np.einsum("bn,nm->bm", counts.astype(float), both)
    m = numerators.shape[1]
    value = _ratio(numerators.sum(axis=0), denominators.sum(axis=0))
    drawn_values = _ratio(sums[:, :m], sums[:, m:])
    out = []
    for j in range(m):
        usable = drawn_values[np.isfinite(drawn_values[:, j]), j]
        low, high = (
            np.quantile(usable, [(1 - level) / 2, (1 + level) / 2]) if len(usable) else (np.nan, np.nan)
        )
        out.append(Estimate(float(value[j]), float(low), float(high)))
    return out


def _ratio(a: Floats, b: Floats) -> Floats:
    return np.where(b > 0, a / np.where(b > 0, b, 1), np.nan)


def _percent(e: Estimate) -> Estimate:
    return Estimate(100 * e.value, 100 * e.low, 100 * e.high)


def _column(name: str, x: Floats, length: int) -> Floats:
    x = np.asarray(x, dtype=float)
    if x.shape != (length,):
        raise InputError(name, f"must have shape ({length},)", x.shape)
    if np.any(np.isnan(x)):
        raise InputError(name, "must not be NaN")
    return x
