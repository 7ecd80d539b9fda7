"""The rehearsals that come along: a quick one, and the full grid of problems, budgets and policies."""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path
from typing import Any, Final

from distill.errors import InputError
from distill.rehearse.campaign import Campaign, run
from distill.rehearse.results import write_results
from distill.runtime import Scorer
from distill.scorer_inputs import InputKind

__all__ = ["plan", "quick"]

# Branching, depth, noise and prior: 12 to 81 leaves. The longest first, so that no worker idles at the end.
_TREES: Final = (
    "tree-4x4^2-winloss", "tree-4x3^2-winloss-chance", "tree-4x3^2-noise4-chance", "tree-3x3^3-noise1",
    "tree-4x4^2-noise4", "tree-3x3^2-noise4-prior4", "tree-2x8^1-winloss", "tree-2x8^1-noise16",
    "tree-6x2^1-noise4",
)  # fmt: skip
# Of those that come along, the ones that leave a search something to find: with 2,048 rollouts shared out
# evenly the regret is less than half of that of acting before the first one.
_SIMULATORS: Final = (
    "cold_store_small", "frozen_lake_4x4_odds", "frozen_lake_8x8_plans", "cliff_walking_slippery_plans",
    "frozen_lake_4x4_plans",
)  # fmt: skip
_BASELINES: Final = ("even", "uct", "thompson", "top-two", "static-voc", "static-rate")
# 32 and 128 rollouts' worth of time at 100 us and at 1 ms.
_TIMED: Final = ("3.2ms@100us", "12.8ms@100us", "32ms@1ms", "128ms@1ms")
# For one problem of each sort: 128 rollouts whatever their time, and at the ends of what they cost.
_WIDE: Final = (
    "tree-4x4^1-winloss", "taxi", "tree-2x8^1-noise1", "tree-4x4^1-noise4", "tree-3x2^2-noise4-chance",
)  # fmt: skip
_ENDS: Final = ("128", "2.56ms@20us", "640ms@5ms")
_PLENTY: Final = ("4096",)  # rollouts enough for many decisions to be clear before the last one
_SLOWEST: Final = 2.0

_PLANS: Final = {
    "quick": Campaign(
        problems=("tree-4x4^1-noise4", "tree-3x3^3-noise1", "cliff_walking_slippery_plans"),
        budgets=("6.4ms@100us", "64ms@1ms"),
        policies=("uct:c=1", "thompson", "static-rate"),
        seeds=60,
        tuning_seeds=0,
    ),
    "full": Campaign(
        problems=(*_WIDE, *_SIMULATORS, *_TREES),
        budgets=("32", *_TIMED),
        policies=(*_BASELINES[1:], "exact-dynamic-rate"),  # an even search is nobody's rival
        wide=_WIDE,
        wide_budgets=_ENDS,
        slowest=0.03,
        dearest=0.045,
    ),
}
# How scorer files are used: in turns with the closed form, then alone for the last half rollout a leaf; or
# after the closed form, alone for the last two rollouts a leaf; never where a scoring takes over a fifth of
# a rollout's time. In the full plan the first file of each kind of inputs is played in both ways, and in the
# first with a tuned prior; others with a tuned prior.
_USE: Final = ":late=0.5:every=2:share=0.2"
_LATE: Final = ":late=2:share=0.2"
_STOPS: Final = (":late=0.5", ":late=0.5:stop=auto")  # where rollouts are plenty, the closed form is fast


def plan(
    name: str | None,
    *,
    problems: Sequence[str] = (),
    budgets: Sequence[str] = (),
    policies: Sequence[str] = (),
    scorers: Sequence[str] = (),
    stopping: bool = False,
    seeds: int | None = None,
    tuning_seeds: int | None = None,
) -> Campaign:
    """A campaign by name ("quick", "full"), or of one's own; what is given replaces what the plan says.

    scorers : files, each used in the ways that the plan knows, beside the policies; the first one of each
    kind of inputs in all of them. Without a plan, problems and budgets must be given; policies are then
    the tuned baselines.
    """
    if name is not None and name not in _PLANS:
        raise InputError("plan", f"must be one of {', '.join(_PLANS)}", name)
    base = _PLANS.get(name or "")
    for what, given in (("problem", problems), ("budget", budgets)):
        if base is None and not given:
            raise InputError(f"--{what}", "must be given without --quick or --full")
    chosen = tuple(policies) or (base.policies if base else _BASELINES)
    full = name == "full"
    stops: list[str] = []
    inputs: set[InputKind | None] = set()
    for file in scorers:
        uses = ["", _USE]
        kind = Scorer.load(file).kind if full or stopping else None
        if stopping and kind not in inputs:
            stops += [f"scorer:{file}{use}" for use in _STOPS]
        if full:
            uses = [f"{_USE}:prior=auto"] if kind in inputs else [_USE, _LATE, f"{_USE}:prior=auto"]
        inputs.add(kind)
        chosen += tuple(f"scorer:{file}{use}" for use in uses)
    if stopping and not stops:
        raise InputError("--stops", "needs a scorer file: --scorer FILE.onnx")
    return Campaign(
        wide=base.wide if base else (),
        wide_budgets=base.wide_budgets if base and not budgets else (),
        stops=tuple(stops),
        plenty=_PLENTY if stopping else (),
        problems=tuple(problems) or (base.problems if base else ()),
        budgets=tuple(budgets) or (base.budgets if base else ()),
        slowest=base.slowest if base else _SLOWEST,
        dearest=base.dearest if base else None,
        policies=chosen,
        seeds=seeds if seeds is not None else base.seeds if base else 400,
        tuning_seeds=tuning_seeds if tuning_seeds is not None else base.tuning_seeds if base else 100,
    )


def quick(
    scorers: Sequence[str | os.PathLike[str]], folder: str | os.PathLike[str], *, seeds: int | None = None
) -> dict[str, Any]:
    """The quick plan with some scorer files, run into `folder`; returns the summary that it leaves there."""
    campaign = plan("quick", scorers=[str(file) for file in scorers], seeds=seeds)
    return write_results(run(campaign, folder), Path(folder))
