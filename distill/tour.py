"""The whole job once, on the cold-store family and on the recorded traces; floor 7.

Every step says what it did and what it measured; the folder keeps the scorer files, their sheets, the
datasets and a summary.
"""

from __future__ import annotations

import json
import os
import shutil
import time
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

import numpy as np

from distill import report as pages
from distill import voc
from distill.errors import InputError
from distill.family import draw, load_family
from distill.files import read_json, write_atomic
from distill.generate import Traces, generate
from distill.query import Query
from distill.rehearse import plans
from distill.rehearse.results_tables import cells_table
from distill.report.rehearsal_page import write_rehearsal_page
from distill.runtime import Scorer
from distill.sample_data import FAMILIES, TRACES
from distill.sheet import accuracy_table, front_table
from distill.ship import ship
from distill.train import train
from distill.tree import BeliefTree, leaf_table
from distill.validate import validate

__all__ = ["tour"]

TREES = 12_000  # of the cold-store family: about 310,000 exact labels
_TREES_A_DECISION = 5  # how often the recorder looks at one decision
_FAST = "dense 32-32"  # the scorer that rehearses
_TRACE_SHARE = 0.7  # of each environment's recorded decisions, for training


def tour(
    out: str | os.PathLike[str], *, trees: int = TREES, say: Callable[[str], None] = print
) -> dict[str, Any]:
    """Generate, train, validate, ship and compare; leaves `out` with scorers, sheets and a summary.

    out : a folder; what an earlier tour left there is replaced, except datasets, which are gone on with.
    trees : of the cold-store family. say : where the lines go. Returns the figures of `summary.json`.
    """
    out = Path(out)
    started = time.perf_counter()
    lines: list[str] = []

    def report(*texts: str) -> None:
        for text in texts:
            lines.append(text)
            say(text)

    report("# voc-distill: the whole job on a cold store's pallet shuttle", "", pages.CAUTION, "")
    summary: dict[str, Any] = {}
    steps: tuple[tuple[str, Callable[[Path, int, Callable[..., None]], dict[str, Any]]], ...] = (
        ("Label trees of the cold-store family exactly", _label),
        ("Train the front, judge it on held-out trees, ship one file", _train_and_ship),
        ("Recorded traces: the family's scorer, and one trained on traces", _on_traces),
        ("One tree, exactly and by scorer", _side_by_side),
        ("A quick rehearsal: does the scorer decide better at equal time?", _rehearse),
    )
    for number, (title, step) in enumerate(steps, 1):
        report(f"## {number}. {title}", "")
        start = time.perf_counter()
        summary |= step(out, trees, report)
        report("", f"({time.perf_counter() - start:.0f} s)", "")
    summary["seconds"] = round(time.perf_counter() - started, 1)
    report(
        f"Done in {summary['seconds']:.0f} s. In {out}: scorer.onnx (load it with distill.runtime.Scorer), "
        "its sheet scorer.md and .json, scorer-fast.onnx, scorer-traces.onnx, the datasets, summary.md and "
        ".json, and report.html and rehearsal/rehearsal.html with pictures."
    )
    write_atomic(out / "summary.json", (json.dumps(summary, indent=1) + "\n").encode())
    write_atomic(out / "summary.md", ("\n".join(lines) + "\n").encode())
    pages.write_page(summary, out / "report.html")
    return summary


def _label(out: Path, trees: int, report: Callable[..., None]) -> dict[str, Any]:
    family = load_family(FAMILIES / "cold-store.toml")
    figures = _dataset(family, out / "dataset", report, trees=trees)
    return {"labels": figures}


def _dataset(source: Any, folder: Path, report: Callable[..., None], **more: Any) -> dict[str, Any]:
    """Label a source into a folder; one that was started is gone on with."""
    start = time.perf_counter()
    workers = os.cpu_count() or 1
    totals = generate(source, folder, workers=workers, progress=True, **more)["totals"]
    seconds = time.perf_counter() - start
    report(
        f"{folder.name}: {totals['trees']:,} trees, {totals['candidates']:,} exact labels (dynamic rate), "
        f"{totals['aside']:,} trees set aside; {totals['candidates'] / seconds:,.0f} labels a second, "
        f"{workers} processes."
    )
    return {**totals, "seconds": round(seconds, 1)}


def _train_and_ship(out: Path, trees: int, report: Callable[..., None]) -> dict[str, Any]:
    del trees
    front = train(out / "dataset", out / "trained", progress=True)
    sheet = ship(out / "trained", out / "scorer.onnx")
    ship(out / "trained", out / "scorer-fast.onnx", scorer=_FAST)
    held_out, decision = front["parts"]["held_out"], sheet["decision"]
    report(
        f"On {held_out['trees']:,} held-out trees ({held_out['candidates']:,} candidates); "
        f"latency of one decision over {front['leaves']} leaves, raw arrays in, pick out, one thread.",
        "Square brackets: 95 % bootstrap intervals over trees.",
        "",
        *front_table(front["scorers"]),
        "",
        "Beside them, on the same trees:",
        "",
        *accuracy_table(front["beside"]),
        "",
        f"Shipped as scorer.onnx: {sheet['recipe']} ({sheet['chosen']}), "
        + ", ".join(
            f"{x:,.0f} times faster than the exact {name}" for name, x in decision["times_faster"].items()
        )
        + ".",
    )
    return {"scorer": sheet}


def _on_traces(out: Path, trees: int, report: Callable[..., None]) -> dict[str, Any]:
    """Train on the first decisions of each environment, judge on the others: no decision is on both sides."""
    del trees
    fit: list[BeliefTree] = []
    held_out: list[BeliefTree] = []
    for path in sorted(TRACES.glob("*.jsonl.gz")):
        recorded = Traces.read([path]).trees
        cut = int(len(recorded) / _TREES_A_DECISION * _TRACE_SHARE) * _TREES_A_DECISION
        fit += recorded[:cut]
        held_out += recorded[cut:]
    _dataset(Traces("recorded decisions, for training", fit), out / "traces-fit", report)
    _dataset(Traces("recorded decisions, held out", held_out), out / "traces-held-out", report)
    train(out / "traces-fit", out / "trained-traces", progress=True)
    ship(out / "trained-traces", out / "scorer-traces.onnx")
    by_family = validate(out / "scorer.onnx", out / "traces-held-out")
    by_traces = validate(out / "scorer-traces.onnx", out / "traces-held-out")
    rows: dict[str, Mapping[str, Any]] = {
        "scorer trained on the family alone": by_family["accuracy"],
        "scorer trained on traces": by_traces["accuracy"],
        **by_family["beside"],
    }
    report("", f"On the {len(held_out)} held-out recorded trees:", "", *accuracy_table(rows))
    return {"on traces": rows}


def _side_by_side(out: Path, trees: int, report: Callable[..., None]) -> dict[str, Any]:
    """A tree beyond those that were labelled, of moderate size."""
    family = load_family(FAMILIES / "cold-store.toml")
    tree = next(t for i in range(trees, trees + 1000) if 8 <= (t := draw(family, 0, i)).n_leaves <= 12)
    table = leaf_table(tree)
    assert tree.remaining is not None
    columns = {
        name: getattr(table, name)
        for name in ("mean", "var", "noise_var", "gain", "offset", "action", "cost")
    }
    scorer = Scorer.load(out / "scorer.onnx")
    exact = voc.price(tree, Query(batch=None, remaining=tree.remaining))
    scores = scorer.score(**columns, remaining=tree.remaining)
    best = int(np.argmax(exact.voc - columns["cost"]))
    report(
        f"Tree {tree.id}, {tree.remaining} rollouts left. Exact: {exact.method}.",
        "",
        "| leaf | action | exact rate | batch | scorer's rate | batch |",
        "| --- | --- | --- | --- | --- | --- |",
        *(
            f"| {i} | {columns['action'][i]} | {exact.voc[i]:.4g} | {exact.batch[i]} "
            f"| {scores.voc[i]:.4g} | {scores.batch[i]} |"
            for i in range(tree.n_leaves)
        ),
        "",
        f"Exact picks leaf {best}, the scorer leaf {scores.pick}; worth a rollout's cost: "
        f"{'yes' if scores.worth_it else 'no'}.",
    )
    return {
        "one tree": {
            "exact": exact.voc.tolist(),
            "scorer": np.asarray(scores.voc).tolist(),
            "exact_pick": best,
            "scorer_pick": int(scores.pick),
        }
    }


def _rehearse(out: Path, trees: int, report: Callable[..., None]) -> dict[str, Any]:
    """Small cells, so wide intervals: the full grid is the rehearse command's."""
    del trees
    earlier = out / "rehearsal" / "campaign.json"
    if earlier.is_file():
        found = read_json(earlier)
        if not isinstance(found, dict) or found.get("problems") != list(plans.plan("quick").problems):
            raise InputError(str(earlier.parent), "must not hold a rehearsal of other problems")
        shutil.rmtree(earlier.parent)  # an earlier tour's, played with another scorer
    summary = plans.quick([out / "scorer-fast.onnx"], out / "rehearsal")
    write_rehearsal_page(summary, out / "rehearsal" / "rehearsal.html")
    report(
        f"Ratios of regret at equal time, {_FAST} against the best of each group; below 1 it decides better.",
        "",
        *cells_table(summary),
    )
    return {"rehearsal": {key: summary[key] for key in ("comparisons", "aims")}}
