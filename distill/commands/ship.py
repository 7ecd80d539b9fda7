"""`voc-distill ship`: copy one scorer of a trained front, with its sheet, to where agents load it."""

from __future__ import annotations

import argparse

from distill.commands import flags, outputs

__all__ = ["HELP", "add_arguments", "run"]

HELP = "copy one scorer of a trained front, with its sheet, to where agents load it"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The command's flags."""
    parser.add_argument("trained", metavar="FOLDER", help="what train left")
    parser.add_argument(
        "--out",
        type=flags.out_file,
        required=True,
        metavar="FILE.onnx",
        help="the scorer; its sheet goes beside it as .json and .md",
    )
    which = parser.add_mutually_exclusive_group()
    which.add_argument(
        "--latency",
        type=flags.microseconds,
        metavar="40us",
        help="only those within this median time a decision (us, ms or s). Without --scorer the fastest of "
        "the most accurate is shipped, all within a standard error counting as that",
    )
    which.add_argument("--scorer", metavar="NAME", help="by its name on the front")


def run(args: argparse.Namespace) -> None:
    """Run the command."""
    from distill.ship import ship

    if args.out.suffix == ".onnx":  # any other is refused by ship
        outputs.check_outputs(
            [
                (args.out, outputs.SCORER),
                (args.out.with_suffix(".json"), outputs.SHEET),
                (args.out.with_suffix(".md"), outputs.SHEET_PAGE),
            ],
            [args.trained],
        )
    sheet = ship(args.trained, args.out, latency_us=args.latency, scorer=args.scorer)
    print(f"{args.out}: {sheet['recipe']}, {sheet['chosen']}; its sheet stands beside it as .json and .md")
