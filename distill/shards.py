"""Labelled trees on disk: Parquet shards and their manifest; floor 4.

A dataset is a folder:
    manifest.json               what was asked of what, shard list with row counts and SHA-256
    trees-NNNNN.parquet         one row a tree: the full record, with list columns
    candidates-NNNNN.parquet    one row a candidate: the leaf's columns, its label and error bound
    aside-NNNNN.parquet         trees without a label good enough, with the reason; where there are any
Every file is written in one step and named by the manifest only after that. Any Parquet reader opens
them; meaning and unit of each column are in the Parquet metadata.
"""

from __future__ import annotations

import hashlib
import json
import math
import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from numpy.typing import NDArray

from distill import schema
from distill.dataset_columns import (
    ASIDE_LABELS,
    CANDIDATE_COLUMNS,
    FLOATS,
    LEAF_COLUMNS,
    TREE_COLUMNS,
    TREE_LABELS,
    Described,
    described_columns,
    described_schema,
)
from distill.errors import InputError, RefusedError
from distill.files import read_json, sha256_of, write_atomic
from distill.query import Priced, Query
from distill.tree import BeliefTree, LeafTable, leaf_table

__all__ = [
    "Labelled",
    "described_columns",
    "encode_shard",
    "read_candidates",
    "read_manifest",
    "read_trees",
    "shard_files",
    "verify",
    "write_manifest",
    "write_shard",
]

MANIFEST: Final = "manifest.json"
_SHARD_FILE: Final = re.compile(r"(trees|candidates|aside)-\d{5,}\.parquet")


@dataclass(frozen=True, eq=False)
class Labelled:
    """One tree of a dataset with its exact labels.

    A tree with a `reason` is kept aside: `priced` then misses the tolerance, or is None. weight : how many
    of the source's trees it stands for. source, draw : where it comes from, and its number there.
    """

    number: int
    tree: BeliefTree
    query: Query
    priced: Priced | None
    reason: str = ""
    weight: float = 1.0
    source: str | None = None
    draw: int | None = None


# --- writing ---------------------------------------------------------------------------------------


def encode_shard(part: int, rows: Sequence[Labelled]) -> tuple[dict[str, Any], dict[str, bytes]]:
    """One shard's manifest entry (row counts, and SHA-256 by file name), and its files' bytes.

    The same rows give the same bytes. Rows with a reason go to the `aside` file.
    """
    good = [r for r in rows if not r.reason]
    aside = [r for r in rows if r.reason]
    tables = {"trees": _trees_table(good), "candidates": _candidates_table(good)}
    if aside:
        tables["aside"] = _trees_table(aside)
    files = {}
    for kind, table in tables.items():
        sink = pa.BufferOutputStream()
        pq.write_table(table, sink, compression="zstd", row_group_size=1 << 17)
        files[f"{kind}-{part:05d}.parquet"] = sink.getvalue().to_pybytes()
    entry = {
        "part": part,
        "trees": len(good),
        "candidates": tables["candidates"].num_rows,
        "aside": len(aside),
        "files": {name: hashlib.sha256(data).hexdigest() for name, data in files.items()},
    }
    return entry, files


def write_shard(folder: Path, part: int, rows: Sequence[Labelled]) -> dict[str, Any]:
    """Write one shard's files; returns its manifest entry."""
    entry, files = encode_shard(part, rows)
    for name, data in files.items():
        write_atomic(folder / name, data)
    return entry


def shard_files(folder: Path) -> Iterator[Path]:
    """Every file in the folder that is named as a shard's, listed or not."""
    return (path for path in folder.iterdir() if _SHARD_FILE.fullmatch(path.name))


def _trees_table(rows: Sequence[Labelled]) -> pa.Table:
    trees = [r.tree for r in rows]
    columns: dict[str, Any] = {
        "tree": [r.number for r in rows],
        **{name: [getattr(r, name) for r in rows] for name in ("weight", "source", "draw")},
    }
    for name in ("parent", "kind", "reward", "discount", "prob", *LEAF_COLUMNS, "cov"):
        columns[name] = _list_column([getattr(t, name) for t in trees], TREE_COLUMNS[name][0])
    for name in ("horizon", "batch", "remaining"):
        columns[name] = [getattr(t, name) for t in trees]
    for name in ("id", "extra"):
        values = (getattr(t, name) for t in trees)
        columns[name] = [None if v is None else json.dumps(v, sort_keys=False) for v in values]
    described = dict(TREE_COLUMNS)
    priced = [r.priced for r in rows]
    if rows and rows[0].reason:
        columns["reason"] = [r.reason for r in rows]
        columns["label"] = _list_column([None if p is None else p.voc for p in priced], FLOATS)
        columns["error"] = _list_column([None if p is None else p.error for p in priced], FLOATS)
        described |= ASIDE_LABELS
    else:
        columns["value"] = _list_column([None if p is None else p.value for p in priced], FLOATS)
        columns["method"] = [None if p is None else p.method for p in priced]
        described |= TREE_LABELS
    return _table(columns, described)


def _candidates_table(rows: Sequence[Labelled]) -> pa.Table:
    runs: dict[str, list[Any]] = {name: [] for name in CANDIDATE_COLUMNS}
    for r in rows:
        assert r.priced is not None
        table = _flat(r.tree)
        columns: dict[str, Any] = {
            "tree": r.number,
            "weight": r.weight,
            "leaf": np.arange(r.tree.n_leaves),
            "action": _actions(r.tree) if table is None else table.action,
            "gain": None if table is None else table.gain,
            "offset": None if table is None else table.offset,
            **{name: getattr(r.tree, name) for name in LEAF_COLUMNS},
            "remaining": r.query.remaining,
            "horizon": r.query.horizon,
            "batch": r.query.batch,
            "label": r.priced.voc,
            "label_batch": r.priced.batch,
            "error": r.priced.error,
        }
        if r.tree.cov is not None:
            columns["var"] = np.diag(r.tree.cov)
        for name, value in columns.items():
            runs[name].append(value)
    sizes = np.array([r.tree.n_leaves for r in rows], dtype=np.int64)
    arrays = {name: _column(values, sizes, CANDIDATE_COLUMNS[name][0]) for name, values in runs.items()}
    return _table(arrays, CANDIDATE_COLUMNS)


def _flat(tree: BeliefTree) -> LeafTable | None:
    try:
        return leaf_table(tree)
    except RefusedError:
        return None


def _actions(tree: BeliefTree) -> NDArray[np.int64]:
    action = np.full(tree.n_nodes, -1)
    action[tree.action_nodes] = np.arange(len(tree.action_nodes))
    for c, p in enumerate(tree.parent.tolist()):
        if p > 0:
            action[c] = action[p]
    return action[tree.leaf_nodes]


def _column(runs: list[Any], sizes: NDArray[np.int64], kind: pa.DataType) -> pa.Array:
    """One column of all trees: an array a tree, or one number for all its leaves, or null."""
    if all(run is None for run in runs):
        return pa.nulls(int(sizes.sum()), kind)
    dtype = kind.to_pandas_dtype()
    filled = [np.zeros(1, dtype) if run is None else np.atleast_1d(np.asarray(run, dtype)) for run in runs]
    spread = [x if len(x) == n else np.broadcast_to(x, n) for x, n in zip(filled, sizes, strict=True)]
    mask = np.repeat([run is None for run in runs], sizes)
    return pa.array(np.concatenate(spread), kind, mask=mask if mask.any() else None)


def _list_column(arrays: Sequence[Any], kind: pa.DataType) -> pa.Array:
    lengths = [0 if a is None else a.size for a in arrays]
    offsets = np.concatenate([[0], np.cumsum(lengths)]).astype(np.int32)
    given = [a.ravel() for a in arrays if a is not None]
    values = pa.array(np.concatenate(given) if given else [], kind.value_type)
    mask = pa.array([a is None for a in arrays], pa.bool_())
    return pa.ListArray.from_arrays(pa.array(offsets), values, type=kind, mask=mask)


def _table(columns: dict[str, Any], described: Described) -> pa.Table:
    told = described_schema(described, {"format": schema.DATASET_FORMAT})
    return pa.table({name: columns[name] for name in described}, told)


# --- the manifest ----------------------------------------------------------------------------------


def write_manifest(folder: Path, manifest: dict[str, Any]) -> None:
    """Write the manifest in one step."""
    write_atomic(folder / MANIFEST, (json.dumps(manifest, indent=1, allow_nan=False) + "\n").encode())


def read_manifest(folder: str | Path, *, partial: bool = False) -> dict[str, Any]:
    """The manifest of a dataset; InputError where it is missing, broken, or of an unfinished run.

    partial : accept a run that was stopped before its end.
    """
    path = Path(folder) / MANIFEST
    try:
        manifest = read_json(path)
    except OSError as e:
        raise InputError(str(path), f"must be a readable file ({e.strerror})") from None
    if not isinstance(manifest, dict) or manifest.get("format") != schema.DATASET_FORMAT:
        found = manifest.get("format") if isinstance(manifest, dict) else manifest
        raise InputError(f"{path}: format", f"must be {schema.DATASET_FORMAT!r}", found)
    entries = manifest.get("shards")
    whole = isinstance(entries, list) and all(
        isinstance(e, dict)
        and isinstance(e.get("files"), dict)
        and all(type(e.get(key)) is int for key in ("part", "trees", "candidates", "aside"))
        and all(Path(name).name == name and isinstance(sha, str) for name, sha in e["files"].items())
        for e in entries
    )
    if not whole:
        raise InputError(f"{path}: shards", "must list part, trees, candidates, aside and files of each")
    if not partial and not manifest.get("complete"):
        raise InputError(
            str(path), f"must be complete; {len(manifest['shards'])} shards are there: run generate again"
        )
    return manifest


def verify(folder: str | Path, entries: Sequence[dict[str, Any]]) -> None:
    """Compare the files of shard entries with their SHA-256; InputError names the first that differs."""
    for entry in entries:
        for name, expected in entry["files"].items():
            path = Path(folder) / name
            if not path.is_file():
                raise InputError(str(path), "is missing; the manifest lists it")
            found = sha256_of(path)
            if found != expected:
                raise InputError(
                    str(path), f"must have the manifest's SHA-256 {expected[:16]}...", found[:16]
                )


# --- reading ---------------------------------------------------------------------------------------


def read_candidates(
    folder: str | Path, *, columns: Sequence[str] | None = None, check: bool = True
) -> dict[str, NDArray[Any]]:
    """All candidates of a dataset, one NumPy array a column, ordered by tree and leaf.

    columns : which ones; default all that are not null throughout. A null in a column of numbers
        becomes NaN, and the column float64.
    check : compare every file with its hash first.
    Peak memory is about the arrays returned plus one shard.
    """
    manifest = read_manifest(folder)
    if check:
        verify(folder, manifest["shards"])
    names = list(columns) if columns is not None else list(CANDIDATE_COLUMNS)
    for name in names:
        if name not in CANDIDATE_COLUMNS:
            raise InputError("columns", f"must be among {', '.join(CANDIDATE_COLUMNS)}", name)
    total = sum(e["candidates"] for e in manifest["shards"])
    out: dict[str, NDArray[Any]] = {}
    given = dict.fromkeys(names, 0)
    at = 0
    for path in _paths(folder, manifest, "candidates"):
        table = _read(path, names, CANDIDATE_COLUMNS)
        for name in names:
            column = table.column(name)
            dtype = column.type.to_pandas_dtype()
            if column.null_count and name not in out:
                dtype = np.float64
            if name not in out:
                out[name] = np.empty(total, dtype)
            elif column.null_count and out[name].dtype != np.float64:
                out[name] = out[name].astype(np.float64)
            out[name][at : at + table.num_rows] = column.to_numpy()
            given[name] += table.num_rows - column.null_count
        at += table.num_rows
    if columns is None:
        out = {name: array for name, array in out.items() if given[name] or not total}
    return out


def read_trees(
    folder: str | Path, *, aside: bool = False, check: bool = True, partial: bool = False
) -> Iterator[tuple[int, BeliefTree]]:
    """Yields (number, tree) in order; bit for bit the trees that were labelled.

    aside : the trees that were kept aside instead. check : compare every file with its hash first.
    partial : accept a run that was stopped before its end.
    """
    manifest = read_manifest(folder, partial=partial)
    if check:
        verify(folder, manifest["shards"])
    for path in _paths(folder, manifest, "aside" if aside else "trees"):
        for row in _read(path, list(TREE_COLUMNS), TREE_COLUMNS).to_pylist():
            yield row["tree"], _tree_of(row)


def _read(path: Path, names: list[str], described: Described) -> pa.Table:
    """Columns of a file; one that a dataset of before the column's time lacks is null."""
    with pq.ParquetFile(path) as file:
        there = set(file.schema_arrow.names)
        table = file.read([name for name in names if name in there])
    for name in names:
        if name not in there:
            table = table.append_column(name, pa.nulls(table.num_rows, described[name][0]))
    return table


def _paths(folder: str | Path, manifest: dict[str, Any], kind: str) -> Iterator[Path]:
    for entry in manifest["shards"]:
        for name in entry["files"]:
            if name.startswith(kind + "-"):
                yield Path(folder) / name


def _tree_of(row: dict[str, Any]) -> BeliefTree:
    leaf: dict[str, Any] = {
        name: None if row[name] is None else np.array(row[name], dtype=float)
        for name in (*LEAF_COLUMNS, "cov")
    }
    if leaf["cov"] is not None:
        leaf["cov"] = leaf["cov"].reshape(math.isqrt(len(leaf["cov"])), -1)
    return BeliefTree(
        parent=np.array(row["parent"], dtype=np.int64),
        kind=np.array(row["kind"], dtype=np.int8),
        reward=np.array(row["reward"], dtype=float),
        discount=np.array(row["discount"], dtype=float),
        prob=np.array(row["prob"], dtype=float),
        horizon=row["horizon"],
        batch=row["batch"],
        remaining=row["remaining"],
        id=None if row["id"] is None else json.loads(row["id"]),
        extra=None if row["extra"] is None else json.loads(row["extra"]),
        **leaf,
    )
