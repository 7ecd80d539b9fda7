"""The readable page that lies in every generated dataset; floor 4."""

from __future__ import annotations

from typing import Any

from distill import schema

__all__ = ["datasheet"]


def datasheet(manifest: dict[str, Any], columns: dict[str, dict[str, str]]) -> str:
    """Markdown that says what a finished dataset is, from its manifest alone.

    columns : file kind -> column -> meaning and unit.
    """
    source, asked, totals = manifest["source"], manifest["asked"], manifest["totals"]
    from_what = (
        f"drawn from the family `{source['name']}` (`family.toml` here) with seed {manifest['seed']}"
        if source["kind"] == "family"
        else f"recorded: `{source['name']}`; where only a part was taken, picked with seed {manifest['seed']}"
    )
    rate = asked["batch"] == "rate"
    what = "rate (best VOC a rollout over all batches)" if rate else f"VOC of {asked['batch']} rollouts"
    code = ", ".join(f"{name} {version}" for name, version in manifest["code"].items())
    page = f"""\
# Labelled belief trees: {source["name"]}

{totals["trees"]:,} trees with {totals["candidates"]:,} candidates, each with its exact value of
computation and an error bound.

- **Trees**: {from_what}. SHA-256 of the source: `{source["sha256"]}`.
- **Label**: {what}; horizon: {_horizon(asked["value"])}; rollouts left: {asked["remaining"]}.
- **Tolerance**: {_tolerance(asked["tolerance"])}.
- **Kept aside**: {totals["aside"]:,} trees without a label good enough, with the reason, in
  `aside-*.parquet`.
- **Made with**: {code}.
- **Files**: format `{schema.DATASET_FORMAT}`; {len(manifest["shards"])} shards, row counts and SHA-256 in
  `manifest.json`. Any Parquet reader opens them.
- **Same again**: the source, the seed, the question and the versions above give the same bytes on the same
  kind of machine, with any number of workers.

Synthetic trees say nothing about an agent whose trees look different: compare before use.
"""
    lines = []
    for kind, described in columns.items():
        lines += ["", f"## {kind}-*.parquet", "", "| column | meaning and unit |", "| --- | --- |"]
        lines += [f"| `{name}` | {text} |" for name, text in described.items()]
    return page + "\n".join(lines) + "\n"


def _horizon(value: object) -> str:
    if value == "the tree's":
        return "the tree's own, infinite where it states none"
    if value == "inf":
        return "infinite (dynamic value)"
    return "0 (static value)" if value == 0 else f"{value} rollouts a leaf"


def _tolerance(value: float | None) -> str:
    return "none asked; see the error column" if value is None else f"{value:g} of each tree's scale"
