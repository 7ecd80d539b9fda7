"""The record row of a candidate: what a backup must say of a leaf to have it scored; floor 1, light."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, fields
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

__all__ = ["NO_VARIANCE", "Crossings", "LeafMoments"]

Floats = NDArray[np.float64]

NO_VARIANCE: Final = 1e18  # noise ratio of a leaf whose value is sure


@dataclass(frozen=True)
class LeafMoments:
    """Moments of leaf values: now, and of the posterior mean h rollouts later; shape (n,) each.

    mean, var : u and u^2, of M_h. sd : standard deviation at present, u. noise_ratio : noise variance of
    one rollout over the present variance, so that k rollouts move the mean by sd sqrt(k / (k + ratio));
    alpha + beta for win/loss leaves, at most 1e18.
    """

    mean: Floats
    var: Floats
    sd: Floats
    noise_ratio: Floats

    @classmethod
    def of(cls, belief: Mapping[str, Floats], horizon: float) -> LeafMoments:
        """From the columns of a leaf belief.

        >>> columns = {"alpha": np.array([1.0]), "beta": np.ones(1), "low": np.zeros(1), "high": np.ones(1)}
        >>> found = LeafMoments.of(columns, 2)
        >>> found.mean.tolist(), (1 / found.var).round(9).tolist(), found.noise_ratio.tolist()
        ([0.5], [24.0], [2.0])
        """
        if "mean" in belief:
            mean, var = np.array(belief["mean"]), np.asarray(belief["var"])
            noise = np.asarray(belief["noise_var"])
            sure = var <= noise / NO_VARIANCE
            ratio = np.where(sure, NO_VARIANCE, noise / np.where(sure, 1.0, var))
        else:
            ratio = belief["alpha"] + belief["beta"]
            span, share = belief["high"] - belief["low"], belief["alpha"] / ratio
            mean = belief["low"] + span * share
            var = np.square(span) * share * (belief["beta"] / ratio) / (ratio + 1)
        seen = 1.0 if math.isinf(horizon) else horizon / (horizon + ratio)
        return cls(mean, np.asarray(var * seen), np.sqrt(var), ratio)


@dataclass(frozen=True)
class Crossings:
    """The record columns that a backup fills: where, as a candidate moves the posterior means, another root
    action becomes the best; shape (n_leaves,) each.

    A move of 1 is one standard deviation of the leaf at present, with all that it moves beside the leaf;
    k rollouts move by a normal of sd sqrt(k / (k + noise_ratio)). Meaning and units of the columns:
    `schema.RECORD_UNITS`.
    """

    crossing: Floats
    slope: Floats
    bend: Floats
    now: Floats
    other_crossing: Floats
    other_slope: Floats
    spread: Floats
    noise_ratio: Floats

    def columns(self, cost: Any) -> dict[str, Floats]:
        """Name -> column of a record table; `cost` in u a rollout, a number or one a leaf."""
        out = {f.name: getattr(self, f.name) for f in fields(self)}
        return {**out, "cost": np.broadcast_to(np.asarray(cost, dtype=float), self.slope.shape)}
