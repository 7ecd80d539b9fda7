"""Small trees that several tests share."""

from __future__ import annotations

from typing import Any

import numpy as np

from distill.record import from_record
from distill.tree import BeliefTree


def flat_record(**changes: Any) -> dict[str, Any]:
    """Two actions: one with a decision node over two leaves, one a leaf; keys replaced or (None) removed."""
    record: dict[str, Any] = {
        "format": "belief-tree/1",
        "parent": [-1, 0, 1, 1, 0],
        "kind": ["decision", "decision", "leaf", "leaf", "leaf"],
        "reward": [None, 0.5, 0.0, -0.25, 0.0],
        "discount": [None, 0.9, 1.0, 0.8, 1.0],
        "mean": [None, None, 0.0, 0.4, 0.6],
        "var": [None, None, 1.0, 2.0, 0.5],
        "noise_var": [None, None, 1.0, 4.0, 2.0],
    }
    record.update(changes)
    return {k: v for k, v in record.items() if v is not None}


def chance_record(**changes: Any) -> dict[str, Any]:
    """One action over a chance node with two leaves, one sure action."""
    record: dict[str, Any] = {
        "format": "belief-tree/1",
        "parent": [-1, 0, 1, 1, 0],
        "kind": ["decision", "chance", "leaf", "leaf", "leaf"],
        "prob": [None, None, 0.25, 0.75, None],
        "mean": [None, None, 0.0, 0.4, 0.6],
        "var": [None, None, 1.0, 2.0, 0.0],
        "noise_var": [None, None, 1.0, 4.0, 2.0],
    }
    record.update(changes)
    return {k: v for k, v in record.items() if v is not None}


def win_loss_record(**changes: Any) -> dict[str, Any]:
    """Two win/loss leaves under the root."""
    record: dict[str, Any] = {
        "format": "belief-tree/1",
        "parent": [-1, 0, 0],
        "kind": ["decision", "leaf", "leaf"],
        "alpha": [None, 1.0, 2.0],
        "beta": [None, 1.0, 3.0],
        "low": [None, 0.0, 0.0],
        "high": [None, 1.0, 1.0],
    }
    record.update(changes)
    return {k: v for k, v in record.items() if v is not None}


def bush(mean: list[list[float]], var: list[list[float]], noise_var: float = 1.0, **more: Any) -> BeliefTree:
    """A tree of root actions, each a decision node over Gaussian leaves given by rows."""
    parent, kind = [-1], ["decision"]
    columns: dict[str, list[float | None]] = {"mean": [None], "var": [None], "noise_var": [None]}
    for ms, vs in zip(mean, var, strict=True):
        parent.append(0)
        kind.append("decision")
        for name in columns:
            columns[name].append(None)
        node = len(parent) - 1
        for m, v in zip(ms, vs, strict=True):
            parent.append(node)
            kind.append("leaf")
            columns["mean"].append(float(m))
            columns["var"].append(float(v))
            columns["noise_var"].append(noise_var)
    return from_record({"format": "belief-tree/1", "parent": parent, "kind": kind, **columns, **more})


def random_bush(rng: np.random.Generator, actions: int, leaves: int, **more: Any) -> BeliefTree:
    """`actions` root actions with `leaves` leaves each, unit-scale random beliefs."""
    mean = rng.normal(size=(actions, leaves)).tolist()
    var = rng.lognormal(size=(actions, leaves)).tolist()
    return bush(mean, var, noise_var=float(rng.lognormal()), **more)
