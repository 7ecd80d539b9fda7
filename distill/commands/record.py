"""`voc-distill record`: belief trees of the reference search, or those that a policy meets, as traces."""

from __future__ import annotations

import argparse

from distill.commands import flags, outputs

__all__ = ["HELP", "add_arguments", "run"]

HELP = "belief trees that a search meets, as traces"
_POLICY = "even"
_SIMULATORS = (  # those of the catalogue, whose module is too slow for --help; a test compares them
    "taxi, cliff_walking, cold_store, cold_store_small, cliff_walking_slippery, frozen_lake_4x4, "
    "frozen_lake_8x8, frozen_lake_4x4_plans, frozen_lake_8x8_plans, cliff_walking_slippery_plans, "
    "frozen_lake_4x4_odds, frozen_lake_8x8_odds"
)


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The command's flags."""
    what = parser.add_mutually_exclusive_group(required=True)
    what.add_argument(
        "--simulator", metavar="NAME",
        help=f"played by the reference search, rules mixed: {_SIMULATORS}",
    )  # fmt: skip
    what.add_argument(
        "--problem", action="append", metavar="NAME",
        help="of a rehearsal; decisions of their own, searched by --policy; may be given again",
    )  # fmt: skip
    parser.add_argument(
        "--policy", metavar="POLICY",
        help=f"of --problem, as for rehearse, e.g. scorer:FILE.onnx (default {_POLICY})",
    )  # fmt: skip
    parser.add_argument(
        "--decisions", type=flags.whole(1), required=True, metavar="N", help="of each problem"
    )
    parser.add_argument(
        "--rollouts", type=flags.whole(1), default=128, metavar="R", help="budget of a decision (default 128)"
    )
    flags.add_seed_flag(parser, "everything random")
    parser.add_argument(
        "--out",
        type=flags.out_file,
        required=True,
        metavar="FILE",
        help=".jsonl or .jsonl.gz; must not exist yet",
    )


def run(args: argparse.Namespace) -> None:
    """Run the command."""
    from distill.errors import InputError

    if args.problem is None and args.policy is not None:
        raise InputError("--policy", "goes with --problem; the reference search mixes its rules")
    outputs.check_outputs([(args.out, outputs.TRACES)], [])
    if args.problem is None:
        _played(args)
    else:
        _met(args)


def _played(args: argparse.Namespace) -> None:
    from distill.rehearse.record import record_traces
    from distill.terminal import bar

    seen = 0
    with bar("recording", args.decisions, "decisions") as advance:

        def progress(decision: int) -> None:
            nonlocal seen
            advance(decision + 1 - seen)  # a decision brings several trees
            seen = decision + 1

        done = record_traces(
            args.simulator,
            args.out,
            decisions=args.decisions,
            rollouts=args.rollouts,
            seed=args.seed,
            progress=progress,
        )
    print(f"{args.out}: {done.trees:,} trees of {done.decisions:,} decisions, {done.size:,} bytes")


def _met(args: argparse.Namespace) -> None:
    from distill.errors import InputError
    from distill.rehearse.catalogue import make_problem
    from distill.rehearse.met_trees import FIRST_SEED, met_trees
    from distill.rehearse.policy_specs import make_policy
    from distill.traces import write_trees

    if not str(args.out).endswith((".jsonl", ".jsonl.gz")):
        raise InputError(str(args.out), "must end in .jsonl or .jsonl.gz")  # before the work, not after it
    met = met_trees(
        [make_problem(name) for name in args.problem],
        make_policy(args.policy or _POLICY),
        decisions=args.decisions,
        rollouts=args.rollouts,
        first_seed=FIRST_SEED + args.seed * args.decisions,
    )
    trees = list(met)
    write_trees(args.out, trees)
    decisions = args.decisions * len(args.problem)
    print(f"{args.out}: {len(trees):,} trees of {decisions:,} decisions, {args.out.stat().st_size:,} bytes")
