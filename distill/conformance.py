"""Holds a backup and scorer runtime, in whatever language, to conformance vectors; floor 5, light.

    python -m distill.conformance VECTORS.json                      this package against the vectors
    python -m distill.conformance VECTORS.json --answers PORT.json  a port's answers against them

The vectors are one JSON object, made by `distill.conformance_vectors`:

    format   "voc-conformance/1"; record_version, of the columns in `schema.RECORD_UNITS`
    cases    name; tree, a belief tree record; horizon, a number or "inf"; steps, each with `update`, null at
             first, then a leaf's new belief (`leaf`, and `mean` and `var` or `alpha` and `beta`) or for
             correlated trees `mean` and `cov` of all; and `answer`: value and value_var (per root action),
             mean and var (per node, null where none is kept), rows (record column -> per leaf)
    scorers  file, beside the vectors, and its sha256; calls, each with `inputs`, an infinite horizon as the
             text "inf", and `answer`: voc, voc_high, batch, in_range, pick, worth_it

A port answers with the same object, its own numbers in place of each `answer`. They agree where values are
within 1e-6 of the tree's scale and variances within 1e-6 of its square; unit-free columns within 1e-4 of
themselves plus 1e-6, and only where `slope` exceeds 1e-9 of the scale (it is what they describe); scores
within 1e-4 of a call's largest; and picks and flags are the same. The scale is the largest `spread`, or
where that is 0 the largest size of a value.
"""

from __future__ import annotations

import argparse
import copy
import math
import os
import sys
from collections.abc import Mapping
from pathlib import Path
from typing import Any, Final

import numpy as np

from distill import schema
from distill.backup import Backup, backup_of
from distill.errors import DistillError, InputError
from distill.files import read_json
from distill.record import from_record
from distill.runtime import Scorer

__all__ = ["FORMAT", "answered", "check", "compare", "read_vectors"]

FORMAT: Final = "voc-conformance/1"
_CLOSE: Final = 1e-6
_RATIO: Final = 1e-4
_LIVE: Final = 1e-9
_IN_UTILITY: Final = ("slope", "other_slope", "spread", "cost")


def read_vectors(path: str | os.PathLike[str]) -> dict[str, Any]:
    """The vectors, or a port's answers, of a file; InputError where it holds neither."""
    try:
        found = read_json(path)
    except OSError as e:
        raise InputError(str(path), f"must be a readable file ({e.strerror})") from None
    if not isinstance(found, dict) or found.get("format") != FORMAT:
        raise InputError(f"{path}: format", f"must be {FORMAT!r}")
    if found.get("record_version") != schema.RECORD_VERSION:
        raise InputError(f"{path}: record_version", f"must be {schema.RECORD_VERSION}")
    return found


def answered(vectors: Mapping[str, Any], folder: str | os.PathLike[str]) -> dict[str, Any]:
    """The same vectors with this package's answers; scorer files lie in `folder`."""
    out: dict[str, Any] = copy.deepcopy(dict(vectors))
    for case in out["cases"]:
        tree = from_record(case["tree"])
        backup = backup_of(tree, math.inf if case["horizon"] == "inf" else float(case["horizon"]))
        for step in case["steps"]:
            if step["update"] is not None:
                changes = dict(step["update"])
                if isinstance(backup, Backup):
                    backup.update(changes.pop("leaf"), **changes)
                else:
                    backup.update(np.array(changes["mean"]), np.array(changes["cov"]))
            step["answer"] = {
                "value": backup.value.tolist(),
                "value_var": backup.value_var.tolist(),
                "mean": _nulls(backup.mean),
                "var": _nulls(backup.var),
                "rows": {name: x.tolist() for name, x in backup.rows().items()},
            }
    for entry in out["scorers"]:
        scorer = Scorer.load(Path(folder) / entry["file"], strict=True, sha256=entry["sha256"])
        for call in entry["calls"]:
            assert scorer.kind is not None
            inputs: dict[str, Any] = scorer.kind.from_json(call["inputs"])
            got = scorer.score(**inputs)
            call["answer"] = {
                name: x.tolist() if isinstance(x, np.ndarray) else x for name, x in got._asdict().items()
            }
    return out


def _nulls(x: Any) -> list[float | None]:
    return [None if math.isnan(v) else v for v in x.tolist()]


def compare(want: Mapping[str, Any], got: Mapping[str, Any]) -> list[str]:
    """Where `got` differs from the vectors by more than allowed: one line a place, none where it conforms."""
    found: list[str] = []
    for kind, parts in (("cases", "steps"), ("scorers", "calls")):
        for i, entry in enumerate(want[kind]):
            name = entry.get("name", entry.get("file"))
            for j, part in enumerate(entry[parts]):
                where = f"{name}, {parts[:-1]} {j}"
                try:
                    answer = got[kind][i][parts][j]["answer"]
                    compared = _step if kind == "cases" else _call
                    found += [f"{where}: {line}" for line in compared(part["answer"], answer)]
                except (IndexError, KeyError, TypeError, ValueError) as e:
                    found.append(f"{where}: no answer of the same form ({type(e).__name__}: {e})")
    return found


def _step(want: Mapping[str, Any], got: Mapping[str, Any]) -> list[str]:
    scale = float(np.max(want["rows"]["spread"])) or float(np.max(np.abs(want["value"]))) or 1.0
    far = 1e-14 * float(np.max(np.abs(want["value"])))  # rounding of values that lie far from 0
    lines = []
    for name, power in (("value", 1), ("mean", 1), ("value_var", 2), ("var", 2)):
        lines += _off(name, want[name], got[name], _CLOSE * scale**power + far)
    live = np.array(want["rows"]["slope"]) > _LIVE * scale
    for name, column in want["rows"].items():
        if name in _IN_UTILITY:
            lines += _off(name, column, got["rows"][name], _CLOSE * scale)
            continue
        known = live if name != "noise_ratio" else np.ones(len(live), dtype=bool)
        if name == "other_crossing":
            known = np.array(want["rows"]["other_slope"]) > _LIVE * scale
        a, b = np.array(column)[known], np.array(got["rows"][name])[known]
        lines += _off(name, a, b, _RATIO * np.abs(a) + _CLOSE + far / scale)
    return lines


def _call(want: Mapping[str, Any], got: Mapping[str, Any]) -> list[str]:
    lines = []
    for name in ("voc", "voc_high"):
        lines += _off(name, want[name], got[name], _RATIO * float(np.max(want[name])))
    for name in ("batch", "in_range", "pick", "worth_it"):
        if want[name] != got[name]:
            lines.append(f"{name} must be {want[name]}; got {got[name]}")
    return lines


def _off(name: str, want: Any, got: Any, allowed: Any) -> list[str]:
    a, b = np.array(want, dtype=float), np.array(got, dtype=float)
    if a.shape != b.shape:
        return [f"{name} must have shape {a.shape}; got {b.shape}"]
    bad = ~((np.abs(a - b) <= allowed) | (np.isnan(a) & np.isnan(b)))
    if not bad.any():
        return []
    i = int(np.argmax(bad))
    within = np.broadcast_to(allowed, a.shape).flat[i]
    return [f"{name}[{i}] must be {a.flat[i]!r} within {within:.3g}; got {b.flat[i]!r}"]


def check(path: str | os.PathLike[str], answers: str | os.PathLike[str] | None = None) -> list[str]:
    """Differences of this package, or of a port's answers in a file, from the vectors in `path`."""
    want = read_vectors(path)
    got = answered(want, Path(path).parent) if answers is None else read_vectors(answers)
    return compare(want, got)


def main() -> int:
    """The command line of this module; returns its exit status."""
    parser = argparse.ArgumentParser(
        prog="python -m distill.conformance", description="Check conformance vectors."
    )
    parser.add_argument("vectors", metavar="VECTORS.json")
    parser.add_argument("--answers", metavar="PORT.json", help="a port's answers; default this package's own")
    args = parser.parse_args()
    try:
        found = check(args.vectors, args.answers)
    except DistillError as e:
        print(f"error: {e}", file=sys.stderr)
        return 2
    print("\n".join(found) if found else f"{args.vectors}: all answers conform")
    return 1 if found else 0


if __name__ == "__main__":
    sys.exit(main())
