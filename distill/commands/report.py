"""`voc-distill report`: one page with pictures from figures that other commands left."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import Any

from distill.commands import flags, outputs

__all__ = ["HELP", "add_arguments", "run"]

HELP = "one page with pictures, from the figures of train, ship or a tour"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The command's flags."""
    parser.add_argument(
        "figures",
        type=Path,
        metavar="FILE.json",
        help="front.json, a sheet, a tour's summary, or train's folder",
    )
    parser.add_argument(
        "--shifts",
        type=Path,
        metavar="FILE.json",
        help="what validate --shift --out left: how the scorer does on trees unlike those of training",
    )
    parser.add_argument("--out", type=flags.out_file, required=True, metavar="PAGE.html")


def run(args: argparse.Namespace) -> None:
    """Run the command."""
    from distill.errors import InputError
    from distill.report import write_page
    from distill.sheet import FRONT_FILE

    outputs.check_outputs([(args.out, outputs.PAGE)], [args.figures, args.shifts])
    figures = _read(args.figures / FRONT_FILE if args.figures.is_dir() else args.figures)
    if args.shifts is not None:
        shifts = _read(args.shifts).get("shifts")
        if not shifts:
            raise InputError(str(args.shifts), "must hold shifts, as validate --shift --out leaves them")
        figures["shifts"] = shifts
    if "scorer" not in figures and "format" not in figures:
        rule = "must hold the figures of train, ship or a tour; those of validate --shift go to --shifts"
        raise InputError(str(args.figures), rule)
    try:
        write_page(figures, args.out)
    except InputError as e:
        if not e.place.startswith("report"):
            raise
        raise InputError(f"{args.figures}{e.place.removeprefix('report')}", e.rule, *e.value) from None
    print(f"{args.out}: one page, no other files needed")


def _read(path: Path) -> dict[str, Any]:
    from distill.errors import InputError
    from distill.files import read_json

    figures = read_json(path)
    if not isinstance(figures, dict):
        raise InputError(str(path), "must hold the figures of train, ship or a tour")
    return figures
