"""`voc-distill train`: fit the front of scorers on a dataset, validate and time each."""

from __future__ import annotations

import argparse

from distill.commands import flags, outputs
from distill.errors import InputError
from distill.files import write_atomic

__all__ = ["HELP", "add_arguments", "run"]

HELP = "fit the front of scorers on a dataset, validate and time each"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The command's flags."""
    parser.add_argument("dataset", metavar="DATASET", help="what generate left")
    parser.add_argument(
        "--out", type=flags.out_folder, required=True, metavar="FOLDER", help="scorer files and front.json"
    )
    flags.add_seed_flag(parser, "the split by trees, learners and intervals")
    parser.add_argument(
        "--latency",
        type=flags.microseconds,
        metavar="40us",
        help="say which scorer is the most accurate within this median time a decision (us, ms or s)",
    )
    parser.add_argument("--show", action="store_true", help="draw the front here, and into FOLDER/front.svg")


def run(args: argparse.Namespace) -> None:
    """Run the command."""
    from distill.report import front_svg
    from distill.sheet import FRONT_FILE, accuracy_table, front_table
    from distill.ship import choose
    from distill.terminal_chart import scatter
    from distill.train import train

    written = [(args.out / FRONT_FILE, outputs.FRONT)]
    if args.show:
        written.append((args.out / "front.svg", outputs.PICTURE))
    outputs.check_outputs(written, [args.dataset])
    front = train(args.dataset, args.out, seed=args.seed, progress=True)
    parts = front["parts"]
    whole = sum(part["trees"] for part in parts.values())
    trees = {name: f"{p['trees']:,} trees ({100 * p['trees'] / whole:.0f} %)" for name, p in parts.items()}
    print(
        f"{args.out}: {len(front['scorers'])} scorers that read the {front['input']}\n"
        f"  fitted on {trees['fit']}; upper bounds calibrated and the front chosen on other "
        f"{trees['choose']};\n  judged on {trees['held_out']} that had no part in either; "
        f"time of one decision over {front['leaves']} leaves\n"
    )
    print("\n".join([*front_table(front["scorers"]), "", *accuracy_table(front["beside"])]))
    if args.show:
        points = [
            (e["latency"]["p50_us"], e["held_out"]["forgone_percent"]["value"], e["recipe"], e["on_front"])
            for e in front["scorers"]
        ]
        print()
        scatter(points, "us a decision, median", "forgone share, %")
        write_atomic(args.out / "front.svg", front_svg(front).encode())
        print(f"\n{args.out / 'front.svg'} shows the same")
    if args.latency is not None:
        try:
            entry, why = choose(front["scorers"], args.latency)
        except InputError:  # what was asked for is there; only no scorer is as fast
            fastest = min(e["latency"]["p50_us"] for e in front["scorers"])
            print(f"\nno scorer decides within {args.latency:g} us; the fastest takes {fastest:.1f} us")
        else:
            print(f"\n{why}: {entry['recipe']}, {args.out / entry['file']}")
