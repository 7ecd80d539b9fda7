"""The simulators and problems that come along, by name."""

from __future__ import annotations

import re
from collections.abc import Callable
from itertools import product
from typing import Final

from distill.errors import InputError
from distill.rehearse.cold_store import ColdStore
from distill.rehearse.gym_tables import GymTable
from distill.rehearse.own_problems import own_problem
from distill.rehearse.problems import Problem, SimulatorProblem, TreeProblem
from distill.rehearse.search import Settings
from distill.rehearse.simulator import Modelled

__all__ = ["SIMULATORS", "environment_problems", "make_problem", "make_simulator", "synthetic_problems"]

_TREE: Final = re.compile(
    r"tree-(\d+)x(\d+)\^(\d+)-(winloss|noise([\d.e+-]+?))(?:-prior([\d.e+-]+?))?(-chance)?"
)


def _table(name: str, discount: float, skill: float, depth: int, length: int) -> tuple[Modelled, Settings]:
    return GymTable(name, discount=discount, skill=skill), Settings(depth=depth, length=length)


def _plans(name: str, discount: float, length: int) -> tuple[Modelled, Settings]:
    return GymTable(name, discount=discount, skill=0.9), Settings(depth=2, length=length, plans=True)


def _odds(name: str, skill: float, depth: int, length: int) -> tuple[Modelled, Settings]:
    settings = Settings(depth=depth, length=length, plans=True, win_loss=(0.0, 1.0))
    return GymTable(name, discount=1.0, skill=skill), settings


# name -> the simulator, and how its search looks ahead. Slippery ones need two steps: with no decision
# below the root, dynamic and static value are the same and policies that use them cannot differ.
SIMULATORS: Final[dict[str, Callable[[], tuple[Modelled, Settings]]]] = {
    "taxi": lambda: _table("taxi", 0.98, 0.9, 2, 30),
    "cliff_walking": lambda: _table("cliff_walking", 0.98, 0.9, 3, 30),
    "cold_store": lambda: (ColdStore(jobs=8), Settings(depth=2, length=30, plans=True)),
    "cold_store_small": lambda: (ColdStore(jobs=4), Settings(depth=2, length=30, plans=True)),
    "cliff_walking_slippery": lambda: _table("cliff_walking_slippery", 0.98, 0.9, 2, 60),
    "frozen_lake_4x4": lambda: _table("frozen_lake_4x4", 0.99, 0.5, 2, 100),
    "frozen_lake_8x8": lambda: _table("frozen_lake_8x8", 0.99, 0.5, 2, 200),
    # Plans of two moves, whatever chance does: two steps of the model above show the holes and the cliff by
    # themselves, and leave little to a search.
    "frozen_lake_4x4_plans": lambda: _plans("frozen_lake_4x4", 0.99, 100),
    "frozen_lake_8x8_plans": lambda: _plans("frozen_lake_8x8", 0.99, 200),
    "cliff_walking_slippery_plans": lambda: _plans("cliff_walking_slippery", 0.98, 60),
    # Reach the gift or not, undiscounted: every rollout wins or loses. Plans of three moves.
    "frozen_lake_4x4_odds": lambda: _odds("frozen_lake_4x4", 0.9, 3, 200),
    "frozen_lake_8x8_odds": lambda: _odds("frozen_lake_8x8", 0.9, 3, 400),
}
_SOLVABLE: Final = (
    "taxi",
    "cliff_walking",
    "cliff_walking_slippery",
    "frozen_lake_4x4",
    "frozen_lake_8x8",
    "frozen_lake_4x4_plans",
    "frozen_lake_8x8_plans",
    "cliff_walking_slippery_plans",
    "frozen_lake_4x4_odds",
    "frozen_lake_8x8_odds",
    "cold_store_small",
)
_MOST_LEAVES: Final = 4096
# Most random steps before the decision, where the usual 20 would leave little to decide.
_STEPS: Final = {"cold_store_small": 2}


def make_simulator(name: str) -> tuple[Modelled, Settings]:
    """A simulator by name, with the look-ahead that suits it; InputError for an unknown name."""
    if name not in SIMULATORS:
        raise InputError("simulator", f"must be one of {', '.join(SIMULATORS)}", name)
    return SIMULATORS[name]()


def environment_problems() -> list[Problem]:
    """Public environments and the small cold store, each judged by its exact optimum.

    The slippery ones grow chance nodes; the cold store is searched by plans of two jobs.
    """
    return [make_problem(name) for name in _SOLVABLE]


def make_problem(name: str) -> Problem:
    """A problem by name: a simulator's, or a synthetic tree's such as tree-4x4^1-noise4.

    tree-ACTIONSxBRANCHING^LEVELS-noiseVARIANCE or -winloss, then -priorVARIANCE and -chance where wanted.
    MODULE:NAME is one's own, from a module that can be imported or lies in the present folder: a `Problem`,
    or what is called for one; also (simulator, settings), the arguments of `SimulatorProblem`. Its name is
    then that text.

    >>> make_problem("tree-4x3^2-noise4-prior2-chance").name
    'tree-4x3^2-noise4-prior2-chance'
    """
    if ":" in name:
        return own_problem(name)
    if name in _SOLVABLE:
        steps = _STEPS.get(name, 20)
        return SimulatorProblem(*make_simulator(name), name=name, most_steps=steps, checked=False)
    found = _TREE.fullmatch(name)
    if found is None:
        rule = f"must be one of {', '.join(_SOLVABLE)}, a tree such as tree-4x4^1-noise4, or MODULE:NAME"
        raise InputError("problem", rule, name)
    actions, branching, levels, kind, noise, prior, chance = found.groups()
    try:
        variances = None if kind == "winloss" else float(noise), float(prior or 1)
    except ValueError:
        raise InputError("problem", "variances must be numbers", name) from None
    if int(actions) * int(branching) ** min(int(levels), 64) > _MOST_LEAVES:
        raise InputError("problem", f"must have at most {_MOST_LEAVES:,} leaves", name)
    return TreeProblem(int(actions), int(branching), int(levels) + 1, *variances, chance=bool(chance))


def synthetic_problems() -> list[Problem]:
    """The grid of trees with known leaf values: branching, depth, noise and chance, both beliefs."""
    shapes = [(2, 8, 2), (4, 4, 2), (6, 2, 2), (3, 3, 3)]
    noises = [1.0, 4.0, 16.0, None]
    flat = [TreeProblem(a, b, d, noise) for (a, b, d), noise in product(shapes, noises)]
    return [*flat, *(TreeProblem(4, 3, 3, noise, chance=True) for noise in (4.0, None))]
