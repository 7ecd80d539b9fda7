"""An upper bound on every score, by split conformal prediction within bins; floor 4.

    voc_high = factor(x) voc,    factor(x) = exp of a high quantile of log(exact / voc) in the bin of x

The bins are the leaves of one small regression tree over the features and the leaf's standard deviation as a
share of the largest of its belief tree, grown on the rows of training (Breiman et al. 1984) to tell apart
where scores are close from where they are not: least so at leaves of little spread. The quantile of each
is taken on trees that had no part in training (Mondrian conformal prediction: Vovk, Gammerman and Shafer
2005, section 4.5). Candidates of one tree depend on each other, so the stated share is what new trees
show on average, not a proof for each; `validate` measures it on trees that had no part in calibration.

A candidate whose score and exact value are both 0 lies within any bound. Counted, such candidates let the
others miss more; left out, all would miss less than stated. Rows are weighed in between: the share of all
candidates comes to lie half as far above the stated one as the share of the others lies below it, but no
further above than a tenth of the misses that are stated: of 5 % misses, at least 4.5 % are made.

The bound is never below the score. Where scores lie so high that the score itself holds more often than
stated, a bin cannot be brought down to its share, and all bins together would hold more often than stated.
So the other bins aim at a common share a little lower, just as much as brings all together to the stated
share, and by at most half of the misses that are stated.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from sklearn.tree import DecisionTreeRegressor

from distill.errors import InputError
from distill.metrics import Groups
from distill.tree import Floats, Ints

__all__ = ["COVERAGE", "LEAST_SD", "UpperBound", "bin_columns", "calibrated", "live"]

COVERAGE: Final = 0.95
LEAST_SD: Final = 1e-300  # the largest spread of a tree counts as at least that
_MOST_BINS: Final = 32
_ROWS_A_BIN: Final = 300  # of calibration: a share of 5 % is then known to about 1 %
_FEW_ROWS: Final = 100
_FLOOR: Final = 0.01  # of a log ratio: scores closer than 1 % are alike
_LOG_LIMIT: Final = 20.0
_FEWEST_MISSES: Final = 0.9  # of those stated, over all candidates, however many are 0 in both
_MOST_GIVEN_BACK: Final = 0.5  # of the stated misses, that a bin makes beyond them for others' sake
_HALVINGS: Final = 30


@dataclass(frozen=True, eq=False)
class UpperBound:
    """The factor of each bin: a binary tree, root first; row x goes left where x[feature] <= split.

    feature, split, left, right : of each node; left = right = -1 at a leaf. factor : >= 1, of each leaf.
    coverage : the share of candidates at or below the bound that was aimed at. trees, candidates : what
    the factors were taken from.
    """

    feature: Ints
    split: Floats
    left: Ints
    right: Ints
    factor: Floats
    coverage: float
    trees: int
    candidates: int

    def bins(self, x: NDArray[Any]) -> Ints:
        """The leaf that each row of x falls into; shape (n,)."""
        at = np.zeros(len(x), dtype=np.int64)
        rows = np.arange(len(x))
        while np.any(inner := self.left[at] >= 0):
            low = x[rows, self.feature[at]] <= self.split[at]
            at = np.where(inner, np.where(low, self.left[at], self.right[at]), at)
        return at

    def of(self, x: NDArray[Any]) -> Floats:
        """The factor of each row of x; shape (n,)."""
        return np.asarray(self.factor[self.bins(x)])

    def facts(self) -> dict[str, Any]:
        """What a scorer file says of it, as JSON values."""
        bins = int(np.count_nonzero(self.left < 0))
        return {"coverage": self.coverage, "trees": self.trees, "candidates": self.candidates, "bins": bins}


def bin_columns(x: NDArray[Any], leaf_sd: Floats, groups: Groups) -> Floats:
    """What the bins are told by: the features of each row, and its spread as a share of its tree's largest.

    x : (n, d). leaf_sd : (n,), >= 0, as in FeatureMatrix. Shape (n, d + 1).

    >>> bin_columns(np.zeros((3, 1)), np.array([2.0, 1.0, 0.0]), Groups.of([0, 0, 1]))[:, 1].tolist()
    [1.0, 0.5, 0.0]
    """
    largest = groups.spread(groups.highest(leaf_sd))
    return np.column_stack([np.asarray(x, dtype=float), leaf_sd / np.maximum(largest, LEAST_SD)])


def live(exact: Floats, voc: Floats) -> NDArray[np.bool_]:
    """Candidates that some bound could miss or that are scored above 0: not 0 in both."""
    return np.asarray((exact > 0) | (voc > 0))


def calibrated(
    x: NDArray[Any],
    exact: Floats,
    voc: Floats,
    trees: int,
    *,
    training: tuple[NDArray[Any], Floats, Floats],
    weight: Floats | None = None,
    coverage: float = COVERAGE,
) -> UpperBound:
    """The bound for a scorer, from candidates of `trees` trees that had no part in its training.

    x : (n, d), by which the bins are told, see `bin_columns`. exact, voc : (n,), label and score, u a
    rollout. training : the same three of rows of training, from which only the bins come. weight : (n,),
    of each row, where trees were sampled with unequal chances. coverage : aimed at.
    Raises InputError for lengths that differ, no rows, or a share outside (0, 1).
    """
    for name, (rows, a, b) in {"calibration": (x, exact, voc), "training": training}.items():
        if not len(rows) == len(a) == len(b) > 0:
            raise InputError(name, "must hold at least one row, with value and score", len(rows))
    if not 0 < coverage < 1:
        raise InputError("coverage", "must be above 0 and below 1", coverage)
    feature, split, left, right = _grown(*training, len(x))
    empty = UpperBound(feature, split, left, right, np.ones(len(left)), coverage, trees, len(x))
    ratio = _log_ratio(exact, voc)
    of_row = np.ones(len(x)) if weight is None else np.asarray(weight, dtype=float)
    counted = _counted(of_row, live(exact, voc))
    bins = empty.bins(x)
    leaves = [leaf for leaf in np.flatnonzero(left < 0).tolist() if np.any(bins == leaf)]
    sorted_bins = [_Sorted.of(ratio[bins == leaf], counted[bins == leaf]) for leaf in leaves]
    pooled = _Sorted.of(ratio, counted).quantile(coverage)

    def logs(level: float) -> list[float]:
        """The log of each bin's factor."""
        out = []
        for one in sorted_bins:
            own = one.quantile(level)
            if len(one.ratio) < _FEW_ROWS:
                own = max(own, pooled)
            # Never below the score itself: a bound that lies under what it bounds would be misread.
            out.append(float(np.clip(own, 0.0, _LOG_LIMIT)))
        return out

    def held(level: float) -> float:
        return sum(one.below(log) for one, log in zip(sorted_bins, logs(level), strict=True))

    level = _common_level(held, sum(one.wanted(coverage) for one in sorted_bins), coverage)
    factor = np.ones(len(left))
    factor[leaves] = np.exp(logs(level))
    return UpperBound(feature, split, left, right, factor, coverage, trees, len(x))


def _counted(of_row: Floats, alive: NDArray[np.bool_]) -> Floats:
    """Weight of each row for the quantiles: the share p of all rows and that of live ones, p to 1.

    With a share `a` of rows 0 in both, misses of all are 1 - a times those of the live. p = 2 makes all lie
    half as far above the stated share as the live below it; p = 10 (0.9 / (1 - a) - 1) makes all miss 0.9
    of what is stated. The larger one serves.
    """
    total, some = float(of_row.sum()), float(of_row[alive].sum())
    if some <= 0:
        return of_row / total
    p = max(2.0, (_FEWEST_MISSES * total / some - 1) / (1 - _FEWEST_MISSES))
    return np.asarray(of_row * (p / total + alive / some))


def _common_level(held: Callable[[float], float], wanted: float, coverage: float) -> float:
    """The least level from the lowest allowed up to `coverage` at which the bins together hold `wanted`."""
    high, low = coverage, coverage - _MOST_GIVEN_BACK * (1 - coverage)
    if held(low) >= wanted:
        return low
    for _ in range(_HALVINGS):
        middle = (low + high) / 2
        low, high = (low, middle) if held(middle) >= wanted else (middle, high)
    return high


@dataclass(frozen=True, eq=False)
class _Sorted:
    """Log ratios of a bin in order, with the sums of their weights up to each."""

    ratio: Floats
    sums: Floats

    @classmethod
    def of(cls, ratio: Floats, weight: Floats) -> _Sorted:
        order = np.argsort(ratio, kind="stable")
        return cls(ratio[order], np.cumsum(weight[order]))

    def wanted(self, level: float) -> float:
        """Weight that the bound has to hold for, one more row taken as a miss; at most all."""
        return float(min(level * (self.sums[-1] + self.sums[-1] / len(self.ratio)), self.sums[-1]))

    def quantile(self, level: float) -> float:
        """The least ratio up to which the weight is as wanted."""
        at = int(np.searchsorted(self.sums, self.wanted(level) * (1 - 1e-12)))
        return float(self.ratio[min(at, len(self.ratio) - 1)])

    def below(self, log: float) -> float:
        """Weight of the ratios at or below a bound."""
        at = int(np.searchsorted(self.ratio, log, side="right"))
        return float(self.sums[at - 1]) if at else 0.0


def _log_ratio(exact: Floats, voc: Floats) -> Floats:
    """log(exact / voc): -infinity where exact is 0, infinity where only voc is."""
    both = (exact > 0) & (voc > 0)
    logs = np.log(np.where(both, exact, 1)) - np.log(np.where(both, voc, 1))
    return np.where(both, logs, np.where(exact > 0, np.inf, -np.inf))


def _grown(
    x: NDArray[Any], exact: Floats, voc: Floats, calibration_rows: int
) -> tuple[Ints, Floats, Ints, Ints]:
    """Feature, split, left and right of the nodes of a tree that separates close scores from others."""
    ratio = _log_ratio(exact, voc)
    usable = np.isfinite(ratio)
    most = int(np.clip(calibration_rows // _ROWS_A_BIN, 1, _MOST_BINS))
    if most == 1 or not np.any(usable):
        none = np.array([-1])
        return np.zeros(1, dtype=np.int64), np.zeros(1), none, none
    excess = np.log(np.maximum(ratio[usable], 0.0) + _FLOOR)
    least = max(1, _ROWS_A_BIN * len(x) // calibration_rows)
    grown = DecisionTreeRegressor(max_leaf_nodes=most, min_samples_leaf=least, random_state=0)
    tree = grown.fit(x[usable], excess).tree_
    return (
        np.maximum(tree.feature, 0).astype(np.int64),
        np.asarray(tree.threshold, dtype=float),
        tree.children_left.astype(np.int64),
        tree.children_right.astype(np.int64),
    )
