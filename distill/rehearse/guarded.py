"""Simulators of others, guarded: whatever their methods raise or return wrongly is one clear error."""

from __future__ import annotations

import math
import numbers
import traceback
from collections.abc import Callable, Iterable, Sequence
from pathlib import Path
from typing import Any, Final

import numpy as np

from distill.errors import DistillError, InputError
from distill.rehearse.simulator import Action, Advised, Modelled, Outcome, Simulator, State

__all__ = ["Guarded", "called", "check_simulator", "guarded", "number_of"]

_PROB_SUM_SLACK: Final = 1e-9  # the belief tree record's own rule
_OURS: Final = str(Path(__file__).parents[1])
_NEEDED: Final = "name", "discount", "start", "actions", "step", "is_terminal"


def called(place: str, method: Callable[..., Any], *arguments: Any) -> Any:
    """What a method of others returns; InputError with what it raised, and where, if it does.

    An end of the process that it asks for counts as an error too: it would leave a worker, or the user,
    without a word.
    """
    try:
        return method(*arguments)
    except DistillError:
        raise
    except (Exception, SystemExit) as e:
        raise InputError(place, f"must not raise; it raised {_told(e)}") from e


def _told(e: BaseException) -> str:
    """An error in one line, with the last place that it went through in code that is no package's."""
    text = " ".join(str(e).split())
    frames = traceback.extract_tb(e.__traceback__)
    own = [f for f in frames if not f.filename.startswith(_OURS) and "site-packages" not in f.filename]
    where = f" ({Path(own[-1].filename).name} line {own[-1].lineno})" if own else ""
    return f"{type(e).__name__}{': ' if text else ''}{text}{where}"


def number_of(place: str, value: object) -> float:
    """A finite number as a float; InputError for anything else."""
    if isinstance(value, (float, numbers.Real, np.bool_)):
        x = float(value)
        if math.isfinite(x):
            return x
    raise InputError(place, "must be a finite number", value)


class Guarded:
    """A simulator, each of whose answers is looked at.

    start, step : the state must be hashable; step must return a pair, its reward a finite number.
    actions : at least one, whole numbers, each once. is_terminal : True or False. What is raised, or
    breaks a rule, becomes an InputError that names the simulator and the method. Costs about a microsecond
    a call.
    """

    def __init__(self, simulator: Simulator) -> None:
        self.guarded = simulator
        self.name = simulator.name
        self.discount = float(simulator.discount)
        self._place = f"simulator {type(simulator).__name__}"
        self._seen: tuple[Action, ...] | None = None

    def start(self, rng: np.random.Generator) -> State:
        """A state in which an episode begins."""
        return self._state("start", called(f"{self._place}: start", self.guarded.start, rng))

    def actions(self, state: State) -> Sequence[Action]:
        """What can be done in a state."""
        place = f"{self._place}: actions"
        found = called(place, self.guarded.actions, state)
        if self._seen is not None and found is self._seen:  # mostly the same tuple again
            return self._seen
        rule = "must give whole numbers, each once"
        if not isinstance(found, Iterable) or isinstance(found, (str, bytes)):
            raise InputError(place, rule, found)
        listed = tuple(called(place, list, found))
        if not listed:
            raise InputError(place, "must give at least one in a state that is not terminal", found)
        if not all(isinstance(a, numbers.Integral) for a in listed) or len({*listed}) != len(listed):
            raise InputError(place, rule, found)
        if isinstance(found, tuple):
            self._seen = found
        return listed

    def step(self, state: State, action: Action, rng: np.random.Generator) -> tuple[State, float]:
        """Next state and reward of one action."""
        return self._stepped(self.guarded.step, state, action, rng)

    @property
    def private_copy(self) -> Callable[[State], State]:
        """Of simulators that have it."""
        private: Callable[[State], State] = self.guarded.private_copy  # type: ignore[attr-defined]
        return private

    def step_private(self, state: State, action: Action, rng: np.random.Generator) -> tuple[State, float]:
        """As `step`, with the given state used up."""
        return self._stepped(self.guarded.step_private, state, action, rng)  # type: ignore[attr-defined]

    def _stepped(
        self, step: Callable[..., Any], state: State, action: Action, rng: np.random.Generator
    ) -> tuple[State, float]:
        place = f"{self._place}: step"
        found = called(place, step, state, action, rng)
        if not isinstance(found, (tuple, list)) or len(found) != 2:
            raise InputError(place, "must return a pair, the next state and the reward", found)
        after, reward = found
        if type(reward) is not float or not math.isfinite(reward):
            reward = number_of(f"{place}: reward", reward)
        return self._state("step", after), reward

    def is_terminal(self, state: State) -> bool:
        """Whether the episode is over."""
        place = f"{self._place}: is_terminal"
        found = called(place, self.guarded.is_terminal, state)
        if not isinstance(found, (bool, np.bool_)):
            raise InputError(place, "must return True or False", found)
        return bool(found)

    def _state(self, method: str, state: object) -> State:
        try:
            hash(state)
        except TypeError:
            rule = "must return a hashable state, such as a tuple"
            raise InputError(f"{self._place}: {method}", rule, state) from None
        return state

    def _outcomes(self, state: State, action: Action) -> list[Outcome]:
        place = f"{self._place}: outcomes of action {action}"
        found = called(place, self.guarded.outcomes, state, action)  # type: ignore[attr-defined]
        rule = "must be a list of at least one (prob, state, reward)"
        if not isinstance(found, (list, tuple)) or not found:
            raise InputError(place, rule, found)
        ways = []
        for way in found:
            if not isinstance(way, (list, tuple)) or len(way) != 3:
                raise InputError(place, rule, found)
            prob, reward = number_of(f"{place}: prob", way[0]), number_of(f"{place}: reward", way[2])
            if not 0 <= prob <= 1 + _PROB_SUM_SLACK:
                raise InputError(place, "prob must be from 0 to 1", prob)
            ways.append(Outcome(prob, self._state("outcomes", way[1]), reward))
        total = math.fsum(way.prob for way in ways)
        if not abs(total - 1) <= _PROB_SUM_SLACK:
            raise InputError(place, "prob must sum to 1", total)
        return ways

    def _advise(self, state: State, rng: np.random.Generator) -> Action:
        place = f"{self._place}: advise"
        found = called(place, self.guarded.advise, state, rng)  # type: ignore[attr-defined]
        if not isinstance(found, numbers.Integral):
            raise InputError(place, "must return an action, a whole number", found)
        action: Action = found  # type: ignore[assignment]
        return action


class _WithModel(Guarded):
    def outcomes(self, state: State, action: Action) -> list[Outcome]:
        return self._outcomes(state, action)


class _WithAdvice(Guarded):
    def advise(self, state: State, rng: np.random.Generator) -> Action:
        return self._advise(state, rng)


class _WithBoth(_WithModel, _WithAdvice):
    pass


def guarded(simulator: Simulator) -> Simulator:
    """The simulator with its answers looked at; it has a model and gives advice where the given one does."""
    if isinstance(simulator, Guarded):
        return simulator
    if isinstance(simulator, Modelled):
        return _WithBoth(simulator) if isinstance(simulator, Advised) else _WithModel(simulator)
    return _WithAdvice(simulator) if isinstance(simulator, Advised) else Guarded(simulator)


def check_simulator(simulator: Simulator) -> None:
    """InputError where an object lacks what a simulator must have, with its name and the rule."""
    place = f"simulator {type(simulator).__name__}"
    for what in _NEEDED:
        if not hasattr(simulator, what):
            raise InputError(place, f"must have {', '.join(_NEEDED[:-1])} and {_NEEDED[-1]}", what)
    if not isinstance(simulator.name, str) or not simulator.name:
        raise InputError(f"{place}: name", "must be text", simulator.name)
    if not 0 < number_of(f"{place}: discount", simulator.discount) <= 1:
        raise InputError(f"{place}: discount", "must be above 0 and at most 1", simulator.discount)
    for what in _NEEDED[2:]:
        if not callable(getattr(simulator, what)):
            raise InputError(f"{place}: {what}", "must be a method", getattr(simulator, what))
    watched = guarded(simulator)
    state = watched.start(np.random.default_rng(0))
    if watched.is_terminal(state):
        raise InputError(f"{place}: start", "must return a state that is not terminal", state)
    watched.actions(state)
