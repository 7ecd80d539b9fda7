"""What stopping early saves, by problem and budget: a picture of a rehearsal; floor 7, no computing."""

from __future__ import annotations

import xml.etree.ElementTree as ET
from collections.abc import Mapping, Sequence
from typing import Any

from matplotlib.figure import Figure

from distill.rehearse.aimed import SAVED
from distill.report.rehearsal_pictures import MARKS, WIDTH
from distill.report.theme import DRAWN, SMALL, one_line, styled, svg

__all__ = ["stopping"]

Rows = Sequence[Mapping[str, Any]]


def stopping(summary: Mapping[str, Any]) -> ET.Element | None:
    """Rollouts saved, a mark each budget; hollow where the regret is measurably larger. None without stops.

    Where several policies stop on one problem and budget, the one that saves most is shown.
    """
    best: dict[tuple[str, str], Mapping[str, Any]] = {}
    for row in summary["stopping"]:
        key = row["problem"], row["budget"]
        if row["saved"] is not None and (key not in best or best[key]["saved"] < row["saved"]):
            best[key] = row
    if not best:
        return None
    return svg(
        _stopping(list(best.values())), "stopping", "Rollouts saved by stopping early, by problem and budget"
    )


@styled
def _stopping(rows: Rows) -> Figure:
    most = {p: max(r["saved"] for r in rows if r["problem"] == p) for p in (r["problem"] for r in rows)}
    problems = sorted(most, key=lambda problem: most[problem])
    budgets = list(dict.fromkeys(row["budget"] for row in rows))
    figure = Figure(figsize=(WIDTH, (80 + 17 * len(problems)) / 72))
    figure.patch.set_visible(False)
    ax = figure.subplots()
    ax.patch.set_visible(False)
    roles = ["peer", "scorer", "exact", "quiet", "ink"]
    for nth, budget in enumerate(budgets):
        colour, mark = DRAWN[roles[nth % len(roles)]], MARKS[nth % len(MARKS)]
        label = f"{budget} rollouts" if budget.isdigit() else budget
        ax.plot([], [], mark, ms=5, color=colour, label=label)
        for row in (r for r in rows if r["budget"] == budget):
            at = 100 * row["saved"], problems.index(row["problem"])
            ax.plot(*([x] for x in at), mark, ms=5, mec=colour, mfc=colour if row["free"] else "none")
    ax.axvline(100 * SAVED, color=DRAWN["quiet"], lw=1, ls=(0, (4, 3)))
    ax.set_yticks(range(len(problems)), [one_line(p, 28) for p in problems])
    ax.set(xlim=(-3, 103), ylim=(-0.7, len(problems) - 0.3), xlabel="rollouts saved, %")
    ax.set_xticks([0, 20, 40, 60, 80, 100])
    ax.tick_params(axis="y", length=0)
    ax.grid(axis="x")
    figure.legend(loc="outside lower left", frameon=False, fontsize=SMALL, ncols=2, handletextpad=0.2)
    return figure
