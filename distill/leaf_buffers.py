"""The arrays of one call laid out for onnxruntime, which reads and writes them in place; floor 3, light."""

from __future__ import annotations

import math
import time
from collections.abc import Mapping
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from distill import schema
from distill.errors import InputError
from distill.scorer_inputs import SCALAR_RULES, InputKind

__all__ = ["MAX_LEAVES", "LeafBuffers", "has_passed", "number_array", "number_arrays", "number_scalars"]

MAX_LEAVES: Final = 2**20
_OUTPUTS: Final = {
    "voc": np.float64,
    "batch": np.int64,
    "voc_high": np.float64,
    "in_range": np.bool_,
    "pick": np.int64,
    "worth_it": np.bool_,
}
_SCALARS: Final = ("pick", "worth_it")
_TRUTH: Final = np.bool_  # the one type that NumPy casts to numbers and `number_array` refuses


class LeafBuffers:
    """Inputs and outputs of a scorer for n leaves, bound to its sessions once; for one thread.

    session, picker : of the whole file and of its pick alone; None where there is no file. They read and
    write the same arrays. `columns` are views into `floats`, so that one copy and one check serve all of
    them. `varying` are the numbers of a call beside `remaining`. Kinds of input without `action` keep theirs
    at 0.
    """

    def __init__(self, n: int, kind: InputKind, session: Any, picker: Any) -> None:
        self.shape = (n,)
        self.kind = kind
        width = len(kind.floats)
        self.floats = np.zeros(width * n)
        self._is_finite = np.zeros(width * n, dtype=bool)
        self.action = np.zeros(n, dtype=np.int64)
        self.remaining = np.zeros(())
        self.varying = {name: np.zeros(()) for name in kind.varies}
        rules = ((name, SCALAR_RULES[name]) for name in kind.varies)
        self._ruled = tuple((name, self.varying[name], r.low, r.high, r.whole) for name, r in rules)
        self.columns = dict(zip(kind.floats, self.floats.reshape(width, n), strict=True))
        self.out: dict[str, NDArray[Any]] = {
            name: np.zeros(() if name in _SCALARS else n, dtype=kind) for name, kind in _OUTPUTS.items()
        }
        self.pick, self.in_range = self.out["pick"], self.out["in_range"]
        self.scalars_hold = True
        self.answered = False
        self.has_bound = session is not None and "voc_high" in {o.name for o in session.get_outputs()}
        self.binding, self.pick_binding = self._bound(session), self._bound(picker)

    def _bound(self, session: Any) -> Any:
        """The arrays bound to the inputs and outputs of a session."""
        if session is None:
            return None
        binding = session.io_binding()
        inputs: dict[str, NDArray[Any]] = {**self.columns, "remaining": self.remaining, **self.varying}
        if self.kind.has_action:
            inputs["action"] = self.action
        for name, x in inputs.items():
            binding.bind_input(name, "cpu", 0, x.dtype.type, list(x.shape), x.ctypes.data)
        for output in session.get_outputs():
            x = self.out[output.name]
            binding.bind_output(output.name, "cpu", 0, x.dtype.type, list(x.shape), x.ctypes.data)
        return binding

    def fill(self, floats: tuple[Any, ...], columns: Mapping[str, Any], remaining: Any) -> None:
        """Copy plain arrays in; an error that is no InputError where something else came, KeyError included.

        floats : the columns of numbers, in order. columns : what else the kind has, by name.
        """
        shape = self.shape
        for column in floats:
            if column.shape != shape or column.dtype.type is _TRUTH:
                raise ValueError
        if type(remaining) not in (int, float) or not 0 <= remaining <= schema.MAX_ROLLOUTS:
            raise ValueError
        kind = self.kind
        if kind.has_action:
            action = columns["action"]
            if action.shape != shape or action.dtype.type is _TRUTH:
                raise ValueError
            np.copyto(self.action, action, casting="same_kind")
            # As `ScalarRule.holds`, without a call; kinds without actions have no such number.
            for name, number, low, high, whole in self._ruled:
                x = columns[name]
                if type(x) not in (int, float) or not low <= x <= high or (whole and x != int(x)):
                    raise ValueError
                number[()] = x
        np.concatenate(floats, out=self.floats, casting="same_kind")
        self.remaining[()] = remaining
        self.scalars_hold = True

    def fill_with_care(self, arrays: dict[str, NDArray[Any]], scalars: dict[str, float]) -> None:
        """Copy arrays and scalars in that are known to be numbers of the right shapes."""
        with np.errstate(over="ignore"):
            for name, column in self.columns.items():
                np.copyto(column, arrays[name], casting="same_kind")
        if self.kind.has_action:
            np.copyto(self.action, arrays["action"], casting="same_kind")
        self.remaining[()] = scalars["remaining"]
        self.vary({name: scalars[name] for name in self.varying})

    def vary(self, scalars: Mapping[str, float]) -> None:
        """Other numbers of a call beside `remaining` for the same leaves, by name."""
        for name, x in scalars.items():
            self.varying[name][()] = x
        self.scalars_hold = SCALAR_RULES["remaining"].holds(self.remaining.item()) and self._varying_hold()

    def leave(self, remaining: Any) -> None:
        """Other rollouts left for the same leaves; InputError for what is no number."""
        if type(remaining) not in (int, float):
            found = number_array("remaining", remaining, "f")
            if found.size != 1:
                raise InputError("remaining", "must be one number", found.shape)
            remaining = found.item()
        others_hold = not self.varying or self._varying_hold()
        self.scalars_hold = bool(0 <= remaining <= schema.MAX_ROLLOUTS and others_hold)
        self.remaining[()] = min(remaining, 2.0**1000)  # a whole number may be too large for a float

    def _varying_hold(self) -> bool:
        return all(SCALAR_RULES[name].holds(number.item()) for name, number in self.varying.items())

    @property
    def batch_size(self) -> int:
        """The batch that the call gives, where its kind has one and it may be so; else 0."""
        return int(self.varying["batch_size"]) if "batch_size" in self.varying and self._varying_hold() else 0

    def finite(self) -> bool:
        """Whether every number of the columns is finite, and the scalars are what they may be."""
        np.isfinite(self.floats, out=self._is_finite)
        # Searching the bytes takes a quarter of the time of `all`.
        return b"\0" not in self._is_finite.tobytes() and self.scalars_hold

    def _all_usable(self) -> bool:
        """Whether every row keeps its rules, in a quarter of the time that telling them apart takes."""
        n, low, high = len(self.action), *self.kind.limits
        rows = self.floats.reshape(len(low), n)
        held = (rows >= low) & (rows <= high)
        # A negative action is a huge one as an unsigned number.
        placed = not self.kind.has_action or int(self.action.view(np.uint64).max()) < n
        ordered = "high" not in self.columns or bool(np.all(self.columns["high"] > self.columns["low"]))
        return placed and ordered and self.scalars_hold and b"\0" not in held.tobytes()

    def usable(self, strict: bool) -> NDArray[np.bool_]:
        """Rows whose values the input may hold; with `strict` the first other one is an error."""
        n = len(self.action)
        if self._all_usable():
            return np.ones(n, dtype=bool)
        rules = self.kind.rules(self.columns)
        if self.kind.has_action:
            rules["action"] = ((self.action >= 0) & (self.action < n), f"must be from 0 to {n - 1}")
        usable = np.full(n, self.scalars_hold)
        for name, (ok, rule) in rules.items():
            if strict and not ok.all():
                row = int(np.argmin(ok))
                value = self.action[row] if name == "action" else self.columns[name][row]
                raise InputError(f"{name}[{row}]", rule, value.item())
            usable &= ok
        if strict and not self.scalars_hold:
            for name, number in (*self.varying.items(), ("remaining", self.remaining)):
                if not SCALAR_RULES[name].holds(number.item()):
                    raise InputError(name, SCALAR_RULES[name].text, number.item())
        return usable


def has_passed(deadline: Any) -> bool:
    """Whether a time of time.perf_counter() has passed; InputError for what is no finite number."""
    try:
        if time.perf_counter() < deadline < math.inf:
            return False
        if not isinstance(deadline, bool) and -math.inf < deadline < math.inf:
            return True
    except (TypeError, ValueError):
        pass
    raise InputError("deadline", "must be a finite time of time.perf_counter()", deadline)


def number_array(name: str, value: Any, kind: str) -> NDArray[Any]:
    """`value` as an array of numbers; whole ones where kind is "i"."""
    try:
        array = np.asarray(value)
    except (ValueError, TypeError, OverflowError):
        raise InputError(name, "must be an array of numbers") from None
    if array.size == 0 and array.dtype.kind == "f":
        return array  # of no numbers, as NumPy makes of []: what is wrong is the shape
    if array.dtype.kind not in ("iu" if kind == "i" else "iuf"):
        what = "whole numbers" if kind == "i" else "numbers"
        raise InputError(name, f"must hold {what}", str(array.dtype))
    return array


def number_arrays(kind: InputKind, columns: dict[str, Any]) -> dict[str, NDArray[Any]]:
    """The columns as arrays of numbers; InputError for one that is missing or holds something else."""
    out = {}
    for name in kind.columns:
        if name not in columns:
            raise InputError(name, f"is missing: a {kind.name} has it")
        out[name] = number_array(name, columns[name], "i" if name == "action" else "f")
    return out


def number_scalars(kind: InputKind, columns: dict[str, Any], remaining: Any) -> dict[str, NDArray[Any]]:
    """The scalars of a call as arrays of numbers; InputError as for `number_arrays`."""
    out = {"remaining": number_array("remaining", remaining, "f")}
    for name in kind.varies:
        if name not in columns:
            raise InputError(name, f"is missing: a {kind.name} has it")
        out[name] = number_array(name, columns[name], "f")
    return out
