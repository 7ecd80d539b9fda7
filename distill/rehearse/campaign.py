"""A whole rehearsal from names: baselines tuned on seeds of their own, then every policy on every problem."""

from __future__ import annotations

import contextlib
import json
import math
import os
import threading
import time
from collections.abc import Callable, Iterator
from dataclasses import asdict, dataclass, field, replace
from functools import cache, lru_cache
from pathlib import Path
from typing import Any, Final

import numpy as np

from distill.allocation import Search as Posterior
from distill.errors import InputError, RefusedError
from distill.files import read_json, sha256_of, write_atomic
from distill.rehearse.against import Against, kind_of
from distill.rehearse.catalogue import make_problem
from distill.rehearse.claim import claim
from distill.rehearse.left_out import CHOICE, DECISION, Reason
from distill.rehearse.loop import Budget
from distill.rehearse.places import place_file, played_by, slug
from distill.rehearse.policies import Policy
from distill.rehearse.policy_specs import make_policy, scorer_file
from distill.rehearse.problems import Problem
from distill.rehearse.rehearsal import Cell, play_stops, rehearse
from distill.rehearse.remembered import Remembered
from distill.rehearse.scorer_inputs import ScorerInputs
from distill.rehearse.tuning import TUNING_SEED, name_of, named, price_of, tune, untuned
from distill.runtime import Scorer
from distill.scorer_inputs import RECORD
from distill.tree import BeliefTree
from distill.workers import run_calls

__all__ = ["Campaign", "Results", "run"]

_FIRST_SEED: Final = 10_000  # those before were looked at while policies were made
_SCORER: Final = "scorer:"  # how the texts of policies that use a file begin
_TRIES: Final = 8  # choices that are timed before a policy is left out as too slow,
_TRIED_SECONDS: Final = 0.5  # unless they take so long
_LOOK_SECONDS: Final = 1.0  # how often finished places are counted


@dataclass(frozen=True)
class Campaign:
    """What is rehearsed, as text. problems : of `catalogue.make_problem`. policies : of `make_policy`.

    budgets : of `Budget.parse`. seeds : decisions a cell. tuning_seeds : other decisions, on which the
        constant of UCT and the priors of both Thompson samplings and of the static rate are chosen for
        each problem and number of rollouts where their policies are given by bare name; 0 leaves them as
        they are. A policy that ends in ":prior=auto" has its prior tuned in the same way; one that ends in
        ":stop=auto" stops at the highest price that costs next to no regret, on `stop_seeds` others.
    wide : those of the problems that are rehearsed under `wide_budgets` too.
    stops, plenty : policies, with and without ":stop=auto", that play under budgets of their own, alone:
        what stopping saves shows where rollouts are many.
    slowest : seconds of choosing a decision, where only rollouts are limited; slower choosers are left out,
        `stops` apart.
    dearest : the same for exact policies where time is limited, outside the `wide` problems; None: no limit.
    stop_seeds : None takes half of `seeds`, or where the folder's prices have been tuned, as many as then.
    """

    problems: tuple[str, ...]
    budgets: tuple[str, ...]
    policies: tuple[str, ...]
    seeds: int = 400
    tuning_seeds: int = 100
    wide: tuple[str, ...] = ()
    wide_budgets: tuple[str, ...] = ()
    stops: tuple[str, ...] = ()
    plenty: tuple[str, ...] = ()
    slowest: float = 0.25
    dearest: float | None = None
    stop_seeds: int | None = None

    def __post_init__(self) -> None:
        for name in self.problems:
            make_problem(name)
        for name in (*self.budgets, *self.wide_budgets, *self.plenty):
            if not Budget.parse(name).room(0, 0.0):
                raise InputError("budget", "must have room for a rollout", name)
        for what in ("problems", "budgets", "wide_budgets", "plenty"):
            given = [str(Budget.parse(x)) if what != "problems" else x for x in getattr(self, what)]
            if twice := [x for x in given if given.count(x) > 1]:
                raise InputError(what, "must each be given once", twice[0])
        if both := {*self.budgets, *self.wide_budgets} & {*self.plenty}:
            raise InputError("plenty", "must be other budgets than the policies'", min(both))
        for name in self.all_policies:
            policy = make_policy(untuned(name))
            if name.count("=auto") > 1:
                raise InputError(f"policy {name!r}", "must leave one option to tuning at most")
            if name.endswith(":stop=auto") and getattr(policy, "watch", None) is None:
                raise InputError(f"policy {name!r}", "has no price to stop at")
            if name != untuned(name) and not self.tuning_seeds:
                raise InputError("tuning_seeds", f"must be above 0 to tune {name!r}", 0)
        if not 2 <= self.seeds <= TUNING_SEED - _FIRST_SEED:
            raise InputError("seeds", f"must be from 2 to {TUNING_SEED - _FIRST_SEED}", self.seeds)
        if self.stop_seeds is not None and self.stop_seeds < 2:
            raise InputError("stop_seeds", "must be at least 2", self.stop_seeds)
        if self.tuning_seeds == 1 or self.tuning_seeds < 0:
            raise InputError("tuning_seeds", "must be 0 or at least 2", self.tuning_seeds)

    def budgets_of(self, problem: str) -> tuple[str, ...]:
        """The budgets under which a problem is rehearsed."""
        return (*self.budgets, *(self.wide_budgets if problem in self.wide else ()), *self.plenty)

    def policies_under(self, budget: str) -> tuple[str, ...]:
        """The policies that play under a budget."""
        return self.stops if budget in self.plenty else self.policies

    @property
    def all_policies(self) -> tuple[str, ...]:
        """All that play under some budget."""
        return (*self.policies, *self.stops)


@dataclass(frozen=True, eq=False)
class Results:
    """Cells of a campaign, the tuning of its baselines, and which policies were left out where and why.

    kinds : problem -> "Gaussian", "win/loss", with ", chance nodes" where its trees have them, and what its
        regret is against where that is an estimate.
    against : problem -> that, whatever it is.
    unsearched : a cell a problem, of the same decisions taken before the first rollout.
    """

    campaign: Campaign
    cells: list[Cell] = field(default_factory=list)
    tuning: list[dict[str, Any]] = field(default_factory=list)
    left_out: list[dict[str, Any]] = field(default_factory=list)
    kinds: dict[str, str] = field(default_factory=dict)
    against: dict[str, Against] = field(default_factory=dict)
    unsearched: list[Cell] = field(default_factory=list)


def run(
    campaign: Campaign,
    folder: str | os.PathLike[str],
    *,
    workers: int = 1,
    progress: Callable[[int, int], None] | None = None,
) -> Results:
    """Run what `folder` does not hold yet; a killed campaign goes on where it was.

    With more `seeds` than before, the further decisions are played, by constants that were tuned before.

    workers : processes, each with a problem at a time. progress : called about once a second, with the
    places (a problem under a budget) that are done, those of an earlier run too, and how many there are.
    Raises InputError, before anything is written, where a policy or a scorer file is no good, or the folder
    holds a campaign that this one does not continue.
    """
    folder = Path(folder)
    campaign = replace(campaign, stop_seeds=claim(folder, asdict(campaign), _checked(campaign, folder)))
    parts: dict[str, Results] = {}
    calls = [(_problem, (campaign, name, folder, os.getpid())) for name in campaign.problems]
    with _counted(campaign, folder, progress):
        for name, part in run_calls(calls, workers=workers):
            parts[name] = part
    results = Results(campaign)
    for name in campaign.problems:
        results.cells.extend(parts[name].cells)
        results.tuning.extend(row for row in parts[name].tuning if "regret" in row)
        results.left_out.extend(parts[name].left_out)
        results.kinds.update(parts[name].kinds)
        results.against.update(parts[name].against)
        results.unsearched.extend(parts[name].unsearched)
    return results


def _checked(campaign: Campaign, folder: Path) -> dict[str, str]:
    """SHA-256 of each scorer file, after every policy has chosen once: faults are told before the work."""
    names: dict[str, str] = {}
    files: dict[str, str] = {}

    @cache
    def tree_of(name: str) -> BeliefTree:
        made = _made(name, folder) if (folder / "campaign.json").exists() else make_problem(name)
        return made.draw(TUNING_SEED).tree

    for spec in campaign.all_policies:
        if names.setdefault(name_of(spec), spec) != spec:
            rule = f"must not have the name of {names[name_of(spec)]!r}; scorers take the option name=..."
            raise InputError(f"policy {spec!r}", rule, name_of(spec))
        if spec.startswith(_SCORER):
            _scorer_of(untuned(spec))
            file = scorer_file(untuned(spec))[0]
            files[file] = sha256_of(file)
            reasons = [_unreadable(campaign, untuned(spec), tree_of(name)) for name in campaign.problems]
            if reasons and all(reasons):
                raise InputError(f"policy {spec!r}", "must be able to score the trees of some problem")
        elif campaign.problems:
            _refused(make_policy(untuned(spec)), tree_of(campaign.problems[0]))
    return files


def _made(name: str, folder: Path) -> Problem:
    """A problem that keeps there what is dear about its decisions."""
    made = make_problem(name)
    if (keep := getattr(made, "keep_in", None)) is not None:
        keep(folder / "worth" / slug(name))
    return made


def _problem(campaign: Campaign, name: str, folder: Path, starter: int) -> tuple[str, Results]:
    """One problem under all budgets."""
    if os.getpid() != starter:
        _end_with(starter)
    problem = Remembered(_made(name, folder))
    first = problem.draw(TUNING_SEED)
    tree = first.tree
    out = Results(campaign, kinds={name: kind_of(first)})
    tuned: dict[tuple[int, tuple[str, ...]], dict[str, str]] = {}

    def plays(text: str) -> bool:
        return _unreadable(campaign, text, tree) is None and _refused(make_policy(text), tree) is None

    judged: dict[str, Any] = {"seeds": campaign.seeds, "first_seed": _FIRST_SEED}
    none = [make_policy("even")], [Budget(rollouts=0)], folder / "unsearched"
    out.unsearched.extend(rehearse([problem], *none, **judged))
    for text in campaign.budgets_of(name):
        budget = Budget.parse(text)
        rollouts, specs = budget.room(0, 0.0), campaign.policies_under(text)
        if (rollouts, specs) not in tuned:
            assert campaign.stop_seeds is not None  # `run` has settled it
            seeds = {"seeds": campaign.tuning_seeds, "stop_seeds": campaign.stop_seeds}
            rows = tune(specs, problem, rollouts, folder / "tuning", **seeds, plays=plays)
            out.tuning.extend(rows)
            tuned[rollouts, specs] = {row["policy"]: row["chosen"] for row in rows}
        texts = {spec: tuned[rollouts, specs].get(spec, untuned(spec)) for spec in specs}
        reasons = _reasons(campaign, name, texts, tree, budget, place_file(folder, name, text))
        out.left_out.extend(
            {"problem": name, "budget": text, "policy": name_of(spec), **why.as_json()}
            for spec, why in reasons.items()
            if why is not None
        )
        policies = [named(make_policy(texts[spec]), spec) for spec in specs if reasons[spec] is None]
        where = folder / "cells"
        if text in campaign.plenty:
            for spec in (s for s in specs if s.endswith(":stop=auto") and reasons[s] is None):
                goes_on, price = make_policy(untuned(spec)), price_of(texts[spec])
                play_stops(problem, goes_on, name_of(spec), price, budget, where, **judged)
        out.cells.extend(rehearse([problem], policies, [budget], where, **judged))
        write_atomic(place_file(folder, name, text).with_suffix(".done"), played_by(specs, campaign.seeds))
    if first.leaf_rollouts:
        draws = [problem.draw(seed) for seed in range(_FIRST_SEED, _FIRST_SEED + campaign.seeds)]
        out.against[name] = Against.of(draws)
    else:
        out.against[name] = Against()
    return name, out


@lru_cache(maxsize=1)
def _end_with(starter: int) -> None:
    """End this worker as soon as whoever started it is gone: a resumed run wants the core for itself."""

    def watch() -> None:
        while os.getppid() == starter:
            time.sleep(_LOOK_SECONDS)
        os._exit(1)

    threading.Thread(target=watch, daemon=True).start()


# --- who plays where -------------------------------------------------------------------------------


def _reasons(
    campaign: Campaign, problem: str, texts: dict[str, str], tree: BeliefTree, budget: Budget, kept: Path
) -> dict[str, Reason | None]:
    """Policy -> why it cannot be rehearsed here, None where it can.

    What was decided once is kept in a file: some reasons are times, which a resumed run measures anew.
    """
    found = read_json(kept) if kept.exists() else {}
    decided = {spec: None if why is None else Reason.of(why) for spec, why in found.items()}
    for spec, text in texts.items():
        if spec not in decided:
            slowest = math.inf if spec in campaign.stops else campaign.slowest
            decided[spec] = _why_not(campaign, problem, text, tree, budget, slowest)
    told = {spec: None if why is None else why.as_json() for spec, why in decided.items()}
    write_atomic(kept, (json.dumps(told, indent=1) + "\n").encode())
    return {spec: decided[spec] for spec in texts}


def _why_not(
    campaign: Campaign, problem: str, text: str, tree: BeliefTree, budget: Budget, slowest: float
) -> Reason | None:
    if (unreadable := _unreadable(campaign, text, tree)) is not None:
        return Reason(unreadable)
    policy = make_policy(text)
    most = slowest / max(budget.room(0, 0.0), 1) if budget.seconds is None else budget.seconds
    try:
        tried = [_one_choice(policy, tree)]  # what is used for the first time takes longer
        while len(tried) < 2 or (min(tried) > most and len(tried) < _TRIES and sum(tried) < _TRIED_SECONDS):
            tried.append(_one_choice(policy, tree))  # again, lest a busy moment of the machine decides
    except RefusedError as e:
        return Reason(str(e))
    seconds = min(tried)
    if seconds > most:
        return Reason.slow(CHOICE, seconds)
    if budget.seconds is None or campaign.dearest is None or not text.startswith("exact-"):
        return None
    choosing = budget.seconds * seconds / (seconds + budget.rollout_seconds)
    if problem in campaign.wide or choosing <= campaign.dearest:
        return None
    return Reason.slow(DECISION, choosing)


def _unreadable(campaign: Campaign, text: str, tree: BeliefTree) -> str | None:
    """Why a scorer is not for these trees: it cannot read them, or others were made for them."""
    if not text.startswith(_SCORER):
        return None
    scorer = _scorer_of(text)
    if not ScorerInputs.fit(scorer, tree):
        return "the scorer does not take such trees"
    files = [_scorer_of(untuned(spec)) for spec in campaign.all_policies if spec.startswith(_SCORER)]
    if scorer.kind is RECORD and any(f.kind is not RECORD and ScorerInputs.fit(f, tree) for f in files):
        return "reads records, and another scorer reads the plain leaf table of such trees"
    return None


def _scorer_of(text: str) -> Scorer:
    return _loaded(_SCORER + scorer_file(text)[0])


@lru_cache(maxsize=16)
def _loaded(text: str) -> Scorer:
    policy: Any = make_policy(text)
    scorer: Scorer = policy.scorer
    return scorer


def _refused(policy: Policy, tree: BeliefTree) -> str | None:
    try:
        _one_choice(policy, tree)
    except RefusedError as e:
        return str(e)
    return None


def _one_choice(policy: Policy, tree: BeliefTree) -> float:
    posterior, rng = Posterior(tree), np.random.default_rng(0)
    policy.begin(tree)
    started = time.perf_counter()
    policy.choose(posterior, 64, rng)
    return time.perf_counter() - started


# --- places ----------------------------------------------------------------------------------------


@contextlib.contextmanager
def _counted(campaign: Campaign, folder: Path, progress: Callable[[int, int], None] | None) -> Iterator[None]:
    """Tells `progress` how many places are done, while others work on them."""
    if progress is None:
        yield
        return
    places = {
        place_file(folder, problem, budget).with_suffix(".done"): played_by(
            campaign.policies_under(budget), campaign.seeds
        )
        for problem in campaign.problems
        for budget in campaign.budgets_of(problem)
    }
    over = threading.Event()

    def tell() -> None:
        progress(sum(p.exists() and p.read_bytes() == played for p, played in places.items()), len(places))

    def look() -> None:
        while not over.wait(_LOOK_SECONDS):
            tell()

    tell()
    looker = threading.Thread(target=look, daemon=True)
    looker.start()
    try:
        yield
    finally:
        over.set()
        looker.join()
        tell()
