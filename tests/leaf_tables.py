"""Random leaf tables for tests of features, export and runtime."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

NAMES = ("mean", "var", "noise_var", "gain", "offset", "action", "cost")


def table(rng: np.random.Generator, n: int, n_actions: int, remaining: int = 60) -> dict[str, Any]:
    """One tree: `n` leaves under `n_actions` actions, each with at least one, in random order."""
    action = np.concatenate([np.arange(n_actions), rng.integers(0, n_actions, n - n_actions)])
    return {
        "mean": rng.normal(0, 1, n),
        "var": rng.gamma(1, 1, n),
        "noise_var": rng.gamma(2, 2, n),
        "gain": rng.uniform(0.5, 1, n),
        "offset": rng.normal(0, 0.3, n),
        "action": rng.permutation(action).astype(np.int64),
        "cost": rng.uniform(0, 1e-3, n),
        "remaining": remaining,
    }


def rows(rng: np.random.Generator, n_trees: int, most: int = 40) -> dict[str, NDArray[Any]]:
    """Rows of many trees, with `tree` and `remaining` as columns."""
    parts = []
    for i in range(n_trees):
        n = int(rng.integers(1, most))
        tree = table(rng, n, int(rng.integers(1, min(n, 6) + 1)), int(rng.integers(1, 400)))
        parts.append({**tree, "remaining": np.full(n, tree["remaining"]), "tree": np.full(n, i)})
    return {name: np.concatenate([p[name] for p in parts]) for name in parts[0]}
