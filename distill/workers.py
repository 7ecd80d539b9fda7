"""Runs calls on this process, on processes of this machine, or on a Dask cluster; floor 5.

Results come as they are ready. A lost worker or scheduler ends in one error that says so: calls that are
repeated later give the same results, so nothing is lost but time.
"""

from __future__ import annotations

import asyncio
import concurrent.futures
import contextlib
import logging
import multiprocessing
import os
import signal
import sys
import threading
import time
import warnings
from collections.abc import Callable, Generator, Iterable, Iterator
from pathlib import Path
from typing import Any, Final

from joblib import Parallel, delayed

from distill.errors import InputError, WorkersError

__all__ = ["local_pool", "run_calls"]

_CONNECT_SECONDS: Final = 10
_NO_WORKER_SECONDS: Final = 60.0  # a cluster's own keeper may bring dead workers back
_LOOK_SECONDS: Final = 0.5
_LEAST_AHEAD: Final = 8
_SCHEDULER: Final = "the scheduler was lost"
_WORKERS: Final = "no worker is left, or has come in time"
_HOW: Final[dict[str, Any]] = {
    "return_as": "generator_unordered", "pre_dispatch": "2*n_jobs", "batch_size": 1
}  # fmt: skip

Call = tuple[Callable[..., Any], tuple[Any, ...]]


def run_calls(
    calls: Iterable[Call], *, workers: int = 1, dask: str | None = None
) -> Generator[Any, None, None]:
    """Yields the results of (function, arguments), in any order.

    workers : processes of this machine; 1 stays in this one. dask : address of a running Dask scheduler,
    whose workers are used instead, through joblib's own Dask backend.
    Arguments are taken as needed, two ahead for each worker, on a cluster sixteen at least. Errors of a call
    pass through. Raises InputError where no scheduler answers, and WorkersError where workers are lost.
    """
    if dask is None:
        pool = local_pool(workers, **_HOW)
        try:
            yield from _closed_quietly(pool(delayed(function)(*args) for function, args in calls))
        except concurrent.futures.BrokenExecutor:
            raise WorkersError("a worker process died; was there memory enough for each?") from None
    else:
        with _cluster(dask) as watch:
            yield from watch.results(delayed(function)(*args) for function, args in calls)


def local_pool(workers: int, **how: Any) -> Parallel:
    """Processes of this machine that stand where this one stands. how : for joblib's `Parallel`.

    joblib keeps its workers for later calls, and those would go on in the folder, and find the modules, of
    the call that they were started for: another folder or search path has new ones. Ctrl-C in a terminal
    goes to all processes; what it means is for this one to say.
    """
    return Parallel(n_jobs=workers, initializer=_stand, initargs=(str(Path.cwd()), tuple(sys.path)), **how)


def _stand(folder: str, path: tuple[str, ...]) -> None:
    os.chdir(folder)
    sys.path[:] = path
    signal.signal(signal.SIGINT, signal.SIG_IGN)


def _closed_quietly(results: Any) -> Iterator[Any]:
    """The results; whoever stops early knows it, and needs no warning about calls under way."""
    try:
        # `yield from` would close the inner ones before `finally`.
        for result in results:  # noqa: UP028
            yield result
    finally:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            results.close()


@contextlib.contextmanager
def _cluster(address: str) -> Iterator[_Watch]:
    with _quiet("distributed", "distributed.client", "tornado.application"):
        client = _client(address)
        try:
            yield _Watch(client, address)
        finally:
            with contextlib.suppress(OSError):
                client.close(timeout=2)


def _client(address: str) -> Any:
    try:
        from distributed import Client
    except ImportError:
        rule = "needs the cluster extra: pip install '.[cluster]' in a checkout of voc-distill"
        raise InputError("dask", rule) from None
    stalled = False
    while True:
        try:
            return Client(address, timeout=_CONNECT_SECONDS, set_as_default=False)
        except (OSError, ValueError, TypeError) as e:
            reason = " ".join(str(e).split())
            rule = f"must be the address of a running scheduler ({reason})"
            raise InputError("dask", rule, address) from None
        except AssertionError:  # Its own thread has not come up in 10 s: this machine stood still.
            if stalled:
                raise WorkersError("this machine is too busy to ask the scheduler") from None
            stalled = True


@contextlib.contextmanager
def _quiet(*names: str) -> Iterator[None]:
    """What goes wrong is said once, by our own error."""
    loggers = [logging.getLogger(name) for name in names]
    levels = [logger.level for logger in loggers]
    for logger in loggers:
        logger.setLevel(logging.CRITICAL)
    try:
        yield
    finally:
        for logger, level in zip(loggers, levels, strict=True):
            logger.setLevel(level)


class _Watch:
    """Calls on a cluster, and an eye on its health: joblib alone waits for ever for what is lost."""

    def __init__(self, client: Any, address: str) -> None:
        self._client, self._address = client, address
        self._lost = ""
        self._over = threading.Event()

    def results(self, calls: Iterable[Any]) -> Iterator[Any]:
        from joblib._dask import DaskDistributedBackend

        watch = self

        class Backend(DaskDistributedBackend):  # type: ignore[misc]
            def submit(self, func: Any, callback: Any = None) -> Any:
                future = super().submit(func, callback)
                future.add_done_callback(watch._failed)
                return future

            def effective_n_jobs(self, n_jobs: int) -> int:
                # One would make joblib work here, and few starve workers that come later.
                return max(int(super().effective_n_jobs(n_jobs)), _LEAST_AHEAD)

        backend = Backend(client=self._client, wait_for_workers_timeout=_NO_WORKER_SECONDS)
        self._pool = Parallel(n_jobs=-1, backend=backend, **_HOW)
        watcher = threading.Thread(target=self._look, daemon=True)
        watcher.start()
        try:
            yield from _closed_quietly(self._pool(calls))
        except concurrent.futures.CancelledError:
            raise WorkersError(f"{self._address}: {self._lost or _SCHEDULER}") from None
        except (TimeoutError, multiprocessing.TimeoutError):
            # How joblib ends when `_end` lets it, or when no first worker comes.
            raise WorkersError(f"{self._address}: {self._lost or _WORKERS}") from None
        finally:
            self._over.set()
            watcher.join()

    def _failed(self, future: concurrent.futures.Future[Any]) -> None:
        error = None if future.cancelled() else future.exception()
        if error is not None:
            self._end(" ".join(str(error).split()))

    def _look(self) -> None:
        seen = time.monotonic()
        while not self._over.wait(_LOOK_SECONDS):
            if self._client.status != "running":
                self._end(_SCHEDULER)
                return
            try:
                workers = self._client.scheduler_info()["workers"]
            except (OSError, RuntimeError, asyncio.CancelledError, concurrent.futures.CancelledError):
                continue  # lost in this moment; the status says so at the next look
            seen = time.monotonic() if workers else seen
            if time.monotonic() - seen > _NO_WORKER_SECONDS:
                self._end(_WORKERS)
                return

    def _end(self, reason: str) -> None:
        """Let the thread that waits for results stop, at its next look."""
        self._lost = self._lost or reason
        self._pool.timeout = 0
