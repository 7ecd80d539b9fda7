"""`voc-distill tour`: the whole job on the sample data, in a few minutes."""

from __future__ import annotations

import argparse
from pathlib import Path

from distill.commands import flags

__all__ = ["HELP", "add_arguments", "run"]

HELP = "the whole job on the sample data, in a few minutes"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The command's flags."""
    parser.add_argument(
        "out",
        type=flags.out_folder,
        nargs="?",
        default=Path("tour-out"),
        metavar="FOLDER",
        help="what it leaves goes here; an earlier tour's is replaced (default tour-out)",
    )


def run(args: argparse.Namespace) -> None:
    """Run the command."""
    from distill.tour import tour

    tour(args.out)
