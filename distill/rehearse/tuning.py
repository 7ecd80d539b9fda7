"""The constants of policies chosen on decisions of their own, problem by problem."""

from __future__ import annotations

import hashlib
import json
import math
import re
import time
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any, Final

import numpy as np

from distill.files import read_json, write_atomic
from distill.rehearse.loop import Budget, decide_at_prices, luck_of
from distill.rehearse.policies import Policy
from distill.rehearse.policy_specs import make_policy
from distill.rehearse.problems import Problem
from distill.rehearse.rehearsal import rehearse

__all__ = ["TUNED", "TUNING_SEED", "name_of", "named", "price_of", "tune", "untuned"]

TUNING_SEED: Final = 1_000_000  # tuning looks at decisions from here on, the rehearsal at those before

# Prices of a rollout, in units of the tree's scale, that ":stop=auto" chooses from. The lowest ones matter:
# no single leaf's rollouts may be worth much any more where those of all leaves together are.
_PRICES: Final = (
    *(float(f"{digit}e-{n}") for n in range(2, 11) for digit in (3, 1)),
    *(float(f"1e-{n}") for n in (12, 15, 20, 25, 30)),
)
_NO_LOSS: Final = 0.01  # of the regret: what stopping may cost when tuned, a standard error allowed for
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


def price_of(text: str) -> float | None:
    """The price at which a policy's text stops; None where it does not, or leaves that to tuning.

    >>> price_of("scorer:a.onnx:late=0.5:stop=3e-08"), price_of("uct:c=2")
    (3e-08, None)
    """
    found = re.search(r":stop=([\d.e+-]+)$", text)
    return float(found[1]) if found else None


def tune(
    specs: Sequence[str],
    problem: Problem,
    rollouts: int,
    folder: Path,
    *,
    seeds: int,
    stop_seeds: int,
    plays: Callable[[str], bool],
) -> list[dict[str, Any]]:
    """The best constants of the policies at this number of rollouts, with what each gave.

    specs : the campaign's policies; those that leave nothing to tuning are passed over. plays : whether
    an untuned text plays on this problem at all. seeds : decisions, 0 takes what is untuned. stop_seeds :
    those for prices to stop at: a loss of a hundredth shows on many decisions only.
    """
    tries = _tries(specs, plays)
    stops = [spec for spec in specs if spec.endswith(_STOP_AUTO) and plays(untuned(spec))]
    if not seeds or not rollouts:
        untouched = {**{spec: texts[0] for spec, texts in tries.items()}, **{s: untuned(s) for s in stops}}
        return [{"policy": spec, "chosen": text} for spec, text in untouched.items()]
    about = {"problem": problem.name, "rollouts": rollouts}
    rows: list[dict[str, Any]] = []
    if tries:
        policies = {text: make_policy(text) for texts in tries.values() for text in texts}
        budget = Budget(rollouts=rollouts)
        cells = rehearse(
            [problem], list(policies.values()), [budget], folder, seeds=seeds, first_seed=TUNING_SEED
        )
        found = {cell.policy: float(cell.measured.mean()) for cell in cells}
        for spec, texts in tries.items():
            regret = {text: found[policies[text].name] for text in texts}
            chosen = min(texts, key=lambda text: regret[text])
            rows.append({**about, "policy": spec, "chosen": chosen, "regret": regret})
        seconds = float(sum(cell.processor.sum() for cell in cells))
        rows = [{**row, "processor_seconds": seconds if i == 0 else 0.0} for i, row in enumerate(rows)]
    return [*rows, *(_stop(spec, problem, rollouts, folder, stop_seeds) for spec in stops)]


def _stop(spec: str, problem: Problem, rollouts: int, folder: Path, seeds: int) -> dict[str, Any]:
    """The highest price that costs next to no regret, and what each price would cost and save.

    One search a decision passes all prices. What is found is kept in a file: a resumed run reads it.
    """
    base = untuned(spec)
    about = {"problem": problem.name, "rollouts": rollouts, "policy": spec}
    key = hashlib.sha256(json.dumps([about, seeds, _PRICES, _NO_LOSS]).encode()).hexdigest()[:12]
    kept = folder / f"stops--{problem.name}-{rollouts}-{key}.json"
    if kept.exists():
        found: dict[str, Any] = read_json(kept)
        return found
    policy, budget = make_policy(base), Budget(rollouts=rollouts)
    ends: list[list[tuple[float, int]]] = []
    started = time.process_time()
    for seed in range(TUNING_SEED, TUNING_SEED + seeds):
        rng = luck_of(seed)
        decision = decide_at_prices(problem.draw(seed), policy, budget, rng, _PRICES)
        ends.append([(end.measured, end.rollouts) for end in decision])
    measured = np.array(ends)[:, :, 0]
    regret, spent = np.mean(ends, axis=0).T
    lost = measured[:, :-1] - measured[:, -1:]
    surely = lost.mean(axis=0) + lost.std(axis=0) / math.sqrt(seeds)
    free = np.flatnonzero(surely <= _NO_LOSS * regret[-1])
    texts = [f"{base}:stop={price:g}" for price in _PRICES]
    row = {
        **about,
        "chosen": texts[free[0]] if free.size else base,
        "regret": dict(zip([*texts, base], regret.tolist(), strict=True)),
        "spent": dict(zip([*texts, base], spent.tolist(), strict=True)),
        "processor_seconds": time.process_time() - started,
    }
    write_atomic(kept, (json.dumps(row, indent=1) + "\n").encode())
    return row


def _tries(specs: Sequence[str], plays: Callable[[str], bool]) -> dict[str, list[str]]:
    """What tuning chooses from by regret alone, policy by policy; the first is the one without tuning."""
    tries = {spec: TUNED[spec] for spec in specs if spec in TUNED}
    for spec in specs:
        base = untuned(spec)
        if spec.endswith(_PRIOR_AUTO) and plays(base):
            tries[spec] = [base, *(f"{base}:prior={width:g}" for width in _WIDTHS)]
    return tries
