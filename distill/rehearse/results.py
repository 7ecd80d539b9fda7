"""What a campaign found: every cell with intervals, every comparison, and what follows from them."""

from __future__ import annotations

import io
import json
import math
from collections.abc import Mapping, Sequence
from dataclasses import asdict
from pathlib import Path
from typing import Any, Final

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from distill import __version__
from distill.files import write_atomic
from distill.rehearse.campaign import Campaign, Results
from distill.rehearse.loop import Budget
from distill.rehearse.rehearsal import Cell, Compared, compare
from distill.rehearse.tuning import name_of
from distill.tree import Floats

__all__ = ["FORMAT", "GROUPS", "aims_table", "cells_table", "summarise", "write_results"]

FORMAT: Final = "voc-distill-rehearsal/1"

# Groups of policies by the first word of their text; scorers are compared with the best of each other one.
GROUPS: Final = {
    "sampling": ("uct", "thompson", "top-two"),
    "static": ("static-voc", "static-rate"),
    "exact": ("exact-dynamic-rate",),
}
_AIM_SECONDS: Final = 100e-6  # cost of a rollout from which the aims are judged
_RESAMPLES: Final = 2000


def summarise(results: Results) -> dict[str, Any]:
    """All figures of a campaign, ready for JSON: `format`, `campaign`, `rows`, `comparisons`, `aims` ...

    rows : a cell each. comparisons : a scorer's cell against the best policy of a group in the same
    problem and budget. aims : a scorer each, counted over cells with a wall-clock budget and rollouts of
    100 us or more. stopping : policies that stop early against themselves without.
    """
    campaign = results.campaign
    comparisons = _comparisons(results)
    return {
        "format": FORMAT,
        "made_with": {"voc-distill": __version__},
        "campaign": json.loads(json.dumps(asdict(campaign))),  # lists, as they are read back
        "measure": "expected regret given all that was seen where known, else regret; value units",
        "rows": [_row(cell) for cell in results.cells],
        "comparisons": comparisons,
        "aims": _aims(comparisons, results.cells),
        "advice": _advice(results),
        "break_even": _break_even(results),
        "stopping": _stopping(results),
        "tuning": results.tuning,
        "left_out": results.left_out,
    }


def write_results(results: Results, folder: Path) -> dict[str, Any]:
    """Leave summary.json and cells.parquet beside the decisions; returns the summary."""
    summary = summarise(results)
    write_atomic(folder / "summary.json", (json.dumps(summary, indent=1, allow_nan=False) + "\n").encode())
    flat = [
        {**{k: v for k, v in row.items() if k != "interval"}, **row["interval"]} for row in summary["rows"]
    ]
    buffer = io.BytesIO()
    pq.write_table(pa.Table.from_pylist(flat), buffer)
    write_atomic(folder / "cells.parquet", buffer.getvalue())
    return summary


def _row(cell: Cell) -> dict[str, Any]:
    low, high = _interval(cell.measured)
    return {
        "problem": cell.problem,
        "budget": str(cell.budget),
        "rollout_seconds": cell.budget.rollout_seconds,
        "policy": cell.policy,
        "decisions": len(cell.regret),
        "measured": _plain(cell.measured.mean()),
        "interval": {"low": _plain(low), "high": _plain(high)},
        "regret": _plain(cell.regret.mean()),
        "regret_by_mean": _plain(cell.regret_by_mean.mean()),
        "expected_regret": _plain(cell.expected_regret.mean()),
        "rollouts": _plain(cell.rollouts.mean()),
        "choosing_us": _plain(1e6 * cell.choosing.sum() / max(cell.rollouts.sum(), 1)),
        "choosing_share": _plain(cell.choosing_share),
        "fallback_share": _plain(cell.fallback_share),
        "stopped_share": _plain(cell.stopped.mean()),
    }


def _interval(x: Floats) -> tuple[float, float]:
    """95 % percentile bootstrap interval of a mean."""
    picked = np.random.default_rng(0).integers(len(x), size=(_RESAMPLES, len(x)))
    low, high = np.quantile(x[picked].mean(axis=1), [0.025, 0.975])
    return float(low), float(high)


def _plain(x: Any) -> float | None:
    """A number for JSON; None where there is none."""
    return float(x) if math.isfinite(x) else None


def _group_of(spec: str) -> str:
    word = spec.split(":")[0]
    if word == "scorer":
        return "scorer"
    return next((group for group, words in GROUPS.items() if word in words), "other")


def _members(campaign: Campaign, group: str) -> list[str]:
    """Names of a group's policies, without those that stop early."""
    specs = [s for s in campaign.policies if _group_of(s) == group and "stop=" not in s]
    return [name_of(spec) for spec in specs]


def _by_place(cells: Sequence[Cell]) -> dict[tuple[str, Budget], dict[str, Cell]]:
    places: dict[tuple[str, Budget], dict[str, Cell]] = {}
    for cell in cells:
        places.setdefault((cell.problem, cell.budget), {})[cell.policy] = cell
    return places


def _comparisons(results: Results) -> list[dict[str, Any]]:
    rows = []
    for here in _by_place(results.cells).values():
        for ours in _members(results.campaign, "scorer"):
            for group in GROUPS:
                rivals = [name for name in _members(results.campaign, group) if name in here]
                if ours in here and rivals:
                    (found,) = compare(list(here.values()), ours, rivals)
                    rows.append({**_compared(found), "group": group})
    return rows


def _compared(found: Compared) -> dict[str, Any]:
    return {
        "problem": found.problem,
        "budget": str(found.budget),
        "rollout_seconds": found.budget.rollout_seconds,
        "timed": found.budget.seconds is not None,
        "policy": found.policy,
        "rival": found.rival,
        "ratio": _plain(found.ratio),
        "low": _plain(found.low),
        "high": _plain(found.high),
    }


def _aims(comparisons: Sequence[Mapping[str, Any]], cells: Sequence[Cell]) -> dict[str, Any]:
    """How often each scorer reaches what it is meant to, of the cells where that can be judged."""
    slow_exact = {
        (cell.problem, str(cell.budget)) for cell in cells
        if cell.policy == "exact_dynamic_rate" and cell.choosing_share > 0.2
    }  # fmt: skip
    aims: dict[str, Any] = {}
    for row in comparisons:
        ratio = row["ratio"]
        if not row["timed"] or row["rollout_seconds"] < _AIM_SECONDS * (1 - 1e-9) or ratio is None:
            continue
        limits = {"sampling": (0.85, 1.1), "static": (0.95, 1.05), "exact": (1.0, 1.0)}[row["group"]]
        if row["group"] == "exact" and (row["problem"], row["budget"]) not in slow_exact:
            continue
        none = {"cells": 0, "reached": 0, "beyond": 0, "at_most": limits[0], "never_above": limits[1]}
        counts = aims.setdefault(row["policy"], {}).setdefault(row["group"], none)
        counts["cells"] += 1
        counts["reached"] += ratio <= limits[0]
        counts["beyond"] += ratio > limits[1]
    return aims


def _advice(results: Results) -> list[dict[str, Any]]:
    """The policy to use for each problem and budget: the cheapest that no other measurably beats.

    The closed form is advised wherever the best other policy's 95 % interval of the ratio to it reaches 1.
    """
    campaign = results.campaign
    static = _members(campaign, "static")
    others = [n for group in ("scorer", "sampling", "exact") for n in _members(campaign, group)]
    advice = []
    for (problem, budget), here in _by_place(results.cells).items():
        rivals = [name for name in static if name in here]
        rest = [name for name in others if name in here]
        if not rivals or not rest:
            continue
        best = min(rest, key=lambda name: float(here[name].measured.mean()))
        (found,) = compare(list(here.values()), best, rivals)
        better = math.isfinite(found.high) and found.high < 1
        advice.append(
            {
                "problem": problem,
                "budget": str(budget),
                "use": best if better else found.rival,
                "why": "measurably better than the closed form" if better else "nothing measurably better",
                "best_other": best,
                "ratio": _plain(found.ratio),
                "low": _plain(found.low),
                "high": _plain(found.high),
            }
        )
    return advice


def _break_even(results: Results) -> list[dict[str, Any]]:
    """Regret against the cost of a rollout: every policy as a multiple of the best sampling one.

    A row for each policy, cost and time in rollouts; `ratio` is the geometric mean over the problems that
    have the policy at each of these costs, and a regret above 0 everywhere.
    """
    campaign = results.campaign
    sampling = _members(campaign, "sampling")
    names = [n for group in (*GROUPS, "scorer") for n in _members(campaign, group)]
    ratios: dict[tuple[int, str], dict[float, dict[str, float]]] = {}
    for (problem, budget), here in _by_place(results.cells).items():
        rivals = [float(here[name].measured.mean()) for name in sampling if name in here]
        if budget.seconds is None or not rivals or min(rivals) <= 0:
            continue
        for name in names:
            if name in here and (regret := float(here[name].measured.mean())) > 0:
                by_cost = ratios.setdefault((budget.room(0, 0.0), name), {})
                by_cost.setdefault(budget.rollout_seconds, {})[problem] = math.log(regret / min(rivals))
    rows = []
    for (rollouts, name), by_cost in ratios.items():
        shared = set.intersection(*(set(found) for found in by_cost.values()))
        for cost, found in sorted(by_cost.items()):
            if shared:
                logs = [found[problem] for problem in shared]
                rows.append(
                    {
                        "rollouts": rollouts,
                        "rollout_seconds": cost,
                        "policy": name,
                        "ratio": math.exp(math.fsum(logs) / len(logs)),
                        "problems": len(shared),
                    }
                )
    return rows


def _stopping(results: Results) -> list[dict[str, Any]]:
    """Policies that stop early against the same without: rollouts saved, and the ratio of regrets."""
    pairs = {
        name_of(spec): name_of(spec[: spec.index(":stop=")])
        for spec in results.campaign.policies
        if ":stop=" in spec
    }
    rows = []
    for here in _by_place(results.cells).values():
        for stops, goes_on in pairs.items():
            if stops in here and goes_on in here:
                (found,) = compare(list(here.values()), stops, [goes_on])
                saved = 1 - here[stops].rollouts.sum() / max(here[goes_on].rollouts.sum(), 1)
                rows.append({**_compared(found), "saved": _plain(saved)})
    return rows


# --- tables ----------------------------------------------------------------------------------------


def cells_table(summary: Mapping[str, Any], policies: Sequence[str] | None = None) -> list[str]:
    """Every cell of each scorer as Markdown lines: ratios to the best of each group, with intervals."""
    ratios: dict[tuple[str, str, str], dict[str, str]] = {}
    for row in summary["comparisons"]:
        if policies is None or row["policy"] in policies:
            key = row["problem"], row["budget"], row["policy"]
            ratios.setdefault(key, {})[row["group"]] = f"{_ratio(row)} ({row['rival']})"
    lines = ["| problem | budget | scorer | to sampling | to the closed form | to the exact rate |"]
    lines.append("| --- | --- | --- | --- | --- | --- |")
    for (problem, budget, policy), found in ratios.items():
        columns = " | ".join(found.get(group, "-") for group in GROUPS)
        lines.append(f"| {problem} | {budget} | {policy} | {columns} |")
    return lines


def _ratio(row: Mapping[str, Any]) -> str:
    if row["ratio"] is None:
        return "none"
    interval = f" [{row['low']:.2f}, {row['high']:.2f}]" if row["low"] is not None else ""
    return f"{row['ratio']:.2f}{interval}"


def aims_table(summary: Mapping[str, Any]) -> list[str]:
    """How often each scorer reached its aims, as Markdown lines."""
    lines = ["| scorer | against | cells | at most | reached | never above | above |"]
    lines.append("| --- | --- | --- | --- | --- | --- | --- |")
    for policy, groups in summary["aims"].items():
        for group, c in groups.items():
            share = f"{c['reached']} ({c['reached'] / c['cells']:.0%})"
            lines.append(
                f"| {policy} | {group} | {c['cells']} | {c['at_most']} | {share} | {c['never_above']} "
                f"| {c['beyond']} |"
            )
    return lines
