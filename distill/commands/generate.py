"""`voc-distill generate`: draw or read trees and label them exactly into a dataset."""

from __future__ import annotations

import argparse
import os
import time
from pathlib import Path

from distill.commands import flags

__all__ = ["HELP", "add_arguments", "run"]

HELP = "draw or read trees and label them exactly into a dataset"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The command's flags."""
    source = parser.add_mutually_exclusive_group(required=True)
    source.add_argument(
        "--family", metavar="TOML", help="a family file, or the name of one that comes with the tool"
    )
    source.add_argument("--traces", nargs="+", metavar="FILE", help="recorded trees")
    parser.add_argument("--trees", type=flags.whole(1), metavar="N", help="how many (traces: default all)")
    parser.add_argument(
        "--out", type=Path, required=True, metavar="FOLDER", help="the dataset; a started one goes on"
    )
    parser.add_argument("--seed", type=flags.whole(0), default=0)
    parser.add_argument(
        "--workers", type=flags.whole(1), default=os.cpu_count() or 1, help="processes (default: all cores)"
    )
    flags.add_query_flags(parser, rate_is_default=True)


def run(args: argparse.Namespace) -> None:
    """Run the command."""
    from distill.family import load_family
    from distill.generate import Asked, Traces, generate
    from distill.sample_data import family_path

    source = Traces.read(args.traces) if args.traces else load_family(family_path(args.family))
    asked = Asked(args.value, args.batch, args.remaining, args.tolerance)
    start = time.perf_counter()
    manifest = generate(
        source, args.out, trees=args.trees, seed=args.seed, asked=asked, workers=args.workers, progress=True
    )
    totals = manifest["totals"]
    print(
        f"{args.out}: {totals['trees']:,} trees, {totals['candidates']:,} exact labels, "
        f"{totals['aside']:,} trees set aside, in {time.perf_counter() - start:.1f} s"
    )
