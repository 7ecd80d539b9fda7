"""The backup of a tree with correlated leaves: what one leaf shows moves every leaf; floor 2, light.

When leaf i is observed, the posterior means move along b = S e_i / sqrt(S_ii). So each node carries, beside
mean and variance of its V_h, the weight with which each leaf counts in it, and for every candidate how fast
and with what bend its mean moves along b. A decision node takes its children two by two, the largest mean
first, by Clark (1961), whose formula for the covariance of a maximum with a third normal keeps the weights
going (eq. 6 there).

Along b each root action's value is convex, with slopes A_- and A_+ at far moves. It is taken as

    V(t) = V + A_- t + (A_+ - A_-) theta (f(p + t / theta) - f(p))

with p and theta from slope and bend at present (f of `distill.normal_fits`): exact for two independent
leaves. Where another action overtakes the best one is then searched on either side of t = 0.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import reduce
from typing import Final

import numpy as np

from distill import schema
from distill.errors import InputError, RefusedError
from distill.normal_fits import inverse_cdf, norm_cdf, norm_pdf, unit_gain
from distill.record_rows import Crossings, LeafMoments
from distill.tree import BeliefTree, Floats, Ints

__all__ = ["CorrelatedBackup"]

_LEAST: Final = 1e-300
_FAR_MOVE: Final = 40.0  # standard deviations: no crossing beyond is worth anything
_FIRST_STEP, _STEP_GROWTH = 0.05, 1.6  # of the search for the crossing
_REFINEMENTS: Final = 10  # Newton steps, halvings where one would leave the bracket
_STRAIGHT: Final = 1e-9  # of the larger slope: slopes that differ by less make a straight line
_WIDEST: Final = 1e6  # standard deviations: a bend wider than this is a straight line
_LEAST_SHARE: Final = 1e-12


@dataclass(frozen=True)
class _Value:
    """V_h of a node: mean and variance; weight of each leaf in it and its covariance with each, (n,).

    Along each candidate's b, (n,): slope and bend of the mean at present, and slopes at far moves.
    """

    mean: float
    var: float
    weight: Floats
    cov: Floats
    slope: Floats
    bend: Floats
    low: Floats
    high: Floats

    def through(self, gain: float, reward: float) -> _Value:
        """The same seen through an edge."""
        return _Value(
            gain * self.mean + reward,
            gain * gain * self.var,
            *(gain * x for x in (self.weight, self.cov, self.slope, self.bend, self.low, self.high)),
        )


def _sum(a: _Value, b: _Value) -> _Value:
    return _Value(
        a.mean + b.mean,
        a.var + b.var + 2 * float(a.cov @ b.weight),
        a.weight + b.weight,
        a.cov + b.cov,
        a.slope + b.slope,
        a.bend + b.bend,
        a.low + b.low,
        a.high + b.high,
    )


def _maximum(a: _Value, b: _Value) -> _Value:
    """Clark's maximum of two, a the one of larger mean."""
    gap = a.mean - b.mean
    theta = math.sqrt(max(a.var + b.var - 2 * float(a.cov @ b.weight), 0.0))
    low, high = np.minimum(a.low, b.low), np.maximum(a.high, b.high)
    if theta <= 1e-8 * gap or theta == 0.0:
        return _Value(a.mean, a.var, a.weight, a.cov, a.slope, a.bend, low, high)
    at = np.array(gap / theta)
    q, density = float(norm_cdf(-at)), float(norm_pdf(at))
    lift = theta * float(unit_gain(-at))
    square = a.var * (1 - q) + (b.var + gap * gap) * q - gap * theta * density
    return _Value(
        a.mean + lift,
        max(square - lift * lift, 0.0),
        a.weight + q * (b.weight - a.weight),
        a.cov + q * (b.cov - a.cov),
        a.slope + q * (b.slope - a.slope),
        a.bend + q * (b.bend - a.bend) + np.square(a.slope - b.slope) * (density / theta),
        low,
        high,
    )


class CorrelatedBackup:
    """Moments, and what a record row is made of, of a Gaussian tree with `cov`.

    tree : any node kinds. horizon : as for `distill.backup.Backup`. value : V_h of each root action, in child
    order, u; value_var its variance. Every candidate moves every leaf, so `update` is a whole pass,
    O(nodes x leaves).

    >>> from distill.record import from_record
    >>> t = from_record({"format": "belief-tree/1", "parent": [-1, 0, 0],
    ...     "kind": ["decision", "leaf", "leaf"], "mean": [None, 0, 0.5], "noise_var": [None, 1, 1],
    ...     "cov": [[1, 0.5], [0.5, 1]]})
    >>> CorrelatedBackup(t).crossings().crossing.round(9).tolist()
    [1.0, -1.0]
    """

    def __init__(self, tree: BeliefTree, horizon: float = math.inf) -> None:
        if tree.cov is None:
            raise RefusedError("this backup holds Gaussian leaves with 'cov'")
        assert tree.mean is not None
        self.horizon = horizon
        self._tree = tree
        self._children: list[list[int]] = [[] for _ in range(tree.n_nodes)]
        for c, p in enumerate(tree.parent.tolist()):
            if p >= 0:
                self._children[p].append(c)
        self.update(tree.mean, tree.cov)

    def update(self, mean: Floats, cov: Floats) -> None:
        """Take in the posterior after rollouts: means (n,) and covariance (n, n), in node order."""
        tree, n = self._tree, self._tree.n_leaves
        if np.shape(mean) != (n,) or np.shape(cov) != (n, n):
            raise InputError("mean, cov", f"must have shapes ({n},) and ({n}, {n})", np.shape(cov))
        assert tree.noise_var is not None
        belief = {"mean": mean, "var": np.diag(cov), "noise_var": tree.noise_var}
        self._leaf = LeafMoments.of(belief, math.inf)
        later = self._later(np.asarray(cov, dtype=float))
        along = cov / np.maximum(self._leaf.sd, _LEAST)  # column i: b of candidate i
        values: list[_Value | None] = [None] * tree.n_nodes
        leaf, none = n, np.zeros(n)
        self.mean, self.var = np.full(tree.n_nodes, np.nan), np.full(tree.n_nodes, np.nan)
        for c in reversed(range(1, tree.n_nodes)):
            if tree.kind[c] == schema.LEAF:
                leaf -= 1
                own = none.copy()
                own[leaf] = 1.0
                b = along[leaf]
                found = _Value(float(mean[leaf]), float(later[leaf, leaf]), own, later[leaf], b, none, b, b)
            else:
                parts = [x for k in self._children[c] if (x := values[k]) is not None]
                if tree.kind[c] == schema.CHANCE:
                    found = reduce(_sum, parts)
                else:
                    found = reduce(_maximum, sorted(parts, key=lambda x: -x.mean))
            self.mean[c], self.var[c] = found.mean, found.var
            p = float(tree.prob[c])
            values[c] = found.through(float(tree.discount[c]) * p, float(tree.reward[c]) * p)
        self._actions = [x for a in tree.action_nodes if (x := values[a]) is not None]

    def _later(self, cov: Floats) -> Floats:
        """Covariance R_h of the posterior means h rollouts a leaf later."""
        if math.isinf(self.horizon):
            return cov
        if self.horizon == 0:
            return np.zeros_like(cov)
        assert self._tree.noise_var is not None
        noise = np.diag(self._tree.noise_var / self.horizon)
        return np.asarray(cov @ np.linalg.solve(cov + noise, cov))

    @property
    def value(self) -> Floats:
        """V_h of each root action, in child order, u."""
        return np.array([x.mean for x in self._actions])

    @property
    def value_var(self) -> Floats:
        """Variance of each root action's value at horizon h, in child order, u^2."""
        return np.array([x.var for x in self._actions])

    def influence(self) -> Floats:
        """d E[Q_a] / d m_i of every root action and leaf; shape (n_actions, n_leaves)."""
        return np.array([x.weight for x in self._actions])

    def rows(self) -> dict[str, Floats]:
        """The record table at present, name -> column of shape (n_leaves,); see `schema.RECORD_UNITS`."""
        return self.crossings().columns(self._tree.cost)

    def crossings(self) -> Crossings:
        """The crossing of larger first-order value on either side of 0, and the other one."""
        sides = _first_crossings(_Curves.of(self._actions))
        worth = [slope * unit_gain(-np.abs(move)) for move, slope, _, _ in sides]
        falls = worth[1] > worth[0]
        move, slope, bend, now = (np.where(falls, b, a) for a, b in zip(*sides, strict=True))
        other_move, other_slope = (
            np.where(falls, a, b) for a, b in zip(sides[0][:2], sides[1][:2], strict=True)
        )
        other_move = np.where(other_slope > 0, other_move, 0.0)
        spread = _largest_change(self._actions, int(np.argmax(self.value)))
        return Crossings(move, slope, bend, now, other_move, other_slope, spread, self._leaf.noise_ratio)


def _largest_change(actions: list[_Value], top: int) -> Floats:
    """The most that a move of 1 can change the difference of the best action and another; (n_leaves,)."""
    best = actions[top]
    others = [x for i, x in enumerate(actions) if i != top]
    if not others:
        return np.zeros_like(best.low)
    rise = np.max([x.high for x in others], axis=0) - best.low
    fall = best.high - np.min([x.low for x in others], axis=0)
    return np.asarray(np.maximum(rise, 0.0) + np.maximum(fall, 0.0))


@dataclass(frozen=True)
class _Curves:
    """V(t) of every action (rows) along every candidate's b (columns), and which action is the best now."""

    top: int
    value: Floats
    slope: Floats
    low: Floats
    rise: Floats
    theta: Floats
    at: Floats
    gain_now: Floats

    @classmethod
    def of(cls, actions: list[_Value]) -> _Curves:
        """From the root actions' values."""
        slope, bend, low, high = (
            np.array([getattr(x, name) for x in actions]) for name in ("slope", "bend", "low", "high")
        )
        rise = high - low
        straight = rise <= _STRAIGHT * np.maximum(np.abs(high), np.abs(low))
        safe = np.where(straight, 1.0, rise)
        below = np.clip((slope - low) / safe, _LEAST_SHARE, 1.0)
        above = np.clip((high - slope) / safe, _LEAST_SHARE, 1.0)
        at = inverse_cdf(np.minimum(np.minimum(below, above), 0.5)) * np.where(below < above, 1.0, -1.0)
        theta = safe * norm_pdf(at) / np.maximum(bend, _LEAST)
        straight |= theta > _WIDEST
        value = np.array([x.mean for x in actions])
        return cls(
            int(np.argmax(value)),
            value,
            slope,
            np.where(straight, slope, low),
            np.where(straight, 0.0, rise),
            np.where(straight, 1.0, np.maximum(theta, 1 / _WIDEST)),
            at,
            unit_gain(at),
        )

    def twice(self) -> _Curves:
        """The same with every candidate twice, to look at both sides of 0 at once."""
        pairs = (np.tile(x, 2) for x in (self.slope, self.low, self.rise, self.theta, self.at, self.gain_now))
        return _Curves(self.top, self.value, *pairs)

    def lead(self, t: Floats) -> tuple[Floats, Ints]:
        """By how much the best of the other actions leads at moves t, and which one it is."""
        lift = unit_gain(self.at + t / self.theta) - self.gain_now
        v = self.value[:, None] + self.low * t + self.rise * self.theta * lift
        best = v[self.top].copy()
        v[self.top] = -np.inf
        which = np.argmax(v, axis=0)
        return v[which, np.arange(len(t))] - best, which

    def gains(self, t: Floats, which: Ints) -> tuple[Floats, Floats, Floats]:
        """d lead / dt at moves t where action `which` leads, the second derivative, and d lead / dt at 0."""
        i = np.arange(len(t))

        def ahead(x: Floats) -> Floats:
            return np.asarray(x[which, i] - x[self.top])

        z = self.at + t / self.theta
        bend = self.rise * norm_pdf(z) / self.theta
        return ahead(self.low + self.rise * norm_cdf(z)), ahead(bend), ahead(self.slope)


def _first_crossings(curves: _Curves) -> list[tuple[Floats, Floats, Floats, Floats]]:
    """Move, slope, bend, and present slope over slope where another action first overtakes, on both sides."""
    n = curves.slope.shape[1]
    side = np.repeat([1.0, -1.0], n)
    if len(curves.value) == 1:
        none = np.zeros(n)
        return [(sign * np.full(n, _FAR_MOVE), none, none, none) for sign in (1, -1)]
    curves = curves.twice()
    near, far = np.zeros(2 * n), np.full(2 * n, _FAR_MOVE)
    found, step = np.zeros(2 * n, dtype=bool), _FIRST_STEP
    while step < _FAR_MOVE and not found.all():
        ahead = curves.lead(side * step)[0] > 0
        far[ahead & ~found] = step
        found |= ahead
        near[~found] = step
        step *= _STEP_GROWTH
    at = far.copy()
    for _ in range(_REFINEMENTS):
        lead, which = curves.lead(side * at)
        near, far = np.where(lead > 0, near, at), np.where(lead > 0, at, far)
        slope = side * curves.gains(side * at, which)[0]
        with np.errstate(over="ignore"):
            newton = at - lead / np.where(slope > 0, slope, 1.0)
        at = np.where((slope > 0) & (newton >= near) & (newton <= far), newton, (near + far) / 2)
    move = side * np.where(found, at, _FAR_MOVE)
    slope, bend, now = curves.gains(move, curves.lead(move)[1])
    slope, now = side * slope, side * now
    found &= slope > 0
    safe = np.where(found, slope, 1.0)
    columns = (
        move,
        np.where(found, slope, 0.0),
        side * np.where(found, bend / safe, 0.0),
        np.where(found, now / safe, 0.0),
    )
    a, b = zip(*(np.split(x, 2) for x in columns), strict=True)
    return [a, b]
