"""The leaves of one tree kept ready between calls: a rollout writes only what it changed; floor 2, light."""

from __future__ import annotations

from collections.abc import Callable
from operator import index
from typing import Any

from distill.errors import InputError
from distill.leaf_buffers import LeafBuffers, number_array

__all__ = ["HeldLeaves"]


class HeldLeaves:
    """A tree's leaves inside a scorer; made by `Scorer.hold`. For one thread at a time.

    The file runs as in `Scorer.pick`, on every leaf, since a rollout changes what all others are worth; but
    the arrays are neither checked nor copied again. Answers are those of `Scorer.pick` and `Scorer.score`,
    bit for bit.
    """

    def __init__(
        self,
        buffers: LeafBuffers,
        score: Callable[[LeafBuffers, float | None], Any],
        pick: Callable[[LeafBuffers, float | None], int],
    ) -> None:
        self._buffers = buffers
        self._score = score
        self._pick = pick

    def update(self, leaf: int, **values: float) -> None:
        """New values of some columns at a leaf (0-based), for instance mean and var after a rollout.

        InputError, and nothing is written, for a leaf or a column that there is not or no number.
        """
        columns, n = self._buffers.columns, len(self._buffers.action)
        if type(leaf) is not int:
            leaf = _position(leaf)
        if not 0 <= leaf < n:
            raise InputError("leaf", f"must be from 0 to {n - 1}", leaf)
        for name, x in values.items():
            if name in self._buffers.varying:
                raise InputError(name, "is a number of a call, none of a leaf: `change` takes it")
            if name not in columns:
                raise InputError(name, f"must be among {', '.join(columns)}")
            if type(x) is not float and number_array(name, x, "f").size != 1:
                raise InputError(name, "must be one number", x)
        for name, x in values.items():
            columns[name][leaf] = x

    def change(self, **numbers: float) -> None:
        """For calls to come, other numbers that a call gives beside `remaining`: horizon or batch_size.

        InputError, and nothing is written, for a name that this input has not or no number.
        """
        for name, x in numbers.items():
            if name not in self._buffers.varying:
                raise InputError(name, f"is no number of a call of a {self._buffers.kind.name}")
            if type(x) not in (int, float) and number_array(name, x, "f").size != 1:
                raise InputError(name, "must be one number", x)
        self._buffers.vary({name: float(number_array(name, x, "f").item()) for name, x in numbers.items()})

    def pick(self, *, remaining: float, deadline: float | None = None, **numbers: float) -> int:
        """As `Scorer.pick`, with `remaining` rollouts left; `numbers` are changed as by `change`, first."""
        self._buffers.leave(remaining)
        if numbers:
            self.change(**numbers)
        return self._pick(self._buffers, deadline)

    def score(self, *, remaining: float, deadline: float | None = None, **numbers: float) -> Any:
        """As `Scorer.score`, with `remaining` rollouts left; `numbers` are changed as by `change`, first."""
        self._buffers.leave(remaining)
        if numbers:
            self.change(**numbers)
        return self._score(self._buffers, deadline)


def _position(leaf: Any) -> int:
    try:
        if not isinstance(leaf, bool):
            return index(leaf)
    except TypeError:
        pass
    raise InputError("leaf", "must be one whole number", leaf)
