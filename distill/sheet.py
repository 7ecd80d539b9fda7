"""The sheet: measured facts that travel with a scorer file, as JSON and as a readable page; floor 4."""

from __future__ import annotations

import json
import os
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any, Final

from distill.files import write_atomic
from distill.scorer_inputs import worded, worded_batch

__all__ = [
    "FRONT_FILE",
    "FRONT_FORMAT",
    "SHEET_FORMAT",
    "accuracy_table",
    "backup_text",
    "bound_text",
    "front_table",
    "peer_table",
    "shift_table",
    "sheet_page",
    "write_sheet",
]

SHEET_FORMAT: Final = "voc-sheet/1"
FRONT_FORMAT: Final = "voc-front/1"
FRONT_FILE: Final = "front.json"  # beside the scorer files that `train` leaves


def write_sheet(sheet: Mapping[str, Any], scorer_file: str | os.PathLike[str]) -> tuple[Path, Path]:
    """Write the sheet beside the scorer file, as `<name>.json` and `<name>.md`; returns the two paths."""
    page, data = Path(scorer_file).with_suffix(".md"), Path(scorer_file).with_suffix(".json")
    write_atomic(data, (json.dumps(sheet, indent=1, allow_nan=False) + "\n").encode())
    write_atomic(page, sheet_page(sheet).encode())
    return data, page


def sheet_page(sheet: Mapping[str, Any]) -> str:
    """The sheet as a Markdown page, most important figures first."""
    accuracy, decision, data = sheet["accuracy"], sheet["decision"], sheet["data"]
    parts = data["parts"]
    held_out = (
        f"{parts['held_out']['trees']:,} held-out trees ({parts['held_out']['candidates']:,} candidates)"
    )
    lines = [
        f"# {sheet['file']['name']}",
        "",
        f"{_value_text(sheet['value'])}. Learner: {sheet['recipe']} ({sheet['chosen']}).",
        "The scorer only spends search effort; it is no safety function.",
        "",
        f"## On {held_out}",
        "",
        *accuracy_table({"**this scorer**": accuracy, **sheet["beside"]}),
        "",
        f"Square brackets: {100 * accuracy['interval_level']:g} % bootstrap intervals over trees.",
        f"Trees whose best value is 0, left out of both shares: {accuracy['trees_with_best_zero']}.",
        "Stop loss: net value lost by stopping or going on wrongly at the leaves' own cost, of all that the",
        "best candidates net.",
        *bound_text(accuracy.get("calibration")),
        "",
        f"## One decision over {decision['leaves']} leaves, one thread",
        "",
        "| | p50, us | p99, us | times this scorer's p50 |",
        "| --- | --- | --- | --- |",
        f"| this scorer | {_us(decision['scorer'])} | 1 |",
        *(
            f"| exact {name} | {_us(t)} | {decision['times_faster'][name]:,.0f} |"
            for name, t in decision["exact"].items()
        ),
        *backup_text(decision),
        "",
        "## The scorers that were trained",
        "",
        *front_table(sheet["front"]),
        "",
        *_rehearsal_lines(sheet.get("rehearsal")),
        "## Where it comes from",
        "",
        *(f"- {name}: {value}" for name, value in data.items() if name != "parts"),
        *(f"- {name}: {p['trees']:,} trees, {p['candidates']:,} candidates" for name, p in parts.items()),
        f"- seed {sheet['seed']}; {', '.join(f'{k} {v}' for k, v in sheet['made_with'].items())}",
        f"- SHA-256 of the file: `{sheet['file']['sha256']}`",
        f"- features: {', '.join(sheet['features'])}",
    ]
    return "\n".join(lines) + "\n"


def backup_text(decision: Mapping[str, Any]) -> list[str]:
    """What the backup of a scorer of records costs beside it; empty for leaf tables."""
    if not decision.get("backup"):
        return []
    faster = decision["times_faster_with_backup"]
    together = ", ".join(f"exact {name} {times:,.1f} times" for name, times in faster.items())
    return [
        "",
        "| backup, which fills the scorer's rows | p50, us | p99, us |",
        "| --- | --- | --- |",
        *(f"| {name} | {_us(t)} |" for name, t in decision["backup"].items()),
        "",
        "Median times over those of the scorer and, after one rollout, the backup together:",
        f"{together or 'not measured'}.",
    ]


def _rehearsal_lines(r: Mapping[str, Any] | None) -> list[str]:
    """How the scorer did in closed-loop search, where it was rehearsed."""
    if r is None:
        return []
    groups = {
        "sampling": "better of UCT and both Thompson samplings",
        "static": "static closed form",
        "exact": "exact rate, where choosing by it takes over a fifth of the time",
    }
    lines = [
        "## In rehearsal",
        "",
        f"{r['seeds']} paired decisions in closed-loop search for each problem and budget. Counted: those of",
        "wall-clock time with rollouts of 100 us or more. Ratios are of simple regret: below 1 the scorer",
        "decides better. The `.json` sheet has every problem and budget, with intervals.",
        *_judged(r["cells"]),
        "",
        "| use | over the | cells | aim | reached | to be avoided | met |",
        "| --- | --- | --- | --- | --- | --- | --- |",
    ]
    for use, aims in r["uses"].items():
        for group, c in aims.items():
            lines.append(
                f"| {use} | {groups[group]} | {c['cells']} | <= {c['at_most']:g} | {c['reached']} "
                f"| > {c['never_above']:g} | {c['beyond']} |"
            )
    lines += [
        "",
        "Scorer or closed form (all scorers that read such trees, geometric means of the ratios):",
        "",
        "| leaves | a rollout, us | cells | to the closed form | to the better sampling | use |",
        "| --- | --- | --- | --- | --- | --- |",
        *(
            f"| {k['kind']} | {1e6 * k['rollout_seconds']:,.0f} | {k['static']['cells']} "
            f"| {_whole_estimate(k['static'])} | {_whole_estimate(k['sampling'])} | {k['use']} |"
            for k in r["by_kind"]
        ),
        "",
    ]
    return lines


def _judged(cells: Sequence[Mapping[str, Any]]) -> list[str]:
    """What regret is against, where that is not the exact optimum everywhere."""
    estimated = sorted({c["problem"] for c in cells if c.get("regret_error")})
    if not estimated:
        return []
    mixed = (
        " (not counted beside problems with an optimum)"
        if any(not c.get("regret_error") for c in cells)
        else ""
    )
    names = ", ".join(estimated)
    return [f"Regret is against many rollouts at each leaf, not the exact optimum, on {names}{mixed}."]


def _whole_estimate(k: Mapping[str, Any]) -> str:
    """A ratio with its interval, where it has one."""
    figures = {"value": k["ratio"]} | ({} if k["low"] is None else {"low": k["low"], "high": k["high"]})
    return _estimate(figures)


def accuracy_table(rows: Mapping[str, Mapping[str, Any]]) -> list[str]:
    """Markdown lines: a row for each name, the accuracy figures of `metrics.Metrics.to_json`."""
    return [
        "| | forgone share, % | relative forgone, % | best picks, % | rank correlation | stop loss, % |",
        "| --- | --- | --- | --- | --- | --- |",
        *(_accuracy_row(name, m) for name, m in rows.items()),
    ]


def front_table(scorers: Sequence[Mapping[str, Any]]) -> list[str]:
    """Markdown lines: a row for each trained scorer, held-out accuracy beside decision latency."""
    return [
        "| | on the front | forgone share, % | relative forgone, % | p50, us | p99, us | KB | fit, s |",
        "| --- | --- | --- | --- | --- | --- | --- | --- |",
        *(_front_row(e) for e in scorers),
    ]


def peer_table(figures: Mapping[str, Any]) -> list[str]:
    """Markdown lines: the scorer and each peer of `validate` with peers, and why others are left out."""
    rows = {"the scorer": figures["accuracy"] | {"latency": figures["latency"]}, **figures["peers"]}
    return [
        "| | forgone share, % | relative forgone, % | best picks, % | p50, us | p99, us |",
        "| --- | --- | --- | --- | --- | --- |",
        *(
            f"| {name} | {_estimate(m['forgone_percent'])} | {_estimate(m['relative_forgone_percent'])} "
            f"| {_estimate(m['top1_percent'])} | {_us(m['latency'])} |"
            for name, m in rows.items()
        ),
        *(["", "Left out:"] if figures["peers_left_out"] else []),
        *(f"- {name}: {why}" for name, why in figures["peers_left_out"].items()),
    ]


def shift_table(figures: Mapping[str, Mapping[str, Any]]) -> list[str]:
    """Markdown lines: a row for each shift of `shift.measure_shifts`."""

    def percent(x: float | None) -> str:
        return "" if x is None else f"{x:.3g}"

    head = "trees | forgone share, % | relative forgone, % | first-order start, % | bound holds, % "
    return [
        f"| shift | {head}| trees flagged, % | loss flagged, % |",
        "| --- | --- | --- | --- | --- | --- | --- | --- |",
        *(
            f"| {name} | {m['trees']:,} | {_estimate(m['forgone_percent'])} "
            f"| {_estimate(m['relative_forgone_percent'])} | {percent(m['first_order_forgone_percent'])} "
            f"| {percent(m['covered_percent'])} | {percent(m['flagged_trees_percent'])} "
            f"| {percent(m['loss_flagged_percent'])} |"
            for name, m in figures.items()
        ),
    ]


def bound_text(c: Mapping[str, Any] | None) -> list[str]:
    """How often the upper bound held on the held-out trees."""
    if c is None or c["stated"] is None:
        return []
    worst, every = c["worst_slice"], _estimate(c["covered_percent"])
    text = [
        f"Upper bound `voc_high`, stated {100 * c['stated']:g} %: held for {every} %",
        f"of all candidates, and for {_estimate(c['covered_live_percent'])} % of those worth anything"
        + (";" if worst else "."),
    ]
    if worst:
        text.append(
            f"worst slice of {worst['candidates']:,} candidates ({worst['by']} {worst['slice']}): "
            f"{worst['covered_percent']:.3g} %."
        )
    return text


def _value_text(value: Mapping[str, Any]) -> str:
    kind = worded(value["horizon"])
    if value["batch"] is None:
        what = kind.format("rate")
        return f"Scores the {what}: the best VOC a rollout over batches within the rollouts left"
    return f"Scores the {kind.format('VOC')} of {worded_batch(value['batch'])}"


def _accuracy_row(name: str, m: Mapping[str, Any]) -> str:
    cells = (_estimate(m.get(k)) for k in _FIGURES)
    return f"| {name} | {' | '.join(cells)} |"


_FIGURES = (
    "forgone_percent",
    "relative_forgone_percent",
    "top1_percent",
    "rank_correlation",
    "stop_loss_percent",
)


def _estimate(e: Mapping[str, float | None] | None) -> str:
    if e is None or e["value"] is None:
        return ""
    text = f"{e['value']:.3g}"
    return f"{text} [{e['low']:.3g}, {e['high']:.3g}]" if "low" in e else text


def _us(t: Mapping[str, float]) -> str:
    return f"{t['p50_us']:,.1f} | {t['p99_us']:,.1f}"


def _front_row(e: Mapping[str, Any]) -> str:
    held = e["held_out"]
    return (
        f"| {e['recipe']} | {'yes' if e['on_front'] else 'no'} | {_estimate(held['forgone_percent'])} "
        f"| {_estimate(held['relative_forgone_percent'])} | {_us(e['latency'])} "
        f"| {e['bytes'] / 1024:.0f} | {e['fit_seconds']:.1f} |"
    )
