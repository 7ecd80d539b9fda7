"""Whose results a folder holds: a campaign goes on in its own folder and replaces nobody else's."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any, Final

from distill.errors import InputError
from distill.files import read_json, write_atomic

__all__ = ["claim"]

_FIXED: Final = ("seeds", "tuning_seeds")
_KEPT: Final = ("problems", "budgets", "policies", "wide", "wide_budgets", "stops", "plenty")


def claim(folder: Path, asked: Mapping[str, Any], scorers: Mapping[str, str]) -> None:
    """Write the campaign into its folder; one that is there already may be added to, never replaced.

    asked : the campaign as plain values. scorers : file as the policies name it -> its SHA-256.
    Raises InputError, and writes nothing, where the folder holds a campaign with other seeds, one with
    problems, budgets or policies that are not asked for now (the page would lose them), or results of
    other scorer files of the same path.
    """
    path = folder / "campaign.json"
    if path.exists():
        found = _read(path)
        fixed = {name: asked[name] for name in _FIXED}
        if {name: found.get(name) for name in _FIXED} != fixed:
            raise InputError(str(path), f"must hold {json.dumps(fixed)} to be continued")
        lost = [x for name in _KEPT for x in _texts(found.get(name)) if x not in asked[name]]
        if lost:
            rule = "holds another campaign; ask for all of it and more, or give another --out. Not asked for"
            raise InputError(str(folder), f"{rule}: {', '.join(lost)}")
        before = found.get("scorers")
        for file, sha in before.items() if isinstance(before, dict) else ():
            if scorers.get(file, sha) != sha:
                raise InputError(str(folder), "holds results of another scorer file of this path", file)
    write_atomic(path, (json.dumps({**asked, "scorers": dict(scorers)}, indent=1) + "\n").encode())


def _read(path: Path) -> Mapping[str, Any]:
    found = read_json(path)
    return found if isinstance(found, dict) else {}


def _texts(x: object) -> Sequence[str]:
    return [text for text in x if isinstance(text, str)] if isinstance(x, list) else []
