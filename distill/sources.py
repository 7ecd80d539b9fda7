"""Where the trees of a dataset come from: a family, recorded trees, or a mix; floor 5.

A plan fixes every tree of a dataset by its number, so that any worker can have any batch of them, in any
order, and a run that was stopped goes on with the same trees.
"""

from __future__ import annotations

import hashlib
import json
import os
from array import array
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from distill import close_calls, traces
from distill.errors import InputError
from distill.family import Family, draw
from distill.record import to_record
from distill.tree import BeliefTree, Floats, Ints

__all__ = ["Batch", "Drawn", "Mix", "Plan", "Source", "Traces", "plan_trees", "tree_key"]

_SAMPLE: Final = 0x7ACE  # keep draws of different kinds apart under one seed
_CLOSE: Final = 0xC105E
_CHUNK: Final = 1000
_KEY_COLUMNS: Final = (
    "parent", "kind", "reward", "discount", "prob", "mean", "var", "noise_var",
    "alpha", "beta", "low", "high", "cost", "cov",
)  # fmt: skip


class Traces:
    """Recorded trees as a source.

    name : what they are called in the manifest. trees : the trees, in order, held in memory; `read` holds
    8 bytes a tree instead.
    """

    def __init__(self, name: str, trees: Iterable[BeliefTree]) -> None:
        kept = list(trees)
        self._scan(name, lambda: iter(kept))

    @classmethod
    def read(
        cls,
        paths: Sequence[str | os.PathLike[str]],
        *,
        on_error: Callable[[InputError], None] | None = None,
    ) -> Traces:
        """Traces from files, one after the other; errors as in `distill.traces.read_trees`.

        The files are read again when their trees are needed, and must not change until then. Standard
        input is kept in memory.
        """
        name = ", ".join(Path(p).name for p in paths)

        def stream(told: Callable[[InputError], None] | None) -> Iterator[BeliefTree]:
            return (tree for path in paths for _, tree in traces.read_trees(path, on_error=told))

        if any(str(path) == "-" for path in paths):
            return cls(name, stream(on_error))
        out = cls.__new__(cls)
        out._scan(name, lambda: stream(None if on_error is None else lambda _: None), stream(on_error))
        return out

    def _scan(
        self, name: str, reopen: Callable[[], Iterator[BeliefTree]], first: Iterable[BeliefTree] | None = None
    ) -> None:
        self.name = name
        self._reopen = reopen
        digest, keys = hashlib.sha256(), array("Q")
        for tree in reopen() if first is None else first:
            digest.update(json.dumps(to_record(tree), separators=(",", ":")).encode() + b"\n")
            keys.append(tree_key(tree))
        self.sha256 = digest.hexdigest()
        self.keys: NDArray[np.uint64] = np.array(keys, dtype=np.uint64)

    def __len__(self) -> int:
        return len(self.keys)

    def __iter__(self) -> Iterator[BeliefTree]:
        return self._reopen()

    @property
    def trees(self) -> list[BeliefTree]:
        """All of them, in memory."""
        return list(self)

    def pick(self, rows: Ints) -> Iterator[tuple[int, BeliefTree]]:
        """(number, tree) of the given numbers, which ascend; one pass over the source."""
        wanted = iter(rows.tolist())
        want = next(wanted, None)
        for i, tree in enumerate(self) if want is not None else ():
            if i == want:
                if tree_key(tree) != self.keys[i]:
                    break
                yield i, tree
                want = next(wanted, None)
                if want is None:
                    return
        if want is not None:
            raise InputError(self.name, f"must not change while it is read; tree {want} is another now")


@dataclass(frozen=True)
class Mix:
    """Recorded trees among trees of a family, spread evenly.

    share : of the dataset's trees, how many are recorded, between 0 and 1. None takes every recorded tree
    once, and the rest from the family.
    """

    family: Family
    traces: Traces
    share: float | None = None

    @property
    def name(self) -> str:
        """What it is called in the manifest."""
        return f"{self.family.name} with {self.traces.name}"

    def recorded(self, trees: int | None) -> tuple[int, int]:
        """Recorded trees and all trees, of the number asked for."""
        have, share = len(self.traces), self.share
        if share is not None and not 0 < share < 1:
            raise InputError("share", "must be above 0 and below 1", share)
        if trees is None:
            if share is None:
                raise InputError("trees", "must be given for a family, or the share of recorded trees")
            return have, max(round(have / share), have)
        wanted = have if share is None else round(trees * share)
        if wanted > have:
            raise InputError("share", f"must take at most the {have} recorded trees there are", wanted)
        if wanted > trees:
            raise InputError("trees", f"must be at least {wanted}, the number of recorded trees", trees)
        return wanted, trees


Source = Family | Traces | Mix


@dataclass(frozen=True, eq=False)
class Drawn:
    """A tree of a dataset, its weight, and where it comes from: number `draw` of `source`."""

    tree: BeliefTree
    weight: float
    source: str
    draw: int


@dataclass(eq=False)
class Batch:
    """What a worker needs to have the trees of one shard; `trees()` has them in order.

    first : number of the first tree. is_recorded : one mark a tree. recorded : those trees. family, seed,
    start : where the other trees come from, and the first one's number there, before close calls.
    """

    first: int
    is_recorded: list[bool]
    recorded: list[Drawn] = field(default_factory=list)
    family: Family | None = None
    seed: int = 0
    start: int = 0
    factor: int = 1
    remaining: int | None = None

    def trees(self) -> list[Drawn]:
        """The trees, drawn now where they come from a family."""
        recorded, drawn = iter(self.recorded), iter(self._drawn())
        return [next(recorded if mark else drawn) for mark in self.is_recorded]

    def _drawn(self) -> list[Drawn]:
        n = len(self.is_recorded) - len(self.recorded)
        if self.family is None or n == 0:
            return []
        numbers = range(self.start * self.factor, (self.start + n) * self.factor)
        pool = [draw(self.family, self.seed, i) for i in numbers]
        rows, weight = np.arange(n), np.ones(n)
        if self.factor > 1:
            rng = np.random.default_rng([self.seed, _CLOSE, self.start])
            rows, weight = close_calls.choose(close_calls.at_stake(pool, self.remaining), n, rng)
        name = self.family.name
        pairs = zip(rows.tolist(), weight.tolist(), strict=True)
        return [Drawn(pool[i], w, name, numbers[i]) for i, w in pairs]


@dataclass(eq=False)
class Plan:
    """Which trees a dataset holds: `total`, of them `rows` of the traces with `weights`, spread evenly."""

    about: dict[str, Any]
    total: int
    family: Family | None
    traces: Traces | None
    rows: Ints
    weights: Floats
    seed: int
    factor: int
    remaining: int | None

    def batches(self, parts: Iterable[int], size: int) -> Iterator[tuple[int, Batch]]:
        """(part, batch) of each part of `size` trees, in ascending order; recorded trees are streamed."""
        stream: Iterator[tuple[int, BeliefTree]] | None = None
        n, have = self.total, len(self.rows)
        for part in parts:
            first, last = part * size, min((part + 1) * size, n)
            before, after = first * have // n, last * have // n
            if stream is None and self.traces is not None and before < have:
                # Trees of finished parts before this one are read over, not kept.
                stream = self.traces.pick(self.rows[before:])
                at = before
            recorded = []
            while stream is not None and at < after:
                number, tree = next(stream)
                if at >= before:
                    assert self.traces is not None
                    recorded.append(Drawn(tree, float(self.weights[at]), self.traces.name, number))
                at += 1
            marks = [(i + 1) * have // n > i * have // n for i in range(first, last)]
            yield (
                part,
                Batch(
                    first,
                    marks,
                    recorded,
                    self.family,
                    self.seed,
                    first - before,
                    self.factor,
                    self.remaining,
                ),
            )


def plan_trees(
    source: Source, trees: int | None, seed: int, *, factor: int = 1, remaining: int | None = None
) -> Plan:
    """The plan of `trees` trees of a source.

    trees : None takes all the recorded ones. factor : how many trees are looked at for each one labelled;
    above 1, close calls are preferred. remaining : rollouts left, where the tree's own do not count.
    """
    family = None if isinstance(source, Traces) else source.family if isinstance(source, Mix) else source
    recorded = None if isinstance(source, Family) else source.traces if isinstance(source, Mix) else source
    if isinstance(source, Mix):
        n, total = source.recorded(trees)
    elif isinstance(source, Traces):
        n = total = len(source) if trees is None else trees
        if n > len(source):
            raise InputError("trees", f"must be at most {len(source)}, the number of recorded trees", n)
    else:
        if trees is None:
            raise InputError("trees", "must be given for a family")
        n, total = 0, trees
    if total < 1:
        raise InputError(source.name, "must hold at least one tree")
    if factor < 1:
        raise InputError("close_calls", "must be a whole number from 1", factor)
    rows, weights = np.arange(0), np.ones(0)
    if recorded is not None:
        rows, weights = _sample(recorded, n, seed, factor, remaining)
    return Plan(_about(source, n), total, family, recorded, rows, weights, seed, factor, remaining)


def tree_key(tree: BeliefTree) -> int:
    """64 bits that are equal for equal trees, whatever their `id`, `extra` and `count`."""
    digest = hashlib.blake2b(digest_size=8)
    for name in _KEY_COLUMNS:
        value = getattr(tree, name)
        if value is not None:
            digest.update(f"{name} {value.dtype.kind}".encode())
            digest.update(np.add(value, 0, dtype=value.dtype).tobytes())  # -0.0 and 0.0 are one value
    digest.update(repr((tree.horizon, tree.batch, tree.remaining)).encode())
    return int.from_bytes(digest.digest(), "little")


def _sample(traces: Traces, n: int, seed: int, factor: int, remaining: int | None) -> tuple[Ints, Floats]:
    """Which recorded trees, ascending, and their weights."""
    have = len(traces)
    if n == have:
        return np.arange(n), np.ones(n)
    rng = np.random.default_rng([seed, _SAMPLE])
    rows = np.sort(rng.choice(have, min(n * factor, have), replace=False))
    if factor == 1 or n == 0:
        return rows, np.ones(n)
    stakes, chunk = [], []
    for _, tree in traces.pick(rows):
        chunk.append(tree)
        if len(chunk) == _CHUNK:
            stakes.append(close_calls.at_stake(chunk, remaining))
            chunk = []
    if chunk:
        stakes.append(close_calls.at_stake(chunk, remaining))
    chosen, weights = close_calls.choose(np.concatenate(stakes), n, rng)
    return rows[chosen], weights


def _about(source: Source, recorded: int) -> dict[str, Any]:
    """As the manifest keeps it."""
    if not isinstance(source, Mix):
        kind = "family" if isinstance(source, Family) else "traces"
        content = {"content": source.content} if isinstance(source, Family) else {}
        return {"kind": kind, "name": source.name, "sha256": source.sha256, **content}
    both = f"{source.family.sha256} {source.traces.sha256} {recorded}"
    return {
        "kind": "mix",
        "name": source.name,
        "sha256": hashlib.sha256(both.encode()).hexdigest(),
        "family": {
            "name": source.family.name,
            "sha256": source.family.sha256,
            "content": source.family.content,
        },
        "traces": {"name": source.traces.name, "sha256": source.traces.sha256},
        "recorded": recorded,
    }
