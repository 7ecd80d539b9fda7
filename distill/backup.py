"""What an agent keeps in its own tree so that every candidate has a record row; floor 2, light.

*Up.* Each node carries mean and variance of its V_h, h rollouts a leaf later. A chance node adds its
children's. A decision node takes the maximum of its children, each taken as normal: two by Clark (1961),
more by a table of the product of their distribution functions on the midpoints of equal cells (equal cells
converge fastest for functions that level off on both sides: Goodwin 1949; Trefethen and Weideman 2014).
Decision nodes right below decision nodes are merged into them, since a maximum of maxima is a maximum.
The maximum of a node's children but one comes from the same table, and no variance is below 0.

*Down.* If a child's mean moves by t, and its siblings' maximum is N(mu, r^2), its parent's is

    mu + theta f(p + t / theta),   p = (m - mu) / theta,   theta^2 = s^2 + r^2

(f of `distill.normal_fits`). The inverse of that carries down how far each node must move for its root
action to be worth exactly as much as the best other one, and on the way the slope of the action's value
there, its bend, and the slope at present (the influence d E[Q_a] / d m). Each is O(1) a node.

After rollouts at one leaf, `update` computes anew what stands on its path to the root: as many numbers as
the nodes on it have children. `rows` is O(1) a leaf on top. `distill.backup_compiled` is the same, faster,
where Numba is at hand.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Final, NamedTuple

import numpy as np

from distill import schema
from distill.backup_correlated import CorrelatedBackup
from distill.errors import InputError, RefusedError
from distill.normal_fits import inverse_gain, norm_cdf, norm_pdf, unit_gain
from distill.record_rows import Crossings, LeafMoments
from distill.tree import BeliefTree, Floats

__all__ = [
    "ABOVE",
    "BELOW",
    "CELLS",
    "FAR",
    "FAR_MOVE",
    "LEAST",
    "LEAST_THETA",
    "Backup",
    "Moments",
    "backup_of",
    "max_moments",
]

CELLS: Final = 24
BELOW, ABOVE = 7.0, 4.5  # the table spans the largest m - 7 s to the largest m + 4.5 s
LEAST: Final = 1e-300
FAR_MOVE: Final = 1e9  # standard deviations
LEAST_THETA: Final = 1e-150  # sds are taken as no less, so that moves over them stay in range
FAR: Final = 1e150  # mean of the siblings of an only child, below every utility that a tree may hold


class Moments(NamedTuple):
    """Mean and variance of the maximum of some independent normals, and of that of all but each.

    others, others_var : shape (n,); -1e150 and 0 for one alone.
    """

    mean: float
    var: float
    others: Floats
    others_var: Floats


def max_moments(m: Floats, v: Floats) -> Moments:
    r"""Moments of max_j X_j, X_j ~ N(m_j, v_j) independent, and of max over all but each.

    One and two are closed forms (Clark 1961, eqs. 2 and 3), variances of 0 throughout too; more come from
    a table of 24 cells, within 1e-3 of the largest standard deviation.

    >>> found = max_moments(np.array([0.0, 0.0, -9.0]), np.array([1.0, 1.0, 0.01]))
    >>> round(found.mean, 4), round(found.var, 4)
    (0.5642, 0.6817)
    """
    n = len(m)
    if n == 1:
        return Moments(float(m[0]), float(v[0]), np.array([-FAR]), np.zeros(1))
    if n == 2:
        mean, var = _of_two(m, v)
        return Moments(mean, var, m[::-1].copy(), v[::-1].copy())
    if not v.any():
        top = int(np.argmax(m))
        others = np.full(n, m[top])
        others[top] = np.max(np.delete(m, top))
        return Moments(float(m[top]), 0.0, others, np.zeros(n))
    s = np.sqrt(np.maximum(v, LEAST))
    low, high = np.max(m - BELOW * s), np.max(m + ABOVE * s)
    width = high - low
    t = (np.arange(CELLS) + 0.5) / CELLS
    z = ((low - m)[:, None] + width * t) / s[:, None]
    phi = norm_cdf(z)
    np.maximum(phi, LEAST, out=phi)
    joint = np.exp(np.sum(np.log(phi), axis=0))
    upper = np.vstack([1 - joint, 1 - joint / phi])
    first = width * upper.mean(axis=1)
    second = 2 * width * width * ((upper @ t) / CELLS)
    # Midpoints overstate the second integral by 2 width^2 / (24 cells^2), from its slope at the lower end.
    second -= width * width / (12 * CELLS**2)
    var = np.maximum(second - first * first, 0.0)
    return Moments(float(low + first[0]), float(var[0]), low + first[1:], var[1:])


def _of_two(m: Floats, v: Floats) -> tuple[float, float]:
    theta = math.sqrt(v[0] + v[1])
    gap = abs(float(m[0] - m[1]))
    top = 0 if m[0] >= m[1] else 1
    if theta <= gap * 1e-8 or theta == 0.0:
        return float(m[top]), float(v[top])
    p = gap / theta
    lift = theta * float(unit_gain(np.array(-p)))
    weight = float(norm_cdf(np.array(-p)))  # that the lower one is the maximum
    # Var = E[(X - m_top)^2] - lift^2
    square = (
        v[top] * (1 - weight) + (v[1 - top] + gap * gap) * weight - gap * theta * float(norm_pdf(np.array(p)))
    )
    return float(m[top]) + lift, max(float(square) - lift * lift, 0.0)


class Backup:
    """Moments, and what a record row is made of, of a tree with independent leaves.

    tree : a belief tree without `cov`, Gaussian or win/loss; win/loss leaves count with their mean and
    variance. horizon : h, rollouts that each leaf still receives before the later decisions; 0 static,
    inf dynamic.

    mean, var : per node, of its V_h, before the edge into it; NaN at the root and at merged nodes.
    value : per root action in child order, V_h = E[Q_a], u; value_var its variance, u^2.

    >>> from distill.record import from_record
    >>> t = from_record({"format": "belief-tree/1", "parent": [-1, 0, 1, 1, 0],
    ...     "kind": ["decision", "decision", "leaf", "leaf", "leaf"],
    ...     "mean": [None, None, 0, 0, 0.2], "var": [None, None, 1, 1, 0],
    ...     "noise_var": [None, None, 4, 4, 4]})
    >>> b = Backup(t)
    >>> b.value.round(4)
    array([0.5642, 0.2   ])
    >>> b.update(1, mean=0.0, var=0.5)
    >>> b.value.round(4)
    array([0.4886, 0.2   ])
    """

    def __init__(self, tree: BeliefTree, horizon: float = math.inf) -> None:
        if tree.cov is not None:
            raise RefusedError("this backup holds independent leaves; the tree has 'cov'")
        self.horizon = horizon
        self._tree = tree
        n = tree.n_nodes
        self.leaf_nodes = tree.leaf_nodes
        self._belief = {
            name: np.array(getattr(tree, name))
            for name in (*schema.GAUSSIAN_COLUMNS, *schema.WIN_LOSS_COLUMNS)
            if getattr(tree, name) is not None
        }
        self._lay_out(tree)
        self.mean, self.var = np.full(n, np.nan), np.full(n, np.nan)
        self._others, self._others_var = np.full(n, -FAR), np.zeros(n)
        leaf = LeafMoments.of(self._belief, horizon)
        self.mean[self.leaf_nodes], self.var[self.leaf_nodes] = leaf.mean, leaf.var
        self._own_sd, self._noise_ratio = leaf.sd, leaf.noise_ratio
        self._refresh_all()

    def _lay_out(self, tree: BeliefTree) -> None:
        """Per node the one it hands its moments to, with gain and reward on the way there."""
        n = tree.n_nodes
        parent, kind = tree.parent.tolist(), tree.kind
        carrier, base_gain, base_reward = list(range(n)), np.ones(n), np.zeros(n)
        self._above = np.zeros(n, dtype=np.int64)
        self._gain, self._reward = np.ones(n), np.zeros(n)
        kids: dict[int, list[int]] = {}
        depth = np.zeros(n, dtype=np.int64)
        for c in range(1, n):
            p = parent[c]
            gain = base_gain[p] * tree.discount[c]
            reward = base_reward[p] + base_gain[p] * tree.reward[c]
            if kind[c] == schema.DECISION and p != 0 and kind[p] == schema.DECISION:
                carrier[c], base_gain[c], base_reward[c] = carrier[p], gain, reward
                continue
            share = tree.prob[c] if kind[p] == schema.CHANCE else 1.0
            above = carrier[p]
            self._above[c], self._gain[c], self._reward[c] = above, share * gain, share * reward
            depth[c] = depth[above] + 1
            kids.setdefault(above, []).append(c)
        self._kids = [np.array(kids[c]) if c in kids else None for c in range(n)]
        self._is_max = kind == schema.DECISION
        carriers = np.array([c for c in range(1, n) if carrier[c] == c])
        self._levels = [carriers[depth[carriers] == d] for d in range(1, int(depth.max()) + 1)]
        self._actions = tree.action_nodes

    @property
    def value(self) -> Floats:
        """V_h of each root action, in child order, u."""
        a = self._actions
        return np.asarray(self._reward[a] + self._gain[a] * self.mean[a])

    @property
    def value_var(self) -> Floats:
        """Variance of each root action's value at horizon h, in child order, u^2."""
        a = self._actions
        return np.asarray(np.square(self._gain[a]) * self.var[a])

    def update(self, leaf: int, **belief: float) -> None:
        """Take in a leaf's new belief: `mean` and `var`, or `alpha` and `beta`; 0-based leaf in node order.

        Raises InputError for a leaf or a column that the tree has not.
        """
        self._keep(leaf, belief)
        found = LeafMoments.of({name: x[leaf : leaf + 1] for name, x in self._belief.items()}, self.horizon)
        node = self.leaf_nodes[leaf]
        self.mean[node], self.var[node] = found.mean[0], found.var[0]
        self._own_sd[leaf], self._noise_ratio[leaf] = found.sd[0], found.noise_ratio[0]
        c = self._above[node]
        while c != 0:
            self._refresh(c)
            c = self._above[c]

    def _keep(self, leaf: int, belief: Mapping[str, float]) -> None:
        """Check a leaf's new belief, all of it before any of it is written down."""
        if not 0 <= leaf < len(self.leaf_nodes):
            raise InputError("leaf", f"must be from 0 to {len(self.leaf_nodes) - 1}", leaf)
        for name, x in belief.items():
            if name not in self._belief:
                raise InputError(name, f"must be among {', '.join(self._belief)}")
            if not (math.isfinite(x) and (x >= 0 or name in ("mean", "low", "high"))):
                raise InputError(name, "must be finite, and >= 0 unless it is a value", x)
            if name in ("alpha", "beta", "noise_var") and x == 0:
                raise InputError(name, "must be above 0", x)
        new = {name: belief.get(name, x[leaf]) for name, x in self._belief.items() if name in ("low", "high")}
        if new and not new["high"] > new["low"]:
            raise InputError("high", "must be above low", new["high"])
        for name, x in belief.items():
            self._belief[name][leaf] = x

    def _refresh_all(self) -> None:
        """Moments of every node from the leaves'."""
        for c in reversed(range(1, len(self.mean))):
            if self._kids[c] is not None:
                self._refresh(c)

    def _refresh(self, c: int) -> None:
        """Moments of one node from its children's."""
        kids = self._kids[c]
        m = self._reward[kids] + self._gain[kids] * self.mean[kids]
        v = np.square(self._gain[kids]) * self.var[kids]
        if not self._is_max[c]:
            self.mean[c], self.var[c] = m.sum(), v.sum()
            return
        found = max_moments(m, v)
        self.mean[c], self.var[c] = found.mean, found.var
        self._others[kids], self._others_var[kids] = found.others, found.others_var

    def influence(self) -> Floats:
        """d E[Q_a] / d m of each leaf, 1, a its root action; shape (n_leaves,)."""
        return self._down()[2][self.leaf_nodes]

    def crossings(self) -> Crossings:
        """Where each leaf changes which action is best, by itself: one crossing a leaf."""
        move, slope, now, bend = (x[self.leaf_nodes] for x in self._down())
        most = np.ones(len(self.mean))
        for c in self._levels:
            most[c] = most[self._above[c]] * self._gain[c]
        sd = self._own_sd
        if len(self._actions) == 1:
            slope = np.zeros(len(sd))
        safe = np.maximum(slope, LEAST)
        none = np.zeros(len(sd))
        with np.errstate(over="ignore"):  # what overflows is cut
            at, bent, ratio = move / np.maximum(sd, LEAST), bend / safe * sd, now / safe
        return Crossings(
            crossing=np.clip(at, -FAR_MOVE, FAR_MOVE),
            slope=slope * sd,
            bend=np.clip(bent, 0.0, FAR_MOVE),
            now=np.where(slope > 0, np.minimum(ratio, FAR_MOVE), 0.0),
            other_crossing=none,
            other_slope=none,
            spread=most[self.leaf_nodes] * sd,
            noise_ratio=self._noise_ratio.copy(),
        )

    def rows(self) -> dict[str, Floats]:
        """The record table at present, name -> column of shape (n_leaves,); see `schema.RECORD_UNITS`."""
        return self.crossings().columns(self._tree.cost)

    def _down(self) -> tuple[Floats, Floats, Floats, Floats]:
        """Per node: move to the crossing, slope of Q_a there and at present, second derivative there."""
        n = len(self.mean)
        move, slope, now, bend = np.zeros(n), np.ones(n), np.ones(n), np.zeros(n)
        value, a = self.value, self._actions
        best = int(np.argmax(value))
        rival = np.full(len(a), value[best])
        rival[best] = np.max(np.delete(value, best), initial=-FAR)
        for level, c in enumerate(self._levels):
            gain, p = self._gain[c], self._above[c]
            if level == 0:
                c, gain = a, self._gain[a]
                move[c], slope[c], now[c] = (rival - value) / gain, gain, gain
                continue
            m, up_slope, up_now, up_bend = move[p], slope[p], now[p], bend[p]
            chosen = self._is_max[p] & (self._others[c] > -FAR)
            if chosen.any():
                k = c[chosen]
                mean = self._reward[k] + gain[chosen] * self.mean[k]
                theta = np.sqrt(np.square(gain[chosen]) * self.var[k] + self._others_var[k])
                theta = np.maximum(theta, 1e-14 * np.abs(mean) + LEAST_THETA)
                target = self.mean[p[chosen]] + m[chosen]
                x = inverse_gain((target - self._others[k]) / theta)
                at = (mean - self._others[k]) / theta
                share = norm_cdf(x)
                m, up_slope, up_now, up_bend = m.copy(), up_slope.copy(), up_now.copy(), up_bend.copy()
                m[chosen] = theta * (x - at)
                up_bend[chosen] = up_bend[chosen] * share**2 + up_slope[chosen] * norm_pdf(x) / theta
                up_slope[chosen] *= share
                up_now[chosen] *= norm_cdf(at)
            counts = np.where(
                gain > 0, gain, 1.0
            )  # an outcome of probability 0 has slope 0 whatever its move
            move[c], slope[c], now[c], bend[c] = m / counts, up_slope * gain, up_now * gain, up_bend * gain**2
        return move, slope, now, bend


def backup_of(tree: BeliefTree, horizon: float = math.inf) -> Backup | CorrelatedBackup:
    """The backup that fits a tree: with `cov` a CorrelatedBackup, else a Backup."""
    return Backup(tree, horizon) if tree.cov is None else CorrelatedBackup(tree, horizon)
