"""What follows from a rehearsal's cells: aims reached, what to use where, break-even, what stopping saves."""

from __future__ import annotations

import math
import zlib
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import fields
from typing import Any, Final

import numpy as np

from distill.rehearse.against import Against
from distill.rehearse.aimed import BEST, FEWEST, LIMITS, TOO_FEW
from distill.rehearse.campaign import Campaign, Results
from distill.rehearse.left_out import CHOICE, Reason
from distill.rehearse.loop import Budget
from distill.rehearse.rehearsal import Cell, Compared, compare, ends_of, interval, resampled
from distill.rehearse.tuning import name_of, price_of
from distill.tree import Floats

__all__ = [
    "BEST",
    "GROUPS",
    "NO_SEARCH",
    "Place",
    "advice",
    "aims",
    "break_even",
    "by_kind",
    "compared",
    "comparisons",
    "members",
    "places_of",
    "judged_alike",
    "plain",
    "stopping",
]

# Groups of policies by the first word of their text; scorers are compared with the best of each other one.
GROUPS: Final = {
    "sampling": ("uct", "thompson", "top-two"),
    "static": ("static-voc", "static-rate"),
    "exact": ("exact-dynamic-rate",),
}
NO_SEARCH: Final = "no search"  # advice: act before the first rollout
_EXACT: Final = "exact_dynamic_rate"
_AIM_SECONDS: Final = 100e-6  # cost of a rollout from which the aims are judged
_FELL_BACK: Final = 0.98  # share of choices by another rule from which a cell says nothing of its policy
_SLOW: Final = 0.2  # share of time from which exact choosing counts as dear

Place = dict[str, Cell]  # the cells of one problem and budget, by policy


def plain(x: Any) -> float | None:
    """A number for JSON; None where there is none."""
    return float(x) if math.isfinite(x) else None


def members(campaign: Campaign, group: str) -> list[str]:
    """Names of a group's policies, without those that stop early."""
    specs = [s for s in campaign.policies if _group_of(s) == group and "stop=" not in s]
    return [name_of(spec) for spec in specs]


def _group_of(spec: str) -> str:
    word = spec.split(":")[0]
    if word == "scorer":
        return "scorer"
    return next((group for group, words in GROUPS.items() if word in words), "other")


def places_of(results: Results) -> dict[tuple[str, Budget], Place]:
    """Cells by problem and budget; where scorers played, `BEST` stands among them."""
    places: dict[tuple[str, Budget], Place] = {}
    for cell in results.cells:
        places.setdefault((cell.problem, cell.budget), {})[cell.policy] = cell
    scorers = members(results.campaign, "scorer")
    for here in places.values():
        if ours := [here[name] for name in scorers if name in here]:
            here[BEST] = _best(ours)
    return places


def _best(cells: Sequence[Cell]) -> Cell:
    """Each half of the decisions by the policy that does best on the other half.

    So the choice among several ways to use a scorer is made on decisions that it is not judged by.
    """
    even = np.arange(len(cells[0].regret)) % 2 == 0
    on_odd = min(cells, key=lambda cell: float(cell.measured[~even].mean()))
    on_even = min(cells, key=lambda cell: float(cell.measured[even].mean()))
    columns = {
        f.name: np.where(even, getattr(on_odd, f.name), getattr(on_even, f.name))
        for f in fields(Cell)
        if f.name not in ("problem", "budget", "policy", "processor")
    }
    return Cell(cells[0].problem, cells[0].budget, BEST, **columns)


def comparisons(results: Results, places: Mapping[tuple[str, Budget], Place]) -> list[dict[str, Any]]:
    """Every policy against the best of each group in the same problem and budget."""
    rows = []
    for here in places.values():
        for policy in here:
            for group in GROUPS:
                rivals = [name for name in members(results.campaign, group) if name in here]
                if rivals and rivals != [policy]:
                    (found,) = compare(list(here.values()), policy, rivals)
                    rows.append({**compared(found), "group": group, "decisions": len(here[policy])})
    return rows


def compared(found: Compared) -> dict[str, Any]:
    """One comparison, ready for JSON."""
    return {
        "problem": found.problem,
        "budget": str(found.budget),
        "rollout_seconds": found.budget.rollout_seconds,
        "timed": found.budget.seconds is not None,
        "policy": found.policy,
        "rival": found.rival,
        "ratio": plain(found.ratio),
        "low": plain(found.low),
        "high": plain(found.high),
    }


def _aimed(budget: Budget) -> bool:
    return budget.seconds is not None and budget.rollout_seconds >= _AIM_SECONDS * (1 - 1e-9)


def judged_alike(results: Results) -> set[str]:
    """The problems that figures over several may count: those judged exactly, or if none is, all.

    A regret against an estimate, which its error makes too large, is no number to be put into one mean, or
    one count, with a regret against the optimum.
    """
    problems = set(results.campaign.problems) | {cell.problem for cell in results.cells}
    return {p for p in problems if not _against(results, p).leaf_rollouts} or problems


def _against(results: Results, problem: str) -> Against:
    return results.against.get(problem, Against())


def aims(results: Results, rows: Iterable[Mapping[str, Any]]) -> dict[str, Any]:
    """How often each scorer reaches what it is meant to, of the timed cells where that can be judged.

    rows : of `comparisons`. cells : with a wall-clock budget, rollouts of 100 us or more, and, against the
    exact rate, exact choosing that takes over a fifth of the time. better, worse : of them, those of at
    least `FEWEST` decisions whose interval lies below or above 1. no_choice : cells beside them where one
    exact choice alone takes longer than the budget. Problems judged by an estimate count only where no other
    is (`judged_alike`).
    """
    slow = {
        (cell.problem, str(cell.budget)) for cell in results.cells
        if cell.policy == _EXACT and cell.choosing_share > _SLOW
    }  # fmt: skip
    late = {
        (x["problem"], str(Budget.parse(x["budget"]))) for x in results.left_out
        if x["policy"] == _EXACT and Reason.of(x).too_slow == CHOICE
    }  # fmt: skip
    scorers = {BEST, *members(results.campaign, "scorer")}
    alike = judged_alike(results)
    found: dict[str, Any] = {}
    for row in rows:
        ratio, group = row["ratio"], row["group"]
        if row["policy"] not in scorers or not row["timed"] or ratio is None or row["problem"] not in alike:
            continue
        place = row["problem"], row["budget"]
        if row["rollout_seconds"] < _AIM_SECONDS * (1 - 1e-9) or (group == "exact" and place not in slow):
            continue
        at_most, never_above = LIMITS[group]
        none = {"cells": 0, "reached": 0, "beyond": 0, "better": 0, "worse": 0}
        limits = {"at_most": at_most, "never_above": never_above}
        counts = found.setdefault(row["policy"], {}).setdefault(group, {**none, **limits})
        counts["cells"] += 1
        counts["reached"] += ratio <= at_most
        counts["beyond"] += ratio > never_above
        told = row["decisions"] >= FEWEST
        counts["better"] += told and row["high"] is not None and row["high"] < 1
        counts["worse"] += told and row["low"] is not None and row["low"] > 1
    for policy, groups in found.items():
        if "exact" in groups:
            played = {
                (c.problem, str(c.budget)) for c in results.cells
                if policy in (BEST, c.policy) and _aimed(c.budget) and c.policy in scorers
                and c.problem in alike
            }  # fmt: skip
            groups["exact"]["no_choice"] = len(late & played)
    return dict(sorted(found.items(), key=lambda item: item[0] != BEST))


def advice(results: Results, places: Mapping[tuple[str, Budget], Place]) -> list[dict[str, Any]]:
    """The policy to use for each problem and budget: the cheapest that no other measurably beats.

    All that played are looked at, apart from those that left nearly every choice to the closed form.

    The closed form is advised wherever the best other policy's 95 % interval of the ratio to it reaches 1;
    which one is the best is decided for each half of the decisions by the other half. Where no policy is
    so much better than acting before the first rollout, that is advised; and the closed form where all
    regret is below the error of what it is told against, or there are too few decisions to tell.
    """
    static = members(results.campaign, "static")
    unsearched = {cell.problem: cell for cell in results.unsearched}
    rows = []
    for (problem, budget), here in places.items():
        rivals = [name for name in static if name in here]
        rest = [n for n, cell in here.items() if n not in (BEST, *static) and not _is_other(cell)]
        if not rivals or not rest:
            continue
        best = min(rest, key=lambda name: float(here[name].measured.mean()))
        error = _against(results, problem).error
        (found,) = compare([_best([here[n] for n in rest]), *(here[n] for n in rivals)], BEST, rivals)
        better = math.isfinite(found.high) and found.high < 1
        use = best if better else found.rival
        why = "measurably better than the closed form" if better else "nothing measurably better"
        if problem in unsearched and not _pays([here[n] for n in (*rest, *rivals)], unsearched[problem]):
            use, why = NO_SEARCH, "nothing measurably better than to act before the first rollout"
        if len(here[best]) < FEWEST or (math.isfinite(found.ratio) and not math.isfinite(found.high)):
            use, why = found.rival, TOO_FEW
        elif max(found.regret, found.rival_regret) < error:
            use, why = found.rival, "all regret is below the error of the rollouts that it is told against"
        rows.append(
            {
                "problem": problem,
                "budget": str(budget),
                "use": use,
                "why": why,
                "best_other": best,
                "decisions": len(here[best]),
                "ratio": plain(found.ratio),
                "low": plain(found.low),
                "high": plain(found.high),
            }
        )
    return rows


def _is_other(cell: Cell) -> bool:
    """Whether another rule made nearly all choices: what such a cell shows is that rule."""
    return cell.fallback_share > _FELL_BACK


def _pays(cells: Sequence[Cell], unsearched: Cell) -> bool:
    """Whether the best of some policies is measurably better than no search at all."""
    low, _ = interval(unsearched.measured - _best(cells).measured)
    return low > 0


def by_kind(results: Results, places: Mapping[tuple[str, Budget], Place]) -> list[dict[str, Any]]:
    """Scorer or closed form, by kind of problem and cost of a rollout.

    ratio : geometric mean of `BEST` over the better closed form, over the cells of that kind and cost,
    decisions resampled problem by problem. sampling : the same over the better sampling. use : the scorer
    only where the interval lies below 1; nothing is claimed from fewer than `FEWEST` decisions, or where no
    interval can be told (`ends_of`). fell_back : share of choices that
    scorers left to the closed form; where that is nearly all, what differs is luck with the clock.
    """
    grouped: dict[tuple[str, float], list[tuple[str, Place]]] = {}
    for (problem, budget), here in places.items():
        if budget.seconds is not None and BEST in here:
            key = results.kinds.get(problem, "any"), budget.rollout_seconds
            grouped.setdefault(key, []).append((problem, here))
    rows = []
    for (kind, cost), cells in sorted(grouped.items()):
        found = {group: _together(results, cells, group) for group in ("static", "sampling")}
        low, high = found["static"]["low"], found["static"]["high"]
        shares = [here[BEST].fallback_share for _, here in cells]
        fell_back = math.fsum(shares) / len(shares)
        decisions = min(len(here[BEST]) for _, here in cells)
        no_interval = found["static"]["ratio"] is not None and high is None
        if decisions < FEWEST or no_interval:
            use, why = "closed form", TOO_FEW
        elif fell_back > _FELL_BACK:
            use, why = "closed form", "scorers leave nearly every choice to it"
        elif high is not None and high < 1:
            use, why = "scorer", "measurably better than the closed form"
        elif low is not None and low > 1:
            use, why = "closed form", "the scorer is measurably worse"
        else:
            use, why = "closed form", "no measurable difference"
        more = {"decisions": decisions, "fell_back": plain(fell_back), "use": use, "why": why}
        rows.append({"kind": kind, "rollout_seconds": cost, **found, **more})
    return rows


def _together(results: Results, cells: Sequence[tuple[str, Place]], group: str) -> dict[str, Any]:
    """Geometric mean of the ratios of `BEST` to the best of a group over several cells, with interval."""
    names = members(results.campaign, group)
    at, resamples = [], []
    for problem, here in cells:
        rivals = [here[name].measured for name in names if name in here]
        ours = here[BEST].measured
        theirs = min(rivals, key=lambda x: float(x.mean()), default=np.zeros(0))
        if theirs.size == 0 or not ours.mean() > 0 or not theirs.mean() > 0:
            continue
        at.append(math.log(ours.mean() / theirs.mean()))
        times = resampled(len(ours), zlib.crc32(problem.encode()))
        with np.errstate(divide="ignore", invalid="ignore"):
            resamples.append(np.log(times @ ours) - np.log(times @ theirs))
    out: dict[str, Any] = {"cells": len(at), "ratio": None, "low": None, "high": None}
    if at:
        out["ratio"] = math.exp(math.fsum(at) / len(at))
        with np.errstate(invalid="ignore"):
            mean: Floats = np.mean(resamples, axis=0)
        low, high = ends_of(mean, -np.inf)
        if math.isfinite(high):
            out["low"], out["high"] = math.exp(low), math.exp(high)
    return out


def break_even(results: Results, places: Mapping[tuple[str, Budget], Place]) -> list[dict[str, Any]]:
    """Regret against the cost of a rollout: every policy as a multiple of the best sampling one.

    A row for each policy, cost and time in rollouts; `ratio` is the geometric mean over the problems that
    have the policy at each of these costs, a regret above 0 everywhere, and are `judged_alike`.
    """
    campaign = results.campaign
    alike = judged_alike(results)
    sampling = members(campaign, "sampling")
    names = [*(n for group in (*GROUPS, "scorer") for n in members(campaign, group)), BEST]
    ratios: dict[tuple[int, str], dict[float, dict[str, float]]] = {}
    for (problem, budget), here in places.items():
        rivals = [float(here[name].measured.mean()) for name in sampling if name in here]
        if budget.seconds is None or problem not in alike or not rivals or min(rivals) <= 0:
            continue
        for name in names:
            if name in here and (regret := float(here[name].measured.mean())) > 0:
                by_cost = ratios.setdefault((budget.room(0, 0.0), name), {})
                by_cost.setdefault(budget.rollout_seconds, {})[problem] = math.log(regret / min(rivals))
    rows = []
    for (rollouts, name), by_cost in ratios.items():
        shared = set.intersection(*(set(found) for found in by_cost.values()))
        for cost, found in sorted(by_cost.items()):
            logs = [found[problem] for problem in shared]
            if logs:
                row = {"rollouts": rollouts, "rollout_seconds": cost, "policy": name}
                ratio = math.exp(math.fsum(logs) / len(logs))
                rows.append({**row, "ratio": ratio, "problems": len(shared)})
    return rows


def stopping(results: Results, places: Mapping[tuple[str, Budget], Place]) -> list[dict[str, Any]]:
    """Policies that stop early against the same without: rollouts saved, and the ratio of regrets.

    saved : share of the rollouts. price : of a rollout, in units of the tree's scale, None where no price
    was free of loss in tuning. lost : regret more than that of going on, with `lost_low` and `lost_high`, a
    95 % paired interval; value units. free : whether that interval reaches down to 0, and there are at least
    `FEWEST` decisions to tell.
    """
    specs = [spec for spec in results.campaign.all_policies if ":stop=" in spec]
    tuned = {(row["problem"], row["rollouts"], row["policy"]): row["chosen"] for row in results.tuning}
    rows = []
    for (problem, budget), here in places.items():
        for spec in specs:
            stops, goes_on = name_of(spec), name_of(spec[: spec.index(":stop=")])
            if stops != goes_on and stops in here and goes_on in here:
                text = tuned.get((problem, budget.room(0, 0.0), spec), spec)
                (found,) = compare(list(here.values()), stops, [goes_on])
                ours, theirs = here[stops], here[goes_on]
                saved = 1 - ours.rollouts.sum() / max(theirs.rollouts.sum(), 1)
                lost = ours.measured - theirs.measured
                low, high = interval(lost)
                rows.append(
                    {
                        **compared(found),
                        "regret_against": str(_against(results, problem)),
                        "saved": plain(saved),
                        "price": price_of(text),
                        "lost": plain(lost.mean()),
                        "lost_low": plain(low),
                        "lost_high": plain(high),
                        "decisions": len(ours),
                        "free": low <= 0 and len(ours) >= FEWEST,
                    }
                )
    return rows
