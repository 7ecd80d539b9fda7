"""Families compare by what they say: comments, order and spelling hide no trees that were trained on."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
from small_dataset import FAMILY, labelled

from distill.candidates import Candidates
from distill.drift import trained_family
from distill.family import Family, draw, load_family, parse_family
from distill.generate import Mix, Traces, generate
from distill.origins import origins, same_family, share_origin
from distill.runtime import Scorer
from distill.shards import read_manifest, read_trees
from distill.train import train
from distill.validate import validate

MODELS = Path(__file__).parents[1] / "models"
FAMILIES = Path(__file__).parents[1] / "datasets" / "families"

PLAIN = """
format = "tree-family/1"
name = "two bays"
belief = "gaussian"
shape = { actions = 2, leaves = [1, 3] }
prior = { sd = 1, mean = { normal = [0, 0.5] } }
noise = { sd = { choice = [1, 2], weights = [0.25, 0.75] } }
budget = { rollouts = 16, used = 0.5 }
search = { thompson = 1 }
"""
SPELLED = """
# The same, by another hand.
name = "two bays, again"
belief = "gaussian"
format = "tree-family/1"
description = "bays"
[search]
thompson = 1.0   # alone
uct = 0
[budget]
used = 5e-1
rollouts = { choice = [16] }
[noise]
sd = { weights = [1, 3], choice = [1.0, 2.0] }
[prior]
mean = { normal = [0.0, 0.50] }
sd = 1.0
[edge]
discount = 1
[shape]
leaves = { uniform = [1, 3] }
actions = 2
depth = 2
"""


def family(text: str) -> Family:
    return parse_family(text.encode())


def test_another_spelling_draws_the_same_trees_and_has_the_same_content() -> None:
    one, other = family(PLAIN), family(SPELLED)
    assert one.sha256 != other.sha256
    assert one.content == other.content
    for i in range(30):
        a, b = draw(one, 3, i), draw(other, 3, i)
        assert a.mean is not None
        assert b.mean is not None
        np.testing.assert_array_equal(a.mean, b.mean)


@pytest.mark.parametrize(
    ("old", "new"),
    [
        ("leaves = [1, 3]", "leaves = [1, 4]"),
        ("leaves = [1, 3]", "leaves = { log_uniform = [1, 3] }"),
        ("normal = [0, 0.5]", "normal = [0, 0.5000001]"),
        ("weights = [0.25, 0.75]", "weights = [0.75, 0.25]"),
        ("choice = [1, 2], weights = [0.25, 0.75]", "choice = [2, 1], weights = [0.75, 0.25]"),
        ("used = 0.5", "used = 0.5, fresh = 0.1"),
        ("thompson = 1", "uct = 1"),
        ("sd = 1,", "sd = 1, scale = 2,"),
    ],
)
def test_whatever_changes_the_draws_changes_the_content(old: str, new: str) -> None:
    assert old in PLAIN
    assert family(PLAIN.replace(old, new)).content != family(PLAIN).content


def test_all_families_of_the_tool_differ() -> None:
    found = {load_family(path).content for path in FAMILIES.glob("*.toml")}
    assert len(found) == len(list(FAMILIES.glob("*.toml")))


@pytest.fixture(scope="module")
def trained(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Path]:
    """A scorer file and its dataset."""
    folder = tmp_path_factory.mktemp("origins")
    dataset = labelled(folder / "data", trees=60)
    train(dataset, folder / "front", seed=4, recipes=["linear"], n_boot=2)
    return folder / "front" / "linear.onnx", dataset


def test_a_comment_does_not_bring_training_trees_back(trained: tuple[Path, Path], tmp_path: Path) -> None:
    file, dataset = trained
    noted = parse_family(FAMILY.read_bytes() + b"\n# note\n")
    seed = read_manifest(dataset)["seed"]
    generate(noted, tmp_path / "noted", trees=80, seed=seed)
    found = validate(file, tmp_path / "noted", n_boot=2)
    assert found["part"] == "held_out"
    assert found["accuracy"]["trees"] < 40
    fresh = Traces("others", [tree for _, tree in read_trees(labelled(tmp_path / "o", trees=9, seed=9))])
    generate(Mix(noted, fresh, 0.5), tmp_path / "mixed", trees=12, seed=seed)
    assert validate(file, tmp_path / "mixed", n_boot=2)["part"] == "held_out"
    generate(noted, tmp_path / "fresh", trees=10, seed=seed + 1)
    assert validate(file, tmp_path / "fresh", n_boot=2)["part"] == "all"


def test_older_files_and_datasets_that_hold_texts_alone_are_still_known(
    trained: tuple[Path, Path], tmp_path: Path
) -> None:
    """A scorer that came with the tool knows its own family under a comment; older ones of others by text."""
    facts: dict[str, Any] = Scorer.load(MODELS / "cold-store.onnx").facts
    data = facts["about"]["data"]
    own = load_family(FAMILIES / "cold-store.toml")
    assert data["drawn_from"] == [f"{own.sha256} 11"]
    noted = parse_family(own.text.encode() + b"# note\n")
    generate(noted, tmp_path / "noted", trees=2, seed=11)
    assert share_origin(data["drawn_from"], Candidates.read(tmp_path / "noted")[1]["data"]["drawn_from"])
    assert same_family(noted, data)
    found = trained_family(facts)
    assert found is not None
    assert found.sha256 == own.sha256
    assert not same_family(load_family(FAMILIES / "wide-gaussian.toml"), data)
    manifest = read_manifest(trained[1])
    old = {**manifest, "source": {k: x for k, x in manifest["source"].items() if k != "content"}}
    assert len(origins(old)) == 1
    assert share_origin(origins(old), origins(manifest))
    assert not share_origin(origins({**old, "seed": old["seed"] + 1}), origins(manifest))
