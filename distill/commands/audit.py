"""`voc-distill audit`: a shipped scorer re-checked against exact labels on recorded trees."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import Any

from distill.commands import flags, outputs

__all__ = ["HELP", "add_arguments", "run"]

HELP = "a shipped scorer re-checked on recorded trees; exits with 0 as promised, 3 worse, 2 on an error"
_WORSE = 3


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The command's flags."""
    parser.add_argument("scorer", metavar="FILE.onnx", help="with its sheet beside it, as ship leaves them")
    parser.add_argument("traces", nargs="+", metavar="TRACES", help="recorded trees")
    parser.add_argument(
        "--trees", type=flags.whole(1), default=500, metavar="N", help="labelled exactly (default 500)"
    )
    parser.add_argument(
        "--margin", type=flags.positive, default=0.5, metavar="POINTS",
        help="percentage points above the promised interval that are let pass (default 0.5)",
    )  # fmt: skip
    parser.add_argument(
        "--family", metavar="TOML",
        help="what the scorer was trained on, to tell drift; by default as its metadata names it",
    )  # fmt: skip
    parser.add_argument(
        "--dataset", metavar="DATASET",
        help="what the scorer was trained on: trees that it holds already are not offered for adding",
    )  # fmt: skip
    parser.add_argument(
        "--out", type=flags.out_folder, metavar="FOLDER",
        help="audit.json, audit.html and worth-adding.jsonl.gz go here; generate --add takes the last",
    )  # fmt: skip
    flags.add_seed_flag(parser, "sample and intervals")
    flags.add_strict_flag(parser)


def run(args: argparse.Namespace) -> int:
    """Run the command; 3 where the scorer is worse than its sheet promised."""
    from distill.audit import WORTH_ADDING, audit, write_audit
    from distill.family import load_family
    from distill.sample_data import family_path
    from distill.traces import BadLines

    known = family_path(args.family) if args.family else None
    if args.out:
        sheet = Path(args.scorer).with_suffix(".json")
        outputs.check_outputs(
            [
                (args.out / "audit.json", outputs.AUDIT),
                (args.out / "audit.html", outputs.PAGE),
                (args.out / WORTH_ADDING, outputs.WORTH_ADDING),
            ],
            [args.scorer, sheet, *args.traces, known, args.dataset],
        )
    bad = BadLines(args.strict)
    family = load_family(known) if known else None
    found = audit(
        args.scorer,
        args.traces,
        trees=args.trees,
        margin=args.margin,
        seed=args.seed,
        family=family,
        dataset=args.dataset,
        bad=bad,
        progress=True,
    )
    flags.say_bad_lines(bad)
    figures = found.figures
    print(f"{args.scorer}: {figures['verdict']}")
    _say(figures)
    if args.out:
        from distill.report.audit_page import write_audit_page

        write_audit(found, args.out)
        write_audit_page(figures, args.out / "audit.html")
        added = f"; {args.out / WORTH_ADDING} holds the trees worth adding" if found.worth_adding else ""
        print(f"  page: {args.out / 'audit.html'}{added}")
    return _WORSE if found.worse else 0


def _known(trees: dict[str, Any]) -> str:
    known = trees["in the dataset already"]
    if known is not None:
        return f", beside {known:,} that the dataset holds already"
    return ", training's own among them if there are any (--dataset leaves them out)" * bool(
        trees["worth adding"]
    )


def _say(figures: dict[str, Any]) -> None:
    trees, drift = figures["trees"], figures["drift"]
    print(
        f"  {trees['judged']:,} of {trees['recorded']:,} recorded trees judged, {trees['decisions']:,} "
        f"decisions; {sum(trees['aside'].values()):,} aside; out of range "
        f"{figures['out_of_range_percent']:.3g} % of candidates; worth adding {trees['worth adding']:,}"
        + _known(trees)
    )
    for reason, n in trees["aside"].items():
        print(f"  aside, {n:,}: {' '.join(reason.split())[:160]}")
    if drift["reference"] is None:
        print("  drift: not told; the family of training is not at hand (--family)")
        return
    moved = {name: c["distance"] for name, c in drift["columns"].items() if c.get("drifted")}
    told = ", ".join(f"{name} {d:.2f}" for name, d in sorted(moved.items(), key=lambda p: -p[1]))
    print(f"  drift against {drift['reference']} (distance above {drift['chance']:.2f}): {told or 'none'}")
