"""A real Dask scheduler and workers, processes of this machine, that tests may kill."""

from __future__ import annotations

import contextlib
import json
import subprocess
import sys
import time
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path

_DASK = Path(sys.executable).parent / "dask"


@dataclass
class Cluster:
    """Its address and processes."""

    address: str
    scheduler: subprocess.Popen[bytes]
    workers: list[subprocess.Popen[bytes]] = field(default_factory=list)


@contextlib.contextmanager
def dask_cluster(folder: Path, workers: int = 2) -> Iterator[Cluster]:
    """Started in `folder`, one thread a worker, no keeper that would restart one; ended in any case."""
    about = folder / "scheduler.json"
    quiet = {"stdout": subprocess.DEVNULL, "stderr": subprocess.DEVNULL, "cwd": folder}
    options = ["--host", "127.0.0.1", "--port", "0", "--no-dashboard", "--scheduler-file", str(about)]
    scheduler = subprocess.Popen([_DASK, "scheduler", *options], **quiet)
    cluster = Cluster("", scheduler)
    try:
        cluster.address = _address(about)
        for _ in range(workers):
            options = ["--nthreads", "1", "--no-nanny", "--no-dashboard", "--local-directory", str(folder)]
            cluster.workers.append(subprocess.Popen([_DASK, "worker", cluster.address, *options], **quiet))
        yield cluster
    finally:
        for process in (*cluster.workers, scheduler):
            process.kill()
            process.wait()


def _address(about: Path, seconds: float = 60.0) -> str:
    end = time.monotonic() + seconds
    while time.monotonic() < end:
        with contextlib.suppress(OSError, ValueError):
            return json.loads(about.read_text())["address"]
        time.sleep(0.05)
    raise TimeoutError("no Dask scheduler came up")
