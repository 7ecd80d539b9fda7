"""`voc-distill rehearse`: policies compared in closed-loop search, at equal rollouts and at equal time."""

from __future__ import annotations

import argparse
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

from distill.commands import flags, outputs

__all__ = ["HELP", "add_arguments", "run"]

HELP = "policies compared in closed-loop search, at equal rollouts and at equal time"
_FEW = 6  # decisions a cell, to see how long one takes
_LEFT = ("summary.json", "cells.parquet", "table.md", "cells.md", "stopping.md", "rehearsal.html")
_SAY_SECONDS = 60.0
_PLAYING = ("quick", "full", "stops", "problem", "budget", "policy", "scorer", "seeds", "tuning_seeds")
_EPILOG = """\
problems: taxi, cold_store_small, frozen_lake_4x4_plans, frozen_lake_8x8_plans, frozen_lake_4x4_odds,
cliff_walking_slippery_plans, frozen_lake_8x8_odds; those that look ahead with the exact model: cliff_walking,
cliff_walking_slippery, frozen_lake_4x4, frozen_lake_8x8; trees, ACTIONSxBRANCHING^LEVELS with the variance of
rollouts, or win/loss leaves, and on demand the prior's variance and chance nodes: tree-4x4^1-noise4,
tree-6x2^1-winloss, tree-4x3^2-noise4-prior2-chance; your own: MODULE:NAME, a function in a Python module (the
present folder is looked in) that returns (simulator, settings) or a problem. Without an exact model regret is
told against many rollouts at each leaf.

budgets: 128 rollouts; 20ms@100us, time (ms, s) at this cost of a rollout (us, ms), charged by a virtual
clock, choosing as really measured; 20ms@100us!busy keeps the processor busy instead.

policies: even, uct[:c=2], thompson[:prior=0.7], top-two[:share=0.5:prior=1], static-voc,
static-rate[:prior=1.4], exact-dynamic, exact-dynamic-rate, exact-horizon[:h=4], exact-static-rate,
scorer:FILE.onnx[:late=0.5:every=2:share=0.2:prior=1.4:name=TEXT]. Exact ones and scorers take stop=0.001, the
price of a rollout in units of the tree's scale: the search stops where none is worth that. uct, thompson,
top-two and static-rate by bare name are tuned on decisions of their own; so is what ends in prior=auto, or in
stop=auto, which finds the highest price that costs next to no regret (one of the two). To see what stopping
saves, play the same policy without stop=auto beside it, or give --stops."""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The command's flags."""
    parser.formatter_class = argparse.RawDescriptionHelpFormatter
    parser.epilog = _EPILOG
    parser.add_argument(
        "--out", type=flags.out_folder, required=True, metavar="FOLDER", help="goes on where it was"
    )
    parser.add_argument("--quick", action="store_true", help="a small rehearsal, of about ten seconds")
    parser.add_argument("--full", action="store_true", help="the whole grid; half an hour on two cores")
    parser.add_argument(
        "--stops", action="store_true",
        help="play 4,096 rollouts a decision too, on every problem, with and without stopping early; needs "
        "--scorer, whose first file of each kind of input plays them; beside --full 25 minutes more",
    )  # fmt: skip
    again = "again for more; with --quick or --full in place of theirs"
    parser.add_argument(
        "--problem", action="append", default=[], metavar="NAME", help=f"what is searched; {again}"
    )
    parser.add_argument(
        "--budget", action="append", default=[], metavar="BUDGET", help=f"what a decision may cost; {again}"
    )
    parser.add_argument(
        "--policy", action="append", default=[], metavar="POLICY",
        help=f"who chooses rollouts; {again}; by default even and the tuned rivals",
    )  # fmt: skip
    parser.add_argument(
        "--scorer", action="append", default=[], metavar="FILE.onnx",
        help="a shipped scorer, beside the policies in the ways that pay; again for more",
    )  # fmt: skip
    parser.add_argument(
        "--seeds",
        type=flags.whole(2),
        metavar="N",
        help="decisions a cell (default 400, --quick 60); more than --out holds plays the further ones, by "
        "constants tuned before",
    )
    parser.add_argument(
        "--tuning-seeds",
        type=flags.whole(0),
        metavar="N",
        help="decisions that constants are tuned on; 0 tunes nothing (default 100, --quick 0)",
    )
    parser.add_argument(
        "--workers", type=flags.whole(1), default=1, metavar="N", help="processes (default 1)"
    )
    other = parser.add_mutually_exclusive_group()
    other.add_argument(
        "--estimate",
        action="store_true",
        help="rehearse 6 decisions a cell, keep nothing, and say how long all of it takes",
    )
    other.add_argument(
        "--sheets", type=Path, nargs="+", metavar="FILE.onnx",
        help="rehearse nothing: write what stands in --out into the sheets beside these scorer files",
    )  # fmt: skip


def run(args: argparse.Namespace) -> None:
    """Run the command."""
    if args.sheets:
        from distill.errors import InputError
        from distill.rehearse.sheets import add_to_sheets

        if given := [flag for flag in _PLAYING if getattr(args, flag) not in (None, False, [])]:
            rule = f"rehearses nothing, so it cannot go with --{given[0].replace('_', '-')}"
            raise InputError("--sheets", rule)
        for file in add_to_sheets(args.out, args.sheets):
            print(f"{file.with_suffix('.json')}, {file.with_suffix('.md')}: with the rehearsal's figures")
        return
    _rehearse(args)


def _rehearse(args: argparse.Namespace) -> None:
    from dataclasses import replace

    from distill.errors import InputError
    from distill.rehearse.campaign import run as rehearse
    from distill.rehearse.plans import plan
    from distill.rehearse.results import summarise, write_results
    from distill.rehearse.results_tables import (
        cells_table,
        left_out_lines,
        short_table,
        time_table,
    )
    from distill.report.rehearsal_page import write_pictures, write_rehearsal_page

    if args.quick and args.full:
        raise InputError("--quick", "cannot go with --full")
    campaign = plan(
        "full" if args.full else "quick" if args.quick else None,
        problems=args.problem,
        budgets=args.budget,
        policies=args.policy,
        scorers=args.scorer,
        stopping=args.stops,
        seeds=args.seeds,
        tuning_seeds=args.tuning_seeds,
    )
    places = sum(len(campaign.budgets_of(problem)) for problem in campaign.problems)
    if args.estimate:
        few = replace(campaign, seeds=_FEW, tuning_seeds=min(_FEW, campaign.tuning_seeds))
        # Nothing is left behind: another plan may be asked about next.
        with tempfile.TemporaryDirectory() as folder, _told("estimating", places) as progress:
            results = rehearse(few, folder, workers=args.workers, progress=progress)
        seeds = campaign.seeds, campaign.tuning_seeds
        print("\n".join(time_table(summarise(results), *seeds, workers=args.workers)))
        return
    outputs.check_outputs([(args.out / name, outputs.REHEARSAL) for name in _LEFT], [])
    with _told("rehearsing", places) as progress:
        results = rehearse(campaign, args.out, workers=args.workers, progress=progress)
    summary = write_results(results, args.out)
    write_rehearsal_page(summary, args.out / "rehearsal.html")
    drawn = [path.name for path in write_pictures(summary, args.out)]
    print(f"{args.out}: {len(results.cells)} cells of {campaign.seeds} decisions\n")
    tables = [] if args.full else [cells_table(summary)]
    tables += [short_table(summary), left_out_lines(summary)]
    print("\n\n".join("\n".join(lines) for lines in tables if lines))
    print(f"\nSee {args.out / 'rehearsal.html'}; figures in summary.json and cells.parquet, for other pages")
    print(f"{', '.join(['table.md', 'cells.md', *drawn])}.")


@contextmanager
def _told(doing: str, places: int) -> Iterator[Callable[[int, int], None]]:
    """A bar with the time left; where standard error is a file, a line now and then."""
    from distill.terminal import bar

    if not sys.stderr.isatty():
        yield _Lines(doing)
        return
    with bar(doing, places, "problems x budgets") as advance:
        before = 0

        def progress(done: int, _of: int) -> None:
            nonlocal before
            advance(done - before)
            before = done

        yield progress


class _Lines:
    """Says how far a run has come, and how long it will take, a line every few minutes at most."""

    def __init__(self, doing: str) -> None:
        self._doing = doing
        self._started = self._said = time.monotonic()
        self._first = -1

    def __call__(self, done: int, of: int) -> None:
        """`done` places of `of`."""
        now = time.monotonic()
        if self._first < 0:
            self._first = done  # an earlier run's
        if now - self._said < _SAY_SECONDS:
            return
        self._said = now
        made, minutes = done - self._first, (now - self._started) / 60
        left = f", about {minutes * (of - done) / made:.0f} left" if made else ""
        print(
            f"voc-distill: {self._doing}: {done} of {of} problems x budgets after {minutes:.0f} min{left}",
            file=sys.stderr, flush=True,
        )  # fmt: skip
