"""The command line: reads flags, calls the functions that do the work, prints what they measured.

Exit codes: 0 done, 2 bad input or refused (one line on standard error, nothing written), 3 a scorer worse
than promised (audit), 130 interrupted.
"""

from __future__ import annotations

import argparse
import contextlib
import errno
import os
import sys
from collections.abc import Sequence
from typing import NoReturn

from distill import __version__
from distill.commands import (
    audit,
    generate,
    infer,
    look,
    price,
    record,
    rehearse,
    report,
    ship,
    tour,
    train,
    validate,
)
from distill.errors import DistillError

__all__ = ["run"]

_FULL = (errno.ENOSPC, errno.EDQUOT, errno.EFBIG, errno.EIO)
_COMMANDS = (price, infer, generate, look, train, ship, validate, audit, report, rehearse, record, tour)


def run(argv: Sequence[str]) -> int:
    """Run one command; returns the exit code. No traceback reaches the user for what they can mend."""
    try:
        args = _parser().parse_args(argv)  # which looks at the places to write to
        code: int = args.command(args) or 0
        sys.stdout.flush()
        return code
    except DistillError as e:
        return _fail(str(e))
    except BrokenPipeError:  # the reader of our output has gone; nothing is left to say
        _drop_output()
        return 141
    except OSError as e:
        where = f"{e.filename}: " if e.filename else ""
        if not where and e.errno in _FULL:  # files that we write are named
            where = "standard output: "
            _drop_output()
        return _fail(f"{where}{e.strerror or e}")
    except KeyboardInterrupt:
        return _fail("interrupted", 130)


def _drop_output() -> None:
    """What was not written yet would fail again at exit."""
    with contextlib.suppress(OSError):
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def _fail(message: str, code: int = 2) -> int:
    print(f"voc-distill: error: {' '.join(message.split())}", file=sys.stderr)
    return code


class _Parser(argparse.ArgumentParser):
    """Says a mistake in one line, as every other error is said."""

    def error(self, message: str) -> NoReturn:
        sys.exit(_fail(f"{message} ({self.prog} --help)"))


def _parser() -> argparse.ArgumentParser:
    parser = _Parser(
        prog="voc-distill",
        description="Exact value of computation for belief trees, and fast scorers distilled from it.",
        epilog="A scorer only spends search effort; it is no safety function.",
    )
    parser.add_argument("--version", action="version", version=f"voc-distill {__version__}")
    commands = parser.add_subparsers(title="commands", metavar="COMMAND", required=True)
    for command in _COMMANDS:
        name = command.__name__.rpartition(".")[2]
        sub = commands.add_parser(name, help=command.HELP)
        command.add_arguments(sub)
        sub.set_defaults(command=command.run)
    return parser
