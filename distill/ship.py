"""One scorer of a trained front, with its sheet, to where agents load it; floor 6."""

from __future__ import annotations

import os
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from distill.errors import InputError
from distill.files import read_json, sha256_of, write_atomic
from distill.runtime import Scorer
from distill.sheet import FRONT_FILE, FRONT_FORMAT, SHEET_FORMAT, write_sheet

__all__ = ["choose", "ship"]


def ship(
    trained: str | os.PathLike[str],
    out: str | os.PathLike[str],
    *,
    latency_us: float | None = None,
    scorer: str | None = None,
) -> dict[str, Any]:
    """Copy one scorer file of the folder that `train` left, and write its sheet beside it; returns the sheet.

    latency_us : the most accurate whose median decision fits; scorer : one by name; by default the most
    accurate. Accuracy for the choice is that on the part `choose`; the sheet states that on the held-out
    trees, which had no say. The file is loaded once as an agent would, self-test included.
    Raises InputError where the folder, the name or the budget does not fit.
    """
    out = Path(out)
    if out.suffix != ".onnx":
        raise InputError("out", "must end in .onnx", str(out))
    front = _read_front(Path(trained))
    entry, why = choose(front["scorers"], latency_us, scorer)
    source = Path(trained) / entry["file"]
    if sha256_of(source) != entry["sha256"]:
        raise InputError(str(source), f"must be the file that {FRONT_FILE} measured", "another SHA-256")
    data = source.read_bytes()
    Scorer.from_bytes(data, strict=True, name=str(source))
    sheet = {
        "format": SHEET_FORMAT,
        "file": {"name": out.name, "sha256": entry["sha256"], "bytes": entry["bytes"]},
        "recipe": entry["recipe"],
        "chosen": why,
        "value": front["value"],
        "data": {**front["data"], "parts": front["parts"]},
        "seed": front["seed"],
        "accuracy": entry["held_out"],
        "beside": front["beside"],
        "peers": front.get("peers", {}),
        "peers_left_out": front.get("peers_left_out", {}),
        "break_even": front.get("break_even", {}),
        "pairs": entry.get("pairs"),
        "decision": {
            "leaves": front["leaves"],
            "scorer": entry["latency"],
            "exact": front["exact"],
            "times_faster": _times_faster(front["exact"], entry["latency"]["p50_us"]),
            **_with_backup(front, entry["latency"]["p50_us"]),
        },
        "front": [_in_short(e) for e in front["scorers"]],
        "features": front["features"],
        "made_with": front["made_with"],
    }
    write_atomic(out, data)
    write_sheet(sheet, out)
    return sheet


def _times_faster(exact: Mapping[str, Mapping[str, float]], us: float) -> dict[str, float]:
    return {name: t["p50_us"] / us for name, t in exact.items()}


def _with_backup(front: Mapping[str, Any], us: float) -> dict[str, Any]:
    """Times of the backup that a scorer of records reads, and how many times faster both are together."""
    backup = front.get("backup", {})
    if not backup:
        return {}
    both = us + backup["after one rollout"]["p50_us"]
    return {"backup": backup, "times_faster_with_backup": _times_faster(front["exact"], both)}


def _in_short(entry: Mapping[str, Any]) -> dict[str, Any]:
    """A scorer of the front without what only a page about it alone shows."""
    out = {key: x for key, x in entry.items() if key != "pairs"}
    parts = ("slices", "calibration", "stop_curve")
    out["held_out"] = {key: x for key, x in entry["held_out"].items() if key not in parts}
    return out


def _read_front(folder: Path) -> dict[str, Any]:
    path = folder / FRONT_FILE
    if not path.is_file():
        raise InputError(str(folder), f"must be a folder that train left, with {FRONT_FILE}")
    front = read_json(path)
    if not isinstance(front, dict) or front.get("format") != FRONT_FORMAT:
        raise InputError(f"{path}: format", f"must be {FRONT_FORMAT!r}")
    return front


def choose(
    scorers: list[dict[str, Any]], latency_us: float | None = None, name: str | None = None
) -> tuple[dict[str, Any], str]:
    """One entry of a front's `scorers`, and why: by name, or the most accurate within a median time.

    Accuracy is that on the part `choose`. Raises InputError where no entry has the name or fits.
    """

    def cost_and_loss(e: Mapping[str, Any]) -> tuple[float, float]:
        return e["latency"]["p50_us"], e["choose"]["forgone_percent"]["value"]

    if name is not None:
        for entry in scorers:
            if entry["recipe"] == name:
                return entry, "by name"
        raise InputError("scorer", f"must be one of {', '.join(e['recipe'] for e in scorers)}", name)
    fitting = [e for e in scorers if latency_us is None or cost_and_loss(e)[0] <= latency_us]
    if not fitting:
        fastest = min(cost_and_loss(e)[0] for e in scorers)
        raise InputError("latency", f"must be at least {fastest:.1f} us, the fastest scorer", latency_us)
    best = min(fitting, key=lambda e: cost_and_loss(e)[::-1])
    return best, "most accurate" if latency_us is None else f"most accurate within {latency_us:g} us"
