"""One reader of our own JSON files: what is broken is told by its name and what is wrong with it."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from distill import tour
from distill.commands.report import _read as read_figures
from distill.conformance import read_vectors
from distill.errors import InputError
from distill.files import read_json
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
