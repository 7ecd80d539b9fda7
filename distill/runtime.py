"""Run a scorer file inside an agent: numpy and onnxruntime alone; floor 4, light.

    scorer = Scorer.load("scorer.onnx")
    leaf = scorer.pick(mean=..., var=..., noise_var=..., gain=..., offset=..., action=..., cost=...,
                       remaining=100)

These are the columns of a leaf table; files of other kinds take others, files for any horizon also `horizon`
and files for any batch `batch_size`, see `distill.scorer_inputs`. A call copies the arrays into buffers that
onnxruntime reads in place, and runs on the calling thread; threads may share a scorer, each has buffers of
its own. Where the file has no answer - invalid values, a deadline that has passed, a file that was refused -
the closed-form static rate answers instead (for records the first-order rate), and is counted. Leaves unlike
those of training keep the file's answer, at the edge of what it knows, and are flagged.
"""

from __future__ import annotations

import hashlib
import os
import threading
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Final

import numpy as np
import onnxruntime as ort
from numpy.typing import NDArray

from distill import schema, scorer_file
from distill.answers import Counters, Scores, bounds, mended, mended_scores
from distill.errors import DistillError, InputError, ScorerFileError
from distill.held_leaves import HeldLeaves
from distill.leaf_buffers import (
    MAX_LEAVES,
    LeafBuffers,
    has_passed,
    number_array,
    number_arrays,
    number_scalars,
)
from distill.onnx_pruned import pruned
from distill.scorer_inputs import KINDS, InputKind, kind_of

__all__ = ["Counters", "Scorer", "Scores"]

Floats = NDArray[np.float64]

_KEPT_SIZES: Final = 32  # sets of buffers kept a thread, one a number of leaves
# A leaf next to a split of a tree ensemble may fall on its other side on another processor.
_SELF_TEST_SLACK: Final = 1e-4  # of the largest value of a case
_SELF_TEST_SHARE: Final = 0.1  # of the leaves of a case that may be further off


class _Local(threading.local):
    """Buffers of the calling thread, by kind and number of leaves; the oldest is dropped first."""

    def __init__(self) -> None:
        self.kept: dict[str, dict[int, LeafBuffers]] = {name: {} for name in KINDS}


@dataclass(eq=False)
class Scorer:
    """A scorer file, checked and ready. Make one with `Scorer.load`.

    facts : the file's metadata (format, about, features, input, ranges, transform, measured ...).
    kind : the input that the file reads; None without a file, which takes any.
    strict : raise on invalid values and on a failing file instead of falling back.
    refused : why the file was refused, with `load(..., guard=True)`; else None.
    """

    facts: dict[str, Any]
    strict: bool = False
    refused: str | None = None
    counters: Counters = field(default_factory=Counters)
    _session: Any = field(default=None, repr=False)
    _picker: Any = field(default=None, repr=False)  # the nodes of the pick alone
    kind: InputKind | None = field(default=None, init=False)
    _batch: int | None = field(default=None, init=False, repr=False)
    _local: _Local = field(default_factory=_Local, repr=False)

    def __post_init__(self) -> None:
        self.kind = KINDS.get(self.facts.get("input", ""))
        about = self.facts.get("about")
        value = about.get("value") if isinstance(about, dict) else None
        batch = value.get("batch") if isinstance(value, dict) else None
        if type(batch) is int and 1 <= batch <= schema.MAX_ROLLOUTS:
            self._batch = batch

    @classmethod
    def load(
        cls,
        path: str | os.PathLike[str],
        *,
        strict: bool = False,
        guard: bool = False,
        sha256: str | None = None,
    ) -> Scorer:
        """Check a file and make it ready; ScorerFileError says why a file is refused.

        Its bytes are checked before onnxruntime sees them, and it must repeat the answers stored in it.
        sha256 : the digest it must have, as its sheet states it. guard : a refused file gives a scorer
        that answers by the closed form, with the reason in `refused`, instead of an error.
        """
        try:
            try:
                with Path(path).open("rb") as f:
                    data = f.read(scorer_file.MAX_BYTES + 1)
            except OSError as e:
                raise ScorerFileError(f"{path}: {e.strerror}") from None
            if sha256 is not None and hashlib.sha256(data).hexdigest() != sha256.lower():
                raise ScorerFileError(f"{path}: has another SHA-256 than the one asked for")
            return cls.from_bytes(data, strict=strict, name=str(path))
        except ScorerFileError as e:
            if not guard:
                raise
            return cls({}, strict, refused=str(e))

    @classmethod
    def from_bytes(cls, data: bytes, *, strict: bool = False, name: str = "scorer") -> Scorer:
        """As `load`, from bytes; `name` stands in messages."""
        try:
            facts = scorer_file.check(data)
            picker = _session(pruned(data, ("pick", "in_range")))
            scorer = cls(facts, strict, _session=_session(data), _picker=picker)
            scorer._self_test()
        except ScorerFileError as e:
            raise ScorerFileError(f"{name}: {e}") from None
        return scorer

    @classmethod
    def closed_form(cls) -> Scorer:
        """A scorer without a file: every call is answered by the closed-form static rate."""
        return cls({})

    def score(
        self, *, remaining: Any, tree: Any = None, deadline: float | None = None, **columns: Any
    ) -> Scores:
        """Score every leaf of one tree, or of many with `tree`.

        columns : those of the file's kind of input by name, each of length n.

        Leaf table: mean, var, noise_var, gain, offset, action, cost. Leaf i counts gain_i X_i + offset_i
        under root action action_i, X_i ~ N(mean_i, var_i); one rollout adds noise of variance noise_var_i
        and costs cost_i. action holds whole numbers from 0 to n - 1.
        Win/loss leaf table: alpha, beta, low, high in place of mean and variances, X_i = low_i +
        (high_i - low_i) p_i, p_i ~ Beta(alpha_i, beta_i).
        Leaf table, any horizon: a leaf table's, and horizon, the rollouts that each leaf still receives after
        the root action is fixed, from 0 (static value) to infinity (dynamic value); the closed form takes 0.
        Leaf table, any batch: and batch_size, how many rollouts a leaf gets together; voc is for all of them.
        Record: what `distill.backup` gives of each leaf of any tree, `schema.RECORD_UNITS`.

        remaining : rollouts left. tree : (n,), the rows of a tree side by side; remaining, horizon and
        batch_size may then be arrays of length n, and each tree is scored as if alone.
        deadline : a time of time.perf_counter(), such as time.perf_counter() + 0.02; once it has passed, the
        closed form answers. A duration alone is a time long past: always late.
        Raises InputError for arrays that form no leaf table (shapes, kinds of numbers); for invalid
        values only if `strict`, else they are flagged and the closed form scores the other rows.
        """
        kind = self._kind_for(columns)
        if tree is not None:
            return self._score_many(kind, columns, remaining, tree, deadline)
        return self._scored(self._filled(kind, columns, remaining), deadline)

    def pick(self, *, remaining: Any, deadline: float | None = None, **columns: Any) -> int:
        """Position of the leaf with the largest voc - cost, the first on ties; arguments as for `score`."""
        return self._picked(self._filled(self._kind_for(columns), columns, remaining), deadline)

    def hold(self, *, remaining: Any, **columns: Any) -> HeldLeaves:
        """The leaves of one tree kept ready: `update` what a rollout changed, then `pick` or `score` again.

        Arguments as for `score`; later calls may give another horizon or batch_size, as `change` does. Saves
        microseconds a call.
        """
        buffers = self._fill_with_care(self._kind_for(columns), columns, remaining, {})
        return HeldLeaves(buffers, self._scored, self._picked)

    # --- one call ---------------------------------------------------------------------------------

    def _scored(self, buffers: LeafBuffers, deadline: float | None) -> Scores:
        if not self._run(buffers, deadline, buffers.binding):
            return mended_scores(buffers, self.strict, self._batch, self.counters)
        out = buffers.out
        return Scores(
            out["voc"].copy(),
            out["batch"].copy(),
            out["voc_high"].copy()
            if buffers.has_bound
            else np.maximum(bounds(buffers, slice(None), self._batch), out["voc"]),
            out["in_range"].copy(),
            int(out["pick"]),
            bool(out["worth_it"]),
        )

    def _picked(self, buffers: LeafBuffers, deadline: float | None) -> int:
        if self._run(buffers, deadline, buffers.pick_binding):
            return int(buffers.pick)
        if buffers.answered:  # mending needs the values too
            buffers.answered = self._answers(buffers, buffers.binding)
        return int(mended(buffers, self.strict, self._batch, self.counters).net.argmax())

    def _kind_for(self, columns: dict[str, Any]) -> InputKind:
        """The file's kind, or without a file that of the columns; InputError where they are not its own."""
        kind = self.kind or kind_of(columns)
        if kind is None:
            raise InputError("columns", f"must be those of a {' or a '.join(KINDS)}", ", ".join(columns))
        if len(columns) != len(kind.keywords):
            for name in columns:
                if name not in kind.keywords:
                    raise InputError(name, f"is no column of a {kind.name}")
        return kind

    def _filled(self, kind: InputKind, columns: dict[str, Any], remaining: Any) -> LeafBuffers:
        """The calling thread's buffers for so many leaves, filled."""
        try:
            floats = kind.take(columns)
            buffers = self._local.kept[kind.name][len(floats[0])]
            buffers.fill(floats, columns, remaining)
        except (AttributeError, KeyError, OverflowError, TypeError, ValueError):
            return self._fill_with_care(kind, columns, remaining, self._local.kept[kind.name])
        return buffers

    def _run(self, buffers: LeafBuffers, deadline: float | None, binding: Any) -> bool:
        """Run the whole file, or its pick alone; False where the answer needs mending."""
        late = deadline is not None and has_passed(deadline)
        self.counters.decisions += 1
        buffers.answered = False
        if late:
            self.counters.late += 1
        elif self._session is not None and buffers.finite():
            buffers.answered = self._answers(buffers, binding)
            if buffers.answered:
                return b"\0" not in buffers.in_range.tobytes()
        buffers.in_range[:] = False
        return False

    def _answers(self, buffers: LeafBuffers, binding: Any) -> bool:
        """Run the file on the buffers; False where it fails."""
        try:
            (self._picker if binding is buffers.pick_binding else self._session).run_with_iobinding(binding)
        except Exception as e:  # onnxruntime raises its own types, e.g. for an action out of bounds
            buffers.usable(self.strict)
            if self.strict:
                raise ScorerFileError(f"the file failed: {_first_line(e)}") from None
            return False
        return True

    def _fill_with_care(
        self, kind: InputKind, columns: dict[str, Any], remaining: Any, kept: dict[int, LeafBuffers]
    ) -> LeafBuffers:
        """The way in for a first call and for anything but plain arrays, into buffers of `kept` or new."""
        arrays = number_arrays(kind, columns)
        first = arrays[kind.floats[0]]
        if first.ndim != 1 or not 1 <= len(first) <= MAX_LEAVES:
            raise InputError(kind.floats[0], f"must have shape (n,), n from 1 to {MAX_LEAVES}", first.shape)
        n = len(first)
        for name, x in arrays.items():
            if x.shape != (n,):
                raise InputError(name, f"must have shape ({n},), as {kind.floats[0]!r}", x.shape)
        scalars = {}
        for name, x in number_scalars(kind, columns, remaining).items():
            if x.size != 1:
                raise InputError(name, "must be one number", x.shape)
            scalars[name] = float(x.item())
        if n not in kept:
            if len(kept) >= _KEPT_SIZES:
                del kept[next(iter(kept))]
            kept[n] = LeafBuffers(n, kind, self._session, self._picker)
        kept[n].fill_with_care(arrays, scalars)
        return kept[n]

    def _score_many(
        self, kind: InputKind, columns: dict[str, Any], remaining: Any, tree: Any, deadline: float | None
    ) -> Scores:
        arrays = number_arrays(kind, columns)
        labels = number_array("tree", tree, "i")
        n = arrays[kind.floats[0]].size
        scalars = {
            name: np.full(n, x.item()) if x.size == 1 else x
            for name, x in number_scalars(kind, columns, remaining).items()
        }
        for name, x in {**arrays, "tree": labels, **scalars}.items():
            if x.shape != (n,) or n == 0:
                raise InputError(name, f"must have shape ({n or 'n'},), at least one leaf", x.shape)
        starts = np.flatnonzero(np.r_[True, labels[1:] != labels[:-1]]).tolist()
        if len(np.unique(labels)) != len(starts):
            raise InputError("tree", "rows of one tree must be side by side")
        parts = []
        for a, b in zip(starts, [*starts[1:], n], strict=True):
            part: dict[str, Any] = {name: x[a:b] for name, x in arrays.items()}
            part |= {name: float(x[a]) for name, x in scalars.items()}
            parts.append(self.score(deadline=deadline, **part))
        return Scores(
            np.concatenate([p.voc for p in parts]),
            np.concatenate([p.batch for p in parts]),
            np.concatenate([p.voc_high for p in parts]),
            np.concatenate([p.in_range for p in parts]),
            np.array([p.pick for p in parts]),
            np.array([p.worth_it for p in parts]),
        )

    def _self_test(self) -> None:
        """Hold the file against the answers stored in it."""
        compared = 0
        assert self.kind is not None
        for i, case in enumerate(self.facts["self_test"]):
            try:
                inputs: dict[str, Any] = self.kind.from_json(case["inputs"])
                got = self.score(**inputs)
                want = np.asarray(case["outputs"]["voc"], dtype=float)
                inside = np.asarray(case["outputs"]["in_range"], dtype=bool) & got.in_range
                off = np.abs(got.voc - want)[inside]
            except (AttributeError, IndexError, KeyError, TypeError, ValueError, DistillError) as e:
                raise ScorerFileError(f"self-test case {i} cannot be run: {_first_line(e)}") from None
            missed = np.sum(~(off <= _SELF_TEST_SLACK * np.max(want, initial=0.0)))
            if missed > _SELF_TEST_SHARE * len(off):
                raise ScorerFileError(f"self-test case {i} gives other values than those stored")
            compared += len(off)
        if compared == 0:
            raise ScorerFileError("self-test: no stored leaf is in the file's own range")
        self.counters = Counters()


def _session(data: bytes) -> Any:
    options = ort.SessionOptions()
    options.intra_op_num_threads = options.inter_op_num_threads = 1
    options.enable_mem_reuse = False  # a tenth faster
    options.log_severity_level = 4
    try:
        return ort.InferenceSession(data, options, providers=["CPUExecutionProvider"])
    except Exception as e:  # onnxruntime raises its own types
        raise ScorerFileError(f"onnxruntime refuses it: {_first_line(e)}") from None


def _first_line(error: BaseException) -> str:
    return (str(error).splitlines() or [type(error).__name__])[0][:200]
