"""`voc-distill validate`: a scorer file against exact labels."""

from __future__ import annotations

import argparse
import json
from typing import TYPE_CHECKING, Any

from distill.commands import flags, outputs
from distill.files import write_atomic

if TYPE_CHECKING:
    from distill.family import Family
    from distill.runtime import Scorer
    from distill.scorer_inputs import InputKind

__all__ = ["HELP", "add_arguments", "run"]

HELP = "a scorer file against exact labels"
_TREES = 300

_SHIFT_WORDS = """\
Forgone share: value lost because picks are not always the best, of the best value, over all trees together.
Relative forgone: the same of each tree's own best value, averaged over trees, so that small ones count too.
First-order start: the forgone share of the formula that the scorer starts from.
Bound holds: candidates whose exact value is at or below `voc_high`.
Trees flagged: those with a leaf outside what training saw (`in_range`). Loss flagged: of all that the picks
forgo, the part in flagged trees; the rest an agent is not warned of."""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The command's flags."""
    parser.add_argument("scorer", metavar="FILE.onnx", help="as train and ship leave them")
    parser.add_argument("dataset", metavar="DATASET", nargs="?", help="labelled trees")
    parser.add_argument(
        "--shift",
        metavar="FAMILY",
        help="a family file or name: fresh trees of it, and of families that differ in one thing each",
    )
    parser.add_argument(
        "--trees",
        type=flags.whole(1),
        metavar="N",
        help=f"of each shift (default {_TREES}; a tenth where leaves are correlated)",
    )
    parser.add_argument(
        "--peers",
        action="store_true",
        help="measure what else could pick on the dataset's trees, and its time",
    )
    flags.add_seed_flag(parser, "the bootstrap and of drawn trees")
    parser.add_argument("--out", type=flags.out_file, metavar="FILE.json", help="write the figures here too")


def run(args: argparse.Namespace) -> None:
    """Run the command."""
    from distill.errors import InputError
    from distill.family import load_family
    from distill.runtime import Scorer
    from distill.sample_data import family_path
    from distill.shift import input_of

    if args.dataset is None and args.peers:
        raise InputError("peers", "must have a dataset, whose trees they are measured on")
    if args.trees is not None and args.shift is None:
        raise InputError("--trees", "must come with --shift, whose fresh trees it counts")
    if args.dataset is None and args.shift is None:
        raise InputError("validate", "must be given a dataset, --shift, or both")
    outputs.check_outputs([(args.out, outputs.FIGURES)], [args.scorer, args.dataset, args.shift])
    # A wrong name, and a family that the scorer cannot read, are told before the work.
    family = None if args.shift is None else load_family(family_path(args.shift))
    scorer = Scorer.load(args.scorer)
    kind = None if family is None else input_of(scorer, family)
    figures: dict[str, Any] = {}
    if args.dataset is not None:
        figures = _on_dataset(args, scorer)
    if family is not None and kind is not None:
        figures |= _on_shifts(args, scorer, family, kind)
    if args.out:
        write_atomic(args.out, (json.dumps(figures, indent=1) + "\n").encode())


def _on_dataset(args: argparse.Namespace, scorer: Scorer) -> dict[str, Any]:
    from distill.sheet import accuracy_table, bound_text, peer_table
    from distill.validate import validate

    figures = validate(scorer, args.dataset, seed=args.seed, with_peers=args.peers)
    accuracy = figures["accuracy"]
    print(f"{args.scorer} on {accuracy['trees']:,} trees of {args.dataset}")
    if figures["part"] == "held_out":
        print("The dataset shares its source with the training data: only held-out trees count.")
    print()
    print("\n".join(accuracy_table({"the scorer": accuracy, **figures["beside"]})))
    print("\n" + "\n".join(bound_text(accuracy["calibration"])))
    if args.peers:
        print("\n" + "\n".join(peer_table(figures)))
    return figures


def _on_shifts(args: argparse.Namespace, scorer: Scorer, family: Family, kind: InputKind) -> dict[str, Any]:
    from distill.sheet import shift_table
    from distill.shift import measure_shifts
    from distill.shifted_families import GIVEN, out_of_reach

    gone = out_of_reach(family, kind)
    figures = measure_shifts(scorer, family, trees=args.trees or _TREES, seed=args.seed, progress=True)
    print("\n".join(["", *shift_table(figures), "", _SHIFT_WORDS]))
    if GIVEN in figures:
        print(f"{GIVEN.capitalize()}: {figures[GIVEN]['changed']}.")
    if gone:
        print("\n".join(["", "Left out:", *(f"- {name}: {why}" for name, why in gone.items())]))
    return {"shifts": figures, "shifts_left_out": gone}
