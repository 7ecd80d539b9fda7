"""`voc-distill tour`: the whole job on the sample data, in a few minutes."""

from __future__ import annotations

import argparse
from pathlib import Path

from distill.commands import flags, outputs

__all__ = ["HELP", "add_arguments", "run"]

_SCORERS = ("scorer.onnx", "scorer-fast.onnx", "scorer-traces.onnx")
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

    written = [(args.out / name, outputs.TOUR_SCORER) for name in _SCORERS]
    written += [(file.with_suffix(".json"), outputs.SHEET) for file, _ in written]
    written += [
        (args.out / "summary.json", outputs.SUMMARY),
        (args.out / "summary.md", outputs.SUMMARY_PAGE),
        (args.out / "report.html", outputs.PAGE),
    ]
    outputs.check_outputs(written, [])
    tour(args.out)
