"""Record the trees that an agent meets, without getting in its way; floor 4, light.

    recorder = Recorder("traces/", sample=0.01)
    ...
    recorder.see(mean=..., var=..., noise_var=..., gain=..., offset=..., action=..., cost=...,
                 remaining=100)

Win/loss leaves have alpha, beta, low, high in place of mean and variances; trees with chance nodes or
correlated leaves go to `see_record`.

The agent's thread draws the sample and copies the arrays of what was drawn. One daemon thread does the
rest: checks, packs and writes. Whatever goes wrong there or here is counted and never raised.
"""

from __future__ import annotations

import atexit
import math
import os
import queue
import random
import re
import threading
import time
import weakref
from dataclasses import dataclass
from typing import Any, Final

from distill.block_files import BlockFiles
from distill.errors import InputError
from distill.trace_line import MOST_LINE, Seen, copy_record, copy_table, hold_tree, pack, trace_line
from distill.tree import BeliefTree

__all__ = ["Recorder", "RecorderCounters"]


@dataclass
class RecorderCounters:
    """What happened since the recorder was made; `problem` is the text of the latest thing that went wrong.

    seen : calls. sampled : calls drawn for recording; each ends in exactly one of
    written : records on the disk. invalid : no valid tree. dropped : the queue was full or the recorder
    closed. over_cap : no room under the size caps. lost : in blocks that could not be written.
    errors : failed writes. files, bytes : files opened, and packed bytes written to them.
    """

    seen: int = 0
    sampled: int = 0
    written: int = 0
    invalid: int = 0
    dropped: int = 0
    over_cap: int = 0
    lost: int = 0
    errors: int = 0
    files: int = 0
    bytes: int = 0
    problem: str | None = None


class Recorder:
    """Writes a sample of an agent's trees to numbered `belief-tree/1` traces in `folder`.

    folder : made if missing. Files are `NAME-000001.jsonl.gz` and so on, never appended to by a later
        recorder; processes may share a folder.
    sample : share of the calls that is recorded, each drawn alone, 0 to 1; `seed` makes the draws repeat.
    max_file_bytes, max_total_bytes : packed bytes of a file, and of all files of that name in the folder.
    keep : "first" stops at the total, "last" deletes the oldest files of that name instead, also those
        that another process is writing: then give each process a name of its own.
    flush_seconds, block_bytes : a block is written when it is that old, or holds that much JSON.
    queue_bytes : memory for trees that wait for the writer; what does not fit is dropped.
    strict : for tests; invalid trees raise InputError in `see`, failed writes OSError in `flush`, `close`.

    A file is a row of gzip members, one a block, each brought to the disk before the next begins: after a
    crash, `traces.read_trees` gives every record of every whole block, and names the torn one if there is
    one. What a killed process loses is the queue and the unwritten block: `flush_seconds` or so.
    Raises InputError for parameters out of range, and nothing later. After a fork, parent and child each
    write files of their own. A worker that leaves by os._exit (multiprocessing) calls `close` first.

    >>> import tempfile; from distill.traces import read_trees
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     with Recorder(folder, name="shift") as recorder:
    ...         recorder.see(mean=[0.0, 1.0], var=[1.0, 2.0], noise_var=[4.0, 4.0], gain=[0.9, 1.0],
    ...                      offset=[0.5, 0.0], action=[0, 1], cost=[0.0, 0.0], remaining=40)
    ...         recorder.see(mean=[0.0], var=[-1.0], noise_var=[4.0], action=[0])
    ...     [tree.discount.tolist() for _, tree in read_trees(f"{folder}/shift-000001.jsonl.gz")]
    [[1.0, 1.0, 1.0, 0.9, 1.0]]
    >>> recorder.counters.written, recorder.counters.invalid, recorder.counters.problem
    (1, 1, 'var[0]: must be >= 0 and at most 1e+200; got -1.0')
    """

    def __init__(
        self,
        folder: str | os.PathLike[str],
        *,
        sample: float = 1.0,
        seed: int = 0,
        name: str = "trace",
        max_file_bytes: int = 64 * 2**20,
        max_total_bytes: int = 2**30,
        keep: str = "first",
        flush_seconds: float = 1.0,
        block_bytes: int = 2**18,
        queue_bytes: int = 2**24,
        strict: bool = False,
    ) -> None:
        if not _is_number(sample) or not 0 <= sample <= 1:
            raise InputError("sample", "must be from 0 to 1", sample)
        if not isinstance(name, str) or not re.fullmatch(r"[A-Za-z0-9_][A-Za-z0-9_.-]{0,99}", name):
            raise InputError("name", "must be letters, digits, '_', '-' and '.', at most 100", name)
        sizes = {"max_file_bytes": max_file_bytes, "block_bytes": block_bytes, "queue_bytes": queue_bytes}
        for what, size in sizes.items():
            if not _is_number(size) or not size >= 1:
                raise InputError(what, "must be at least 1", size)
        if not _is_number(max_total_bytes) or not max_total_bytes >= max_file_bytes:
            raise InputError("max_total_bytes", "must be at least max_file_bytes", max_total_bytes)
        if keep not in ("first", "last"):
            raise InputError("keep", "must be 'first' or 'last'", keep)
        if not _is_number(flush_seconds) or not 0 < flush_seconds <= 86_400:
            raise InputError("flush_seconds", "must be above 0 and at most 86400", flush_seconds)
        if type(seed) is not int:
            raise InputError("seed", "must be a whole number", seed)
        self.counters = RecorderCounters()
        self.strict = strict
        self._flush_seconds = flush_seconds
        self._block_bytes = block_bytes
        self._queue_bytes = queue_bytes
        self._files = BlockFiles(
            folder, name, most_file=max_file_bytes, most_total=max_total_bytes, keep=keep
        )
        self._random = random.Random(seed)
        # Gaps between drawn calls are geometric, which is as if each call were drawn alone.
        self._log_miss = math.log1p(-sample) if 0 < sample < 1 else 0.0
        self._every_gap = 1.0 if sample == 1 else math.inf
        self._closed = False
        self._fresh()
        self._left = self._gap()
        _RECORDERS.add(self)

    def see(
        self,
        *unnamed: object,
        mean: Any = None,
        var: Any = None,
        noise_var: Any = None,
        alpha: Any = None,
        beta: Any = None,
        low: Any = None,
        high: Any = None,
        gain: Any = None,
        offset: Any = None,
        action: Any = None,
        cost: Any = None,
        count: Any = None,
        remaining: Any = None,
        horizon: Any = None,
        batch_size: Any = None,
        extra: Any = None,
        **unknown: object,
    ) -> None:
        """Perhaps record a leaf table: the arguments that a scorer takes for one tree, length n each.

        Leaf i counts gain_i X_i + offset_i under root action action_i (0 to n - 1), X_i ~ N(mean_i,
        var_i); a rollout adds noise of variance noise_var_i and costs cost_i >= 0; 0 < gain_i <= 1.
        Win/loss leaves: alpha, beta, low, high instead, X_i = low_i + (high_i - low_i) p_i, p_i ~
        Beta(alpha_i, beta_i).
        Missing gain is 1, missing offset and cost are 0. count : rollouts that each leaf had so far, whole
        numbers. remaining : whole rollouts left. horizon (inf allowed), batch_size : those of a scorer's call
        that has them. extra : an object for JSON to keep beside the tree. The record has the root, a decision
        node an action in order of position, and the leaves in order, with gain as discount and offset as
        reward.
        Records with `count` and equal `extra`, which must name the `decision`, are stages of one decision, by
        which `infer` tests drift and noise. Draw the decisions to record yourself then, under sample=1: else
        each stage is drawn alone, and few decisions have two.
        Never raises (but `strict`): arguments that make no such record are counted as invalid.
        """
        if self._drawn():
            columns = {
                "mean": mean, "var": var, "noise_var": noise_var,
                "alpha": alpha, "beta": beta, "low": low, "high": high,
                "gain": gain, "offset": offset, "action": action, "cost": cost, "count": count,
                "remaining": remaining, "horizon": horizon, "batch_size": batch_size,
            }  # fmt: skip
            self._offer(copy_table, columns, extra, unnamed, unknown)

    def see_record(self, record: dict[str, Any]) -> None:
        """Perhaps record a tree of any kind, given as a `belief-tree/1` record: a dict of its columns.

        Columns are over nodes, parents before children: parent (-1 at the root), kind ("decision",
        "chance", "leaf"), reward, discount, prob, the leaf columns and the scalars; cov is leaves x leaves.
        Lists or NumPy arrays; at inner nodes leaf columns hold None or NaN. `format` may be left out.
        The lists are copied in the call, what they hold is checked later. Never raises (but `strict`):
        what makes no record is counted as invalid.

        >>> import tempfile; from distill.traces import read_trees
        >>> with tempfile.TemporaryDirectory() as folder:
        ...     with Recorder(folder) as recorder:
        ...         recorder.see_record({"parent": [-1, 0, 1, 1, 0], "kind": ["decision", "chance", "leaf",
        ...             "leaf", "leaf"], "prob": [None, None, 0.5, 0.5, None], "remaining": 40,
        ...             "alpha": [None, None, 1, 2, 1], "beta": [None, None, 1, 1, 1],
        ...             "low": [None, None, 0, 0, 0], "high": [None, None, 1, 1, 1]})
        ...     [tree.has_chance for _, tree in read_trees(f"{folder}/trace-000001.jsonl.gz")]
        [True]
        """
        if self._drawn():
            self._offer(copy_record, record)

    def see_tree(self, tree: BeliefTree) -> None:
        """Perhaps record a tree of any kind; never raises (but `strict`). Its arrays must stay unchanged."""
        if self._drawn():
            self._offer(hold_tree, tree)

    def flush(self, timeout: float = 5.0) -> bool:
        """Wait until what was seen so far is on the disk or counted; False if that takes longer (seconds)."""
        done = threading.Event()
        with self._lock:
            if self._thread is None or not self._thread.is_alive():
                return True
            self._queue.put(done)
        return done.wait(timeout) and self._without_failure()

    def close(self, timeout: float = 5.0) -> bool:
        """Write what is waiting and end the thread; later calls of `see` are dropped. False if not in time.

        Happens by itself when the interpreter exits.
        """
        with self._lock:
            self._closed = True
            thread = self._thread
            if thread is None:
                return True
            self._queue.put(None)
        thread.join(timeout)
        return not thread.is_alive() and self._without_failure()

    def __enter__(self) -> Recorder:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    # --- on the agent's thread --------------------------------------------------------------------

    def _fresh(self) -> None:
        """Everything that belongs to one process."""
        self._lock = threading.RLock()  # reentrant: a signal handler may call `see` inside `see`
        self._queue: queue.SimpleQueue[Seen | threading.Event | None] = queue.SimpleQueue()
        self._queued = 0
        self._thread: threading.Thread | None = None
        self._failure: OSError | None = None

    def _gap(self) -> float:
        if self._log_miss == 0:
            return self._every_gap
        return 1 + math.floor(math.log(1 - self._random.random()) / self._log_miss)

    def _drawn(self) -> bool:
        with self._lock:
            self.counters.seen += 1
            self._left -= 1
            if self._left > 0:
                return False
            self._left = self._gap()
            self.counters.sampled += 1
            return True

    def _offer(self, prepare: Any, *arguments: Any) -> None:
        try:
            item: Seen = prepare(*arguments)
            if self.strict:
                trace_line(item)
        except Exception as e:
            self._count(e, invalid=1)
            if self.strict:
                raise
            return
        try:
            with self._lock:
                if self._closed or self._queued + item.size > self._queue_bytes:
                    self.counters.dropped += 1
                    return
                if self._thread is None:
                    self._thread = threading.Thread(target=self._work, name="recorder", daemon=True)
                    self._thread.start()
                self._queue.put(item)
                self._queued += item.size
        except Exception as e:  # no thread can be started, or no memory is left
            if self._thread is not None and self._thread.ident is None:
                self._thread = None
            self._count(e, dropped=1)

    def _count(self, problem: BaseException | None = None, **more: int) -> None:
        with self._lock:
            for name, n in more.items():
                setattr(self.counters, name, getattr(self.counters, name) + n)
            if problem is not None:
                text = (str(problem).splitlines() or [""])[0][:300]
                ours = isinstance(problem, InputError)
                self.counters.problem = text if ours else f"{type(problem).__name__}: {text}"

    def _without_failure(self) -> bool:
        failure, self._failure = self._failure, None
        if self.strict and failure is not None:
            raise failure
        return True

    # --- on the writer's thread -------------------------------------------------------------------

    def _work(self) -> None:
        lines: list[bytes] = []
        size, due = 0, 0.0
        while True:
            item: Seen | threading.Event | None
            try:
                item = self._queue.get(timeout=max(0.0, due - time.monotonic()) if lines else None)
            except queue.Empty:
                item = _DUE
            if isinstance(item, Seen):
                line = self._line_or_count(item)
                if line is not None:
                    due = due if lines else time.monotonic() + self._flush_seconds
                    lines.append(line)
                    size += len(line)
                with self._lock:
                    self._queued -= item.size
                _pause()
                if size < self._block_bytes and time.monotonic() < due:
                    continue
            if lines:
                self._write(lines)
                lines, size = [], 0
            if item is None:
                self._files.close()
                return
            if isinstance(item, threading.Event):
                item.set()

    def _line_or_count(self, item: Seen) -> bytes | None:
        try:
            line = trace_line(item, _pause)
        except Exception as e:
            self._count(e, invalid=1)
            return None
        if len(line) > MOST_LINE:
            self._count(InputError("record", f"must be at most {MOST_LINE >> 20} MB long"), over_cap=1)
            return None
        return line

    def _write(self, lines: list[bytes]) -> None:
        n = len(lines)
        try:
            block = pack(b"".join(lines))
            if len(block) > self._files.most_file and n > 1:
                self._write(lines[: n // 2])
                self._write(lines[n // 2 :])
            elif self._files.append(block):
                self._count(written=n, bytes=len(block))
            else:
                self._count(InputError("traces", "must stay under their size caps"), over_cap=n)
        except Exception as e:
            self._count(e, lost=n, errors=1)
            self._failure = e if isinstance(e, OSError) else OSError(str(e))
        self.counters.files = self._files.opened

    def _after_fork(self) -> None:
        """In the child: the queue, the thread and the open file are the parent's."""
        self._files.close()
        self._files.opened = 0
        self.counters = RecorderCounters()
        self._fresh()


_DUE: Final = threading.Event()
_RECORDERS: weakref.WeakSet[Recorder] = weakref.WeakSet()


def _pause() -> None:
    """Let the agent have the interpreter: a shorter sleep ends before a waiting thread wakes up."""
    time.sleep(5e-5)


def _is_number(x: object) -> bool:
    return isinstance(x, (int, float)) and not isinstance(x, bool)


def _close_all() -> None:
    for recorder in list(_RECORDERS):
        recorder.strict = False
        recorder.close()


def _fresh_all() -> None:
    for recorder in list(_RECORDERS):
        recorder._after_fork()


atexit.register(_close_all)
if hasattr(os, "register_at_fork"):
    os.register_at_fork(after_in_child=_fresh_all)
