"""`voc-distill train`: fit the front of scorers on a dataset, validate and time each."""

from __future__ import annotations

import argparse
from pathlib import Path

from distill.commands import flags

__all__ = ["HELP", "add_arguments", "run"]

HELP = "fit the front of scorers on a dataset, validate and time each"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The command's flags."""
    parser.add_argument("dataset", metavar="DATASET")
    parser.add_argument(
        "--out", type=Path, required=True, metavar="FOLDER", help="scorer files and front.json"
    )
    parser.add_argument("--seed", type=flags.whole(0), default=0)


def run(args: argparse.Namespace) -> None:
    """Run the command."""
    from distill.sheet import accuracy_table, front_table
    from distill.train import train

    front = train(args.dataset, args.out, seed=args.seed, progress=True)
    parts = front["parts"]
    print(
        f"{args.out}: {len(front['scorers'])} scorers from {parts['fit']['trees']:,} trees, judged on "
        f"{parts['held_out']['trees']:,} held-out trees; time of one decision over {front['leaves']} leaves\n"
    )
    print("\n".join([*front_table(front["scorers"]), "", *accuracy_table(front["beside"])]))
