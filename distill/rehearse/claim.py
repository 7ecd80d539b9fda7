"""Whose results a folder holds: a campaign goes on in its own folder and replaces nobody else's."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any, Final

from distill.errors import InputError
from distill.files import read_json, write_atomic

__all__ = ["claim"]

_KEPT: Final = ("problems", "budgets", "policies", "wide", "wide_budgets", "stops", "plenty")


def claim(folder: Path, asked: Mapping[str, Any], scorers: Mapping[str, str]) -> int:
    """Write the campaign into its folder; one that is there already may be added to, never replaced.

    asked : the campaign as plain values. scorers : file as the policies name it -> its SHA-256.
    Returns the decisions on which prices to stop at are tuned, of which more decisions of the cells must make
    no others: a price, once tuned, stays.

    Raises InputError, and writes nothing, where the folder holds a campaign with more decisions or with other
    ones for tuning, one with problems, budgets or policies that are not asked for now (the page would lose
    them), or results of other scorer files of the same path.
    """
    path = folder / "campaign.json"
    stop_seeds: int | None = asked["stop_seeds"]
    if path.exists():
        found = _read(path)
        fixed = {"tuning_seeds": asked["tuning_seeds"]}
        seeds = found.get("seeds")
        if not isinstance(seeds, int) or {name: found.get(name) for name in fixed} != fixed:
            raise InputError(str(path), f"must hold {json.dumps(fixed)} to be continued")
        if seeds > asked["seeds"]:
            rule = f"holds {seeds} decisions a cell; ask for as many or more, or give another --out"
            raise InputError(str(path), rule, asked["seeds"])
        lost = [x for name in _KEPT for x in _texts(found.get(name)) if x not in asked[name]]
        if lost:
            rule = "holds another campaign; ask for all of it and more, or give another --out. Not asked for"
            raise InputError(str(folder), f"{rule}: {', '.join(lost)}")
        before = found.get("scorers")
        for file, sha in before.items() if isinstance(before, dict) else ():
            if scorers.get(file, sha) != sha:
                raise InputError(str(folder), "holds results of another scorer file of this path", file)
        if any(x.endswith(":stop=auto") for name in ("policies", "stops") for x in _texts(found.get(name))):
            tuned = found.get("stop_seeds") or _half(seeds)  # older folders do not say
            if stop_seeds not in (None, tuned):
                rule = (
                    f"holds prices to stop at that were tuned on {tuned} decisions; stop_seeds must be that"
                )
                raise InputError(str(path), rule, stop_seeds)
            stop_seeds = tuned
    settled = stop_seeds or _half(asked["seeds"])
    told = {**asked, "stop_seeds": settled, "scorers": dict(scorers)}
    write_atomic(path, (json.dumps(told, indent=1) + "\n").encode())
    return settled


def _half(seeds: int) -> int:
    return max(seeds // 2, 2)


def _read(path: Path) -> Mapping[str, Any]:
    found = read_json(path)
    return found if isinstance(found, dict) else {}


def _texts(x: object) -> Sequence[str]:
    return [text for text in x if isinstance(text, str)] if isinstance(x, list) else []
