"""Flags that several commands share, and how their texts are read."""

from __future__ import annotations

import argparse
import math
import os
import re
import sys
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING

from distill.files import is_stream

if TYPE_CHECKING:  # --help must answer at once
    from distill.traces import BadLines

__all__ = [
    "add_query_flags",
    "add_seed_flag",
    "add_strict_flag",
    "say_bad_lines",
    "horizon",
    "microseconds",
    "positive",
    "whole",
]


_IN_MICROSECONDS = {"us": 1.0, "µs": 1.0, "μs": 1.0, "ms": 1e3, "s": 1e6}


def add_query_flags(parser: argparse.ArgumentParser, rate_is_default: bool = False) -> None:
    """--value, --batch or --rate, --remaining and --tolerance: what is asked of each tree."""
    parser.add_argument(
        "--value", type=horizon, metavar="static|dynamic|H",
        help="as if no rollouts followed, as if all uncertainty were resolved, or H more rollouts a leaf "
        "(default: each tree's own horizon, else dynamic)",
    )  # fmt: skip
    size = parser.add_mutually_exclusive_group()
    one, rate = ("", " (default)") if rate_is_default else (" (default: each tree's own, else 1)", "")
    if rate_is_default:
        size.add_argument(
            "--batch", type=_batch, metavar="K|tree",
            help="rollouts a candidate, or tree: each tree's own, for a scorer that takes it with each call",
        )  # fmt: skip
    else:
        size.add_argument("--batch", type=whole(1), metavar="K", help=f"rollouts a candidate{one}")
    size.add_argument(
        "--rate", action="store_true", help=f"best VOC a rollout over batches within the rollouts left{rate}"
    )
    parser.add_argument(
        "--remaining", type=whole(0), metavar="R",
        help="rollouts left; bounds the rate (default: each tree's own)",
    )  # fmt: skip
    parser.add_argument(
        "--tolerance", type=positive, metavar="T",
        help="largest error accepted, as a share of the tree's scale; a method that misses it refuses "
        "(default: what the method reaches)",
    )  # fmt: skip


def add_seed_flag(parser: argparse.ArgumentParser, of: str) -> None:
    """--seed, 0 by default. of : what it is the seed of."""
    parser.add_argument("--seed", type=whole(0), default=0, metavar="S", help=f"of {of} (default 0)")


def add_strict_flag(parser: argparse.ArgumentParser) -> None:
    """--strict, for commands that pass over bad records of traces and say which."""
    parser.add_argument(
        "--strict", action="store_true",
        help="stop at the first bad record of a trace; by default bad ones are passed over, and their number "
        "and lines go to standard error",
    )  # fmt: skip


def say_bad_lines(bad: BadLines) -> None:
    """Which records of traces were passed over, on standard error."""
    if bad.count:
        print(f"voc-distill: {bad.report()}", file=sys.stderr)


def horizon(text: str) -> float:
    """static, dynamic, or rollouts a leaf."""
    if text in ("static", "dynamic"):
        return 0.0 if text == "static" else math.inf
    try:
        h = float(text)
    except ValueError:
        h = -1.0
    if not h >= 0:
        raise argparse.ArgumentTypeError(f"must be static, dynamic or a number >= 0; got {text!r}")
    return h


def whole(least: int) -> Callable[[str], int]:
    """A whole number from `least` to 2^53."""

    def parse(text: str) -> int:
        try:
            n = int(text)
        except ValueError:
            n = least - 1
        if not least <= n <= 2**53:
            raise argparse.ArgumentTypeError(f"must be a whole number from {least} to 2^53; got {text!r}")
        return n

    return parse


def _batch(text: str) -> int | str:
    """Rollouts a candidate, or `tree`."""
    return text if text == "tree" else whole(1)(text)


def out_file(text: str) -> Path:
    """A file to write; refused before any work where it cannot be."""
    path = Path(text)
    if path.is_dir():
        raise argparse.ArgumentTypeError(f"must be a file, not a folder; got {text!r}")
    if is_stream(path):  # /dev/stdout, a pipe: written through
        return path
    if path.exists() and not path.is_file():
        raise argparse.ArgumentTypeError(f"must be a regular file, a pipe or a new name; got {text!r}")
    if path.exists() and not os.access(path, os.W_OK):
        raise argparse.ArgumentTypeError(f"must be a file that may be written; got {text!r}")
    _open_to_writing(path.resolve().parent, text)
    return path


def out_folder(text: str) -> Path:
    """A folder to write into; refused before any work where it cannot be."""
    path = Path(text)
    if path.exists() and not path.is_dir():
        raise argparse.ArgumentTypeError(f"must be a folder, and a file is there; got {text!r}")
    _open_to_writing(path, text)
    return path


def _open_to_writing(folder: Path, text: str) -> None:
    there = next(p for p in (folder, *folder.absolute().parents) if p.exists())
    if not there.is_dir():
        raise argparse.ArgumentTypeError(f"must stand in a folder, and {there} is none; got {text!r}")
    if not os.access(there, os.W_OK | os.X_OK):
        raise argparse.ArgumentTypeError(f"must stand in a folder that can be written to; got {text!r}")


def positive(text: str) -> float:
    """A finite number above 0."""
    try:
        x = float(text)
    except ValueError:
        x = math.nan
    if not 0 < x < math.inf:
        raise argparse.ArgumentTypeError(f"must be a number above 0; got {text!r}")
    return x


def microseconds(text: str) -> float:
    """A time such as 40us or 1ms, in microseconds; a bare number is of microseconds."""
    found = re.fullmatch(r"\s*([^a-zµμ]+(?:e[+-]?\d+)?)\s*(us|µs|μs|ms|s)?\s*", text)
    try:
        us = float(found[1]) * _IN_MICROSECONDS[found[2] or "us"] if found else math.nan
    except ValueError:
        us = math.nan
    if not 0 < us < math.inf:
        raise argparse.ArgumentTypeError(f"must be a time above 0 in us, ms or s, such as 40us; got {text!r}")
    return us
