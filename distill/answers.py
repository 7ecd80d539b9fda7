"""What a scorer answers, and what it says where its file has no answer; floor 3, light."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from distill.fallback import closed_form_bounds, closed_form_values
from distill.leaf_buffers import LeafBuffers

__all__ = ["Counters", "Mended", "Scores", "bounds", "mended", "mended_scores"]

Floats = NDArray[np.float64]


class Scores(NamedTuple):
    """What a scorer says of each leaf of one tree.

    voc : (n,), the value it was trained on, by default the rate, u a rollout; gross of cost.
    batch : (n,), the rollouts that value assumes. voc_high : (n,), calibrated upper bound, gross of cost:
    the exact value lies at or below it as often as `facts["calibration"]` states. in_range : (n,), False
    where the leaf is unlike those of training, or where the file had no answer and `voc` is the closed-form
    static rate. There, and with files that have none, `voc_high` is a bound that no value of such a leaf
    exceeds, or `voc` where that is larger. pick : position of the largest voc - cost, the first on ties;
    where the value is of k rollouts together, of voc - k cost. worth_it : whether that is above 0. With
    `tree`, pick (a position within its tree) and worth_it have one entry a tree.
    """

    voc: Floats
    batch: NDArray[np.int64]
    voc_high: Floats
    in_range: NDArray[np.bool_]
    pick: Any
    worth_it: Any


@dataclass
class Counters:
    """How often what happened since the scorer was loaded; approximate when threads share it.

    decisions : calls answered. out_of_range : calls with some leaf unlike those of training.
    invalid : calls with values that a leaf table cannot hold. late : calls after their deadline.
    fallback : calls that the closed form answered alone.
    """

    decisions: int = 0
    out_of_range: int = 0
    invalid: int = 0
    late: int = 0
    fallback: int = 0


class Mended(NamedTuple):
    """Of each leaf: if its values may be so, if the file's answer stands, value, batch, value less cost."""

    usable: NDArray[np.bool_]
    kept: NDArray[np.bool_]
    voc: Floats
    batch: NDArray[np.int64]
    net: Floats


def mended_scores(buffers: LeafBuffers, strict: bool, batch: int | None, counters: Counters) -> Scores:
    """What is said where the file's answer is missing or deserves less trust; arguments as for `mended`."""
    usable, kept, voc, batches, net = mended(buffers, strict, batch, counters)
    in_range = buffers.in_range & kept
    high = np.zeros(len(voc))
    if usable.any():
        high[usable] = bounds(buffers, usable, batch)
    high = np.maximum(high, voc)
    if buffers.has_bound:
        high[in_range] = buffers.out["voc_high"][in_range]
    pick = int(net.argmax())
    return Scores(voc, batches, high, in_range, pick, bool(net[pick] > 0))


def mended(buffers: LeafBuffers, strict: bool, batch: int | None, counters: Counters) -> Mended:
    """The values, from the closed form where the file's answer is missing; counted.

    strict : raise InputError for what a leaf table cannot hold. batch : rollouts together that the file's
    value is of, None for a rate or a batch of each call's own.
    Leaves unlike those of training keep the file's answer: their features, cut to the ranges of training,
    led it closer to the exact value than the static rate comes.
    """
    usable = buffers.usable(strict)
    sound = bool(usable.all())
    out, n = buffers.out, len(usable)
    # One bad leaf spoils the features of the others.
    kept = np.isfinite(out["voc"]) if buffers.answered and sound else np.zeros(n, dtype=bool)
    some = bool(kept.any())
    counters.invalid += not sound
    counters.out_of_range += some
    counters.fallback += not some
    together = buffers.batch_size or batch
    voc, batches = np.zeros(n), np.zeros(n, dtype=np.int64)
    if usable.any() and not (some and kept.all()):
        at: Any = slice(None) if sound else usable
        rows = {name: x[at] for name, x in buffers.columns.items()}
        remaining = float(buffers.remaining)
        voc[at], batches[at] = closed_form_values(buffers.kind, rows, remaining, together)
    if some:
        voc[kept], batches[kept] = out["voc"][kept], out["batch"][kept]
    net = voc - buffers.columns["cost"] * (together or 1)
    if not sound:
        net[~usable] = -np.inf
    return Mended(usable, kept, voc, batches, net)


def bounds(buffers: LeafBuffers, rows: Any, batch: int | None) -> Floats:
    """The bound that no value exceeds; 0 for a rate where nothing is left to roll out."""
    together = buffers.batch_size or batch
    if together is None and buffers.remaining < 1:
        return np.zeros(len(buffers.action[rows]))
    columns = {name: x[rows] for name, x in buffers.columns.items()}
    return closed_form_bounds(buffers.kind, columns, together or 1)
