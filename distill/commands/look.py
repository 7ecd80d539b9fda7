"""`voc-distill look`: what is in a dataset."""

from __future__ import annotations

import argparse
from typing import Any

from distill.commands import flags, outputs

__all__ = ["HELP", "add_arguments", "run"]

HELP = "what is in a dataset: counts, labels, slices, errors, duplicates"
_BAR = 40  # characters of the longest bar


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The command's flags."""
    parser.add_argument("dataset", metavar="DATASET", help="what generate left")
    parser.add_argument("--page", type=flags.out_file, metavar="FILE.html", help="a page with pictures")
    parser.add_argument(
        "--no-check", action="store_true", help="do not compare the files with their hashes first"
    )


def run(args: argparse.Namespace) -> None:
    """Run the command."""
    from distill.look import look

    outputs.check_outputs([(args.page, outputs.PAGE)], [args.dataset])
    figures = look(args.dataset, check=not args.no_check)
    if args.page:
        from distill.report.look_page import write_look_page

        write_look_page(figures, args.page)
    print("\n".join(_lines(args.dataset, figures)))


def _lines(dataset: str, f: dict[str, Any]) -> list[str]:
    state = "" if f["complete"] else " (unfinished: run generate again)"
    counts = (
        f"{f['trees']:,} trees, {f['candidates']:,} candidates, {f['aside']:,} trees aside, "
        f"{f['shards']} shards, {f['bytes'] / 2**20:.1f} MB"
    )
    lines = [
        f"{dataset}: {counts}{state}",
        f"  source: {f['source'].get('kind')} {f['source'].get('name')}, seed {f['seed']}",
        f"  of the trees, {_shares(f)}",
        *_counted("method", f["methods"]),
        *(_counted("from", f["sources"]) if len(f["sources"]) > 1 else []),
        f"  duplicates: {f['duplicate_trees']:,} trees repeat another's beliefs and budget",
        *_counted("aside", f["aside_reasons"]),
    ]
    if f["weights"]:
        w = f["weights"]
        lines.append(
            f"  weights: {w['smallest']:.3g} to {w['largest']:.3g}; worth "
            f"{w['effective_trees']:,.0f} equal trees"
        )
    for key, name in (("label_histogram", "Labels"), ("error_histogram", "Error bounds")):
        lines += ["", f"{name} over the tree's scale, candidates by half decades of log10", *_drawn(f[key])]
    for key, name in (("label_of_scale", "label/scale"), ("error_of_label", "error/label")):
        if f[key]:
            lines.append(f"  {name}: " + ", ".join(f"{q} {x:.3g}" for q, x in f[key].items()))
    for by, rows in f["slices"].items():
        lines += ["", f"{by:>16}  {'trees':>9}  {'candidates':>11}  best label/scale  largest error/best"]
        lines += [
            f"{r['slice']:>16}  {r['trees']:>9,}  {r['candidates']:>11,}"
            f"  {_plain(r['best_label_of_scale']):>16}  {_plain(r['error_of_best']):>18}"
            for r in rows
        ]
    return lines


def _shares(f: dict[str, Any]) -> str:
    told = {"recorded": f["recorded"], "drawn from a family": f["trees"] - f["recorded"]}
    return ", ".join(f"{n:,} ({100 * n / max(f['trees'], 1):.3g} %) {name}" for name, n in told.items())


def _counted(name: str, counts: dict[str, int]) -> list[str]:
    return [f"  {name}: {what}, {n:,}" for what, n in counts.items()]


def _drawn(histogram: dict[str, Any]) -> list[str]:
    top = max(histogram["counts"], default=1) or 1
    out = [f"{'0':>8}  {histogram['zero']:>10,}"] if histogram["zero"] else []
    for edge, n in zip(histogram["edges"], histogram["counts"], strict=False):
        out.append(f"{edge:>8g}  {n:>10,}  {'#' * round(_BAR * n / top)}")
    return out


def _plain(x: float | None) -> str:
    return "-" if x is None else f"{x:.3g}"
