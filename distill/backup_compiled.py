"""The backup of `distill.backup`, compiled, for agents that keep record rows; floor 3.

`distill.backup` is the definition and needs NumPy alone. This one needs Numba (the `fast` extra), gives the
same numbers within rounding, and takes a small part of the time: where a scorer of records decides in tens of
microseconds, the backup that fills its rows should not take hundreds. What is compiled stays on disk, so only
the first process after an installation waits for it.
"""

# mypy: allow-untyped-calls
from __future__ import annotations

import math
from dataclasses import fields
from typing import Any, Final

import numpy as np

from distill import backup_kernels as kernels
from distill.backup import CELLS, Backup
from distill.backup_correlated import CorrelatedBackup
from distill.record_rows import Crossings
from distill.tree import BeliefTree, Floats

__all__ = ["CompiledBackup", "fast_backup_of"]

_NAMES: Final = tuple(f.name for f in fields(Crossings))


class CompiledBackup(Backup):
    """Moments, and what a record row is made of, of a tree with independent leaves; compiled.

    Arguments, methods, errors and results as of `distill.backup.Backup`, the results within rounding. Every
    call of `rows` gives new columns, but for `cost`, which never changes. Not for several threads at once.

    >>> from distill.record import from_record
    >>> t = from_record({"format": "belief-tree/1", "parent": [-1, 0, 1, 1, 0],
    ...     "kind": ["decision", "decision", "leaf", "leaf", "leaf"],
    ...     "mean": [None, None, 0, 0, 0.2], "var": [None, None, 1, 1, 0],
    ...     "noise_var": [None, None, 4, 4, 4]})
    >>> b = CompiledBackup(t)
    >>> b.update(1, mean=0.0, var=0.5)
    >>> b.value.round(4), b.rows()["slope"].round(4)
    (array([0.4886, 0.2   ]), array([0.2677, 0.1893, 0.    ]))
    """

    def __init__(self, tree: BeliefTree, horizon: float = math.inf) -> None:
        super().__init__(tree, horizon)
        self._cost = np.broadcast_to(np.asarray(tree.cost, dtype=float), len(self.leaf_nodes))

    def _refresh_all(self) -> None:
        """Lay the tree out flat, then moments of every node from the leaves'."""
        n, leaves = len(self.mean), self.leaf_nodes
        none = np.zeros(0, dtype=np.int64)
        kids = [none if own is None else own for own in self._kids]
        ends = np.cumsum([len(own) for own in kids])
        self._flat_kids = np.concatenate(kids)
        self._link = np.zeros((5, n), dtype=np.int64)
        self._link[kernels.ABOVE], self._link[kernels.IS_MAX] = self._above, self._is_max
        self._link[kernels.FIRST, 1:], self._link[kernels.LAST] = ends[:-1], ends
        self._link[kernels.LEAF_NODE, : len(leaves)] = leaves
        self._order = np.sort(np.concatenate(self._levels))
        self._phi = np.empty((max(len(own) for own in kids) + 1, CELLS))

        self._node = np.zeros((10, n))
        columns = (self.mean, self.var, self._others, self._others_var, self._gain, self._reward)
        self._node[: len(columns)] = columns
        most = np.ones(n)
        for c in self._levels:
            most[c] = most[self._above[c]] * self._gain[c]
        self._own = np.stack([self._own_sd, self._noise_ratio, most[leaves]])
        self._win_loss = "alpha" in self._belief
        self._columns = np.stack(list(self._belief.values()))
        self._name_rows()
        kernels.refresh_all(self._node, self._link, self._flat_kids, self._phi)

    def _name_rows(self) -> None:
        """The attributes of a Backup as views of the arrays that the kernels write."""
        self.mean, self.var, self._others, self._others_var, self._gain, self._reward = self._node[:6]
        self._own_sd, self._noise_ratio = self._own[:2]
        self._belief = dict(zip(self._belief, self._columns, strict=True))

    def __setstate__(self, state: dict[str, Any]) -> None:
        self.__dict__.update(state)
        self._name_rows()  # a deep copy has made them arrays of their own

    def update(self, leaf: int, **belief: float) -> None:
        """Take in a leaf's new belief; as `Backup.update`."""
        self._keep(leaf, belief)
        kernels.take_in(
            int(leaf), self._columns, self._win_loss, float(self.horizon),
            self._node, self._link, self._flat_kids, self._own, self._phi,
        )  # fmt: skip

    def rows(self) -> dict[str, Floats]:
        """The record table at present, name -> column of shape (n_leaves,); see `schema.RECORD_UNITS`."""
        out: dict[str, Floats] = dict(zip(_NAMES, self._crossings(), strict=True))
        out["cost"] = self._cost
        return out

    def crossings(self) -> Crossings:
        """Where each leaf changes which action is best, by itself: one crossing a leaf."""
        return Crossings(*self._crossings())

    def _crossings(self) -> Any:
        out = np.empty((len(_NAMES), len(self.leaf_nodes)))
        kernels.fill_rows(self._actions, self._order, self._node, self._link, self._own, out)
        return out

    def _down(self) -> tuple[Floats, Floats, Floats, Floats]:
        kernels.pass_down(self._actions, self._order, self._node, self._link)
        move, slope, now, bend = self._node[6:]
        return move, slope, now, bend


def fast_backup_of(tree: BeliefTree, horizon: float = math.inf) -> Backup | CorrelatedBackup:
    """The backup that fits a tree, compiled where its leaves are independent; see `distill.backup.backup_of`.

    With `cov` a CorrelatedBackup, which is one pass over all leaves by matrices.
    """
    return CompiledBackup(tree, horizon) if tree.cov is None else CorrelatedBackup(tree, horizon)
