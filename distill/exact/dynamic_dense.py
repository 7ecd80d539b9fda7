"""VOC with dependent leaves and horizon h > 0, by scrambled Sobol points; floor 2.

After h more rollouts a leaf the posterior mean is M ~ N(m, R), R = S (S + N/h)^-1 S, and S - R is what
stays unknown. The candidate (i, k) changes that by one more observation of leaf i:

    M' = M + c xi,      c = (S - R) e_i / tau',  tau'^2 = (S - R)_ii + n_i / k,  xi standard normal,

and its outcome Z has Cov(M', Z) = b = S e_i / tau, tau^2 = S_ii + n_i / k. V_a(z) = E[Q_a | Z = z] asks for
the leaves of action a alone: M'_a given z is normal with mean m + b z and covariance R_aa + c c^T - b b^T.
So each action has samples of its own, M = m + L u with L L^T = R_aa, in as many dimensions as it has leaves,
and one set of (u, xi) serves all actions, candidates, outcomes z and the values at present: with v of least
length such that (L, c) v = b, and t = v (u, xi) / (1 + sqrt(1 - v v)), M + c xi - b t + b z is distributed as
M'_a given z. For each sample Q_a is convex piecewise linear in z; its mean is smooth as a rule and taken at
a few z with a polynomial between (`sampled_nodes`), or else by all kinks (`sampled_rises`). From these comes
E_Z[max_a V_a(Z)] in gain form. The level E[V_a(Z)] = V_a + D_a, D_a = E[Q_a(M + c xi) - Q_a(M)], comes from
many more samples shared by all candidates.

Points: 24 independently scrambled Sobol sequences (Owen 1997), principal directions of R_aa first. The error
is 4 standard errors over the scrambles, what lies within them, and what interpolation between outcomes may
add; a bound in probability, not in rounding.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy.special import ndtri
from scipy.stats import qmc

from distill import schema
from distill.errors import RefusedError
from distill.exact import ancestral
from distill.exact.best_batch import best_batch
from distill.exact.gaps import PostOrder, post_order
from distill.exact.sampled_nodes import NODES, at_nodes, between_nodes
from distill.exact.sampled_outcome import mean_over_outcomes, outer_expectation
from distill.exact.sampled_rises import by_breakpoints, by_envelope
from distill.exact.static_dense import directions
from distill.numerics import gain
from distill.query import Priced, Query, scale_of
from distill.tree import BeliefTree, Floats, Ints

__all__ = ["METHOD", "price", "sampled"]

METHOD = "dynamic dense, scrambled Sobol sampling"

_SCRAMBLES = 24
_SEED = 20240229  # any; fixed, so that a tree always gets the same answer
_LEVELS = ((9, 12), (11, 13), (12, 14))  # log2 of points a scramble: along the outcome, at present
_MOST_NUMBERS = 2**24  # sampled numbers at present held at once, unless _LEAST needs more
_LEAST = 8
_RATE_TOL = 1e-4
_Along = tuple[Floats, Floats, Floats, Floats]
_BETWEEN = 0.25  # of the error: what interpolation along the outcome may add before all kinks are followed


def price(tree: BeliefTree, query: Query) -> Priced:
    """VOC or rate at h > 0 of every leaf of a Gaussian tree with `cov`, any node kinds.

    Exact by `ancestral` where that covers the tree, else `sampled`. Raises RefusedError for horizon 0 and
    for win/loss leaves.
    """
    try:
        return ancestral.price(tree, query)
    except RefusedError:
        return sampled(tree, query)


def sampled(tree: BeliefTree, query: Query) -> Priced:
    """The same by sampling alone, with `cov` or without.

    `error` is 4 standard errors over independent scrambles, plus the effect of a wrong choice within them,
    plus an allowance for what no sample met. With query.tolerance, points are added until error <=
    tolerance x scale, up to 4,096 a scramble.
    """
    if tree.mean is None or tree.noise_var is None:
        raise RefusedError("dense sampling is for Gaussian leaves; this tree has win/loss leaves")
    if query.horizon == 0:
        raise RefusedError("dense sampling is for horizons above 0")
    n, scale = tree.n_leaves, scale_of(tree)
    voc, error, batch = np.zeros(n), np.full(n, np.inf), np.zeros(n, dtype=np.int64)
    enough = 0.0 if query.tolerance is None else query.tolerance * scale
    value = np.empty(0)
    for level in range(len(_LEVELS) if query.tolerance is not None else 1):
        todo = np.flatnonzero(error > enough)
        if not len(todo):
            break
        sampler = _Sampler.of(tree, query.horizon, *_LEVELS[level])
        value = sampler.value if level == 0 else value

        def voc_at(
            leaf: Ints, k: Ints, sampler: _Sampler = sampler, todo: Ints = todo
        ) -> tuple[Floats, Floats]:
            pairs = [sampler.voc(int(todo[i]), float(x)) for i, x in zip(leaf, k, strict=True)]
            found = np.array(pairs).reshape(-1, 2)
            return found[:, 0], found[:, 1]

        if query.rate:
            assert query.remaining is not None
            voc[todo], batch[todo], error[todo] = best_batch(
                voc_at, len(todo), query.remaining, rel_tol=_RATE_TOL
            )
        else:
            assert query.batch is not None
            batch[todo] = query.batch
            voc[todo], error[todo] = voc_at(np.arange(len(todo)), batch[todo])
    return Priced(voc, batch, value, error, METHOD)


@dataclass(frozen=True)
class _Sampler:
    """Samples of the posterior means of one tree, and what every candidate needs from them."""

    order: PostOrder
    cov: Floats
    R: Floats
    left: Floats  # S - R
    noise_var: Floats
    inverse: list[tuple[Ints, Floats]]  # of each action: its leaves, and L^+
    normal: Floats  # (directions, points) standard normal, for the shape along the outcome
    xi: Floats  # (points,)
    contribution: Floats  # (n_leaves, points) of M - m, times the gains
    now: Floats  # (scrambles, actions)
    value: Floats  # (actions,) V_h
    offset: Floats | None  # (n_leaves,) at the means, on decision-only trees
    scale: float
    now_points: int

    @classmethod
    def of(cls, tree: BeliefTree, h: float, log_shape: int, log_now: int) -> _Sampler:
        assert tree.noise_var is not None
        order = post_order(tree, merge_root=False)
        cov = tree.cov
        if cov is None:
            assert tree.var is not None
            cov = np.diag(tree.var)
        cov = directions(cov)
        R, left = _resolved(cov, tree.noise_var, h)
        n_actions = len(order.value)
        leaves = [np.flatnonzero(order.action == a) for a in range(n_actions)]
        factors = [_factor(R[np.ix_(own, own)], order.gain[own]) for own in leaves]
        dims = max(f.shape[1] for f, _ in factors) + 1
        while log_now > _LEAST and _SCRAMBLES * max(dims, tree.n_leaves) * 2**log_now > _MOST_NUMBERS:
            log_now -= 1
        points = _points(dims, log_now)
        normal = points[:-1].reshape(dims - 1, points[0].size)
        everything = np.empty((tree.n_leaves, normal.shape[1]))
        for own, (factor, _) in zip(leaves, factors, strict=True):
            everything[own] = (factor * order.gain[own][:, None]) @ normal[: factor.shape[1]]
        still = np.zeros(normal.shape[1])
        now = at_nodes(
            order.kind, order.n_children, order.leaf, order.gap, everything, np.zeros(tree.n_leaves),
            np.zeros((n_actions, len(still))), np.zeros(tree.n_leaves), still, np.zeros(1),
            _SCRAMBLES, n_actions,
        )[:, :, 0] - (order.value.max() - order.value)  # fmt: skip
        few = 2 ** min(log_shape, log_now)
        sample = everything.reshape(tree.n_leaves, _SCRAMBLES, -1)[:, :, :few]
        return cls(
            order=order,
            cov=cov,
            R=R,
            left=left,
            noise_var=tree.noise_var,
            inverse=[(own, inverse) for own, (_, inverse) in zip(leaves, factors, strict=True)],
            normal=np.ascontiguousarray(points[:-1, :, :few]).reshape(dims - 1, _SCRAMBLES * few),
            xi=np.ascontiguousarray(points[-1, :, :few].reshape(-1)),
            contribution=np.ascontiguousarray(sample.reshape(tree.n_leaves, -1)),
            now=now,
            value=now.mean(axis=0) + order.value.max(),
            offset=None if tree.has_chance else _offsets(order),
            scale=scale_of(tree),
            now_points=points[0].size,
        )

    def voc(self, i: int, k: float) -> tuple[float, float]:
        """VOC of k rollouts at leaf i, and its error."""
        if self.cov[i, i] <= 0:
            return 0.0, 0.0
        tau = math.sqrt(self.cov[i, i] + self.noise_var[i] / k)
        tau_left = math.sqrt(self.left[i, i] + self.noise_var[i] / k)
        weight = self.order.gain
        b, c = self.cov[i] / tau, self.left[i] / tau_left
        shift = self._share(b, c)
        for along in (self._smooth, self._kinked):
            more, missed = np.zeros_like(self.now), np.zeros((2, self.now.shape[1]))
            if np.any(c != 0):
                still = np.zeros_like(shift)
                value, bend, spread, missed[1] = along(weight * c, still, np.zeros_like(c), self.xi)
                middle = value[:, :, value.shape[2] // 2]
                more = np.maximum(mean_over_outcomes(value, bend, spread) - middle, 0.0)
            value, bend, spread, missed[0] = along(weight * b, shift, weight * c, self.xi)
            voc, error, between = outer_expectation(self.now, more, value, bend, spread, missed)
            error += self._unseen(more, weight * c)
            if between <= _BETWEEN * error:
                break
        return float(voc), float(error + between)

    def _share(self, b: Floats, c: Floats) -> Floats:
        """t, (actions, points): how far M + c xi goes against b to be what is left given Z.

        With e = L^+ b, d = L^+ c: v = (s, d s), s = e - d (d e) / (1 + d d), has (L, c) v = b; and u' - v t,
        t = v u' / (1 + sqrt(1 - v v)), has covariance I - v v^T.
        """
        shift = np.empty((len(self.inverse), len(self.xi)))
        for a, (own, inverse) in enumerate(self.inverse):
            e, d = inverse @ b[own], inverse @ c[own]
            s = e - d * (d @ e) / (1 + d @ d)
            last = float(d @ s)
            length = min(float(s @ s) + last * last, 1.0)
            part = 1 / (1 + math.sqrt(1 - length))
            shift[a] = part * (s @ self.normal[: len(s)])
            if last != 0:
                shift[a] += part * last * self.xi
        return shift

    def _unseen(self, more: Floats, c: Floats) -> float:
        """Allowance for what no sample may have met, so that no standard error shows it.

        N points miss an event of probability e^-x / N with odds e^(-e^-x); of those likely to be missed,
        gains add up to about 1 / N of the largest spread. For `more`, which rests on fewer points, the
        allowance is made where scrambles disagree about it, and only up to what the action can gain at all.
        """
        allowance = self.scale / self.now_points
        uneven = np.std(more, axis=0) >= 0.5 * np.mean(more, axis=0)
        for a in np.flatnonzero(uneven & np.any(c != 0)):
            own = np.flatnonzero(self.order.action == a)
            spread = float(np.ptp(c[own]))
            if self.offset is not None and spread > 0:
                best = own[np.argmax(self.offset[own])]
                R = self.R[np.ix_(own, own)] * np.outer(self.order.gain[own], self.order.gain[own])
                at = int(np.flatnonzero(own == best)[0])
                sd = np.sqrt(np.maximum(np.diag(R) - 2 * R[at] + R[at, at], 0) + (c[own] - c[best]) ** 2)
                others = np.flatnonzero((own != best) & (sd > 0))
                behind = self.offset[best] - self.offset[own[others]]
                most = sum(
                    s * gain(-d / s) for s, d in zip(sd[others].tolist(), behind.tolist(), strict=True)
                )
                allowance += min(most, spread / len(self.xi))
            else:
                allowance += spread / len(self.xi)
        return allowance

    def _smooth(self, slopes: Floats, shift: Floats, lift: Floats, noise: Floats) -> _Along:
        """Mean values of the actions as leaves move by slopes (z - shift) + lift noise; what they miss."""
        order = self.order
        values = at_nodes(
            order.kind, order.n_children, order.leaf, order.gap, self.contribution, slopes, shift, lift,
            noise, NODES, _SCRAMBLES, len(order.value),
        )  # fmt: skip
        return between_nodes(values)

    def _kinked(self, slopes: Floats, shift: Floats, lift: Floats, noise: Floats) -> _Along:
        """The same by following every sample's kinks: nothing missed, several times slower."""
        order, n_actions = self.order, len(self.order.value)
        missed = np.zeros(n_actions)
        if self.offset is None:
            return *by_breakpoints(
                order.kind, order.n_children, order.leaf, order.gap, order.action, self.contribution, slopes,
                shift, lift, noise, _SCRAMBLES, n_actions,
            ), missed  # fmt: skip
        by_action = np.argsort(order.action, kind="stable")
        first = np.searchsorted(order.action[by_action], np.arange(n_actions + 1))
        return *by_envelope(
            self.contribution, self.offset, slopes, shift, lift, noise, by_action, first, _SCRAMBLES
        ), missed


def _offsets(order: PostOrder) -> Floats:
    """How far each leaf of a decision-only tree lies from the best root value at the means."""
    offset = np.zeros(len(order.gain))
    waiting: list[int] = []
    for v in range(len(order.kind) - 1):
        if order.kind[v] == schema.LEAF:
            waiting.append(int(order.leaf[v]))
            offset[waiting[-1]] -= order.gap[v]
        else:  # a root action over leaves: everything below it was merged into it
            offset[waiting[-order.n_children[v] :]] -= order.gap[v]
    return offset


def _resolved(S: Floats, noise_var: Floats, h: float) -> tuple[Floats, Floats]:
    """R = S (S + N/h)^-1 S, and S - R, from the eigenvectors of N^-1/2 S N^-1/2: semidefinite for any h."""
    if math.isinf(h):
        return S, np.zeros_like(S)
    sd = np.sqrt(noise_var)
    values, vectors = np.linalg.eigh(S / sd[:, None] / sd)
    values = np.maximum(values, 0)
    W = sd[:, None] * vectors
    known = values * (h * values / (1 + h * values))
    return (W * known) @ W.T, (W * (values / (1 + h * values))) @ W.T


def _factor(R: Floats, gain: Floats) -> tuple[Floats, Floats]:
    """L with L L^T = R, and L^+; the directions that matter most at the root first, none without variance."""
    weight = np.where(gain > 0, gain, 1.0)  # a leaf of no weight can still tell about others
    values, vectors = np.linalg.eigh(R * weight[:, None] * weight)
    # An eigenvector's sign is rounding's choice; fixed, so that other units of value meet the same points.
    vectors = vectors * np.sign(vectors[np.abs(vectors).argmax(axis=0), np.arange(len(values))])
    keep = np.flatnonzero(values > 1e-15 * max(float(values[-1]), 0.0))[::-1]
    vectors, sd = vectors[:, keep], np.sqrt(values[keep])
    return vectors * sd / weight[:, None], (vectors / sd).T * weight


@lru_cache(maxsize=3)
def _points(dims: int, log_points: int) -> Floats:
    """Standard normal points, (dims, scrambles, points); a shorter set is the start of a longer one."""
    if dims > qmc.Sobol.MAXDIM:
        most = qmc.Sobol.MAXDIM - 1
        raise RefusedError(f"dense sampling covers up to {most} leaves an action, not {dims - 1}")
    out = np.empty((dims, _SCRAMBLES, 2**log_points))
    for s in range(_SCRAMBLES):
        sequence = qmc.Sobol(dims, scramble=True, rng=np.random.default_rng([_SEED, s]))
        u = sequence.random_base2(log_points)
        out[:, s] = ndtri(u + 2.0**-31).T  # in the middle of the cells of 30 binary digits: never 0
    out.flags.writeable = False
    return out
