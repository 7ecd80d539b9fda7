"""What a worker does: the trees of one shard in, the bytes of its files out; floor 5.

Workers touch no file of the dataset. So they need no disk in common, and one that dies leaves nothing half
done; whoever asked writes what comes back.
"""

from __future__ import annotations

import dataclasses
import functools
import hashlib
import importlib.metadata
import math
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

from distill import shards, voc
from distill.errors import InputError, RefusedError, ToleranceError
from distill.kernels import stamp
from distill.query import Priced, Query, resolve
from distill.shards import Labelled
from distill.sources import Batch
from distill.tree import BeliefTree

__all__ = ["OWN_BATCH", "Asked", "Shard", "code_versions", "label_shard"]


OWN_BATCH: Final = "tree"  # asks for the value of each tree's own batch
_OF_TREE: Final = "the tree's"  # in manifests


@dataclass(frozen=True)
class Asked:
    """What is asked of every tree; None takes the tree's own scalar.

    By default the rate, at the tree's own horizon (dynamic where it has none) and `remaining`.
    horizon : h; 0 static, inf dynamic. batch : rollouts a candidate, instead of the rate; OWN_BATCH for each
    tree's own, 1 where it has none.
    remaining : rollouts left. tolerance : largest error, as a share of the tree's scale.
    """

    horizon: float | None = None
    batch: int | str | None = None
    remaining: int | None = None
    tolerance: float | None = None

    def __post_init__(self) -> None:
        if isinstance(self.batch, str) and self.batch != OWN_BATCH:
            raise InputError("batch", f"must be a whole number from 1 to 2^53 or {OWN_BATCH!r}", self.batch)

    def query(self, tree: BeliefTree) -> Query:
        """The query for one tree."""
        return resolve(
            tree,
            horizon=self.horizon,
            batch=None if isinstance(self.batch, str) else self.batch,
            rate=self.batch is None,
            remaining=self.remaining,
            tolerance=self.tolerance,
        )

    def describe(self) -> dict[str, Any]:
        """As the manifest keeps it."""
        h = self.horizon
        return {
            "value": _OF_TREE if h is None else "inf" if math.isinf(h) else float(h),
            "batch": "rate" if self.batch is None else _OF_TREE if self.batch == OWN_BATCH else self.batch,
            "remaining": _OF_TREE if self.remaining is None else self.remaining,
            "tolerance": self.tolerance,
        }

    @classmethod
    def described(cls, kept: Mapping[str, Any]) -> Asked:
        """What `describe` kept.

        >>> Asked.described(Asked(horizon=math.inf, batch=2).describe())
        Asked(horizon=inf, batch=2, remaining=None, tolerance=None)
        >>> Asked.described(Asked(batch=OWN_BATCH).describe()).batch
        'tree'
        """
        h, batch, remaining = kept["value"], kept["batch"], kept["remaining"]
        return cls(
            None if h == _OF_TREE else float(h),
            None if batch == "rate" else OWN_BATCH if batch == _OF_TREE else batch,
            None if remaining == _OF_TREE else remaining,
            kept["tolerance"],
        )


@dataclass(frozen=True, eq=False)
class Shard:
    """What a worker gives back: manifest entry, bytes by file name, and the versions that made them."""

    entry: dict[str, Any]
    files: dict[str, bytes]
    code: dict[str, str]


def label_shard(part: int, batch: Batch, asked: Asked) -> Shard:
    """Label the trees of one shard. The same arguments give the same bytes under the same `code`.

    InputError names a tree that cannot be asked. Trees that no exact method prices within the tolerance
    are kept aside with the reason.
    """
    drawn = batch.trees()
    queries = []
    for number, d in enumerate(drawn, batch.first):
        try:
            queries.append(asked.query(d.tree))
        except InputError as e:
            raise e.at(f"tree {number}") from None
    # Trees that are asked the same go to the engine together, which has faster ways for some of them.
    alike: dict[Query, list[int]] = {}
    for i, query in enumerate(queries):
        alike.setdefault(query if query.rate else dataclasses.replace(query, remaining=None), []).append(i)
    rows: dict[int, Labelled] = {}
    for query, group in alike.items():
        answers = _price([drawn[i].tree for i in group], query)
        for i, (priced, reason) in zip(group, answers, strict=True):
            d = drawn[i]
            rows[i] = Labelled(
                batch.first + i, d.tree, queries[i], priced, reason, d.weight, d.source, d.draw
            )
    entry, files = shards.encode_shard(part, [rows[i] for i in range(len(drawn))])
    return Shard(entry, files, code_versions())


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


@functools.cache
def code_versions() -> dict[str, str]:
    """Versions that can change a byte: of the sources that draw and label, and of the libraries."""
    here = Path(__file__).parent
    # The dispatcher loads exact methods by name, where no import statement shows them.
    reached = [Path(__file__), *sorted(here.glob("exact/*.py"))]
    digest = hashlib.sha256("".join(stamp(path) for path in reached).encode())
    libraries = {name: importlib.metadata.version(name) for name in ("numpy", "numba", "scipy", "pyarrow")}
    return {
        "voc-distill": importlib.metadata.version("voc-distill"),
        "sources": digest.hexdigest(),
        **libraries,
    }
