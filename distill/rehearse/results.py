"""What a campaign found, in files: every cell with intervals and ratios, and what follows from them."""

from __future__ import annotations

import io
import json
from collections.abc import Mapping
from dataclasses import asdict
from pathlib import Path
from typing import Any, Final

import pyarrow as pa
import pyarrow.parquet as pq

from distill import __version__
from distill.dataset_columns import described_schema
from distill.files import sha256_of, write_atomic
from distill.rehearse import findings
from distill.rehearse.against import Against
from distill.rehearse.campaign import Campaign, Results
from distill.rehearse.cell_columns import CELL_COLUMNS
from distill.rehearse.findings import plain
from distill.rehearse.policy_specs import scorer_file
from distill.rehearse.rehearsal import Cell, interval
from distill.rehearse.results_tables import every_cell, short_table, stopping_table
from distill.rehearse.tuning import name_of, untuned

__all__ = ["FORMAT", "summarise", "write_results"]

FORMAT: Final = "voc-distill-rehearsal/1"


def summarise(results: Results) -> dict[str, Any]:
    """All figures of a campaign, ready for JSON: `format`, `campaign`, `rows`, `comparisons`, `aims` ...

    rows : a cell each, with its ratios to the best policy of each group, and "best scorer": of either half
    of the decisions the scorer that did best on the other half. comparisons : the same ratios, one a row.
    unsearched : the regret of each problem's decisions taken before the first rollout.
    against : a problem each, what its regret is against: the exact optimum, or rollouts at each leaf, whose
    error is the standard error of one decision's regret. counted : the problems of `aims` and `break_even`.
    aims : a scorer each, counted over cells with a wall-clock budget and rollouts of 100 us or more.
    by_kind : scorer or closed form for each kind of problem and cost of a rollout.
    stopping : policies that stop early against themselves without. scorers : the files, and their names.
    """
    campaign = results.campaign
    places = findings.places_of(results)
    comparisons = findings.comparisons(results, places)
    ratios: dict[tuple[str, str, str], dict[str, Any]] = {}
    for row in comparisons:
        found = {key: row[key] for key in ("rival", "ratio", "low", "high")}
        ratios.setdefault((row["problem"], row["budget"], row["policy"]), {})[row["group"]] = found
    rows = [_row(cell, results) for here in places.values() for cell in here.values()]
    alike = findings.judged_alike(results)
    for row in rows:
        row["ratios"] = ratios.get((row["problem"], row["budget"], row["policy"]), {})
    return {
        "format": FORMAT,
        "made_with": {"voc-distill": __version__},
        "campaign": json.loads(json.dumps(asdict(campaign))),  # lists, as they are read back
        "kinds": results.kinds,
        "against": {name: x.as_json() for name, x in results.against.items()},
        "counted": [name for name in campaign.problems if name in alike],
        "scorers": _files(campaign),
        "measure": "expected regret given all that was seen where known, else regret; value units",
        "rows": rows,
        "unsearched": [_unsearched(cell) for cell in results.unsearched],
        "comparisons": comparisons,
        "aims": findings.aims(results, comparisons),
        "advice": findings.advice(results, places),
        "by_kind": findings.by_kind(results, places),
        "break_even": findings.break_even(results, places),
        "stopping": findings.stopping(results, places),
        "tuning": results.tuning,
        "left_out": results.left_out,
        "processor_seconds": _processor_seconds(results),
    }


def write_results(results: Results, folder: Path) -> dict[str, Any]:
    """Leave summary.json, cells.parquet and Markdown tables beside the decisions; returns the summary.

    The metadata of cells.parquet tell what each column means, and its unit.
    """
    summary = summarise(results)
    write_atomic(folder / "summary.json", (json.dumps(summary, indent=1, allow_nan=False) + "\n").encode())
    buffer = io.BytesIO()
    told = described_schema(CELL_COLUMNS, {"format": FORMAT})
    pq.write_table(pa.Table.from_pylist([_flat(row) for row in summary["rows"]], told), buffer)
    write_atomic(folder / "cells.parquet", buffer.getvalue())
    write_atomic(folder / "table.md", ("\n".join(short_table(summary)) + "\n").encode())
    write_atomic(folder / "cells.md", ("\n".join(every_cell(summary)) + "\n").encode())
    if summary["stopping"]:
        write_atomic(folder / "stopping.md", ("\n".join(stopping_table(summary)) + "\n").encode())
    return summary


def _row(cell: Cell, results: Results) -> dict[str, Any]:
    low, high = interval(cell.measured)
    against = results.against.get(cell.problem, Against())
    return {
        "problem": cell.problem,
        "kind": results.kinds.get(cell.problem),
        "regret_against": str(against),
        "regret_error": against.error,
        "budget": str(cell.budget),
        "rollout_seconds": cell.budget.rollout_seconds,
        "timed": cell.budget.seconds is not None,
        "policy": cell.policy,
        "decisions": len(cell.regret),
        "measured": plain(cell.measured.mean()),
        "interval": {"low": plain(low), "high": plain(high)},
        "regret": plain(cell.regret.mean()),
        "regret_by_mean": plain(cell.regret_by_mean.mean()),
        "expected_regret": plain(cell.expected_regret.mean()),
        "rollouts": plain(cell.rollouts.mean()),
        "choosing_us": plain(1e6 * cell.choosing.sum() / max(cell.rollouts.sum(), 1)),
        "choosing_share": plain(cell.choosing_share),
        "fallback_share": plain(cell.fallback_share),
        "stopped_share": plain(cell.stopped.mean()),
    }


def _unsearched(cell: Cell) -> dict[str, Any]:
    low, high = interval(cell.measured)
    ends = {"low": plain(low), "high": plain(high)}
    return {"problem": cell.problem, "measured": plain(cell.measured.mean()), "interval": ends}


def _flat(row: Mapping[str, Any]) -> dict[str, Any]:
    """A row without nesting: `low` and `high` of the regret, and `GROUP_rival`, `GROUP_ratio` and so on."""
    out = {k: v for k, v in row.items() if k not in ("interval", "ratios")} | dict(row["interval"])
    for group in findings.GROUPS:
        found = row["ratios"].get(group, {})
        for key in ("rival", "ratio", "low", "high"):
            out[f"{group}_{key}"] = found.get(key)
    return out


def _files(campaign: Campaign) -> list[dict[str, Any]]:
    """The scorer files that were rehearsed, each with the policies that used it."""
    uses: dict[str, list[str]] = {}
    for spec in campaign.all_policies:
        if spec.startswith("scorer:"):
            path = scorer_file(untuned(spec))[0]
            uses.setdefault(path, []).append(name_of(spec))
    return [
        {"file": Path(path).name, "sha256": sha256_of(Path(path)), "policies": names}
        for path, names in uses.items()
    ]


def _processor_seconds(results: Results) -> dict[str, dict[str, float]]:
    """By problem: of the decisions of all cells, and of the tuning.

    Prices to stop at are tuned on decisions whose number grows with a cell's, so they count with the cells.
    """
    out: dict[str, dict[str, float]] = {}

    def spent(problem: str, on: str, seconds: float) -> None:
        out.setdefault(problem, {"cells": 0.0, "tuning": 0.0})[on] += seconds

    for cell in (*results.unsearched, *results.cells):  # the former are the first to draw the decisions
        spent(cell.problem, "cells", float(cell.processor.sum()))
    for row in results.tuning:  # of problems too where all that was tuned was then left out
        spent(row["problem"], "cells" if "spent" in row else "tuning", row["processor_seconds"])
    return out
