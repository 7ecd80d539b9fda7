"""A full disk, and the memory that generating and loading take."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path

import pytest

from distill.family import draw, load_family
from distill.generate import Asked, Traces, add, generate
from distill.traces import write_trees

FAMILIES = Path(__file__).parents[1] / "datasets" / "families"
COLD = load_family(FAMILIES / "cold-store.toml")


def _bytes(folder):
    return {path.name: path.read_bytes() for path in Path(folder).iterdir()}


def _run(code, *arguments):
    path = os.pathsep.join(filter(None, (str(Path(__file__).parent), os.environ.get("PYTHONPATH"))))
    done = subprocess.run(
        [sys.executable, "-c", code, *map(str, arguments)],
        capture_output=True,
        text=True,
        check=False,
        env={**os.environ, "PYTHONPATH": path},
    )
    assert done.returncode == 0, done.stderr
    return json.loads(done.stdout.splitlines()[-1])


# --- a full disk -----------------------------------------------------------------------------------

# In a mount namespace of its own: a small file system, the command twice, and the room made between.
_ON_SMALL_DISK = """
import contextlib, io, json, pathlib, shutil, subprocess, sys
from distill.cli import run

mount, size, out, workers, added = sys.argv[1:6]
folder = f"{mount}/d"
command = ["generate", "--family", "cold-store", "--trees", "120", "--seed", "1", "--value", "static"]
commands = [[*command, "--out", folder, "--workers", workers]]
if added:
    commands.append(["generate", "--add", added, "--out", folder, "--workers", workers])
subprocess.run(["mount", "-t", "tmpfs", "-o", f"size={size}", "tmpfs", mount], check=True)
said, codes, shards = io.StringIO(), [], 0
with contextlib.redirect_stderr(said), contextlib.redirect_stdout(io.StringIO()):
    for line in commands:
        code = run(line)
        codes.append(code)
        if code:
            text = pathlib.Path(folder, "manifest.json")
            shards = len(json.loads(text.read_text())["shards"]) if text.exists() else 0
            subprocess.run(["mount", "-o", "remount,size=64m", mount], check=True)
            codes.append(run(line))
shutil.copytree(folder, out)
print(json.dumps({"codes": codes, "said": said.getvalue(), "shards": shards}))
"""


def _small_disk(tmp_path, kilobytes, workers=1, added=""):
    (tmp_path / "mount").mkdir(exist_ok=True)
    out = tmp_path / f"out-{kilobytes}"
    done = subprocess.run(
        ["unshare", "--map-root-user", "--mount", sys.executable, "-c", _ON_SMALL_DISK,
         str(tmp_path / "mount"), f"{kilobytes}k", str(out), str(workers), str(added)],
        capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    return json.loads(done.stdout.splitlines()[-1]), _bytes(out)


@pytest.fixture(scope="module")
def small_disks():
    """Whether this system lets a user mount one."""
    try:
        command = ["unshare", "--map-root-user", "--mount", "mount", "-t", "tmpfs", "tmpfs", "/mnt"]
        able = subprocess.run(command, capture_output=True, check=False).returncode == 0
    except OSError:
        able = False
    if not able:
        pytest.skip("mounting a small file system takes user namespaces")


@pytest.fixture(scope="module")
def whole(tmp_path_factory):
    """120 trees in 3 shards, and with 60 added, labelled with room enough."""
    folder = tmp_path_factory.mktemp("whole")
    generate(COLD, folder / "d", trees=120, seed=1, asked=Asked(horizon=0))
    plain = _bytes(folder / "d")
    write_trees(folder / "more.jsonl", [draw(COLD, 7, i) for i in range(60)])
    add(Traces.read([folder / "more.jsonl"]), folder / "d")
    return plain, _bytes(folder / "d"), folder / "more.jsonl"


@pytest.mark.usefixtures("small_disks")
def test_a_full_disk_is_one_error_and_the_command_goes_on_from_there(tmp_path, whole):
    found, files = _small_disk(tmp_path, 300)
    assert found["codes"] == [2, 0]
    assert len(found["said"].splitlines()) == 1
    assert "No space left on device: finished shards are kept, and the same command goes on" in found["said"]
    assert str(tmp_path / "mount" / "d") in found["said"]
    assert 0 < found["shards"] < 3
    assert files == whole[0]


@pytest.mark.slow
@pytest.mark.parametrize("workers", [1, 2])
@pytest.mark.usefixtures("small_disks")
def test_disks_that_fill_at_any_place(tmp_path, whole, workers):
    """From no room for a manifest to room for all but the last file, of the run or of the addition."""
    needed = sum(len(data) for data in whole[1].values()) // 1024
    places = set()
    for kilobytes in range(4, needed + 80, 40 if workers == 1 else 160):
        found, files = _small_disk(tmp_path, kilobytes, workers, whole[2])
        assert found["said"].count("No space left on device") == found["codes"].count(2)
        assert len(found["said"].splitlines()) == found["codes"].count(2)
        assert files == whole[1]
        places.add((tuple(found["codes"]), found["shards"]))
    assert {codes for codes, _ in places} == {(2, 0, 0), (0, 2, 0), (0, 0)}
    assert len(places) >= (5 if workers == 1 else 3)


# --- memory ----------------------------------------------------------------------------------------

_GENERATE = """
import json, sys
from distill.family import load_family
from distill.generate import Asked, Traces, generate
from peak_memory import peak_mb
trees, source, out = int(sys.argv[1]), sys.argv[2], sys.argv[3]
source = load_family(source) if source.endswith(".toml") else Traces.read([source])
generate(source, out, trees=trees, asked=Asked(horizon=0, batch=1), shard_trees=500)
print(json.dumps(peak_mb()))
"""
_CEILING = 400  # MB of one process that draws and labels, libraries and compiled methods included


@pytest.mark.slow
def test_memory_does_not_grow_with_the_number_of_trees(tmp_path):
    """Drawn and recorded: ten times as many take no more than a few MB on top, below the stated ceiling."""
    write_trees(tmp_path / "many.jsonl", [draw(COLD, 3, i) for i in range(10_000)])
    for source in (FAMILIES / "cold-store.toml", tmp_path / "many.jsonl"):
        few = _run(_GENERATE, 1000, source, tmp_path / f"few-{source.stem}")
        many = _run(_GENERATE, 10_000, source, tmp_path / f"many-{source.stem}")
        assert many < few + 40, source
        assert many < _CEILING, source


_LOAD = """
import json, sys, time
from distill.candidates import Candidates
from peak_memory import peak_mb
start = time.perf_counter()
c, _ = Candidates.read(sys.argv[1])
seconds = time.perf_counter() - start
print(json.dumps({"rows": len(c.label), "seconds": seconds, "peak": peak_mb()}))
"""


@pytest.mark.slow
def test_a_million_candidates_load_within_a_gigabyte_and_three_seconds(tmp_path):
    workers = min(os.cpu_count() or 1, 4)
    generate(COLD, tmp_path / "d", trees=38_500, asked=Asked(horizon=0, batch=1), workers=workers)
    runs = [_run(_LOAD, tmp_path / "d") for _ in range(3)]
    assert runs[0]["rows"] >= 1_000_000
    assert max(r["peak"] for r in runs) < 1024
    assert min(r["seconds"] for r in runs) < 3
