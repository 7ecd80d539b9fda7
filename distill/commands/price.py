"""`voc-distill price`: exact VOC of every candidate of each tree."""

from __future__ import annotations

import argparse
import json
import math
import sys
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from distill.commands import flags, outputs
from distill.errors import DistillError, InputError
from distill.files import write_atomic

if TYPE_CHECKING:  # --help must answer at once
    from distill.query import Priced, Query
    from distill.tree import BeliefTree

__all__ = ["HELP", "add_arguments", "run"]

HELP = "exact VOC of every candidate of each tree"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The command's flags."""
    parser.add_argument(
        "trees",
        nargs="+",
        metavar="TREES",
        help="belief-tree/1 records, .jsonl, .jsonl.gz or .json; - reads standard input",
    )
    parser.epilog = (
        "A flag goes before what a record says: --value, --batch and --remaining hold for all of them."
    )
    flags.add_query_flags(parser)
    parser.add_argument("--table", action="store_true", help="a readable table instead of JSON Lines")
    parser.add_argument(
        "--out", type=flags.out_file, metavar="FILE", help="write here instead of standard output"
    )
    bad = parser.add_mutually_exclusive_group()
    bad.add_argument(
        "--strict", action="store_true",
        help="stop at the first bad record and write nothing: the default here, where lines answer lines",
    )  # fmt: skip
    bad.add_argument(
        "--skip-bad", action="store_true",
        help="pass over records that are bad or cannot be priced as asked; their number and lines go to "
        "standard error",
    )  # fmt: skip


def run(args: argparse.Namespace) -> None:
    """Run the command."""
    from distill import traces, voc
    from distill.query import resolve, to_output

    outputs.check_outputs([(args.out, outputs.PRICED)], args.trees)
    lines: list[str] = []
    bad = traces.BadLines(strict=not args.skip_bad)
    for place, tree in traces.read_many(args.trees, bad):
        try:
            query = resolve(
                tree,
                horizon=args.value,
                batch=args.batch,
                rate=args.rate,
                remaining=args.remaining,
                tolerance=args.tolerance,
            )
            priced = voc.price(tree, query)
        except InputError as e:
            bad(e.at(place))
            continue
        except DistillError as e:
            if not args.skip_bad:
                raise type(e)(f"{place}: {e}") from None
            bad(InputError(place, str(e)))
            continue
        if args.table:
            lines.append(_price_table(tree, query, priced))
        else:
            lines.append(json.dumps(to_output(tree, query, priced)))
    if not lines:
        raise traces.none_valid(args.trees, bad)
    flags.say_bad_lines(bad)
    _emit("\n".join(lines) + "\n", args.out)


def _emit(text: str, out: Path | None) -> None:
    if out is None:
        sys.stdout.write(text)
    else:
        write_atomic(out, text.encode())


def _price_table(tree: BeliefTree, query: Query, priced: Priced) -> str:
    """One tree for people: value per root action, then a row a leaf, the best net value marked."""
    from distill.query import net_value

    which = {0.0: "static", math.inf: "dynamic"}.get(query.horizon, f"horizon {query.horizon:g}")
    unit = "a rollout, best batch" if query.rate else f"of {query.batch} rollout{'s' * (query.batch != 1)}"
    net = net_value(tree, query, priced)
    best = int(np.argmax(net))
    width = len(str(len(priced.voc)))
    lines = [
        f"tree {tree.id if tree.id is not None else '-'}: {which} VOC {unit}; {priced.method}",
        "  root action values: " + ", ".join(f"{v:.6g}" for v in priced.value),
        f"  net: VOC less what {'a rollout' if query.rate else 'the rollouts'} there cost{'s' * query.rate}",
        f"  {'leaf':>{width + 4}}  {'VOC':>12}  {'net':>12}  {'batch':>8}  {'error <':>9}",
    ]
    for i in range(len(net)):
        mark = " <- best" if i == best else ""
        lines.append(
            f"  {i:>{width + 4}}  {priced.voc[i]:>12.6g}  {net[i]:>12.6g}  {priced.batch[i]:>8}"
            f"  {priced.error[i]:>9.1e}{mark}"
        )
    return "\n".join(lines) + "\n"
