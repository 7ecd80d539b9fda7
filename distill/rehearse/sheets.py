"""A rehearsal's figures into the sheets of the scorers that it played."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

from distill.errors import InputError
from distill.files import read_json, sha256_of
from distill.rehearse.against import EXACT
from distill.sheet import SHEET_FORMAT, write_sheet

__all__ = ["add_to_sheet", "add_to_sheets", "figures_of", "read_summary"]

_FORMAT = "voc-distill-rehearsal/1"
_READ = ("aims", "by_kind", "campaign", "made_with", "rows", "scorers", "stopping")  # parts of a summary


def read_summary(folder: Path) -> dict[str, Any]:
    """The summary that a rehearsal left in a folder; InputError where there is none."""
    path = folder / "summary.json"
    missing = str(folder), "must be a folder that rehearse left, with summary.json"
    summary = _read(path, _FORMAT, missing)
    if lost := [name for name in _READ if name not in summary]:
        raise InputError(f"{path}: {lost[0]}", "is missing; rehearse the same again with this version")
    return summary


def _read(path: Path, form: str, missing: tuple[str, str]) -> dict[str, Any]:
    """A JSON object of a format; InputError where there is none, with the place and rule of `missing`."""
    try:
        found = read_json(path)
    except FileNotFoundError:
        raise InputError(*missing) from None
    if not isinstance(found, dict) or found.get("format") != form:
        raise InputError(f"{path}: format", f"must be {form!r}")
    return found


def figures_of(summary: Mapping[str, Any], sha256: str) -> dict[str, Any]:
    """What a rehearsal says of one scorer file, by its SHA-256: the sheet's part `rehearsal`.

    uses : how the file was used, each with its aims. cells : a row each use, problem and budget, with
    regret, its ratios to the best of each group and the share of time spent choosing. by_kind : scorer
    or closed form, for the kinds of problems that the file played.
    """
    names = next((f["policies"] for f in summary["scorers"] if f["sha256"] == sha256), None)
    if names is None:
        raise InputError("rehearsal: scorers", "must hold the scorer of the sheet, by its SHA-256", sha256)
    rows = [row for row in summary["rows"] if row["policy"] in names]
    if not rows:
        raise InputError("rehearsal: rows", "must hold cells of the scorer", ", ".join(names))
    kinds = {row["kind"] for row in rows}
    return {
        "seeds": summary["campaign"]["seeds"],
        "made_with": summary["made_with"],
        "uses": {name: summary["aims"].get(name, {}) for name in dict.fromkeys(r["policy"] for r in rows)},
        "by_kind": [row for row in summary["by_kind"] if row["kind"] in kinds],
        "stopping": [row for row in summary["stopping"] if row["policy"] in names],
        "cells": [_in_short(row) for row in rows],
    }


def _in_short(row: Mapping[str, Any]) -> dict[str, Any]:
    """A cell with what a sheet says of it, to four digits."""
    ratios = {
        group: {key: x if isinstance(x, str) else _rounded(x) for key, x in found.items()}
        for group, found in row["ratios"].items()
    }
    return {
        **{key: row[key] for key in ("problem", "kind", "budget", "policy")},
        "regret_against": row.get("regret_against", EXACT),  # earlier versions knew nothing else
        "regret_error": _rounded(row.get("regret_error", 0.0)),
        "regret": {
            "value": _rounded(row["measured"]),
            **{k: _rounded(x) for k, x in row["interval"].items()},
        },
        "rollouts": _rounded(row["rollouts"]),
        "choosing_share": _rounded(row["choosing_share"]),
        "ratios": ratios,
    }


def _rounded(x: float | None) -> float | None:
    return None if x is None else float(f"{x:.4g}")


def add_to_sheet(summary: Mapping[str, Any], scorer_file: Path) -> dict[str, Any]:
    """Write a rehearsal's figures into the sheet beside a scorer file, JSON and page; returns the sheet.

    The rest of the sheet stays as it is. Raises InputError where there is no sheet, the sheet is not that
    of the file, the file was not rehearsed, or the sheet holds a rehearsal with cells that the new one lacks.
    """
    sheet = _with_figures(summary, scorer_file)
    write_sheet(sheet, scorer_file)
    return sheet


def _with_figures(summary: Mapping[str, Any], scorer_file: Path) -> dict[str, Any]:
    path = scorer_file.with_suffix(".json")
    if not scorer_file.is_file():
        raise InputError(str(scorer_file), "must be a scorer file")
    sheet = _read(
        path, SHEET_FORMAT, (str(path), "must be the sheet beside the scorer file, as ship writes it")
    )
    sha256 = sha256_of(scorer_file)
    if sheet["file"]["sha256"] != sha256:
        raise InputError(
            f"{path}: file: sha256", "must be that of the file beside it", sheet["file"]["sha256"]
        )
    new = figures_of(summary, sha256)
    held = {_place(cell) for cell in (sheet.get("rehearsal") or {}).get("cells", [])}
    if lost := sorted(held - {_place(cell) for cell in new["cells"]}):
        rule = (
            f"holds {len(held)} cells, {len(lost)} of which the new rehearsal lacks; rehearse these "
            "problems, budgets and policies too, or take the part out of the sheet first. "
            f"Lacking: {', '.join(lost[0])}"
        )
        raise InputError(f"{path}: rehearsal", rule)
    return {**sheet, "rehearsal": new}


def _place(cell: Mapping[str, Any]) -> tuple[str, str, str]:
    return cell["problem"], cell["budget"], cell["policy"]


def add_to_sheets(folder: Path, scorer_files: Iterable[Path]) -> list[Path]:
    """`add_to_sheet` for several files, from what a rehearsal left in a folder; nothing is written before
    all of them are known to be in it. Returns the files.
    """
    summary, files = read_summary(folder), list(scorer_files)
    sheets = [_with_figures(summary, file) for file in files]
    for file, sheet in zip(files, sheets, strict=True):
        write_sheet(sheet, file)
    return files
