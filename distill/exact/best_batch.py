"""The rate: the best VOC a rollout that any batch within the rollouts left buys; floor 2.

RATE = max over whole 1 <= k <= remaining of VOC(k) / k. Pricing every k is dear and VOC(k) / k may have
several peaks, so the search bounds what it has not priced. More rollouts never lose value, hence for
every k strictly between a and b

    VOC(k) / k <= VOC(b) / (a + 1),

and intervals whose bound does not beat the best rate found are never opened. Where the VOC is known to
be convex in the spread s(k) = sqrt(k / (k + r)) of the posterior mean, the chord between s(a) and s(b)
is a second, much tighter bound: the number of batches priced then grows like log(remaining).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np

from distill.tree import Floats, Ints

__all__ = ["VocAt", "best_batch"]

VocAt = Callable[[Ints, Ints], tuple[Floats, Floats]]

_EXACT_TIES = 256  # up to this batch, an interval that could only tie a larger batch is still opened
_GOLDEN = 0.3819660112501051  # (3 - sqrt 5) / 2


def best_batch(
    voc_at: VocAt,
    n_leaves: int,
    remaining: int,
    *,
    single_peak: bool = False,
    noise_ratio: Floats | None = None,
    rel_tol: float = 1e-7,
    max_evaluations: int = 4096,
) -> tuple[Floats, Ints, Floats]:
    """Rate, its batch and a bound on the rate's error, for every leaf; each of shape (n_leaves,).

    voc_at : (leaf, k) -> (voc, err), arrays of equal length; voc >= 0 and non-decreasing in k up to err,
        err an absolute bound. Many (leaf, k) pairs are asked for at once.
    remaining : rollouts left, 0 to 2^53; 0 gives rate 0, batch 0.
    single_peak : VOC(k)/k is known to rise, then fall: golden section, about log(remaining) batches.
        Left False, nothing is assumed about the shape.
    noise_ratio : r = noise variance of one rollout over the leaf's variance, shape (n_leaves,), where VOC
        is known to be convex in sqrt(k / (k + r)), as E[convex(m + s Z)] is; None assumes nothing.
    rel_tol : batches whose rate exceeds the best found by less than this share are not looked for.
    max_evaluations : batches priced a leaf before giving up on the certificate.

    Ties go to the smallest k (among k <= 256 always; beyond, among the batches that were priced).
    The error covers err(k)/k of the batch returned and everything left unexcluded: batches that were
    priced with a bound of their own, pruned intervals, and intervals never opened for lack of evaluations.

    >>> voc = lambda leaf, k: (np.where(k < 10, 0.0, 1.0), np.zeros(len(k)))
    >>> [a.tolist() for a in best_batch(voc, 1, 100)]
    [[0.1], [10], [0.0]]
    """
    if remaining == 0 or n_leaves == 0:
        return np.zeros(n_leaves), np.zeros(n_leaves, dtype=np.int64), np.zeros(n_leaves)
    found = _Found(voc_at, n_leaves)
    every = np.arange(n_leaves)
    first = np.ones(n_leaves, dtype=np.int64)
    last = np.full(n_leaves, remaining, dtype=np.int64)
    v_first, e_first = found.price(every, first)
    if remaining > 1:
        v_last, e_last = found.price(every, last)
        if single_peak:
            _golden(found, every, first, last)
        else:
            open_ = _Intervals(every, first, last, v_first, v_last, np.maximum(e_first, e_last))
            _branch_and_bound(found, open_, noise_ratio, rel_tol, max_evaluations)
    return found.rate, found.batch, found.ceiling - found.rate


@dataclass
class _Found:
    """The best batch priced so far of every leaf, and the ceiling that its true rate cannot exceed."""

    voc_at: VocAt
    n_leaves: int
    rate: Floats = field(init=False)
    batch: Ints = field(init=False)
    ceiling: Floats = field(init=False)
    priced: Ints = field(init=False)

    def __post_init__(self) -> None:
        self.rate = np.full(self.n_leaves, -1.0)
        self.batch = np.zeros(self.n_leaves, dtype=np.int64)
        self.ceiling = np.zeros(self.n_leaves)
        self.priced = np.zeros(self.n_leaves, dtype=np.int64)

    def price(self, leaf: Ints, k: Ints) -> tuple[Floats, Floats]:
        voc, err = self.voc_at(leaf, k)
        rate = voc / k
        np.add.at(self.priced, leaf, 1)
        np.maximum.at(self.ceiling, leaf, rate + err / k)
        order = np.lexsort((k, -rate, leaf))
        head = order[np.unique(leaf[order], return_index=True)[1]]
        who = leaf[head]
        better = (rate[head] > self.rate[who]) | (
            (rate[head] == self.rate[who]) & (k[head] < self.batch[who])
        )
        head, who = head[better], who[better]
        self.rate[who], self.batch[who] = rate[head], k[head]
        return voc, err


@dataclass
class _Intervals:
    """Open intervals (a, b) with both ends priced; one entry an interval."""

    leaf: Ints
    a: Ints
    b: Ints
    voc_a: Floats
    voc_b: Floats
    err: Floats  # the larger of both ends

    def __getitem__(self, keep: np.ndarray) -> _Intervals:
        return _Intervals(*(column[keep] for column in vars(self).values()))


def _branch_and_bound(
    found: _Found, open_: _Intervals, noise_ratio: Floats | None, rel_tol: float, max_evaluations: int
) -> None:
    while True:
        open_ = open_[open_.b - open_.a > 1]
        if not len(open_.leaf):
            return
        bound = np.maximum(open_.voc_a, open_.voc_b) / (open_.a + 1)
        if noise_ratio is not None:
            bound = np.minimum(bound, _chord_bound(open_, noise_ratio[open_.leaf]))
        best = found.rate[open_.leaf]
        # An interval of smaller batches matters even when it can only equal the best.
        could_tie = (open_.b <= found.batch[open_.leaf]) & (open_.b <= _EXACT_TIES) & (best > 0)
        wanted = np.where(could_tie, bound >= best, bound > best * (1 + rel_tol))
        wanted &= found.priced[open_.leaf] < max_evaluations
        shut = ~wanted
        np.maximum.at(found.ceiling, open_.leaf[shut], (bound + open_.err / (open_.a + 1))[shut])
        open_ = open_[wanted]
        if not len(open_.leaf):
            return
        middle = np.sqrt(open_.a.astype(float)) * np.sqrt(open_.b.astype(float))
        k = np.clip(middle.astype(np.int64), open_.a + 1, open_.b - 1)
        voc, err = found.price(open_.leaf, k)
        err = np.maximum(err, open_.err)
        halves = (
            _Intervals(open_.leaf, open_.a, k, open_.voc_a, voc, err),
            _Intervals(open_.leaf, k, open_.b, voc, open_.voc_b, err),
        )
        open_ = _Intervals(
            *(np.concatenate(pair) for pair in zip(*(vars(h).values() for h in halves), strict=True))
        )


def _chord_bound(open_: _Intervals, r: Floats) -> Floats:
    """max over a <= k <= b of chord(s(k)) / k, the chord through VOC at s(a) and s(b).

    chord(s) = c + d s. With s' k = s (1 - s^2) / 2 the ratio rises while s (1 + s^2) / 2 < -c / d, then
    falls: one peak, at the real root of s^3 + s = -2 c / d.
    """
    s_a, s_b = np.sqrt(open_.a / (open_.a + r)), np.sqrt(open_.b / (open_.b + r))
    width = s_b - s_a
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        d = np.maximum(open_.voc_b - open_.voc_a, 0.0) / width
        q = np.maximum(s_a - open_.voc_a / d, 0.0)
        s = 2 / np.sqrt(3.0) * np.sinh(np.arcsinh(3 * np.sqrt(3.0) * q) / 3)
        s = np.clip(s, s_a, s_b)
        k = np.clip(r * s * s / (1 - s * s), open_.a, open_.b)
        bound = (open_.voc_a + d * (s - s_a)) / k
    # Where the spreads coincide to rounding (r tiny or huge), only the other bound can tell.
    usable = (width > 1e-6 * s_b) & np.isfinite(bound)
    return np.where(usable, bound * (1 + 1e-9), np.inf)


def _golden(found: _Found, leaf: Ints, a: Ints, b: Ints) -> None:
    """Golden section on the logarithm of k, every leaf at once; a and b are priced already."""
    middle = np.sqrt(a.astype(float)) * np.sqrt(b.astype(float))
    m = np.clip(middle.astype(np.int64), a + 1, b - 1)
    busy = b - a > 1
    leaf, a, m, b = leaf[busy], a[busy], m[busy], b[busy]
    if not len(leaf):
        return
    g_m = found.price(leaf, m)[0] / m
    while True:
        busy = (m - a > 1) | (b - m > 1)
        leaf, a, m, b, g_m = leaf[busy], a[busy], m[busy], b[busy], g_m[busy]
        if not len(leaf):
            return
        right = (b - m > 1) & ((np.log(b / m) >= np.log(m / a)) | (m - a <= 1))
        far = np.where(right, b, a)
        probe = (m * (far / m) ** _GOLDEN).astype(np.int64)
        x = np.where(right, np.clip(probe, m + 1, np.maximum(b - 1, m + 1)), np.clip(probe, a + 1, m - 1))
        g_x = found.price(leaf, x)[0] / x
        # A rate of 0 is a batch too small to matter: the peak lies to its right.
        climbs = np.where(right, (g_x > g_m) | (g_m <= 0), (g_x >= g_m) & (g_m > 0))
        a, b = (
            np.where(right, np.where(climbs, m, a), np.where(climbs, a, x)),
            np.where(right, np.where(climbs, b, x), np.where(climbs, m, b)),
        )
        m, g_m = np.where(climbs, x, m), np.where(climbs, g_x, g_m)
