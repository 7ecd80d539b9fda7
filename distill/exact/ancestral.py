"""VOC of dependent leaves whose covariance comes from shared ancestors, h infinite, decision nodes; floor 2.

Given the effect theta of its parent, a node is independent of all else (see `ancestral_effects`), so the
chance that no leaf below v exceeds a threshold q is a recursion over functions of theta:

    g_v(q, theta) = product over children c:  leaf    Phi((q - mu - loading theta) / rest)
                                              inner   E g_c(q, rho_c theta + sqrt(1 - rho_c^2) U)

V_a and E[Q_a | theta_a] are integrals over q. A second pass, downwards, gives each leaf i the chance
o_i(q, x) that no other leaf of its action exceeds q when X_i = x, and so

    H_a(x) = E[Q_a | X_i = x] = x + integral from x upwards of (1 - o_i(q, x)) dq.

Rollouts of i tell about everything else only through X_i: V_a(z) = E[H_a(X_i) | outcome z], whatever the
batch. VOC = E_Z[max_a V_a(Z) - V_r(Z)], r the best action at present.

Integrals over theta and outcomes: trapezoid rule on analytic functions that fade at both ends, step 0.8
of the narrowest scale, where its error is exp(-2 (pi / 0.8)^2) = 4e-14; over thresholds: 16-point
Gauss-Legendre panels. The stated error is the difference from a run with steps 1.3 times as large.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from scipy.special import ndtr

from distill import schema
from distill.errors import RefusedError
from distill.exact.ancestral_effects import Effects, find_effects
from distill.exact.best_batch import best_batch
from distill.exact.gaps import post_order
from distill.exact.outcome_panels import N, expected_best, panel_nodes, partial_weights, piecewise_values
from distill.query import Priced, Query, scale_of
from distill.tree import BeliefTree, Floats, Ints

__all__ = ["METHOD", "price"]

METHOD = "dynamic ancestral, threshold recursion"

_REACH = 8.5
_STEP = 0.8
_COARSER = 1.3
_MOST_STEPS = 700
_MOST_PANELS = 150
_MOST_NUMBERS = 2**25  # in the tables of one action, one way
_FLOOR = 2e-13  # of scale: rounding; runs of other steps differ by up to 5e-14


def price(tree: BeliefTree, query: Query) -> Priced:
    """Dynamic VOC or rate of every leaf, where `cov` comes from effects shared with ancestors.

    Raises RefusedError where it does not, for chance nodes, finite horizons, other beliefs, and where
    scales differ so much that the tables would not fit (a leaf nearly sure given its ancestors).
    """
    if tree.mean is None or tree.cov is None or tree.has_chance or not math.isinf(query.horizon):
        raise RefusedError("ancestral effects are priced for Gaussian 'cov' trees of decisions, h infinite")
    fine, coarse = _Recursion.of(tree, 1.0), _Recursion.of(tree, _COARSER)
    floor = _FLOOR * scale_of(tree)

    def voc_at(leaf: Ints, k: Ints) -> tuple[Floats, Floats]:
        pairs = [(fine.voc(i, x), coarse.voc(i, x)) for i, x in zip(leaf.tolist(), k.tolist(), strict=True)]
        both = np.array(pairs).reshape(-1, 2)
        return both[:, 0], np.abs(both[:, 0] - both[:, 1]) + floor

    n = tree.n_leaves
    if query.rate:
        assert query.remaining is not None
        voc, batch, error = best_batch(voc_at, n, query.remaining, rel_tol=1e-6)
    else:
        assert query.batch is not None
        batch = np.full(n, query.batch, dtype=np.int64)
        voc, error = voc_at(np.arange(n), batch)
    return Priced(voc, batch, fine.now + fine.level, error, METHOD)


@dataclass(frozen=True)
class _Curve:
    """Values of every action as functions of x, the leaf's own value in standard units; on panels."""

    edges: Floats
    values: Floats  # (n_actions, panels, N)
    scale: float  # the narrowest feature, in x


@dataclass(eq=False)
class _Recursion:
    """Tables of one tree at one fineness."""

    tree: BeliefTree
    cov: Floats  # of the leaves' contributions
    noise: Floats  # noise variance of a rollout, in the same unit
    mean: Floats  # of the contributions, from the best root value at the means
    effects: Effects
    level: float
    coarseness: float

    @classmethod
    def of(cls, tree: BeliefTree, coarseness: float) -> _Recursion:
        order = post_order(tree)
        assert tree.cov is not None
        assert tree.noise_var is not None
        mean = np.empty(tree.n_leaves)
        is_leaf = order.kind == schema.LEAF
        mean[order.leaf[is_leaf]] = -order.gap[is_leaf]
        cov = tree.cov * np.outer(order.gain, order.gain)
        effects = find_effects(tree, cov)
        if effects is None:
            raise RefusedError("'cov' does not come from effects shared with ancestors")
        noise = tree.noise_var * order.gain**2
        out = cls(tree, cov, noise, mean, effects, float(order.value.max()), coarseness)
        _ = out.now  # refuses here what it cannot resolve
        return out

    @cached_property
    def sd(self) -> Floats:
        return np.sqrt(np.maximum(np.diag(self.cov), 0))

    @cached_property
    def theta(self) -> Floats:
        """Grid of every effect, standard units."""
        inner = np.abs(self.effects.rho[self.tree.kind != schema.LEAF])
        free = np.sqrt(1 - inner[(inner > 0) & (inner < 1)] ** 2)
        loaded = self.sd > 0
        own = self.effects.rest[loaded] / self.sd[loaded]
        narrow = float(np.min(np.concatenate((free, own, [0.3]))))
        steps = 2 * _REACH / (_STEP * narrow * self.coarseness) if narrow > 0 else math.inf
        if steps > _MOST_STEPS:
            raise RefusedError("an effect is nearly sure given its parent: too fine for the recursion")
        return np.linspace(-_REACH, _REACH, int(steps) + 2)

    def _kernel(self, r: float, at: Floats) -> Floats:
        """Row x: weights on the theta grid of its law given a normal x that it correlates with by r."""
        step = self.theta[1] - self.theta[0]
        s = math.sqrt(1 - r * r)
        z = (self.theta - r * at[:, None]) / s
        return np.asarray(np.exp(-0.5 * z * z) * (step / s / math.sqrt(2 * math.pi)))

    def _carried(self, table: Floats, rho: float) -> Floats:
        """E of table[:, theta'] given theta, Corr = rho: the same both ways between parent and child."""
        if abs(rho) == 1:
            return table if rho > 0 else table[:, ::-1]
        return table @ self._kernel(rho, self.theta).T

    @cached_property
    def kids(self) -> list[list[int]]:
        out: list[list[int]] = [[] for _ in range(self.tree.n_nodes)]
        for c in range(1, self.tree.n_nodes):
            out[self.tree.parent[c]].append(c)
        return out

    @cached_property
    def position(self) -> dict[int, int]:
        return {v: i for i, v in enumerate(self.tree.leaf_nodes.tolist())}

    @cached_property
    def actions(self) -> list[_Action]:
        return [_Action(self, int(v)) for v in self.tree.action_nodes]

    @cached_property
    def now(self) -> Floats:
        """V_a from the best root value at the means."""
        return np.array([a.value for a in self.actions])

    @cached_property
    def action_of(self) -> list[int]:
        out = [0] * self.tree.n_leaves
        for a, action in enumerate(self.actions):
            for i in action.leaves:
                out[i] = a
        return out

    @cached_property
    def curves(self) -> dict[int, _Curve]:
        return {}

    def voc(self, i: int, k: int) -> float:
        """VOC of k rollouts at leaf i."""
        if self.sd[i] == 0 or len(self.actions) == 1:
            return 0.0
        if i not in self.curves:
            self.curves[i] = self._curve(i)
        curve = self.curves[i]
        told = 1 / math.sqrt(1 + self.noise[i] / k / self.cov[i, i])  # Corr(X_i, outcome)
        left = math.sqrt(self.noise[i] / k / (self.cov[i, i] + self.noise[i] / k))
        width = 2 * self.coarseness * min(0.85, math.hypot(curve.scale, left) / max(told, 1e-9))
        edges = np.linspace(-_REACH, _REACH, max(int(2 * _REACH / width), 1) + 2)
        z = panel_nodes(edges)
        step = _STEP * self.coarseness * min(0.3, curve.scale / left if left > 0 else 1.0)
        u = np.arange(-_REACH, _REACH + step, step)
        weight = np.exp(-0.5 * u * u)
        at = np.clip(told * z.ravel()[:, None] + left * u, -_REACH, _REACH)
        smooth = piecewise_values(curve.edges, curve.values, at.ravel()).reshape(-1, *at.shape)
        values = (smooth @ (weight / weight.sum())).reshape(-1, *z.shape)
        return expected_best(edges, values, int(np.argmax(self.now)))

    def _curve(self, i: int) -> _Curve:
        own = self.actions[self.action_of[i]]
        rest = self.effects.rest[own.leaves]
        narrow = float(np.min(rest[rest > 0])) / self.sd[i]
        scale = min(narrow, 0.85)
        count = int(2 * _REACH / (2 * scale * self.coarseness)) + 1
        if count > _MOST_PANELS:
            raise RefusedError("a leaf is nearly sure given its ancestors: too fine for the recursion")
        kink = (own.low - self.mean[i]) / self.sd[i]
        edges = np.linspace(-_REACH, _REACH, count + 1)
        if -_REACH < kink < _REACH:
            edges = np.unique(np.append(edges, kink))
        x = panel_nodes(edges).ravel()
        values = np.array([self._given(a, i, x) for a in range(len(self.actions))])
        return _Curve(edges, values.reshape(len(self.actions), -1, N), scale)

    def _given(self, a: int, i: int, x: Floats) -> Floats:
        """E[Q_a | X_i = mean + sd x]."""
        action = self.actions[a]
        if len(action.leaves) == 1:
            j = action.leaves[0]
            return np.asarray(self.mean[j] + self.cov[j, i] / self.sd[i] * x)
        if i in action.leaves:
            return action.given_own(i, x)
        mine = self.actions[self.action_of[i]]
        r = self.effects.rho[action.node] * mine.loading_on_root(i) / self.sd[i]
        if r == 0:
            return np.full(len(x), action.value)
        return np.asarray(self._kernel(r, x) @ action.mean_given_effect)


@dataclass(eq=False)
class _Action:
    """Threshold tables of one root action, shape (thresholds, theta grid) each."""

    of: _Recursion
    node: int

    @cached_property
    def leaves(self) -> list[int]:
        out, stack = [], [self.node]
        while stack:
            v = stack.pop()
            if v in self.of.position:
                out.append(self.of.position[v])
            stack.extend(self.of.kids[v])
        return sorted(out)

    @cached_property
    def low(self) -> float:
        """No leaf's maximum lies below: some leaf is above it for sure, or 8.5 deviations of it."""
        return float(np.max(self.of.mean[self.leaves] - _REACH * self.of.sd[self.leaves]))

    @cached_property
    def high(self) -> float:
        return float(np.max(self.of.mean[self.leaves] + _REACH * self.of.sd[self.leaves]))

    @cached_property
    def q_edges(self) -> Floats:
        """Panels of thresholds, each twice the narrowest spread of the leaves that may lie there."""
        mean, sd = self.of.mean[self.leaves], self.of.sd[self.leaves]
        rest = self.of.effects.rest[self.leaves]
        edges = [self.low]
        while edges[-1] < self.high:
            near = (np.abs(edges[-1] - mean) <= (_REACH + 2) * sd) & (rest > 0)
            width = 2 * self.of.coarseness * float(np.min(rest[near])) if np.any(near) else np.inf
            edges.append(min(edges[-1] + width, self.high))
            if len(edges) > _MOST_PANELS:
                raise RefusedError("leaves of one action differ too much in scale for the recursion")
        if len(edges) * N * len(self.of.theta) * len(self.leaves) > _MOST_NUMBERS:
            raise RefusedError("too many leaves under one action for the recursion's tables")
        return np.array(edges)

    @cached_property
    def q(self) -> Floats:
        return panel_nodes(self.q_edges).ravel()

    @cached_property
    def from_children(self) -> dict[int, Floats]:
        """For every node below: chance that none of its leaves exceeds q, given its parent's effect."""
        of, out = self.of, {}
        theta = of.theta
        below, stack = [], [self.node]
        while stack:
            v = stack.pop()
            below.append(v)
            stack.extend(of.kids[v])
        for v in reversed(below):
            if v == self.node:
                continue
            if v in of.position:
                i = of.position[v]
                if of.sd[i] == 0:  # at most `low`
                    out[v] = np.ones((len(self.q), len(theta)))
                    continue
                at = (self.q[:, None] - of.mean[i] - of.effects.loading[i] * theta) / of.effects.rest[i]
                out[v] = ndtr(at)
            else:
                out[v] = of._carried(_product([out[c] for c in of.kids[v]]), of.effects.rho[v])
        return out

    @cached_property
    def mean_given_effect(self) -> Floats:
        """E[Q_a | theta_a] on the grid."""
        inside = _product([self.from_children[c] for c in self.of.kids[self.node]])
        return np.asarray(self.high - partial_weights(self.q_edges, np.array([self.low]))[0] @ inside)

    @cached_property
    def value(self) -> float:
        if len(self.leaves) == 1:
            return float(self.of.mean[self.leaves[0]])
        if self.low >= self.high:
            return self.low
        return float(self.of._kernel(0.0, np.zeros(1))[0] @ self.mean_given_effect)

    @cached_property
    def beside(self) -> dict[int, Floats]:
        """For every leaf node: chance that no other leaf exceeds q, given its parent's effect."""
        of, out = self.of, {}
        stack = [(self.node, np.ones((len(self.q), len(of.theta))))]
        while stack:
            v, outside = stack.pop()
            kids = of.kids[v]
            tables = [self.from_children[c] for c in kids]
            after = [np.ones_like(outside)]
            for table in tables[:0:-1]:
                after.append(after[-1] * table)
            before = outside
            for c, table, rest in zip(kids, tables, reversed(after), strict=True):
                if c in of.position:
                    out[c] = before * rest
                else:
                    stack.append((c, of._carried(before * rest, of.effects.rho[c])))
                before = before * table
        return out

    def given_own(self, i: int, x: Floats) -> Floats:
        """H_a at X_i = mean + sd x, leaf i being one of this action's."""
        of = self.of
        v = int(of.tree.leaf_nodes[i])
        others = self.beside[v] @ of._kernel(of.effects.loading[i] / of.sd[i], x).T
        at = np.maximum(of.mean[i] + of.sd[i] * x, self.low)
        above = partial_weights(self.q_edges, at)
        return np.asarray(at + np.sum(above * (1 - others.T), axis=1))

    def loading_on_root(self, i: int) -> float:
        """Covariance of leaf i with the root's effect."""
        v = int(self.of.tree.leaf_nodes[i])
        out = float(self.of.effects.loading[i])
        while self.of.tree.parent[v] != 0:
            v = int(self.of.tree.parent[v])
            out *= float(self.of.effects.rho[v])
        return out


def _product(tables: list[Floats]) -> Floats:
    out = tables[0]
    for table in tables[1:]:
        out = out * table
    return out
