"""Makes the conformance vectors: `python -m distill.conformance_vectors FOLDER`; floor 7.

Trees that show each rule of the backup by itself, and some of each family; a small linear scorer for each
kind of input, trained on a hundred trees: enough to be repeated, no good in an agent.
"""

from __future__ import annotations

import hashlib
import json
import math
import os
import sys
import tempfile
from collections.abc import Iterator
from pathlib import Path
from typing import Any, Final

import numpy as np

from distill import schema
from distill.beliefs import dense_gaussian_update
from distill.candidates import Candidates
from distill.conformance import FORMAT, answered
from distill.family import draw, load_family, parse_family
from distill.files import write_atomic
from distill.generate import generate
from distill.labelling import OWN_BATCH, Asked
from distill.record import to_record
from distill.sample_data import family_path
from distill.ship import ship
from distill.train import train
from distill.tree import BeliefTree

__all__ = ["NAME", "make"]

NAME: Final = "vectors.json"
_SEED: Final = 40  # any; fixed
_SCORERS: Final = {
    "leaf-table.onnx": "cold-store",
    "any-horizon.onnx": "cold-store",
    "any-batch.onnx": "cold-store",
    "win-loss.onnx": "on-time",
    "record.onnx": "crossing-traffic",
}
_VARYING: Final = {  # what the family's budget says more, and the batch that is asked for
    "any-horizon.onnx": ("horizon = { choice = [0, 4, inf] }", None),
    "any-batch.onnx": ("batch = { choice = [1, 4, 32] }", OWN_BATCH),
}
_TREES: Final = 100
_CALLS: Final = 3


def make(folder: str | os.PathLike[str]) -> Path:
    """Write vectors and scorer files into `folder`; returns the path of the vectors."""
    folder = Path(folder)
    folder.mkdir(parents=True, exist_ok=True)
    vectors = {
        "format": FORMAT,
        "record_version": schema.RECORD_VERSION,
        "cases": [*_small_cases(), *_family_cases()],
        "scorers": [_scorer(folder / name, family) for name, family in _SCORERS.items()],
    }
    path = folder / NAME
    write_atomic(path, (json.dumps(answered(vectors, folder), separators=(",", ":")) + "\n").encode())
    return path


def _case(name: str, tree: BeliefTree, horizon: float, *updates: dict[str, Any]) -> dict[str, Any]:
    record = {
        key: x for key, x in to_record(tree).items() if key not in ("id", "extra", "remaining", "count")
    }
    return {
        "name": name,
        "tree": record,
        "horizon": "inf" if math.isinf(horizon) else horizon,
        "steps": [{"update": update} for update in (None, *updates)],
    }


def _built(parent: list[int], kind: str, **columns: Any) -> BeliefTree:
    """A tree from short texts; leaf columns per leaf, node columns per node."""
    codes = np.array([{"d": schema.DECISION, "c": schema.CHANCE, "l": schema.LEAF}[k] for k in kind], np.int8)
    n, m = len(parent), kind.count("l")
    node = {"reward": np.zeros(n), "discount": np.ones(n), "prob": np.ones(n)}
    leaf: dict[str, Any] = {} if "alpha" in columns else {"noise_var": np.ones(m)}
    if "alpha" in columns:
        leaf = {"low": np.zeros(m), "high": np.ones(m)}
    given = {name: np.array(x, dtype=float) for name, x in columns.items()}
    return BeliefTree(parent=np.array(parent), kind=codes, **{**node, **leaf, **given})


def _small_cases() -> Iterator[dict[str, Any]]:
    inf = math.inf
    two = _built([-1, 0, 0], "dll", mean=[0, 0.5], var=[1, 2], noise_var=[4, 1])
    yield _case("two leaves", two, inf, {"leaf": 0, "mean": 0.8, "var": 0.5})
    yield _case("two leaves, no rollout to come", two, 0.0)
    yield _case("two leaves, three rollouts to come", two, 3.0)
    yield _case("one action", _built([-1, 0, 1, 1], "ddll", mean=[0, 0.2], var=[1, 1]), inf)
    pair = _built([-1, 0, 1, 1, 0], "ddlll", mean=[0, 0.4, 0.6], var=[1, 2, 0.5])
    yield _case("maximum of two", pair, inf, {"leaf": 1, "mean": -0.5, "var": 0.3})
    triple = _built([-1, 0, 1, 1, 1, 0], "ddllll", mean=[0, 0.1, -3, 0.9], var=[1, 0, 0.04, 0.5])
    yield _case("maximum of three, one sure, one narrow", triple, inf, {"leaf": 2, "mean": 1.5, "var": 0.01})
    edges = _built(
        [-1, 0, 1, 2, 2, 1, 0],
        "dddllll",
        reward=[0, 0.5, -0.2, 0, 0.3, 0, 0.1],
        discount=[1, 0.9, 0.9, 0.8, 1, 0.9, 1],
        mean=[0, 0.2, 0.3, 0.7],
        var=[1, 1, 2, 1],
    )
    yield _case(
        "decision below decision, rewards and discounts", edges, inf, {"leaf": 0, "mean": 1.0, "var": 0.2}
    )
    sums = _built(
        [-1, 0, 1, 1, 2, 2, 0],
        "dcdllll",
        prob=[1, 1, 0.25, 0.75, 1, 1, 1],
        mean=[0, 0.4, -0.1, 0.2],
        var=[1, 2, 1, 0.3],
    )
    yield _case("maximum below chance", sums, inf, {"leaf": 2, "mean": 0.9, "var": 0.4})
    far = _built([-1, 0, 1, 1, 0], "dclll", prob=[1, 1, 0.5, 0.5, 1], mean=[1e8, 1e8 + 1, 1e8], var=[1, 2, 3])
    yield _case("values far from 0", far, inf)
    never = _built([-1, 0, 1, 1, 0], "dclll", prob=[1, 1, 0, 1, 1], mean=[0, 1, 0.5], var=[1, 2, 3])
    yield _case("an outcome of probability 0", never, inf)
    wins = _built([-1, 0, 1, 1, 0], "dclll", prob=[1, 1, 0.4, 0.6, 1], alpha=[1, 2, 3], beta=[1, 5, 2.5])
    yield _case("win/loss leaves below chance", wins, inf, {"leaf": 0, "alpha": 2.0, "beta": 1.0})
    cov = np.array([[1, -0.4], [-0.4, 2]])
    dense = _built([-1, 0, 0], "dll", mean=[0, -0.5], cov=cov)
    mean, new = dense_gaussian_update(
        np.array([0, -0.5]), cov, np.ones(2), np.array([1, 0]), np.array([0.7, 0.0])
    )
    yield _case("two correlated leaves", dense, inf, {"mean": mean.tolist(), "cov": new.tolist()})
    against = np.array([[0.01, 0, 0], [0, 1, -0.9], [0, -0.9, 1]])
    yield _case(
        "one observation raises one rival and lowers another",
        _built([-1, 0, 0, 0], "dlll", mean=[0.5, 0, -0.2], cov=against),
        inf,
    )


def _family_cases() -> Iterator[dict[str, Any]]:
    for name, count in (("crossing-traffic", 3), ("shared-aisles", 2), ("cold-store", 1)):
        family = load_family(family_path(name))
        found, index = 0, 0
        while found < count:
            tree = draw(family, _SEED, index)
            index += 1
            if 5 <= tree.n_leaves <= 12:
                found += 1
                yield _case(f"{name} {index - 1}", tree, math.inf if found != 2 else 5.0)


def _scorer(path: Path, name: str) -> dict[str, Any]:
    family, batch = load_family(family_path(name)), None
    if path.name in _VARYING:
        more, batch = _VARYING[path.name]
        family = parse_family(family.text.replace("[budget]", f"[budget]\n{more}").encode())
    with tempfile.TemporaryDirectory() as work:
        data, trained = Path(work) / "data", Path(work) / "trained"
        generate(family, data, trees=_TREES, seed=_SEED, asked=Asked(batch=batch))
        train(data, trained, seed=_SEED, recipes=["linear"], n_boot=10)
        ship(trained, Path(work) / path.name)
        write_atomic(path, (Path(work) / path.name).read_bytes())
        rows = Candidates.read(data)[0]
    trees = list(zip(rows.groups.starts, rows.groups.sizes, strict=True))
    for varying in rows.kind.varies:  # one of each
        first = np.unique(rows.columns[varying][rows.groups.starts], return_index=True)[1]
        trees = [trees[i] for i in first]
    calls = []
    for a, n in trees[:_CALLS]:
        call = {name: x[a : a + n] for name, x in rows.columns.items()}
        call |= {name: call[name][0] for name in rows.kind.scalars}
        calls.append({"inputs": rows.kind.to_json(call)})
    return {"file": path.name, "sha256": hashlib.sha256(path.read_bytes()).hexdigest(), "calls": calls}


if __name__ == "__main__":
    if len(sys.argv) != 2:
        print("usage: python -m distill.conformance_vectors FOLDER", file=sys.stderr)
        sys.exit(2)
    print(make(sys.argv[1]))
