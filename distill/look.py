"""What is in a dataset: counts, labels, slices, error bounds, duplicates, what was left aside; floor 6.

Shards are read one after the other, so memory is that of one shard and of a few numbers a candidate.
"""

from __future__ import annotations

import hashlib
import os
from collections import Counter
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Any, Final

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from numpy.typing import NDArray

from distill.errors import InputError
from distill.metrics import Groups
from distill.shards import read_manifest, verify
from distill.tree import Floats

__all__ = ["LOOK_FORMAT", "look"]

LOOK_FORMAT: Final = "voc-look/1"
_QUANTILES: Final = (0.0, 0.01, 0.1, 0.25, 0.5, 0.75, 0.9, 0.99, 1.0)
_FEWEST_DECADES: Final = -16  # of the histogram: labels below count into its first bar
_CANDIDATES: Final = ("tree", "gain", "var", "alpha", "beta", "low", "high", "remaining", "label", "error")
_BELIEFS: Final = (
    "parent", "kind", "reward", "discount", "prob", "mean", "var", "noise_var", "alpha", "beta", "low",
    "high", "cost", "cov",
)  # fmt: skip
_SCALARS: Final = ("horizon", "batch", "remaining")
_LEAST_SHARE: Final = 1e-30  # of the scale: labels below are right, but their bounds are absolute
_LEAF_EDGES: Final = (1, 2, 5, 10, 20, 50, 100, 1000)
_LEFT_EDGES: Final = (0, 1, 10, 100, 1000, 10_000)


def look(dataset: str | os.PathLike[str], *, check: bool = True) -> dict[str, Any]:
    """What is in a dataset folder, as JSON values; what `voc-distill look` prints and draws.

    check : compare every file with its hash first. InputError where the manifest or a file is missing or
    not as the manifest says. An unfinished dataset is looked at as far as it goes, and `complete` says so.

    Labels and errors are also given as shares of the tree's scale, which for trees that no leaf table holds
    (chance nodes) is the largest sd of a leaf without its discounts and probabilities.
    """
    folder = Path(dataset)
    manifest = read_manifest(folder, partial=True)
    if check:
        verify(folder, manifest["shards"])
    rows = _candidates(folder, manifest)
    trees = _trees(folder, manifest, "trees")
    aside = _trees(folder, manifest, "aside")
    duplicates = Counter(trees["hash"])
    n = len(trees["hash"])
    recorded = _recorded_names(manifest)
    return {
        "format": LOOK_FORMAT,
        "name": folder.name,
        "complete": bool(manifest.get("complete")),
        "source": manifest.get("source", {}),
        "seed": manifest.get("seed"),
        "asked": manifest.get("asked", {}),
        "shards": len(manifest["shards"]),
        "bytes": sum((folder / name).stat().st_size for e in manifest["shards"] for name in e["files"]),
        "trees": n,
        "candidates": len(rows["label"]),
        "aside": len(aside["hash"]),
        "aside_reasons": dict(Counter(_short(r) for r in aside["reason"]).most_common(10)),
        "methods": dict(Counter(trees["method"]).most_common()),
        "sources": dict(Counter(trees["source"]).most_common()),
        "recorded": sum(name in recorded for name in trees["source"]),
        "duplicate_trees": n - len(duplicates),
        "most_alike": max(duplicates.values(), default=0),
        "weights": _weights(trees["weight"]),
        **_labels(rows),
        "slices": _slices(rows),
    }


def _recorded_names(manifest: dict[str, Any]) -> set[str]:
    """What the recorded trees among a dataset's are called in its column `source`."""
    source = manifest.get("source", {})
    names = {a["name"] for a in manifest.get("added", ())}
    if source.get("kind") in ("traces", "mix"):
        names.add(source.get("traces", source).get("name"))
    return names


def _candidates(folder: Path, manifest: dict[str, Any]) -> dict[str, Floats]:
    """Label, error, scale of the tree, rollouts left and tree of every candidate."""
    parts: dict[str, list[Floats]] = {k: [] for k in ("tree", "label", "error", "scale", "remaining")}
    for table in _tables(folder, manifest, "candidates", _CANDIDATES):
        if table.num_rows == 0:
            continue
        c = {name: _floats(table, name) for name in _CANDIDATES if name in table.column_names}
        groups = Groups.of(c["tree"].astype(np.int64))
        scale = groups.spread(groups.highest(np.nan_to_num(_sd(c) * np.nan_to_num(c["gain"], nan=1.0))))
        for name, x in (("scale", scale), *((k, c[k]) for k in ("tree", "label", "error", "remaining"))):
            parts[name].append(x)
    return {name: np.concatenate(xs) if xs else np.zeros(0) for name, xs in parts.items()}


def _sd(c: dict[str, Floats]) -> Floats:
    """Standard deviation of each leaf's belief, u."""
    total = c["alpha"] + c["beta"]
    win_loss = (c["high"] - c["low"]) * np.sqrt(c["alpha"] * c["beta"] / (total**2 * (total + 1)))
    return np.where(np.isnan(c["var"]), win_loss, np.sqrt(np.maximum(c["var"], 0)))


def _trees(folder: Path, manifest: dict[str, Any], kind: str) -> dict[str, list[Any]]:
    """Hash, method, source, weight and reason of every tree."""
    out: dict[str, list[Any]] = {k: [] for k in ("hash", "method", "source", "weight", "reason")}
    wanted = (*_BELIEFS, *_SCALARS, "method", "source", "weight", "reason")
    for table in _tables(folder, manifest, kind, wanted):
        out["hash"] += _hashes(table)
        for name in ("method", "source", "weight", "reason"):
            if name in table.column_names:
                out[name] += table.column(name).to_pylist()
    return out


def _hashes(table: pa.Table) -> list[bytes]:
    """One a tree; the same for trees of the same beliefs and budget, whatever their names."""
    digests = [hashlib.blake2b(digest_size=12) for _ in range(table.num_rows)]
    for name in _BELIEFS:
        column = table.column(name).combine_chunks()
        lists = column if isinstance(column, pa.Array) else pa.concat_arrays(column.chunks)
        offsets = lists.offsets.to_numpy()
        values = np.asarray(lists.values.to_numpy(zero_copy_only=False))
        values = values + 0.0 if values.dtype.kind == "f" else values  # -0.0 and 0.0 are one value
        for digest, a, b in zip(digests, offsets[:-1], offsets[1:], strict=True):
            digest.update(f"{name} {b - a}".encode())
            digest.update(np.ascontiguousarray(values[a:b]).tobytes())
    for name in _SCALARS:
        for digest, x in zip(digests, table.column(name).to_pylist(), strict=True):
            digest.update(repr(x).encode())
    return [d.digest() for d in digests]


def _tables(folder: Path, manifest: dict[str, Any], kind: str, columns: Sequence[str]) -> Iterator[pa.Table]:
    for entry in manifest["shards"]:
        for name in entry["files"]:
            if name.startswith(kind + "-"):
                try:
                    there = set(pq.read_schema(folder / name).names)
                    yield pq.read_table(folder / name, columns=[c for c in columns if c in there])
                except (OSError, pa.ArrowException) as e:
                    raise InputError(str(folder / name), f"must be a readable Parquet file ({e})") from None


def _floats(table: pa.Table, name: str) -> Floats:
    return np.asarray(table.column(name).to_numpy(zero_copy_only=False), dtype=float)


def _short(reason: str | None) -> str:
    """A reason without the numbers of single trees."""
    words = (reason or "no reason").split()
    return " ".join("..." if any(c.isdigit() for c in w) else w for w in words)[:160]


# --- figures ---------------------------------------------------------------------------------------


def _labels(rows: dict[str, Floats]) -> dict[str, Any]:
    """Distribution of labels and of their error bounds, over the tree's scale."""
    scaled = rows["scale"] > 0
    share = rows["label"][scaled] / rows["scale"][scaled]
    error = rows["error"][scaled] / rows["scale"][scaled]
    some = share > _LEAST_SHARE
    relative = error[some] / share[some]
    return {
        "labels_zero": int(np.count_nonzero(rows["label"] == 0)),
        "label": _quantiles(rows["label"]),
        "label_of_scale": _quantiles(share),
        "error_of_scale": _quantiles(error),
        "error_of_label": _quantiles(relative),
        "label_histogram": _histogram(share),
        "error_histogram": _histogram(error),
    }


def _quantiles(x: Floats) -> dict[str, float]:
    if len(x) == 0:
        return {}
    found = np.quantile(x, _QUANTILES)
    return {f"{q:g}": float(f"{v:.6g}") for q, v in zip(_QUANTILES, found, strict=True)}


def _histogram(x: Floats) -> dict[str, Any]:
    """Counts by half decades of log10; what is smaller counts into the first bar, zeros apart."""
    some = x[x > 0]
    if len(some) == 0:
        return {"edges": [], "counts": [], "zero": len(x)}
    logs = np.maximum(np.log10(some), _FEWEST_DECADES)
    low, high = np.floor(logs.min()), np.floor(logs.max()) + 1
    edges = np.arange(2 * low, 2 * high + 1) / 2
    counts = np.histogram(logs, edges)[0]
    return {"edges": edges.tolist(), "counts": counts.tolist(), "zero": len(x) - len(some)}


def _slices(rows: dict[str, Floats]) -> dict[str, list[dict[str, Any]]]:
    """Slices of the trees: by leaves, and by rollouts left."""
    if len(rows["tree"]) == 0:
        return {}
    groups = Groups.of(rows["tree"].astype(np.int64))
    best = groups.highest(rows["label"])
    scale = rows["scale"][groups.starts]
    share = np.where(scale > 0, best / np.where(scale > 0, scale, 1), np.nan)
    error = groups.highest(rows["error"])
    bound = np.where(best > 0, error / np.where(best > 0, best, 1), np.nan)
    by: dict[str, tuple[Floats, Sequence[int]]] = {"leaves": (groups.sizes.astype(float), _LEAF_EDGES)}
    left = rows["remaining"][groups.starts]
    if not np.any(np.isnan(left)):
        by["rollouts left"] = (left, _LEFT_EDGES)
    return {
        name: list(_cut(values, edges, groups.sizes, share, bound)) for name, (values, edges) in by.items()
    }


def _cut(
    values: Floats, edges: Sequence[int], sizes: NDArray[np.int64], share: Floats, bound: Floats
) -> Iterator[dict[str, Any]]:
    at = np.searchsorted(edges, values, side="right")
    for i in np.unique(at):
        rows = at == i
        low, high = values[rows].min(), values[rows].max()
        yield {
            "slice": f"{low:,.0f}" if low == high else f"{low:,.0f} to {high:,.0f}",
            "trees": int(rows.sum()),
            "candidates": int(sizes[rows].sum()),
            "best_label_of_scale": _median(share[rows]),
            "error_of_best": _largest(bound[rows]),
        }


def _median(x: Floats) -> float | None:
    x = x[np.isfinite(x)]
    return float(f"{np.median(x):.6g}") if len(x) else None


def _largest(x: Floats) -> float | None:
    x = x[np.isfinite(x)]
    return float(f"{np.max(x):.6g}") if len(x) else None


def _weights(weight: list[float]) -> dict[str, float] | None:
    """Smallest, largest and effective number of trees (Kish 1965), where trees count differently."""
    if not weight or len(set(weight)) == 1:
        return None
    w = np.array(weight)
    effective = float(w.sum() ** 2 / np.sum(w**2))
    return {"smallest": float(w.min()), "largest": float(w.max()), "effective_trees": effective}
