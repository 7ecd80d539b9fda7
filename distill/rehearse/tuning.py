"""The constants of policies chosen on decisions of their own, problem by problem."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any, Final

import numpy as np

from distill.rehearse.loop import Budget
from distill.rehearse.policies import Policy
from distill.rehearse.policy_specs import make_policy
from distill.rehearse.problems import Problem
from distill.rehearse.rehearsal import rehearse

__all__ = ["TUNED", "TUNING_SEED", "name_of", "named", "tune", "untuned"]

TUNING_SEED: Final = 1_000_000  # tuning looks at decisions from here on, the rehearsal at those before

# Prices of a rollout, in units of the tree's scale, that ":stop=auto" chooses from.
_STOPS: Final = (1e-2, 1e-3, 3e-4, 1e-4, 3e-5, 1e-5, 1e-6, 1e-7, 1e-8, 1e-9, 1e-10, 1e-12, 1e-14)
_NO_LOSS: Final = 0.01  # share of regret that stopping may cost when tuned, a standard error allowed for
_WIDTHS: Final = (0.7, 1.4, 2.0)  # of the prior, that ":prior=auto" chooses from beside 1
_STOP_AUTO, _PRIOR_AUTO = ":stop=auto", ":prior=auto"

# Policy -> the texts that tuning chooses from. The first is taken untuned.
TUNED: Final = {
    "uct": ["uct:c=1", "uct:c=0.25", "uct:c=0.5", "uct:c=2", "uct:c=4"],
    "thompson": ["thompson", *(f"thompson:prior={width}" for width in (0.5, *_WIDTHS))],
    "top-two": ["top-two", *(f"top-two:prior={width}" for width in _WIDTHS), "top-two:share=0.7"],
    "static-rate": ["static-rate", *(f"static-rate:prior={width}" for width in _WIDTHS)],
}


def untuned(spec: str) -> str:
    """A policy's text without the option that is left to tuning."""
    return spec.removesuffix(_STOP_AUTO).removesuffix(_PRIOR_AUTO)


def named(policy: Policy, spec: str) -> Policy:
    """Tuned policies bear one name wherever they stand, so that cells can be compared."""
    if spec in TUNED or spec != untuned(spec):
        policy.name = name_of(spec)  # type: ignore[misc]
    return policy


def name_of(spec: str) -> str:
    """The name under which a campaign's policy stands in its cells."""
    if spec in TUNED:
        return spec.replace("-", "_")
    suffix = {_STOP_AUTO: "-stops", _PRIOR_AUTO: "-tuned"}.get(spec[len(untuned(spec)) :], "")
    return make_policy(untuned(spec)).name + suffix


def tune(
    specs: Sequence[str],
    problem: Problem,
    rollouts: int,
    folder: Path,
    *,
    seeds: int,
    plays: Callable[[str], bool],
) -> list[dict[str, Any]]:
    """The best constants of the policies at this number of rollouts, with what each gave.

    specs : the campaign's policies; those that leave nothing to tuning are passed over. plays : whether
    an untuned text plays on this problem at all. seeds : decisions, 0 takes what is untuned.
    """
    tries = _tries(specs, plays)
    if not tries or not seeds or not rollouts:
        return [{"policy": spec, "chosen": texts[0]} for spec, texts in tries.items()]
    policies = {text: make_policy(text) for texts in tries.values() for text in texts}
    budget = Budget(rollouts=rollouts)
    cells = rehearse(
        [problem], list(policies.values()), [budget], folder, seeds=seeds, first_seed=TUNING_SEED
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
    seconds = float(sum(cell.processor.sum() for cell in cells))
    return [{**row, "processor_seconds": seconds if i == 0 else 0.0} for i, row in enumerate(rows)]


def _tries(specs: Sequence[str], plays: Callable[[str], bool]) -> dict[str, list[str]]:
    """What tuning chooses from, policy by policy; the first is the one without tuning."""
    tries = {spec: TUNED[spec] for spec in specs if spec in TUNED}
    for spec in specs:
        base = untuned(spec)
        if base != spec and plays(base):
            key, values = ("stop", _STOPS) if spec.endswith(_STOP_AUTO) else ("prior", _WIDTHS)
            tries[spec] = [base, *(f"{base}:{key}={value:g}" for value in values)]
    return tries
