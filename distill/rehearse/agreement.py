"""Whether the steps of a simulator pay what its exact model says: a quick check before any use."""

from __future__ import annotations

import math
from typing import Final

import numpy as np

from distill.errors import InputError
from distill.rehearse.simulator import Action, Modelled, Simulator, State, outcomes_of
from distill.tree import Floats

__all__ = ["FALSE_ALARM", "check_steps", "check_steps_are_sure"]

FALSE_ALARM: Final = 1e-6  # odds of refusing a simulator whose steps are drawn from its model, at most
_STATES: Final = 6  # looked at
_ACTIONS: Final = 3  # of each
_STEPS: Final = 100  # of each of those
_WALK: Final = 8  # steps at random before a state is looked at, at most
_NOISE_SIGMAS: Final = 8.0  # standard errors granted to steps with a noise that the model does not name
_REPEATS: Final = 8  # steps from one state that must end alike where they are to be sure
_ROUNDING: Final = 1e-9  # of the largest reward


def check_steps(simulator: Modelled, kind: str, seed: int = 0) -> None:
    """InputError where the mean reward of steps is not that of the model's outcomes.

    Each of some states and actions is stepped 100 times. Where every reward is one that the model names,
    the mean may differ from the model's by what Bernstein's inequality (Bernstein 1924; Boucheron, Lugosi and
    Massart 2013, equation 2.10) allows for such draws: a simulator whose steps are drawn from its model is
    refused with odds below 1e-6, over all states and actions together. Steps that add a noise of their
    own are granted 8 standard errors, as seen; no bound holds for those whatever the noise.

    Only what is grossly wrong is found: at one state and action a difference of about the rewards' own
    spread; where the model names a single reward, any difference.
    """
    rng = np.random.default_rng(seed)
    level = math.log(2 * _STATES * _ACTIONS / FALSE_ALARM)
    for _ in range(_STATES):
        state = _met(simulator, rng)
        for action in rng.permutation(np.asarray(simulator.actions(state)))[:_ACTIONS].tolist():
            _check(simulator, kind, state, action, level, rng)


def _check(
    simulator: Modelled, kind: str, state: State, action: Action, level: float, rng: np.random.Generator
) -> None:
    ways = outcomes_of(simulator, state, action, rng)
    named = np.array([way.reward for way in ways])
    prob = np.array([way.prob for way in ways])
    mean = float(prob @ named)
    spread, most = float(prob @ (named - mean) ** 2), float(np.abs(named - mean).max())
    seen = np.array([simulator.step(state, action, rng)[1] for _ in range(_STEPS)])
    rounding = _ROUNDING * float(max(np.abs(named).max(), np.abs(seen).max()))
    if _all_named(seen, named, rounding):
        # The t at which 2 exp(-n t^2 / (2 (spread + most t / 3))) is the level's share.
        b = most * level / (3 * _STEPS)
        allowed = b + math.sqrt(b * b + 2 * spread * level / _STEPS)
    else:
        allowed = _NOISE_SIGMAS * math.sqrt(max(float(seen.var(ddof=1)), spread) / _STEPS)
    if not abs(float(seen.mean()) - mean) <= allowed + rounding:
        rule = f"must pay on average what outcomes says, {mean:.6g} (action {action}, {_STEPS} steps)"
        raise InputError(f"{kind}: step from {_short(state)}", rule, float(f"{seen.mean():.6g}"))


def _all_named(seen: Floats, named: Floats, rounding: float) -> bool:
    return bool(np.all(np.abs(seen[:, None] - named[None, :]).min(axis=1) <= rounding))


def check_steps_are_sure(simulator: Simulator, kind: str) -> None:
    """InputError where steps from one state end differently, for searches that take one for all of them.

    What ends alike is equal, or shown by the same text.
    """
    rng = np.random.default_rng(0)
    for _ in range(_STATES):
        state = _met(simulator, rng)
        for action in rng.permutation(np.asarray(simulator.actions(state)))[:_ACTIONS].tolist():
            (first, reward), *rest = (simulator.step(state, action, rng) for _ in range(_REPEATS))
            for after, paid in rest:
                if paid != reward or not (after == first or str(after) == str(first)):
                    rule = "must be Settings(plans=True), or samples of 2 or more: steps end by chance, and "
                    raise InputError(f"{kind}: settings", f"{rule}there is no exact model of how they do")


def _met(simulator: Simulator, rng: np.random.Generator) -> State:
    """A state after a few random steps of an episode that goes on."""
    state = simulator.start(rng)
    for _ in range(int(rng.integers(_WALK + 1))):
        choices = simulator.actions(state)
        action = choices[int(rng.random() * len(choices))]
        if isinstance(simulator, Modelled):
            outcomes_of(simulator, state, action, rng)  # a wrong one is told before steps are drawn from it
        after, _ = simulator.step(state, action, rng)
        if simulator.is_terminal(after):
            break
        state = after
    return state


def _short(state: State) -> str:
    text = str(state)
    return text if len(text) <= 40 else text[:37] + "..."
