"""`voc-distill validate`: a scorer file against exact labels."""

from __future__ import annotations

import argparse
import json
from pathlib import Path

from distill.commands import flags
from distill.files import write_atomic

__all__ = ["HELP", "add_arguments", "run"]

HELP = "a scorer file against exact labels"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The command's flags."""
    parser.add_argument("scorer", metavar="FILE.onnx")
    parser.add_argument("dataset", metavar="DATASET")
    parser.add_argument("--seed", type=flags.whole(0), default=0, help="of the bootstrap")
    parser.add_argument("--out", type=Path, metavar="FILE.json", help="write the figures here too")


def run(args: argparse.Namespace) -> None:
    """Run the command."""
    from distill.sheet import accuracy_table, bound_text
    from distill.validate import validate

    figures = validate(args.scorer, args.dataset, seed=args.seed)
    accuracy = figures["accuracy"]
    which = "held-out trees" if figures["part"] == "held_out" else "trees"
    print(f"{args.scorer} on {accuracy['trees']:,} {which} of {args.dataset}\n")
    print("\n".join(accuracy_table({"the scorer": accuracy, **figures["beside"]})))
    print()
    print("\n".join(bound_text(accuracy["calibration"])))
    if args.out:
        write_atomic(args.out, (json.dumps(figures, indent=1) + "\n").encode())
