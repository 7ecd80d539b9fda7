"""The small labelled dataset that comes with the project: its plan gives the same trees and labels again."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from ladder import CLOSED_FORM, RELATIVE_TAIL

from distill import shards
from distill.candidates import Candidates
from distill.family import load_family
from distill.generate import Asked, generate
from distill.sources import tree_key

SAMPLE = Path(__file__).parents[1] / "datasets" / "sample"


def test_its_files_are_whole_and_small():
    manifest = shards.read_manifest(SAMPLE)
    shards.verify(SAMPLE, manifest["shards"])
    assert manifest["totals"]["trees"] == 250
    assert manifest["source"]["sha256"] == load_family(SAMPLE / "family.toml").sha256
    assert sum(path.stat().st_size for path in SAMPLE.iterdir()) < 300_000
    candidates, about = Candidates.read(SAMPLE)
    assert about["value"] == {"horizon": "inf", "batch": None}
    assert len(candidates.label) == manifest["totals"]["candidates"]


def test_its_plan_gives_the_same_trees_and_labels(tmp_path):
    """Values, not bytes: another processor or library may round a last digit otherwise."""
    manifest = shards.read_manifest(SAMPLE)
    again = generate(
        load_family(SAMPLE / "family.toml"),
        tmp_path,
        trees=manifest["trees"],
        seed=manifest["seed"],
        asked=Asked.described(manifest["asked"]),
        shard_trees=manifest["shard_trees"],
    )
    assert again["totals"] == manifest["totals"]
    ours, theirs = shards.read_candidates(tmp_path), shards.read_candidates(SAMPLE)
    assert ours.keys() == theirs.keys()
    labels = {"label", "label_batch", "error"}
    for name in ours.keys() - labels:
        assert np.allclose(ours[name], theirs[name], rtol=CLOSED_FORM, atol=0), name
    slack = ours["error"] + theirs["error"]
    assert np.all(np.abs(ours["label"] - theirs["label"]) <= slack)
    scale = np.sqrt(ours["var"].max())
    assert not np.signbit(ours["label"]).any()
    assert np.all(slack <= np.maximum(RELATIVE_TAIL * ours["label"], 1e-30 * scale))
    # Where two batches are worth the same to the last digits, either is best.
    assert np.mean(ours["label_batch"] == theirs["label_batch"]) > 0.99
    keys = [[tree_key(tree) for _, tree in shards.read_trees(folder)] for folder in (tmp_path, SAMPLE)]
    assert len(set(keys[1])) == 250
    if again["code"]["numpy"] == manifest["code"]["numpy"]:
        assert keys[0] == keys[1]


def test_what_reading_says_of_it_is_what_newcomers_are_told():
    page = (SAMPLE / "README.md").read_text()
    assert "250 trees with 2,350 candidates" in page
    assert "sample/" in (SAMPLE.parent / "README.md").read_text()
