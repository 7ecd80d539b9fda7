"""What answers where a scorer file does not, for each kind of input: closed forms; floor 3, light."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Final

import numpy as np
from numpy.typing import NDArray

from distill.closed_form import PEAK, highest_rates, static_rates
from distill.normal_fits import unit_gain
from distill.record_rows import LeafMoments
from distill.scorer_inputs import RECORD, WIN_LOSS_TABLE, InputKind

__all__ = ["closed_form_bounds", "closed_form_values", "spreads"]

Floats = NDArray[np.float64]

# A move of mean 0 and sd s gains at most s / 2, a normal one s f(0): sqrt(pi / 2) more for the same s.
_ANY_OVER_NORMAL: Final = float(np.sqrt(np.pi / 2))


def closed_form_values(
    kind: InputKind, columns: Mapping[str, Floats], remaining: float, batch: int | None = None
) -> tuple[Floats, NDArray[np.int64]]:
    """Values of each row, u a rollout, and their batches; with `batch`, of that many rollouts together.

    Leaf tables: the static rate, win/loss leaves taken as normals of the same moments. Records: the
    first-order rate of the two crossings. columns : valid ones of the kind, shape (n,).
    """
    if kind is RECORD:
        return _record_values(columns, remaining, batch)
    place = {name: columns[name] for name in ("gain", "offset")}
    return static_rates(**_gaussian(kind, columns), **place, remaining=remaining, batch=batch)


def closed_form_bounds(kind: InputKind, columns: Mapping[str, Floats], batch: int = 1) -> Floats:
    """A bound that no rate of a row exceeds, or with `batch` > 1 no value of so many rollouts; shape (n,)."""
    if kind is RECORD:
        resolved = np.sqrt(batch / (batch + columns["noise_ratio"]))
        return np.asarray(columns["spread"] * resolved)
    moments = _gaussian(kind, columns)
    bound = highest_rates(moments["var"], moments["noise_var"], columns["gain"], batch)
    return bound * _ANY_OVER_NORMAL if kind is WIN_LOSS_TABLE else bound


def spreads(kind: InputKind, columns: Mapping[str, Floats]) -> Floats:
    """How much each row's leaf contributes to the root at most, one standard deviation, u; shape (n,)."""
    if kind is RECORD:
        return columns["spread"]
    return np.asarray(columns["gain"] * np.sqrt(_gaussian(kind, columns)["var"]))


def _gaussian(kind: InputKind, columns: Mapping[str, Floats]) -> dict[str, Floats]:
    """Mean, variance and noise variance of each leaf."""
    if kind is not WIN_LOSS_TABLE:
        return {name: columns[name] for name in ("mean", "var", "noise_var")}
    found = LeafMoments.of({name: columns[name] for name in ("alpha", "beta", "low", "high")}, np.inf)
    return {"mean": found.mean, "var": found.var, "noise_var": found.var * found.noise_ratio}


def _record_values(
    columns: Mapping[str, Floats], remaining: float, batch: int | None
) -> tuple[Floats, NDArray[np.int64]]:
    crossing, ratio = np.abs(columns["crossing"]), columns["noise_ratio"]
    n = len(ratio)
    if batch is None and remaining < 1:
        return np.zeros(n), np.zeros(n, dtype=np.int64)
    if batch is not None:
        return _at(columns, np.full(n, float(batch))), np.full(n, batch, dtype=np.int64)
    most = np.floor(remaining)
    u2 = np.square(np.minimum(crossing, 1e9))
    low = np.floor(np.clip(u2 * (PEAK[0] + PEAK[1] / (u2 + PEAK[2])) * ratio, 1.0, most))
    high = np.minimum(low + 1, most)
    a, b = _at(columns, low) / low, _at(columns, high) / high
    return np.maximum(a, b), np.where(b > a, high, low).astype(np.int64)


def _at(columns: Mapping[str, Floats], k: Floats) -> Floats:
    """First-order value of k rollouts together."""
    rho = np.maximum(np.sqrt(k / (k + columns["noise_ratio"])), 1e-300)
    total = np.zeros(len(k))
    for side in ("", "other_"):
        with np.errstate(over="ignore"):
            z = np.abs(columns[f"{side}crossing"]) / rho
        total += columns[f"{side}slope"] * rho * unit_gain(-z)
    return total
