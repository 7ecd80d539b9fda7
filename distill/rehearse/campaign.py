"""A whole rehearsal from names: baselines tuned on seeds of their own, then every policy on every problem."""

from __future__ import annotations

import json
import os
import time
from collections.abc import Callable, Iterator
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import Any, Final

import numpy as np
from joblib import Parallel, delayed

from distill.allocation import Search as Posterior
from distill.errors import InputError, RefusedError
from distill.files import write_atomic
from distill.rehearse.catalogue import make_problem
from distill.rehearse.loop import Budget
from distill.rehearse.policies import Policy
from distill.rehearse.policy_specs import make_policy
from distill.rehearse.problems import Problem
from distill.rehearse.rehearsal import Cell, rehearse
from distill.rehearse.remembered import Remembered
from distill.tree import BeliefTree

__all__ = ["Campaign", "Results", "name_of", "run"]

_FIRST_SEED: Final = 10_000  # those before were looked at while policies were made
_TUNING_SEED: Final = 1_000_000  # tuning looks at decisions from here on, the rehearsal at those before
_SLOWEST: Final = 0.25  # seconds a decision, where only rollouts are limited; slower choosers are left out

# Prices of a rollout, in units of the tree's scale, that ":stop=auto" chooses from.
_STOPS: Final = (1e-2, 3e-3, 1e-3, 3e-4, 1e-4, 3e-5, 1e-5, 1e-6, 1e-7)
_NO_LOSS: Final = 0.03  # share of regret that stopping may cost when tuned, a standard error allowed for
_WIDTHS: Final = (0.7, 1.4, 2.0)  # of the prior, that ":prior=auto" chooses from beside 1
_STOP_AUTO, _PRIOR_AUTO = ":stop=auto", ":prior=auto"

# Policy -> the texts that tuning chooses from. The first is taken untuned.
TUNED: Final = {
    "uct": ["uct:c=1", "uct:c=0.25", "uct:c=0.5", "uct:c=2", "uct:c=4"],
    "thompson": ["thompson", *(f"thompson:prior={width}" for width in (0.5, *_WIDTHS))],
    "top-two": ["top-two", *(f"top-two:prior={width}" for width in _WIDTHS), "top-two:share=0.7"],
    "static-rate": ["static-rate", *(f"static-rate:prior={width}" for width in _WIDTHS)],
}


@dataclass(frozen=True)
class Campaign:
    """What is rehearsed, as text. problems : of `catalogue.make_problem`. policies : of `make_policy`.

    budgets : of `Budget.parse`. seeds : decisions a cell. tuning_seeds : other decisions, on which the
        constant of UCT and the priors of both Thompson samplings and of the static rate are chosen for
        each problem and number of rollouts where their policies are given by bare name; 0 leaves them as
        they are. A policy that ends in ":prior=auto" has its prior tuned in the same way; one that ends in
        ":stop=auto" stops at the highest price that costs no regret on these decisions.
    wide : those of the problems that are rehearsed under `wide_budgets` too.
    """

    problems: tuple[str, ...]
    budgets: tuple[str, ...]
    policies: tuple[str, ...]
    seeds: int = 400
    tuning_seeds: int = 100
    wide: tuple[str, ...] = ()
    wide_budgets: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        for name in self.problems:
            make_problem(name)
        for name in (*self.budgets, *self.wide_budgets):
            Budget.parse(name)
        for name in self.policies:
            make_policy(_untuned(name))
            if name.count("=auto") > 1:
                raise InputError(f"policy {name!r}", "must leave one option to tuning at most")
        if not 2 <= self.seeds <= _TUNING_SEED - _FIRST_SEED:
            raise InputError("seeds", f"must be from 2 to {_TUNING_SEED - _FIRST_SEED}", self.seeds)
        if self.tuning_seeds == 1 or self.tuning_seeds < 0:
            raise InputError("tuning_seeds", "must be 0 or at least 2", self.tuning_seeds)


@dataclass(frozen=True, eq=False)
class Results:
    """Cells of a campaign, the tuning of its baselines, and which policies were left out where and why."""

    campaign: Campaign
    cells: list[Cell] = field(default_factory=list)
    tuning: list[dict[str, Any]] = field(default_factory=list)
    left_out: list[dict[str, str]] = field(default_factory=list)


def run(
    campaign: Campaign,
    folder: str | os.PathLike[str],
    *,
    workers: int = 1,
    progress: Callable[[int, int], None] | None = None,
) -> Results:
    """Run what `folder` does not hold yet; a killed campaign goes on where it was.

    workers : processes, each with a problem at a time. progress : called with problems done and in all.
    Raises InputError where the folder holds a campaign with other seeds.
    """
    folder = Path(folder)
    _claim(folder, campaign)
    results = Results(campaign)
    jobs = [delayed(_problem)(campaign, name, folder) for name in campaign.problems]
    parts: Iterator[Results] = (
        (function(*arguments) for function, arguments, _ in jobs)
        if workers == 1
        else Parallel(n_jobs=workers, return_as="generator", batch_size=1)(jobs)
    )
    for done, part in enumerate(parts, 1):
        results.cells.extend(part.cells)
        results.tuning.extend(row for row in part.tuning if "regret" in row)
        results.left_out.extend(part.left_out)
        if progress is not None:
            progress(done, len(jobs))
    return results


def _claim(folder: Path, campaign: Campaign) -> None:
    """The campaign, written the first time; later ones may name other problems, budgets and policies."""
    path = folder / "campaign.json"
    fixed = {name: getattr(campaign, name) for name in ("seeds", "tuning_seeds")}
    if path.exists():
        try:
            found = json.loads(path.read_text())
        except ValueError:
            found = {}
        if {name: found.get(name) for name in fixed} != fixed:
            raise InputError(str(path), f"must hold {json.dumps(fixed)} to be continued")
    write_atomic(path, (json.dumps(asdict(campaign), indent=1) + "\n").encode())


def _problem(campaign: Campaign, name: str, folder: Path) -> Results:
    """One problem under all budgets."""
    problem = Remembered(make_problem(name))
    out = Results(campaign)
    tuned: dict[int, dict[str, str]] = {}
    for text in (*campaign.budgets, *(campaign.wide_budgets if name in campaign.wide else ())):
        budget = Budget.parse(text)
        rollouts = budget.room(0, 0.0)
        if rollouts not in tuned:
            tuned[rollouts] = {}
            for row in _tune(campaign, problem, rollouts, folder):
                out.tuning.append(row)
                tuned[rollouts][row["policy"]] = row["chosen"]
        policies = []
        for spec in campaign.policies:
            text_of = tuned[rollouts].get(spec, _untuned(spec))
            policy = _named(make_policy(text_of), spec)
            reason = _why_not(policy, problem, budget)
            if reason is None:
                policies.append(policy)
            else:
                out.left_out.append({"problem": name, "budget": text, "policy": policy.name, "why": reason})
        where, seeds = folder / "cells", campaign.seeds
        out.cells.extend(rehearse([problem], policies, [budget], where, seeds=seeds, first_seed=_FIRST_SEED))
    return out


def _untuned(spec: str) -> str:
    return spec.removesuffix(_STOP_AUTO).removesuffix(_PRIOR_AUTO)


def _named(policy: Policy, spec: str) -> Policy:
    """Tuned policies bear one name wherever they stand, so that cells can be compared."""
    if spec in TUNED or spec != _untuned(spec):
        policy.name = name_of(spec)  # type: ignore[misc]
    return policy


def name_of(spec: str) -> str:
    """The name under which a campaign's policy stands in its cells."""
    if spec in TUNED:
        return spec.replace("-", "_")
    suffix = {_STOP_AUTO: "-stops", _PRIOR_AUTO: "-tuned"}.get(spec[len(_untuned(spec)) :], "")
    return make_policy(_untuned(spec)).name + suffix


def _tries(campaign: Campaign, problem: Problem) -> dict[str, list[str]]:
    """What tuning chooses from, policy by policy; the first is the one without tuning."""
    tries = {spec: TUNED[spec] for spec in campaign.policies if spec in TUNED}
    for spec in campaign.policies:
        base = _untuned(spec)
        if base != spec and _why_not(make_policy(base), problem) is None:
            key, values = ("stop", _STOPS) if spec.endswith(_STOP_AUTO) else ("prior", _WIDTHS)
            tries[spec] = [base, *(f"{base}:{key}={value:g}" for value in values)]
    return tries


def _tune(campaign: Campaign, problem: Problem, rollouts: int, folder: Path) -> list[dict[str, Any]]:
    """The best constants of the policies at this number of rollouts, with what each gave."""
    tries = _tries(campaign, problem)
    if not tries or not campaign.tuning_seeds or not rollouts:
        return [{"policy": spec, "chosen": texts[0]} for spec, texts in tries.items()]
    policies = {text: make_policy(text) for texts in tries.values() for text in texts}
    cells = rehearse(
        [problem],
        list(policies.values()),
        [Budget(rollouts=rollouts)],
        folder / "tuning",
        seeds=campaign.tuning_seeds,
        first_seed=_TUNING_SEED,
    )
    found = {cell.policy: cell for cell in cells}
    rows = []
    for spec, texts in tries.items():
        regret = {text: float(found[policies[text].name].measured.mean()) for text in texts}
        chosen = min(texts, key=lambda text: regret[text])
        if spec.endswith(_STOP_AUTO):
            on = found[policies[texts[0]].name].measured
            lost = {text: found[policies[text].name].measured - on for text in texts[1:]}
            kept = [
                text
                for text, more in lost.items()
                if more.mean() + more.std() / np.sqrt(len(more)) <= _NO_LOSS * on.mean()
            ]
            chosen = (kept or texts)[0]
        row = {"problem": problem.name, "rollouts": rollouts, "policy": spec, "chosen": chosen}
        rows.append({**row, "regret": regret})
    return rows


def _why_not(policy: Policy, problem: Problem, budget: Budget | None = None) -> str | None:
    """Why a policy cannot be rehearsed here; None where it can."""
    tree = problem.draw(_TUNING_SEED).tree
    suits = getattr(policy, "suits", None)
    if suits is not None and not suits(tree):
        return "the scorer does not take such trees"
    try:
        seconds = min(_one_choice(policy, tree) for _ in range(2))
    except RefusedError as e:
        return str(e)
    if budget is None:
        return None
    most = _SLOWEST / max(budget.room(0, 0.0), 1) if budget.seconds is None else budget.seconds
    return f"one choice takes {seconds * 1e3:.1f} ms" if seconds > most else None


def _one_choice(policy: Policy, tree: BeliefTree) -> float:
    posterior, rng = Posterior(tree), np.random.default_rng(0)
    policy.begin(tree)
    started = time.perf_counter()
    policy.choose(posterior, 64, rng)
    return time.perf_counter() - started
