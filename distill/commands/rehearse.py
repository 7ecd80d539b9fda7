"""`voc-distill rehearse`: policies compared in closed-loop search, at equal rollouts and at equal time."""

from __future__ import annotations

import argparse

from distill.commands import flags

__all__ = ["HELP", "add_arguments", "run"]

HELP = "policies compared in closed-loop search, at equal rollouts and at equal time"
_EPILOG = """\
problems: taxi, cliff_walking, frozen_lake_8x8, cold_store_small ..., or trees: tree-4x4^1-noise4,
tree-6x2^1-winloss, tree-4x3^2-noise4-chance. budgets: 128 rollouts; 20ms@100us, time at this cost of a
rollout (charged by a virtual clock, choosing as really measured); 20ms@100us!busy keeps the processor
busy instead. policies: even, uct[:c=2], thompson[:prior=0.7], top-two[:share=0.5:prior=1], static-voc,
static-rate, exact-dynamic, exact-dynamic-rate, exact-horizon[:h=4], exact-static-rate,
scorer:FILE.onnx[:commit=0.25:spread=2:settled=0.001:share=0.25]; exact ones and scorers take stop=0.001
(price of a rollout, in units of the tree's scale) or stop=auto. uct, thompson and top-two by bare name are
tuned on decisions of their own."""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The command's flags."""
    parser.formatter_class = argparse.RawDescriptionHelpFormatter
    parser.epilog = _EPILOG
    parser.add_argument(
        "--out", type=flags.out_folder, required=True, metavar="FOLDER", help="goes on where it was"
    )
    parser.add_argument("--quick", action="store_true", help="a small rehearsal of under a minute")
    parser.add_argument("--full", action="store_true", help="the whole grid; 40 minutes on two cores")
    parser.add_argument("--problem", action="append", default=[], metavar="NAME")
    parser.add_argument("--budget", action="append", default=[], metavar="BUDGET")
    parser.add_argument("--policy", action="append", default=[], metavar="POLICY")
    parser.add_argument("--scorer", action="append", default=[], metavar="FILE.onnx")
    parser.add_argument("--seeds", type=flags.whole(2), metavar="N", help="decisions a cell")
    parser.add_argument("--tuning-seeds", type=flags.whole(0), metavar="N", help="0 tunes nothing")
    parser.add_argument("--workers", type=flags.whole(1), default=1, metavar="N", help="processes")


def run(args: argparse.Namespace) -> None:
    """Run the command."""
    from distill.errors import InputError
    from distill.rehearse.campaign import run as rehearse
    from distill.rehearse.plans import plan
    from distill.rehearse.results import write_results
    from distill.rehearse.results_tables import aims_table, cells_table
    from distill.report.rehearsal_page import write_rehearsal_page
    from distill.terminal import bar

    if args.quick and args.full:
        raise InputError("--quick", "cannot go with --full")
    campaign = plan(
        "full" if args.full else "quick" if args.quick else None,
        problems=args.problem,
        budgets=args.budget,
        policies=args.policy,
        scorers=args.scorer,
        seeds=args.seeds,
        tuning_seeds=args.tuning_seeds,
    )
    with bar("rehearsing", len(campaign.problems), "problems") as advance:
        results = rehearse(campaign, args.out, workers=args.workers, progress=lambda _done, _of: advance())
    summary = write_results(results, args.out)
    write_rehearsal_page(summary, args.out / "rehearsal.html")
    print(f"{args.out}: {len(results.cells)} cells of {campaign.seeds} decisions\n")
    print("\n".join([*cells_table(summary), "", *aims_table(summary)]))
    print(f"\nSee {args.out / 'rehearsal.html'}; figures in summary.json and cells.parquet.")
