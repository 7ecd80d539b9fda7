"""The command line: reads flags, calls the functions that do the work, prints what they measured.

Exit codes: 0 done, 2 bad input or refused (one line on standard error, nothing written), 130 interrupted.
"""

from __future__ import annotations

import argparse
import contextlib
import json
import math
import os
import sys
import time
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from distill import __version__
from distill.errors import DistillError, InputError
from distill.files import write_atomic

if TYPE_CHECKING:  # the command line must answer --help at once
    from distill.query import Priced, Query
    from distill.tree import BeliefTree

__all__ = ["run"]


def run(argv: Sequence[str]) -> int:
    """Run one command; returns the exit code. No traceback reaches the user for what they can mend."""
    args = _parser().parse_args(argv)
    try:
        code: int = args.command(args) or 0
        sys.stdout.flush()
        return code
    except DistillError as e:
        return _fail(str(e))
    except BrokenPipeError:  # the reader of our output has gone; nothing is left to say
        with contextlib.suppress(OSError):
            os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 141
    except OSError as e:
        where = f"{e.filename}: " if e.filename else ""
        return _fail(f"{where}{e.strerror or e}")
    except KeyboardInterrupt:
        return _fail("interrupted", 130)


def _fail(message: str, code: int = 2) -> int:
    print(f"voc-distill: error: {' '.join(message.split())}", file=sys.stderr)
    return code


# --- flags -----------------------------------------------------------------------------------------


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="voc-distill",
        description="Exact value of computation for belief trees, and fast scorers distilled from it.",
        epilog="A scorer only spends search effort; it is no safety function.",
    )
    parser.add_argument("--version", action="version", version=f"voc-distill {__version__}")
    commands = parser.add_subparsers(title="commands", metavar="COMMAND", required=True)

    price = commands.add_parser("price", help="exact VOC of every candidate of each tree")
    price.add_argument(
        "trees",
        metavar="TREES",
        help="belief-tree/1 records, .jsonl, .jsonl.gz or .json; - reads standard input",
    )
    _add_query_flags(price)
    price.add_argument("--table", action="store_true", help="a readable table instead of JSON Lines")
    price.add_argument("--out", type=Path, metavar="FILE", help="write here instead of standard output")
    price.set_defaults(command=_price)

    generate = commands.add_parser(
        "generate", help="draw or read trees and label them exactly into a dataset"
    )
    source = generate.add_mutually_exclusive_group(required=True)
    source.add_argument(
        "--family", metavar="TOML", help="a family file, or the name of one that comes with the tool"
    )
    source.add_argument("--traces", nargs="+", metavar="FILE", help="recorded trees")
    generate.add_argument("--trees", type=_whole(1), metavar="N", help="how many (traces: default all)")
    generate.add_argument(
        "--out", type=Path, required=True, metavar="FOLDER", help="the dataset; a started one goes on"
    )
    generate.add_argument("--seed", type=_whole(0), default=0)
    generate.add_argument(
        "--workers", type=_whole(1), default=os.cpu_count() or 1, help="processes (default: all cores)"
    )
    _add_query_flags(generate, rate_is_default=True)
    generate.set_defaults(command=_generate)

    train = commands.add_parser("train", help="fit the front of scorers on a dataset, validate and time each")
    train.add_argument("dataset", metavar="DATASET")
    train.add_argument(
        "--out", type=Path, required=True, metavar="FOLDER", help="scorer files and front.json"
    )
    train.add_argument("--seed", type=_whole(0), default=0)
    train.set_defaults(command=_train)

    ship = commands.add_parser(
        "ship", help="copy one scorer of a trained front, with its sheet, to where agents load it"
    )
    ship.add_argument("trained", metavar="FOLDER", help="what train left")
    ship.add_argument("--out", type=Path, required=True, metavar="FILE.onnx")
    which = ship.add_mutually_exclusive_group()
    which.add_argument(
        "--latency",
        type=_microseconds,
        metavar="40us",
        help="most accurate within this median time a decision",
    )
    which.add_argument("--scorer", metavar="NAME", help="by its name on the front")
    ship.set_defaults(command=_ship)

    validate = commands.add_parser("validate", help="a scorer file against exact labels")
    validate.add_argument("scorer", metavar="FILE.onnx")
    validate.add_argument("dataset", metavar="DATASET")
    validate.add_argument("--seed", type=_whole(0), default=0, help="of the bootstrap")
    validate.add_argument("--out", type=Path, metavar="FILE.json", help="write the figures here too")
    validate.set_defaults(command=_validate)

    record = commands.add_parser(
        "record", help="let the reference search play a simulator and record its belief trees"
    )
    record.add_argument("--simulator", required=True, metavar="NAME")
    record.add_argument("--decisions", type=_whole(1), required=True, metavar="N")
    record.add_argument(
        "--rollouts", type=_whole(1), default=128, metavar="R", help="budget of a decision (default 128)"
    )
    record.add_argument("--seed", type=_whole(0), default=0)
    record.add_argument("--out", type=Path, required=True, metavar="FILE", help=".jsonl or .jsonl.gz")
    record.set_defaults(command=_record)

    tour = commands.add_parser("tour", help="the whole job on the sample data, in a few minutes")
    tour.add_argument("out", type=Path, nargs="?", default=Path("tour-out"), metavar="FOLDER")
    tour.set_defaults(command=_tour)
    return parser


def _add_query_flags(parser: argparse.ArgumentParser, rate_is_default: bool = False) -> None:
    parser.add_argument(
        "--value", type=_horizon, metavar="static|dynamic|H",
        help="as if no rollouts followed, as if all uncertainty were resolved, or H more rollouts a leaf",
    )  # fmt: skip
    size = parser.add_mutually_exclusive_group()
    one, rate = ("", " (default)") if rate_is_default else (" (default 1)", "")
    size.add_argument("--batch", type=_whole(1), metavar="K", help=f"rollouts a candidate{one}")
    size.add_argument(
        "--rate", action="store_true", help=f"best VOC a rollout over batches within the rollouts left{rate}"
    )
    parser.add_argument("--remaining", type=_whole(0), metavar="R", help="rollouts left; bounds the rate")
    parser.add_argument(
        "--tolerance", type=_positive, metavar="T",
        help="largest error accepted, as a share of the tree's scale; a method that misses it refuses",
    )  # fmt: skip


def _horizon(text: str) -> float:
    if text in ("static", "dynamic"):
        return 0.0 if text == "static" else math.inf
    try:
        h = float(text)
    except ValueError:
        h = -1.0
    if not h >= 0:
        raise argparse.ArgumentTypeError(f"must be static, dynamic or a number >= 0; got {text!r}")
    return h


def _whole(least: int):  # type: ignore[no-untyped-def]
    def whole(text: str) -> int:
        try:
            n = int(text)
        except ValueError:
            n = least - 1
        if not least <= n <= 2**53:
            raise argparse.ArgumentTypeError(f"must be a whole number from {least} to 2^53; got {text!r}")
        return n

    return whole


def _positive(text: str) -> float:
    try:
        x = float(text)
    except ValueError:
        x = math.nan
    if not 0 < x < math.inf:
        raise argparse.ArgumentTypeError(f"must be a number above 0; got {text!r}")
    return x


def _microseconds(text: str) -> float:
    number = text.removesuffix("us").removesuffix("µs").strip()
    return _positive(number)


# --- price -----------------------------------------------------------------------------------------


def _price(args: argparse.Namespace) -> None:
    from distill import traces, voc
    from distill.query import resolve, to_output

    lines: list[str] = []
    for place, tree in traces.read_trees(args.trees):
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
            raise e.at(place) from None
        except DistillError as e:
            raise type(e)(f"{place}: {e}") from None
        if args.table:
            lines.append(_price_table(tree, query, priced))
        else:
            lines.append(json.dumps(to_output(tree, query, priced)))
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
        f"  {'leaf':>{width + 4}}  {'VOC':>12}  {'net':>12}  {'batch':>8}  {'error <':>9}",
    ]
    for i in range(len(net)):
        mark = " <- best" if i == best else ""
        lines.append(
            f"  {i:>{width + 4}}  {priced.voc[i]:>12.6g}  {net[i]:>12.6g}  {priced.batch[i]:>8}"
            f"  {priced.error[i]:>9.1e}{mark}"
        )
    return "\n".join(lines) + "\n"


# --- the other commands ----------------------------------------------------------------------------


def _generate(args: argparse.Namespace) -> None:
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


def _train(args: argparse.Namespace) -> None:
    from distill.sheet import accuracy_table, front_table
    from distill.train import train

    front = train(args.dataset, args.out, seed=args.seed, progress=True)
    parts = front["parts"]
    print(
        f"{args.out}: {len(front['scorers'])} scorers from {parts['fit']['trees']:,} trees, judged on "
        f"{parts['held_out']['trees']:,} held-out trees; time of one decision over {front['leaves']} leaves\n"
    )
    print("\n".join([*front_table(front["scorers"]), "", *accuracy_table(front["beside"])]))


def _ship(args: argparse.Namespace) -> None:
    from distill.ship import ship

    sheet = ship(args.trained, args.out, latency_us=args.latency, scorer=args.scorer)
    print(f"{args.out}: {sheet['recipe']}, {sheet['chosen']}; its sheet stands beside it as .json and .md")


def _validate(args: argparse.Namespace) -> None:
    from distill.sheet import accuracy_table
    from distill.validate import validate

    figures = validate(args.scorer, args.dataset, seed=args.seed)
    accuracy = figures["accuracy"]
    which = "held-out trees" if figures["part"] == "held_out" else "trees"
    print(f"{args.scorer} on {accuracy['trees']:,} {which} of {args.dataset}\n")
    print("\n".join(accuracy_table({"the scorer": accuracy, **figures["beside"]})))
    if args.out:
        write_atomic(args.out, (json.dumps(figures, indent=1) + "\n").encode())


def _record(args: argparse.Namespace) -> None:
    from distill.rehearse.record import record_traces
    from distill.terminal import bar

    with bar("recording", args.decisions, "decisions") as advance:
        done = record_traces(
            args.simulator,
            args.out,
            decisions=args.decisions,
            rollouts=args.rollouts,
            seed=args.seed,
            progress=advance,
        )
    print(f"{args.out}: {done.trees:,} trees of {done.decisions:,} decisions, {done.size:,} bytes")


def _tour(args: argparse.Namespace) -> None:
    from distill.tour import tour

    tour(args.out)
