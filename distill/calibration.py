"""An upper bound on every score, by split conformal prediction within bins; floor 4.

    voc_high = factor(x) voc,    factor(x) = exp of a high quantile of log(exact / voc) in the bin of x

The bins are the leaves of one small regression tree over the features, grown on the rows of training
(Breiman et al. 1984) to tell apart where scores are close from where they are not; the quantile of each
is taken on trees that had no part in training (Mondrian conformal prediction: Vovk, Gammerman and Shafer
2005, section 4.5). Candidates of one tree depend on each other, so the stated share is what new trees
show on average, not a proof for each; `validate` measures it on trees that had no part in calibration.

A candidate whose score and exact value are both 0 lies within any bound. Counted, such candidates let the
others miss more; left out, all would miss less than stated. Rows are weighed in between: the share of all
candidates comes to lie half as far above the stated one as the share of the others lies below it.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from sklearn.tree import DecisionTreeRegressor

from distill.errors import InputError
from distill.tree import Floats, Ints

__all__ = ["COVERAGE", "UpperBound", "calibrated", "live"]

COVERAGE: Final = 0.95
_MOST_BINS: Final = 32
_ROWS_A_BIN: Final = 300  # of calibration: a share of 5 % is then known to about 1 %
_FEW_ROWS: Final = 100
_FLOOR: Final = 0.01  # of a log ratio: scores closer than 1 % are alike
_LOG_LIMIT: Final = 20.0


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

    x : (n, d) features as the scorer sees them. exact, voc : (n,), label and score, u a rollout.
    training : the same three of rows of training, from which only the bins come. weight : (n,), of each
    row, where trees were sampled with unequal chances. coverage : aimed at.
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
    alive = live(exact, voc)
    of_row = np.ones(len(x)) if weight is None else np.asarray(weight, dtype=float)
    counted = float(of_row[alive].sum()) or 1.0
    weight = of_row * (2 / of_row.sum() + alive / counted)
    pooled = _quantile(ratio, weight, coverage)
    bins = empty.bins(x)
    factor = np.ones(len(left))
    for leaf in np.flatnonzero(left < 0):
        rows = bins == leaf
        own = _quantile(ratio[rows], weight[rows], coverage) if np.any(rows) else -np.inf
        if np.count_nonzero(rows) < _FEW_ROWS:
            own = max(own, pooled)
        # Never below the score itself: a bound that lies under what it bounds would be misread.
        factor[leaf] = np.exp(np.clip(own, 0.0, _LOG_LIMIT))
    return UpperBound(feature, split, left, right, factor, coverage, trees, len(x))


def _log_ratio(exact: Floats, voc: Floats) -> Floats:
    """log(exact / voc): -infinity where exact is 0, infinity where only voc is."""
    both = (exact > 0) & (voc > 0)
    logs = np.log(np.where(both, exact, 1)) - np.log(np.where(both, voc, 1))
    return np.where(both, logs, np.where(exact > 0, np.inf, -np.inf))


def _quantile(ratio: Floats, weight: Floats, coverage: float) -> float:
    """The least ratio that a share `coverage` of the weight does not exceed, one more row taken as a miss."""
    order = np.argsort(ratio, kind="stable")
    below = np.cumsum(weight[order])
    wanted = coverage * (below[-1] + below[-1] / len(ratio))
    at = int(np.searchsorted(below, wanted * (1 - 1e-12)))
    return float(ratio[order[min(at, len(order) - 1)]])


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
