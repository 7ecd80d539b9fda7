"""Policies compared on the same decisions over a grid of problems and budgets; resumable."""

from __future__ import annotations

import hashlib
import io
import json
import os
import time
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import asdict, dataclass, field
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from joblib import delayed

from distill import __version__
from distill.errors import InputError
from distill.files import read_json, write_atomic
from distill.record import to_record
from distill.rehearse.loop import Budget, Decided, decide, decide_at_prices, luck_of
from distill.rehearse.policies import Policy
from distill.rehearse.problems import Problem
from distill.rehearse.remembered import Remembered
from distill.tree import BeliefTree, Floats
from distill.workers import local_pool

__all__ = ["Cell", "Compared", "compare", "interval", "play_stops", "rehearse", "resampled"]

_COLUMNS = (
    "regret", "regret_by_mean", "expected_regret", "rollouts", "choosing", "stopped", "choices", "fallbacks",
)  # fmt: skip
_PROCESSOR = "processor"  # column of seconds, not of what was decided
_RESAMPLES = 2000
_DIGESTED = 8  # leaves whose first return counts in telling problems apart


@dataclass(frozen=True, eq=False)
class Cell:
    """All decisions of one policy on one problem under one budget; arrays over seeds, in seed order.

    regret, regret_by_mean, expected_regret : value units, see `Decided`. rollouts : spent.
    choosing : seconds. stopped : early.
    choices : made. fallbacks : of them, made by another rule. processor : seconds of this process that
    each decision took, judging it included; empty where not known.
    """

    problem: str
    budget: Budget
    policy: str
    regret: Floats
    regret_by_mean: Floats
    expected_regret: Floats
    rollouts: Floats
    choosing: Floats
    stopped: Floats
    choices: Floats
    fallbacks: Floats
    processor: Floats = field(default_factory=lambda: np.zeros(0))

    @property
    def measured(self) -> Floats:
        """The regret to compare by: `expected_regret` where that is known, else `regret`."""
        return self.regret if np.any(np.isnan(self.expected_regret)) else self.expected_regret

    @property
    def fallback_share(self) -> float:
        """Share of choices that another rule made: near 1, the cell does not show its policy at all."""
        choices = float(self.choices.sum())
        return float(self.fallbacks.sum()) / choices if choices > 0 else float("nan")

    @property
    def choosing_share(self) -> float:
        """Share of all time that went into choosing, given the budget's cost of a rollout; else nan."""
        rolling = float(self.rollouts.sum()) * self.budget.rollout_seconds
        choosing = float(self.choosing.sum())
        return choosing / (choosing + rolling) if rolling > 0 else float("nan")


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
        again with the same arguments, cells that are there are read: a killed rehearsal resumes.
    values : what the agent acts on, as for `decide`. workers : processes, each with a problem at a time.
    progress : called with cells done and in all, in this process.

    Raises InputError for repeated names, fewer than 2 seeds, or a folder of another rehearsal.
    """
    _check_names("problem", [p.name for p in problems])
    _check_names("policy", [p.name for p in policies])
    if seeds < 2:
        raise InputError("seeds", "must be at least 2", seeds)
    folder = Path(folder)
    _claim(folder, {"seeds": seeds, "first_seed": first_seed, "version": __version__})
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
    _claim(folder, {"seeds": seeds, "first_seed": first_seed, "version": __version__})
    paths = {n: folder / _file_name(problem.name, budget, n) for n in (policy.name, name)}
    if all(path.exists() for path in paths.values()):
        return
    ends: dict[str, list[Decided]] = {n: [] for n in paths}
    took = []
    for seed in range(first_seed, first_seed + seeds):
        rng = luck_of(seed)
        started = time.process_time()
        prices = () if price is None else (price,)
        found = decide_at_prices(problem.draw(seed), policy, budget, rng, prices)
        took.append(time.process_time() - started)
        ends[policy.name].append(found[-1])
        ends[name].append(found[0])
    drawn = _digest(problem, first_seed)
    for n, path in paths.items():
        columns = _columns(ends[n])
        columns[_PROCESSOR] = np.array(took) if n == policy.name else np.zeros(seeds)
        _write(path, Cell(problem.name, budget, n, **columns), first_seed, drawn)


def _columns(results: Sequence[Decided]) -> dict[str, Floats]:
    return {c: np.array([getattr(r, c) for r in results], dtype=np.float64) for c in _COLUMNS}


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
        paths = {policy.name: folder / _file_name(problem.name, budget, policy.name) for policy in policies}
        missing = [policy for policy in policies if not paths[policy.name].exists()]
        made = {}
        found = _run(remembered, missing, budget, seeds, values)
        drawn = _digest(remembered, seeds.start)
        for policy, (results, seconds) in zip(missing, found, strict=True):
            columns = _columns(results)
            columns[_PROCESSOR] = np.array(seconds)
            made[policy.name] = Cell(problem.name, budget, policy.name, **columns)
            _write(paths[policy.name], made[policy.name], seeds.start, drawn)
        yield [
            made[name] if name in made else _read(path, problem.name, budget, name, len(seeds), drawn)
            for name, path in paths.items()
        ]


def _run(
    problem: Problem,
    policies: Sequence[Policy],
    budget: Budget,
    seeds: range,
    values: Callable[[BeliefTree], Floats] | None,
) -> list[tuple[list[Decided], list[float]]]:
    """What came of each policy's decisions, and the processor time of each."""
    for policy in policies:
        # Compiling and first use belong to no decision's clock. The seed is none of those compared.
        warm = problem.draw(seeds.stop)
        decide(warm, policy, Budget(rollouts=2), np.random.default_rng(0), values=values)
    results: list[tuple[list[Decided], list[float]]] = [([], []) for _ in policies]
    for seed in seeds:
        for policy, (decided, seconds) in zip(policies, results, strict=True):
            rng = luck_of(seed)
            started = time.process_time()
            decided.append(decide(problem.draw(seed), policy, budget, rng, values=values))
            seconds.append(time.process_time() - started)
    return results


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
        low, high = np.quantile(ratios, [0.025, 0.975]) if np.all(np.isfinite(ratios)) else (np.nan, np.nan)
        out.append(
            Compared(
                problem, budget, policy, rival,
                float(ours.mean()), float(theirs.mean()), ratio, float(low), float(high),
            )
        )  # fmt: skip
    return out


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


def _claim(folder: Path, settings: Mapping[str, Any]) -> None:
    """The folder's settings, written the first time and compared ever after."""
    path = folder / "rehearsal.json"
    if not path.exists():
        write_atomic(path, (json.dumps(settings, indent=1) + "\n").encode())
        return
    found = read_json(path)
    if found != dict(settings):
        raise InputError(str(path), f"must hold {json.dumps(settings)} to be continued", found)


def _file_name(problem: str, budget: Budget, policy: str) -> str:
    """Unique for a cell: what is readable of it, and a hash of all of it."""
    key = json.dumps([problem, asdict(budget), policy])
    readable = "".join(c if c.isalnum() else "-" for c in f"{problem}--{policy}")
    return f"{readable[:80]}--{hashlib.sha256(key.encode()).hexdigest()[:12]}.parquet"


def _digest(problem: Problem, seed: int) -> str:
    """SHA-256 of what a problem deals at one seed: two that share a name are told apart by it."""
    draw = problem.draw(seed)
    found = hashlib.sha256(json.dumps(to_record(draw.tree), sort_keys=True).encode())
    found.update(draw.worth.tobytes())
    for leaf in range(min(draw.tree.n_leaves, _DIGESTED)):
        found.update(np.float64(draw.roll(leaf)).tobytes())
    return found.hexdigest()


def _write(path: Path, cell: Cell, first_seed: int, drawn: str) -> None:
    about = {"problem": cell.problem, "policy": cell.policy, "budget": asdict(cell.budget), "drawn": drawn}
    columns = {"seed": np.arange(first_seed, first_seed + len(cell.regret))}
    columns |= {c: getattr(cell, c) for c in (*_COLUMNS, _PROCESSOR)}
    table = pa.table(columns).replace_schema_metadata({"rehearsal": json.dumps(about)})
    buffer = io.BytesIO()
    pq.write_table(table, buffer)
    write_atomic(path, buffer.getvalue())


def _read(path: Path, problem: str, budget: Budget, policy: str, seeds: int, drawn: str) -> Cell:
    try:
        table = pq.read_table(path)
        about = json.loads((table.schema.metadata or {}).get(b"rehearsal", b"{}"))
    except (OSError, ValueError, pa.ArrowException) as e:
        raise InputError(
            str(path), f"must be a readable Parquet file; delete it to play it again ({e})"
        ) from None
    if not isinstance(about, dict) or about.get("drawn") != drawn:
        rule = f"holds decisions of another problem named {problem}: its simulator or settings have changed"
        raise InputError(str(path), f"{rule}; give another folder")
    if table.num_rows != seeds or not set(_COLUMNS) <= set(table.column_names):
        raise InputError(str(path), f"must hold {seeds} decisions", table.num_rows)
    columns = [c for c in (*_COLUMNS, _PROCESSOR) if c in table.column_names]
    return Cell(problem, budget, policy, **{c: table[c].to_numpy() for c in columns})
