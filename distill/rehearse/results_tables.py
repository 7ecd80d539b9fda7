"""A rehearsal's figures as Markdown lines; everything comes from the summary, nothing is computed."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any, Final

from distill.rehearse.against import against_sentences
from distill.rehearse.aimed import BEST, FEWEST, SAVED, TOO_FEW
from distill.rehearse.findings import GROUPS
from distill.rehearse.left_out import Reason

__all__ = ["cells_table", "every_cell", "left_out_lines", "short_table", "stopping_table", "time_table"]

Figures = Mapping[str, Any]

_AGAINST: Final = {
    "sampling": "better of UCT and both Thompson samplings",
    "static": "static closed form",
    "exact": "exact rate, where choosing by it takes over a fifth of the time",
}
_NONE: Final = "-"


def left_out_lines(summary: Figures) -> list[str]:
    """Who did not play, by reason: policies, and in how many places."""
    reasons: dict[tuple[str, str], int] = {}
    for row in summary["left_out"]:
        key = row["policy"], Reason.of(row).kind
        reasons[key] = reasons.get(key, 0) + 1
    return [f"Left out: {policy}, in {n} of the places: {why}." for (policy, why), n in reasons.items()]


def short_table(summary: Figures) -> list[str]:
    """What the whole rehearsal says: counts of the aims, and scorer or closed form by kind and cost."""
    campaign, best = summary["campaign"], summary["aims"].get(BEST, {})
    n = len(campaign["problems"])
    lines = [f"{n} problem{'s' * (n != 1)}, {campaign['seeds']} paired decisions a cell."]
    if campaign["seeds"] < FEWEST:
        lines.append(
            f"These are {TOO_FEW}, and nothing is claimed: below {FEWEST}, 95 % intervals of resampled "
            "decisions are much too narrow."
        )
    lines += against_sentences(summary)
    if best:
        head = "regret of the best scorer over that of the | cells | aim | reached | to be avoided | met"
        lines += [
            "Cells at equal wall-clock time, rollouts of 100 us or more. *Best scorer*: for either half of",
            "the decisions, the scorer (file and use) that did best on the other half.",
            "",
            f"| {head} | surely < 1 | surely > 1 |",
            "| --- | --- | --- | --- | --- | --- | --- | --- |",
        ]
    for group, c in best.items():
        more = f", and {c['no_choice']} where one choice is over the budget" if c.get("no_choice") else ""
        lines.append(
            f"| {_AGAINST[group]} | {c['cells']}{more} | <= {c['at_most']:g} "
            f"| {c['reached']} ({c['reached'] / c['cells']:.0%}) | > {c['never_above']:g} | {c['beyond']} "
            f"| {c['better']} | {c['worse']} |"
        )
    if summary["by_kind"]:
        ratios_to = "to the closed form | to the better sampling"
        lines += [
            "",
            f"| leaves | a rollout | cells | decisions each | {ratios_to} | use | why |",
            "| --- | --- | --- | --- | --- | --- | --- | --- |",
        ]
        lines += [
            f"| {row['kind']} | {_cost(row['rollout_seconds'])} | {row['static']['cells']} "
            f"| {row['decisions']} | {_ratio(row['static'])} | {_ratio(row['sampling'])} | {row['use']} "
            f"| {row['why']} |"
            for row in summary["by_kind"]
        ]
        lines += ["", "Ratios here are geometric means over the cells, 95 % intervals in square brackets."]
    return [*lines, "", *_stopping_lines(summary["stopping"])] if summary["stopping"] else lines


def _stopping_lines(rows: Sequence[Figures]) -> list[str]:
    """Stopping early: where it saves much and costs nothing that could be measured, by budget."""
    lines = []
    for budget, against in dict.fromkeys((row["budget"], row["regret_against"]) for row in rows):
        here = [row for row in rows if (row["budget"], row["regret_against"]) == (budget, against)]
        decisions = min(row["decisions"] for row in here)
        if decisions < FEWEST:
            lines.append(
                f"Stopping early at a budget of {budget}: {decisions} decisions, {TOO_FEW} (below {FEWEST})."
            )
            continue
        saves = [row for row in here if row["free"] and row["saved"] is not None and row["saved"] >= SAVED]
        problems, some = {row["problem"] for row in here}, {row["problem"] for row in saves}
        better = {row["problem"] for row in saves if row["high"] is not None and row["high"] < 1}
        also = f", on {len(better)} of them with surely less" if better else ""
        lines.append(
            f"Stopping early at a budget of {budget} saves at least {100 * SAVED:.0f} % of the rollouts, "
            f"with no measurable loss of regret, on {len(some)} of {len(problems)} problems{also} "
            f"({decisions} decisions each)."
        )
    return lines


def stopping_table(summary: Figures) -> list[str]:
    """Every policy that may stop early, by problem and budget: rollouts saved, regret to that of going on."""
    lines = [
        "| problem | leaves | budget | policy | rollouts saved, % | regret to that of going on | price |",
        "| --- | --- | --- | --- | --- | --- | --- |",
    ]
    for row in summary["stopping"]:
        price = _NONE if row["price"] is None else f"{row['price']:g}"
        regret = _ratio(row) if row["ratio"] is not None else "both 0" if row["lost"] == 0 else "from 0"
        lines.append(
            f"| {row['problem']} | {summary['kinds'].get(row['problem'], _NONE)} | {row['budget']} "
            f"| {row['policy']} | {100 * row['saved']:.0f} | {regret} | {price} |"
        )
    return lines


def every_cell(summary: Figures) -> list[str]:
    """Every problem and budget: the best scorer against all others, and what the page would use."""
    ratios_to = "to the better sampling | to the closed form | to the exact rate"
    regrets = "regret without a search | of the best scorer"
    lines = [
        f"| problem | leaves | budget | {regrets} | {ratios_to} | choosing, % (exact) | use |",
        "| --- | --- | --- | --- | --- | --- | --- | --- | --- | --- |",
    ]
    without = {row["problem"]: f"{row['measured']:.3g}" for row in summary["unsearched"]}
    use = {(a["problem"], a["budget"]): a["use"] for a in summary["advice"]}
    exact = {
        (row["problem"], row["budget"]): row
        for row in summary["rows"]
        if row["policy"] == "exact_dynamic_rate"
    }
    for row in summary["rows"]:
        if row["policy"] != BEST:
            continue
        place = row["problem"], row["budget"]
        ratios = [
            f"{_ratio(found)} {found['rival']}" if (found := row["ratios"].get(group)) else _NONE
            for group in GROUPS
        ]
        shares = f"{_percent(row)} ({_percent(exact.get(place))})"
        regret = _estimate(row["measured"], row["interval"])
        lines.append(
            f"| {row['problem']} | {row['kind']} | {row['budget']} | {without.get(row['problem'], _NONE)} "
            f"| {regret} | {' | '.join(ratios)} | {shares} | {use.get(place, _NONE)} |"
        )
    return lines


def cells_table(summary: Figures) -> list[str]:
    """Every cell of each scorer as Markdown lines: ratios to the best of each group, with intervals."""
    scorers = {name for file in summary["scorers"] for name in file["policies"]}
    if not any(row["policy"] in scorers for row in summary["rows"]):
        return []
    lines = ["| problem | budget | scorer | to sampling | to the closed form | to the exact rate |"]
    lines.append("| --- | --- | --- | --- | --- | --- |")
    for row in summary["rows"]:
        if row["policy"] in scorers:
            found = row["ratios"]
            columns = " | ".join(
                f"{_ratio(found[g])} ({found[g]['rival']})" if g in found else _NONE for g in GROUPS
            )
            lines.append(f"| {row['problem']} | {row['budget']} | {row['policy']} | {columns} |")
    return lines


def time_table(summary: Figures, seeds: int, tuning_seeds: int, workers: int = 2) -> list[str]:
    """What the same campaign takes with other numbers of decisions, by problem, from this one's own times.

    Processor seconds of decisions grow with their number; those of a first use, and of exact optima, are
    in them too, so from few decisions the estimate is rather too long.
    """
    campaign = summary["campaign"]
    lines = ["| problem | cells, s | tuning, s |", "| --- | --- | --- |"]
    total = 0.0
    for problem, took in summary["processor_seconds"].items():
        cells = took["cells"] * seeds / campaign["seeds"]
        tuning = took["tuning"] * tuning_seeds / max(campaign["tuning_seeds"], 1)
        total += cells + tuning
        lines.append(f"| {problem} | {cells:,.0f} | {tuning:,.0f} |")
    minutes = total / 60 / workers
    cores = "one core" if workers == 1 else f"{workers} cores"
    return [*lines, f"| all: {minutes:.0f} minutes on {cores} | {total:,.0f} | |"]


# --- figures as text -------------------------------------------------------------------------------


def _ratio(row: Figures) -> str:
    if row["ratio"] is None:
        return "none"
    return _estimate(row["ratio"], row, ".2f") + (" [no interval]" if row["high"] is None else "")


def _estimate(value: float | None, ends: Figures, form: str = ".3g") -> str:
    if value is None:
        return _NONE
    low, high = ends["low"], ends["high"]
    return f"{value:{form}}" + ("" if low is None or high is None else f" [{low:{form}}, {high:{form}}]")


def _percent(row: Figures | None) -> str:
    share = None if row is None else row["choosing_share"]
    return _NONE if share is None else f"{100 * share:.0f}"


def _cost(seconds: float) -> str:
    return f"{1e6 * seconds:.0f} us" if seconds < 1e-3 * (1 - 1e-9) else f"{1e3 * seconds:.0f} ms"
