"""The luck of a decision, drawn once and dealt out again to every policy that searches it."""

from __future__ import annotations

from array import array
from collections.abc import Callable
from dataclasses import replace
from typing import Final

from distill.rehearse.problems import Draw, Problem

__all__ = ["Remembered"]

_MOST_RETURNS: Final = 20_000_000  # numbers kept, 8 bytes each


class Remembered:
    """A problem whose decisions and rollout returns are computed once a seed, however many policies ask.

    Draws are the problem's own, bit by bit; only the simulator's real time is saved. Meant for one
    rehearsal of one problem: what was drawn is kept until about 20 million returns are, then dropped.
    """

    def __init__(self, problem: Problem) -> None:
        self._problem = problem
        self._draws: dict[int, tuple[Draw, dict[int, array[float]]]] = {}
        self._kept = 0

    @property
    def name(self) -> str:
        """The problem's."""
        return self._problem.name

    def draw(self, seed: int) -> Draw:
        """The decision of one seed, with its luck from the start."""
        if self._kept > _MOST_RETURNS:
            self._draws.clear()
            self._kept = 0
        if seed not in self._draws:
            self._draws[seed] = (self._problem.draw(seed), {})
        first, returns = self._draws[seed]
        return replace(first, roll=self._dealer(first.roll, returns))

    def _dealer(
        self, roll: Callable[[int], float], returns: dict[int, array[float]]
    ) -> Callable[[int], float]:
        dealt: dict[int, int] = {}

        def deal(leaf: int) -> float:
            seen = returns.setdefault(leaf, array("d"))
            nth = dealt.get(leaf, 0)
            dealt[leaf] = nth + 1
            if nth == len(seen):
                seen.append(roll(leaf))
                self._kept += 1
            return seen[nth]

        return deal
