"""Trees in, exact labels out: fills a dataset folder, shard by shard, and resumes where it stopped; floor 5.

The plan (source, seed, what is asked, shard size, code version) fixes every byte of every shard, whoever
writes it: shard p holds trees p x size to (p + 1) x size - 1. The manifest takes a shard in after its
files are whole, so a run that is killed at any moment resumes to the same bytes, with any number of
workers.
"""

from __future__ import annotations

import dataclasses
import functools
import hashlib
import importlib.metadata
import json
import math
import os
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final, Protocol

import numpy as np
from joblib import Parallel, delayed

from distill import schema, shards, traces, voc
from distill.datasheet import datasheet
from distill.errors import InputError, RefusedError, ToleranceError
from distill.family import Family, draw
from distill.files import write_atomic
from distill.query import Priced, Query, resolve
from distill.record import to_record
from distill.shards import Labelled
from distill.terminal import bar
from distill.tree import BeliefTree

__all__ = ["Asked", "Traces", "generate"]

_MOST_SHARD_TREES: Final = 1000


@dataclass(frozen=True)
class Asked:
    """What is asked of every tree; None takes the tree's own scalar.

    By default the rate, at the tree's own horizon (dynamic where it has none) and `remaining`.
    horizon : h; 0 static, inf dynamic. batch : rollouts a candidate, instead of the rate.
    remaining : rollouts left. tolerance : largest error, as a share of the tree's scale.
    """

    horizon: float | None = None
    batch: int | None = None
    remaining: int | None = None
    tolerance: float | None = None

    def query(self, tree: BeliefTree) -> Query:
        """The query for one tree."""
        return resolve(
            tree,
            horizon=self.horizon,
            batch=self.batch,
            rate=self.batch is None,
            remaining=self.remaining,
            tolerance=self.tolerance,
        )

    def describe(self) -> dict[str, Any]:
        """As the manifest keeps it."""
        h = self.horizon
        return {
            "value": "the tree's" if h is None else "inf" if math.isinf(h) else h,
            "batch": "rate" if self.batch is None else self.batch,
            "remaining": "the tree's" if self.remaining is None else self.remaining,
            "tolerance": self.tolerance,
        }


class Traces:
    """Recorded trees as a source of labels.

    name : what they are called in the manifest. trees : the trees, in order.
    """

    def __init__(self, name: str, trees: Iterable[BeliefTree]) -> None:
        self.name = name
        self.trees = list(trees)
        digest = hashlib.sha256()
        for tree in self.trees:
            digest.update(json.dumps(to_record(tree), separators=(",", ":")).encode() + b"\n")
        self.sha256 = digest.hexdigest()

    @classmethod
    def read(
        cls,
        paths: Sequence[str | os.PathLike[str]],
        *,
        on_error: Callable[[InputError], None] | None = None,
    ) -> Traces:
        """Traces from files, one after the other; errors as in `distill.traces.read_trees`."""
        found = [tree for path in paths for _, tree in traces.read_trees(path, on_error=on_error)]
        return cls(", ".join(Path(p).name for p in paths), found)


def generate(
    source: Family | Traces,
    out: str | os.PathLike[str],
    *,
    trees: int | None = None,
    seed: int = 0,
    asked: Asked | None = None,
    workers: int = 1,
    shard_trees: int | None = None,
    progress: bool = False,
) -> dict[str, Any]:
    """Label `trees` trees of a family, or recorded ones, into the dataset folder `out`; returns its manifest.

    trees : how many; traces default to all, and give a seeded sample where fewer are asked for.
    asked : what value; default the rate.
    workers : processes. The bytes do not depend on it.
    shard_trees : trees a shard, the step in which work is saved; default a twentieth of all, 50 to 1,000.
    progress : show a bar with rate and time left on standard error.

    A folder that holds part of the same plan is completed, a finished one is verified and left alone.
    InputError where it holds another plan, naming what differs. Trees that no exact method prices within
    the tolerance go to the `aside` files with the reason, and are counted.
    """
    asked = asked or Asked()
    for name, value in (("trees", trees), ("workers", workers), ("shard_trees", shard_trees)):
        if value is not None and value < 1:
            raise InputError(name, "must be a whole number from 1", value)
    if seed < 0:
        raise InputError("seed", "must be a whole number >= 0", seed)
    job: _Job
    if isinstance(source, Family):
        if trees is None:
            raise InputError("trees", "must be given for a family")
        job = _FamilyJob(source, seed, trees)
    else:
        job = _TraceJob(source, seed, trees)
    if shard_trees is None:
        shard_trees = min(max(job.total // 20, 50), _MOST_SHARD_TREES)
    folder = Path(out)
    manifest = _open(folder, _plan(source, job.total, seed, asked, shard_trees))
    if isinstance(source, Family):
        write_atomic(folder / "family.toml", source.text.encode())
    done = {entry["part"]: entry for entry in manifest["shards"]}
    todo = [p for p in range(math.ceil(job.total / shard_trees)) if p not in done]
    calls = (
        delayed(_label_shard)(folder, part, first, job.slice(first, last), asked)
        for part in todo
        for first, last in [(part * shard_trees, min((part + 1) * shard_trees, job.total))]
    )
    pool = Parallel(
        n_jobs=min(workers, max(len(todo), 1)), return_as="generator_unordered", pre_dispatch="2*n_jobs"
    )
    labelled = sum(e["trees"] + e["aside"] for e in done.values())
    with bar("labelling", job.total, "trees", done=labelled, shown=progress) as advance:
        for entry in pool(calls):
            done[entry["part"]] = entry
            manifest["shards"] = [done[p] for p in sorted(done)]
            shards.write_manifest(folder, manifest)
            advance(entry["trees"] + entry["aside"])
    if not manifest["complete"]:
        manifest["totals"] = {
            key: sum(e[key] for e in manifest["shards"]) for key in ("trees", "candidates", "aside")
        }
        manifest["complete"] = True
        page = datasheet(manifest, shards.described_columns())
        write_atomic(folder / "README.md", page.encode())
        shards.write_manifest(folder, manifest)
    return manifest


def _label_shard(
    folder: Path, part: int, first: int, trees: Callable[[], Iterable[BeliefTree]], asked: Asked
) -> dict[str, Any]:
    drawn = list(trees())
    queries = []
    for number, tree in enumerate(drawn, first):
        try:
            queries.append(asked.query(tree))
        except InputError as e:
            raise e.at(f"tree {number}") from None
    # Trees that are asked the same go to the engine together, which has faster ways for some of them.
    alike: dict[Query, list[int]] = {}
    for i, query in enumerate(queries):
        alike.setdefault(query if query.rate else dataclasses.replace(query, remaining=None), []).append(i)
    rows: dict[int, Labelled] = {}
    for query, group in alike.items():
        answers = _price([drawn[i] for i in group], query)
        for i, (priced, reason) in zip(group, answers, strict=True):
            rows[i] = Labelled(first + i, drawn[i], queries[i], priced, reason)
    return shards.write_shard(folder, part, [rows[i] for i in range(len(drawn))])


def _price(trees: list[BeliefTree], query: Query) -> list[tuple[Priced | None, str]]:
    """Labels, and for each tree the reason to keep it aside, empty where there is none."""
    try:
        return [(priced, "") for priced in voc.price_many(trees, query)]
    except RefusedError as e:
        if len(trees) > 1:
            return [answer for tree in trees for answer in _price([tree], query)]
        if isinstance(e, ToleranceError):
            return [(voc.price(trees[0], dataclasses.replace(query, tolerance=None)), f"tolerance: {e}")]
        return [(None, f"refused: {e}")]


# --- where trees come from -------------------------------------------------------------------------


class _Job(Protocol):
    total: int

    def slice(self, first: int, last: int) -> Callable[[], Iterable[BeliefTree]]:
        """What a worker needs to have trees first .. last - 1."""


@dataclass
class _FamilyJob:
    family: Family
    seed: int
    total: int

    def slice(self, first: int, last: int) -> Callable[[], Iterable[BeliefTree]]:
        return _Draws(self.family, self.seed, first, last)


@dataclass
class _Draws:
    family: Family
    seed: int
    first: int
    last: int

    def __call__(self) -> Iterator[BeliefTree]:
        return (draw(self.family, self.seed, i) for i in range(self.first, self.last))


class _TraceJob:
    def __init__(self, source: Traces, seed: int, trees: int | None) -> None:
        n = len(source.trees)
        if trees is not None and trees > n:
            raise InputError("trees", f"must be at most {n}, the number of recorded trees", trees)
        self._trees = source.trees
        if trees is not None and trees < n:
            picked = np.random.default_rng([seed, 0x7ACE]).choice(n, trees, replace=False)
            self._trees = [source.trees[i] for i in np.sort(picked)]
        self.total = len(self._trees)

    def slice(self, first: int, last: int) -> Callable[[], Iterable[BeliefTree]]:
        return _Given(self._trees[first:last])


@dataclass
class _Given:
    trees: list[BeliefTree]

    def __call__(self) -> Iterator[BeliefTree]:
        return iter(self.trees)


# --- the plan and what is already there ------------------------------------------------------------


def _plan(source: Family | Traces, total: int, seed: int, asked: Asked, shard_trees: int) -> dict[str, Any]:
    kind = "family" if isinstance(source, Family) else "traces"
    return {
        "format": schema.DATASET_FORMAT,
        "source": {"kind": kind, "name": source.name, "sha256": source.sha256},
        "seed": seed,
        "asked": asked.describe(),
        "trees": total,
        "shard_trees": shard_trees,
        "code": _code(),
    }


@functools.cache
def _code() -> dict[str, str]:
    """Versions that can change a byte: of the sources that draw and label, and of the libraries."""
    here = Path(__file__).parent
    digest = hashlib.sha256()
    for path in sorted(here.rglob("*.py")):
        name = path.relative_to(here).as_posix()
        if name.split("/")[0].removesuffix(".py") in _LABELLING:
            digest.update(name.encode() + b"\0" + path.read_bytes())
    libraries = {name: importlib.metadata.version(name) for name in ("numpy", "numba", "scipy", "pyarrow")}
    return {
        "voc-distill": importlib.metadata.version("voc-distill"),
        "sources": digest.hexdigest(),
        **libraries,
    }


_LABELLING: Final = (
    "allocation", "allocation_rules", "beliefs", "beta_numerics", "exact", "family", "family_file",
    "generate", "numerics", "query", "record", "schema", "shards", "tree", "voc",
)  # fmt: skip


def _open(folder: Path, plan: dict[str, Any]) -> dict[str, Any]:
    """The manifest to go on from: a new one, or that of the same plan with its files verified."""
    folder.mkdir(parents=True, exist_ok=True)
    for left in folder.glob(".*.part"):  # a killed writer's
        left.unlink(missing_ok=True)
    if (folder / shards.MANIFEST).exists():
        manifest = shards.read_manifest(folder, partial=True)
        for key, value in plan.items():
            found = manifest.get(key)
            if found != value:
                if isinstance(value, dict) and isinstance(found, dict):
                    key, found, value = next(
                        (f"{key}.{k}", found.get(k), v) for k, v in value.items() if found.get(k) != v
                    )
                raise InputError(
                    f"{folder / shards.MANIFEST}: {key}",
                    f"must be {value!r} to go on; choose another folder for another dataset",
                    found,
                )
        shards.verify(folder, manifest["shards"])
        return manifest
    if any(folder.glob("*.parquet")):
        raise InputError(str(folder), "must be empty or hold a manifest.json beside its shards")
    manifest = {**plan, "complete": False, "totals": {}, "shards": []}
    shards.write_manifest(folder, manifest)
    return manifest
