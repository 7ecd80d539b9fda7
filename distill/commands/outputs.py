"""What a command may write over: no input of its own, and only what the same command left before.

Told by reading a file, since a name says little: `--page data/manifest.json` would cost a dataset.
"""

from __future__ import annotations

import gzip
import json
import zlib
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

from distill.errors import InputError, ScorerFileError
from distill.files import is_stream
from distill.schema import AUDIT_FORMAT, SCORER_FORMAT
from distill.scorer_file import MAX_BYTES
from distill.sheet import FRONT_FILE, FRONT_FORMAT, SHEET_FORMAT

__all__ = [
    "AUDIT", "FAMILY", "FIGURES", "FRONT", "PAGE", "PICTURE", "PRICED", "REHEARSAL", "SCORER", "SHEET",
    "SHEET_PAGE", "SUMMARY", "SUMMARY_PAGE", "TOUR_SCORER", "TRACES", "WORTH_ADDING", "Kind", "check_outputs",
]  # fmt: skip

_WHOLE: Final = (FRONT_FILE, "manifest.json")  # what says that a folder's files belong together
_HEAD: Final = 4096  # bytes that tell a page or a line of text
_MOST_JSON: Final = 64 * 2**20


@dataclass(frozen=True)
class Kind:
    """What a command writes: its name in words, and whether a file that is there is one; None where no file
    may be replaced."""

    words: str
    is_one: Callable[[Path], bool] | None


def check_outputs(outputs: Iterable[tuple[Path | None, Kind]], inputs: Iterable[str | Path | None]) -> None:
    """InputError where an output is an input, lies in a dataset or front that is one, or costs other work.

    outputs : each with what the command writes there; None is a flag not given. inputs : files and folders
    that the command reads; what does not exist (a family's name, `-`) is none.
    Files that are not there, empty ones and pipes may be written; two outputs must not be one file.
    """
    given = [path for path in (Path(x) for x in inputs if x) if path.exists()]
    seen: dict[Path, Path] = {}
    for path, kind in outputs:
        if path is None or is_stream(path):
            continue
        place = path.resolve()
        if place in seen:
            raise InputError(str(path), f"must be another file than {seen[place]}, which is written too")
        seen[place] = path
        for source in given:
            if source.is_dir():
                whole = any((source / name).exists() for name in _WHOLE)
                if whole and place.is_relative_to(source.resolve()):
                    raise InputError(str(path), f"must not lie in {source}, which is an input")
            elif path.exists() and path.samefile(source):
                raise InputError(str(path), "must be another file than the input, which it would replace")
        if not path.is_file() or path.stat().st_size == 0:
            continue
        if kind.is_one is None:
            raise InputError(
                str(path), f"must be a new or an empty file: {kind.words} are never written over"
            )
        if not kind.is_one(path):
            rule = f"must be {kind.words} to be replaced; it holds something else, so choose another name"
            raise InputError(str(path), rule)


# --- what a file is --------------------------------------------------------------------------------


def _head(path: Path) -> bytes:
    with path.open("rb") as f:
        return f.read(_HEAD)


def _object(path: Path) -> dict[str, Any]:
    """The JSON object in a file; empty where there is none."""
    if not path.is_file():
        return {}
    try:
        found = json.loads(path.read_bytes()) if path.stat().st_size <= _MOST_JSON else None
    except (ValueError, RecursionError):
        return {}
    return found if isinstance(found, dict) else {}


def _of_format(*formats: str) -> Callable[[Path], bool]:
    return lambda path: _object(path).get("format") in formats


def _is_page(path: Path) -> bool:
    """A page of this tool says at its top that it asks the network for nothing."""
    head = _head(path)
    return head.startswith(b"<!DOCTYPE html>") and b"default-src 'none'; style-src 'unsafe-inline'" in head


def _is_figures(path: Path) -> bool:
    found = _object(path)
    return "format" not in found and ("shifts" in found or {"accuracy", "beside"} <= set(found))


def _is_summary(path: Path) -> bool:
    found = _object(path)
    return {"labels", "scorer", "on traces"} <= set(found)


def _is_priced(path: Path) -> bool:
    """Lines of answers, or the table of a tree."""
    with path.open("rb") as f:
        line = f.readline(_MOST_JSON)
    if line.startswith(b"tree ") and b" VOC " in line:
        return True
    try:
        found = json.loads(line)
    except (ValueError, RecursionError):
        return False
    return isinstance(found, dict) and {"voc", "value", "best", "method"} <= set(found)


def _is_scorer(path: Path) -> bool:
    from distill.onnx_reader import read_model

    if path.stat().st_size > MAX_BYTES:
        return False
    try:
        found = read_model(path.read_bytes()).metadata.get("format", "")
    except ScorerFileError:
        return False
    return found.partition("/")[0] == SCORER_FORMAT.partition("/")[0]  # of any version


def _is_sheet_page(path: Path) -> bool:
    head = _head(path)
    return head.startswith(b"# ") and b"The scorer only spends search effort" in head


def _is_worth_adding(path: Path) -> bool:
    """An audit's: it stands beside that audit's figures."""
    if not _of_format(AUDIT_FORMAT)(path.with_name("audit.json")):
        return False
    try:
        with gzip.open(path) as f:
            return b'"belief-tree/1"' in f.read(_HEAD)
    except (OSError, EOFError, zlib.error):
        return False


REHEARSAL: Final = Kind(
    "an earlier rehearsal's, with its campaign.json beside it,",
    lambda path: path.with_name("campaign.json").is_file(),
)
TRACES: Final = Kind("records", None)  # nobody can record the same again
PAGE: Final = Kind("a page of this tool", _is_page)
PICTURE: Final = Kind("a picture", lambda path: b"<svg" in _head(path))
FIGURES: Final = Kind("figures that validate left", _is_figures)
PRICED: Final = Kind("what price left", _is_priced)
FAMILY: Final = Kind(
    "a family that infer wrote ('# Inferred from' at its top)",
    lambda path: _head(path).startswith(b"# Inferred from "),
)
SCORER: Final = Kind("a scorer file", _is_scorer)
SHEET: Final = Kind("a scorer's sheet", _of_format(SHEET_FORMAT))
SHEET_PAGE: Final = Kind("a scorer's sheet", _is_sheet_page)
FRONT: Final = Kind("the front of an earlier training", _of_format(FRONT_FORMAT))
AUDIT: Final = Kind("the figures of an audit", _of_format(AUDIT_FORMAT))
WORTH_ADDING: Final = Kind("an earlier audit's, with its audit.json beside it,", _is_worth_adding)
SUMMARY: Final = Kind("an earlier tour's summary", _is_summary)
SUMMARY_PAGE: Final = Kind(
    "an earlier tour's summary", lambda path: _head(path).startswith(b"# voc-distill: the whole job on")
)
# A tour that was stopped has no summary yet, and may be given again.
TOUR_SCORER: Final = Kind(
    "an earlier tour's, with its dataset beside it,",
    lambda path: (path.parent / "dataset" / "manifest.json").is_file() and _is_scorer(path),
)
