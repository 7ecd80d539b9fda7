"""VOC with dependent leaves and horizon h > 0, by scrambled Sobol points; floor 2.

After h more rollouts a leaf the posterior mean is M ~ N(m, R), R = S (S + N/h)^-1 S, and S - R is what
stays unknown. The candidate (i, k) changes that by one more observation of leaf i:

    M' = M + c xi,      c = (S - R) e_i / tau',  tau'^2 = (S - R)_ii + n_i / k,  xi standard normal,

and its outcome Z = ((M - m)_i + tau' xi) / tau, tau^2 = S_ii + n_i / k, has Cov(M', Z) = b = S e_i / tau.
So M' - b Z + b z is distributed as M' given Z = z (Matheron's rule): one set of samples (M, xi) serves
every candidate, every outcome z, and the values at present. For each sample Q_a is convex piecewise linear
in z, and E_Z[max_a V_a(Z)] is taken exactly for the sampled V_a, in gain form. The level E[V_a(Z)] =
V_a + D_a, D_a = E[Q_a(M + c xi) - Q_a(M)], comes from many more samples shared by all candidates.

Points: 24 independently scrambled Sobol sequences (Owen 1997), principal directions of R first. The error
is 4 standard errors over the scrambles and what lies within them; a bound in probability, not in rounding.
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
from distill.exact.sampled_outcome import mean_over_outcomes, outer_expectation
from distill.exact.sampled_rises import by_breakpoints, by_envelope, mean_values
from distill.exact.static_dense import directions
from distill.numerics import gain
from distill.query import Priced, Query, scale_of
from distill.tree import BeliefTree, Floats, Ints

__all__ = ["METHOD", "price", "sampled"]

METHOD = "dynamic dense, scrambled Sobol sampling"

_SCRAMBLES = 24
_SEED = 20240229  # any; fixed, so that a tree always gets the same answer
_LEVELS = ((8, 12), (10, 13), (11, 14))  # log2 of points a scramble: along the outcome, at present
_MOST_NUMBERS = 2**24  # normal numbers at present held at once
_RATE_TOL = 1e-4


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
    tolerance x scale, up to 2,048 a scramble.
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
    sample: Floats  # (n_leaves, points) of M - m, for the shape along the outcome
    by_action: Ints  # leaves in the order of the columns of `contribution`
    contribution: Floats  # (points, n_leaves) the same, times the gains
    xi: Floats  # (points,)
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
        factor = _factor(R, order.gain)
        dims = factor.shape[1] + 1
        while log_now > log_shape and _SCRAMBLES * dims * 2**log_now > _MOST_NUMBERS:
            log_now -= 1
        points = _points(dims, log_now)
        n = tree.n_leaves
        everything = factor @ points[1:].reshape(dims - 1, points[0].size)
        now = mean_values(
            order.kind,
            order.n_children,
            order.leaf,
            order.gap,
            everything * order.gain[:, None],
            _SCRAMBLES,
            len(order.value),
        )
        few = 2**log_shape
        sample = np.ascontiguousarray(everything.reshape(n, _SCRAMBLES, -1)[:, :, :few]).reshape(n, -1)
        by_action = np.arange(n) if tree.has_chance else np.argsort(order.action, kind="stable")
        contribution = np.ascontiguousarray((sample * order.gain[:, None])[by_action].T)
        return cls(
            order=order,
            cov=cov,
            R=R,
            left=left,
            noise_var=tree.noise_var,
            sample=sample,
            by_action=by_action,
            contribution=contribution,
            xi=np.ascontiguousarray(points[0, :, :few].reshape(-1)),
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
        z = (self.sample[i] + tau_left * self.xi) / tau
        more = np.zeros_like(self.now)
        if np.any(c != 0):
            still = np.zeros_like(z)
            rise = self._along(weight * c, still, np.zeros_like(c), still)
            more = np.maximum(mean_over_outcomes(*rise) - rise[0][:, :, rise[0].shape[2] // 2], 0.0)
        voc, error = outer_expectation(self.now, more, *self._along(weight * b, z, weight * c, self.xi))
        return float(voc), float(error) + self._unseen(more, weight * c)

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

    def _along(
        self, slopes: Floats, shift: Floats, lift: Floats, noise: Floats
    ) -> tuple[Floats, Floats, Floats]:
        """Mean values of the actions as leaves move by slopes (z - shift) + lift noise."""
        order, n_actions = self.order, len(self.order.value)
        if self.offset is None:
            return by_breakpoints(
                order.kind, order.n_children, order.leaf, order.gap, self.contribution, slopes, shift, lift,
                noise, _SCRAMBLES, n_actions,
            )  # fmt: skip
        by = self.by_action
        first = np.searchsorted(order.action[by], np.arange(n_actions + 1))
        return by_envelope(
            self.contribution, self.offset[by], slopes[by], shift, lift[by], noise, first, _SCRAMBLES
        )


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


def _factor(R: Floats, gain: Floats) -> Floats:
    """F with F F^T = R; the directions that matter most at the root first, none without variance."""
    weight = np.where(gain > 0, gain, 1.0)  # a leaf of no weight can still tell about others
    values, vectors = np.linalg.eigh(R * weight[:, None] * weight)
    # An eigenvector's sign is rounding's choice; fixed, so that other units of value meet the same points.
    vectors = vectors * np.sign(vectors[np.abs(vectors).argmax(axis=0), np.arange(len(values))])
    keep = np.flatnonzero(values > 1e-15 * max(float(values[-1]), 0.0))[::-1]
    return np.asarray(vectors[:, keep] * np.sqrt(values[keep]) / weight[:, None])


@lru_cache(maxsize=3)
def _points(dims: int, log_points: int) -> Floats:
    """Standard normal points, (dims, scrambles, points); a shorter set is the start of a longer one."""
    if dims > qmc.Sobol.MAXDIM:
        raise RefusedError(f"dense sampling covers up to {qmc.Sobol.MAXDIM - 1} leaves, not {dims - 1}")
    out = np.empty((dims, _SCRAMBLES, 2**log_points))
    for s in range(_SCRAMBLES):
        sequence = qmc.Sobol(dims, scramble=True, rng=np.random.default_rng([_SEED, s]))
        u = sequence.random_base2(log_points)
        out[:, s] = ndtri(u + 2.0**-31).T  # in the middle of the cells of 30 binary digits: never 0
    out.flags.writeable = False
    return out
