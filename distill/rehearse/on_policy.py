"""Training on the trees that a scorer's own search meets, round by round.

A scorer trained on other trees than those it then leads its search to may be worst where it works. So the
trees met under the current scorer are recorded, labelled exactly and added to the dataset, and the next
scorer is trained on all of it: dataset aggregation (Ross, Gordon and Bagnell 2011, algorithm 3.1), with
exact values in place of an expert's choices.
"""

from __future__ import annotations

import os
import shutil
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Final

from distill.errors import InputError
from distill.generate import Traces, add, generate
from distill.rehearse.met_trees import FIRST_SEED, met_trees
from distill.rehearse.problems import Problem
from distill.rehearse.value_policies import ByScorer
from distill.ship import ship
from distill.train import train
from distill.tree import BeliefTree
from distill.validate import validate

__all__ = ["Round", "aggregate"]

_SEEDS_A_ROUND: Final = 100_000


@dataclass(frozen=True)
class Round:
    """One round: the scorer file that came of it, the trees added before it, and its losses.

    forgone, relative_forgone : percent, on trees that no round trained on, met under this round's scorer.
    pooled : forgone percent on such trees of all rounds together, the same for every scorer; known when
        all rounds are done. held_out : forgone percent on the held-out part of the
        dataset as it was then, added trees among it.
    """

    number: int
    scorer: Path
    added: int
    forgone: float
    relative_forgone: float
    held_out: float
    pooled: float = float("nan")


def aggregate(
    dataset: str | os.PathLike[str],
    problems: Sequence[Problem],
    out: str | os.PathLike[str],
    *,
    rounds: int = 3,
    decisions: int = 100,
    rollouts: int = 128,
    recipe: str = "dense 32-32",
    added: Callable[[int], Traces] | None = None,
    seed: int = 0,
    workers: int = 1,
    tell: Callable[[Round], None] | None = None,
) -> list[Round]:
    """Train on a labelled dataset, then `rounds` times on what it grows to with the trees its search meets.

    dataset : a finished folder; it is copied to `out`/dataset and stays as it is. decisions : recorded a
    problem and round; a fifth as many others are kept from training to judge by. recipe : of `train.RECIPES`.
    added : round -> the trees to add in place of those met, for comparison with as many other trees.
    tell : called with each round as it ends; round 0 is the scorer of the dataset as it was.
    Raises InputError where `out` exists already: a round cannot be gone on with.
    """
    out = Path(out)
    if out.exists():
        raise InputError(str(out), "must not exist yet")
    data = out / "dataset"
    shutil.copytree(dataset, data)
    found: list[Round] = []
    n_added = 0
    for number in range(rounds + 1):
        front = train(data, out / f"trained-{number}", seed=seed, recipes=[recipe], n_boot=100)
        scorer = out / f"scorer-{number}.onnx"
        ship(out / f"trained-{number}", scorer, scorer=recipe)
        first = FIRST_SEED + number * _SEEDS_A_ROUND
        policy = ByScorer(scorer)
        judges = out / f"judge-{number}"
        own = _met_to_judge(problems, scorer, decisions, rollouts, number)
        generate(Traces(f"met under scorer {number}", own), judges, workers=workers)
        forgone, relative = _forgone(scorer, judges)
        held_out = front["scorers"][0]["held_out"]["forgone_percent"]["value"]
        found.append(Round(number, scorer, n_added, forgone, relative, held_out))
        if tell is not None:
            tell(found[-1])
        if number < rounds:
            if added is None:
                met = met_trees(
                    problems, policy, decisions=decisions, rollouts=rollouts, first_seed=first + decisions
                )
                more = Traces(f"met in round {number + 1}", met)
            else:
                more = added(number + 1)
            add(more, data, workers=workers)
            n_added += len(more)
    pool = out / "judge-all"
    all_met = [t for r in found for t in _met_to_judge(problems, r.scorer, decisions, rollouts, r.number)]
    generate(Traces("met in all rounds", all_met), pool, workers=workers)
    return [replace(r, pooled=_forgone(r.scorer, pool)[0]) for r in found]


def _met_to_judge(
    problems: Sequence[Problem], scorer: Path, decisions: int, rollouts: int, number: int
) -> list[BeliefTree]:
    first = FIRST_SEED + number * _SEEDS_A_ROUND
    kept = max(decisions // 5, 1)
    return list(met_trees(problems, ByScorer(scorer), decisions=kept, rollouts=rollouts, first_seed=first))


def _forgone(scorer: Path, folder: Path) -> tuple[float, float]:
    """Forgone and relative forgone, percent."""
    accuracy = validate(scorer, folder, n_boot=100)["accuracy"]
    return accuracy["forgone_percent"]["value"], accuracy["relative_forgone_percent"]["value"]
