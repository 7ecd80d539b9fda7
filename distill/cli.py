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
from collections.abc import Sequence
from pathlib import Path

from distill import __version__
from distill.errors import DistillError, InputError
from distill.files import write_atomic

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
    price.add_argument("trees", metavar="TREES", help="belief-tree/1 records, .jsonl, .jsonl.gz or .json; - reads standard input")
    _add_query_flags(price)
    price.add_argument("--table", action="store_true", help="a readable table instead of JSON Lines")
    price.add_argument("--out", type=Path, metavar="FILE", help="write here instead of standard output")
    price.set_defaults(command=_price)
    return parser


def _add_query_flags(parser: argparse.ArgumentParser) -> None:
    parser.add_argument(
        "--value", type=_horizon, metavar="static|dynamic|H",
        help="which value: as if no rollouts followed, as if all uncertainty were resolved, or H rollouts a leaf",
    )  # fmt: skip
    size = parser.add_mutually_exclusive_group()
    size.add_argument("--batch", type=_whole(1), metavar="K", help="rollouts a candidate (default 1)")
    size.add_argument("--rate", action="store_true", help="best VOC a rollout over batches within the rollouts left")
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
