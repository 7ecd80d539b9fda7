"""How far rules are from the best that any rule could do: python tests/bench/headroom.py

Win/loss trees small enough to enumerate (`tests/best_possible.py`). Prints regret over the least possible.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))

from best_possible import least_regret, regret_of

from distill.rehearse.catalogue import make_problem
from distill.rehearse.loop import Budget, decide
from distill.rehearse.policy_specs import make_policy

SHAPES = ((2, 2, 9), (2, 3, 7), (3, 2, 7), (2, 4, 6), (4, 2, 6))
SCORER = Path(__file__).parents[2] / "models" / "on-time.onnx"
RULES = ("even", "uct", "static-voc", "static-rate", "exact-dynamic-rate", f"scorer:{SCORER}")
SEEDS = 4000  # of Thompson sampling, whose luck is not enumerated


def thompson(actions: int, leaves: int, rollouts: int) -> float:
    """Its mean regret over played decisions."""
    problem, policy = make_problem(f"tree-{actions}x{leaves}^1-winloss"), make_policy("thompson")
    played = (
        decide(problem.draw(seed), policy, Budget(rollouts=rollouts), np.random.default_rng(seed))
        for seed in range(SEEDS)
    )
    return float(np.mean([decided.expected_regret for decided in played]))


def main() -> None:
    names = [make_policy(text).name for text in RULES]
    print("| tree, rollouts | least regret | thompson | " + " | ".join(names) + " |")
    print("| --- | --- | --- | " + " | ".join("---" for _ in names) + " |")
    for shape in SHAPES:
        best = least_regret(*shape)
        over = [thompson(*shape), *(regret_of(make_policy(text), *shape) for text in RULES)]
        actions, leaves, rollouts = shape
        ratios = " | ".join(f"{x / best:.3f}" for x in over)
        print(f"| {actions}x{leaves}, {rollouts} | {best:.4f} | {ratios} |", flush=True)


if __name__ == "__main__":
    main()
