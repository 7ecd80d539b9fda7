"""What a scorer reads: the input kinds, their columns and what these may hold; floor 1, light.

    leaf table                independent Gaussian leaves under decision nodes
    leaf table, any horizon   the same, and the number `horizon`, of files that serve every horizon
    leaf table, any batch     the same, and the number `batch_size`, of files that serve every batch
    win/loss leaf table       win/loss leaves under decision nodes
    record                    any tree: chance nodes, correlation; one row a candidate, from `distill.backup`

Each kind has its columns of n numbers, `action` where rows of one action belong together, and the number
`remaining`. A file says by its inputs which kind it reads, `Scorer.score` takes them by name.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from functools import cached_property, lru_cache
from operator import itemgetter
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from distill import schema

__all__ = [
    "ANY_BATCH", "ANY_HORIZON", "BOTH_VARY", "KINDS", "LEAF_TABLE", "RECORD", "SCALAR_OF", "SCALAR_RULES",
    "VARIES", "WIN_LOSS_TABLE", "InputKind", "ScalarRule", "kind_of", "worded", "worded_batch",
]  # fmt: skip

Floats = NDArray[np.float64]
# Stands for the horizon, or the batch, of a value where each tree, or call, brings its own.
VARIES: Final = "varies"
BOTH_VARY: Final = "must not both differ from call to call: a scorer takes one of them with each call"
_U, _U2 = schema.MAX_UTILITY, schema.MAX_VARIANCE


@dataclass(frozen=True)
class _Rule:
    """What a number may be: from `low` to `high`, `low` itself only where `closed`."""

    low: float
    high: float
    closed: bool = True

    def holds(self, x: Floats) -> NDArray[np.bool_]:
        return np.asarray(((x >= self.low) if self.closed else (x > self.low)) & (x <= self.high))

    def __str__(self) -> str:
        if -self.low == self.high:
            return f"must be at most {self.high:g} in size"
        return f"must be {'from' if self.closed else 'above'} {self.low:g} " + (
            f"to {self.high:g}" if self.closed else f"and at most {self.high:g}"
        )


_VALUE, _SPREAD = _Rule(-_U, _U), _Rule(0.0, _U)
_COUNT = _Rule(0.0, _U, closed=False)
_RULES: Final[Mapping[str, _Rule]] = {
    **dict.fromkeys(("mean", "offset", "cost", "low", "high", "crossing", "other_crossing"), _VALUE),
    **dict.fromkeys(("bend", "now"), _VALUE),
    **dict.fromkeys(("slope", "other_slope", "spread"), _SPREAD),
    **dict.fromkeys(("alpha", "beta", "noise_ratio"), _COUNT),
    "var": _Rule(0.0, _U2),
    "noise_var": _Rule(0.0, _U2, closed=False),
    "gain": _Rule(0.0, 1.0),
}


@dataclass(frozen=True)
class ScalarRule:
    """What a number of a call may be: from `low` to `high`, and perhaps whole; `text` says so."""

    low: float
    high: float
    text: str
    whole: bool = False

    def holds(self, x: float) -> bool:
        """Whether a number may be so; NaN never."""
        return bool(self.low <= x <= self.high and not (self.whole and x != int(x)))


SCALAR_RULES: Final[Mapping[str, ScalarRule]] = {
    "remaining": ScalarRule(0, schema.MAX_ROLLOUTS, "must be from 0 to 2^53"),
    "horizon": ScalarRule(0, math.inf, "must be at least 0, or infinite"),
    "batch_size": ScalarRule(1, schema.MAX_ROLLOUTS, "must be a whole number from 1 to 2^53", whole=True),
}
# What of a value each such number is.
SCALAR_OF: Final[Mapping[str, str]] = {"horizon": "horizon", "batch": "batch_size"}


@dataclass(frozen=True)
class InputKind:
    """One kind of input.

    name : as in a file's metadata and in messages. floats : columns of n numbers, the first gives n.
    has_action : whether `action`, the 0-based root action of each row, is a column too. varies : the numbers
    of each call beside `remaining`: `horizon`, the rollouts that each leaf still receives (inf allowed), or
    `batch_size`, the rollouts that are spent together.
    """

    name: str
    floats: tuple[str, ...]
    has_action: bool
    varies: tuple[str, ...] = ()

    @cached_property
    def columns(self) -> tuple[str, ...]:
        """All columns, in the order of a call."""
        return (*self.floats, "action") if self.has_action else self.floats

    @cached_property
    def take(self) -> Callable[[Mapping[str, Any]], tuple[Any, ...]]:
        """The columns of numbers of a call, in order; KeyError where one is missing."""
        return itemgetter(*self.floats)

    @cached_property
    def scalars(self) -> tuple[str, ...]:
        """The numbers of a call, one for all rows."""
        return ("remaining", *self.varies)

    @cached_property
    def keywords(self) -> tuple[str, ...]:
        """What a call brings beside `remaining`: the columns, and the numbers that vary."""
        return (*self.columns, *self.varies)

    @cached_property
    def inputs(self) -> tuple[str, ...]:
        """All inputs of a scorer: the columns and the scalars."""
        return (*self.columns, *self.scalars)

    @cached_property
    def limits(self) -> tuple[Floats, Floats]:
        """Least and largest value of each column of numbers; shape (columns, 1)."""
        rules = [_RULES[name] for name in self.floats]
        low = [r.low if r.closed else math.nextafter(r.low, math.inf) for r in rules]
        return np.array(low)[:, None], np.array([r.high for r in rules])[:, None]

    def to_json(self, inputs: Mapping[str, NDArray[Any]]) -> dict[str, Any]:
        """The inputs of a call as JSON values; an infinite horizon is the text "inf", as in records."""
        told = {name: inputs[name].tolist() for name in self.inputs}
        return {name: "inf" if x == math.inf else x for name, x in told.items()}

    def from_json(self, told: Mapping[str, Any]) -> dict[str, NDArray[Any]]:
        """The inputs that `to_json` told; KeyError where one is missing."""
        return {name: np.asarray(math.inf if told[name] == "inf" else told[name]) for name in self.inputs}

    def rules(self, columns: Mapping[str, Floats]) -> dict[str, tuple[NDArray[np.bool_], str]]:
        """Column -> (which rows keep its rule, the rule)."""
        found = {name: (_RULES[name].holds(columns[name]), str(_RULES[name])) for name in self.floats}
        if "high" in columns:
            found["high"] = (found["high"][0] & (columns["high"] > columns["low"]), "must be above low")
        return found


LEAF_TABLE: Final = InputKind("leaf table", ("mean", "var", "noise_var", "gain", "offset", "cost"), True)
ANY_HORIZON: Final = InputKind("leaf table, any horizon", LEAF_TABLE.floats, True, ("horizon",))
ANY_BATCH: Final = InputKind("leaf table, any batch", LEAF_TABLE.floats, True, ("batch_size",))
WIN_LOSS_TABLE: Final = InputKind(
    "win/loss leaf table", ("alpha", "beta", "low", "high", "gain", "offset", "cost"), True
)
RECORD: Final = InputKind("record", tuple(schema.RECORD_UNITS), False)
KINDS: Final[Mapping[str, InputKind]] = {
    k.name: k for k in (LEAF_TABLE, ANY_HORIZON, ANY_BATCH, WIN_LOSS_TABLE, RECORD)
}


def kind_of(names: Iterable[Any]) -> InputKind | None:
    """The kind whose columns all are among `names`, with `horizon` or `batch_size` the one of any of them; or
    None.

    >>> kind_of(["alpha", "beta", "low", "high", "gain", "offset", "cost", "action"]).name
    'win/loss leaf table'
    """
    return _kind_of(frozenset(names))


@lru_cache(maxsize=64)
def _kind_of(given: frozenset[Any]) -> InputKind | None:
    fitting = [kind for kind in KINDS.values() if given.issuperset(kind.keywords)]
    return max(fitting, key=lambda kind: len(kind.keywords), default=None)


def worded(horizon: Any) -> str:
    """The horizon of a scorer's value in words, with {} for what is valued.

    horizon : a number, "inf" or VARIES.

    >>> worded("inf").format("rate"), worded(4).format("rate")
    ('dynamic rate', 'rate at horizon 4')
    """
    if horizon == VARIES:
        return "{} at the horizon that each call gives"
    h = float(horizon)
    return {math.inf: "dynamic {}", 0.0: "static {}"}.get(h, f"{{}} at horizon {h:g}")


def worded_batch(batch: Any) -> str:
    """The batch of a scorer's value in words; batch : a whole number or VARIES.

    >>> worded_batch(1), worded_batch(8), worded_batch("varies")
    ('1 rollout', '8 rollouts', 'the batch that each call gives')
    """
    return "the batch that each call gives" if batch == VARIES else f"{batch} rollout{'s' * (batch != 1)}"
