"""One scorer of a trained front, with its sheet, to where agents load it; floor 6."""

from __future__ import annotations

import os
from collections.abc import Mapping
from pathlib import Path
from typing import Any, Final

from distill.errors import InputError
from distill.files import read_json, sha256_of, write_atomic
from distill.runtime import Scorer
from distill.sheet import FRONT_FILE, FRONT_FORMAT, SHEET_FORMAT, write_sheet

__all__ = ["choose", "ship"]

_INTERVAL: Final = 1.96  # standard errors on each side of a 95 % interval


def ship(
    trained: str | os.PathLike[str],
    out: str | os.PathLike[str],
    *,
    latency_us: float | None = None,
    scorer: str | None = None,
) -> dict[str, Any]:
    """Copy one scorer file of the folder that `train` left, and write its sheet beside it; returns the sheet.

    latency_us : only those whose median decision fits; scorer : one by name; by default the fastest of the
    most accurate, see `choose`. Accuracy for the choice is that on the part `choose`; the sheet states that
    on the held-out trees, which had no say. The file is loaded once as an agent would, self-test included.
    Raises InputError where the folder, the name or the budget does not fit.
    """
    out = Path(out)
    if out.suffix != ".onnx":
        raise InputError("out", "must end in .onnx", str(out))
    front = _read_front(Path(trained))
    entry, why = choose(front["scorers"], latency_us, scorer)
    if out.resolve() in {(Path(trained) / e["file"]).resolve() for e in front["scorers"]}:
        raise InputError("out", "must be another file than those of the front", str(out))
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
    """One entry of a front's `scorers`, and why: by name, or the fastest of the most accurate.

    latency_us : only those whose median decision fits. Accuracy is the forgone share on the part `choose`,
    and what lies within a standard error of the best is as accurate: the rest is luck of so many trees (the
    1 SE rule, Breiman, Friedman, Olshen and Stone 1984, section 3.4.3). Raises InputError where no entry has
    the name or fits.
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
    accuracy = min(fitting, key=lambda e: cost_and_loss(e)[1])["choose"]["forgone_percent"]
    error = (accuracy["high"] - accuracy["low"]) / (2 * _INTERVAL)
    as_accurate = [e for e in fitting if cost_and_loss(e)[1] <= accuracy["value"] + error]
    why = "fastest of the most accurate" + ("" if latency_us is None else f" within {latency_us:g} us")
    return min(as_accurate, key=cost_and_loss), why
