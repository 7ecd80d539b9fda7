"""Labelled candidate rows: read from a dataset, split by tree; floor 5."""

from __future__ import annotations

import hashlib
import json
import math
import os
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, Final

import numpy as np
import pyarrow.parquet as pq
from numpy.typing import NDArray

from distill.backup import backup_of
from distill.errors import InputError
from distill.files import sha256_of
from distill.metrics import Groups
from distill.origins import origins
from distill.scorer_inputs import (
    ANY_BATCH,
    ANY_HORIZON,
    BOTH_VARY,
    LEAF_TABLE,
    RECORD,
    SCALAR_OF,
    VARIES,
    WIN_LOSS_TABLE,
    InputKind,
)
from distill.shards import MANIFEST, read_candidates, read_manifest, read_trees
from distill.tree import BeliefTree, Floats

__all__ = ["LEAF_COLUMNS", "PARTS", "Candidates", "Split", "split_by_tree"]

PARTS: Final = {"fit": 0.75, "choose": 0.10, "held_out": 0.15}
LEAF_COLUMNS: Final = ("mean", "var", "noise_var", "gain", "offset", "action", "cost", "remaining")


@dataclass(frozen=True, eq=False)
class Candidates:
    """Labelled candidate rows, the rows of a tree together, leaves in node order.

    columns : the inputs of `kind`, each of shape (n,); for the Gaussian leaf table LEAF_COLUMNS. tree : the
    tree of each row. label : exact value, u a rollout for a rate. batch : rollouts of the label. error :
    bound on the label's error, same unit. is_rate : whether the label is a rate. decision : of recorded
    trees, a number of the decision that each row's tree was met in; None where no record says. weight : of
    each row's tree, where trees were sampled with unequal chances; None where they all count alike.
    kind : the simplest input that holds every tree of the dataset. folder : where it was read from.
    """

    columns: Mapping[str, Any]
    tree: NDArray[np.int64]
    label: Floats
    batch: Floats
    error: Floats
    is_rate: bool = True
    decision: NDArray[np.uint64] | None = None
    weight: Floats | None = None
    kind: InputKind = LEAF_TABLE
    folder: Path | None = None

    @classmethod
    def read(
        cls, dataset: str | os.PathLike[str], *, like: InputKind | None = None
    ) -> tuple[Candidates, dict[str, Any]]:
        """The candidates of a dataset folder, and what they are: `value` asked for, and `data` source.

        Independent leaves of one belief under decision nodes make leaf tables, other trees records, which
        a backup at the value's horizon fills. Gaussian leaf tables may have a horizon each, or a batch: then
        it is a column, and in the value it "varies"; where `like`, the input of a scorer, has it, even where
        it is one for all. Raises InputError where other values of more than one kind are mixed or no
        `remaining` is given.
        """
        folder = Path(dataset)
        manifest = read_manifest(folder)
        rows = read_candidates(folder)
        if len(rows["tree"]) == 0:
            raise InputError(str(folder), "must hold at least one labelled tree")
        if "remaining" not in rows or np.isnan(rows["remaining"]).any():
            raise InputError(f"{folder}: remaining", "must be given for every tree")
        h, batch = rows["horizon"], rows.get("batch", np.array([np.nan]))
        is_rate = bool(np.isnan(batch[0]))
        kind = _with_varying(folder, _kind_of(rows), {"horizon": h, "batch": batch}, like)
        about: dict[str, Any] = {
            "value": {
                "horizon": VARIES if kind is ANY_HORIZON else "inf" if math.isinf(h[0]) else float(h[0]),
                "batch": VARIES if kind is ANY_BATCH else None if is_rate else int(batch[0]),
            },
            "data": {
                "source": manifest["source"]["name"],
                "source_sha256": manifest["source"]["sha256"],
                "seed": manifest["seed"],
                "drawn_from": origins(manifest),
                "dataset_sha256": sha256_of(folder / MANIFEST),
                "trees": manifest["totals"]["trees"],
                "candidates": manifest["totals"]["candidates"],
                "aside": manifest["totals"]["aside"],
            },
        }
        if kind is RECORD:
            columns = {**_records(folder, rows["tree"], float(h[0])), "remaining": rows["remaining"]}
        else:
            columns = {name: rows[name] for name in (*kind.columns, "remaining")}
            columns |= {
                name: rows[key].astype(float) for key, name in SCALAR_OF.items() if name in kind.varies
            }
            columns["action"] = columns["action"].astype(np.int64)
        columns["remaining"] = columns["remaining"].astype(float)
        about["input"] = kind.name
        batches = rows["label_batch"].astype(float)
        out = cls(columns, rows["tree"], rows["label"], batches, rows["error"], is_rate)
        out = replace(out, kind=kind, folder=folder)
        if "weight" in rows and np.any(rows["weight"] != 1):
            out = replace(out, weight=rows["weight"])
        return replace(out, decision=_decisions(folder, manifest, out)), about

    @property
    def groups(self) -> Groups:
        """The rows grouped by tree."""
        return Groups.of(self.tree)

    def of_trees(self, keep: NDArray[np.bool_]) -> Candidates:
        """The rows of the trees marked in `keep`, one mark a tree in order of appearance."""
        rows = self.groups.spread(keep)
        return replace(
            self,
            columns={name: x[rows] for name, x in self.columns.items()},
            tree=self.tree[rows],
            label=self.label[rows],
            batch=self.batch[rows],
            error=self.error[rows],
            decision=None if self.decision is None else self.decision[rows],
            weight=None if self.weight is None else self.weight[rows],
        )

    def trees(self) -> Iterator[BeliefTree]:
        """The trees of the rows, from the dataset that they were read from, in order."""
        if self.folder is None:
            raise InputError("candidates", "must come from a dataset, where their trees are")
        wanted = set(self.tree[self.groups.starts].tolist())
        return (tree for number, tree in read_trees(self.folder, check=False) if number in wanted)

    @property
    def clusters(self) -> NDArray[np.uint64] | None:
        """The decision of each tree, where recorded: its stages are no independent trees."""
        return None if self.decision is None else self.decision[self.groups.starts]

    @property
    def tree_weights(self) -> Floats | None:
        """The weight of each tree, in order of appearance; None where all count alike."""
        return None if self.weight is None else self.weight[self.groups.starts]

    def keys(self) -> NDArray[np.uint64]:
        """A number a tree; trees of equal numbers belong together: one decision, or the same beliefs."""
        return self.fingerprints() if self.clusters is None else self.clusters

    def fingerprints(self) -> NDArray[np.uint64]:
        """A number a tree from its beliefs alone; the same for trees that differ in name or budget only."""
        names = [name for name in self.kind.columns if name != "cost"]
        table = np.stack([np.asarray(self.columns[name], dtype="<f8") for name in names], axis=1)
        table += 0.0  # -0.0 and 0.0 are one value
        return np.array(
            [
                _number(table[a : a + n].tobytes())
                for a, n in zip(self.groups.starts, self.groups.sizes, strict=True)
            ],
            dtype=np.uint64,
        )


def _kind_of(rows: Mapping[str, NDArray[Any]]) -> InputKind:
    """The simplest input that holds every tree."""
    for kind in (LEAF_TABLE, WIN_LOSS_TABLE):
        needed = [name for name in kind.columns if name != "action"]
        if rows.keys() >= set(needed) and not any(np.isnan(rows[name]).any() for name in needed):
            return kind
    return RECORD


def _with_varying(
    folder: Path, kind: InputKind, value: Mapping[str, Floats], like: InputKind | None
) -> InputKind:
    """The kind with the part of the value that differs from tree to tree; InputError where it has no place.

    value : horizon and batch of each row, NaN for a rate.
    """
    differs = {key: len(np.unique(x)) > 1 for key, x in value.items()}
    if kind is LEAF_TABLE:
        if all(differs.values()):
            raise InputError(f"{folder}: horizon and batch", BOTH_VARY)
        if differs["horizon"] or (like is ANY_HORIZON and not differs["batch"]):
            return ANY_HORIZON
        if differs["batch"] or (like is ANY_BATCH and not np.isnan(value["batch"][0])):
            return ANY_BATCH
    for key, x in value.items():
        if differs[key]:
            found = np.unique(x)[:3].tolist()
            raise InputError(f"{folder}: {key}", "must be one for the whole dataset", found)
    return kind


def _records(folder: Path, tree: NDArray[np.int64], horizon: float) -> dict[str, Floats]:
    """The record columns of every row, each tree by its own backup."""
    parts = [backup_of(t, horizon).rows() for _, t in read_trees(folder, check=False)]
    columns = {name: np.concatenate([part[name] for part in parts]) for name in RECORD.columns}
    if len(columns["cost"]) != len(tree):
        raise InputError(str(folder), "must hold one candidate a leaf", len(tree))
    return columns


def _decisions(folder: Path, manifest: Mapping[str, Any], out: Candidates) -> NDArray[np.uint64] | None:
    """Rows' decision numbers, from trees whose `extra` names a `decision`; others are their own."""
    files = [f for entry in manifest["shards"] for f in entry["files"] if f.startswith("trees-")]
    extras = [pq.read_table(folder / f, columns=["extra"]).column("extra") for f in files]
    texts = [text for column in extras for text in column.to_pylist()]
    named = [text is not None and "decision" in json.loads(text) for text in texts]
    if not any(named):
        return None
    keys = out.fingerprints()
    for i, text in enumerate(texts):
        if named[i]:
            keys[i] = _number(text.encode())
    return np.asarray(out.groups.spread(keys))


def _number(data: bytes) -> int:
    return int.from_bytes(hashlib.blake2b(data, digest_size=8).digest(), "little")


@dataclass(frozen=True, eq=False)
class Split:
    """The parts of a dataset; no tree, and no two trees of equal beliefs, stand in two parts."""

    fit: Candidates
    choose: Candidates
    held_out: Candidates


def split_by_tree(candidates: Candidates, seed: int) -> Split:
    """Split by a hash of each tree's key and the seed, in the shares of PARTS.

    A tree keeps its part when others are added to the dataset, and stages of one recorded decision stay
    together: they are nearly the same tree. Raises InputError where a part stays
    empty or holds no value above 0.
    """
    u = _uniform(candidates.keys(), seed)
    edges = np.cumsum(list(PARTS.values()))[:-1]
    part = np.searchsorted(edges, u, side="right")
    out = []
    for i, name in enumerate(PARTS):
        if not np.any(part == i):
            raise InputError("dataset", f"must hold trees enough for the part {name!r}", len(u))
        chosen = candidates.of_trees(part == i)
        if not np.any(chosen.label > 0):
            raise InputError("dataset", f"must hold a value above 0 in the part {name!r}")
        out.append(chosen)
    return Split(*out)


def _uniform(keys: NDArray[np.uint64], seed: int) -> Floats:
    """A number in [0, 1) from each key and the seed: the finaliser of SplitMix64 (Steele et al. 2014)."""
    with np.errstate(over="ignore"):
        z = keys + np.uint64(seed) * np.uint64(0x9E3779B97F4A7C15)
        z = (z ^ (z >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
        z = (z ^ (z >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
        z = z ^ (z >> np.uint64(31))
    return np.asarray((z >> np.uint64(11)).astype(float) / 2.0**53)
