"""On-policy rounds against as many more trees of the family: python tests/bench/rehearse_rounds.py OUT

Trains the dense scorer on a family dataset, then three times on what it grows to: once with the trees that
its own search meets, once with as many further trees of the family. Prints the losses of every round on
trees that the scorers' searches met, and the regret of every scorer in closed loop, on the same decisions.
"""

from __future__ import annotations

import argparse
import json
from dataclasses import asdict
from pathlib import Path

from distill.family import draw, load_family
from distill.files import write_atomic
from distill.generate import Traces, generate
from distill.rehearse.catalogue import make_problem
from distill.rehearse.loop import Budget
from distill.rehearse.on_policy import aggregate
from distill.rehearse.rehearsal import rehearse
from distill.rehearse.value_policies import ByScorer
from distill.sample_data import FAMILIES

PROBLEMS = ("tree-2x8^1-noise1", "tree-4x4^1-noise4", "cliff_walking")


def main() -> None:
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("out", type=Path)
    parser.add_argument("--trees", type=int, default=4000, help="of the family, before the first round")
    parser.add_argument("--decisions", type=int, default=150, help="recorded a problem and round")
    parser.add_argument("--seeds", type=int, default=400, help="decisions that each scorer is rehearsed on")
    parser.add_argument("--recipe", default="dense 32-32")
    args = parser.parse_args()
    family = load_family(FAMILIES / "cold-store.toml")
    problems = [make_problem(name) for name in PROBLEMS]
    generate(family, args.out / "base", trees=args.trees, seed=3)
    found = {}
    per_round = 5 * args.decisions * len(problems)

    def more_of_the_family(number: int) -> Traces:
        first = args.trees + number * per_round
        return Traces(f"family {number}", [draw(family, 3, first + i) for i in range(per_round)])

    for way, added in (("met", None), ("family", more_of_the_family)):
        rounds = aggregate(
            args.out / "base",
            problems,
            args.out / way,
            decisions=args.decisions,
            recipe=args.recipe,
            added=added,
        )
        policies = [ByScorer(r.scorer) for r in rounds]
        cells = rehearse(
            problems, policies, [Budget(rollouts=128)], args.out / f"cells-{way}", seeds=args.seeds
        )
        rows = []
        for r in rounds:
            mine = [c for c in cells if c.policy == r.scorer.stem]
            regret = {c.problem: float(c.measured.mean()) for c in mine}
            rows.append({**asdict(r), "scorer": r.scorer.name, "regret": regret})
            print(
                f"{way} round {r.number}: {r.added} added, forgone {r.pooled:.3f} % on all trees met "
                f"({r.forgone:.3f} % on its own), regret "
                + ", ".join(f"{problem} {x:.4f}" for problem, x in regret.items()),
                flush=True,
            )
        found[way] = rows
    write_atomic(args.out / "rounds.json", (json.dumps(found, indent=1) + "\n").encode())


if __name__ == "__main__":
    main()
