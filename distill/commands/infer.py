"""`voc-distill infer`: from recorded trees to a family, with intervals, and what does not fit."""

from __future__ import annotations

import argparse
import textwrap
from typing import Any

from distill.commands import flags, outputs

__all__ = ["HELP", "add_arguments", "run"]

HELP = "from recorded trees to a family file, with intervals, and what does not fit it"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The command's flags."""
    parser.add_argument("traces", nargs="+", metavar="TRACES", help="recorded trees")
    parser.add_argument(
        "--out",
        type=flags.out_file,
        required=True,
        metavar="FILE.toml",
        help="the family file; only one that infer wrote is replaced",
    )
    parser.add_argument("--page", type=flags.out_file, metavar="FILE.html", help="a page with pictures")
    flags.add_seed_flag(parser, "the intervals and drawn trees")
    flags.add_strict_flag(parser)


def run(args: argparse.Namespace) -> None:
    """Run the command."""
    from distill.infer import infer_files
    from distill.traces import BadLines
    from distill.tree_columns import COLUMNS

    outputs.check_outputs([(args.out, outputs.FAMILY), (args.page, outputs.PAGE)], args.traces)
    bad = BadLines(args.strict)
    figures = infer_files(args.traces, args.out, seed=args.seed, bad=bad).figures
    flags.say_bad_lines(bad)
    if args.page:
        from distill.report.infer_page import write_infer_page

        write_infer_page(figures, args.page)
    belief = {"gaussian": "Gaussian", "win_loss": "win/loss"}[figures["belief"]]
    print(
        f"{args.out}: a {belief} family from {figures['trees']:,} trees of "
        f"{figures['decisions']:,} decisions; {100 * figures['level']:g} % intervals\n"
    )
    width = max(map(len, figures["parameters"]))
    unit = max(len(e["unit"]) for e in figures["parameters"].values())
    for name, e in figures["parameters"].items():
        print(f"  {name:<{width}}  {e['unit']:<{unit}}  {_stated(e)}")
    print("\nWhat fits, and what does not; brackets are 99 % intervals")
    for f in figures["findings"]:
        text = f"{f['verdict']}: {f['words']}"
        print(textwrap.fill(text, 100, initial_indent="  ", subsequent_indent="    "))
    print("\nMedians in the traces and in trees drawn from the family; distance 0 (alike) to 1; what it is")
    compared = figures["compared"]
    middle = compared["at"].index(0.5)
    for name, row in compared["columns"].items():
        seen, drawn = (f"{row[k][middle]:.4g}" if row[k] else "-" for k in ("traces", "drawn"))
        print(f"  {name:<{width}}  {seen:>10}  {drawn:>10}  {row['distance']:.2f}  {COLUMNS[name]}")


def _stated(e: dict[str, Any]) -> str:
    if e["value"] is None:
        return "not to be told from these traces"
    if e["low"] is None or e["high"] is None:
        return f"{e['value']:.4g}"
    return f"{e['value']:.4g} [{e['low']:.4g}, {e['high']:.4g}]"
