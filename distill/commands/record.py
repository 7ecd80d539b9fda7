"""`voc-distill record`: let the reference search play a simulator and record its belief trees."""

from __future__ import annotations

import argparse
from pathlib import Path

from distill.commands import flags

__all__ = ["HELP", "add_arguments", "run"]

HELP = "let the reference search play a simulator and record its belief trees"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The command's flags."""
    parser.add_argument("--simulator", required=True, metavar="NAME")
    parser.add_argument("--decisions", type=flags.whole(1), required=True, metavar="N")
    parser.add_argument(
        "--rollouts", type=flags.whole(1), default=128, metavar="R", help="budget of a decision (default 128)"
    )
    parser.add_argument("--seed", type=flags.whole(0), default=0)
    parser.add_argument("--out", type=Path, required=True, metavar="FILE", help=".jsonl or .jsonl.gz")


def run(args: argparse.Namespace) -> None:
    """Run the command."""
    from distill.rehearse.record import record_traces
    from distill.terminal import bar

    with bar("recording", args.decisions, "decisions") as advance:
        done = record_traces(
            args.simulator,
            args.out,
            decisions=args.decisions,
            rollouts=args.rollouts,
            seed=args.seed,
            progress=advance,
        )
    print(f"{args.out}: {done.trees:,} trees of {done.decisions:,} decisions, {done.size:,} bytes")
