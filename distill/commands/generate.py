"""`voc-distill generate`: draw or read trees and label them exactly into a dataset; `--add` to one."""

from __future__ import annotations

import argparse
import os
import time
from typing import TYPE_CHECKING

from distill.commands import flags
from distill.errors import InputError

if TYPE_CHECKING:  # --help must answer at once
    from distill.generate import Traces
    from distill.traces import BadLines

__all__ = ["HELP", "add_arguments", "run"]

HELP = "draw or read trees and label them exactly into a dataset"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The command's flags."""
    parser.add_argument(
        "--family", metavar="TOML", help="a family file, or the name of one that comes with the tool"
    )
    parser.add_argument("--traces", nargs="+", metavar="FILE", help="recorded trees; with --family, a mix")
    parser.add_argument(
        "--share", type=flags.positive, metavar="S",
        help="of a mix, the share of recorded trees (default: each of them once)",
    )  # fmt: skip
    parser.add_argument(
        "--add", nargs="+", metavar="FILE",
        help="recorded trees to add to the finished dataset --out, asked what it asks; none twice",
    )  # fmt: skip
    parser.add_argument("--trees", type=flags.whole(1), metavar="N", help="how many (traces: default all)")
    parser.add_argument(
        "--out",
        type=flags.out_folder,
        required=True,
        metavar="FOLDER",
        help="the dataset; a started one goes on",
    )
    parser.add_argument("--seed", type=flags.whole(0), metavar="S", help="of draws and samples (default 0)")
    parser.add_argument(
        "--close-calls", type=flags.whole(1), metavar="N",
        help="look at N trees for each one labelled and prefer close calls; weights correct for it",
    )  # fmt: skip
    parser.add_argument(
        "--shard-trees", type=flags.whole(1), metavar="N",
        help="trees a shard, the step in which work is saved (default: a hundredth of all, 50 to 1,000)",
    )  # fmt: skip
    place = parser.add_mutually_exclusive_group()
    place.add_argument(
        "--workers", type=flags.whole(1), default=os.cpu_count() or 1, help="processes (default: all cores)"
    )
    place.add_argument(
        "--dask", metavar="ADDRESS", help="scheduler of a Dask cluster, whose workers label instead"
    )
    flags.add_query_flags(parser, rate_is_default=True)
    flags.add_strict_flag(parser)


def run(args: argparse.Namespace) -> None:
    """Run the command."""
    from distill.family import load_family
    from distill.generate import Asked, Mix, add, generate
    from distill.sample_data import family_path
    from distill.shards import read_manifest
    from distill.sources import Source
    from distill.traces import BadLines

    _check(args)
    bad = BadLines(args.strict)
    start = time.perf_counter()
    where = {"workers": args.workers, "dask": args.dask, "progress": True}
    if args.add:
        given = _recorded(args.add, bad)
        before = read_manifest(args.out, partial=True)["totals"].get("trees", 0)
        manifest = add(given, args.out, **where)
        print(
            f"{len(given):,} trees given, {manifest['totals']['trees'] - before:,} of them new and labelled"
        )
    else:
        source: Source
        if not args.family:
            source = _recorded(args.traces, bad)
        else:
            source = load_family(family_path(args.family))
            if args.traces:
                source = Mix(source, _recorded(args.traces, bad), args.share)
        manifest = generate(
            source,
            args.out,
            trees=args.trees,
            seed=args.seed or 0,
            asked=Asked(args.value, args.batch, args.remaining, args.tolerance),
            shard_trees=args.shard_trees,
            close_calls=args.close_calls or 1,
            **where,
        )
    flags.say_bad_lines(bad)
    totals = manifest["totals"]
    print(
        f"{args.out}: {totals['trees']:,} trees, {totals['candidates']:,} exact labels, "
        f"{totals['aside']:,} trees set aside, in {time.perf_counter() - start:.1f} s"
    )


def _recorded(paths: list[str], bad: BadLines) -> Traces:
    """Traces without their bad records, which `bad` takes in."""
    from distill.generate import Traces
    from distill.traces import none_valid

    found = Traces.read(paths, on_error=bad)
    if len(found) == 0:
        raise none_valid(paths, bad)
    return found


def _check(args: argparse.Namespace) -> None:
    """Flags that do not go together."""
    if args.add:
        own = ("family", "traces", "share", "trees", "seed", "close_calls", "value", "batch", "remaining")
        for name in (*own, "tolerance", "shard_trees"):
            if getattr(args, name) is not None:
                flag = "--" + name.replace("_", "-")
                raise InputError(flag, "must not be given with --add: the dataset says it")
    elif not args.family and not args.traces:
        raise InputError("generate", "needs --family, --traces, both, or --add")
    elif args.share is not None and not (args.family and args.traces):
        raise InputError("--share", "must come with --family and --traces")
