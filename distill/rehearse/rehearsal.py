"""Policies compared on the same decisions over a grid of problems and budgets; resumable."""

from __future__ import annotations

import json
import os
import time
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
from joblib import delayed

from distill import __version__
from distill.errors import InputError
from distill.files import read_json, write_atomic
from distill.rehearse.cells import Cell, digest, file_of, read_cell, write_cell
from distill.rehearse.loop import Budget, Decided, decide, decide_at_prices, luck_of
from distill.rehearse.policies import Policy
from distill.rehearse.problems import Problem
from distill.rehearse.remembered import Remembered
from distill.tree import BeliefTree, Floats
from distill.workers import local_pool

__all__ = ["Cell", "Compared", "compare", "ends_of", "interval", "play_stops", "rehearse", "resampled"]

_RESAMPLES = 2000


def rehearse(
    problems: Sequence[Problem],
    policies: Sequence[Policy],
    budgets: Sequence[Budget],
    folder: str | os.PathLike[str],
    *,
    seeds: int = 400,
    first_seed: int = 0,
    values: Callable[[BeliefTree], Floats] | None = None,
    workers: int = 1,
    progress: Callable[[int, int], None] | None = None,
) -> list[Cell]:
    """Every policy on every problem under every budget, on the same `seeds` decisions.

    folder : takes one Parquet file a cell, written when all policies of its problem and budget are done:
        they take turns, decision by decision, so that a busy spell of the machine falls on all alike. Run
        again with the same arguments, cells that are there are read: a killed rehearsal resumes. Run again
        with more seeds, only the further decisions are played.
    values : what the agent acts on, as for `decide`. workers : processes, each with a problem at a time.
    progress : called with cells done and in all, in this process.

    Raises InputError for repeated names, fewer than 2 seeds, or a folder of another rehearsal or more seeds.
    """
    _check_names("problem", [p.name for p in problems])
    _check_names("policy", [p.name for p in policies])
    if seeds < 2:
        raise InputError("seeds", "must be at least 2", seeds)
    folder = Path(folder)
    _claim(folder, seeds, first_seed)
    span = range(first_seed, first_seed + seeds)
    total = len(problems) * len(budgets) * len(policies)
    cells: list[Cell] = []
    if workers == 1:
        parts: Iterable[list[Cell]] = (
            part
            for problem in problems
            for part in _of_problem(problem, policies, budgets, folder, span, values)
        )
    else:
        jobs = (
            delayed(_all_of_problem)(problem, policies, budgets, folder, span, values) for problem in problems
        )
        parts = local_pool(workers, return_as="generator", batch_size=1)(jobs)
    for part in parts:
        cells += part
        if progress is not None:
            progress(len(cells), total)
    return cells


def play_stops(
    problem: Problem,
    policy: Policy,
    name: str,
    price: float | None,
    budget: Budget,
    folder: str | os.PathLike[str],
    *,
    seeds: int,
    first_seed: int,
) -> None:
    """Two cells from one search a decision: `policy`, and `name`, the same stopping at a price.

    The search without a price passes where the other one ends (`loop.decide_at_prices`), so `rehearse` would
    find the same and reads these files in its place; only its time of choosing has looks in it. price : in
    units of the tree's scale; None never stops. The processor's time counts for the one that goes on.
    """
    folder = Path(folder)
    _claim(folder, seeds, first_seed)
    span, drawn = range(first_seed, first_seed + seeds), digest(problem, first_seed)
    paths = {n: file_of(folder, problem.name, budget, n) for n in (policy.name, name)}
    found_there = {n: read_cell(path, problem.name, budget, n, span, drawn) for n, path in paths.items()}
    done = min(0 if cell is None else len(cell) for cell in found_there.values())
    if done == seeds:
        return
    ends: dict[str, list[Decided]] = {n: [] for n in paths}
    took = []
    for seed in span[done:]:
        rng = luck_of(seed)
        started = time.process_time()
        prices = () if price is None else (price,)
        found = decide_at_prices(problem.draw(seed), policy, budget, rng, prices)
        took.append(time.process_time() - started)
        ends[policy.name].append(found[-1])
        ends[name].append(found[0])
    for n, path in paths.items():
        played = Cell.of(problem.name, budget, n, ends[n], took if n == policy.name else [0.0] * len(took))
        before = found_there[n]
        write_cell(path, played if before is None else before.followed_by(played, done), first_seed, drawn)


def _all_of_problem(*arguments: Any) -> list[Cell]:
    return [cell for part in _of_problem(*arguments) for cell in part]


def _of_problem(
    problem: Problem,
    policies: Sequence[Policy],
    budgets: Sequence[Budget],
    folder: Path,
    seeds: range,
    values: Callable[[BeliefTree], Floats] | None,
) -> Iterator[list[Cell]]:
    """The cells of one problem, a budget at a time, in the order of `policies`."""
    remembered = Remembered(problem)
    for budget in budgets:
        drawn = digest(remembered, seeds.start)
        paths = {policy.name: file_of(folder, problem.name, budget, policy.name) for policy in policies}
        cells: dict[str, Cell] = {}
        for name, path in paths.items():
            if (there := read_cell(path, problem.name, budget, name, seeds, drawn)) is not None:
                cells[name] = there
        rest = [(p, seeds[len(cells[p.name]) if p.name in cells else 0 :]) for p in policies]
        for played in _run(remembered, [(p, further) for p, further in rest if further], budget, values):
            name = played.policy
            cells[name] = cells[name].followed_by(played) if name in cells else played
            write_cell(paths[name], cells[name], seeds.start, drawn)
        yield [cells[name] for name in paths]


def _run(
    problem: Problem,
    rest: Sequence[tuple[Policy, range]],
    budget: Budget,
    values: Callable[[BeliefTree], Floats] | None,
) -> list[Cell]:
    """The decisions that each policy has not made yet, on seeds of which all end with the same one."""
    for policy, seeds in rest:
        # Compiling and first use belong to no decision's clock. The seed is none of those compared.
        warm = problem.draw(seeds.stop)
        decide(warm, policy, Budget(rollouts=2), np.random.default_rng(0), values=values)
    results: list[tuple[list[Decided], list[float]]] = [([], []) for _ in rest]
    for seed in sorted({seed for _, seeds in rest for seed in seeds}):
        for (policy, seeds), (decided, seconds) in zip(rest, results, strict=True):
            if seed not in seeds:
                continue
            rng = luck_of(seed)
            started = time.process_time()
            decided.append(decide(problem.draw(seed), policy, budget, rng, values=values))
            seconds.append(time.process_time() - started)
    return [
        Cell.of(problem.name, budget, policy.name, *found)
        for (policy, _), found in zip(rest, results, strict=True)
    ]


@dataclass(frozen=True)
class Compared:
    """One policy against the best of some rivals on the same decisions.

    regret, rival_regret : means over seeds, value units; rival : the one with the smallest mean.
    ratio : regret / rival_regret, with a 95 % interval `low` to `high`; nan where the rival has none.
    """

    problem: str
    budget: Budget
    policy: str
    rival: str
    regret: float
    rival_regret: float
    ratio: float
    low: float
    high: float


def compare(
    cells: Sequence[Cell], policy: str, rivals: Sequence[str], *, column: str = "measured", seed: int = 0
) -> list[Compared]:
    """A policy against the better of its rivals, cell by cell, with paired bootstrap intervals.

    Decisions are resampled, each with the regrets of both policies: what a hard decision costs both
    cancels (percentile bootstrap, Efron and Tibshirani 1993, chapter 13). The rival is the best on all
    decisions and stays fixed under resampling, which favours the rival.
    column : what is compared: measured, regret, expected_regret or regret_by_mean of `Cell`.
    """
    groups: dict[tuple[str, Budget], dict[str, Cell]] = {}
    for cell in cells:
        groups.setdefault((cell.problem, cell.budget), {})[cell.policy] = cell
    out = []
    for (problem, budget), group in groups.items():
        missing = [name for name in (policy, *rivals) if name not in group]
        if missing:
            raise InputError("policy", f"must be in every cell; missing in {problem}", missing[0])
        ours: Floats = getattr(group[policy], column)
        rival = min(rivals, key=lambda name: float(getattr(group[name], column).mean()))
        theirs: Floats = getattr(group[rival], column)
        times = resampled(len(ours), seed)
        with np.errstate(divide="ignore", invalid="ignore"):
            ratios = (times @ ours) / (times @ theirs)
            ratio = float(ours.mean() / theirs.mean()) if theirs.mean() > 0 else float("nan")
        low, high = ends_of(ratios) if np.isfinite(ratio) else (np.nan, np.nan)
        out.append(
            Compared(
                problem, budget, policy, rival,
                float(ours.mean()), float(theirs.mean()), ratio, float(low), float(high),
            )
        )  # fmt: skip
    return out


def ends_of(resampled: Floats, least: float = 0.0) -> tuple[float, float]:
    """95 % percentile interval of resampled ratios (their logarithms: `least` -inf); nan where it has no end.

    Resamples in which the rival has no regret have no ratio, or an infinite one: such a ratio counts below
    the lower end and above the upper one. Where there are over 2.5 % of them no interval can be told.
    """
    if np.all(np.isfinite(resampled)):
        low, high = np.quantile(resampled, [0.025, 0.975])
        return float(low), float(high)
    unknown = np.isnan(resampled)
    low = np.quantile(np.where(unknown, least, resampled), 0.025, method="lower")
    high = np.quantile(np.where(unknown, np.inf, resampled), 0.975, method="higher")
    return (float(low), float(high)) if np.isfinite(high) else (np.nan, np.nan)


def interval(x: Floats) -> tuple[float, float]:
    """95 % percentile bootstrap interval of a mean."""
    low, high = np.quantile(resampled(len(x), 0) @ x / len(x), [0.025, 0.975])
    return float(low), float(high)


@lru_cache(maxsize=4)
def resampled(n: int, seed: int) -> Floats:
    """How often each of n decisions is in each resample; shape (resamples, n)."""
    picked = np.random.default_rng(seed).integers(n, size=(_RESAMPLES, n))
    row = np.arange(_RESAMPLES)[:, None] * n
    return np.bincount((picked + row).ravel(), minlength=_RESAMPLES * n).reshape(_RESAMPLES, n).astype(float)


# --- files -----------------------------------------------------------------------------------------


def _check_names(what: str, names: Sequence[str]) -> None:
    for name in names:
        if names.count(name) > 1:
            raise InputError(what, "must have a name of its own", name)


def _claim(folder: Path, seeds: int, first_seed: int) -> None:
    """The folder's settings, written the first time and compared ever after; seeds may become more."""
    path = folder / "rehearsal.json"
    settings = {"seeds": seeds, "first_seed": first_seed, "version": __version__}
    found = read_json(path) if path.exists() else None
    if found == settings:
        return
    if found is not None:
        before = found.get("seeds") if isinstance(found, dict) else None
        if not isinstance(before, int) or before > seeds or found != {**settings, "seeds": before}:
            rule = f"must hold {json.dumps(settings)}, or fewer seeds, to be continued"
            raise InputError(str(path), rule, found)
    write_atomic(path, (json.dumps(settings, indent=1) + "\n").encode())
