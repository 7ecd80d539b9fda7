"""Our own files: what is broken is told by its name, and writing replaces regular files alone."""

from __future__ import annotations

import os
import socket
import stat
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from distill import tour
from distill.commands.report import _read as read_figures
from distill.conformance import read_vectors
from distill.errors import InputError
from distill.files import read_json, write_atomic
from distill.rehearse.claim import claim
from distill.rehearse.rehearsal import rehearse
from distill.rehearse.sheets import read_summary
from distill.shards import read_manifest
from distill.ship import ship

# File name -> who reads it, given its path.
READERS: dict[str, Callable[[Path], Any]] = {
    "any.json": read_json,
    "campaign.json": lambda path: claim(path.parent, {"seeds": 2, "tuning_seeds": 0, "stop_seeds": None}, {}),
    "rehearsal.json": lambda path: rehearse([], [], [], path.parent),
    "summary.json": lambda path: read_summary(path.parent),
    "front.json": lambda path: ship(path.parent, path.with_suffix(".onnx")),
    "figures.json": read_figures,
    "manifest.json": lambda path: read_manifest(path.parent),
    "vectors.json": read_vectors,
    "rehearsal/campaign.json": lambda path: tour._rehearse(path.parents[1], 0, lambda *_: None),
}
BROKEN = {b"{": "double quotes", b"\xff{}": "decode", b"[" * 200_000: "recursion"}


@pytest.mark.parametrize("name", READERS)
@pytest.mark.parametrize("data", BROKEN, ids=BROKEN.values())
def test_a_broken_file_is_told_as_one(name: str, data: bytes, tmp_path: Path) -> None:
    path = tmp_path / name
    path.parent.mkdir(exist_ok=True)
    path.write_bytes(data)
    with pytest.raises(InputError) as told:
        READERS[name](path)
    assert str(told.value).startswith(f"{path}: must be valid JSON (")
    assert BROKEN[data] in str(told.value)


def test_a_tour_takes_no_list_for_a_rehearsal(tmp_path: Path) -> None:
    path = tmp_path / "rehearsal" / "campaign.json"
    path.parent.mkdir()
    path.write_text("[]")
    with pytest.raises(InputError, match="must not hold a rehearsal of other problems"):
        READERS["rehearsal/campaign.json"](path)
    assert path.exists()


# --- how a file is replaced ------------------------------------------------------------------------


@pytest.mark.parametrize(("umask", "mode"), [(0o077, 0o600), (0o022, 0o644), (0o002, 0o664)])
def test_a_new_file_has_the_mode_that_the_umask_gives(umask: int, mode: int, tmp_path: Path) -> None:
    before = os.umask(umask)
    try:
        write_atomic(tmp_path / "new.json", b"new")
    finally:
        os.umask(before)
    assert stat.S_IMODE((tmp_path / "new.json").stat().st_mode) == mode


def test_a_replaced_file_keeps_its_mode(tmp_path: Path) -> None:
    path = tmp_path / "mine.json"
    path.write_bytes(b"old")
    path.chmod(0o640)
    write_atomic(path, b"new")
    assert path.read_bytes() == b"new"
    assert stat.S_IMODE(path.stat().st_mode) == 0o640


def test_a_link_stays_and_its_target_is_replaced(tmp_path: Path) -> None:
    target, link, ahead = tmp_path / "far" / "data.json", tmp_path / "link.json", tmp_path / "ahead.json"
    target.parent.mkdir()
    target.write_bytes(b"old")
    link.symlink_to(target)
    ahead.symlink_to(Path("far") / "later.json")  # to a file that is not there yet
    for path in (link, ahead):
        write_atomic(path, b"new")
        assert path.is_symlink()
        assert path.read_bytes() == b"new"
    assert sorted(p.name for p in target.parent.iterdir()) == ["data.json", "later.json"]
    assert target.read_bytes() == b"new"


def test_a_name_may_be_as_long_as_the_file_system_takes(tmp_path: Path) -> None:
    path = tmp_path / ("ä" * 125 + ".json")
    write_atomic(path, b"new")
    assert path.read_bytes() == b"new"


def test_a_pipe_and_a_device_are_written_through_and_stay(tmp_path: Path) -> None:
    pipe, link = tmp_path / "pipe", tmp_path / "null"
    os.mkfifo(pipe)
    link.symlink_to("/dev/null")
    reader = os.open(pipe, os.O_RDONLY | os.O_NONBLOCK)
    try:
        write_atomic(pipe, b"through")
        assert os.read(reader, 100) == b"through"
    finally:
        os.close(reader)
    write_atomic(link, b"gone")
    assert pipe.is_fifo()
    assert link.is_char_device()
    assert sorted(p.name for p in tmp_path.iterdir()) == ["null", "pipe"]


def test_standard_output_that_is_a_file_is_written_on(tmp_path: Path) -> None:
    """What is printed before and after stands around it."""
    code = (
        "import sys; from distill.files import write_atomic; print('a', flush=True)\n"
        "write_atomic('/dev/stdout', b'b\\n'); print('c')"
    )
    with (tmp_path / "out").open("wb") as f:
        subprocess.run([sys.executable, "-c", code], stdout=f, check=True)
    assert (tmp_path / "out").read_text() == "a\nb\nc\n"


def test_what_is_no_file_is_refused_by_name_and_stays(tmp_path: Path) -> None:
    with socket.socket(socket.AF_UNIX) as server:
        path = tmp_path / "s"
        server.bind(str(path))
        for place in (path, tmp_path):
            with pytest.raises(OSError, match="is no regular file") as told:
                write_atomic(place, b"new")
            assert told.value.filename == str(place)
        assert path.is_socket()
    assert [p.name for p in tmp_path.iterdir()] == ["s"]
