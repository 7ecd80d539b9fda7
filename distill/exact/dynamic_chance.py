"""VOC with rollouts still to come (h > 0), independent normal leaves, chance and decision nodes; floor 2.

With M_h the posterior means after h more rollouts at every leaf, independent normals, an action's value is
V_h(a) = E[Q_a(M_h)]. A candidate (leaf i, batch k) changes one action only, and through one number: the
posterior mean of leaf i. As a function of it the action's value rises with slope W_i F(x), where F is the
distribution function of the leaf's threshold (see `thresholds`), and VOC is an integral of that slope on
one side of the outcome at which the best action changes (see `crossing`).

Spread of one leaf, v its variance, n its noise variance, in units of the root (times W):

    now                 R   = v^2 / (v + n / h)
    posterior mean      s^2 = v^2 / (v + n / k)
    afterwards          v'  = v (n / k) / (v + n / k),   R' = v'^2 / (v' + n / h)

For h infinite R = v and R' = v'. Cost: one convolution or so a node, then one integral a candidate.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from distill.errors import RefusedError
from distill.exact.best_batch import best_batch
from distill.exact.crossing import threshold_voc
from distill.exact.max_sum import Constant, Max, Normal, Sum, max_sum_form, path_weights
from distill.exact.thresholds import Threshold, thresholds
from distill.numerics import gain, norm_cdf
from distill.query import Priced, Query, scale_of
from distill.tree import BeliefTree, Floats, Ints

__all__ = ["METHOD", "price"]

METHOD = "dynamic with chance nodes, threshold distributions"

_RESOLUTION = 1e-14  # of scale
_EPS = 2.0**-52


def price(tree: BeliefTree, query: Query) -> Priced:
    """Exact VOC, or rate, of every leaf, with bounds on the absolute error (u).

    tree : Gaussian, independent leaves; decision and chance nodes. query.horizon > 0, real or infinite.
    Raises RefusedError for other beliefs, `cov`, or horizon 0.

    >>> from distill.record import from_record
    >>> t = from_record({"format": "belief-tree/1", "parent": [-1, 0, 0, 1, 1, 3, 3],
    ...     "kind": ["decision", "chance", "leaf", "decision", "leaf", "leaf", "leaf"],
    ...     "discount": [None, 0.9, 1, 1, 1, 1, 1], "prob": [None, 1, 1, 0.5, 0.5, 1, 1],
    ...     "mean": [None, None, 0.3, None, 0, 0, 0], "var": [None, None, 0, None, 1, 1, 1],
    ...     "noise_var": [None, None, 1, None, 1, 1e-9, 1]})
    >>> price(t, Query()).voc.round(6)[2:3]
    array([0.077968])
    """
    if tree.mean is None or tree.var is None:
        raise RefusedError("threshold distributions need independent Gaussian leaves")
    if query.horizon == 0:
        raise RefusedError(
            "threshold distributions need a horizon above 0; the static value has a closed form"
        )
    return _Prices(tree, query).all()


@dataclass
class _Leaf:
    """What it takes to price one leaf: its action, and the threshold (None: the action is linear in it)."""

    action: int
    threshold: Threshold | None


class _Prices:
    def __init__(self, tree: BeliefTree, query: Query) -> None:
        assert tree.mean is not None
        assert tree.var is not None
        assert tree.noise_var is not None
        self.query = query
        self.n_leaves = tree.n_leaves
        self.weight = path_weights(tree)[0][tree.leaf_nodes]
        self.v, self.noise = tree.var, tree.noise_var
        self.var_now = self._to_come(self.v) * self.weight**2
        self.scale = scale_of(tree)
        self.leaves: dict[int, _Leaf] = {}
        actions = max_sum_form(tree)
        self.value, self.error = np.zeros(len(actions)), np.zeros(len(actions))
        for a, action in enumerate(actions):
            self._take(a, action)
        self.error += _EPS * np.abs(self.value).max() * 4
        # Best rival's value less the action's own, and how far off that may be.
        self.ahead = [(-math.inf, 0.0)]
        if len(actions) > 1:
            rivals = [(np.delete(self.value, a), np.delete(self.error, a)) for a in range(len(actions))]
            self.ahead = [
                (float(v.max() - self.value[a]), _error_of_largest(v, e) + float(self.error[a]))
                for a, (v, e) in enumerate(rivals)
            ]

    def _take(self, a: int, action: Constant | Normal | Max | Sum) -> None:
        self.value[a] = 0.0 if isinstance(action, Max) else action.shift
        if isinstance(action, (Normal, Sum)):
            self.leaves.update((leaf, _Leaf(a, None)) for leaf in action.leaves)
        tops = [action] if isinstance(action, Max) else action.maxima if isinstance(action, Sum) else []
        for top in tops:
            value, error, found = thresholds(top, self.var_now, _RESOLUTION * self.scale)
            self.value[a] += value
            self.error[a] += error
            self.leaves.update((leaf, _Leaf(a, threshold)) for leaf, threshold in found.items())

    def _to_come(self, v: Floats) -> Floats:
        """v^2 / (v + n / h): variance of the posterior mean after h more rollouts."""
        with np.errstate(invalid="ignore", over="ignore"):
            noise = self.noise / self.query.horizon
            return np.where(v > 0, v * (v / (v + noise)), 0.0)

    def all(self) -> Priced:
        query = self.query
        if query.rate:
            assert query.remaining is not None
            rate, batch, error = best_batch(self.voc_at, self.n_leaves, query.remaining)
            return Priced(rate, batch, self.value, error, METHOD)
        assert query.batch is not None
        batch = np.full(self.n_leaves, query.batch, dtype=np.int64)
        voc, error = self.voc_at(np.arange(self.n_leaves), batch)
        return Priced(voc, batch, self.value, error, METHOD)

    def voc_at(self, leaf: Ints, k: Ints) -> tuple[Floats, Floats]:
        """VOC and error bound of candidates (leaf, k); arrays of equal length."""
        voc, error = np.zeros(len(leaf)), np.zeros(len(leaf))
        order = np.argsort(leaf, kind="stable")
        starts = np.flatnonzero(np.diff(leaf[order])) + 1
        for rows in np.split(order, starts):
            if len(rows) and int(leaf[rows[0]]) in self.leaves:
                voc[rows], error[rows] = self._one_leaf(int(leaf[rows[0]]), k[rows].astype(float))
        return voc, error

    def _one_leaf(self, i: int, k: Floats) -> tuple[Floats, Floats]:
        leaf = self.leaves[i]
        ahead, slack = self.ahead[leaf.action]
        v, noise, w = float(self.v[i]), self.noise[i] / k, float(self.weight[i])
        s = w * np.sqrt(v * (v / (v + noise)))
        v_after = v * (noise / (v + noise))
        h_noise = float(self.noise[i]) / self.query.horizon
        with np.errstate(invalid="ignore"):
            to_come = w * w * np.where(v_after > 0, v_after * (v_after / (v_after + h_noise)), 0.0)
        voc, error = np.zeros(len(k)), np.zeros(len(k))
        if leaf.threshold is None:
            if ahead > -math.inf:
                for j in np.flatnonzero(s > 0):
                    z = abs(ahead) / s[j]
                    voc[j] = s[j] * gain(-z)
                    error[j] = slack * norm_cdf(-max(z - slack / s[j], 0.0)) + 5e-14 * voc[j]
            return voc, error
        threshold = leaf.threshold
        sd_now = math.sqrt(float(self.var_now[i]) + threshold.rest_var)
        tau = np.sqrt(to_come + threshold.rest_var)
        threshold_voc(threshold.T, threshold.mean, sd_now, s, tau, ahead, slack, voc, error)
        return voc, error


def _error_of_largest(value: Floats, error: Floats) -> float:
    """How far off the largest may be: values far below it do not count, however wide their bounds."""
    top = value.max()
    return float(max((value + error).max() - top, top - (value - error).max()))
