"""What `look` says of a dataset, against the dataset itself."""

from __future__ import annotations

import xml.etree.ElementTree as ET
from dataclasses import replace
from pathlib import Path

import numpy as np
import pyarrow.parquet as pq
import pytest
from builders import chance_record, flat_record, win_loss_record
from ladder import PUBLISHED

from distill.cli import run
from distill.errors import InputError
from distill.family import draw, load_family
from distill.generate import Asked, Mix, Traces, add, generate
from distill.look import look
from distill.query import scale_of
from distill.record import from_record
from distill.report.look_page import look_page
from distill.shards import read_candidates, read_manifest, read_trees, write_manifest

COLD_STORE = Path(__file__).parents[1] / "datasets" / "families" / "cold-store.toml"


@pytest.fixture(scope="module")
def mixed(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Trees of every kind; two of them stand there twice, one needs another name; some labels are 0."""
    folder = tmp_path_factory.mktemp("look") / "mixed"
    family = load_family(COLD_STORE)
    trees = [draw(family, 3, i) for i in range(20)]
    trees += [replace(trees[0], id="again"), replace(trees[1], id="again too")]
    trees += [replace(trees[2], remaining=(trees[2].remaining or 1) + 1)]
    trees += [from_record(r(remaining=9)) for r in (flat_record, chance_record, win_loss_record)]
    generate(Traces("mixed", trees), folder, shard_trees=7)
    return folder


def test_counts_are_those_of_the_dataset(mixed: Path) -> None:
    found = look(mixed)
    rows = read_candidates(mixed)
    assert found["trees"] == 26
    assert found["candidates"] == len(rows["label"])
    assert found["labels_zero"] == np.count_nonzero(rows["label"] == 0) > 0
    assert found["duplicate_trees"] == 2
    assert found["most_alike"] == 2
    assert found["shards"] == 4
    assert sum(found["methods"].values()) == 26
    assert len(found["methods"]) >= 3
    assert found["weights"] is None
    for rows_of in found["slices"].values():
        assert sum(r["trees"] for r in rows_of) == 26
        assert sum(r["candidates"] for r in rows_of) == found["candidates"]


def test_shares_of_recorded_trees_are_told(tmp_path: Path, capsys) -> None:
    """In `look`, on its page and in the datasheet, of a family, of a mix, and of trees added later."""
    family = load_family(COLD_STORE)
    trees = [draw(family, 3, i) for i in range(12)]
    generate(family, tmp_path / "drawn", trees=8)
    assert "Synthetic trees say nothing" in (tmp_path / "drawn" / "README.md").read_text()
    assert look(tmp_path / "drawn")["recorded"] == 0
    folder = tmp_path / "mix"
    generate(Mix(family, Traces("shift.jsonl", trees[:6])), folder, trees=8)
    assert (
        "Of the 8 trees, 6 (75 %) are recorded and 2 (25 %) are synthetic."
        in (folder / "README.md").read_text()
    )
    assert look(folder)["recorded"] == 6
    add(Traces("more.jsonl", trees[6:]), folder)
    page = (folder / "README.md").read_text()
    assert "Of the 14 trees, 12 (85.7 %) are recorded and 2 (14.3 %) are synthetic." in page
    assert "Synthetic trees say nothing" not in page
    assert run(["look", str(folder)]) == 0
    assert "of the trees, 12 (85.7 %) recorded, 2 (14.3 %) drawn from a family" in capsys.readouterr().out
    assert "of them recorded</dt>" in look_page(look(folder))
    generate(Traces("shift.jsonl", trees), tmp_path / "all")
    assert "All 12 trees are recorded, none is synthetic." in (tmp_path / "all" / "README.md").read_text()


def test_labels_stand_in_their_half_decade(mixed: Path) -> None:
    found = look(mixed)
    rows = read_candidates(mixed)
    scale = {n: scale_of(t) for n, t in read_trees(mixed) if not t.has_chance}
    flat = np.array([n in scale for n in rows["tree"]])
    share = np.array(
        [label / scale[n] for n, label in zip(rows["tree"][flat], rows["label"][flat], strict=True)]
    )
    h = found["label_histogram"]
    logs = np.maximum(np.log10(share[share > 0]), -16)
    expected = np.histogram(logs, h["edges"])[0]
    short = np.array(h["counts"]) - expected
    assert sum(h["counts"]) + h["zero"] == found["candidates"]
    # The chance tree's leaves, whose scale is told without their probabilities, are the rest.
    assert short.min() >= 0
    assert short.sum() + h["zero"] - np.count_nonzero(share == 0) == np.count_nonzero(~flat)
    assert found["label"]["1"] == pytest.approx(rows["label"].max(), rel=PUBLISHED * 1e-5)


def test_trees_aside_and_weights_are_told(tmp_path: Path) -> None:
    family = load_family(COLD_STORE)
    generate(family, tmp_path / "w", trees=30, close_calls=3)
    weights = look(tmp_path / "w")["weights"]
    assert weights is not None
    w = np.array([t["weight"] for t in _tree_rows(tmp_path / "w")])
    assert weights["effective_trees"] == pytest.approx(w.sum() ** 2 / np.sum(w**2))
    generate(
        Traces("t", [from_record(flat_record(remaining=9))] * 3), tmp_path / "a", asked=Asked(tolerance=1e-40)
    )
    found = look(tmp_path / "a")
    assert (found["trees"], found["aside"], found["candidates"]) == (0, 3, 0)
    assert sum(found["aside_reasons"].values()) == 3
    assert "tolerance" in next(iter(found["aside_reasons"]))
    ET.fromstring(look_page(found).partition("\n")[2])


def _tree_rows(folder: Path) -> list[dict]:
    return [
        row
        for f in sorted(folder.glob("trees-*"))
        for row in pq.read_table(f, columns=["weight"]).to_pylist()
    ]


def test_the_command_prints_and_draws(mixed: Path, tmp_path: Path, capsys) -> None:
    page = tmp_path / "p.html"
    assert run(["look", str(mixed), "--page", str(page)]) == 0
    out = capsys.readouterr().out
    assert "26 trees, " in out
    assert "2 trees repeat another's beliefs and budget" in out
    assert "rollouts left" in out
    assert "of the trees, 26 (100 %) recorded, 0 (0 %) drawn from a family" in out
    root = ET.fromstring(page.read_text().partition("\n")[2])
    assert len(root.findall(".//figure")) == 2
    assert len(root.findall(".//svg")) == 2


def test_broken_and_unfinished_datasets(mixed: Path, tmp_path: Path, capsys) -> None:
    with pytest.raises(InputError, match=r"manifest\.json"):
        look(tmp_path)
    copy = tmp_path / "copy"
    copy.mkdir()
    for f in mixed.iterdir():
        (copy / f.name).write_bytes(f.read_bytes())
    manifest = {**read_manifest(copy), "complete": False}
    manifest["shards"] = manifest["shards"][:2]
    write_manifest(copy, manifest)
    assert look(copy)["trees"] == 14
    assert run(["look", str(copy)]) == 0
    assert "unfinished" in capsys.readouterr().out
    shard = copy / "trees-00000.parquet"
    shard.write_bytes(shard.read_bytes()[:-9] + b"x" * 9)
    assert run(["look", str(copy)]) == 2
    assert "SHA-256" in capsys.readouterr().err
    assert run(["look", str(copy), "--no-check"]) == 2
    assert "Parquet" in capsys.readouterr().err
