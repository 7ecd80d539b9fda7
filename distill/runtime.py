"""Run a scorer file inside an agent: numpy and onnxruntime alone; floor 4, light.

    scorer = Scorer.load("scorer.onnx")
    leaf = scorer.pick(mean=..., var=..., noise_var=..., gain=..., offset=..., action=..., cost=...,
                       remaining=100)

A call copies the arrays into buffers that onnxruntime reads in place, and runs on the calling thread;
threads may share a scorer. Where the file cannot answer - a leaf unlike those of training, a file that
was refused - the closed-form static rate answers instead, and is counted.
"""

from __future__ import annotations

import os
import threading
from collections import OrderedDict
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Final, NamedTuple

import numpy as np
import onnxruntime as ort
from numpy.typing import NDArray

from distill import scorer_file
from distill.closed_form import static_rates
from distill.errors import InputError, ScorerFileError

__all__ = ["Counters", "Scorer", "Scores"]

Floats = NDArray[np.float64]

_FLOATS: Final = ("mean", "var", "noise_var", "gain", "offset", "cost")
_OUTPUTS: Final = {
    "voc": np.float64,
    "batch": np.int64,
    "in_range": np.bool_,
    "pick": np.int64,
    "worth_it": np.bool_,
}
_KEPT_SIZES: Final = 32  # buffers kept a thread, one set a number of leaves
_MAX_ROLLOUTS: Final = 2**53
_SELF_TEST_SLACK: Final = 1e-4  # of the largest value of a case: other processors round differently


class Scores(NamedTuple):
    """What a scorer says of each leaf of one tree.

    voc : (n,), the value it was trained on, by default the rate, u a rollout; gross of cost.
    batch : (n,), the rollouts that value assumes. in_range : (n,), False where the leaf is unlike those
    of training, and `voc` is the closed-form static rate. pick : position of the largest voc - cost, the
    first on ties. worth_it : whether that is above 0. With `tree`, pick and worth_it have one entry a tree.
    """

    voc: Floats
    batch: NDArray[np.int64]
    in_range: NDArray[np.bool_]
    pick: Any
    worth_it: Any


@dataclass
class Counters:
    """How often what happened, since the scorer was loaded; approximate when threads share it.

    decisions : calls answered. out_of_range : calls with at least one leaf out of range.
    fallback : calls that the closed form answered alone. refused : calls with invalid input.
    """

    decisions: int = 0
    out_of_range: int = 0
    fallback: int = 0
    refused: int = 0


@dataclass
class _Buffers:
    """Arrays that a binding reads and writes, for one number of leaves on one thread."""

    inputs: dict[str, NDArray[Any]]
    outputs: dict[str, NDArray[Any]]
    binding: Any


class _Local(threading.local):
    """Buffers of the calling thread, the least recently used dropped first."""

    def __init__(self) -> None:
        self.kept: OrderedDict[int, _Buffers] = OrderedDict()


@dataclass(eq=False)
class Scorer:
    """A scorer file, checked and ready. Make one with `Scorer.load`.

    facts : the file's metadata (format, about, features, ranges, transform, measured ...).
    strict : raise on invalid input and on a failing file instead of falling back.
    """

    facts: dict[str, Any]
    strict: bool = False
    counters: Counters = field(default_factory=Counters)
    _session: Any = None
    _local: _Local = field(default_factory=_Local, repr=False)

    @classmethod
    def load(cls, path: str | os.PathLike[str], *, strict: bool = False) -> Scorer:
        """Check the file and make it ready; ScorerFileError says why a file is refused.

        Its bytes are checked before onnxruntime sees them, and it must repeat its own stored answers.
        """
        try:
            with Path(path).open("rb") as f:
                data = f.read(scorer_file.MAX_BYTES + 1)
        except OSError as e:
            raise ScorerFileError(f"{path}: {e.strerror}") from None
        return cls.from_bytes(data, strict=strict, name=str(path))

    @classmethod
    def from_bytes(cls, data: bytes, *, strict: bool = False, name: str = "scorer") -> Scorer:
        """As `load`, from bytes; `name` stands in messages."""
        try:
            facts = scorer_file.check(data)
            scorer = cls(facts, strict, _session=_session(data))
            scorer._self_test()
        except ScorerFileError as e:
            raise ScorerFileError(f"{name}: {e}") from None
        return scorer

    @classmethod
    def closed_form(cls) -> Scorer:
        """A scorer without a file: every call is answered by the closed-form static rate."""
        return cls({})

    def score(
        self,
        *,
        mean: Any,
        var: Any,
        noise_var: Any,
        gain: Any,
        offset: Any,
        action: Any,
        cost: Any,
        remaining: Any,
        tree: Any = None,
    ) -> Scores:
        """Score every leaf of one tree, or of many with `tree`.

        Leaf i counts gain_i X_i + offset_i under root action action_i, X_i ~ N(mean_i, var_i); one
        rollout adds noise of variance noise_var_i and costs cost_i. All arrays have length n; action
        holds whole numbers from 0 to n - 1. remaining : rollouts left, a whole number. tree : (n,), rows
        of one tree side by side; remaining may then differ by tree and has length n or 1.
        Raises InputError for wrong shapes or types; for invalid values too if `strict`.
        """
        columns = (mean, var, noise_var, gain, offset, cost)
        if tree is not None:
            return self._score_many(columns, action, remaining, tree)
        buffers, clean = self._run(columns, action, remaining)
        out = buffers.outputs
        if not clean:
            return self._mend(buffers)
        return Scores(
            out["voc"].copy(),
            out["batch"].copy(),
            out["in_range"].copy(),
            int(out["pick"]),
            bool(out["worth_it"]),
        )

    def pick(
        self,
        *,
        mean: Any,
        var: Any,
        noise_var: Any,
        gain: Any,
        offset: Any,
        action: Any,
        cost: Any,
        remaining: Any,
    ) -> int:
        """Position of the leaf with the largest voc - cost, the first on ties; arguments as for `score`."""
        buffers, clean = self._run((mean, var, noise_var, gain, offset, cost), action, remaining)
        return int(buffers.outputs["pick"]) if clean else int(self._mend(buffers).pick)

    # --- one call ---------------------------------------------------------------------------------

    def _run(self, columns: tuple[Any, ...], action: Any, remaining: Any) -> tuple[_Buffers, bool]:
        """Fill the buffers and run; False where the answer needs mending."""
        try:
            n = len(columns[0])
        except TypeError:
            raise InputError("mean", "must be an array over leaves", columns[0]) from None
        kept = self._local.kept
        buffers = kept.get(n)
        if buffers is None:
            if n == 0:
                raise InputError("mean", "must have at least one leaf")
            buffers = self._new_buffers(n)
            kept[n] = buffers
            if len(kept) > _KEPT_SIZES:
                kept.popitem(last=False)
        inputs = buffers.inputs
        for name, column in zip(_FLOATS, columns, strict=True):
            _fill(inputs[name], name, column)
        _fill(inputs["action"], "action", action)
        _fill(inputs["remaining"], "remaining", remaining)
        self.counters.decisions += 1
        if self._session is None:
            return buffers, False
        try:
            self._session.run_with_iobinding(buffers.binding, None)
        except Exception as e:  # onnxruntime raises its own types, e.g. for an action out of bounds
            _check_values(inputs, self.strict)
            if self.strict:
                raise ScorerFileError(f"the file failed: {_first_line(e)}") from None
            buffers.outputs["in_range"][:] = False
            return buffers, False
        return buffers, b"\0" not in buffers.outputs["in_range"].tobytes()

    def _new_buffers(self, n: int) -> _Buffers:
        inputs: dict[str, NDArray[Any]] = {name: np.zeros(n) for name in _FLOATS}
        inputs["action"] = np.zeros(n, dtype=np.int64)
        inputs["remaining"] = np.zeros(())
        outputs: dict[str, NDArray[Any]] = {
            name: np.zeros(() if name in ("pick", "worth_it") else n, dtype=dtype)
            for name, dtype in _OUTPUTS.items()
        }
        binding = None
        if self._session is not None:
            binding = ort.capi._pybind_state.SessionIOBinding(self._session)
            cpu = ort.capi._pybind_state.OrtDevice(0, 0, 0)
            for name, array in inputs.items():
                binding.bind_input(name, cpu, array.dtype.type, list(array.shape), array.ctypes.data)
            for name, array in outputs.items():
                binding.bind_output(name, cpu, array.dtype.type, list(array.shape), array.ctypes.data)
        return _Buffers(inputs, outputs, binding)

    def _mend(self, buffers: _Buffers) -> Scores:
        """The closed form where the file has no answer; counted."""
        inputs, out = buffers.inputs, buffers.outputs
        usable = _check_values(inputs, self.strict)
        in_range = out["in_range"] & usable if self._session is not None else np.zeros_like(usable)
        if not usable.all():
            self.counters.refused += 1
            in_range[:] = False  # one bad leaf spoils its neighbours' features
        elif in_range.any():
            self.counters.out_of_range += 1
        if not in_range.any():
            self.counters.fallback += 1
        voc, batch = np.zeros(len(usable)), np.zeros(len(usable), dtype=np.int64)
        if usable.any():
            rows = {name: inputs[name][usable] for name in _FLOATS if name != "cost"}
            voc[usable], batch[usable] = static_rates(**rows, remaining=float(inputs["remaining"]))
        voc = np.where(in_range, out["voc"], voc)
        batch = np.where(in_range, out["batch"], batch)
        net = np.where(usable, voc - inputs["cost"], -np.inf)
        pick = int(np.argmax(net))
        return Scores(voc, batch, in_range, pick, bool(net[pick] > 0))

    def _score_many(self, columns: tuple[Any, ...], action: Any, remaining: Any, tree: Any) -> Scores:
        arrays = [np.asarray(c) for c in (*columns, action)]
        tree = np.asarray(tree)
        n = len(arrays[0]) if arrays[0].ndim else 0
        for name, array in zip((*_FLOATS, "action", "tree"), (*arrays, tree), strict=True):
            if array.shape != (n,):
                raise InputError(name, f"must have shape ({n},), as 'mean'", array.shape)
        remaining = np.asarray(remaining)
        if remaining.size == 1:
            remaining = np.full(n, remaining.item())
        if remaining.shape != (n,):
            raise InputError("remaining", f"must be one number or have shape ({n},)", remaining.shape)
        starts = np.flatnonzero(np.r_[True, tree[1:] != tree[:-1]]) if n else np.empty(0, dtype=int)
        if len(np.unique(tree)) != len(starts):
            raise InputError("tree", "rows of one tree must be side by side")
        parts = []
        for a, b in zip(starts, [*starts[1:], n], strict=True):
            part = dict(zip((*_FLOATS, "action"), (array[a:b] for array in arrays), strict=True))
            parts.append(self.score(**part, remaining=remaining[a]))
        if not parts:
            raise InputError("mean", "must have at least one leaf")
        return Scores(
            np.concatenate([p.voc for p in parts]),
            np.concatenate([p.batch for p in parts]),
            np.concatenate([p.in_range for p in parts]),
            np.array([p.pick for p in parts]),
            np.array([p.worth_it for p in parts]),
        )

    def _self_test(self) -> None:
        """Hold the file against the answers stored in it."""
        for i, case in enumerate(self.facts["self_test"]):
            try:
                expected = case["outputs"]
                got = self.score(
                    **{k: np.asarray(v) for k, v in case["inputs"].items() if k != "remaining"},
                    remaining=case["inputs"]["remaining"],
                )
                want = np.asarray(expected["voc"], dtype=float)
            except (KeyError, TypeError, ValueError, IndexError, InputError) as e:
                raise ScorerFileError(f"self-test case {i} cannot be run: {_first_line(e)}") from None
            if want.shape != got.voc.shape:
                raise ScorerFileError(f"self-test case {i} has {want.size} answers for {got.voc.size} leaves")
            stored_range = np.asarray(expected["in_range"], dtype=bool)
            compared = stored_range & got.in_range
            off = np.abs(got.voc - want)[compared]
            # A leaf next to a split of a tree ensemble may fall on its other side on another processor.
            if np.sum(~(off <= _SELF_TEST_SLACK * np.max(want, initial=0.0))) > 0.1 * len(want):
                raise ScorerFileError(f"self-test case {i}: voc differs by up to {np.max(off):.3g}")
        self.counters = Counters()


def _fill(buffer: NDArray[Any], name: str, value: Any) -> None:
    """Copy into a buffer: same length, and no kind of number that would lose by it."""
    if not isinstance(value, np.ndarray):
        value = _as_array(name, value)
    if value.shape != buffer.shape:
        if name == "remaining" and value.size == 1:
            value = value.reshape(())
        else:
            raise InputError(name, f"must have shape {buffer.shape}", value.shape)
    try:
        np.copyto(buffer, value, casting="same_kind")
    except TypeError:
        kind = "whole numbers" if buffer.dtype.kind == "i" else "real numbers"
        raise InputError(name, f"must hold {kind}", str(value.dtype)) from None


def _as_array(name: str, value: Any) -> NDArray[Any]:
    try:
        array = np.asarray(value)
    except (ValueError, TypeError, OverflowError):
        raise InputError(name, "must be an array of numbers", value) from None
    if array.dtype.kind not in "iuf":
        raise InputError(name, "must hold numbers", str(array.dtype))
    return array


def _check_values(inputs: dict[str, NDArray[Any]], strict: bool) -> NDArray[np.bool_]:
    """Rows whose values a leaf table may hold; with `strict` the first other one is an error."""
    n = len(inputs["mean"])
    rules = {
        "mean": (np.isfinite(inputs["mean"]), "must be finite"),
        "var": ((inputs["var"] >= 0) & np.isfinite(inputs["var"]), "must be finite and >= 0"),
        "noise_var": ((inputs["noise_var"] > 0) & np.isfinite(inputs["noise_var"]), "must be finite and > 0"),
        "gain": (np.isfinite(inputs["gain"]), "must be finite"),
        "offset": (np.isfinite(inputs["offset"]), "must be finite"),
        "action": ((inputs["action"] >= 0) & (inputs["action"] < n), f"must be from 0 to {n - 1}"),
        "cost": (np.isfinite(inputs["cost"]), "must be finite"),
    }
    left = inputs["remaining"]
    whole = bool(0 <= left <= _MAX_ROLLOUTS)
    if strict:
        for name, (ok, rule) in rules.items():
            if not ok.all():
                row = int(np.argmin(ok))
                raise InputError(f"{name}[{row}]", rule, inputs[name][row].item())
        if not whole:
            raise InputError("remaining", "must be from 0 to 2^53", left.item())
    usable = np.full(n, whole)
    for ok, _ in rules.values():
        usable &= ok
    return usable


def _session(data: bytes) -> Any:
    options = ort.SessionOptions()
    options.intra_op_num_threads = options.inter_op_num_threads = 1
    options.enable_mem_reuse = False  # a tenth faster
    options.log_severity_level = 4
    try:
        return ort.InferenceSession(data, options, providers=["CPUExecutionProvider"])._sess
    except Exception as e:  # onnxruntime raises its own types
        raise ScorerFileError(f"onnxruntime refuses it: {_first_line(e)}") from None


def _first_line(error: BaseException) -> str:
    return (str(error).splitlines() or [type(error).__name__])[0][:200]
