"""The readable page that lies in every generated dataset; floor 4."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from distill import schema

__all__ = ["datasheet", "recorded_trees"]


def datasheet(manifest: dict[str, Any], columns: dict[str, dict[str, str]]) -> str:
    """Markdown that says what a finished dataset is, from its manifest alone.

    columns : file kind -> column -> meaning and unit.
    """
    source, asked, totals = manifest["source"], manifest["asked"], manifest["totals"]
    page = f"""\
# Labelled belief trees: {source["name"]}

{totals["trees"]:,} trees with {totals["candidates"]:,} candidates, each with its exact value of
computation and an error bound.

- **Trees**: {_origin(manifest)}. SHA-256 of the source: `{source["sha256"]}`.
- **Sampling**: {_sampling(manifest["sampling"])}
- **Label**: {_label(asked)}; horizon: {_horizon(asked["value"])}; rollouts left: {asked["remaining"]}.
- **Tolerance**: {_tolerance(asked["tolerance"])}.
- **Kept aside**: {totals["aside"]:,} trees without a label good enough, with the reason, in
  `aside-*.parquet`.
{_additions(manifest.get("added", ()))}- **Made with**: {_versions(manifest["code"])}.
- **Files**: format `{schema.DATASET_FORMAT}`; {len(manifest["shards"])} shards, row counts and SHA-256 in
  `manifest.json`. Any Parquet reader opens them.
- **Same again**: the source, the seed, the question and the versions above give the same bytes on the same
  kind of machine, with any number of workers, on one machine or on a cluster.

{_shares(manifest)}
"""
    lines = []
    for kind, described in columns.items():
        lines += ["", f"## {kind}-*.parquet", "", "| column | meaning and unit |", "| --- | --- |"]
        lines += [f"| `{name}` | {text} |" for name, text in described.items()]
    return page + "\n".join(lines) + "\n"


def _label(asked: dict[str, Any]) -> str:
    batch = asked["batch"]
    if batch == "rate":
        return "rate (best VOC a rollout over all batches)"
    if isinstance(batch, str):
        return "VOC of the tree's own batch, 1 where it states none"
    return f"VOC of {batch} rollouts"


def recorded_trees(manifest: dict[str, Any]) -> tuple[int, int]:
    """How many of the trees that a dataset was asked for are recorded, and how many there are in all."""
    source, added = manifest["source"], sum(a["trees"] for a in manifest.get("added", ()))
    recorded = {"family": 0, "traces": manifest["trees"]}.get(source["kind"], source.get("recorded", 0))
    return recorded + added, manifest["trees"] + added


def _shares(manifest: dict[str, Any]) -> str:
    """What the trees can speak for, by how many are recorded."""
    recorded, every = recorded_trees(manifest)
    if recorded == 0:
        return "Synthetic trees say nothing about an agent whose trees look different: compare before use."
    warning = "They speak for an agent whose trees look like them: compare before use."
    if recorded == every:
        return f"All {every:,} trees are recorded, none is synthetic. {warning}"
    share = 100 * recorded / every
    return (
        f"Of the {every:,} trees, {recorded:,} ({share:.3g} %) are recorded and {every - recorded:,} "
        f"({100 - share:.3g} %) are synthetic. {warning}"
    )


def _origin(manifest: dict[str, Any]) -> str:
    source, seed = manifest["source"], manifest["seed"]
    family, traces = source.get("family", source)["name"], source.get("traces", source)["name"]
    family = f"drawn from the family `{family}` (`family.toml` here) with seed {seed}"
    traces = f"recorded: `{traces}`; where only a part was taken, picked with seed {seed}"
    if source["kind"] == "mix":
        return f"{source['recorded']:,} of {manifest['trees']:,} {traces}. The others {family}"
    return family if source["kind"] == "family" else traces


def _sampling(sampling: dict[str, Any]) -> str:
    factor = sampling["close_calls"]
    if factor == 1:
        return "none; every tree has weight 1."
    bounds, chances = sampling["bounds"], sampling["chances"]
    rule = ", ".join(f"{c:g} from {b:g} on" for b, c in zip(bounds, chances[1:], strict=True))
    return f"""\
of {factor} trees looked at one was labelled, close calls more often. Chances in proportion to
  {chances[0]:g}; {rule}, by what is at stake: the static value of all rollouts left at the best leaf, as a
  share of the tree's scale. Weigh trees by `weight` for figures of the trees as they came."""


def _additions(added: Sequence[dict[str, Any]]) -> str:
    return "".join(
        f"""\
- **Added later**: {a["trees"]:,} recorded trees of `{a["name"]}`, from number {a["first_tree"]} on, with
  weight 1; {a["known"]:,} more were here already. SHA-256 of the source: `{a["sha256"]}`.
  Made with: {_versions(a["code"])}.
"""
        for a in added
    )


def _versions(code: dict[str, str]) -> str:
    return ", ".join(f"{name} {version}" for name, version in code.items())


def _horizon(value: object) -> str:
    if value == "the tree's":
        return "the tree's own, infinite where it states none"
    if value == "inf":
        return "infinite (dynamic value)"
    return "0 (static value)" if value == 0 else f"{value} rollouts a leaf"


def _tolerance(value: float | None) -> str:
    return "none asked; see the error column" if value is None else f"{value:g} of each tree's scale"
