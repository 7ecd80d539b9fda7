"""The same bytes from a Dask cluster, and one clear error where processes are lost."""

from __future__ import annotations

import importlib
import math
import os
import signal
import sys
import threading
import time
from pathlib import Path

import distributed
import numpy as np
import psutil
import pytest
from dask_cluster import dask_cluster

from distill import generate as generating
from distill import workers
from distill.cli import run
from distill.errors import InputError, WorkersError
from distill.family import draw, load_family
from distill.generate import Asked, Traces, add, generate
from distill.labelling import code_versions
from distill.traces import write_trees
from distill.workers import run_calls

FAMILIES = Path(__file__).parents[1] / "datasets" / "families"
COLD = load_family(FAMILIES / "cold-store.toml")


def _bytes(folder):
    return {path.name: path.read_bytes() for path in folder.iterdir()}


def _labelled(folder, trees=60, shard_trees=5, horizon=0, **how):
    plan = {"trees": trees, "seed": 1, "asked": Asked(horizon=horizon), "shard_trees": shard_trees}
    return generate(COLD, folder, **plan, **how)


def test_results_come_from_this_process_and_from_others():
    for n in (1, 2):
        assert sorted(run_calls(((divmod, (i, 7)) for i in range(20)), workers=n)) == [
            divmod(i, 7) for i in range(20)
        ]


def test_workers_stand_where_their_caller_stands_now(tmp_path, monkeypatch):
    """joblib keeps them from call to call, and those of the first call know neither folder nor module."""
    for name in ("first", "second"):
        folder = tmp_path / name
        folder.mkdir()
        (folder / f"{name}_module.py").write_text("")
        monkeypatch.chdir(folder)
        monkeypatch.setattr(sys, "path", [*sys.path, str(folder)])
        calls = [(os.getcwd, ()), (importlib.import_module, (f"{name}_module",))]
        found = [str(result) for call in calls for result in run_calls([call] * 3, workers=2)]
        assert found[:3] == [str(folder)] * 3
        assert all(str(folder) in text for text in found[3:])


def test_an_interrupt_is_for_the_caller_to_take():
    """Ctrl-C in a terminal goes to all processes; workers that took it crashed now and then."""
    assert set(run_calls([(signal.getsignal, (signal.SIGINT,))] * 3, workers=2)) == {signal.SIG_IGN}
    assert signal.getsignal(signal.SIGINT) is signal.default_int_handler


def test_a_process_that_dies_is_one_clear_error():
    with pytest.raises(WorkersError, match="a worker process died; was there memory enough"):
        list(run_calls([(os._exit, (1,))] * 4, workers=2))


def test_errors_of_a_call_pass_through():
    with pytest.raises(ZeroDivisionError):
        list(run_calls([(divmod, (1, 0))] * 3, workers=2))


def test_stopping_early_is_quiet_and_ends_the_calls():
    results = run_calls(((pow, (i, 2)) for i in range(1000)), workers=2)
    assert next(results) is not None
    results.close()


def test_no_scheduler_at_the_address(tmp_path, monkeypatch, capsys):
    monkeypatch.setattr(workers, "_CONNECT_SECONDS", 0.3)
    for address in ("tcp://127.0.0.1:9", "127.0.0.1:9", "nonsense://x", ""):
        with pytest.raises(InputError, match="dask: must be the address of a running scheduler"):
            _labelled(tmp_path / "d", dask=address)
    code = run(["generate", "--family", "cold-store", "--trees", "3", "--out", str(tmp_path / "e"),
                "--dask", "127.0.0.1:9"])  # fmt: skip
    err = capsys.readouterr().err
    assert code == 2
    assert len(err.splitlines()) == 1


def test_a_cluster_writes_the_same_bytes(tmp_path):
    """A family, a resumed half of it, and recorded trees that are added, each against one process here."""
    traces = tmp_path / "more.jsonl"
    write_trees(traces, [draw(COLD, 9, i) for i in range(8)])
    _labelled(tmp_path / "here")
    with dask_cluster(tmp_path) as cluster:
        _labelled(tmp_path / "there", dask=cluster.address)
        assert _bytes(tmp_path / "there") == _bytes(tmp_path / "here")
        for folder, dask in (("here", None), ("there", cluster.address)):
            add(Traces.read([traces]), tmp_path / folder, dask=dask)
        assert _bytes(tmp_path / "there") == _bytes(tmp_path / "here")


def test_the_work_is_done_on_the_cluster_from_its_first_worker_on(tmp_path):
    with dask_cluster(tmp_path, workers=1) as cluster:
        found = set(run_calls(((os.getpid, ()) for _ in range(30)), dask=cluster.address))
        assert found == {cluster.workers[0].pid}


@pytest.mark.parametrize("stalls", [1, 2])
def test_a_machine_that_stands_still_is_given_a_second_chance(stalls, tmp_path, monkeypatch):
    """As the client does where its own thread does not come up in time."""
    real, left = distributed.Client, [stalls]

    def client(*args, **kwargs):
        if left[0]:
            left[0] -= 1
            raise AssertionError
        return real(*args, **kwargs)

    monkeypatch.setattr(distributed, "Client", client)
    with dask_cluster(tmp_path, workers=1) as cluster:
        calls = run_calls([(divmod, (7, 2))], dask=cluster.address)
        if stalls == 1:
            assert list(calls) == [(3, 1)]
        else:
            with pytest.raises(WorkersError, match="this machine is too busy to ask the scheduler"):
                list(calls)


def test_no_worker_is_one_clear_error(tmp_path, monkeypatch):
    monkeypatch.setattr(workers, "_NO_WORKER_SECONDS", 1.0)
    with (
        dask_cluster(tmp_path, workers=0) as cluster,
        pytest.raises(WorkersError, match="no worker is left, or has come in time; finished shards are kept"),
    ):
        _labelled(tmp_path / "d", dask=cluster.address)


def test_a_worker_of_another_version_is_refused(tmp_path, monkeypatch):
    monkeypatch.setattr(generating, "code_versions", lambda: {**code_versions(), "numpy": "0.9"})
    with pytest.raises(InputError, match=r"worker: numpy: must be '0.9' as here; got '"):
        _labelled(tmp_path / "d")
    assert not list((tmp_path / "d").glob("*.parquet"))


# --- killed ----------------------------------------------------------------------------------------


# Shards long enough that labelling, not writing, takes the time, so that a kill meets work under way.
_LONG = {"trees": 2000, "shard_trees": 40, "horizon": math.inf}


@pytest.fixture(scope="module")
def whole(tmp_path_factory):
    """2,000 trees in 50 shards, labelled in one go."""
    folder = tmp_path_factory.mktemp("whole")
    _labelled(folder, **_LONG)
    return _bytes(folder)


def _kill_when(folder, shards, victims):
    """Kill processes once that many shards are written."""

    def wait():
        end = time.monotonic() + 60
        while time.monotonic() < end and len(list(folder.glob("trees-*.parquet"))) < shards:
            time.sleep(0.002)
        for victim in victims:
            victim.kill()

    thread = threading.Thread(target=wait)
    thread.start()
    return thread


def _with_a_kill(folder, shards, victims_of):
    """Label on a cluster of which something is killed on the way; the error's text, or None."""
    folder.mkdir()
    with dask_cluster(folder) as cluster:
        killer = _kill_when(folder / "d", shards, victims_of(cluster))
        try:
            _labelled(folder / "d", **_LONG, dask=cluster.address)
        except WorkersError as e:
            return str(e)
        finally:
            killer.join()
    return None


@pytest.mark.slow
def test_a_killed_process_of_this_machine_is_one_error_and_the_run_resumes(tmp_path, whole):
    """As the system does it where memory runs out."""
    for i, after in enumerate(np.random.default_rng(2).integers(1, 20, 5)):
        folder = tmp_path / str(i)
        killer = threading.Thread(target=_kill_a_child_when, args=(folder, int(after)))
        killer.start()
        with pytest.raises(WorkersError, match=r"a worker process died.*; finished shards are kept"):
            _labelled(folder, **_LONG, workers=2)
        killer.join()
        _labelled(folder, **_LONG)
        assert _bytes(folder) == whole


def _kill_a_child_when(folder, shards):
    end = time.monotonic() + 60
    while time.monotonic() < end and len(list(folder.glob("trees-*.parquet"))) < shards:
        time.sleep(0.002)
    for child in psutil.Process().children(recursive=True):
        command = " ".join(child.cmdline())
        if "loky" in command and "tracker" not in command:
            child.kill()
            return


@pytest.mark.slow
def test_a_killed_worker_s_shards_are_done_by_the_other(tmp_path, whole):
    for i, after in enumerate(np.random.default_rng(0).integers(0, 25, 10)):
        assert _with_a_kill(tmp_path / str(i), int(after), lambda c: c.workers[:1]) is None
        assert _bytes(tmp_path / str(i) / "d") == whole


@pytest.mark.slow
@pytest.mark.parametrize(
    ("victims_of", "times", "reason"),
    [
        (lambda c: [c.scheduler], 10, "the scheduler was lost"),
        (lambda c: c.workers, 5, "no worker is left, or has come in time"),
    ],
    ids=["scheduler", "all workers"],
)
def test_a_lost_cluster_is_one_error_and_the_run_resumes(
    tmp_path, whole, monkeypatch, victims_of, times, reason
):
    monkeypatch.setattr(workers, "_NO_WORKER_SECONDS", 10.0)
    lost = 0
    for i, after in enumerate(np.random.default_rng(1).integers(1, 20, times)):
        said = _with_a_kill(tmp_path / str(i), int(after), victims_of)
        if said is not None:
            assert f"{reason}; finished shards are kept" in said
            lost += 1
            _labelled(tmp_path / str(i) / "d", **_LONG)
        assert _bytes(tmp_path / str(i) / "d") == whole
    assert lost >= 0.6 * times
