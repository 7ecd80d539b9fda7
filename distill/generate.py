"""Trees in, exact labels out: fills a dataset folder, shard by shard, and resumes where it stopped; floor 5.

The plan (source, seed, what is asked, sampling, shard size, code version) fixes every byte of every shard,
whoever labels it: shard p holds trees p x size to (p + 1) x size - 1. The manifest takes a shard in after
its files are whole, so a run that is killed at any moment resumes to the same bytes, with any number of
workers, here or on a cluster. Only this process writes: workers send bytes back.

Memory: a worker holds one shard, about 40 kB a tree of 27 leaves, so 40 MB for 1,000 trees on top of some
250 MB of libraries and compiled methods, however many trees there are. This process holds the manifest,
24 bytes a recorded tree, and the bytes of shards that are not written yet.
"""

from __future__ import annotations

import contextlib
import dataclasses
import errno
import math
import os
from collections.abc import Iterable, Iterator
from pathlib import Path
from typing import Any, Final

import numpy as np

from distill import schema, shards
from distill.close_calls import BOUNDS, CHANCES
from distill.datasheet import datasheet
from distill.errors import InputError, WorkersError
from distill.files import write_atomic
from distill.labelling import Asked, code_versions, label_shard
from distill.origins import by_text
from distill.sources import Batch, Mix, Plan, Source, Traces, plan_trees, tree_key
from distill.terminal import bar
from distill.tree import Ints
from distill.workers import run_calls

__all__ = ["Asked", "Mix", "Traces", "add", "generate", "held"]

_LEAST_SHARD_TREES: Final = 50
_MOST_SHARD_TREES: Final = 1000
_FULL: Final = (errno.ENOSPC, errno.EDQUOT, errno.EFBIG)


def generate(
    source: Source,
    out: str | os.PathLike[str],
    *,
    trees: int | None = None,
    seed: int = 0,
    asked: Asked | None = None,
    workers: int = 1,
    dask: str | None = None,
    shard_trees: int | None = None,
    close_calls: int = 1,
    progress: bool = False,
) -> dict[str, Any]:
    """Label trees of a family, recorded ones, or a mix, into the dataset folder `out`; returns its manifest.

    trees : how many; traces default to all, and give a seeded sample where fewer are asked for.
    asked : what value; default the rate.
    workers : processes. dask : address of a Dask scheduler, whose workers label instead. The bytes depend
        on neither.
    shard_trees : trees a shard, the step in which work is saved; default a hundredth of all, 50 to 1,000.
    close_calls : trees looked at for each one labelled; above 1, those where more is at stake are labelled
        more often, and weights correct for it.
    progress : show a bar with rate and time left on standard error.

    A folder that holds part of the same plan is completed, a finished one is verified and left alone.
    InputError where it holds another plan, naming what differs; WorkersError where processes or a cluster
    were lost; OSError where the disk is full. After each of them the same call goes on. Trees that no exact
    method prices within the tolerance go to the `aside` files with the reason, and are counted.
    """
    asked = asked or Asked()
    _whole_numbers(trees=trees, workers=workers, shard_trees=shard_trees, close_calls=close_calls)
    if seed < 0:
        raise InputError("seed", "must be a whole number >= 0", seed)
    plan = plan_trees(source, trees, seed, factor=close_calls, remaining=asked.remaining)
    size = shard_trees or _shard_trees(plan.total)
    folder = Path(out)
    with _only_writer(folder), _room():
        manifest = _open(folder, _described(plan, asked, size))
        if plan.family is not None:
            write_atomic(folder / "family.toml", plan.family.text.encode())
        done = {entry["part"] for entry in manifest["shards"]}
        todo = [part for part in range(math.ceil(plan.total / size)) if part not in done]
        batches = plan.batches(todo, size)
        _fill(
            folder, manifest, batches, len(todo), asked, manifest["code"], plan.total, workers, dask, progress
        )
        if not manifest["complete"]:
            _finish(folder, manifest)
    return manifest


def add(
    traces: Traces,
    out: str | os.PathLike[str],
    *,
    workers: int = 1,
    dask: str | None = None,
    progress: bool = False,
) -> dict[str, Any]:
    """Label recorded trees into new shards of a finished dataset, asked what it asks; returns its manifest.

    Trees that the dataset holds already, labelled or aside, are left out and counted; `id`, `extra` and
    `count` make no tree another. Added trees have weight 1. An addition that was stopped goes on when it is
    asked for again, and until then the dataset is unfinished; the code may be another version than that of
    the first shards, and the manifest has both. InputError where the dataset is unfinished, or another
    addition to it is.
    """
    _whole_numbers(workers=workers)
    folder = Path(out)
    with _only_writer(folder, new=False), _room():
        manifest = shards.read_manifest(folder, partial=True)
        _sweep(folder, manifest)
        shards.verify(folder, manifest["shards"])
        added = manifest.setdefault("added", [])
        entry = next((a for a in added if not a["complete"]), None)
        if entry is None:
            if not manifest["complete"]:
                raise InputError(str(folder), "must be finished before trees are added: run generate again")
            first = sum(e["trees"] + e["aside"] for e in manifest["shards"])
            rows = _new_trees(traces, folder, first)
            if len(rows) == 0:
                return manifest
            entry = {
                **_of_addition(traces),
                "trees": len(rows),
                "known": len(traces) - len(rows),
                "first_tree": first,
                "first_part": 1 + max((e["part"] for e in manifest["shards"]), default=-1),
                "shard_trees": _shard_trees(len(rows)),
                "complete": False,
            }
            added.append(entry)
            manifest["complete"] = False
            shards.write_manifest(folder, manifest)
        else:
            _compare(f"{folder / shards.MANIFEST}: added", _of_addition(traces), entry)
            rows = _new_trees(traces, folder, entry["first_tree"])
        size, first_part = entry["shard_trees"], entry["first_part"]
        done = {e["part"] for e in manifest["shards"]}
        todo = [part for part in range(math.ceil(len(rows) / size)) if first_part + part not in done]
        plan = Plan({}, len(rows), None, traces, rows, np.ones(len(rows)), 0, 1, None)
        batches = (
            (first_part + part, dataclasses.replace(batch, first=entry["first_tree"] + batch.first))
            for part, batch in plan.batches(todo, size)
        )
        asked, total = Asked.described(manifest["asked"]), entry["first_tree"] + len(rows)
        _fill(folder, manifest, batches, len(todo), asked, entry["code"], total, workers, dask, progress)
        entry["complete"] = True
        _finish(folder, manifest)
    return manifest


# --- the work --------------------------------------------------------------------------------------


def _fill(
    folder: Path,
    manifest: dict[str, Any],
    batches: Iterable[tuple[int, Batch]],
    count: int,
    asked: Asked,
    code: dict[str, str],
    total: int,
    workers: int,
    dask: str | None,
    progress: bool,
) -> None:
    """Label batches and write their shards, each into the manifest when its files are whole."""
    if count == 0:
        return
    calls = ((label_shard, (part, batch, asked)) for part, batch in batches)
    done = {entry["part"]: entry for entry in manifest["shards"]}
    labelled = sum(e["trees"] + e["aside"] for e in done.values())
    results = run_calls(calls, workers=min(workers, count), dask=dask)
    with (
        contextlib.closing(results),
        bar("labelling", total, "trees", done=labelled, shown=progress) as advance,
    ):
        for shard in results:
            _compare("worker", code, shard.code)
            for name, data in shard.files.items():
                write_atomic(folder / name, data)
            done[shard.entry["part"]] = shard.entry
            manifest["shards"] = [done[part] for part in sorted(done)]
            shards.write_manifest(folder, manifest)
            advance(shard.entry["trees"] + shard.entry["aside"])


def _finish(folder: Path, manifest: dict[str, Any]) -> None:
    manifest["totals"] = {
        key: sum(e[key] for e in manifest["shards"]) for key in ("trees", "candidates", "aside")
    }
    manifest["complete"] = True
    page = datasheet(manifest, shards.described_columns())
    write_atomic(folder / "README.md", page.encode())
    shards.write_manifest(folder, manifest)


@contextlib.contextmanager
def _room() -> Iterator[None]:
    """A full disk and lost workers say that the work can go on."""
    kept = "finished shards are kept, and the same command goes on from there"
    try:
        yield
    except WorkersError as e:
        raise WorkersError(f"{e}; {kept}") from None
    except OSError as e:
        if e.errno not in _FULL:
            raise
        raise OSError(e.errno, f"{e.strerror}: {kept} once there is room", e.filename) from None


@contextlib.contextmanager
def _only_writer(folder: Path, *, new: bool = True) -> Iterator[None]:
    """Hold the folder, so that a second run cannot write into it; the system lets go of a killed one's."""
    if new:
        folder.mkdir(parents=True, exist_ok=True)
    elif not (folder / shards.MANIFEST).is_file():
        raise InputError(str(folder), "must be a dataset to add trees to; it holds no manifest.json")
    try:
        import fcntl
    except ImportError:  # not on this system
        yield
        return
    handle = os.open(folder, os.O_RDONLY)
    try:
        try:
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            raise InputError(str(folder), "must not be written by another run at the same time") from None
        except OSError:  # a file system without locks
            pass
        yield
    finally:
        os.close(handle)


# --- the plan and what is already there ------------------------------------------------------------


def _whole_numbers(**values: int | None) -> None:
    for name, value in values.items():
        if value is not None and value < 1:
            raise InputError(name, "must be a whole number from 1", value)


def _shard_trees(total: int) -> int:
    return min(max(total // 100, _LEAST_SHARD_TREES), _MOST_SHARD_TREES)


def _described(plan: Plan, asked: Asked, size: int) -> dict[str, Any]:
    sampling: dict[str, Any] = {"close_calls": plan.factor}
    if plan.factor > 1:
        sampling |= {"bounds": list(BOUNDS), "chances": list(CHANCES)}
    return {
        "format": schema.DATASET_FORMAT,
        "source": plan.about,
        "seed": plan.seed,
        "asked": asked.describe(),
        "trees": plan.total,
        "sampling": sampling,
        "shard_trees": size,
        "code": code_versions(),
    }


def _of_addition(traces: Traces) -> dict[str, Any]:
    return {"name": traces.name, "sha256": traces.sha256, "code": code_versions()}


def held(folder: str | os.PathLike[str], below: float = math.inf) -> set[int]:
    """`sources.tree_key` of each tree of a dataset numbered below `below`, labelled or aside."""
    return {
        tree_key(tree)
        for aside in (False, True)
        for number, tree in shards.read_trees(Path(folder), aside=aside, check=False, partial=True)
        if number < below
    }


def _new_trees(traces: Traces, folder: Path, first: int) -> Ints:
    """Which recorded trees are not among the dataset's trees numbered below `first`, nor earlier here."""
    known = held(folder, first)
    rows = []
    for i, key in enumerate(traces.keys.tolist()):
        if key not in known:
            known.add(key)
            rows.append(i)
    return np.array(rows, dtype=np.int64)


def _compare(place: str, wanted: dict[str, Any], found: dict[str, Any]) -> None:
    """InputError naming the first key of `wanted` that differs in `found`."""
    for key, value in wanted.items():
        other = found.get(key)
        if other == value:
            continue
        if isinstance(value, dict) and isinstance(other, dict):
            key, other, value = next(
                (f"{key}.{k}", other.get(k), value.get(k))
                for k in dict.fromkeys([*value, *other])
                if other.get(k) != value.get(k)
            )
        if place == "worker":
            raise InputError(f"{place}: {key}", f"must be {value!r} as here", other)
        rule = f"must be {other!r}, as it began, to go on; choose another folder for another dataset"
        raise InputError(f"{place}: {key}", rule, value)


def _sweep(folder: Path, manifest: dict[str, Any]) -> None:
    """Remove what a killed run left: half-written files, and whole ones that the manifest does not list."""
    listed = {name for entry in manifest["shards"] for name in entry["files"]}
    for left in [*folder.glob(".*.part"), *shards.shard_files(folder)]:
        if left.name not in listed:
            left.unlink(missing_ok=True)


def _open(folder: Path, plan: dict[str, Any]) -> dict[str, Any]:
    """The manifest to go on from: a new one, or that of the same plan with its files verified."""
    if (folder / shards.MANIFEST).exists():
        manifest = shards.read_manifest(folder, partial=True)
        wanted, found = ({**x, "source": by_text(x.get("source"))} for x in (plan, manifest))
        _compare(str(folder / shards.MANIFEST), wanted, found)
        if any(not a["complete"] for a in manifest.get("added", ())):
            raise InputError(str(folder), "must have its addition finished first: run generate --add again")
        _sweep(folder, manifest)
        shards.verify(folder, manifest["shards"])
        return manifest
    for left in folder.glob(".*.part"):  # a writer's that was killed at its first file
        left.unlink(missing_ok=True)
    foreign = min((x.name for x in folder.iterdir()), default=None)
    if foreign is not None:
        raise InputError(str(folder), "must be empty or hold a manifest.json beside its shards", foreign)
    manifest = {**plan, "complete": False, "totals": {}, "added": [], "shards": []}
    shards.write_manifest(folder, manifest)
    return manifest
