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
from dataclasses import dataclass
from pathlib import Path
from typing import Final

from distill.errors import InputError
from distill.generate import Traces, add, generate
from distill.rehearse.met_trees import FIRST_SEED, met_trees
from distill.rehearse.policies import Policy
from distill.rehearse.problems import Problem
from distill.rehearse.value_policies import ByScorer
from distill.ship import ship
from distill.train import train
from distill.validate import validate

__all__ = ["Round", "aggregate"]

_SEEDS_A_ROUND: Final = 100_000


@dataclass(frozen=True)
class Round:
    """One round: the scorer file that came of it, the trees added before it, and its losses.

    forgone, relative_forgone : percent, on trees that no round trained on, met under this round's scorer.
    held_out : forgone percent on the base dataset's held-out trees.
    """

    number: int
    scorer: Path
    added: int
    forgone: float
    relative_forgone: float
    held_out: float


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
    problem and round, a fifth of them kept from training to judge by. recipe : of `train.RECIPES`.
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
        front = train(data, out / f"trained-{number}", seed=seed, recipes=[recipe])
        scorer = out / f"scorer-{number}.onnx"
        ship(out / f"trained-{number}", scorer, scorer=recipe)
        first = FIRST_SEED + number * _SEEDS_A_ROUND
        policy = ByScorer(scorer)
        judged = _labelled(problems, policy, max(decisions // 5, 1), rollouts, first, out / f"judge-{number}")
        accuracy = validate(scorer, judged, n_boot=100)["accuracy"]
        held_out = front["scorers"][0]["held_out"]["forgone_percent"]["value"]
        forgone, relative = (
            accuracy[key]["value"] for key in ("forgone_percent", "relative_forgone_percent")
        )
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
    return found


def _labelled(
    problems: Sequence[Problem], policy: Policy, decisions: int, rollouts: int, first: int, folder: Path
) -> Path:
    met = met_trees(problems, policy, decisions=decisions, rollouts=rollouts, first_seed=first)
    generate(Traces(f"judge {first}", met), folder)
    return folder
